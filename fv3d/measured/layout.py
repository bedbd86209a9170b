"""Where the forces of readings act on one mesh."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import scipy.sparse as sparse

from ..errors import CaseError, ReadingError
from ..flow.problem import Force, Problem, balanced_force_near
from ..operators.interpolation import PointInterpolation, point_interpolation
from .columns import Columns, blocks_of, columns
from .kernel import Kernel, Neighbourhood
from .readings import Readings

REACHES_FROM = 0.02  # answer at the reading over the largest force: below, it is not reached


@dataclass(frozen=True, eq=False)
class Layout:
    """Kernels of all readings on one mesh, three directions each.

    ``cell`` (3 n_cells, 3 n_places) and ``drop`` (n_faces, 3 n_places) sparse, scaled so that the
    interpolation of each kernel's own component at its reading is one.  ``sampling`` (3 n_places,
    3 n_cells) is the interpolation of a velocity change, boundary values following the cells.
    """

    to_points: PointInterpolation
    sampling: sparse.csr_matrix
    cell: sparse.csr_matrix
    drop: sparse.csr_matrix

    @cached_property
    def near(self) -> tuple[Columns, Columns]:
        """``cell`` and ``drop`` by the cells and faces they touch."""
        parts = []
        for matrix, size in ((self.cell.tocsc(), 3), (self.drop.tocsc(), 1)):
            places = range(matrix.shape[1] // 3)
            rows, blocks = zip(*(blocks_of(matrix, k, size) for k in places), strict=True)
            parts.append(columns(rows, blocks))
        return parts[0], parts[1]

    def force(self, strength: np.ndarray) -> Force:
        """Force of strengths (n_places, 3) [m/s^2]."""
        cell, drop = np.zeros((self.cell.shape[0] // 3, 3)), np.zeros(self.drop.shape[0])
        if strength.any():
            at_cells, at_faces = self.near
            at_cells.add(strength, cell)
            at_faces.add(strength, drop)
        return Force(cell, drop)

    def sample(self, problem: Problem, velocity: np.ndarray, edge: np.ndarray) -> np.ndarray:
        """(n_places, 3) velocity at the readings [m/s]."""
        return self.to_points(velocity, edge)

    def sample_change(self, change: np.ndarray) -> np.ndarray:
        """(n_places, 3) velocity change at the readings, boundary values following the cells."""
        return np.asarray(self.sampling @ change.ravel()).reshape(-1, 3)


def _sampling(problem: Problem, to_points: PointInterpolation) -> sparse.csr_matrix:
    """See ``Layout.sampling``: cells, and the boundary faces that follow their cells."""
    mesh, n, table = problem.mesh, problem.mesh.n_internal, problem.table
    rows = np.unique(to_points.edges.indices)
    normal = mesh.face_normal[n + rows]
    block = np.eye(3) * table.keep_tangential[rows, None, None]
    block = block + np.einsum("f,fi,fj->fij", table.keep_normal[rows] - table.keep_tangential[rows],
                              normal, normal)
    at = 3 * rows[:, None, None] + np.arange(3)[:, None] + np.zeros((1, 1, 3), int)
    by = 3 * mesh.left[n + rows][:, None, None] + np.arange(3) + np.zeros((1, 3, 1), int)
    follow = sparse.csr_matrix((block.ravel(), (at.ravel(), by.ravel())),
                               shape=(3 * mesh.n_boundary, 3 * mesh.n_cells))
    each = sparse.eye_array(3)
    return sparse.csr_matrix(sparse.kron(to_points.cells, each)
                             + sparse.kron(to_points.edges, each).tocsr() @ follow)


def make_layout(problem: Problem, readings: Readings, kernel: Kernel) -> Layout:
    """Kernels of readings, balanced like the pressure gradient and scaled.

    Raises
    ------
    ReadingError
        A reading lies outside the mesh, on a wall or inlet, or where its own force does not reach.
    """
    mesh = problem.mesh
    try:
        to_points = point_interpolation(mesh, problem.velocity_gradient, readings.point,
                                        where="readings", names=list(readings.name))
    except CaseError as error:
        raise ReadingError("A fed reading lies outside the mesh.", where=error.where,
                           got=error.got, remedy=error.remedy) from None
    _check_off_walls(problem, readings, to_points.home)
    near = Neighbourhood.of(mesh)
    sampling = _sampling(problem, to_points)
    cells, drops = [], []
    for place in range(len(readings)):
        where, value = kernel.shape(mesh, near, readings.point[place], int(to_points.home[place]))
        at_cell, at_face = _columns(problem, sampling, place, where, value, readings)
        cells.append(at_cell)
        drops.append(at_face)
    return Layout(to_points, sampling, sparse.hstack(cells).tocsr(), sparse.hstack(drops).tocsr())


def _columns(problem: Problem, sampling: sparse.csr_matrix, place: int, where: np.ndarray,
             value: np.ndarray, readings: Readings) -> tuple[sparse.csc_matrix, sparse.csc_matrix]:
    """Force and drop columns of one reading, scaled so that its own interpolation of them is one.

    The balanced force of one axis has small parts along the others; where the three answers allow,
    they are combined so that the answer at the reading is exactly along each axis.
    """
    mesh = problem.mesh
    columns, drops, answers = [], [], np.empty((3, 3))
    for axis in range(3):
        force = np.zeros((len(where), 3))
        force[:, axis] = value
        touched, push, faces, drop = balanced_force_near(mesh, where, force)
        whole = np.zeros((mesh.n_cells, 3))
        whole[touched] = push
        answers[:, axis] = sampling[3 * place:3 * place + 3] @ whole.ravel() / np.abs(push).max()
        rows = (3 * touched[:, None] + np.arange(3)).ravel()
        columns.append(sparse.csc_matrix(
            (push.ravel() / np.abs(push).max(), (rows, np.zeros(len(rows), int))),
            shape=(3 * mesh.n_cells, 1)))
        drops.append(sparse.csc_matrix(
            (drop / np.abs(push).max(), (faces, np.zeros(len(faces), int))),
            shape=(mesh.n_faces, 1)))
    scale = sparse.csc_matrix(_scaling(answers, readings, place))
    return (sparse.hstack(columns) @ scale).tocsc(), (sparse.hstack(drops) @ scale).tocsc()


def _scaling(answers: np.ndarray, readings: Readings, place: int) -> np.ndarray:
    """(3, 3) factors on the columns; an axis that does not reach the reading is left out."""
    own = np.diag(answers)
    if own.min() >= REACHES_FROM and np.linalg.cond(answers) < 30.0:
        return np.linalg.inv(answers)
    for axis in np.flatnonzero(own < REACHES_FROM):
        _check_not_fed(readings, place, int(axis), float(own[axis]))
    return np.diag(np.where(own < REACHES_FROM, 0.0, 1.0 / np.maximum(own, REACHES_FROM)))


def _check_not_fed(readings: Readings, place: int, axis: int, share: float) -> None:
    """A force along this axis does not reach the reading: the reading must not need it."""
    fed = readings.component_place == place
    along = np.abs(readings.component_direction[fed, axis])
    if np.any(np.isnan(along) | (along > 1e-6)):
        raise ReadingError("The force of a reading does not reach the reading.",
                           where=f"reading '{readings.name[place]}', along {'xyz'[axis]}",
                           got=f"{share:.2g} of the largest force arrives",
                           remedy="Move it away from the wall or corner, give a smaller radius, "
                                  "or withhold it.")


def _check_off_walls(problem: Problem, readings: Readings, home: np.ndarray) -> None:
    """No reading on a boundary that gives the velocity itself."""
    mesh, table, n = problem.mesh, problem.table, problem.mesh.n_internal
    offsets, around, _ = mesh.cell_faces
    for place, cell in enumerate(home):
        faces = around[offsets[cell]:offsets[cell + 1]]
        faces = faces[faces >= n]
        faces = faces[(table.keep_tangential[faces - n] == 0) & (table.keep_normal[faces - n] == 0)]
        arm = mesh.face_centre[faces] - readings.point[place]
        off = np.einsum("ij,ij->i", arm, mesh.face_normal[faces])
        if np.any(off <= 1e-6 * np.cbrt(mesh.cell_volume[cell])):
            raise ReadingError("A fed reading lies on a boundary whose velocity is given.",
                               where=f"reading '{readings.name[place]}'",
                               got=f"{readings.point[place].tolist()} m",
                               remedy="Move it into the fluid, or withhold it.")
