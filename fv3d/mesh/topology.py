"""Which faces the cells have, which cells share them and which boundary they belong to."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import scipy.sparse as sparse
from scipy.sparse.csgraph import reverse_cuthill_mckee

from ..errors import MeshError

# Local faces of each cell kind, outward by the right-hand rule; the point order is that
# of the VTK file format, an open standard.
LOCAL_FACES: dict[str, tuple[tuple[int, ...], ...]] = {
    "tetra": ((0, 2, 1), (0, 1, 3), (1, 2, 3), (0, 3, 2)),
    "hexahedron": ((0, 3, 2, 1), (4, 5, 6, 7), (0, 1, 5, 4), (1, 2, 6, 5), (2, 3, 7, 6),
                   (3, 0, 4, 7)),
    "wedge": ((0, 1, 2), (3, 5, 4), (0, 3, 4, 1), (1, 4, 5, 2), (2, 5, 3, 0)),
    "pyramid": ((0, 3, 2, 1), (0, 1, 4), (1, 2, 4), (2, 3, 4), (3, 0, 4)),
}
POINTS_PER_CELL = {"tetra": 4, "hexahedron": 8, "wedge": 6, "pyramid": 5}
CELL_KINDS = tuple(LOCAL_FACES)

# Odd numbers without pattern (digits of pi, e, square roots of 2 and 3 in base 16).
_MIX = np.array([0x243F6A8885A308D3, 0xB7E151628AED2A6B, 0x6A09E667F3BCC909,
                 0xBB67AE8584CAA73B], dtype=np.uint64)


def local_faces(cells: Sequence[tuple[str, np.ndarray]]) -> tuple[np.ndarray, np.ndarray]:
    """Points (n, 4) of every face of every cell, outward, and the cell (n,) it belongs to."""
    total = sum(len(conn) * len(LOCAL_FACES[kind]) for kind, conn in cells)
    faces, owner = np.full((total, 4), -1, dtype=np.int32), np.empty(total, dtype=np.int32)
    at = number = 0
    for kind, conn in cells:
        for local in LOCAL_FACES[kind]:
            rows = slice(at, at + len(conn))
            for column, corner in enumerate(local):
                faces[rows, column] = conn[:, corner]
            owner[rows] = np.arange(number, number + len(conn))
            at += len(conn)
        number += len(conn)
    return faces, owner


def face_keys(faces: np.ndarray) -> np.ndarray:
    """Points of each face in rising order, the same from both sides."""
    keys = [faces[:, k].copy() for k in range(4)]
    for a, b in ((0, 1), (2, 3), (0, 2), (1, 3), (1, 2)):       # a sorting network
        keys[a], keys[b] = np.minimum(keys[a], keys[b]), np.maximum(keys[a], keys[b])
    return np.stack(keys, axis=1)


def _hashes(keys: np.ndarray) -> np.ndarray:
    total = np.zeros(len(keys), dtype=np.uint64)
    for column in range(4):
        total += keys[:, column].astype(np.int64).view(np.uint64) * _MIX[column]
    return total


def match_faces(keys: np.ndarray, wanted: np.ndarray) -> np.ndarray:
    """(m,) row of ``keys`` (n, 4) that equals each row of ``wanted`` (m, 4), -1 if none does."""
    hashes = _hashes(keys)
    order = np.argsort(hashes)
    at = np.minimum(np.searchsorted(hashes, _hashes(wanted), sorter=order), len(keys) - 1)
    rows = order[at]
    return np.where(np.all(keys[rows] == wanted, axis=1), rows, -1)


def pair_faces(faces: np.ndarray, points: np.ndarray, *,
               source: str) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Join the faces of the cells in pairs.

    Returns
    -------
    keys : (m, 4) sorted points of each unique face
    first, second : (m,)
        Rows of ``faces``; ``second`` is -1 on the boundary.

    Raises
    ------
    MeshError
        A face belongs to more than two cells.
    """
    keys = face_keys(faces)
    hashes = _hashes(keys)
    order = np.argsort(hashes)
    same = hashes[order[1:]] == hashes[order[:-1]]
    later, earlier = order[1:][same], order[:-1][same]
    if np.any(keys[later] != keys[earlier]):                    # two faces of one hash
        order = np.lexsort(keys.T[::-1])
        same = np.all(keys[order[1:]] == keys[order[:-1]], axis=1)
    start = np.flatnonzero(np.concatenate([[True], ~same]))
    count = np.diff(np.append(start, len(order)))
    if count.max() > 2:
        bad = keys[order[start[np.argmax(count)]]]
        place = points[bad[bad >= 0]].mean(axis=0)
        raise MeshError("A face belongs to more than two cells.",
                        where=f"{source}, near {np.round(place, 6).tolist()}",
                        got=f"{int(count.max())} cells",
                        remedy="Remove duplicate cells from the mesh.")
    one = order[start]
    other = np.where(count == 2, order[np.minimum(start + 1, len(order) - 1)], -1)
    first = np.where(other >= 0, np.minimum(one, other), one)
    second = np.where(other >= 0, np.maximum(one, other), -1)
    return keys[first], first, second


