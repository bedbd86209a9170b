"""One step in time: second-order backward differencing and incremental projection.

With the step ``dt``, the ratio ``w`` of it to the step before, and extrapolated values marked
``~``, from level n to n+1:

    c = (1 + 2 w) / (1 + w),  b = 1 + w,  a = w^2 / (1 + w)         (first step: c = b = 1, a = 0)
    (c rho / dt) u* + A(F~) u* = (rho / dt)(b u_n - a u_{n-1}) - grad p_n + rho f + deferred(u~)
    div grad phi = div U*,      u = u* - grad phi,      p' = (c rho / dt) phi
    p_{n+1} = p_n + p' - mu div u*     (the last term reduced in very thin cells)

The face flux ``U*`` is the time-consistent momentum interpolation of
:mod:`fv3d.flow.equations`: the older levels' difference between face flux and interpolated velocity
is carried on, so that a steady state depends on no time step.  Sources act in two parts: their
strength of the level before stands in the momentum equation, and the change of it is projected
and added after the projection.

Sources: Goda, K. (1979), J. Comput. Phys. 30, 76-95 (incremental projection); Timmermans, L. J. P.,
Minev, P. D. and van de Vosse, F. N. (1996), Int. J. Numer. Meth. Fluids 22, 673-688 (last term);
Hairer, E., Norsett, S. P. and Wanner, G. (1993), Solving Ordinary Differential Equations I, III.5
(unequal steps; from memory).
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Any, Protocol

import numpy as np

from ..errors import CaseError, as_number
from ..operators.assembly import Rows, inverse_blocks
from .boundary import BoundaryTable
from .coupling import (
    FEWEST_SWEEPS,
    Record,
    Sweeps,
    Workspace,
    lessened,
    net_gradient,
    total_force,
)
from .equations import (
    PressureFields,
    boundary_velocity,
    correction_diagonal,
    interpolated_flux,
    momentum,
    net_outflow,
    pressure_fields,
)
from .memory import flux_defect, memory_share
from .problem import Force, Problem, State
from .projected import Push, make_projection
from .residuals import absolute_sum, mass_residual, reference_flux
from .step_size import FixedStep, StepSize, within
from .turbulence import with_eddies


class SourceInTime(Protocol):
    """Something that adds force to the momentum equation of a run in time."""

    def start(self, problem: Problem, state: State, earlier: Any) -> Any:
        """Own state before the first step; ``earlier`` that of a start run, or None."""
        ...

    def force(self, own: Any) -> Force:
        """The force it exerts now."""
        ...

    def advance(self, own: Any, problem: Problem, moment: Moment) -> tuple[Any, Push | None, float]:
        """New own state, the push of what its force changed by, and the misfit of its equation."""
        ...


@dataclass(frozen=True, eq=False)
class Moment:
    """A projected velocity on its way to a new level, as sources see it.

    ``time`` [s]; ``step`` [s] over the leading coefficient: what a force is multiplied with to
    change the velocity; ``mass_flux`` (n_faces,) [kg/s].
    """

    velocity: np.ndarray
    boundary_velocity: np.ndarray
    time: float
    step: float
    mass_flux: np.ndarray


@dataclass(frozen=True, eq=False)
class Level:
    """An older time level: what the next steps need of it.

    ``defect`` (n_faces,) [m^3/s] is the volume flux less the interpolated velocity's; ``step`` [s]
    is the size of the step that left this level.
    """

    velocity: np.ndarray
    boundary_velocity: np.ndarray
    mass_flux: np.ndarray
    defect: np.ndarray
    step: float = float("nan")


@dataclass(frozen=True)
class Differencing:
    """Backward differencing with unequal steps: ``(lead u - now u_n + before u_{n-1}) / step``."""

    step: float
    lead: float = 1.0
    now: float = 1.0
    before: float = 0.0
    ratio: float = 0.0

    @staticmethod
    def of(step: float, last: float | None) -> Differencing:
        """Coefficients of a step [s] after another, or of the first one."""
        if last is None:
            return Differencing(step)
        w = step / last
        return Differencing(step, (1 + 2 * w) / (1 + w), 1 + w, w * w / (1 + w), w)

    def mixed(self, now: np.ndarray, before: np.ndarray | None) -> np.ndarray:
        """The older levels as they enter the equation."""
        return now if before is None else self.now * now - self.before * before

    def ahead(self, now: np.ndarray, before: np.ndarray) -> np.ndarray:
        """Value extrapolated to the new level."""
        return (1 + self.ratio) * now - self.ratio * before


@dataclass(frozen=True)
class TimeStep:
    """Advance a state by one time step.

    Parameters
    ----------
    sizes : StepSize
    end : float [s]
        The last step ends here, unless steps are fixed.
    outer : int
        Repetitions of momentum and projection within a step; more for large Courant numbers.
    first : int
        The same in the first step, which also finds the pressure of the start field.
    momentum_tolerance, mass_tolerance : float
        Residual reduction of the momentum sweeps; summed mass imbalance over the reference flux.
    """

    sizes: StepSize
    end: float = field(default=float("inf"), kw_only=True)
    outer: int = field(default=1, kw_only=True)
    first: int = field(default=8, kw_only=True)
    momentum_tolerance: float = field(default=1e-3, kw_only=True)
    mass_tolerance: float = field(default=1e-8, kw_only=True)

    def __call__(self, problem: Problem, state: State,
                 workspace: Workspace) -> tuple[State, Record]:
        """State one step later and its record."""
        if workspace.projection is None:
            workspace.projection = make_projection(problem)
        now, before = current_level(problem, state), state.older
        difference = self._difference(problem, state)
        time = (0.0 if np.isnan(state.time) else state.time) + difference.step
        ahead = problem_at(problem, time)
        trial = replace(state, time=time, older=now)
        if before is not None:
            trial = _extrapolated(trial, now, before, difference)
        for _ in range(self.first if before is None else self.outer):
            gradient = problem.velocity_gradient(trial.velocity, trial.boundary_velocity)
            trial, record = self._solve(ahead, trial, gradient, now, before, difference, workspace)
        new = replace(trial, iteration=state.iteration + 1,
                      older=replace(now, step=difference.step))
        return new, replace(record, iteration=state.iteration, time=time)

    def _difference(self, problem: Problem, state: State) -> Differencing:
        last = None if state.older is None else state.older.step
        size = self.sizes.size(problem, state, last)
        if not isinstance(self.sizes, FixedStep):
            size = within(size, self.end - (0.0 if np.isnan(state.time) else state.time))
        return Differencing.of(size, last)

    def _solve(self, problem: Problem, trial: State, gradient: np.ndarray, now: Level,
               before: Level | None, difference: Differencing,
               workspace: Workspace) -> tuple[State, Record]:
        """Momentum, face fluxes and projection from a trial state of the new level."""
        problem = with_eddies(problem, gradient)
        mesh, density = problem.mesh, problem.case.fluid.density
        n, rate = mesh.n_internal, density / difference.step
        inertia = difference.lead * rate * mesh.cell_volume
        edge = boundary_velocity(problem, trial.velocity, gradient, trial.mass_flux[n:])
        fields = pressure_fields(problem, trial.pressure, trial.mass_flux[n:])
        force = total_force(problem, trial)
        equation = momentum(problem, trial.velocity, gradient, edge, trial.mass_flux)
        older = difference.mixed(now.velocity, None if before is None else before.velocity)
        residual = lessened(equation.rows.residual(trial.velocity, mesh.cell_volume,
                                                   net_gradient(problem, fields, force)),
                            inertia, trial.velocity - older / difference.lead)
        rows = with_central_share(problem, equation.rows, trial.mass_flux, inertia)
        velocity = trial.velocity + self._swept(problem, rows, inertia, residual)
        edge = boundary_velocity(problem, velocity, gradient, trial.mass_flux[n:])
        memory = difference.mixed(now.defect, None if before is None else before.defect)
        flux = interpolated_flux(problem, velocity, gradient, edge, fields, force,
                                 equation.diagonal + inertia, memory * memory_share(
                                     problem, equation.diagonal, inertia) / difference.lead)
        scale = absolute_sum(velocity, equation.diagonal + inertia)
        new, effort = self._project(problem, replace(trial, velocity=velocity), flux, fields,
                                    difference, workspace)
        edge = boundary_velocity(problem, new.velocity, gradient, new.mass_flux[n:])
        new, misfit = _push(problem, replace(new, boundary_velocity=edge), gradient, difference)
        record = Record(0, absolute_sum(residual) / max(scale, 1e-300),
                        mass_residual(problem, new.mass_flux, new.velocity, new.pressure), misfit,
                        effort)
        return new, record

    def _project(self, problem: Problem, trial: State, flux: np.ndarray, fields: PressureFields,
                 difference: Differencing, workspace: Workspace) -> tuple[State, int]:
        """Velocity, flux (n_faces,) and pressure made to conserve mass."""
        mesh, density, projection = problem.mesh, problem.case.fluid.density, workspace.projection
        per_pascal = difference.step / (difference.lead * density)
        imbalance = net_outflow(problem, flux)
        reference = reference_flux(problem, flux, trial.velocity, trial.pressure)
        size = float(np.abs(imbalance).sum())
        tolerance = float(np.clip(self.mass_tolerance * reference / max(size, 1e-300), 1e-9, 1e-2))
        result = projection.potential(-imbalance, tolerance)
        flux = projection.corrected(problem, flux, result.solution)
        change = result.solution / per_pascal
        moved = pressure_fields(problem, trial.pressure + change,
                                trial.mass_flux[mesh.n_internal:])
        velocity = trial.velocity - per_pascal * (moved.gradient - fields.gradient)
        pressure = trial.pressure + change - _viscous_share(problem, per_pascal) * (
            problem.viscosity / density) * imbalance / mesh.cell_volume
        if problem.closed:
            pressure = pressure - np.average(pressure, weights=mesh.cell_volume)
        return replace(trial, velocity=velocity, pressure=pressure, mass_flux=flux), \
            result.iterations

    def _swept(self, problem: Problem, rows: Rows, inertia: np.ndarray,
               residual: np.ndarray) -> np.ndarray:
        """Change of velocity by sweeps, repeated until the residual has fallen enough."""
        sweeps = Sweeps(problem.pattern, rows.data.astype(np.float32),
                        inverse_blocks(rows.block, inertia),
                        problem.case.numerics.sweeps or FEWEST_SWEEPS)
        rows = replace(rows, rhs=residual)
        change = sweeps(residual)
        wanted = self.momentum_tolerance * absolute_sum(residual)
        for _ in range(20):
            left = lessened(rows.residual(change), inertia, change)
            if not absolute_sum(left) > wanted:
                break
            change = change + sweeps(left)
        return change


def with_central_share(problem: Problem, rows: Rows, mass_flux: np.ndarray,
                       inertia: np.ndarray) -> Rows:
    """The momentum matrix with the central share of convection in it instead of upwind's.

    It acts on the change from extrapolated values.  With upwind convection there, the central
    share's difference from it would be extrapolated: diffusion of negative sign, which lets short
    waves grow by a sixth in every step at a Courant number of one.  Where a cell's outflow exceeds
    its ``inertia`` (n_cells,) [kg/s] the share is reduced, so that the sweeps converge.
    """
    share = problem.case.numerics.convection.central_share
    if not share:
        return rows
    mesh, n, layout = problem.mesh, problem.mesh.n_internal, problem.pattern
    flux = mass_flux[:n]
    throughflow = 0.5 * (np.bincount(mesh.left, np.abs(mass_flux), mesh.n_cells)
                         + np.bincount(mesh.right, np.abs(flux), mesh.n_cells))
    allowed = np.minimum(inertia / np.maximum(throughflow, 1e-300), 1.0)
    share = share * np.minimum(allowed[mesh.left[:n]], allowed[mesh.right])
    left = share * (flux * (1.0 - mesh.weight) - np.minimum(flux, 0.0))
    right = share * (np.maximum(flux, 0.0) - flux * mesh.weight)
    data, block = rows.data.copy(), rows.block.copy()
    data[layout.left_entry] += left
    data[layout.right_entry] += right
    block[:, :3] -= (np.bincount(mesh.left[:n], left, mesh.n_cells)
                     + np.bincount(mesh.right, right, mesh.n_cells))[:, None]
    return replace(rows, data=data, block=block)


def _push(problem: Problem, state: State, gradient: np.ndarray,
          difference: Differencing) -> tuple[State, float]:
    """The state after what the sources' forces have changed by, and their largest misfit."""
    n, step, misfit, sources = problem.mesh.n_internal, difference.step / difference.lead, 0.0, []
    for source, own in zip(problem.sources, state.sources, strict=True):
        moment = Moment(state.velocity, state.boundary_velocity, state.time, step,
                        state.mass_flux)
        own, push, error = source.advance(own, problem, moment)  # type: ignore[attr-defined]
        sources.append(own)
        misfit = max(misfit, error)
        if push is not None:
            velocity = state.velocity + step * push.velocity
            flux = state.mass_flux + step * push.mass_flux
            edge = boundary_velocity(problem, velocity, gradient, flux[n:])
            state = replace(state, velocity=velocity, mass_flux=flux, boundary_velocity=edge,
                            pressure=state.pressure + push.pressure)
    return replace(state, sources=tuple(sources)), misfit


