"""Runs in time; one step is :mod:`fv3d.flow.time_step`."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from ..errors import CaseError, Outcome, as_number
from .checkpoint import Checkpoint, begin
from .coupling import Record, Workspace, make_workspace
from .loop import check_kind, drive
from .monitors import Monitor
from .outlets import refuse_flow_outlets
from .problem import Case, Problem, State, make_problem
from .progress import TimeProgress
from .resolution import warn_of_poor_resolution
from .run import Run
from .start import start_state
from .step_size import FixedStep, StepSize
from .time_step import TimeStep, problem_at
from .turbulence import eddies_of
from .zones import refuse_resistances

__all__ = ["TimeStep", "solve_transient"]


def solve_transient(case: Case, *, time_step: float | StepSize, end_time: float,
                    sources: Sequence[Any] = (), start: Any = None, outer_iterations: int = 1,
                    name: str | None = None, monitors: Sequence[Monitor] = (),
                    progress: bool = True, checkpoint: Checkpoint | None = None) -> Run:
    """Follow the flow in time.

    Parameters
    ----------
    case : Case
        Inlets may carry a ``factor`` and the case a ``body_force_factor``, functions of time [s].
    time_step : float [s], or CourantStep
        The local error is of third order in it; Courant numbers around one are usual.
    end_time : float [s]
        Counted from the start field, or on from the time of a transient start run.
    sources : sequence of sources such as :class:`Feedback`
        With readings resolved in time, which are interpolated to every step.
    start : Run, velocity vector, function of points, checkpoint, or None
        None: irrotational flow.  A transient run on the same mesh is continued where it stopped,
        after :func:`read_checkpoint` to the last bit.
    outer_iterations : int
        Repetitions within a step, for large Courant numbers.
    name : str, optional
        Default: ``"transient"`` without sources, else ``"guided"``.
    monitors : sequence of Monitor
        Afterwards in ``run.series`` under their names.
    checkpoint : Checkpoint, optional
        Where and how often the run is stored on its way.

    Returns
    -------
    Run
        ``run.history["time"]`` is the time of each step [s].

    Raises
    ------
    CaseError
        A step or end time that is not positive, a start that does not fit.
    ReadingError
        Readings that cannot be fed.
    DivergenceError
        The fields stopped being finite; carries the last finite run.
    """
    if not isinstance(case, Case):
        raise CaseError("A run in time needs a case.", where="solve_transient(case)",
                        got=repr(case)[:60], remedy="Give Case(mesh, fluid, boundaries=...).")
    sizes = _checked(time_step, end_time, outer_iterations)
    check_kind(monitors, ("see",), "monitors")
    check_kind(sources, (), "sources")
    timed = tuple(getattr(source, "in_time", source) for source in sources)
    check_kind(timed, ("start", "force", "advance"), "sources")
    refuse_flow_outlets(case.boundaries)
    refuse_resistances(case.resistances)
    problem = make_problem(case, timed)
    workspace = make_workspace(problem)
    name = name or ("guided" if timed else "transient")
    beginning = begin(problem, workspace, start=start, checkpoint=checkpoint, clock="time",
                      name=name, fresh=lambda: _fresh(problem, start, workspace),
                      monitors=monitors)
    state = beginning.state
    if not end_time > state.time:
        raise CaseError("The end lies before the start.", where="solve_transient(end_time=)",
                        got=f"{end_time:g} s, start at {state.time:g} s",
                        remedy="Give a later time.")
    last = None if state.older is None else state.older.step
    size = sizes.size(problem, state, last)
    steps = int(np.ceil((end_time - state.time) / size * (1.0 - 1e-12)))
    end = state.time + steps * size if isinstance(sizes, FixedStep) else end_time

    def stop(records: list[Record]) -> Outcome | None:
        span = records[-1].time - beginning.began
        if records[-1].time < end - 1e-6 * span / len(records):
            return None
        return Outcome("finished", f"Reached {records[-1].time:g} s in {len(records)} steps of "
                                   f"{_sizes(records, beginning.began)} s.", "", True)

    run = drive(problem, beginning, workspace, stop=stop, name=name, monitors=monitors,
                clock="time", advance=TimeStep(sizes, end=end, outer=outer_iterations),
                moment=lambda problem, state: eddies_of(problem_at(problem, state.time), state),
                progress=TimeProgress(problem, name, begin=state.time, end=end, steps=steps,
                                      shown=progress))
    warn_of_poor_resolution(run.problem, run.state, name)
    return run


def _checked(time_step: Any, end_time: Any, outer_iterations: Any) -> StepSize:
    if isinstance(time_step, type):
        raise CaseError("The time step is a class, not an object of it.", got=time_step.__name__,
                        where="solve_transient(time_step=)",
                        remedy="Give CourantStep(0.8), with brackets, or seconds.")
    for label, value in (("time_step", time_step), ("end_time", end_time),
                         ("outer_iterations", outer_iterations)):
        if isinstance(value, str):
            raise CaseError("This is a text, not a number.", got=repr(value),
                            where=f"solve_transient({label}=)", remedy="Leave the quotes out.")
    sizes: StepSize = time_step if callable(getattr(time_step, "size", None)) \
        else FixedStep(as_number(time_step))
    for label, value in (("time_step", sizes.seconds if isinstance(sizes, FixedStep) else 1.0),
                         ("end_time", end_time)):
        if not 0.0 < as_number(value) < np.inf:
            raise CaseError("Times must be positive.", where=f"solve_transient({label}=)",
                            got=value, remedy="Give seconds, 0.01 say.")
    if not (as_number(outer_iterations) >= 1 and as_number(outer_iterations) % 1 == 0):
        raise CaseError("The outer iterations are a whole number from 1.", got=outer_iterations,
                        where="solve_transient(outer_iterations=)", remedy="Give 1, or 3.")
    return sizes


def _fresh(problem: Problem, start: Any, workspace: Workspace) -> State:
    """State before the first step; a run in time on the same mesh is continued."""
    goes_on = hasattr(start, "state") and start.mesh is problem.mesh \
        and not np.isnan(start.state.time)
    began = float(start.state.time) if goes_on else 0.0
    state = start_state(problem_at(problem, began), start, workspace)
    if not goes_on:
        return replace(state, time=began, older=None)
    return replace(state, time=began, older=start.state.older, iteration=start.state.iteration)


def _sizes(records: list[Record], began: float) -> str:
    steps = np.diff([began, *(record.time for record in records)])
    least, most = float(steps.min()), float(steps.max())
    return f"{most:g}" if most - least <= 1e-6 * most else f"{least:.3g} to {most:.3g}"
