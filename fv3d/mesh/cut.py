"""Hexahedra cut into tetrahedra, wedges or pyramids so that all faces match."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from ..errors import MeshError
from .topology import LOCAL_FACES, face_keys

_FACES = np.array(LOCAL_FACES["hexahedron"])          # the first two are 0123 and 4567


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


def to_wedges(hexes: np.ndarray, *, source: str = "generated mesh") -> np.ndarray:
    """Cut hexahedra into two wedges (2 n, 6) each, their triangles in the faces 0123 and 4567.

    The cut runs through the smallest point number of each of the two faces, so columns of
    hexahedra conform where their points are numbered alike at all levels.

    Raises
    ------
    MeshError
        The two faces would be cut along different diagonals.
    """
    hexes = np.asarray(hexes, dtype=np.int64)
    low, high = np.argmin(hexes[:, :4], axis=1), np.argmin(hexes[:, 4:], axis=1)
    if np.any((low - high) % 2):
        raise MeshError("The ends of a hexahedron are not cut alike.", where=source,
                        got=f"{np.count_nonzero((low - high) % 2)} hexahedra",
                        remedy="Number the points of a column alike at all levels.")
    corner = (low[:, None] + np.arange(4)) % 4
    ring = [np.take_along_axis(end, corner, axis=1) for end in (hexes[:, :4], hexes[:, 4:])]
    halves = [np.concatenate([end[:, local] for end in ring[::-1]], axis=1)
              for local in ((0, 1, 2), (0, 2, 3))]
    return np.stack(halves, axis=1).reshape(-1, 6)


def cut_hexes(points: np.ndarray, hexes: np.ndarray, quads: Mapping[str, np.ndarray], *,
              tetra: np.ndarray | None = None, wedge: np.ndarray | None = None,
              centre: np.ndarray | None = None, source: str = "generated mesh"
              ) -> tuple[np.ndarray, list[tuple[str, np.ndarray]], dict[str, list[np.ndarray]]]:
    """Cut some hexahedra of a mesh.

    Parameters
    ----------
    points : (n_points, 3) [m]
    hexes : (n, 8) point numbers in VTK order
    quads : mapping of name to (m, 4) point numbers
        All boundary faces.
    tetra, wedge, centre : (n,) bool
        Hexahedra to cut into six tetrahedra, into two wedges (triangles in the local faces
        0123 and 4567), and into cones from their centre: a pyramid on every whole face, two
        tetrahedra on every face that a neighbour or the cell itself cuts.
    source : str
        Named in error messages.

    Returns
    -------
    points, cells, boundaries
        As :func:`build_mesh` takes them.

    Raises
    ------
    MeshError
        Neighbours whose common face is cut on one side only.
    """
    none = np.zeros(len(hexes), dtype=bool)
    tetra, wedge, centre = (none if mask is None else mask for mask in (tetra, wedge, centre))
    if not np.any(tetra | wedge | centre):
        return points, [("hexahedron", hexes)], {name: [faces] for name, faces in quads.items()}
    if np.all(tetra):
        tets, triangles = to_tetra(hexes, quads)
        return points, [("tetra", tets)], {name: [faces] for name, faces in triangles.items()}
    split, split_quads = _split_faces(hexes, quads, tetra, wedge)
    stiff = split & ~(tetra | centre)[:, None]
    stiff[:, :2] &= ~wedge[:, None]
    if np.any(stiff):
        place = np.round(points[hexes[np.argmax(stiff.any(axis=1))]].mean(axis=0), 6).tolist()
        raise MeshError("A face is cut on one side only.", where=f"{source}, near {place}",
                        got=f"{np.count_nonzero(stiff)} faces",
                        remedy="Put cells cut about their centre between whole and cut ones.")
    cells = [("hexahedron", hexes[~(tetra | wedge | centre)]),
             ("wedge", to_wedges(hexes[wedge], source=source))]
    apex = len(points) + np.arange(np.count_nonzero(centre))
    points = np.concatenate([points, points[hexes[centre]].mean(axis=1)])
    pyramids, tets = _cones(hexes[centre], apex, split[centre])
    cells += [("pyramid", pyramids),
              ("tetra", np.concatenate([to_tetra(hexes[tetra], {})[0], tets]))]
    boundaries = {}
    for name, cut in split_quads.items():
        parts = [_two_triangles(quads[name][cut]).reshape(-1, 3), quads[name][~cut]]
        boundaries[name] = [part for part in parts if len(part)]
    return points, [(kind, conn) for kind, conn in cells if len(conn)], boundaries


def _split_faces(hexes: np.ndarray, quads: Mapping[str, np.ndarray], tetra: np.ndarray,
                 wedge: np.ndarray) -> tuple[np.ndarray, dict[str, np.ndarray]]:
    """Whether each local face (n, 6), and each quadrilateral of each name, is cut in two."""
    tables = [hexes[:, _FACES].reshape(-1, 4), *quads.values()]
    _, number = np.unique(face_keys(np.concatenate(tables)), axis=0, return_inverse=True)
    parts = np.split(number.ravel(), np.cumsum([len(table) for table in tables])[:-1])
    face_of = parts[0].reshape(-1, 6)
    split = np.zeros(number.max() + 1, dtype=bool)
    split[face_of[tetra]] = True
    split[face_of[wedge][:, :2]] = True
    return split[face_of], {name: split[part] for name, part in zip(quads, parts[1:])}


def _cones(hexes: np.ndarray, apex: np.ndarray,
           split: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Pyramids (n, 5) and tetrahedra (m, 4) from the centre of each hexahedron to its faces."""
    faces = hexes[:, _FACES]                            # outward
    top = np.broadcast_to(apex[:, None], split.shape)
    whole, cut = faces[~split][:, ::-1], _two_triangles(faces[split])[..., ::-1]
    pyramids = np.concatenate([whole, top[~split][:, None]], axis=1)
    tips = np.repeat(top[split], 2)[:, None]
    return pyramids, np.concatenate([cut.reshape(-1, 3), tips], axis=1)


def _two_triangles(quads: np.ndarray) -> np.ndarray:
    """(n, 2, 3) triangles of quadrilaterals (n, 4), cut through the smallest point number."""
    start = np.argmin(quads, axis=1)[:, None]
    turned = np.take_along_axis(quads, (start + np.arange(4)) % 4, axis=1)
    return turned[:, [[0, 1, 2], [0, 2, 3]]]
