"""One iteration of the pressure-velocity coupling: ``start`` and ``step``; state in, state out."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from ..operators import kernels, kernels_solving, linear
from ..operators.assembly import NOTHING, Pattern, inverse_blocks, symmetric_matrix
from ..operators.deflation import deflated
from .equations import (
    Momentum,
    PressureFields,
    boundary_pressure,
    boundary_velocity,
    corrected_flux,
    correction_coefficients,
    correction_diagonal,
    correction_matrix,
    interpolated_flux,
    momentum,
    net_outflow,
    pressure_fields,
    pressure_outflow,
)
from .memory import flux_defect, memory_share
from .numerics import GlobalStep, LocalStep
from .outlets import (
    at_levels,
    flow_misfit,
    free_outlets,
    meet_flows,
    moved_levels,
)
from .problem import Force, Problem, State
from .residuals import absolute_sum, counted, mass_residual, momentum_scale
from .response import PressureResponse, pressure_response
from .zones import bent, without_zones

REFRESH_AT = 1.6  # solver iterations above this multiple of a fresh hierarchy's: refresh it
FEWEST_SWEEPS = 4
SWEPT_TO = 0.05  # share of the momentum residual that the sweeps may leave
SMALL_STEP = 1.6  # inertia over diagonal above which the face fluxes carry the time term too
MEASURED_EARLY, MEASURED_EVERY = (0, 2, 5, 10, 20), 30  # iterations at which that is measured

FaceAnswer = tuple[np.ndarray, np.ndarray]


@dataclass(frozen=True)
class Record:
    """Numbers of one iteration: residuals of the state it started from, and effort.

    ``momentum``: sum of |unrelaxed residual| over sum of |a u|, with the newest fluxes.
    ``mass``: sum of |imbalance| of the predicted fluxes over the reference flux.
    ``misfit``: largest relative misfit of the sources' own equations.
    ``tracer``: one number that follows the velocity field, a sum with random signs.
    """

    iteration: int
    momentum: float
    mass: float
    misfit: float
    pressure_iterations: int
    time: float = float("nan")
    tracer: float = 0.0

    @property
    def residual(self) -> float:
        """The largest of the three."""
        return max(self.momentum, self.mass, self.misfit)


@dataclass(eq=False)
class Workspace:
    """What iterations share and may rebuild at any time."""

    response: PressureResponse
    tracer: np.ndarray
    pseudo_step: LocalStep | GlobalStep | None = None
    first_residual: float = 0.0
    residual: float = 0.0
    prepared: linear.Prepared | None = None
    best_iterations: int = 0
    setups: int = 0
    projection: Any = None
    sweeps: int = FEWEST_SWEEPS


@dataclass(frozen=True, eq=False)
class Sweeps:
    """The inexact momentum solve: a fixed linear operator from right-hand side to change.

    It runs in single precision, which is enough for a change whose residual is computed anew, and
    moves half of the memory.  ``data`` (nnz,), ``inverse`` (n_cells, 6).
    """

    pattern: Pattern
    data: np.ndarray
    inverse: np.ndarray
    count: int

    def __call__(self, rhs: np.ndarray, rows: np.ndarray | None = None,
                 out: np.ndarray | None = None) -> np.ndarray:
        """Change (n_cells, 3) from zero; over some rows only, in a given zeroed array, if asked."""
        x = np.zeros(rhs.shape, dtype=np.float32) if out is None else out
        layout = self.pattern
        equations = (layout.indptr, layout.indices, self.data, self.inverse,
                     rhs.astype(np.float32, copy=False))
        for k in range(self.count):
            backward = k % 2 == 1
            if rows is not None:
                kernels_solving.sweep(*equations, rows, backward, x)
                continue
            for odd in (1, 0) if backward else (0, 1):
                kernels_solving.sweep_pieces(*equations, layout.pieces, odd, backward, x)
        return x if out is not None else x.astype(np.float64)


def make_workspace(problem: Problem,
                   pseudo_step: LocalStep | GlobalStep | None = None) -> Workspace:
    """Workspace of a problem, before the first iteration."""
    signs = np.random.default_rng(0).choice(np.array([-1.0, 1.0]), (problem.mesh.n_cells, 3))
    return Workspace(pressure_response(without_zones(problem)), signs, pseudo_step)


def pseudo_inertia(problem: Problem, equation: Momentum, workspace: Workspace) -> np.ndarray:
    """(n_cells,) mass over pseudo-time step [kg/s].

    A relaxation factor a is the step whose inertia is ``(1 - a) / a`` times the diagonal.
    """
    alpha = problem.case.numerics.coupling.velocity_relaxation
    if workspace.pseudo_step is None:
        return (1.0 / alpha - 1.0) * equation.diagonal
    mass = problem.case.fluid.density * problem.mesh.cell_volume
    ratio = workspace.first_residual / max(workspace.residual, 1e-300)
    return np.asarray(workspace.pseudo_step.inertia(equation.diagonal, mass, ratio))


def total_force(problem: Problem, state: State) -> Force | None:
    """Body force of the case plus the forces of all sources."""
    parts = [] if problem.force is None else [problem.force]
    parts += [source.force(s) for source, s in zip(problem.sources, state.sources, strict=True)]
    parts = [part for part in parts if np.any(part.cell)]
    if not parts:
        return None
    return Force(sum((p.cell for p in parts[1:]), parts[0].cell),
                 sum((p.drop for p in parts[1:]), parts[0].drop))


def step(problem: Problem, state: State, workspace: Workspace) -> tuple[State, Record]:
    """One iteration of the steady coupling.

    Returns the new state and the record of the state it started from.
    """
    problem, start = bent(at_levels(problem, state), state), state
    mesh, numerics = problem.mesh, problem.case.numerics
    n, coupling = mesh.n_internal, numerics.coupling
    edge_flux = state.mass_flux[n:]
    gradient = problem.velocity_gradient(state.velocity, state.boundary_velocity)
    edge = boundary_velocity(problem, state.velocity, gradient, edge_flux)
    fields = pressure_fields(problem, state.pressure, edge_flux)
    force = total_force(problem, state)
    equation = momentum(problem, state.velocity, gradient, edge, state.mass_flux)
    net = net_gradient(problem, fields, force)
    residual = equation.rows.residual(state.velocity, mesh.cell_volume, net)
    scale = momentum_scale(problem, equation, state.velocity, net, fields)
    inertia = pseudo_inertia(problem, equation, workspace)
    relaxed = equation.rows.block
    if equation.drag is not None:
        relaxed = relaxed.copy()
        relaxed[:, :3] += (equation.drag.tangent - equation.drag.secant) * mesh.cell_volume[:, None]
    sweeps = Sweeps(problem.pattern, equation.rows.data.astype(np.float32),
                    inverse_blocks(relaxed, inertia),
                    numerics.sweeps or workspace.sweeps)
    change = sweeps(residual)
    if numerics.sweeps is None and sweeps_are_due(state.iteration):
        whole = relaxed.copy()
        whole[:, :3] += inertia[:, None]
        left = replace(equation.rows, block=whole, rhs=residual).residual(change)
        needed = sweeps_needed(sweeps.count, *(counted(problem, equation, part)
                                               for part in (residual, left)))
        workspace.sweeps = min(needed, coupling.most_sweeps)
    sources, misfit, pressure = [], 0.0, state.pressure
    for source, own in zip(problem.sources, state.sources, strict=True):
        part = source.correct(own, problem, state, change, sweeps)
        sources.append(part.own)
        change, misfit = part.change, max(misfit, part.misfit)
        if part.pressure is not None:
            pressure = pressure + part.pressure
    velocity = state.velocity + change
    # The fluxes keep the forces and pressures of before: what sources change of both balances.
    state = replace(state, velocity=velocity, pressure=pressure, sources=tuple(sources))
    edge = boundary_velocity(problem, velocity, gradient, edge_flux)
    answer = _face_answer(problem, start, gradient, equation, inertia)
    flux = interpolated_flux(problem, velocity, gradient, edge, fields, force, *answer,
                             equation.drag)
    imbalance = net_outflow(problem, flux)
    record_mass = mass_residual(problem, flux, velocity, fields.cell, imbalance)
    misfit = max(misfit, flow_misfit(problem, flux))
    state, effort = _correct_pressure(problem, state, flux, imbalance, equation, gradient, inertia,
                                      answer, workspace)
    tracer = float(np.einsum("ij,ij->", workspace.tracer, state.velocity))
    record = Record(state.iteration, absolute_sum(counted(problem, equation, residual)) / scale,
                    record_mass, misfit, effort, tracer=tracer)
    workspace.first_residual = workspace.first_residual or record.residual
    workspace.residual = record.residual
    return replace(state, iteration=state.iteration + 1), record


def _face_answer(problem: Problem, start: State, gradient: np.ndarray, equation: Momentum,
                 inertia: np.ndarray) -> FaceAnswer:
    """Diagonal and memory of the face fluxes' interpolation, see :mod:`fv3d.flow.memory`.

    A step of more than half the cells' own time is too large for the time term to matter.  With
    smaller ones a flux without it answers a pressure that alternates from cell to cell more than
    twice as strongly as the correction assumes, and the iteration grows.
    """
    if equation.drag is not None or not (inertia > SMALL_STEP * equation.diagonal).any():
        return equation.diagonal, NOTHING
    defect = flux_defect(problem, start.velocity, gradient, start.boundary_velocity,
                         start.mass_flux)
    return (equation.diagonal + inertia,
            defect * memory_share(problem, equation.diagonal, inertia))


def sweeps_are_due(iteration: int) -> bool:
    """Whether the sweeps are measured in this iteration."""
    return iteration in MEASURED_EARLY or iteration % MEASURED_EVERY == 0


def sweeps_needed(count: int, before: np.ndarray, after: np.ndarray) -> int:
    """Even number of sweeps that leaves ``SWEPT_TO`` of a residual, from what ``count`` left."""
    left = np.einsum("ij,ij->", after, after) / max(np.einsum("ij,ij->", before, before), 1e-300)
    if not np.isfinite(left):
        return count
    per_sweep = -0.5 * np.log(max(left, 1e-30)) / count
    wanted = np.log(1.0 / SWEPT_TO) / max(per_sweep, 1e-3)
    return max(2 * int(np.ceil(wanted / 2)), FEWEST_SWEEPS)


def net_gradient(problem: Problem, fields: PressureFields, force: Force | None) -> np.ndarray:
    """(n_cells, 3) pressure gradient less the body force [N/m^3]."""
    if force is None:
        return fields.gradient
    net = np.multiply(force.cell, -problem.case.fluid.density)
    net += fields.gradient
    return net


def _correct_pressure(problem: Problem, state: State, flux: np.ndarray, imbalance: np.ndarray,
                      equation: Momentum, gradient: np.ndarray, inertia: np.ndarray,
                      answer: FaceAnswer, workspace: Workspace) -> tuple[State, int]:
    mesh, numerics = problem.mesh, problem.case.numerics
    n, coupling = mesh.n_internal, numerics.coupling
    d = mesh.cell_volume / coupling.correction_diagonal(equation.diagonal, equation.neighbours,
                                                      inertia)
    zones = problem.zones
    ease = None if zones is None or equation.drag is None \
        else zones.ease(mesh.cell_volume / d, equation.drag)
    matrix, inner, outer = correction_matrix(problem, d, ease)
    result = solve_pressure(problem, workspace, matrix, -imbalance, numerics.pressure_tolerance)
    correction, shift = result.solution, np.zeros(mesh.n_boundary)
    share = workspace.response.share(coupling)
    given = boundary_pressure(problem, state.pressure, None, state.mass_flux[n:])
    if problem.outlets:
        correction, shift = meet_flows(
            problem, flux, correction, outer=outer, solve=lambda rhs: solve_pressure(
                problem, workspace, matrix, rhs, numerics.pressure_tolerance).solution)
        flux[n:] -= outer * shift
        state = replace(state, levels=moved_levels(problem, state.levels, share * shift))
        problem = at_levels(problem, state)
    flux = corrected_flux(problem, flux, correction, inner, outer)
    slope = problem.pressure_gradient(correction, shift)
    velocity = lessened(state.velocity, d, slope) if ease is None \
        else state.velocity - ease.cell * slope
    pressure = state.pressure + share * correction
    if workspace.response.fine_steps:
        relaxed = (d if ease is None else ease.cell.mean(axis=1)) / share
        pressure += _fine_supplement(problem, imbalance, equation, answer[0], workspace, (
            share * slope, share * correction,
            boundary_pressure(problem, state.pressure, None, flux[n:]) - given, relaxed))
    if problem.closed:
        pressure -= np.einsum("i,i->", pressure, mesh.cell_volume) / mesh.cell_volume.sum()
    edge = boundary_velocity(problem, velocity, gradient, flux[n:])
    return replace(state, velocity=velocity, pressure=pressure, mass_flux=flux,
                   boundary_velocity=edge), result.iterations


def _fine_supplement(problem: Problem, imbalance: np.ndarray, equation: Momentum,
                     diagonal: np.ndarray, workspace: Workspace,
                     correction: tuple[np.ndarray, ...]) -> np.ndarray:
    """(n_cells,) change that brings the cell-scale part of the pressure nearer to its end [Pa].

    At the scale of the cells the fluxes answer the pressure with the unrelaxed coefficient only, a
    tenth of the one the correction was computed with; two damped Jacobi steps on what remains of
    the imbalance make up for that.  They change the path, not the solution.

    Parameters
    ----------
    imbalance : (n_cells,) net outflow before the correction [kg/s]
    correction : its slope, cell and boundary values, and velocity per slope
    """
    mesh, zones = problem.mesh, problem.zones
    ease = None if zones is None or equation.drag is None else zones.ease(diagonal, equation.drag)
    coefficients = correction_coefficients(problem, mesh.cell_volume / diagonal, ease)
    unrelaxed = correction_diagonal(problem, *coefficients)
    slope, pressure, edge, relaxed = correction
    left = imbalance + pressure_outflow(problem, *coefficients, slope, pressure, edge, relaxed)
    still, steps = np.zeros(mesh.n_boundary), workspace.response.fine_steps
    change = -steps[0] * left / unrelaxed
    total = change
    for size in steps[1:]:
        left += pressure_outflow(problem, *coefficients, problem.pressure_gradient(change, still),
                                 change, still)
        change = -size * left / unrelaxed
        total = total + change
    return np.asarray(total)


def solve_pressure(problem: Problem, workspace: Workspace, matrix: Any, rhs: np.ndarray,
                   tolerance: float) -> linear.LinearResult:
    """Solve a pressure equation; the hierarchy is reused until iterations rise."""
    multigrid = problem.case.numerics.multigrid
    if workspace.prepared is None:
        workspace.prepared = linear.prepare(matrix, method=multigrid, singular=problem.closed)
        workspace.best_iterations, workspace.setups = 0, workspace.setups + 1
    helped = workspace.prepared if problem.zones is None \
        else deflated(workspace.prepared, matrix, problem.zones.parts)
    result = linear.solve(helped, rhs, matrix=matrix, tolerance=tolerance)
    per_decade = result.iterations / max(-np.log10(max(tolerance, 1e-300)), 0.1)
    if workspace.best_iterations == 0:
        workspace.best_iterations = max(int(np.ceil(per_decade)), 2)
    elif per_decade > REFRESH_AT * workspace.best_iterations:
        workspace.prepared = linear.refresh(workspace.prepared, matrix)
        workspace.best_iterations, workspace.setups = 0, workspace.setups + 1
    return result


def lessened(velocity: np.ndarray, factor: np.ndarray, slope: np.ndarray) -> np.ndarray:
    """(n_cells, 3) velocity less a factor of each cell times a slope."""
    out = np.empty_like(velocity)
    kernels.subtract_scaled(velocity, factor, slope, out)
    return out


def conserve(problem: Problem, state: State, workspace: Workspace, *,
             tolerance: float = 1e-11) -> State:
    """Make the face fluxes conserve mass to rounding by one tight potential correction."""
    mesh, n = problem.mesh, problem.mesh.n_internal
    outer = np.where(free_outlets(problem), problem.orthogonal[n:], 0.0)
    inner = problem.orthogonal[:n]
    matrix = symmetric_matrix(mesh, problem.pattern, inner, outer)
    imbalance = -net_outflow(problem, state.mass_flux)
    prepared = linear.prepare(matrix, singular=problem.closed)
    result = linear.solve(prepared, imbalance, matrix=matrix, tolerance=tolerance)
    flux = corrected_flux(problem, state.mass_flux, result.solution, inner, outer)
    return replace(state, mass_flux=flux)