def name_faces(keys: np.ndarray, internal: np.ndarray,
               boundaries: Mapping[str, Sequence[np.ndarray]], points: np.ndarray, *,
               source: str) -> np.ndarray:
    """Rank (m,) of the boundary of each unique face, -1 inside.

    Raises
    ------
    MeshError
        A boundary face without a name or with two, a name on something else.
    """
    rank_of = np.full(len(keys), -1)
    outer = np.flatnonzero(~internal)
    hashes = _hashes(keys[outer])
    order = np.argsort(hashes)
    outer, hashes = outer[order], hashes[order]
    for rank, (name, arrays) in enumerate(boundaries.items()):
        for array in arrays:
            rows = np.full((len(array), 4), -1, dtype=np.int64)
            rows[:, :np.shape(array)[-1]] = array
            wanted = face_keys(rows)
            at = np.searchsorted(hashes, _hashes(wanted))
            found = outer[np.minimum(at, len(outer) - 1)] if len(outer) else np.zeros_like(at)
            missing = np.flatnonzero(np.any(keys[found] != wanted, axis=1) | internal[found])
            if missing.size:
                row = rows[missing[0]]
                _refuse_named_face(wanted[missing[0]], keys, name, points[row[row >= 0]], source)
            twice = np.flatnonzero((rank_of[found] >= 0) & (rank_of[found] != rank))
            if twice.size:
                row = rows[twice[0]]
                place = np.round(points[row[row >= 0]].mean(axis=0), 6).tolist()
                other = list(boundaries)[rank_of[found[twice[0]]]]
                raise MeshError("A boundary face has two names.",
                                where=f"{source}, boundary '{name}' near {place}",
                                got=f"'{other}' and '{name}'",
                                remedy="Put every boundary face into one named group only.")
            rank_of[found] = rank
    _check_all_named(rank_of, keys, internal, list(boundaries), points, source)
    return rank_of


def _check_all_named(rank_of: np.ndarray, keys: np.ndarray, internal: np.ndarray,
                     names: list[str], points: np.ndarray, source: str) -> None:
    nameless = np.flatnonzero(~internal & (rank_of < 0))
    if nameless.size:
        face = keys[nameless[0]]
        place = np.round(points[face[face >= 0]].mean(axis=0), 6).tolist()
        raise MeshError(f"{nameless.size} boundary face(s) have no name.",
                        where=f"{source}, near {place}",
                        got=f"names: {', '.join(names) or 'none'}",
                        remedy="Give every boundary surface a named group in the mesher (a face "
                               "inside the domain listed here points to a hanging node or to "
                               "coincident points that were not merged).")


def _refuse_named_face(key: np.ndarray, keys: np.ndarray, name: str, corners: np.ndarray,
                       source: str) -> None:
    place = np.round(corners.mean(axis=0), 6).tolist()
    where = f"{source}, boundary '{name}' near {place}"
    if np.any(np.all(keys == key, axis=1)):
        raise MeshError("A named face lies inside the domain.", where=where,
                        got="cells on both sides",
                        remedy="Leave internal surfaces out of the named groups.")
    raise MeshError("A named face is no face of any cell.", where=where,
                    got=f"points {key[key >= 0].tolist()}",
                    remedy="Surface and volume mesh do not match: export both from the same mesh.")


def number_cells(left: np.ndarray, right: np.ndarray, n_cells: int) -> np.ndarray:
    """New number (n_cells,) of each cell by reverse Cuthill-McKee (Cuthill and McKee, 1969)."""
    ends = (np.concatenate([left, right]), np.concatenate([right, left]))
    graph = sparse.coo_matrix((np.ones(len(ends[0]), dtype=np.int8), ends),
                              shape=(n_cells, n_cells)).tocsr()
    new_number = np.empty(n_cells, dtype=np.int32)
    new_number[reverse_cuthill_mckee(graph, symmetric_mode=True)] = np.arange(n_cells)
    return new_number


def reversed_faces(faces: np.ndarray) -> np.ndarray:
    """The same faces (n, 4) seen from the other side."""
    triangle = faces[:, 3] < 0
    turned = faces[:, ::-1].copy()
    turned[triangle, :3] = faces[triangle, 2::-1]
    turned[triangle, 3] = -1
    return turned
