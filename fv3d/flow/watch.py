"""Does an iteration go round in circles?  Looks at records only, never at the fields."""

from __future__ import annotations

import numpy as np

from ..errors import Outcome
from .coupling import Record

LOOK_EVERY = 50     # iterations
WINDOWS = (240, 480, 960, 1920)  # records looked at: a longer period shows in a longer window
ALIKE = 0.85        # correlation with itself one period later
NEARLY = 0.05       # below the best correlation: an earlier peak this good is the period
STANDING = 0.7      # later residuals over earlier ones: below, the run still converges
CYCLES = 3          # whole periods a window must hold


def repeating_period(records: list[Record]) -> float | None:
    """Period in iterations of a run whose residual stands while its field repeats, or None.

    The field is followed by ``Record.tracer``, one number per iteration.
    """
    if len(records) % LOOK_EVERY:
        return None
    for length in WINDOWS:
        if len(records) < length:
            return None
        period = _period_in(records[-length:])
        if period is not None:
            return period
    return None


def _period_in(window: list[Record]) -> float | None:
    """Period in iterations of the records of one window, or None."""
    residual = np.log(np.maximum([r.residual for r in window], 1e-300))
    size = len(window)
    half = size // 2
    if residual[half:].mean() - residual[:half].mean() < np.log(STANDING):
        return None
    tracer = np.array([r.tracer for r in window])
    grid = np.arange(size)
    tracer = tracer - np.polynomial.Polynomial.fit(grid, tracer, 1)(grid)
    power = float(np.einsum("i,i->", tracer, tracer))
    if power == 0.0:
        return None
    longest = size // CYCLES
    alike = np.array([np.corrcoef(tracer[:-k], tracer[k:])[0, 1] for k in range(1, longest + 1)])
    below = np.flatnonzero(alike < 0.0)
    if below.size == 0:
        return None
    later = np.arange(max(below[0], 1), longest - 1)
    tops = later[(alike[later] >= alike[later - 1]) & (alike[later] >= alike[later + 1])
                 & (alike[later] >= max(ALIKE, alike[below[0]:].max() - NEARLY))]
    if tops.size == 0:
        return None
    peak = int(tops[0])  # two periods are as much alike as one
    left, middle, right = alike[peak - 1:peak + 2]
    bend = left - 2 * middle + right
    return float(peak + 1 + (0.5 * (left - right) / bend if bend else 0.0))


def oscillating(period: float, records: list[Record]) -> Outcome:
    """Outcome of an iteration that repeats itself."""
    return Outcome(
        "oscillating",
        f"The residual stands at {records[-1].residual:.1e} and the field repeats itself every "
        f"{period:.1f} iterations (iterations, no time).",
        "Either the flow itself is unsteady, or the iteration makes it so: run solve_transient "
        "from this run, or change the relaxation and see whether the period follows.", False)
