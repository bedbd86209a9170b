"""Steady and pseudo-transient iteration."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from .. import errors
from ..errors import CaseError, Outcome, as_number
from . import coupling
from .checkpoint import Checkpoint, begin
from .coarser import Agglomerated, Before, CoarserMeshes, run_coarser
from .coupling import Record, make_workspace
from .heap import kept_memory
from .loop import check_kind, drive
from .monitors import Monitor
from .numerics import GlobalStep, LocalStep
from .problem import Case, Source, State, make_problem
from .progress import Progress
from .run import Run
from .start import start_state
from .turbulence import refuse_eddies
from .watch import oscillating, repeating_period


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
    refuse_eddies(problem)
    workspace = make_workspace(problem)
    before = _on_coarser(case, tuple(sources), start, "iterate", False, None)
    state = start_state(problem, before.start, workspace)
    with kept_memory():
        while True:
            with np.errstate(all="ignore"):
                state, record = coupling.step(problem, state, workspace)
            yield state, record


def solve_steady(case: Case, *, tolerance: float, max_iterations: int,
                 sources: Sequence[Source] = (), start: Any = None, name: str | None = None,
                 monitors: Sequence[Monitor] = (), progress: bool = True,
                 checkpoint: Checkpoint | None = None) -> Run:
    """Iterate to a steady solution.

    Parameters
    ----------
    case : Case
    tolerance : float
        On the largest of momentum, mass and misfit residual (see :class:`Record`).
    max_iterations : int
    sources : sequence of sources such as :class:`Feedback`
    start : Run (of any mesh), velocity vector, function of points, checkpoint, coarser meshes, None
        None: irrotational flow through the given fluxes.  After :func:`read_checkpoint` the
        iteration goes on where it was, to the last bit, and counts on.  :class:`CoarserMeshes` or
        :class:`Agglomerated`: from runs on coarser meshes.
    name : str, optional
        Default: ``"plain"`` without sources, else ``"guided"``.
    monitors : sequence of Monitor
    progress : bool
        Estimate of memory and time before, bar with time left during the run.
    checkpoint : Checkpoint, optional
        Where and how often the run is stored on its way.

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
    check_kind(sources, ("start", "force", "correct"), "sources")
    check_kind(monitors, ("see",), "monitors")
    return _iterate_to_end(case, tolerance, max_iterations, tuple(sources), start, name, monitors,
                           progress, checkpoint, None)


def solve_pseudo_transient(case: Case, *, tolerance: float, max_iterations: int,
                           pseudo_step: LocalStep | GlobalStep, sources: Sequence[Source] = (),
                           start: Any = None, name: str | None = None,
                           monitors: Sequence[Monitor] = (), progress: bool = True,
                           checkpoint: Checkpoint | None = None) -> Run:
    """Iterate to a steady solution with pseudo-time steps in place of relaxation factors.

    The steps imitate time but are none: history and monitors count iterations.

    Parameters
    ----------
    pseudo_step : LocalStep or GlobalStep
        Takes the place of the coupling's velocity relaxation; with ``ramp`` it grows as the
        residual falls.
    case, tolerance, max_iterations, sources, start, name, monitors, progress, checkpoint
        As in :func:`solve_steady`.

    Returns
    -------
    Run

    Raises
    ------
    CaseError, BoundaryError, DivergenceError
        As :func:`solve_steady`; also where ``pseudo_step`` is no such object.
    """
    if not isinstance(pseudo_step, LocalStep | GlobalStep):
        raise CaseError("A pseudo-transient run needs its step.", got=repr(pseudo_step),
                        where="solve_pseudo_transient(pseudo_step=)",
                        remedy="Give LocalStep(courant=9.0), or GlobalStep(size=0.01).")
    _check_limits(tolerance, max_iterations)
    check_kind(sources, ("start", "force", "correct"), "sources")
    check_kind(monitors, ("see",), "monitors")
    return _iterate_to_end(case, tolerance, max_iterations, tuple(sources), start, name, monitors,
                           progress, checkpoint, pseudo_step)


def _iterate_to_end(case: Case, tolerance: float, max_iterations: int,
                    sources: tuple[Source, ...], start: Any, name: str | None,
                    monitors: Sequence[Monitor], progress: bool, checkpoint: Checkpoint | None,
                    pseudo_step: LocalStep | GlobalStep | None) -> Run:
    problem = make_problem(case, sources)
    refuse_eddies(problem)
    workspace = make_workspace(problem, pseudo_step)
    name = name or ("guided" if sources else "plain")
    before = _on_coarser(case, sources, start, name, progress, pseudo_step)

    def fresh() -> State:
        return replace(start_state(problem, before.start, workspace), time=float("nan"),
                       older=None)

    def stop(records: list[Record]) -> Outcome | None:
        if records[-1].residual <= tolerance:
            return errors.converged(len(records), tolerance)
        period = repeating_period(records)
        if period is not None:
            return oscillating(period, records)
        if len(records) >= max_iterations:
            return errors.iteration_limit(len(records), records[-1].residual, tolerance)
        return None

    beginning = begin(problem, workspace, start=start, fresh=fresh, checkpoint=checkpoint,
                      clock="iteration", name=name, monitors=monitors, before=before.lines,
                      seconds=before.seconds)
    return drive(problem, beginning, workspace, advance=coupling.step, stop=stop, name=name,
                 monitors=monitors, clock="iteration",
                 progress=Progress(problem, name, tolerance, max_iterations, progress))


def _on_coarser(case: Case, sources: tuple[Source, ...], start: Any, name: str, progress: bool,
                pseudo_step: LocalStep | GlobalStep | None) -> Before:
    """The start as it is, or the last of the runs on its coarser meshes."""
    if not isinstance(start, CoarserMeshes | Agglomerated):
        return Before(start)

    def solve(coarse: Case, fed: tuple[Source, ...], first: Any, label: str) -> Run:
        return _iterate_to_end(coarse, start.tolerance, start.max_iterations, fed, first, label,
                               (), progress, None, pseudo_step)
    return run_coarser(start, case, sources, name=name, solve=solve)


def _check_limits(tolerance: float, max_iterations: int) -> None:
    if isinstance(tolerance, str) or not 0.0 < as_number(tolerance) < np.inf:
        raise CaseError("The tolerance must be positive.", where="solve_steady(tolerance=)",
                        got=repr(tolerance), remedy="Give the number 1e-6, say.")
    whole = as_number(max_iterations) >= 1 and as_number(max_iterations) % 1 == 0
    if isinstance(max_iterations, str) or not whole:
        raise CaseError("The limit of iterations is a whole number from 1.",
                        got=repr(max_iterations), where="solve_steady(max_iterations=)",
                        remedy="Give 2000, say.")


