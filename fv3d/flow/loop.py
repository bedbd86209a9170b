"""The one loop of all runs: it hands the state on until something ends it."""

from __future__ import annotations

import signal
import threading
import time
import warnings
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from types import MappingProxyType
from typing import Any

import numpy as np

from .. import errors
from ..errors import CaseError, DivergenceError, Fv3dWarning, Outcome
from . import coupling
from .checkpoint import Beginning
from .coupling import Record, Workspace
from .heap import kept_memory
from .monitors import Monitor, Series
from .outlets import at_levels
from .problem import Problem, State
from .progress import Progress, TimeProgress
from .run import Run, drawing_outlets, reverse_flow_share

Advance = Callable[[Problem, State, Workspace], tuple[State, Record]]
Stop = Callable[[list[Record]], Outcome | None]


def drive(problem: Problem, beginning: Beginning, workspace: Workspace, *, advance: Advance,
          stop: Stop, name: str, monitors: Sequence[Monitor], clock: str,
          progress: Progress | TimeProgress,
          moment: Callable[[Problem, State], Problem] = at_levels) -> Run:
    """Advance a state until ``stop`` or a monitor ends it, the user does, or it diverges.

    Parameters
    ----------
    beginning : Beginning
        State and records to go on from, and how the run is stored on its way.
    advance : (problem, state, workspace) -> (state, record)
    stop : list of records -> Outcome or None
    clock : str
        What the history counts: ``"iteration"`` or ``"time"``.
    moment : (problem, state) -> problem
        The problem as monitors and the run see it with that state.

    Raises
    ------
    DivergenceError
        The fields stopped being finite; carries the last finite run.
    """
    began, records, outcome = time.perf_counter(), beginning.records, None
    last, storing = beginning.state, beginning.storing
    with progress as bar, np.errstate(all="ignore"), kept_memory(), between_steps() as asked:
        try:
            while outcome is None:
                state, record = advance(problem, last, workspace)
                if not (np.isfinite(record.residual) and _finite(state)):
                    outcome, state = errors.diverged(len(records) + 1), last
                    break
                records.append(record)
                last = state
                bar.show(record)
                seen = moment(problem, state) if monitors else problem
                reason = next(filter(None, [m.see(seen, state, record) for m in monitors]), None)
                outcome = stop(records)
                if outcome is None and reason:
                    outcome = errors.stopped_by_monitor(len(records), reason)
                if outcome is None and asked():
                    outcome = errors.interrupted(len(records))
                if storing is not None:
                    storing.after(records, state, workspace, monitors, end=outcome is not None)
        except KeyboardInterrupt:
            outcome, state = errors.interrupted(len(records)), last
    if outcome.name != "diverged":
        state = coupling.conserve(problem, state, workspace)
    run = Run(moment(problem, state), state, history(records, clock), outcome, name,
              beginning.seconds + time.perf_counter() - began, _collected(monitors),
              beginning.before)
    report(run)
    return run


@contextmanager
def between_steps() -> Iterator[Callable[[], bool]]:
    """Lets an interruption from the keyboard wait for the end of the step; a second one does not.

    Yields
    ------
    function that tells whether the user asked for an end
    """
    asked: list[int] = []

    def note(number: int, frame: Any) -> None:
        if asked:
            raise KeyboardInterrupt
        asked.append(number)

    usual = threading.current_thread() is threading.main_thread() and \
        signal.getsignal(signal.SIGINT) is signal.default_int_handler
    if usual:
        signal.signal(signal.SIGINT, note)
    try:
        yield lambda: bool(asked)
    finally:
        if usual:
            signal.signal(signal.SIGINT, signal.default_int_handler)


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
    for name, flow in drawing_outlets(run).items():
        warnings.warn(f"Run '{run.name}': the outlet '{name}' draws {flow:.4g} kg/s in, beside an "
                      "inlet. Check its pressure, or the flows given to the others.",
                      Fv3dWarning, stacklevel=4)
    share = reverse_flow_share(run)
    if share > 1e-3:
        warnings.warn(f"Run '{run.name}': {share:.1%} of the outlet flux flows inwards. Move the "
                      "outlet downstream, away from recirculation.", Fv3dWarning, stacklevel=4)


