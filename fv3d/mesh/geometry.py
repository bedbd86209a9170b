"""Areas, volumes and centroids of faces and cells.

A face is the fan of triangles about the mean of its points; a cell is what its faces
enclose, so cells with warped faces are closed too.
"""

from __future__ import annotations

import numpy as np

from .topology import LOCAL_FACES

_CHUNK = 32768


def signed_volumes(points: np.ndarray, kind: str, connectivity: np.ndarray) -> np.ndarray:
    """(n,) volume of each cell [m^3], negative where the cell is turned inside out."""
    volume = np.empty(len(connectivity))
    for at in range(0, len(connectivity), _CHUNK):
        rows = slice(at, at + _CHUNK)
        corners = [points[column].T for column in connectivity[rows].T]
        middle = sum(corners) / len(corners)
        total = np.zeros(len(middle[0]))
        for local in LOCAL_FACES[kind]:
            ring = [corners[k] - middle for k in local]
            total += (sum(ring) * _ring_area(ring)).sum(axis=0) / len(local)
        volume[rows] = total / 3.0
    return volume


def face_and_cell_geometry(points: np.ndarray, face_points: np.ndarray, left: np.ndarray,
                           right: np.ndarray, apex: np.ndarray) -> tuple[np.ndarray, ...]:
    """Geometry of all faces and cells.

    Parameters
    ----------
    points : (n_points, 3) [m]
    face_points : (n_faces, 4), -1 fills the last column of triangles
    left : (n_faces,), right : (n_internal,)
    apex : (n_cells, 3)
        A point near the middle of each cell [m].

    Returns
    -------
    face_area : (n_faces, 3) [m^2], face_centre : (n_faces, 3) [m]
    cell_volume : (n_cells,) [m^3], cell_centre : (n_cells, 3) [m]
    warp : (n_faces, 3, 3) [m^3], or (0, 3, 3) where all faces are flat
        ``[f, j, i]`` the integral of (x - face centre)_j dS_i.
    """
    n_faces, n_internal, n_cells = len(left), len(right), len(apex)
    area, centre = np.empty((n_faces, 3)), np.empty((n_faces, 3))
    warps = []
    from_left, from_right = np.empty((4, n_faces)), np.empty((4, n_internal))
    for at in range(0, n_faces, _CHUNK):
        rows = slice(at, min(at + _CHUNK, n_faces))
        hub, vector, moment = _fan(points, face_points[rows])
        normal = vector / np.maximum(np.sqrt((vector * vector).sum(axis=0)), 1e-300)
        total = np.maximum((vector * normal).sum(axis=0), 1e-300)
        area[rows] = vector.T
        to_centre = np.einsum("jin,jn->in", moment, normal) / total
        centre[rows] = (hub + to_centre).T
        warps.append(_warp(vector, moment, to_centre))
        from_left[:, rows] = _cone(hub - apex[left[rows]].T, vector, moment)
        inside = slice(at, min(at + _CHUNK, n_internal))
        count = inside.stop - inside.start
        if count > 0:
            from_right[:, inside] = _cone(hub[:, :count] - apex[right[inside]].T,
                                          vector[:, :count], moment[:, :, :count])
    sums = [np.bincount(left, from_left[k], n_cells) - np.bincount(right, from_right[k], n_cells)
            for k in range(4)]
    warp = np.empty((0, 3, 3))
    if any(part is not None for part in warps):
        warp = np.zeros((n_faces, 3, 3))
        for k, part in enumerate(warps):
            if part is not None:
                warp[k * _CHUNK:(k + 1) * _CHUNK] = part
    return area, centre, sums[0], apex + np.stack(sums[1:], axis=1) / sums[0][:, None], warp


def _warp(vector: np.ndarray, moment: np.ndarray, to_centre: np.ndarray) -> np.ndarray | None:
    """(n, 3, 3) integral of (x - face centre)_j dS_i, or None where all faces are flat."""
    warp = np.moveaxis(moment - vector[:, None] * to_centre[None], (0, 1, 2), (2, 1, 0))
    size = (vector * vector).sum(axis=0) ** 0.75
    if np.all(np.abs(warp).max(axis=(1, 2)) <= 1e-9 * size):
        return None
    return warp


def _fan(points: np.ndarray, face_points: np.ndarray) -> tuple[np.ndarray, ...]:
    """Hub (3, n), area vector (3, n) and sum of area times arm (3, 3, n) of each fan.

    The arm leads from the hub to the centroid of a triangle.
    """
    three = face_points[:, 3] < 0
    ring = [points[column].T for column in face_points.T]
    ring[3] = np.where(three, ring[0], ring[3])            # an edge of no length
    count = np.where(three, 3.0, 4.0)
    hub = (ring[0] + ring[1] + ring[2] + np.where(three, 0.0, ring[3])) / count
    ring = [corner - hub for corner in ring]
    moment = np.zeros((3, 3, len(face_points)))
    for k in range(4):
        a, b = ring[k], ring[(k + 1) % 4]
        moment += (_cross(a, b) / 2.0)[:, None] * ((a + b) / 3.0)[None]
    return hub, _ring_area(ring), moment


def _cone(arm: np.ndarray, vector: np.ndarray, moment: np.ndarray) -> np.ndarray:
    """Volume and first moment (4, n) of the cones from an apex at ``-arm`` from the hubs."""
    out = np.empty((4, arm.shape[1]))
    height = (arm * vector).sum(axis=0)
    out[0] = height / 3.0
    out[1:] = 0.25 * (height * arm + np.einsum("jin,jn->in", moment, arm))
    return out


def _ring_area(ring: list[np.ndarray]) -> np.ndarray:
    """Area vector (3, n) of triangles or quadrilaterals from half the cross of diagonals."""
    if len(ring) == 3:
        return 0.5 * _cross(ring[1] - ring[0], ring[2] - ring[0])
    return 0.5 * _cross(ring[2] - ring[0], ring[3] - ring[1])


def _cross(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    """Cross products of columns (3, n)."""
    return np.stack([a[1] * b[2] - a[2] * b[1], a[2] * b[0] - a[0] * b[2],
                     a[0] * b[1] - a[1] * b[0]])
