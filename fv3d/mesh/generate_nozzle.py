"""Nozzles and pipes: bodies of revolution about z with at most one sudden expansion."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ..errors import MeshError
from .blocks import Block, join_blocks, patch_between
from .grading import Grading, Spacing, from_ends, line
from .mesh import Mesh

_CORE = 0.45
_BULGE = 0.14
_Lines = Grading | np.ndarray | None


def nozzle(sections: Sequence[tuple[float, float]], *, core: int = 4,
           axial: Spacing | Sequence[tuple[int, _Lines]] | None = None,
           wall_share: float = 0.4, growth: float = 1.15, quadrants: int = 4,
           equal_area: bool = False, refinement: int = 1, tetra: bool = False,
           wedge: bool = False) -> Mesh:
    """Body of revolution about z, for instance pipe, cone, throat and a sudden expansion.

    The cross-section is a square with bulged sides inside a ring of hexahedra; behind a
    sudden expansion a second ring fills the step, so the cells stay thin where the jet leaves
    the edge.  The stream goes along z.  Boundaries are ``inlet``, ``outlet``, ``wall`` and,
    for a sector, ``symmetry``.

    Parameters
    ----------
    sections : sequence of (z, radius) [m]
        Straight between; two radii at one z make the sudden expansion.
    core : int
        Cells from the axis to the side of the square; eight times as many lie around.
    axial : Spacing, one (cells, grading) for each piece between sections, or None
        Cell sizes along z [m]; None makes cells a quarter radius long at each corner of the
        contour, growing by 6 % away from it.
    wall_share : float
        Thickness of the cells on the wall (and behind the edge of the step) over that of the
        cells of the square.
    growth : float
        Ratio of neighbouring cells across the second ring.
    quadrants : int
        4 for the full circle, 2 for ``y >= 0``, 1 for ``x, y >= 0``.
    equal_area : bool
        The circle is a polygon of ``8 * core * refinement`` corners.  False puts the corners
        on the circle, which loses area (0.6 % with 32 corners); True moves them outwards
        until the area, hence the mean velocity of a given flow rate, is that of the circle.
    refinement : int
        Multiplies all cell counts.
    tetra : bool
        Cut every hexahedron into six tetrahedra; good ones need axial cells not much longer
        than wide, and ``wall_share=1``.
    wedge : bool
        Cut every hexahedron into two wedges with their triangles across z.

    Returns
    -------
    Mesh

    Raises
    ------
    MeshError
        Sections, counts or sizes that make no mesh.
    """
    z, radius, step = _checked_contour(sections)
    _check_arguments(core, wall_share, growth, quadrants, refinement)
    if equal_area:
        angle = 2.0 * np.pi / (8 * core * refinement)
        radius = radius * np.sqrt(angle / np.sin(angle))
    narrow = radius.copy()
    narrow[step + 1:step + 2] = radius[step]
    nodes = [_axial_nodes(z[first:last + 1], narrow[first:last + 1], axial, first, len(z), step,
                          refinement)
             for first, last in ((0, step), (step + 1, len(z) - 1)) if last > first]
    section = _Section(core=core, wall_share=wall_share, growth=growth, refinement=refinement)
    parts = []
    for part, levels in enumerate(nodes):
        first = 0 if part == 0 else step + 1
        outer = np.interp(levels, z[first:], radius[first:]) if part else \
            np.interp(levels, z[:step + 1], radius[:step + 1])
        names = {"k_min": "inlet"} if part == 0 else {}
        if part == len(nodes) - 1:
            names["k_max"] = "outlet"
        edge = radius[step] / radius[step + 1] if part else None
        parts += _part_blocks(section, levels, outer, edge, names, quadrants)
    return join_blocks(parts, tetra=tetra, wedge=wedge, source="nozzle")


@dataclass(frozen=True)
class _Section:
    """Counts and sizes of the cross-section, lengths in radii."""

    core: int
    wall_share: float
    growth: float
    refinement: int

    @property
    def cell(self) -> float:
        return _CORE / self.core

    def core_patch(self) -> np.ndarray:
        """(n, n, 2) quarter of the bulged square, in radii."""
        share = np.linspace(0.0, 1.0, self.core * self.refinement + 1)
        u, v = np.meshgrid(share, share, indexing="ij")
        return _CORE * np.stack([u * (1 + _BULGE * (1 - v ** 2)),
                                 v * (1 + _BULGE * (1 - u ** 2))], axis=-1)

    def ring_patches(self) -> list[np.ndarray]:
        """Two (n, m, 2) patches from the square to the circle, in radii, by rising angle."""
        core = self.core_patch()
        curves = (core[-1, :], core[::-1, -1])
        thickness = 1.0 - _CORE * (1.0 + 0.5 * _BULGE) * 1.15
        grading = Spacing((0.0, thickness), (self.cell, self.wall_share * self.cell))
        cells = grading.wanted_cells(0.0, thickness) * self.refinement
        share = grading.nodes(0.0, thickness, cells) / thickness
        return [patch_between(curve, self.circle(k), share) for k, curve in enumerate(curves)]

    def circle(self, part: int) -> np.ndarray:
        """(n, 2) points of the unit circle over the first or second eighth."""
        angle = 0.25 * np.pi * (part + np.linspace(0.0, 1.0, self.core * self.refinement + 1))
        return np.stack([np.cos(angle), np.sin(angle)], axis=1)

    def second_ring(self, edge: float) -> list[np.ndarray]:
        """Two (n, m, 2) patches from ``edge`` to the unit circle, in outer radii."""
        ends = (self.wall_share * self.cell * edge, self.wall_share * self.cell)
        grading = from_ends(edge, 1.0, ends=ends, coarsest=self.cell, slope=self.growth - 1.0)
        cells = grading.wanted_cells(edge, 1.0) * self.refinement
        share = (grading.nodes(edge, 1.0, cells) - edge) / (1.0 - edge)
        return [patch_between(edge * self.circle(k), self.circle(k), share) for k in range(2)]


def _part_blocks(section: _Section, levels: np.ndarray, outer: np.ndarray, edge: float | None,
                 names: dict[str, str], quadrants: int) -> list[Block]:
    """Blocks of the stretch before or behind the step; ``edge`` is the step's radius share."""
    inner = outer if edge is None else edge * outer
    first, last = {"i_min": "symmetry"}, {"i_max": "symmetry"}
    wall = {"j_max": "wall"}
    blocks = []
    for k in range(quadrants):
        start = first if k == 0 and quadrants < 4 else {}
        end = last if k == quadrants - 1 and quadrants < 4 else {}
        core_sides = {**({"j_min": "symmetry"} if start else {}),
                      **({"i_min": "symmetry"} if end else {})}
        blocks.append(_swept(section.core_patch(), levels, inner, k, {**core_sides, **names}))
        for patch, side in zip(section.ring_patches(), (start, end)):
            sides = {**side, **names, **(wall if edge is None else {})}
            blocks.append(_swept(patch, levels, inner, k, sides))
        if edge is not None:
            for patch, side in zip(section.second_ring(edge), (start, end)):
                sides = {**side, **wall, "k_min": "wall", **names}
                blocks.append(_swept(patch, levels, outer, k, sides))
    return blocks


