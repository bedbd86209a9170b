"""How flow and pressure answer the forces of readings, in a steady iteration.

A force is the gradient of a potential plus a part without divergence, and only that part moves
the fluid.  When the strength of a kernel changes, the pressure is changed by the potential at
once, so that the rest of the iteration has little left to project.  Potentials are solved for once
per run, roughly: they speed the iteration up and do not enter its fixed point.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse as sparse

from ..flow.problem import Force, Problem
from ..flow.projected import force_potential, make_projection, projected
from .layout import Layout

POTENTIAL_TO = 1e-2  # residual reduction of the potentials
KEPT_FROM = 0.01     # share of a column's largest force below which it is dropped
# Share of the potentials that is put into the pressure on meshes of other cells than hexahedra, for
# forces of single cells and for wide ones: more can diverge, less is slower (found by trial).
SHARE_OF_SINGLE, SHARE_OF_WIDE = 0.5, 0.7


@dataclass(frozen=True, eq=False)
class Pushes:
    """What a unit strength of each kernel does to fluid and pressure.

    Attributes
    ----------
    net : (3 n_cells, 3 n_places) sparse, force less the gradient of its potential [m/s^2]
    pressure : (n_cells, 3 n_places) float32, density times potential [Pa]
    regions : tuple of int arrays
        Cells in which each column moves the fluid noticeably.
    """

    net: sparse.csc_matrix
    pressure: np.ndarray
    regions: tuple[np.ndarray, ...]

    def pressure_change(self, strength: np.ndarray) -> np.ndarray:
        """(n_cells,) pressure that takes up forces of strengths (n_places, 3) [Pa]."""
        return np.einsum("ij,j->i", self.pressure, strength.ravel().astype(np.float32)
                         ).astype(float)


def make_pushes(problem: Problem, layout: Layout, axes: np.ndarray, *,
                share: float = 1.0) -> Pushes:
    """Potentials and net forces of the kernels.

    Parameters
    ----------
    axes : (3 n_places,) bool
        Columns that may act; the others stay zero.
    share : float
        Share of each potential that is taken out of force and put into the pressure.
    """
    mesh = problem.mesh
    projection = make_projection(problem)
    pressure = np.zeros((mesh.n_cells, len(axes)), dtype=np.float32)
    cell, drop = layout.cell.tocsc(), layout.drop.tocsc()
    columns, regions = [], []
    for place in range(len(axes) // 3):
        own = 3 * place + np.arange(3)
        force, push = np.zeros((2, 3, mesh.n_cells, 3))
        for axis in np.flatnonzero(axes[own]):
            column = [own[axis]]
            whole = Force(cell[:, column].toarray().reshape(-1, 3),
                          drop[:, column].toarray().ravel())
            potential = force_potential(problem, projection, whole, tolerance=POTENTIAL_TO)
            taken = projected(problem, whole, potential)
            force[axis], push[axis] = whole.cell, taken.velocity
            pressure[:, column[0]] = taken.pressure
        pressure[:, own] *= share
        for k in range(3):
            region, net = _region(force[k] + share * (push[k] - force[k]))
            columns.append(net)
            regions.append(region)
    return Pushes(sparse.hstack(columns).tocsc(), pressure, tuple(regions))


def _region(push: np.ndarray) -> tuple[np.ndarray, sparse.csc_matrix]:
    """Cells where a push (n_cells, 3) is worth keeping, and the column of what is kept."""
    size = np.abs(push).max(axis=1)
    region = np.flatnonzero(size > KEPT_FROM * size.max()).astype(np.int32)
    rows = (3 * region[:, None] + np.arange(3)).ravel()
    return region, sparse.csc_matrix((push[region].ravel(), (rows, np.zeros(len(rows), int))),
                                     shape=(push.size, 1))


@dataclass(frozen=True, eq=False)
class Response:
    """Answer of the momentum sweeps to a unit strength of each kernel.

    Attributes
    ----------
    velocity : (3 n_cells, 3 n_places) sparse, answer to the net force
    net, whole : (3 n_places, 3 n_places)
        Answers at the readings to the net force, and to the whole with its irrotational part.
    sweeps : int
    """

    velocity: sparse.csr_matrix
    net: np.ndarray
    whole: np.ndarray
    sweeps: int

    def apply(self, strength: np.ndarray) -> np.ndarray:
        """(n_cells, 3) velocity change for strengths (n_places, 3)."""
        return np.asarray(self.velocity @ strength.ravel()).reshape(-1, 3)

    def between(self, spread: sparse.csr_matrix, *, caution: float) -> np.ndarray:
        """(m, m) response of each component to the strength of each.

        Parameters
        ----------
        spread : (3 n_places, m) directions of the components
        caution : float
            Share of the whole response in it; where readings together resist the flow of a whole
            section, almost nothing of the net response is left, and steps without caution are wild.
        """
        answer = self.net + caution * (self.whole - self.net)
        return np.asarray(spread.T @ (spread.T @ answer.T).T)


def sweep_response(problem: Problem, layout: Layout, pushes: Pushes, relax: Any) -> Response:
    """Sweep every kernel's force over its own region."""
    velocity = _swept(problem, pushes.net, pushes.regions, relax)
    force = layout.cell.tocsc()
    regions = tuple(np.union1d(region, force.indices[a:b] // 3).astype(np.int32) for region, a, b
                    in zip(pushes.regions, force.indptr[:-1], force.indptr[1:], strict=True))
    whole = _swept(problem, force, regions, relax)
    return Response(velocity, (layout.sampling @ velocity).toarray(),
                    (layout.sampling @ whole).toarray(), relax.count)


def _swept(problem: Problem, force: sparse.csc_matrix, regions: tuple[np.ndarray, ...],
           relax: Any) -> sparse.csr_matrix:
    """(3 n_cells, 3 n_places) answers of the sweeps to forces, each in its region."""
    mesh, density = problem.mesh, problem.case.fluid.density
    scratch, rhs = np.zeros((mesh.n_cells, 3)), np.zeros((mesh.n_cells, 3))
    columns, values, rows = [], [], []
    for column, region in enumerate(regions):
        part = slice(force.indptr[column], force.indptr[column + 1])
        flat = force.indices[part]
        rhs.reshape(-1)[flat] = force.data[part] * density * mesh.cell_volume[flat // 3]
        relax(rhs, region, scratch)
        rows.append((3 * region[:, None].astype(np.int64) + np.arange(3)).ravel())
        values.append(scratch[region].ravel())
        columns.append(np.full(3 * len(region), column))
        scratch[region] = 0.0
        rhs.reshape(-1)[flat] = 0.0
    return sparse.csr_matrix(
        (np.concatenate(values), (np.concatenate(rows), np.concatenate(columns))),
        shape=(3 * mesh.n_cells, force.shape[1]))
