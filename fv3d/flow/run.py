"""The one loop, and what it returns."""

from __future__ import annotations

import time
import warnings
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from types import MappingProxyType
from typing import Any, Protocol

import numpy as np

from .. import errors
from ..errors import CaseError, DivergenceError, Fv3dWarning, Outcome, as_number
from ..mesh.mesh import Mesh
from ..operators.interpolation import PointInterpolation, point_interpolation
from . import coupling
from .coupling import Record, Workspace, make_workspace
from .equations import PressureFields, pressure_fields
from .problem import Case, Force, Problem, Source, State, make_problem
from .start import start_state


class Monitor(Protocol):
    """Sees every step and may stop the run by returning a sentence."""

    name: str

    def see(self, problem: Problem, state: State, record: Record) -> str | None:
        """Called after each iteration; a non-empty sentence ends the run."""
        ...


@dataclass(frozen=True, eq=False)
class Sample:
    """Values at points: ``velocity`` (n, 3) [m/s] and ``pressure`` (n,) [Pa]."""

    velocity: np.ndarray
    pressure: np.ndarray


@dataclass(frozen=True, eq=False)
class Run:
    """A finished run: fields, history, outcome.

    ``print(run)`` is a short sheet of what was run, how it ended and what it cost.
    """

    problem: Problem = field(repr=False)
    state: State = field(repr=False)
    history: Mapping[str, np.ndarray] = field(repr=False)
    outcome: Outcome
    name: str
    seconds: float = 0.0

    @property
    def case(self) -> Case:
        """The case that was run."""
        return self.problem.case

    @property
    def mesh(self) -> Mesh:
        """Its mesh."""
        return self.problem.mesh

    @property
    def velocity(self) -> np.ndarray:
        """(n_cells, 3) [m/s]."""
        return self.state.velocity

    @property
    def mass_flux(self) -> np.ndarray:
        """(n_faces,) [kg/s]."""
        return self.state.mass_flux

    @cached_property
    def pressure(self) -> np.ndarray:
        """(n_cells,) [Pa], without the part that only balances the artificial force."""
        if not self.guided:
            return self.state.pressure
        return self.state.pressure - self.case.fluid.density * self.force_potential[0]

    @property
    def guided(self) -> bool:
        """Whether sources put in any force."""
        return bool(np.any(self.artificial_force))

    @cached_property
    def source_force(self) -> Force:
        """Force of all sources [m/s^2], as the equations use it."""
        mesh = self.mesh
        parts = [source.force(own) for source, own
                 in zip(self.problem.sources, self.state.sources, strict=True)]
        cell, drop = np.zeros((mesh.n_cells, 3)), np.zeros(mesh.n_faces)
        for part in parts:
            cell, drop = cell + part.cell, drop + part.drop
        return Force(cell, drop)

    @property
    def artificial_force(self) -> np.ndarray:
        """(n_cells, 3) force put in by the sources [m/s^2]."""
        return self.source_force.cell

    @cached_property
    def force_potential(self) -> tuple[np.ndarray, np.ndarray]:
        """Potential [m^2/s^2] of the irrotational part of the artificial force: cells, faces."""
        from .potential import force_potential
        return force_potential(self.problem, self.source_force)

    @cached_property
    def pressure_fields(self) -> PressureFields:
        """Solver's pressure with face values and conservative gradient (force balance included)."""
        return pressure_fields(self.problem, self.state.pressure,
                               self.state.mass_flux[self.mesh.n_internal:])

    @cached_property
    def face_pressure(self) -> np.ndarray:
        """(n_faces,) pressure on the faces [Pa], without the part that balances the force."""
        face = self.pressure_fields.face
        if not self.guided:
            return face
        return face - self.case.fluid.density * self.force_potential[1]

    def velocity_gradient(self) -> np.ndarray:
        """(n_cells, 3, 3) with ``[c, i, j]`` the derivative of component i along axis j [1/s]."""
        return self.problem.velocity_gradient(self.velocity, self.state.boundary_velocity)

    def interpolation(self, points: np.ndarray, *, where: str = "sample(points)",
                      names: list[str] | None = None) -> PointInterpolation:
        """Operator from cell values to points (n, 3) [m]."""
        return point_interpolation(self.mesh, self.problem.velocity_gradient, points, where=where,
                                   names=names)

    def sample(self, points: np.ndarray) -> Sample:
        """Velocity and pressure at points (n, 3) [m].

        Continuous across faces and exact on linear fields.

        Raises
        ------
        CaseError
            A point lies outside the mesh.
        """
        to_points = self.interpolation(points)
        return Sample(to_points(self.velocity, self.state.boundary_velocity),
                      to_points(self.pressure, self.face_pressure[self.mesh.n_internal:]))

    def __str__(self) -> str:
        from .sheet import run_sheet
        return run_sheet(self)


def iterate(case: Case, *, sources: Sequence[Source] = (),
            start: Any = None) -> Iterator[tuple[State, Record]]:
    """Steady iterations without end: the open door the verbs are built on.

    Yields
    ------
    state, record
        The state after each iteration and the record of the one before it.

    Raises
    ------
    CaseError
        The start does not fit.
    """
    problem = make_problem(case, tuple(sources))
    workspace = make_workspace(problem)
    yield from _loop(problem, start_state(problem, start, workspace), workspace)


def _loop(problem: Problem, state: State, workspace: Workspace) -> Iterator[tuple[State, Record]]:
    while True:
        with np.errstate(all="ignore"):
            state, record = coupling.step(problem, state, workspace)
        yield state, record