def _swept(patch: np.ndarray, levels: np.ndarray, radius: np.ndarray, quadrant: int,
           sides: dict[str, str]) -> Block:
    """Block of a cross-section patch [radii] scaled by the radius at each level."""
    cosine, sine = ((1, 0), (0, 1), (-1, 0), (0, -1))[quadrant]
    x = cosine * patch[..., 0] - sine * patch[..., 1]
    y = sine * patch[..., 0] + cosine * patch[..., 1]
    points = np.empty((*patch.shape[:2], len(levels), 3))
    points[..., 0] = x[..., None] * radius
    points[..., 1] = y[..., None] * radius
    points[..., 2] = levels
    return Block(points, sides)


def _axial_nodes(z: np.ndarray, radius: np.ndarray,
                 axial: Spacing | Sequence[tuple[int, _Lines]] | None, first: int,
                 n_sections: int, step: int, refinement: int) -> np.ndarray:
    """Nodes along z through all sections of the stretch before or behind the step."""
    pieces = [z[:1]]
    for k in range(len(z) - 1):
        low, high = z[k], z[k + 1]
        if axial is None or isinstance(axial, Spacing):
            grading: _Lines = axial or _corner_spacing(low, high, radius[k:k + 2])
            assert isinstance(grading, Spacing)
            cells = grading.wanted_cells(low, high)
        else:
            n_pieces = n_sections - 1 - (step < n_sections - 1)
            if len(axial) != n_pieces:
                raise MeshError("Each piece between sections needs its cells.",
                                where="nozzle, axial", got=f"{len(axial)} for {n_pieces} pieces",
                                remedy="Give one (cells, grading) per piece; the step is none.")
            cells, grading = axial[first + k - (first > 0)]
        pieces.append(line(low, high, cells=cells * refinement, grading=grading,
                           where=f"nozzle, z from {low:g} to {high:g}")[1:])
    return np.concatenate(pieces)


def _corner_spacing(low: float, high: float, radius: np.ndarray) -> Spacing:
    ends = (0.25 * float(radius[0]), 0.25 * float(radius[1]))
    return from_ends(low, high, ends=ends, coarsest=float(radius.max()), slope=0.06)


def _checked_contour(
        sections: Sequence[tuple[float, float]]) -> tuple[np.ndarray, np.ndarray, int]:
    """z, radius and the index of the section before the step (the last one without a step)."""
    table = np.array(sections, dtype=float)
    if table.ndim != 2 or table.shape[1] != 2 or len(table) < 2 or not np.isfinite(table).all():
        raise MeshError("Sections must be a table of z and radius.", where="nozzle",
                        got=f"shape {table.shape}", remedy="Give at least two (z, radius).")
    z, radius = table.T
    if not np.all(radius > 0) or np.any(np.diff(z) < 0):
        raise MeshError("Sections must have rising z and positive radii.", where="nozzle",
                        got=table.tolist(), remedy="Sort the sections along the stream.")
    steps = np.flatnonzero(np.diff(z) == 0)
    if len(steps) > 1 or (len(steps) and (radius[steps[0] + 1] <= radius[steps[0]]
                                          or steps[0] in (0, len(z) - 2))):
        raise MeshError("Only one sudden expansion between inlet and outlet can be meshed.",
                        where="nozzle", got=table.tolist(),
                        remedy="Leave one pair of sections at the same z, the second wider.")
    return z, radius, int(steps[0]) if len(steps) else len(z) - 1


def _check_arguments(core: int, wall_share: float, growth: float, quadrants: int,
                     refinement: int) -> None:
    for name, value, good in (("core", core, core >= 1), ("refinement", refinement,
                                                          refinement >= 1),
                              ("quadrants", quadrants, quadrants in (1, 2, 4)),
                              ("wall_share", wall_share, 0 < wall_share <= 1),
                              ("growth", growth, growth > 1)):
        if not good:
            raise MeshError("An argument of the nozzle is out of range.", where="nozzle",
                            got=f"{name}={value}",
                            remedy="core and refinement from 1, quadrants 1, 2 or 4, "
                                   "wall_share in (0, 1], growth above 1.")