def _viscous_share(problem: Problem, d: float) -> np.ndarray:
    """(n_cells,) share of the viscous pressure term kept.

    In cells much thinner than the diffusion length of a step the full term feeds on itself from
    step to step; it is reduced there to what the time derivative can balance.
    """
    mesh, n = problem.mesh, problem.mesh.n_internal
    conductance = problem.face_viscosity * problem.orthogonal
    total = correction_diagonal(problem, conductance[:n], conductance[n:])
    return 1.0 / (1.0 + d * total / mesh.cell_volume)


def current_level(problem: Problem, state: State) -> Level:
    """The present state as a level: the flux defect added."""
    gradient = problem.velocity_gradient(state.velocity, state.boundary_velocity)
    defect = flux_defect(problem, state.velocity, gradient, state.boundary_velocity,
                         state.mass_flux)
    return Level(state.velocity, state.boundary_velocity, state.mass_flux, defect)


def _extrapolated(state: State, now: Level, before: Level, difference: Differencing) -> State:
    return replace(
        state, velocity=difference.ahead(now.velocity, before.velocity),
        boundary_velocity=difference.ahead(now.boundary_velocity, before.boundary_velocity),
        mass_flux=difference.ahead(now.mass_flux, before.mass_flux))


def problem_at(problem: Problem, time: float) -> Problem:
    """The problem with boundary values and body force at a time [s].

    The same object where none depends on it.
    """
    case = problem.case
    if case.body_force_factor is not None and problem.force is not None:
        factor = _factor(case.body_force_factor, "body force", time)
        problem = replace(problem, force=Force(factor * problem.force.cell,
                                               factor * problem.force.drop))
    moving = {name: b for name, b in case.boundaries.items()
              if getattr(b, "factor", None) is not None}
    if not moving:
        return problem
    mesh, n = problem.mesh, problem.mesh.n_internal
    fixed, flux = problem.table.fixed.copy(), problem.fixed_flux.copy()
    pressure = problem.table.pressure.copy()
    for name, boundary in moving.items():
        faces = mesh.boundaries[name]
        rows = slice(faces.start - n, faces.stop - n)
        factor = _factor(boundary.factor, f"boundary '{name}'", time)  # type: ignore[attr-defined]
        for values in (fixed, flux, pressure):
            values[rows] = factor * values[rows]
    table: BoundaryTable = replace(problem.table, fixed=fixed, pressure=pressure)
    return replace(problem, table=table, fixed_flux=flux)


def _factor(function: Any, what: str, time: float) -> float:
    try:
        factor = as_number(function(time))
    except Exception as error:
        raise CaseError("A factor in time failed.", where=f"{what} at {time:g} s",
                        got=f"{type(error).__name__}: {error}",
                        remedy="Mend the function; it is called with the time [s].") from error
    if not np.isfinite(factor):
        raise CaseError("A factor in time is not a finite number.", where=f"{what} at {time:g} s",
                        got=factor, remedy="Return one finite number for every time of the run.")
    return factor
