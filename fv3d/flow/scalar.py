"""Steady transport of a passive scalar by the flow of a run.

    div(mass flux * c) = div(density * diffusivity * grad c) + source

by the same assembly as momentum: first-order upwind and the compact diffusion are implicit, the
scheme's second-order part and the non-orthogonal correction explicit.  The implicit matrix does not
change, so it is prepared once.  A linear scheme is solved by GMRES (Saad, Y. and Schultz, M. H.
(1986), SIAM J. Sci. Stat. Comput. 7, 856-869) about it, a limited one by its fixed-point iteration
with mixing (Anderson, D. G. (1965), J. ACM 12, 547-560; Walker, H. F. and Ni, P. (2011), SIAM J.
Numer. Anal. 49, 1715-1735).
"""

from __future__ import annotations

import warnings
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import scipy.sparse as sparse

from .. import errors
from ..errors import BoundaryError, CaseError, Fv3dWarning, Outcome, as_number, expect_run
from ..mesh.mesh import Mesh
from ..operators import kernels
from ..operators.fluxes import ConvectionScheme
from ..operators.gradient import BoundaryKnowledge
from ..operators.interpolation import point_interpolation
from ..operators.limiters import limited_extension, limited_outflow, linear_operator
from .scalar_boundary import ScalarTable, scalar_table

REMEMBERED = 8  # earlier iterates that are mixed where the equation is not linear
KRYLOV = 60  # directions of one iteration where it is


@dataclass(frozen=True, eq=False)
class ScalarField:
    """A scalar carried by the flow of a run.

    Attributes
    ----------
    values : (n_cells,), boundary_values : (n_boundary,)
    flux : (n_faces,) convected and diffused, left to right [scalar kg/s]
    residuals : (n_iterations,) sum of the cells' residuals over their scale
    outcome : Outcome
    """

    run: Any = field(repr=False)
    values: np.ndarray = field(repr=False)
    boundary_values: np.ndarray = field(repr=False)
    flux: np.ndarray = field(repr=False)
    residuals: np.ndarray = field(repr=False)
    outcome: Outcome

    def sample(self, points: np.ndarray) -> np.ndarray:
        """(n,) values at points (n, 3) [m].

        Raises
        ------
        CaseError
            A point lies outside the mesh.
        """
        operator = linear_operator(self.run.problem.velocity_gradient)
        to_points = point_interpolation(self.run.mesh, operator, points)
        return to_points(self.values, self.boundary_values)

    def outflow(self, name: str) -> float:
        """What leaves through a boundary, convected and diffused [scalar kg/s].

        Raises
        ------
        CaseError
            No such boundary.
        """
        known = self.run.mesh.boundaries
        if name not in known:
            raise CaseError("No such boundary.", where="outflow(name)", got=repr(name),
                            remedy=f"The mesh has: {', '.join(known)}.")
        return float(self.flux[known[name]].sum())

    def __str__(self) -> str:
        volume = self.run.mesh.cell_volume
        lines = [f"scalar in run '{self.run.name}'", f"  outcome   {self.outcome}",
                 f"  values    {self.values.min():.6g} to {self.values.max():.6g}, mean "
                 f"{np.average(self.values, weights=volume):.6g}"]
        lines += [f"  out of    '{name}' {self.outflow(name):.6g}"
                  for name in self.run.mesh.boundaries if self.outflow(name)]
        return "\n".join(lines)


