"""Channels with a body across the stream: a circular cylinder or a rectangular block."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ..errors import MeshError
from .blocks import Block, extrude, join_blocks, mesh_of_hexes, patch_between
from .grading import Grading, Spacing, from_ends, line
from .mesh import Mesh

_BULGE = 0.2


def channel_with_cylinder(*, length: float, height: float, depth: float, centre: Sequence[float],
                          diameter: float, around: int = 96, layers: int = 1,
                          depth_grading: Grading | np.ndarray | None = None,
                          first_layer: float | None = None, growth: float = 1.06,
                          wake_growth: float = 1.04, coarsest: float | None = None,
                          refinement: int = 1, tetra: bool = False) -> Mesh:
    """Channel with a circular cylinder along z over its whole depth.

    The channel is ``0 <= x <= length, 0 <= y <= height, 0 <= z <= depth``; the stream goes
    along x.  Rings of hexahedra around the cylinder fill a square with bulged sides, eight
    blocks lie around it.  Boundaries are ``inlet, outlet, walls`` (y sides), ``sides`` (z
    sides) and ``cylinder``.

    Parameters
    ----------
    length, height, depth : float
        Of the channel [m].
    centre : (x, y) of the cylinder axis [m]
    diameter : float
        Of the cylinder [m].
    around : int
        Cells around the cylinder, a multiple of eight.
    layers : int
        Cells along z; one for a plane flow (sides as symmetry).
    depth_grading : Grading, node coordinates [m] or None
        Along z, for instance ``TwoSided(4)`` for cells clustered at both sides.
    first_layer : float, optional
        Thickness of the cells on the cylinder [m]; a third of their length if not given.
    growth : float
        Ratio of neighbouring cells outside the rings, across and against the stream.
    wake_growth : float
        The same along the stream behind the cylinder.
    coarsest : float, optional
        Largest cell size along x [m]; height / 12 if not given.
    refinement : int
        Multiplies all cell counts (also ``around`` and ``layers``; one layer stays one).
    tetra : bool
        Cut every hexahedron into six tetrahedra; good ones need a depth of the cells near
        their size in the plane.

    Returns
    -------
    Mesh

    Raises
    ------
    MeshError
        The cylinder does not fit into the channel, or counts that make no mesh.
    """
    _check_counts("channel_with_cylinder", around=around, layers=layers, refinement=refinement)
    if around % 8:
        raise MeshError("The cells around the cylinder do not fit the blocks.",
                        where="channel_with_cylinder", got=f"around={around}",
                        remedy="Give a multiple of eight.")
    radius, (x, y) = 0.5 * diameter, map(float, centre)
    gap = min(x, length - x, y, height - y) - radius
    if not (radius > 0 and gap > 0.05 * radius):
        raise MeshError("The cylinder does not fit into the channel.",
                        where="channel_with_cylinder", got=f"gap to the boundary {gap:.4g} m",
                        remedy="Move the centre or give a smaller diameter.")
    half = radius + min(0.3 * gap, 1.2 * radius)
    frame = _Frame(length=length, height=height, x=x, y=y, half=half, radius=radius)
    arc = np.pi * diameter / around
    edge = 2.0 * half / (around // 4) * (0.5 + 0.25 * np.pi)
    sizes = _Sizes(first=first_layer or arc / 3.0, edge=edge, slope=growth - 1.0,
                   wake_slope=wake_growth - 1.0, coarsest=coarsest or height / 12.0)
    levels = line(0.0, depth, cells=layers * refinement if layers > 1 else 1, grading=depth_grading,
                  where="channel_with_cylinder, depth")
    patches = _rings(frame, sizes, around // 4, refinement)
    patches += _surroundings(frame, sizes, around // 4, refinement)
    blocks = [Block(extrude(plane, levels), {**sides, "k_min": "sides", "k_max": "sides"})
              for plane, sides in patches]
    return join_blocks(blocks, tetra=tetra, source="channel_with_cylinder")


@dataclass(frozen=True)
class _Frame:
    length: float
    height: float
    x: float
    y: float
    half: float
    radius: float


@dataclass(frozen=True)
class _Sizes:
    first: float
    edge: float
    slope: float
    wake_slope: float
    coarsest: float


_Patch = tuple[np.ndarray, dict[str, str]]


def _square_side(frame: _Frame, share: np.ndarray) -> np.ndarray:
    """(n, 2) right side of the bulged square about the origin, from -45 to 45 degrees."""
    along = 0.5 * share + 0.5 * np.tan(0.25 * np.pi * share)
    return frame.half * np.stack([1.0 + _BULGE * (1.0 - along ** 2), along], axis=1)


def _turned(points: np.ndarray, quarters: int) -> np.ndarray:
    cosine, sine = ((1, 0), (0, 1), (-1, 0), (0, -1))[quarters]
    x, y = points[..., 0], points[..., 1]
    return np.stack([cosine * x - sine * y, sine * x + cosine * y], axis=-1)


def _rings(frame: _Frame, sizes: _Sizes, per_side: int, refinement: int) -> list[_Patch]:
    """Four patches between the circle and the square."""
    share = np.linspace(-1.0, 1.0, per_side * refinement + 1)
    outer = _square_side(frame, share)
    angle = 0.25 * np.pi * share
    inner = frame.radius * np.stack([np.cos(angle), np.sin(angle)], axis=1)
    thickness = frame.half * (1.0 + _BULGE) - frame.radius
    grading = Spacing((0.0, thickness), (sizes.first, max(sizes.first, sizes.edge)))
    cells = grading.wanted_cells(0.0, thickness) * refinement
    radial = grading.nodes(0.0, thickness, cells) / thickness
    plane = patch_between(inner, outer, radial)
    middle = np.array([frame.x, frame.y])
    return [(middle + _turned(plane, k), {"j_min": "cylinder"}) for k in range(4)]


def _surroundings(frame: _Frame, sizes: _Sizes, per_side: int, refinement: int) -> list[_Patch]:
    """Eight patches between the square and the sides of the channel."""
    share = np.linspace(-1.0, 1.0, per_side * refinement + 1)
    left, right = frame.x - frame.half, frame.x + frame.half
    low, high = frame.y - frame.half, frame.y + frame.half
    fan_in = _away(left, 0.0, sizes, sizes.slope, refinement)
    fan_out = _away(right, frame.length, sizes, sizes.wake_slope, refinement)
    fan_low = _away(low, 0.0, sizes, sizes.slope, refinement)
    fan_high = _away(high, frame.height, sizes, sizes.slope, refinement)
    patches: list[_Patch] = []
    middle = np.array([frame.x, frame.y])
    square = [middle + _turned(_square_side(frame, share), k) for k in range(4)]
    for curve, axis, fan, name in ((square[0], 0, fan_out, "outlet"),
                                   (square[1], 1, fan_high, "walls"),
                                   (square[2], 0, fan_in, "inlet"),
                                   (square[3], 1, fan_low, "walls")):
        end = curve.copy()
        end[:, axis] = fan[-1]
        patches.append((patch_between(curve, end, (fan - fan[0]) / (fan[-1] - fan[0])),
                        {"j_max": name}))
    for fan_x, stream in ((fan_in, "inlet"), (fan_out, "outlet")):
        for fan_y in (fan_low, fan_high):
            plane = np.stack(np.meshgrid(fan_x, fan_y, indexing="ij"), axis=-1)
            patches.append((plane, {"i_max": stream, "j_max": "walls"}))
    return patches


def _away(start: float, end: float, sizes: _Sizes, slope: float, refinement: int) -> np.ndarray:
    """Nodes from the square towards a side, cell sizes growing from that of the square."""
    distance = abs(end - start)
    reach = (sizes.coarsest - sizes.edge) / max(slope, 1e-9)
    if reach <= 0.0:
        grading = Spacing((0.0,), (min(sizes.edge, sizes.coarsest),))
    else:
        grading = Spacing((0.0, reach), (sizes.edge, sizes.coarsest))
    cells = grading.wanted_cells(0.0, distance) * refinement
    nodes = start + np.sign(end - start) * grading.nodes(0.0, distance, cells)
    nodes[-1] = end
    return nodes


def channel_with_block(*, length: float, height: float, depth: float, lower: Sequence[float],
                       upper: Sequence[float], first_layer: float, growth: float = 1.1,
                       wake_growth: float | None = None, coarsest: float | None = None,
                       wall_layer: float | None = None, layers: int = 1,
                       depth_grading: Grading | np.ndarray | None = None,
                       refinement: int = 1, tetra: bool = False) -> Mesh:
    """Channel with a rectangular block.

    The channel is ``0 <= x <= length, 0 <= y <= height, 0 <= z <= depth``; the stream goes
    along x.  Boundaries are ``inlet, outlet, walls`` (y sides), ``sides`` (z sides) and
    ``block``.  A block that touches a side of the channel leaves no gap there, so one at
    ``lower=(0, 0)`` makes a step.

    Parameters
    ----------
    length, height, depth : float
        Of the channel [m].
    lower, upper : (x, y) or (x, y, z) corners of the block [m]
        With two coordinates the block spans the whole depth.
    first_layer : float
        Thickness of the cells on the block [m].
    growth : float
        Ratio of neighbouring cells away from the block and the walls.
    wake_growth : float, optional
        The same along x behind the block; ``growth`` if not given.
    coarsest : float, optional
        Largest cell size along x and y [m]; height / 12 if not given.
    wall_layer : float, optional
        Thickness of the cells on the walls [m]; none wanted if not given.
    layers : int
        Cells along z if the block spans the whole depth; else z follows ``first_layer``.
    depth_grading : Grading, node coordinates [m] or None
        Along z if the block spans the whole depth.
    refinement : int
        Multiplies all cell counts (one layer stays one).
    tetra : bool
        Cut every hexahedron into six tetrahedra; good ones need a depth of the cells near
        their size in the plane.

    Returns
    -------
    Mesh

    Raises
    ------
    MeshError
        The block does not fit into the channel, or counts that make no mesh.
    """
    where = "channel_with_block"
    _check_counts(where, layers=layers, refinement=refinement)
    size = (length, height, depth)
    low, high = _block_corners(lower, upper, size)
    coarsest = coarsest or height / 12.0
    if not (first_layer > 0 and coarsest > 0 and growth > 1.0):
        raise MeshError("Cell sizes must be positive and growth above one.", where=where,
                        got=f"first_layer={first_layer}, coarsest={coarsest}, growth={growth}",
                        remedy="Correct the sizes.")
    slopes = (growth - 1.0, (wake_growth or growth) - 1.0)
    nodes, span = [], []
    for axis in range(3):
        if axis == 2 and len(lower) == 2:
            cells = layers * refinement if layers > 1 else 1
            nodes.append(line(0.0, depth, cells=cells, grading=depth_grading,
                              where=f"{where}, depth"))
            span.append((0, cells))
            continue
        layer = None if axis == 0 else wall_layer
        parts = _three_parts(low[axis], high[axis], size[axis], first_layer, coarsest,
                             slopes if axis == 0 else (slopes[0],) * 2, layer, refinement)
        nodes.append(np.concatenate([[0.0]] + [part[1:] for part in parts if len(part)]))
        before = max(len(parts[0]) - 1, 0)
        span.append((before, before + len(parts[1]) - 1))
    return _box_without(nodes, span, tetra)


def _block_corners(lower: Sequence[float], upper: Sequence[float],
                   size: tuple[float, float, float]) -> tuple[np.ndarray, np.ndarray]:
    low = np.array([*lower, 0.0][:3], dtype=float)
    high = np.array([*upper, size[2]][:3], dtype=float)
    if (len(lower) != len(upper) or len(lower) not in (2, 3) or np.any(low < 0)
            or np.any(high > size) or not np.all(high > low)
            or np.all(high[1:] - low[1:] >= size[1:])):
        raise MeshError("The block does not fit into the channel.", where="channel_with_block",
                        got=f"{tuple(lower)} to {tuple(upper)} in {size}",
                        remedy="Give the lower and upper corner of a block inside the channel "
                               "that leaves the stream a way.")
    return low, high


def _three_parts(low: float, high: float, end: float, first: float, coarsest: float,
                 slopes: tuple[float, float], wall: float | None,
                 refinement: int) -> list[np.ndarray]:
    """Nodes before, along and behind the block on one axis; empty where there is no gap."""
    parts = []
    for start, stop, ends in ((0.0, low, (wall, first)), (low, high, (first, first)),
                              (high, end, (first, wall))):
        if stop - start <= 1e-12 * end:
            parts.append(np.empty(0))
            continue
        slope = slopes[1] if start == high else slopes[0]
        grading = from_ends(start, stop, ends=ends, coarsest=coarsest, slope=slope)
        cells = grading.wanted_cells(start, stop) * refinement
        parts.append(grading.nodes(start, stop, cells))
    return parts


def _box_without(nodes: list[np.ndarray], span: list[tuple[int, int]], tetra: bool) -> Mesh:
    """Box of hexahedra without those inside a range of each axis."""
    shape = tuple(len(n) - 1 for n in nodes)
    points = np.stack(np.meshgrid(*nodes, indexing="ij"), axis=-1).reshape(-1, 3)
    number = np.arange(len(points)).reshape([n + 1 for n in shape])
    fluid = np.ones([n + 2 for n in shape], dtype=bool)
    inner = tuple(slice(1 + first, 1 + last) for first, last in span)
    fluid[inner] = False
    outside = np.ones_like(fluid)
    outside[1:-1, 1:-1, 1:-1] = False
    fluid &= ~outside
    low = np.argwhere(fluid) - 1
    corner = np.array([(0, 0, 0), (1, 0, 0), (1, 1, 0), (0, 1, 0),
                       (0, 0, 1), (1, 0, 1), (1, 1, 1), (0, 1, 1)])
    hexes = number[tuple(np.moveaxis(low[:, None] + corner, -1, 0))]
    faces = {(0, -1): (0, 3, 7, 4), (0, 1): (1, 2, 6, 5), (1, -1): (0, 1, 5, 4),
             (1, 1): (3, 2, 6, 7), (2, -1): (0, 1, 2, 3), (2, 1): (4, 5, 6, 7)}
    names = {(0, -1): "inlet", (0, 1): "outlet", (1, -1): "walls", (1, 1): "walls",
             (2, -1): "sides", (2, 1): "sides"}
    quads: dict[str, list[np.ndarray]] = {n: [] for n in ("inlet", "outlet", "walls", "sides",
                                                          "block")}
    for (axis, step), local in faces.items():
        beside = low + 1
        beside[:, axis] += step
        beyond = outside[tuple(beside.T)]
        on_block = ~fluid[tuple(beside.T)] & ~beyond
        quads[names[axis, step]].append(hexes[beyond][:, local])
        quads["block"].append(hexes[on_block][:, local])
    joined = {name: np.concatenate(parts) for name, parts in quads.items()}
    used, compact = np.unique(hexes, return_inverse=True)
    renumber = np.zeros(len(points), dtype=np.int64)
    renumber[used] = np.arange(len(used))
    return mesh_of_hexes(points[used], compact.reshape(hexes.shape),
                         {name: renumber[q] for name, q in joined.items() if len(q)},
                         tetra=tetra, source="channel_with_block")


def _check_counts(where: str, **counts: int) -> None:
    for name, count in counts.items():
        if not isinstance(count, int | np.integer) or count < 1:
            raise MeshError("A count must be a positive integer.", where=where,
                            got=f"{name}={count}", remedy="Give 1, 2, 3 ...")
