"""From cell values to points: continuous across faces, exact on linear fields.

A cell is cut into tetrahedra (cell centre, mean of a face's points, two neighbouring points of
that face).  Values at mesh points are means of the surrounding cells' linear extrapolations, so
both sides of a face see the same values on it.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sparse

from ..errors import CaseError
from ..mesh.mesh import Mesh
from .gradient import GradientOperator
from .limiters import LimitedOperator, linear_operator


@dataclass(frozen=True, eq=False)
class PointInterpolation:
    """Linear operator from cell and boundary-face values to points.

    ``cells`` (n, n_cells) and ``edges`` (n, n_boundary) sparse; ``home`` (n,) the cell each point
    lies in.
    """

    cells: sparse.csr_matrix
    edges: sparse.csr_matrix
    home: np.ndarray

    def __call__(self, cell_values: np.ndarray, boundary_values: np.ndarray) -> np.ndarray:
        """Values at the points."""
        return np.asarray(self.cells @ cell_values + self.edges @ boundary_values)


@dataclass(frozen=True, eq=False)
class _Location:
    cell: np.ndarray
    corner: np.ndarray
    share: np.ndarray


def checked_points(points: Any, where: str) -> np.ndarray:
    """(n, 3) finite float array, or CaseError."""
    try:
        array = np.atleast_2d(np.asarray(points, dtype=float))
    except (TypeError, ValueError):
        array = np.empty((0, 0))
    if array.ndim != 2 or array.shape[1] != 3 or not np.all(np.isfinite(array)):
        raise CaseError("Points must be a table of three finite coordinates.", where=where,
                        got=f"shape {array.shape}", remedy="Give an (n, 3) array [m].")
    return np.ascontiguousarray(array)


def locate(mesh: Mesh, points: np.ndarray, *, near: int = 12) -> np.ndarray:
    """(n,) cell that contains each point, -1 outside the mesh."""
    return _locate(mesh, points, near).cell


def _locate(mesh: Mesh, points: np.ndarray, near: int) -> _Location:
    from scipy.spatial import cKDTree
    n = len(points)
    found = _Location(np.full(n, -1), np.zeros((n, 5), dtype=np.int64), np.zeros((n, 5)))
    near = min(near, mesh.n_cells)
    _, candidates = cKDTree(mesh.cell_centre).query(points, k=near)
    candidates = np.asarray(candidates).reshape(n, near)
    for k in range(near):
        open_ = np.flatnonzero(found.cell < 0)
        if open_.size:
            _try_cells(mesh, points, open_, candidates[open_, k], found)
    missing = np.flatnonzero(found.cell < 0)
    if missing.size:
        lower, upper = _cell_boxes(mesh)
        for i in missing:
            inside = np.all((points[i] >= lower) & (points[i] <= upper), axis=1)
            for cell in np.flatnonzero(inside):
                if found.cell[i] < 0:
                    _try_cells(mesh, points, np.array([i]), np.array([cell]), found)
    return found


def _cell_boxes(mesh: Mesh) -> tuple[np.ndarray, np.ndarray]:
    lower, upper = np.empty((mesh.n_cells, 3)), np.empty((mesh.n_cells, 3))
    for _, conn, cells in mesh.cell_blocks:
        corners = mesh.points[conn]
        lower[cells], upper[cells] = corners.min(axis=1), corners.max(axis=1)
    pad = 1e-9 * float(np.ptp(mesh.points, axis=0).max())
    return lower - pad, upper + pad


def _try_cells(mesh: Mesh, points: np.ndarray, which: np.ndarray, cells: np.ndarray,
               found: _Location, *, slack: float = 1e-9) -> None:
    """Test each point against every tetrahedron of its candidate cell."""
    offsets, faces, sign = mesh.cell_faces
    count = np.diff(offsets)[cells]
    for k in range(int(count.max(initial=0))):
        has = k < count
        entry = offsets[cells] + np.where(has, k, 0)
        corner = mesh.polygons(faces[entry], sign[entry])
        size = np.where(corner[:, 3] < 0, 3, 4)
        ring = mesh.points[corner]
        ring[size == 3, 3] = 0.0
        hub = ring.sum(axis=1) / size[:, None]
        for j in range(4):
            live = has & (j < size) & (found.cell[which] < 0)
            if not live.any():
                continue
            nxt = np.where(j + 1 < size, j + 1, 0)
            at = np.arange(len(which))
            a, b = ring[at, j], ring[at, nxt]
            share = _barycentric(mesh.cell_centre[cells], hub, a, b, points[which])
            hit = np.flatnonzero(live & (share.min(axis=1) >= -slack))
            i = which[hit]
            found.cell[i] = cells[hit]
            found.corner[i, :4] = np.where(corner[hit] < 0, corner[hit, :1], corner[hit])
            weight = np.zeros((len(hit), 4))
            weight[np.arange(4)[None] < size[hit, None]] = 1.0
            weight *= (share[hit, 1] / size[hit])[:, None]
            weight[np.arange(len(hit)), j] += share[hit, 2]
            weight[np.arange(len(hit)), nxt[hit]] += share[hit, 3]
            found.share[i, :4], found.share[i, 4] = weight, share[hit, 0]


def _barycentric(o: np.ndarray, h: np.ndarray, a: np.ndarray, b: np.ndarray,
                 x: np.ndarray) -> np.ndarray:
    """(n, 4) barycentric coordinates of x in the tetrahedra (o, h, a, b)."""
    edges = np.stack([h - o, a - o, b - o], axis=2)
    volume = np.linalg.det(edges)
    flat = np.abs(volume) < 1e-300
    edges[flat] = np.eye(3)
    inner = np.linalg.solve(edges, (x - o)[:, :, None])[:, :, 0]
    inner[flat] = -1.0
    return np.column_stack([1.0 - inner.sum(axis=1), inner])


def _onto_surface(mesh: Mesh, points: np.ndarray, which: np.ndarray, *,
                  slack: float = 0.05) -> np.ndarray:
    """Points just off a boundary moved onto it: flat faces stand for curved walls.

    ``slack`` is the distance allowed, as a share of the nearest boundary face's size.
    """
    from scipy.spatial import cKDTree
    n, points = mesh.n_internal, points.copy()
    near = min(6, mesh.n_boundary)
    _, faces = cKDTree(mesh.face_centre[n:]).query(points[which], k=near)
    faces = np.asarray(faces).reshape(len(which), near) + n
    for i, candidates in zip(which, faces, strict=True):
        for face in candidates:
            normal, size = mesh.face_normal[face], np.sqrt(mesh.face_area_magnitude[face])
            off = float((points[i] - mesh.face_centre[face]) @ normal)
            if 0.0 < off <= slack * size:
                points[i] -= (off + 1e-9 * size) * normal
    return points


def points_inside(mesh: Mesh, points: np.ndarray, *, where: str,
                  names: list[str] | None = None) -> _Location:
    """Cells and weights of points, those just off a curved wall moved onto it.

    Raises
    ------
    CaseError
        A point lies outside the mesh by more than a twentieth of the nearest boundary face.
    """
    points = checked_points(points, where)
    place = _locate(mesh, points, 12)
    if np.any(place.cell < 0):
        points = _onto_surface(mesh, points, np.flatnonzero(place.cell < 0))
        place = _locate(mesh, points, 12)
    outside = np.flatnonzero(place.cell < 0)
    if outside.size:
        i = int(outside[0])
        label = f", '{names[i]}'" if names else ""
        low, high = mesh.points.min(axis=0), mesh.points.max(axis=0)
        raise CaseError(f"{outside.size} point(s) lie outside the mesh.",
                        where=f"{where}, point {i + 1}{label}",
                        got=f"{np.round(points[i], 6).tolist()} m",
                        remedy="The mesh spans " + " x ".join(
                            f"[{a:.4g}, {b:.4g}]" for a, b in zip(low, high, strict=True))
                        + " m; check units and axes (placed(shift=, rotation=, scale=)).")
    return place


def point_interpolation(mesh: Mesh, gradient: GradientOperator | LimitedOperator,
                        points: np.ndarray, *, where: str = "sample(points)",
                        names: list[str] | None = None) -> PointInterpolation:
    """Operator from cell values to points.

    Parameters
    ----------
    gradient : GradientOperator or LimitedOperator
        Weights that know a value on every boundary face; of a limited one those it wraps.
    points : (n, 3) [m]
    where, names : for the message when a point lies outside

    Raises
    ------
    CaseError
        A point lies outside the mesh by more than a twentieth of the nearest boundary face.
    """
    place = points_inside(mesh, points, where=where, names=names)
    weights = linear_operator(gradient)
    n, size = len(place.cell), mesh.n_cells + mesh.n_boundary
    corners = sparse.csr_matrix(
        (place.share[:, :4].ravel(), (np.repeat(np.arange(n), 4), place.corner[:, :4].ravel())),
        shape=(n, len(mesh.points)))
    mean, arms = _corner_means(mesh, np.unique(place.corner[:, :4]))
    own = sparse.csr_matrix((place.share[:, 4], (np.arange(n), place.cell)),
                            shape=(n, mesh.n_cells))
    total = sparse.hstack([own + corners @ mean, sparse.csr_matrix((n, mesh.n_boundary))]).tocsr()
    for axis in range(3):
        reach = (corners @ arms[axis]).tocsr()
        used = np.unique(reach.indices)
        total = total + reach[:, used] @ _gradient_rows(weights, used, axis, size)
    total = total.tocsr()
    return PointInterpolation(total[:, :mesh.n_cells].tocsr(), total[:, mesh.n_cells:].tocsr(),
                              place.cell)


def _corner_means(mesh: Mesh, used: np.ndarray) -> tuple[sparse.csr_matrix, list]:
    """Weights of the cells around each used mesh point, and those times (point - centre)."""
    wanted = np.zeros(len(mesh.points), bool)
    wanted[used] = True
    for pair in [*mesh.joined.values()] * len(mesh.joined):  # images of images at edges
        wanted[pair.point_pairs] |= wanted[pair.point_pairs].any(axis=1)[:, None]
    rows, columns = [], []
    for _, conn, cells in mesh.cell_blocks:
        hit = wanted[conn]
        i, j = np.nonzero(hit)
        rows.append(conn[i, j])
        columns.append(cells[i])
    row, column = np.concatenate(rows), np.concatenate(columns)
    arm = mesh.points[row] - mesh.cell_centre[column]
    for pair in mesh.joined.values():
        row, column, arm = _with_images(pair.point_pairs, row, column, arm)
    weight = 1.0 / np.linalg.norm(arm, axis=1)
    weight /= np.bincount(row, weight, len(mesh.points))[row]
    shape = (len(mesh.points), mesh.n_cells)
    mean = sparse.csr_matrix((weight, (row, column)), shape=shape)
    arms = [sparse.csr_matrix((weight * arm[:, k], (row, column)), shape=shape) for k in range(3)]
    return mean, arms


def _with_images(pairs: np.ndarray, row: np.ndarray, column: np.ndarray,
                 arm: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Points of joined boundaries see the cells around their images, too."""
    image = np.full(max(int(row.max(initial=0)), int(pairs.max())) + 1, -1)
    image[pairs[:, 0]], image[pairs[:, 1]] = pairs[:, 1], pairs[:, 0]
    twice = np.flatnonzero(image[row] >= 0)
    return (np.concatenate([row, image[row[twice]]]), np.concatenate([column, column[twice]]),
            np.concatenate([arm, arm[twice]]))


def _gradient_rows(gradient: GradientOperator, cells: np.ndarray, axis: int,
                   width: int) -> sparse.csr_matrix:
    """Rows of one gradient component as a matrix over cells and boundary faces."""
    count = np.diff(gradient.offsets)[cells]
    row = np.repeat(np.arange(len(cells)), count)
    starts = np.cumsum(count) - count
    place = np.repeat(gradient.offsets[cells] - starts, count) + np.arange(count.sum())
    weight = gradient.weights[place, axis]
    rows = sparse.csr_matrix((weight, (row, gradient.other[place])), shape=(len(cells), width))
    own = np.bincount(row, weight, len(cells))
    here = (np.arange(len(cells)), cells)
    return rows - sparse.csr_matrix((own, here), shape=(len(cells), width))
