"""Structured blocks joined into one mesh, and hexahedra cut into tetrahedra."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
import scipy.sparse as sparse
from scipy.sparse.csgraph import connected_components

from ..errors import MeshError
from .geometry import signed_volumes
from .mesh import Mesh, build_mesh
from .topology import LOCAL_FACES

BLOCK_SIDES = ("i_min", "i_max", "j_min", "j_max", "k_min", "k_max")


@dataclass(frozen=True, eq=False)
class Block:
    """A structured block of hexahedra.

    Attributes
    ----------
    points : (n_i + 1, n_j + 1, n_k + 1, 3) [m]
    sides : mapping of side to boundary name
        Sides are ``i_min, i_max, j_min, j_max, k_min, k_max``; a side without a name is
        joined to another block.
    """

    points: np.ndarray
    sides: Mapping[str, str] = field(default_factory=dict)


def join_blocks(blocks: Sequence[Block], *, tetra: bool = False,
                source: str = "generated mesh") -> Mesh:
    """Join structured blocks at their coinciding points.

    Parameters
    ----------
    blocks : sequence of Block
    tetra : bool
        Cut every hexahedron into six tetrahedra.
    source : str
        Named in error messages.

    Returns
    -------
    Mesh

    Raises
    ------
    MeshError
        Blocks that do not fit together, or an inverted cell.
    """
    points, numbers = _merged_points(blocks)
    hexes: list[np.ndarray] = []
    boundaries: dict[str, list[np.ndarray]] = {}
    for block, number in zip(blocks, numbers):
        hexes.append(_oriented(points, _block_cells(number)))
        for side, name in block.sides.items():
            boundaries.setdefault(name, []).append(_side_quads(number, side))
    quads = {name: np.concatenate(parts) for name, parts in boundaries.items()}
    return mesh_of_hexes(points, np.concatenate(hexes), quads, tetra=tetra, source=source)


def mesh_of_hexes(points: np.ndarray, hexes: np.ndarray, quads: Mapping[str, np.ndarray], *,
                  tetra: bool = False, source: str = "generated mesh") -> Mesh:
    """Build a mesh from hexahedra (n, 8) and the boundary quadrilaterals (m, 4) of each name."""
    if not tetra:
        return build_mesh(points, [("hexahedron", hexes)],
                          {name: [faces] for name, faces in quads.items()}, source=source)
    tets, triangles = to_tetra(hexes, quads)
    return build_mesh(points, [("tetra", tets)],
                      {name: [faces] for name, faces in triangles.items()}, source=source)


def to_tetra(hexes: np.ndarray,
             quads: Mapping[str, np.ndarray]) -> tuple[np.ndarray, dict[str, np.ndarray]]:
    """Cut hexahedra into six tetrahedra each.

    Every quadrilateral is cut along the diagonal through its smallest point number, so the
    cells conform whatever the arrangement of the hexahedra; the tetrahedra of a hexahedron
    are cones from its smallest point (after Dompierre et al., 1999).

    Parameters
    ----------
    hexes : (n, 8) point numbers in VTK order
    quads : mapping of name to (m, 4) point numbers

    Returns
    -------
    tets : (6 n, 4) point numbers
    triangles : mapping of name to (2 m, 3) point numbers
    """
    hexes = np.asarray(hexes, dtype=np.int64)
    tets = np.empty((len(hexes), 6, 4), dtype=np.int64)
    smallest = np.argmin(hexes, axis=1)
    for apex in range(8):
        chosen = np.flatnonzero(smallest == apex)
        opposite = [f for f in LOCAL_FACES["hexahedron"] if apex not in f]
        for k, local in enumerate(opposite):
            pair = _two_triangles(hexes[chosen][:, list(local)])
            for half in range(2):
                tets[chosen, 2 * k + half, :3] = pair[:, half, ::-1]
        tets[chosen, :, 3] = hexes[chosen, apex][:, None]
    triangles = {name: _two_triangles(np.asarray(q, dtype=np.int64)).reshape(-1, 3)
                 for name, q in quads.items()}
    return tets.reshape(-1, 4), triangles


def extrude(plane: np.ndarray, levels: np.ndarray) -> np.ndarray:
    """(n_i, n_j, n_k, 3) points of a plane patch (n_i, n_j, 2) repeated at levels (n_k,) [m]."""
    points = np.empty((*plane.shape[:2], len(levels), 3))
    points[..., :2] = plane[:, :, None, :]
    points[..., 2] = levels
    return points


def patch_between(first: np.ndarray, second: np.ndarray, share: np.ndarray) -> np.ndarray:
    """(n, m, 2) points on straight lines from curve ``first`` (n, 2) to ``second`` (n, 2) [m].

    ``share`` (m,) or (n, m) runs from zero to one.
    """
    share = np.broadcast_to(share, (len(first), np.shape(share)[-1]))[..., None]
    return (1.0 - share) * first[:, None] + share * second[:, None]


def _merged_points(blocks: Sequence[Block]) -> tuple[np.ndarray, list[np.ndarray]]:
    """Points without duplicates and the point numbers of each block in its own shape."""
    from scipy.spatial import cKDTree  # slow to import, needed only here
    shapes = [block.points.shape[:3] for block in blocks]
    cloud = np.concatenate([block.points.reshape(-1, 3) for block in blocks])
    surface = np.flatnonzero(np.concatenate([_on_surface(shape).ravel() for shape in shapes]))
    if len(blocks) == 1:
        return cloud, [np.arange(len(cloud)).reshape(shapes[0])]
    tolerance = 1e-9 * float(np.ptp(cloud, axis=0).max())
    pairs = cKDTree(cloud[surface]).query_pairs(tolerance, output_type="ndarray")
    pairs = surface[pairs]
    graph = sparse.coo_matrix((np.ones(len(pairs), dtype=np.int8), (pairs[:, 0], pairs[:, 1])),
                              shape=(len(cloud), len(cloud)))
    _, label = connected_components(graph, directed=False)
    _, first, number = np.unique(label, return_index=True, return_inverse=True)
    ends = np.cumsum([np.prod(shape) for shape in shapes])
    parts = np.split(number, ends[:-1])
    return cloud[first], [part.reshape(shape) for part, shape in zip(parts, shapes)]


def _on_surface(shape: tuple[int, ...]) -> np.ndarray:
    outer = np.ones(shape, dtype=bool)
    outer[1:-1, 1:-1, 1:-1] = False
    return outer


def _block_cells(number: np.ndarray) -> np.ndarray:
    low, high = slice(None, -1), slice(1, None)
    corners = [(low, low, low), (high, low, low), (high, high, low), (low, high, low),
               (low, low, high), (high, low, high), (high, high, high), (low, high, high)]
    return np.stack([number[c].ravel() for c in corners], axis=1)


def _oriented(points: np.ndarray, hexes: np.ndarray) -> np.ndarray:
    """Hexahedra of a left-handed block turned right side out."""
    middle = hexes[len(hexes) // 2][None]
    if signed_volumes(points, "hexahedron", middle)[0] < 0:
        return hexes[:, [4, 5, 6, 7, 0, 1, 2, 3]]
    return hexes


def _side_quads(number: np.ndarray, side: str) -> np.ndarray:
    if side not in BLOCK_SIDES:
        raise MeshError("A block has no such side.", where="Block", got=side,
                        remedy=f"Use {', '.join(BLOCK_SIDES)}.")
    axis = "ijk".index(side[0])
    face = np.take(number, 0 if side.endswith("min") else -1, axis=axis)
    corners = [face[:-1, :-1], face[1:, :-1], face[1:, 1:], face[:-1, 1:]]
    return np.stack([c.ravel() for c in corners], axis=1)


def _two_triangles(quads: np.ndarray) -> np.ndarray:
    """(n, 2, 3) triangles of quadrilaterals (n, 4), cut through the smallest point number."""
    start = np.argmin(quads, axis=1)[:, None]
    turned = np.take_along_axis(quads, (start + np.arange(4)) % 4, axis=1)
    return turned[:, [[0, 1, 2], [0, 2, 3]]]
