"""Time-accurate runs: second-order backward differencing and incremental projection.

One step from level n to n+1, with ``c = 3/2`` (1 in the first step) and extrapolated values marked
``~``:

    (c rho / dt) u* + A(F~) u* = (rho / dt)(2 u_n - u_{n-1} / 2) - grad p_n + rho f + deferred(u~)
    div (dt / (c rho)) grad p' = div U*,      u = u* - (dt / (c rho)) grad p'
    p_{n+1} = p_n + p' - mu div u*     (the last term reduced in very thin cells)

The face flux ``U*`` is the time-consistent momentum interpolation of
:mod:`fv3d.flow.equations`: the older levels' difference between face flux and interpolated velocity
is carried on, so that a steady state depends on no time step.

Sources: Goda, K. (1979), J. Comput. Phys. 30, 76-95 (incremental projection); Timmermans, L. J. P.,
Minev, P. D. and van de Vosse, F. N. (1996), Int. J. Numer. Meth. Fluids 22, 673-688 (last term).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from ..errors import CaseError, Outcome, as_number
from ..operators.assembly import inverse_blocks
from .boundary import BoundaryTable
from .coupling import (
    FEWEST_SWEEPS,
    Record,
    Sweeps,
    Workspace,
    make_workspace,
    mass_residual,
    momentum_push,
    reference_flux,
    solve_pressure,
)
from .equations import (
    boundary_velocity,
    corrected_flux,
    correction_matrix,
    interpolated_flux,
    momentum,
    pressure_fields,
)
from .loop import check_kind, drive
from .monitors import Monitor
from .problem import Case, Problem, State, make_problem
from .progress import Progress
from .run import Run
from .start import start_state


@dataclass(frozen=True, eq=False)
class Level:
    """An older time level: what the next steps need of it.

    ``defect`` (n_faces,) [m^3/s] is the volume flux less the interpolated velocity's.
    """

    velocity: np.ndarray
    boundary_velocity: np.ndarray
    mass_flux: np.ndarray
    gradient: np.ndarray
    defect: np.ndarray


@dataclass(frozen=True)
class TimeStep:
    """Advance a state by one time step.

    Parameters
    ----------
    size : float [s]
    outer : int
        Repetitions of momentum and projection within a step; more for large Courant numbers.
    first : int
        The same in the first step, which also finds the pressure of the start field.
    momentum_tolerance, mass_tolerance : float
        Residual reduction of the momentum sweeps; summed mass imbalance over the reference flux.
    """

    size: float
    outer: int = 1
    first: int = 8
    momentum_tolerance: float = 1e-3
    mass_tolerance: float = 1e-8

    def __call__(self, problem: Problem, state: State,
                 workspace: Workspace) -> tuple[State, Record]:
        """State one step later and its record."""
        now = current_level(problem, state)
        before = state.older
        time = (0.0 if np.isnan(state.time) else state.time) + self.size
        ahead = problem_at(problem, time)
        guess = now if before is None else _extrapolated(now, before)
        pressure, record = state.pressure, None
        for _ in range(self.first if before is None else self.outer):
            guess, pressure, record = self._solve(ahead, guess, now, before, pressure, workspace)
        assert record is not None
        new = State(guess.velocity, pressure, guess.mass_flux, guess.boundary_velocity,
                    state.sources, state.iteration + 1, time, now)
        return new, replace(record, iteration=state.iteration, time=time)

    def _solve(self, problem: Problem, guess: Level, now: Level, before: Level | None,
               pressure: np.ndarray, workspace: Workspace) -> tuple[Level, np.ndarray, Record]:
        mesh, density = problem.mesh, problem.case.fluid.density
        n, rate = mesh.n_internal, density / self.size
        c = 1.0 if before is None else 1.5
        inertia = c * rate * mesh.cell_volume
        edge = boundary_velocity(problem, guess.velocity, guess.gradient, guess.mass_flux[n:])
        fields = pressure_fields(problem, pressure, guess.mass_flux[n:])
        equation = momentum(problem, guess.velocity, guess.gradient, edge, guess.mass_flux)
        residual = (equation.rows.residual(guess.velocity) + momentum_push(
            problem, fields, problem.force) - inertia[:, None] * guess.velocity
            + (rate * mesh.cell_volume)[:, None] * _mixed(now.velocity, before, "velocity"))
        velocity = guess.velocity + self._swept(problem, equation, inertia, residual)
        edge = boundary_velocity(problem, velocity, guess.gradient, guess.mass_flux[n:])
        flux = interpolated_flux(problem, velocity, guess.gradient, edge, fields, problem.force,
                                 equation.diagonal + inertia,
                                 rate * _mixed(now.defect, before, "defect"))
        imbalance = mesh.outflow @ flux
        d = np.full(mesh.n_cells, self.size / (c * density))
        matrix, inner, outer = correction_matrix(problem, d)
        reference = reference_flux(problem, flux, velocity, pressure)
        size = float(np.abs(imbalance).sum())
        tolerance = float(np.clip(self.mass_tolerance * reference / max(size, 1e-300), 1e-9, 1e-2))
        result = solve_pressure(problem, workspace, matrix, -imbalance, tolerance)
        flux = corrected_flux(problem, flux, result.solution, inner, outer)
        moved = pressure_fields(problem, pressure + result.solution, guess.mass_flux[n:])
        velocity = velocity - d[:, None] * (moved.gradient - fields.gradient)
        pressure = pressure + result.solution - _viscous_share(problem, d) * (
            problem.viscosity / density) * imbalance / mesh.cell_volume
        if problem.closed:
            pressure = pressure - np.average(pressure, weights=mesh.cell_volume)
        edge = boundary_velocity(problem, velocity, guess.gradient, flux[n:])
        gradient = problem.velocity_gradient(velocity, edge)
        scale = float(np.einsum("i,ij->", equation.diagonal + inertia, np.abs(velocity)))
        record = Record(0, float(np.abs(residual).sum()) / max(scale, 1e-300),
                        mass_residual(problem, flux, velocity, pressure), 0.0, result.iterations)
        return Level(velocity, edge, flux, gradient, np.empty(0)), pressure, record

    def _swept(self, problem: Problem, equation: Any, inertia: np.ndarray,
               residual: np.ndarray) -> np.ndarray:
        """Change of velocity by sweeps, repeated until the residual has fallen enough."""
        block = equation.rows.block.copy()
        block[:, :3] += inertia[:, None]
        sweeps = Sweeps(problem.pattern, equation.rows.data, inverse_blocks(block),
                        problem.case.numerics.sweeps or FEWEST_SWEEPS)
        rows = replace(equation.rows, block=block, rhs=residual)
        change = sweeps(residual)
        wanted = self.momentum_tolerance * float(np.abs(residual).sum())
        for _ in range(20):
            left = rows.residual(change)
            if not float(np.abs(left).sum()) > wanted:
                break
            change = change + sweeps(left)
        return change


def _viscous_share(problem: Problem, d: np.ndarray) -> np.ndarray:
    """(n_cells,) share of the viscous pressure term kept.

    In cells much thinner than the diffusion length of a step the full term feeds on itself from
    step to step; it is reduced there to what the time derivative can balance.
    """
    mesh, n = problem.mesh, problem.mesh.n_internal
    conductance = problem.face_viscosity * problem.orthogonal
    total = (np.bincount(mesh.left, conductance, mesh.n_cells)
             + np.bincount(mesh.right, conductance[:n], mesh.n_cells))
    return 1.0 / (1.0 + d * total / mesh.cell_volume)


def current_level(problem: Problem, state: State) -> Level:
    """The present state as a level: velocity gradient and flux defect added."""
    mesh, n = problem.mesh, problem.mesh.n_internal
    gradient = problem.velocity_gradient(state.velocity, state.boundary_velocity)
    through = np.einsum("ij,ij->i", mesh.to_faces(state.velocity), mesh.face_area)
    slope = mesh.to_faces(gradient)[:n]
    through[:n] += np.einsum("fij,fj,fi->f", slope, mesh.skew_offset, mesh.face_area[:n])
    if mesh.warped:
        through[:n] += np.einsum("fij,fji->f", slope, mesh.warp[:n])
    through[n:] = np.einsum("ij,ij->i", state.boundary_velocity, mesh.face_area[n:])
    defect = state.mass_flux / problem.case.fluid.density - through
    defect[n:] = np.where(problem.table.pressure_given, defect[n:], 0.0)
    return Level(state.velocity, state.boundary_velocity, state.mass_flux, gradient, defect)


def _extrapolated(now: Level, before: Level) -> Level:
    return Level(2 * now.velocity - before.velocity,
                 2 * now.boundary_velocity - before.boundary_velocity,
                 2 * now.mass_flux - before.mass_flux, 2 * now.gradient - before.gradient,
                 np.empty(0))


def _mixed(now: np.ndarray, before: Level | None, name: str) -> np.ndarray:
    """Older levels as backward differencing weighs them: 2 now - before / 2, or now."""
    return now if before is None else 2.0 * now - 0.5 * getattr(before, name)


def problem_at(problem: Problem, time: float) -> Problem:
    """The problem with boundary values at a time [s]; the same object where none depends on it."""
    moving = {name: b for name, b in problem.case.boundaries.items()
              if getattr(b, "factor", None) is not None}
    if not moving:
        return problem
    mesh, n = problem.mesh, problem.mesh.n_internal
    fixed, flux = problem.table.fixed.copy(), problem.fixed_flux.copy()
    for name, boundary in moving.items():
        faces = mesh.boundaries[name]
        rows = slice(faces.start - n, faces.stop - n)
        factor = as_number(boundary.factor(time))  # type: ignore[attr-defined]
        if not np.isfinite(factor):
            raise CaseError("The factor of a boundary is not a finite number.",
                            where=f"boundary '{name}' at {time:g} s", got=factor,
                            remedy="Return one finite number for every time of the run.")
        fixed[rows], flux[rows] = factor * fixed[rows], factor * flux[rows]
    table: BoundaryTable = replace(problem.table, fixed=fixed)
    return replace(problem, table=table, fixed_flux=flux)


def solve_transient(case: Case, *, time_step: float, end_time: float, start: Any = None,
                    outer_iterations: int = 1, name: str = "transient",
                    monitors: Sequence[Monitor] = (), progress: bool = True) -> Run:
    """Follow the flow in time with a fixed step.

    Parameters
    ----------
    case : Case
        Inlets may carry a ``factor``, a function of time [s] their velocity is multiplied with.
    time_step : float [s]
        The local error is of third order in it; Courant numbers around one are usual.
    end_time : float [s]
        Counted from the start field, or on from the time of a transient start run.
    start : Run, velocity vector, function of points, or None
        None: irrotational flow.  A transient run on the same mesh is continued where it stopped.
    outer_iterations : int
        Repetitions within a step, for large Courant numbers.
    monitors : sequence of Monitor
        Afterwards in ``run.series`` under their names.

    Returns
    -------
    Run
        ``run.history["time"]`` is the time of each step [s].

    Raises
    ------
    CaseError
        A step or end time that is not positive, a start that does not fit.
    DivergenceError
        The fields stopped being finite; carries the last finite run.
    """
    for label, value in (("time_step", time_step), ("end_time", end_time)):
        if not 0.0 < as_number(value) < np.inf:
            raise CaseError("Times must be positive.", where=f"solve_transient({label}=)",
                            got=value, remedy="Give seconds, 0.01 say.")
    if not (as_number(outer_iterations) >= 1 and as_number(outer_iterations) % 1 == 0):
        raise CaseError("The outer iterations are a whole number from 1.", got=outer_iterations,
                        where="solve_transient(outer_iterations=)", remedy="Give 1, or 3.")
    check_kind(monitors, ("see",), "monitors")
    problem = make_problem(case)
    workspace = make_workspace(problem)
    state = replace(start_state(problem_at(problem, 0.0), start, workspace), sources=())
    began = 0.0
    if hasattr(start, "state") and start.mesh is case.mesh and not np.isnan(start.state.time):
        state = replace(state, time=start.state.time, older=start.state.older,
                        iteration=start.state.iteration)
        began = start.state.time
    if not end_time > began:
        raise CaseError("The end lies before the start.", where="solve_transient(end_time=)",
                        got=f"{end_time:g} s, start at {began:g} s", remedy="Give a later time.")
    steps = int(np.ceil((end_time - began) / time_step * (1.0 - 1e-12)))

    def stop(records: list[Record]) -> Outcome | None:
        if len(records) < steps:
            return None
        return Outcome("finished", f"Reached {records[-1].time:g} s in {steps} steps of "
                                   f"{time_step:g} s.", "", True)

    return drive(problem, state, workspace, advance=TimeStep(time_step, outer=outer_iterations),
                 stop=stop, name=name, monitors=monitors, clock="time",
                 progress=Progress(problem, name, 1e-300, steps, progress))
