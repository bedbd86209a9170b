"""Steady and pseudo-transient iteration."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np

from .. import errors
from ..errors import CaseError, Outcome, as_number
from . import coupling
from .coupling import Record, make_workspace
from .loop import check_kind, drive
from .monitors import Monitor
from .problem import Case, Source, State, make_problem
from .progress import Progress
from .run import Run
from .start import start_state


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
    state = start_state(problem, start, workspace)
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
    check_kind(sources, ("start", "force", "correct"), "sources")
    check_kind(monitors, ("see",), "monitors")
    problem = make_problem(case, tuple(sources))
    workspace = make_workspace(problem)
    state = start_state(problem, start, workspace)
    name = name or ("guided" if sources else "plain")

    def stop(records: list[Record]) -> Outcome | None:
        if records[-1].residual <= tolerance:
            return errors.converged(len(records), tolerance)
        if len(records) >= max_iterations:
            return errors.iteration_limit(len(records), records[-1].residual, tolerance)
        return None

    return drive(problem, state, workspace, advance=coupling.step, stop=stop, name=name,
                 monitors=monitors, clock="iteration",
                 progress=Progress(problem, name, tolerance, max_iterations, progress))


def _check_limits(tolerance: float, max_iterations: int) -> None:
    if not 0.0 < as_number(tolerance) < np.inf:
        raise CaseError("The tolerance must be positive.", where="solve_steady(tolerance=)",
                        got=tolerance, remedy="Give 1e-6, say.")
    if not (as_number(max_iterations) >= 1 and as_number(max_iterations) % 1 == 0):
        raise CaseError("The limit of iterations is a whole number from 1.", got=max_iterations,
                        where="solve_steady(max_iterations=)", remedy="Give 2000, say.")