def solve_steady(case: Case, *, tolerance: float, max_iterations: int,
                 sources: Sequence[Source] = (), start: Any = None, name: str | None = None,
                 monitors: Sequence[Monitor] = (), progress: bool = True) -> Run:
    """Iterate to a steady solution.

    Parameters
    ----------
    case : Case
    tolerance : float
        On the largest of momentum, mass and misfit residual (see :class:`Record`).
    max_iterations : int
    sources : sequence of sources such as :class:`Feedback`
    start : Run (of any mesh), velocity vector, function of points, or None
        None: irrotational flow through the given fluxes.
    name : str, optional
        Default: ``"plain"`` without sources, else ``"guided"``.
    monitors : sequence of Monitor
    progress : bool
        Estimate of memory and time before, bar with time left during the run.

    Returns
    -------
    Run
        Also when the iteration did not converge: see ``run.outcome``; a warning says so.

    Raises
    ------
    CaseError, BoundaryError
        Something does not fit, before the first iteration.
    DivergenceError
        The fields stopped being finite; carries the last finite run.
    """
    _check_limits(tolerance, max_iterations)
    _check_kind(sources, ("start", "force", "correct"), "sources")
    _check_kind(monitors, ("see",), "monitors")
    began = time.perf_counter()
    problem = make_problem(case, tuple(sources))
    workspace = make_workspace(problem)
    state = start_state(problem, start, workspace)
    name = name or ("guided" if sources else "plain")
    records: list[Record] = []
    outcome = None
    from .progress import Progress
    with Progress(problem, name, tolerance, max_iterations, progress) as bar:
        try:
            last = state
            for state, record in _loop(problem, last, workspace):
                if not (np.isfinite(record.residual) and _finite(state)):
                    outcome, state = errors.diverged(len(records) + 1), last
                    break
                records.append(record)
                last = state
                bar.show(record)
                reason = next(filter(None, (m.see(problem, state, record) for m in monitors)), None)
                if record.residual <= tolerance:
                    outcome = errors.converged(len(records), tolerance)
                elif reason:
                    outcome = errors.stopped_by_monitor(len(records), reason)
                elif len(records) >= max_iterations:
                    outcome = errors.iteration_limit(len(records), record.residual, tolerance)
                if outcome:
                    break
        except KeyboardInterrupt:
            outcome, state = errors.interrupted(len(records)), last
    assert outcome is not None
    if outcome.name != "diverged":
        state = coupling.conserve(problem, state, workspace)
    run = Run(problem, state, _history(records), outcome, name, time.perf_counter() - began)
    _report(run)
    return run


def _check_limits(tolerance: float, max_iterations: int) -> None:
    if not 0.0 < as_number(tolerance) < np.inf:
        raise CaseError("The tolerance must be positive.", where="solve_steady(tolerance=)",
                        got=tolerance, remedy="Give 1e-6, say.")
    if not (as_number(max_iterations) >= 1 and as_number(max_iterations) % 1 == 0):
        raise CaseError("The limit of iterations is a whole number from 1.", got=max_iterations,
                        where="solve_steady(max_iterations=)", remedy="Give 2000, say.")


def _check_kind(given: Any, needs: tuple[str, ...], name: str) -> None:
    """Refuse what is no sequence of objects with the methods a source or monitor has."""
    whole = isinstance(given, Sequence) and not isinstance(given, str)
    for one in given if whole else [given]:
        if not whole or isinstance(one, type) or not all(hasattr(one, need) for need in needs):
            raise CaseError(f"The {name} must be a list of objects with the methods "
                            f"{', '.join(needs)}.", where=f"solve_steady({name}=)", got=repr(one),
                            remedy=f"Give {name}=[...], with instances, not classes.")


def _finite(state: State) -> bool:
    return bool(np.isfinite(state.velocity.sum()) and np.isfinite(state.pressure.sum()))


def _history(records: list[Record]) -> Mapping[str, np.ndarray]:
    columns = {
        "iteration": np.array([r.iteration for r in records], dtype=int),
        "momentum": np.array([r.momentum for r in records]),
        "mass": np.array([r.mass for r in records]),
        "misfit": np.array([r.misfit for r in records]),
        "pressure_iterations": np.array([r.pressure_iterations for r in records], dtype=int),
    }
    return MappingProxyType(columns)


def _report(run: Run) -> None:
    if run.outcome.name == "diverged":
        raise DivergenceError("The iteration diverged.", run=run, where=f"run '{run.name}'",
                              got=run.outcome.sentence, remedy=run.outcome.next_step)
    if not run.outcome.good:
        warnings.warn(f"Run '{run.name}' ended with {run.outcome}", Fv3dWarning, stacklevel=3)
    share = reverse_flow_share(run)
    if share > 1e-3:
        warnings.warn(f"Run '{run.name}': {share:.1%} of the outlet flux flows inwards. Move the "
                      "outlet downstream, away from recirculation.", Fv3dWarning, stacklevel=3)


def reverse_flow_share(run: Run) -> float:
    """Inward share of the flux through pressure boundaries."""
    flux = run.state.mass_flux[run.mesh.n_internal:][run.problem.table.pressure_given]
    total = float(np.abs(flux).sum())
    return float(-np.minimum(flux, 0.0).sum() / total) if total > 0 else 0.0


def renamed(run: Run, name: str) -> Run:
    """The same run under another name."""
    return replace(run, name=name)
