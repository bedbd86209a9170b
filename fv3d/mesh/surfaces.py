"""The outer surface of a mesh: flat regions, a map of the boundaries, faces between zones."""

from __future__ import annotations

import warnings
from collections.abc import Iterable, Sequence

import numpy as np
import scipy.sparse as sparse
from scipy.sparse.csgraph import connected_components

from ..errors import Fv3dWarning, MeshError, as_number, expect_mesh
from .mesh import Mesh
from .topology import face_keys, local_faces, match_faces, pair_faces


def flat_regions(points: np.ndarray, faces: np.ndarray, *, feature_angle: float) -> np.ndarray:
    """Group the faces of a closed surface into regions without sharp edges.

    Two faces that share an edge belong to one region if their normals differ by less than
    the feature angle; an edge of more than two faces always separates.

    Parameters
    ----------
    points : (n_points, 3) [m]
    faces : (n, 4) points of each face, outward; -1 fills the last column of triangles
    feature_angle : float [deg]

    Returns
    -------
    (n,) int
        Region of each face from 0, the largest first; regions of equal area by their centre.

    Raises
    ------
    MeshError
        The angle is not between 0 and 180.
    """
    if not 0.0 < as_number(feature_angle) < 180.0:
        raise MeshError("The feature angle is out of range.", where="flat_regions",
                        got=feature_angle, remedy="Give degrees between 0 and 180.")
    area, centre = _areas(points, faces)
    size = np.linalg.norm(area, axis=1)
    one, other = edge_pairs(faces)
    cosine = np.einsum("ij,ij->i", area[one], area[other]) / (size[one] * size[other])
    smooth = cosine > np.cos(np.radians(feature_angle))
    graph = sparse.coo_matrix((np.ones(np.count_nonzero(smooth), dtype=np.int8),
                               (one[smooth], other[smooth])), shape=(len(faces), len(faces)))
    count, label = connected_components(graph, directed=False)
    total = np.bincount(label, size, count)
    places = [np.bincount(label, size * centre[:, k], count) / total for k in range(3)]
    extent = float(np.ptp(points, axis=0).max())
    keys = [np.round(place / extent, 6) for place in places[::-1]]
    order = np.lexsort([*keys, -np.round(total / total.sum(), 6)])
    rank = np.empty(count, dtype=int)
    rank[order] = np.arange(count)
    return rank[label]


def outer_faces(points: np.ndarray, cells: Sequence[tuple[str, np.ndarray]], *,
                source: str) -> np.ndarray:
    """(n, 4) faces that belong to one cell only, outward."""
    faces, _ = local_faces(cells)
    _, first, second = pair_faces(faces, points, source=source)
    return faces[first[second < 0]]


def unnamed_surfaces(points: np.ndarray, cells: Sequence[tuple[str, np.ndarray]], *,
                     feature_angle: float, source: str) -> dict[int | str, list[np.ndarray]]:
    """The outer faces under the names ``"surface 1"``, ``"surface 2"`` ... of their regions.

    Warns where faces lie back to back: a thin wall, or points that were not merged.
    """
    faces = outer_faces(points, cells, source=source)
    region = flat_regions(points, faces, feature_angle=feature_angle)
    _warn_back_to_back(points, faces, source)
    found: dict[int | str, list[np.ndarray]] = {}
    for k in range(int(region.max()) + 1):
        chosen = faces[region == k]
        three = chosen[:, 3] < 0
        parts = (chosen[three, :3].astype(np.int64), chosen[~three].astype(np.int64))
        found[f"surface {k + 1}"] = [part for part in parts if len(part)]
    return found


def boundary_map(mesh: Mesh) -> str:
    """A table of the boundaries by which a user recognises and names them.

    Parameters
    ----------
    mesh : Mesh

    Returns
    -------
    str
        For each boundary its faces, area [m^2], mean normal (shorter than one where the
        boundary is curved, zero where it is closed) and centre [m].
    """
    expect_mesh(mesh, "boundary_map(mesh)")
    width = max([8, *(len(name) for name in mesh.boundaries)])
    lines = [f"{'boundary':<{width}}  {'faces':>8}  {'area [m^2]':>12}  {'mean normal':<21}  "
             "centre [m]"]
    for name, where in mesh.boundaries.items():
        size = mesh.face_area_magnitude[where]
        total = max(float(size.sum()), 1e-300)
        normal = mesh.face_area[where].sum(axis=0) / total
        centre = (size[:, None] * mesh.face_centre[where]).sum(axis=0) / total
        arrow = ", ".join(f"{round(float(x), 2) + 0.0:.2f}" for x in normal)
        place = ", ".join(f"{x + 0.0:.4g}" for x in np.round(centre, 12))
        lines.append(f"{name:<{width}}  {len(size):>8}  {total:>12.6g}  {f'({arrow})':<21}  "
                     f"({place})")
    return "\n".join(lines)


