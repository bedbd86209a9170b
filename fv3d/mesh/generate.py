"""Parametric meshes of boxes: hexahedra, tetrahedra, wedges, pyramids and all of them mixed."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from ..errors import MeshError, as_number, expect_mesh
from .blocks import Block, hexes_of_blocks, mesh_of_hexes
from .cut import cut_hexes
from .grading import Grading, line
from .mesh import Mesh, build_mesh

BOX_SIDES = ("x_min", "x_max", "y_min", "y_max", "z_min", "z_max")
_Gradings = Sequence[Grading | np.ndarray | None] | None
_Hexes = tuple[np.ndarray, np.ndarray, dict[str, np.ndarray]]


def box(lower: Sequence[float], upper: Sequence[float], *, cells: tuple[int, int, int],
        grading: _Gradings = None, tetra: bool = False, names: Mapping[str, str] | None = None,
        skew: float = 0.0, warp: float = 0.0, seed: int = 0) -> Mesh:
    """Box of hexahedra or tetrahedra.

    Parameters
    ----------
    lower, upper : (3,) corners [m]
    cells : (n_x, n_y, n_z)
        Hexahedra along each axis; ``tetra`` cuts each into six.
    grading : three of Grading, node coordinates [m] or None; None for cells of one size
    tetra : bool
    names : mapping of side to boundary name
        Sides are ``x_min, x_max, y_min, y_max, z_min, z_max`` and keep that name where the
        mapping is silent; sides given the same name become one boundary.
    skew : float
        Moves every point by up to this share of the smaller spacing beside it, along each
        axis; points of a side stay on it and an axis of one cell stays straight. Below 0.5.
    warp : float
        Moves the points smoothly by up to this share of the box, along each axis, sliding
        on the sides: most faces are no longer flat, and meshes of 2, 3 ... times the cells
        stay nested. An axis of one cell stays straight. Up to 0.2.
    seed : int
        Of the random shifts of ``skew``.

    Returns
    -------
    Mesh

    Raises
    ------
    MeshError
        Arguments that make no mesh.
    """
    points, hexes, quads = _box_hexes("box", lower, upper, cells, grading, names, skew, warp, seed)
    return mesh_of_hexes(points, hexes, quads, tetra=tetra, source="box")


def wedge_box(lower: Sequence[float], upper: Sequence[float], *, cells: tuple[int, int, int],
              grading: _Gradings = None, names: Mapping[str, str] | None = None,
              skew: float = 0.0, warp: float = 0.0, seed: int = 0) -> Mesh:
    """Box of wedges: every hexahedron of :func:`box` cut in two, triangles across z.

    Parameters, Returns, Raises
    ---------------------------
    As of :func:`box`.
    """
    points, hexes, quads = _box_hexes("wedge_box", lower, upper, cells, grading, names, skew,
                                      warp, seed)
    return mesh_of_hexes(points, hexes, quads, wedge=True, source="wedge_box")


def pyramid_box(lower: Sequence[float], upper: Sequence[float], *, cells: tuple[int, int, int],
                grading: _Gradings = None, names: Mapping[str, str] | None = None,
                skew: float = 0.0, warp: float = 0.0, seed: int = 0) -> Mesh:
    """Box of hexahedra of which every other is cut into six pyramids about its centre.

    The cut ones alternate like the fields of a chessboard along all three axes.

    Parameters, Returns, Raises
    ---------------------------
    As of :func:`box`.
    """
    points, hexes, quads = _box_hexes("pyramid_box", lower, upper, cells, grading, names, skew,
                                      warp, seed)
    centre = np.indices(cells).sum(axis=0).ravel() % 2 == 0
    points, blocks, boundaries = cut_hexes(points, hexes, quads, centre=centre)
    return build_mesh(points, blocks, boundaries, source="pyramid_box")


def mixed_box(lower: Sequence[float], upper: Sequence[float], *, cells: tuple[int, int, int],
              grading: _Gradings = None, names: Mapping[str, str] | None = None,
              skew: float = 0.0, warp: float = 0.0, seed: int = 0) -> Mesh:
    """Box of all kinds of cells with matching faces.

    Along x, a quarter of the layers each: wedges (triangles across z), hexahedra, hexahedra
    cut into six pyramids about their centre, tetrahedra.  The pyramids beside tetrahedra
    are halved where their base is cut.

    Parameters, Returns, Raises
    ---------------------------
    As of :func:`box`, with at least four cells along x.
    """
    points, hexes, quads = _box_hexes("mixed_box", lower, upper, cells, grading, names, skew,
                                      warp, seed)
    if cells[0] < 4:
        raise MeshError("Four kinds of cells need four layers.", where="mixed_box, cells",
                        got=cells, remedy="Give at least four cells along x.")
    quarter = (4 * np.indices(cells)[0].ravel()) // cells[0]
    points, blocks, boundaries = cut_hexes(points, hexes, quads, wedge=quarter == 0,
                                           centre=quarter == 2, tetra=quarter == 3)
    return build_mesh(points, blocks, boundaries, source="mixed_box")


def skewed(mesh: Mesh, share: float, *, seed: int = 0) -> Mesh:
    """The mesh with its inner points moved at random; those of the boundaries stay.

    Parameters
    ----------
    mesh : Mesh
        Of any kind of cells, for instance a pipe.
    share : float
        Largest move along each axis over the shortest edge at the point, below 0.5.  Flat
        cells turn over sooner than cubes.
    seed : int
        Of the random moves.

    Returns
    -------
    Mesh
        The same cells in the same numbering, boundaries and zones.

    Raises
    ------
    MeshError
        The share is out of range, or a cell turns inside out.
    """
    expect_mesh(mesh, "skewed(mesh, share)")
    if isinstance(share, str) or not 0.0 <= as_number(share) < 0.5:
        raise MeshError("The skew is out of range.", where="skewed", got=share,
                        remedy="Give a share from 0 to below 0.5.")
    shortest = np.full(len(mesh.points), np.inf)
    for corner in range(4):
        one, other = mesh.face_points[:, corner], mesh.face_points[:, (corner + 1) % 4]
        one, other = (np.where(p < 0, mesh.face_points[:, 0], p) for p in (one, other))
        length = np.linalg.norm(mesh.points[one] - mesh.points[other], axis=1)
        length[length == 0] = np.inf                    # the fourth edge of triangles is none
        np.minimum.at(shortest, one, length)
        np.minimum.at(shortest, other, length)
    outer = mesh.face_points[mesh.n_internal:]
    shortest[outer[outer >= 0]] = 0.0
    move = np.random.default_rng(seed).uniform(-share, share, mesh.points.shape)
    return _with_points(mesh, mesh.points + move * shortest[:, None])


def _with_points(mesh: Mesh, points: np.ndarray) -> Mesh:
    boundaries = {}
    for name, where in mesh.boundaries.items():
        faces = mesh.face_points[where]
        three = faces[:, 3] < 0
        boundaries[name] = [faces[three, :3], faces[~three]]
    return build_mesh(points, [(kind, conn) for kind, conn, _ in mesh.cell_blocks], boundaries,
                      zones={name: mesh.file_index[cells] for name, cells in mesh.zones.items()},
                      renumber=not np.array_equal(mesh.file_index, np.arange(mesh.n_cells)),
                      source="skewed mesh")


def _box_hexes(where: str, lower: Sequence[float], upper: Sequence[float],
               cells: tuple[int, int, int], grading: _Gradings, names: Mapping[str, str] | None,
               skew: float, warp: float, seed: int) -> _Hexes:
    """Points, hexahedra (z running fastest) and named boundary quadrilaterals of a box."""
    sides = dict(zip(BOX_SIDES, BOX_SIDES))
    for side, name in (names or {}).items():
        if side not in sides:
            raise MeshError("A box has no such side.", where=f"{where}, names", got=side,
                            remedy=f"Use {', '.join(BOX_SIDES)}.")
        sides[side] = name
    for what, given in (("lower", lower), ("upper", upper), ("cells", cells),
                        ("grading", (None,) * 3 if grading is None else grading)):
        if not hasattr(given, "__len__") or len(given) != 3:
            raise MeshError("A box needs three entries, one per axis.", where=f"{where}, {what}",
                            got=given, remedy="Give x, y and z.")
    if not 0.0 <= skew < 0.5:
        raise MeshError("The skew is out of range.", where=where, got=skew,
                        remedy="Give a share from 0 to below 0.5.")
    if not 0.0 <= warp <= 0.2:
        raise MeshError("The warp is out of range.", where=where, got=warp,
                        remedy="Give a share from 0 to 0.2.")
    lines = [line(lower[axis], upper[axis], cells=cells[axis],
                  grading=None if grading is None else grading[axis],
                  where=f"{where}, {'xyz'[axis]}") for axis in range(3)]
    points = np.stack(np.meshgrid(*lines, indexing="ij"), axis=-1)
    if skew > 0.0:
        points = _shaken(points, lines, skew, seed)
    if warp > 0.0:
        points = _warped(points, lines, warp)
    block = Block(points, {"ijk"[BOX_SIDES.index(side) // 2] + side[1:]: name
                           for side, name in sides.items()})
    return hexes_of_blocks([block])


def _shaken(points: np.ndarray, lines: list[np.ndarray], skew: float, seed: int) -> np.ndarray:
    random = np.random.default_rng(seed)
    points = points.copy()
    shape = [1 if len(nodes) == 2 else len(nodes) for nodes in lines]
    for axis, nodes in enumerate(lines):
        spacing = np.diff(nodes)
        room = np.zeros(len(nodes))
        room[1:-1] = np.minimum(spacing[1:], spacing[:-1])
        along = [1, 1, 1]
        along[axis] = len(nodes)
        points[..., axis] += skew * room.reshape(along) * random.uniform(-1.0, 1.0, shape)
    return points


def _warped(points: np.ndarray, lines: list[np.ndarray], warp: float) -> np.ndarray:
    """Each coordinate shifted by a sine of itself times cosines of the two others."""
    lower, length = np.array([n[0] for n in lines]), np.array([n[-1] - n[0] for n in lines])
    angle = np.pi * (points - lower) / length
    free = [axis for axis in range(3) if len(lines[axis]) > 2]
    points = points.copy()
    for axis in free:
        shift = np.sin(angle[..., axis])
        shift[points[..., axis] == lines[axis][-1]] = 0.0           # the sine of pi is not
        for other in free:
            if other != axis:
                shift = shift * np.cos(angle[..., other])
        points[..., axis] += warp * length[axis] * shift
    return points