@dataclass(frozen=True, eq=False)
class _Transport:
    """The discrete equation: everything that does not change while it is solved."""

    problem: Any
    velocity: np.ndarray
    flux: np.ndarray
    diffusivity: np.ndarray
    table: ScalarTable
    source: np.ndarray
    scheme: ConvectionScheme
    gradient: Any

    @property
    def mesh(self) -> Mesh:
        return self.problem.mesh

    @property
    def linear(self) -> bool:
        """Whether the residual is linear in the values: nothing is limited."""
        return not self.scheme.limited_share and linear_operator(self.gradient) is self.gradient

    def edge(self, values: np.ndarray, slope: np.ndarray) -> np.ndarray:
        """(n_boundary,) values on the boundary faces."""
        mesh, n = self.mesh, self.mesh.n_internal
        owner = mesh.left[n:]
        foot = values[owner] + np.einsum("fj,fj->f", slope[owner], self.problem.foot)
        conductance = self.diffusivity[n:] * self.problem.orthogonal[n:]
        through = self.table.flux * mesh.face_area_magnitude[n:]
        rise = np.divide(through, conductance, out=np.zeros_like(foot), where=conductance > 0)
        return np.where(self.table.valued, self.table.value, foot + rise)

    def fluxes(self, values: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Coefficients (n_internal, 2), explicit part (n_faces,) and boundary values.

        The explicit part of a boundary face is its whole flux less mass flux times own value.
        """
        mesh, n, problem = self.mesh, self.mesh.n_internal, self.problem
        slope = self.gradient(values, self.table.value)
        edge = self.edge(values, slope)
        coefficient, explicit = np.empty((n, 2)), np.empty((n, 1))
        kernels.transport_faces(
            mesh.left[:n], mesh.right, mesh.weight, mesh.skew, mesh.face_area, mesh.delta,
            problem.orthogonal, mesh.straight, self.flux, self.diffusivity, values[:, None],
            slope[:, None, :], float(self.scheme.upwind_share),
            float(self.scheme.central_share), False, coefficient, explicit)
        if self.scheme.limited_share:
            around = np.where(self.table.valued, edge, values[mesh.left[n:]])
            reach = limited_extension(mesh, values[:, None], around[:, None], slope[:, None, :],
                                      self.flux)
            explicit += self.scheme.limited_share * self.flux[:n, None] * reach
        if mesh.warped and not self.scheme.bounded:
            through = np.einsum("fi,fji->fj", mesh.to_faces(self.velocity), mesh.warp)
            explicit[:, 0] += self.problem.case.fluid.density * np.einsum(
                "fj,fj->f", through, mesh.to_faces(slope))[:n]
        return coefficient, np.concatenate([explicit[:, 0], self._outer(values, slope, edge)]), edge

    def _outer(self, values: np.ndarray, slope: np.ndarray, edge: np.ndarray) -> np.ndarray:
        mesh, n, flux = self.mesh, self.mesh.n_internal, self.flux[self.mesh.n_internal:]
        owner = mesh.left[n:]
        own = values[owner]
        foot = own + np.einsum("fj,fj->f", slope[owner], self.problem.foot)
        conductance = self.diffusivity[n:] * self.problem.orthogonal[n:]
        entering = np.where(self.table.valued, conductance * (edge - foot),
                            self.table.flux * mesh.face_area_magnitude[n:])
        inner = own + np.einsum("fj,fj->f", slope[owner], mesh.delta[n:])
        leaving = np.where(self.table.valued, inner, edge)
        if self.scheme.bounded:
            around = np.where(self.table.valued, edge, own)
            leaving = own + self.scheme.limited_share * limited_outflow(
                mesh, values[:, None], around[:, None], slope[:, None, :])[:, 0]
        return flux * (np.where(flux > 0, leaving, edge) - own) - entering

    def residual(self, values: np.ndarray) -> np.ndarray:
        """(n_cells,) what a cell gains less what it should: zero when solved."""
        mesh, n = self.mesh, self.mesh.n_internal
        coefficient, explicit, _ = self.fluxes(values)
        jump = values[mesh.right] - values[mesh.left[:n]]
        gain = self.source * mesh.cell_volume - mesh.outflow @ explicit
        gain -= np.bincount(mesh.left[:n], coefficient[:, 0] * jump, mesh.n_cells)
        gain += np.bincount(mesh.right, coefficient[:, 1] * jump, mesh.n_cells)
        return np.asarray(gain)

    def matrix(self) -> sparse.csr_matrix:
        """The implicit part: upwind convection and compact diffusion."""
        mesh, n, layout = self.mesh, self.mesh.n_internal, self.problem.pattern
        coefficient = self.fluxes(np.zeros(mesh.n_cells))[0]
        data, diagonal = np.empty(len(layout.indices)), np.empty(mesh.n_cells)
        kernels.fill_rows(*mesh.cell_faces, layout.entry, layout.diagonal, n, coefficient,
                          np.zeros((n, 1)), data, diagonal, np.empty((mesh.n_cells, 1)))
        conductance = self.diffusivity[n:] * self.problem.orthogonal[n:]
        outer = np.where(self.table.valued, conductance + np.maximum(-self.flux[n:], 0.0), 0.0)
        data[layout.diagonal] = diagonal + np.bincount(mesh.left[n:], outer, mesh.n_cells)
        return layout.matrix(data)

    def whole_flux(self, values: np.ndarray) -> np.ndarray:
        """(n_faces,) convected and diffused, left to right."""
        mesh, n = self.mesh, self.mesh.n_internal
        coefficient, explicit, _ = self.fluxes(values)
        left, right = values[mesh.left[:n]], values[mesh.right]
        explicit[:n] += coefficient[:, 0] * (right - left) + self.flux[:n] * left
        explicit[n:] += self.flux[n:] * values[mesh.left[n:]]
        return explicit


def solve_scalar(run: Any, *, diffusivity: float | np.ndarray, boundaries: Mapping[str, Any],
                 tolerance: float, max_iterations: int, source: float | np.ndarray = 0.0,
                 convection: ConvectionScheme | None = None) -> ScalarField:
    """Steady distribution of a passive scalar in the flow of a run.

    Parameters
    ----------
    run : Run
    diffusivity : float or (n_cells,) [m^2/s]
        Zero for pure convection.
    boundaries : mapping of boundary name to ScalarValue or ScalarFlux
        Boundaries left out let nothing diffuse through; what flows out carries its value along.
    tolerance : float
        On the sum of the cells' residuals over that of their fluxes.
    max_iterations : int
    source : float or (n_cells,) [scalar kg/(m^3 s)]
    convection : convection scheme, optional
        That of the run's case if left out.

    Returns
    -------
    ScalarField
        Also when the iteration did not converge: see its ``outcome``; a warning says so.

    Raises
    ------
    CaseError, BoundaryError
        Something does not fit, before the first iteration.
    """
    expect_run(run, "solve_scalar(run)")
    _check_limits(tolerance, max_iterations)
    transport = _made(run, diffusivity, boundaries, source, convection)
    values, residuals = _iterate(transport, float(tolerance), int(max_iterations))
    if residuals[-1] <= tolerance:
        outcome = errors.converged(len(residuals), tolerance)
    else:
        outcome = errors.iteration_limit(len(residuals), residuals[-1], tolerance)
        warnings.warn(f"The scalar in run '{run.name}' ended with {outcome}", Fv3dWarning,
                      stacklevel=2)
    return ScalarField(run, values, transport.fluxes(values)[2], transport.whole_flux(values),
                       np.array(residuals), outcome)


def _check_limits(tolerance: Any, max_iterations: Any) -> None:
    if not 0.0 < as_number(tolerance) < np.inf:
        raise CaseError("The tolerance must be positive.", where="solve_scalar(tolerance=)",
                        got=tolerance, remedy="Give 1e-8, say.")
    if not (as_number(max_iterations) >= 1 and as_number(max_iterations) % 1 == 0):
        raise CaseError("The limit of iterations is a whole number from 1.", got=max_iterations,
                        where="solve_scalar(max_iterations=)", remedy="Give 500, say.")


def _made(run: Any, diffusivity: Any, boundaries: Any, source: Any,
          convection: ConvectionScheme | None) -> _Transport:
    mesh, problem, n = run.mesh, run.problem, run.mesh.n_internal
    scheme = problem.case.numerics.convection if convection is None else convection
    if isinstance(scheme, type) or not hasattr(scheme, "upwind_share"):
        raise CaseError("A convection scheme is an object.", where="solve_scalar(convection=)",
                        got=repr(scheme), remedy="Give Upwind() or SecondOrderUpwind(), say.")
    table = scalar_table(mesh, boundaries, run.mass_flux)
    rate = _per_cell(mesh, diffusivity, "diffusivity")
    if rate.min() < 0.0 or (rate.min() == 0.0 < rate.max()):
        raise CaseError("A diffusivity is positive, or zero everywhere.", got=float(rate.min()),
                        where="solve_scalar(diffusivity=)", remedy="Correct it [m2/s].")
    if rate.max() == 0.0 and np.any(table.flux):
        raise BoundaryError("Nothing diffuses through a boundary without diffusivity.",
                            where="solve_scalar(diffusivity=)", got="a ScalarFlux and no "
                            "diffusivity", remedy="Give a diffusivity, or no flux.")
    w, face_rate = mesh.weight, np.zeros(mesh.n_faces)
    if rate.max() > 0.0:
        face_rate[:n] = 1.0 / ((1 - w) / rate[mesh.left[:n]] + w / rate[mesh.right])
        face_rate[n:] = rate[mesh.left[n:]]
    knowledge = BoundaryKnowledge(table.valued, ~table.valued & (table.flux == 0.0))
    return _Transport(problem, run.velocity, run.mass_flux,
                      problem.case.fluid.density * face_rate, table,
                      _per_cell(mesh, source, "source"), scheme,
                      problem.case.numerics.gradient.weights(mesh, knowledge))


def _per_cell(mesh: Mesh, value: Any, name: str) -> np.ndarray:
    try:
        array = np.asarray(value, dtype=float)
    except (TypeError, ValueError):
        array = np.empty(0)
    if array.shape not in ((), (mesh.n_cells,)) or not np.all(np.isfinite(array)):
        raise CaseError(f"The {name} is one finite number, or one per cell.",
                        where=f"solve_scalar({name}=)", got=f"shape {array.shape}",
                        remedy="Give a number, or an (n_cells,) array in the mesh's numbering.")
    return np.broadcast_to(array, mesh.n_cells).copy()


def _iterate(transport: _Transport, tolerance: float,
             limit: int) -> tuple[np.ndarray, list[float]]:
    """Iteration to the tolerance or the limit, with the residual of each step."""
    matrix = transport.matrix()
    solve, weight = _solver(transport, matrix), matrix.diagonal()
    values = np.full(transport.mesh.n_cells, transport.table.level)
    residuals: list[float] = []
    steps: list[np.ndarray] = []
    changes: list[np.ndarray] = []
    last: tuple[np.ndarray, np.ndarray] | None = None
    while len(residuals) < limit:
        gain = transport.residual(values)
        spread = float(np.ptp(np.append(values, transport.table.spread)))
        scale = weight.sum() * (spread or float(np.abs(values).max()) or 1.0)
        residuals.append(float(np.abs(gain).sum() / scale))
        if residuals[-1] <= tolerance or not np.isfinite(residuals[-1]):
            break
        change = solve(gain)
        if last is not None and not transport.linear:
            steps, changes = steps[1 - REMEMBERED:], changes[1 - REMEMBERED:]
            steps.append(values - last[0])
            changes.append(change - last[1])
        last = values, change
        values = values + change
        if steps:
            values = values - _mixed(steps, changes, change)
    return values, residuals


def _mixed(steps: list[np.ndarray], changes: list[np.ndarray], change: np.ndarray) -> np.ndarray:
    """What the earlier steps tell to take back, by least squares of the changes."""
    table = np.stack(changes)
    normal = np.einsum("in,jn->ij", table, table)
    normal[np.diag_indices_from(normal)] *= 1.0 + 1e-12
    share = np.linalg.lstsq(normal, np.einsum("in,n->i", table, change), rcond=1e-14)[0]
    return np.einsum("i,in->n", share, np.stack(steps) + table)


def _solver(transport: _Transport,
            matrix: sparse.csr_matrix) -> Callable[[np.ndarray], np.ndarray]:
    """Inexact solver: of the whole equation where it is linear, else of its implicit part (SciPy).

    Preconditioned by incomplete factors of the implicit part.
    """
    from scipy.sparse.linalg import LinearOperator, bicgstab, gmres, spilu
    whole = matrix.copy()
    whole.indices, whole.indptr = whole.indices.astype(np.int32), whole.indptr.astype(np.int32)
    factors = spilu(whole.tocsc(), drop_tol=1e-4, fill_factor=8.0)
    about = LinearOperator(whole.shape, factors.solve)
    if not transport.linear:
        return lambda rhs: np.asarray(bicgstab(whole, rhs, rtol=1e-3, atol=0.0, maxiter=50,
                                               M=about)[0])
    rest = transport.residual(np.zeros(len(matrix.indptr) - 1))
    full = LinearOperator(whole.shape, lambda x: rest - transport.residual(x.ravel()))
    return lambda rhs: np.asarray(gmres(full, rhs, rtol=1e-4, atol=0.0, restart=KRYLOV, maxiter=1,
                                        M=about)[0])