def between_zones(cells: Sequence[tuple[str, np.ndarray]], points: np.ndarray,
                  zones: Iterable[np.ndarray], *, source: str) -> np.ndarray:
    """(n, 4) sorted points of the faces whose two cells do not lie in the same zones."""
    faces, owner = local_faces(cells)
    keys, first, second = pair_faces(faces, points, source=source)
    inside = second >= 0
    one, other = owner[first[inside]], owner[second[inside]]
    differ = np.zeros(len(one), dtype=bool)
    for chosen in zones:
        member = np.zeros(sum(len(conn) for _, conn in cells), dtype=bool)
        member[chosen] = True
        differ |= member[one] != member[other]
    return keys[inside][differ]


def without_interfaces(boundaries: dict[str, list[np.ndarray]], interface: np.ndarray, *,
                       source: str) -> dict[str, list[np.ndarray]]:
    """The boundaries without those that are nothing but faces between zones (warned about)."""
    kept = {}
    for name, arrays in boundaries.items():
        rows = [np.pad(faces, ((0, 0), (0, 4 - faces.shape[1])), constant_values=-1)
                for faces in arrays]
        if len(interface) and all(np.all(match_faces(interface, face_keys(row)) >= 0)
                                  for row in rows):
            warnings.warn(f"{source}: '{name}' lies between cell zones inside the domain and is "
                          "no boundary; it is left out.", Fv3dWarning, stacklevel=3)
        else:
            kept[name] = arrays
    return kept


def _areas(points: np.ndarray, faces: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Area vector (n, 3) and mean point (n, 3) of each face."""
    three = (faces[:, 3] < 0)[:, None]
    a, b, c, d = (points[column] for column in faces.T)
    d = np.where(three, a, d)
    area = np.where(three, np.cross(b - a, c - a), np.cross(c - a, d - b)) / 2.0
    return area, np.where(three, (a + b + c) / 3.0, (a + b + c + d) / 4.0)


def rim_edges(mesh: Mesh, name: str) -> tuple[np.ndarray, np.ndarray]:
    """Edges around a boundary and what lies beyond them.

    Returns
    -------
    edges : (k, 2) points of each edge that belongs to one face of the boundary only
    beside : (k,) name of the boundary on its other side; empty where there is none
    """
    faces = mesh.face_points[mesh.n_internal:].astype(np.int64)
    ring = faces.copy()
    three = ring[:, 3] < 0
    ring[three, 3] = ring[three, 0]
    names = np.concatenate([np.full(where.stop - where.start, own, dtype=object)
                            for own, where in mesh.boundaries.items()])
    pairs = np.sort(np.stack([ring.ravel(), np.roll(ring, -1, axis=1).ravel()], axis=1), axis=1)
    owner, real = np.repeat(names, 4), pairs[:, 0] != pairs[:, 1]
    pairs, owner = pairs[real], owner[real]
    key = pairs[:, 0] * len(mesh.points) + pairs[:, 1]
    own, counts = np.unique(key[owner == name], return_counts=True)
    rim = own[counts == 1]
    across = dict(zip(key[owner != name].tolist(), owner[owner != name].tolist()))
    beside = np.array([across.get(k, "") for k in rim.tolist()], dtype=object)
    return np.stack([rim // len(mesh.points), rim % len(mesh.points)], axis=1), beside


def edge_pairs(faces: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Both faces of every edge that belongs to exactly two."""
    three = faces[:, 3] < 0
    ring = faces.astype(np.int64)
    ring[three, 3] = ring[three, 0]
    start, stop = ring.ravel(), np.roll(ring, -1, axis=1).ravel()
    face = np.repeat(np.arange(len(faces)), 4)
    real = start != stop                                # the fourth edge of triangles is none
    start, stop, face = start[real], stop[real], face[real]
    low, high = np.minimum(start, stop), np.maximum(start, stop)
    order = np.lexsort((high, low))
    new = np.flatnonzero(np.concatenate([[True], (np.diff(low[order]) != 0)
                                         | (np.diff(high[order]) != 0)]))
    twice = np.diff(np.append(new, len(order))) == 2
    return face[order[new[twice]]], face[order[new[twice] + 1]]


def _warn_back_to_back(points: np.ndarray, faces: np.ndarray, source: str) -> None:
    from scipy.spatial import cKDTree  # slow to import, needed only here
    area, centre = _areas(points, faces)
    size = np.sqrt(np.linalg.norm(area, axis=1))
    pairs = cKDTree(centre).query_pairs(1e-6 * float(size.min()), output_type="ndarray")
    if len(pairs):
        place = np.round(centre[pairs[0, 0]], 6).tolist()
        warnings.warn(f"{source}: {len(pairs)} pair(s) of boundary faces lie back to back, the "
                      f"first at {place}: a thin wall, or points that were not merged.",
                      Fv3dWarning, stacklevel=3)
