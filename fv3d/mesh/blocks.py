"""Structured blocks of hexahedra joined into one mesh."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
import scipy.sparse as sparse
from scipy.sparse.csgraph import connected_components

from ..errors import MeshError
from .cut import cut_hexes
from .geometry import signed_volumes
from .mesh import Mesh, build_mesh

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


def join_blocks(blocks: Sequence[Block], *, tetra: bool = False, wedge: bool = False,
                source: str = "generated mesh") -> Mesh:
    """Join structured blocks at their coinciding points.

    Parameters
    ----------
    blocks : sequence of Block
    tetra : bool
        Cut every hexahedron into six tetrahedra.
    wedge : bool
        Cut every hexahedron into two wedges along the k direction of the blocks.
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
    points, hexes, quads = hexes_of_blocks(blocks)
    return mesh_of_hexes(points, hexes, quads, tetra=tetra, wedge=wedge, source=source)


def hexes_of_blocks(blocks: Sequence[Block]) -> tuple[np.ndarray, np.ndarray,
                                                      dict[str, np.ndarray]]:
    """Points (n, 3) [m], hexahedra (n, 8) and boundary quadrilaterals (m, 4) of each name.

    The hexahedra of each block come in the order of its cells, k running fastest.
    """
    points, numbers = _merged_points(blocks)
    hexes: list[np.ndarray] = []
    boundaries: dict[str, list[np.ndarray]] = {}
    for block, number in zip(blocks, numbers):
        hexes.append(_oriented(points, _block_cells(number)))
        for side, name in block.sides.items():
            boundaries.setdefault(name, []).append(_side_quads(number, side))
    return points, np.concatenate(hexes), {name: np.concatenate(parts)
                                           for name, parts in boundaries.items()}


def mesh_of_hexes(points: np.ndarray, hexes: np.ndarray, quads: Mapping[str, np.ndarray], *,
                  tetra: bool = False, wedge: bool = False,
                  source: str = "generated mesh") -> Mesh:
    """Build a mesh from hexahedra (n, 8) and the boundary quadrilaterals (m, 4) of each name.

    ``tetra`` cuts all into six tetrahedra, ``wedge`` into two wedges along the third direction.
    """
    if tetra and wedge:
        raise MeshError("Cells cannot be tetrahedra and wedges at once.", where=source,
                        got="tetra=True, wedge=True", remedy="Set one of the two.")
    every = np.ones(len(hexes), dtype=bool)
    points, cells, boundaries = cut_hexes(points, hexes, quads, tetra=every if tetra else None,
                                          wedge=every if wedge else None, source=source)
    return build_mesh(points, cells, boundaries, source=source)


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
