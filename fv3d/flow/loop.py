"""The one loop of all runs: it hands the state on until something ends it."""

from __future__ import annotations

import time
import warnings
from collections.abc import Callable, Mapping, Sequence
from types import MappingProxyType
from typing import Any

import numpy as np

from .. import errors
from ..errors import CaseError, DivergenceError, Fv3dWarning, Outcome
from . import coupling
from .coupling import Record, Workspace
from .monitors import Monitor, Series
from .outlets import at_levels
from .problem import Problem, State
from .progress import Progress
from .run import Run, reverse_flow_share

Advance = Callable[[Problem, State, Workspace], tuple[State, Record]]
Stop = Callable[[list[Record]], Outcome | None]


def drive(problem: Problem, state: State, workspace: Workspace, *, advance: Advance, stop: Stop,
          name: str, monitors: Sequence[Monitor], progress: Progress, clock: str) -> Run:
    """Advance a state until ``stop`` or a monitor ends it, the user does, or it diverges.

    Parameters
    ----------
    advance : (problem, state, workspace) -> (state, record)
    stop : list of records -> Outcome or None
    clock : str
        What the history counts: ``"iteration"`` or ``"time"``.

    Raises
    ------
    DivergenceError
        The fields stopped being finite; carries the last finite run.
    """
    began, records, outcome = time.perf_counter(), list[Record](), None
    last = state
    with progress as bar, np.errstate(all="ignore"):
        try:
            while outcome is None:
                state, record = advance(problem, last, workspace)
                if not (np.isfinite(record.residual) and _finite(state)):
                    outcome, state = errors.diverged(len(records) + 1), last
                    break
                records.append(record)
                last = state
                bar.show(record)
                reason = next(filter(None, (m.see(problem, state, record) for m in monitors)), None)
                outcome = stop(records)
                if outcome is None and reason:
                    outcome = errors.stopped_by_monitor(len(records), reason)
        except KeyboardInterrupt:
            outcome, state = errors.interrupted(len(records)), last
    if outcome.name != "diverged":
        state = coupling.conserve(problem, state, workspace)
    run = Run(at_levels(problem, state), state, history(records, clock), outcome, name,
              time.perf_counter() - began, _collected(monitors))
    report(run)
    return run


def _collected(monitors: Sequence[Monitor]) -> Mapping[str, Series]:
    gathered = {m.name: m.series() for m in monitors if hasattr(m, "series")}
    return MappingProxyType(gathered)


def check_kind(given: Any, needs: tuple[str, ...], name: str) -> None:
    """Refuse what is no sequence of objects with the methods a source or monitor has."""
    whole = isinstance(given, Sequence) and not isinstance(given, str)
    for one in given if whole else [given]:
        if not whole or isinstance(one, type) or not all(hasattr(one, need) for need in needs):
            raise CaseError(f"The {name} must be a list of objects with the methods "
                            f"{', '.join(needs)}.", where=f"solve_steady({name}=)", got=repr(one),
                            remedy=f"Give {name}=[...], with instances, not classes.")


def _finite(state: State) -> bool:
    return bool(np.isfinite(state.velocity.sum()) and np.isfinite(state.pressure.sum()))


def history(records: list[Record], clock: str) -> Mapping[str, np.ndarray]:
    """Columns of the records; steady runs count iterations, transient ones also time [s]."""
    columns = {
        "iteration": np.array([r.iteration for r in records], dtype=int),
        "momentum": np.array([r.momentum for r in records]),
        "mass": np.array([r.mass for r in records]),
        "misfit": np.array([r.misfit for r in records]),
        "pressure_iterations": np.array([r.pressure_iterations for r in records], dtype=int),
    }
    if clock == "time":
        columns = {"time": np.array([r.time for r in records]), **columns}
    return MappingProxyType(columns)


def report(run: Run) -> None:
    """Raise or warn where a run did not end well."""
    if run.outcome.name == "diverged":
        raise DivergenceError("The iteration diverged.", run=run, where=f"run '{run.name}'",
                              got=run.outcome.sentence, remedy=run.outcome.next_step)
    if not run.outcome.good:
        warnings.warn(f"Run '{run.name}' ended with {run.outcome}", Fv3dWarning, stacklevel=4)
    share = reverse_flow_share(run)
    if share > 1e-3:
        warnings.warn(f"Run '{run.name}': {share:.1%} of the outlet flux flows inwards. Move the "
                      "outlet downstream, away from recirculation.", Fv3dWarning, stacklevel=4)


