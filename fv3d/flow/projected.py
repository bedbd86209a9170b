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
from .equations import PressureFields, corrected_flux, correction_matrix, pressure_fields
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


def full_potential(problem: Problem, projection: Projection, force: Force, *,
                   reduction: float = 1e-3,
                   iterations: int = 15) -> tuple[np.ndarray, np.ndarray]:
    """As :func:`force_potential`, with the part of the gradient the compact matrix leaves out.

    On meshes whose faces stand across the lines between cell centres both agree.  Elsewhere the
    potential is corrected by the compact solution of what is left, with the step of least residual.

    Returns
    -------
    potential, rest : (n_cells,) [m^2/s^2]
        ``rest`` is the compact potential of the inflow that ``potential`` leaves.
    """
    outflow = problem.mesh.outflow
    inflow = -(outflow @ force_flux(problem, force))
    first = float(np.abs(inflow).sum())
    potential = np.zeros(problem.mesh.n_cells)
    rest = projection.potential(inflow, 1e-11).solution
    for _ in range(iterations):
        if float(np.abs(inflow).sum()) <= reduction * first:
            break
        taken = -(outflow @ slope_flux(problem, rest))
        step = float(np.einsum("i,i->", inflow, taken) / np.einsum("i,i->", taken, taken))
        potential, inflow = potential + step * rest, inflow - step * taken
        rest = projection.potential(inflow, 1e-11).solution
    return potential, rest


def slope_flux(problem: Problem, potential: np.ndarray) -> np.ndarray:
    """(n_faces,) flux of a potential's gradient as the momentum interpolation has it [kg/s^2]."""
    mesh, n = problem.mesh, problem.mesh.n_internal
    fields = _free_fields(problem, potential)
    through = np.einsum("ij,ij->i", mesh.to_faces(fields.gradient), mesh.face_area)
    along = np.einsum("ij,ij->i", mesh.to_faces(fields.slope), mesh.delta)
    jump = np.concatenate([potential[mesh.right] - potential[mesh.left[:n]],
                           fields.face[n:] - potential[mesh.left[n:]]])
    flux = through + problem.orthogonal * (jump - along)
    flux[n:] = np.where(problem.table.pressure_given, flux[n:], 0.0)
    return problem.case.fluid.density * flux


def projected(problem: Problem, force: Force, potential: np.ndarray,
              rest: np.ndarray | None = None) -> Push:
    """What is left of a force when its potential has gone into the pressure.

    With ``rest`` the potential is that of :func:`full_potential`.
    """
    density, n = problem.case.fluid.density, problem.mesh.n_internal
    flux, compact = force_flux(problem, force), potential
    if rest is not None:
        flux, compact, potential = flux - slope_flux(problem, potential), rest, potential + rest
    factor = density * problem.orthogonal
    outer = np.where(problem.table.pressure_given, factor[n:], 0.0)
    flux = corrected_flux(problem, flux, compact, factor[:n], outer)
    return Push(force.cell - _free_fields(problem, potential).gradient, flux, density * potential)


def _free_fields(problem: Problem, potential: np.ndarray) -> PressureFields:
    """A potential with its gradients by the operators of the pressure, zero at outlets."""
    free = replace(problem.table, pressure=np.zeros(problem.mesh.n_boundary))
    still = np.zeros(problem.mesh.n_boundary)
    return pressure_fields(replace(problem, table=free), potential, still)
