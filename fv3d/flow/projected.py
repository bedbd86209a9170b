"""The projection of a run in time, whose matrix is the same in every step.

With the step ``dt`` over the leading coefficient ``c`` of the time derivative, the pressure of a
step follows from ``phi = dt / (c rho) p'``, so that one matrix, prepared once, serves all steps of
any size.  It also splits a force into the part that moves the fluid and the gradient of a
potential, which only moves the pressure.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import scipy.sparse as sparse

from ..operators import linear
from .equations import corrected_flux, correction_matrix, pressure_fields
from .problem import Force, Problem


@dataclass(frozen=True, eq=False)
class Projection:
    """Constant matrix with its face coefficients ``inner`` and boundary coefficients ``outer``."""

    matrix: sparse.csr_matrix
    inner: np.ndarray
    outer: np.ndarray
    prepared: linear.Prepared | linear.Factorised

    def potential(self, inflow: np.ndarray, tolerance: float) -> linear.LinearResult:
        """(n_cells,) potential whose correction takes up the net inflow of each cell [kg/s]."""
        return linear.solve(self.prepared, inflow, matrix=self.matrix, tolerance=tolerance)

    def corrected(self, problem: Problem, flux: np.ndarray, potential: np.ndarray) -> np.ndarray:
        """(n_faces,) mass flux after the correction."""
        return corrected_flux(problem, flux, potential, self.inner, self.outer)


def make_projection(problem: Problem) -> Projection:
    """Prepare the projection of a problem: factorised on small meshes, else multigrid."""
    matrix, inner, outer = correction_matrix(problem, np.ones(problem.mesh.n_cells))
    prepared = linear.prepare_constant(matrix, method=problem.case.numerics.multigrid,
                                       singular=problem.closed)
    return Projection(matrix, inner, outer, prepared)


@dataclass(frozen=True, eq=False)
class Push:
    """What a force does to the fluid within a step, per second.

    ``velocity`` (n_cells, 3) [m/s^2]; ``mass_flux`` (n_faces,) [kg/s^2]; ``pressure`` (n_cells,)
    [Pa], which takes up the rest of the force.
    """

    velocity: np.ndarray
    mass_flux: np.ndarray
    pressure: np.ndarray


def force_flux(problem: Problem, force: Force) -> np.ndarray:
    """(n_faces,) change of the mass flux that a force alone would cause in a second [kg/s^2].

    The interpolated force and the difference of the compact and the interpolated one, as in the
    momentum interpolation of :mod:`fv3d.flow.equations`; none where the flux is given.
    """
    mesh, n = problem.mesh, problem.mesh.n_internal
    at_face = mesh.to_faces(force.cell)
    through = np.einsum("ij,ij->i", at_face, mesh.face_area)
    along = np.einsum("ij,ij->i", at_face, mesh.delta)
    flux = through + problem.orthogonal * (force.drop - along)
    flux[n:] = np.where(problem.table.pressure_given, flux[n:], 0.0)
    return problem.case.fluid.density * flux


def force_potential(problem: Problem, projection: Projection, force: Force, *,
                    tolerance: float = 1e-11) -> np.ndarray:
    """(n_cells,) potential of a force's irrotational part by the projection [m^2/s^2]."""
    inflow = -(problem.mesh.outflow @ force_flux(problem, force))
    return projection.potential(inflow, tolerance).solution


def projected(problem: Problem, force: Force, potential: np.ndarray) -> Push:
    """What is left of a force when its potential has gone into the pressure."""
    density, n = problem.case.fluid.density, problem.mesh.n_internal
    factor = density * problem.orthogonal
    outer = np.where(problem.table.pressure_given, factor[n:], 0.0)
    flux = corrected_flux(problem, force_flux(problem, force), potential, factor[:n], outer)
    return Push(force.cell - potential_slope(problem, potential), flux,
                problem.case.fluid.density * potential)


def potential_slope(problem: Problem, potential: np.ndarray) -> np.ndarray:
    """(n_cells, 3) gradient of a potential by the operators of the cells' pressure gradient."""
    free = replace(problem.table, pressure=np.zeros(problem.mesh.n_boundary))
    still = np.zeros(problem.mesh.n_boundary)
    return pressure_fields(replace(problem, table=free), potential, still).gradient
