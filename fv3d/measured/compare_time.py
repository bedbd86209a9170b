"""Runs in time judged at withheld readings, beside competitors that know no flow physics.

The strong opponent is the last one: fed records carried along by a stream of one speed, which is
fitted to the fed records alone, each left out in turn.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from .. import signals
from ..errors import CaseError, ReadingError, did_you_mean, expect_readings, expect_run
from .readings import Readings
from .records import FEW, Records, records

SPEEDS = np.geomspace(0.3, 3.0, 24)  # of the stream tried, in mean speeds of the fed readings


@dataclass(frozen=True)
class Score:
    """One row: root mean square misfit over time and components, with one standard deviation.

    ``by_group`` of each group of readings; ``in_std`` in standard deviations of the readings;
    ``samples`` how many values were compared.
    """

    rms: float
    std: float
    in_std: float
    samples: int
    by_group: dict[str, float]


@dataclass(frozen=True)
class TimedComparison:
    """Scores by name, runs first, then competitors; prints as a table.

    ``stream`` : speed of the fitted stream [m/s], infinite where none helps, nan without it.
    """

    scores: dict[str, Score]
    stream: float

    def __str__(self) -> str:
        groups = list(next(iter(self.scores.values())).by_group)
        wide = max(len(name) for name in (*self.scores, "misfit in time, rms"))
        lines = [f"{'misfit in time, rms':<{wide}} {'all':>10} {'+-':>9} {'in std':>8} "
                 + " ".join(f"{group[:10]:>10}" for group in groups)]
        lines += [f"{name:<{wide}} {s.rms:10.4g} {s.std:9.2g} {s.in_std:8.3g} "
                  + " ".join(f"{s.by_group[group]:10.4g}" for group in groups)
                  for name, s in self.scores.items()]
        if not np.isnan(self.stream):
            lines.append(f"stream of {self.stream:.4g} m/s fitted to the fed records")
        return "\n".join(lines)


def compare_in_time(runs: Sequence[Any], withheld: Readings, *, name: str,
                    fed: Readings | None = None, begin: float = 0.0) -> TimedComparison:
    """Judge runs in time at withheld velocity readings.

    Parameters
    ----------
    runs : sequence of runs that carried a ``ReadingMonitor(withheld, name=name)``
    withheld : Readings resolved in time
    fed : Readings resolved in time, optional
        Adds competitors: interpolation in space at every time, and the same of records carried by
        a stream; the mean of the first run is always there.
    begin : float
        Start of the time that counts [s].

    Raises
    ------
    CaseError
        No run in time with such a monitor, or other readings in it.
    ReadingError
        Nothing to compare with after ``begin``, or a withheld reading that was fed.
    """
    expect_readings(withheld, "compare_in_time(runs, withheld)")
    places = records(withheld).places
    scores: dict[str, Score] = {}
    for run in runs:
        time, computed, measured = _watched(run, places, name, begin)
        scores[_free(str(run.name), scores)] = _score(computed, measured, places)
        if len(scores) == 1:
            mean = np.broadcast_to(computed.mean(axis=0), computed.shape)
            first = (f"mean of {run.name}", mean, measured, time)
    if not scores:
        raise CaseError("There is no run to judge.", where="compare_in_time(runs, withheld)",
                        got="no runs", remedy="Give a list of runs in time.")
    scores[_free(first[0], scores)] = _score(first[1], first[2], places)
    stream = np.nan
    if fed is not None:
        expect_readings(fed, "compare_in_time(fed=)")
        known = records(fed)
        _check_apart(known.places, places)
        stream, direction = _fit_stream(known, first[3])
        for words, speed in (("interpolation", np.inf), ("carried by a stream", stream)):
            if not np.isnan(speed):
                guess = _carried(known, places, first[3], speed, direction)
                scores[words] = _score(guess, first[2], places)
    return TimedComparison(scores, float(stream))


def _watched(run: Any, places: Readings, name: str, begin: float) -> tuple[np.ndarray, ...]:
    expect_run(run, "compare_in_time(runs, withheld)")
    series = run.series.get(name)
    columns = getattr(series, "columns", {})
    if "computed" not in columns or columns["computed"].shape[1:] != (places.n_components,):
        raise CaseError("The run did not watch these readings.", where=f"run '{run.name}'",
                        got=repr(name), remedy="Give it ReadingMonitor(withheld, name=...)."
                        + did_you_mean(name, run.series))
    if not np.all(np.isfinite(series.time)):
        raise CaseError("An iteration is no run in time.", where=f"run '{run.name}'",
                        got="iterations", remedy="Compare it at readings.mean().")
    counts = series.time >= begin
    if not np.isfinite(columns["measured"][counts]).any():
        raise ReadingError("There is nothing to compare with.", where=f"run '{run.name}'",
                           got=f"no measured value after {begin:g} s",
                           remedy="Check the clocks: see readings.delayed(seconds).")
    return series.time[counts], columns["computed"][counts], columns["measured"][counts]


def _free(name: str, taken: dict[str, Score]) -> str:
    free, number = name, 2
    while free in taken:
        free, number = f"{name} ({number})", number + 1
    return free


def _score(computed: np.ndarray, measured: np.ndarray, places: Readings) -> Score:
    off = computed - measured
    square = off ** 2
    valid = np.isfinite(square)
    if not valid.any():
        return Score(np.nan, np.nan, np.nan, 0, dict.fromkeys(places.groups, np.nan))
    group_of = np.array(places.group)[places.component_place]
    by_group = {group: _root(square[:, group_of == group]) for group in places.groups}
    steps = valid.any(axis=1)
    per_step = np.nansum(square[steps], axis=1) / valid[steps].sum(axis=1)
    spread = signals.mean_value(per_step).std if len(per_step) >= FEW else float(per_step.std())
    rms = _root(square)
    return Score(rms, spread / (2.0 * max(rms, 1e-300)), _root((off / places.component_std) ** 2),
                 int(valid.sum()), by_group)


def _root(square: np.ndarray) -> float:
    kept = square[np.isfinite(square)]
    return float(np.sqrt(kept.mean())) if kept.size else float("nan")


def _check_apart(fed: Readings, withheld: Readings) -> None:
    """No withheld reading at a fed place."""
    taken = {tuple(point): name for point, name in zip(fed.point.tolist(), fed.name, strict=True)}
    for name, point in zip(withheld.name, withheld.point.tolist(), strict=True):
        if tuple(point) in taken:
            raise ReadingError("A withheld reading was fed.", where=f"reading '{name}'",
                               got=f"the place of '{taken[tuple(point)]}'",
                               remedy="Withhold it, or leave it out of the comparison.")


def _alike(one: Readings, k: int, other: Readings) -> np.ndarray:
    """Components of ``other`` that measure what component ``k`` of ``one`` does."""
    same = other.component_quantity == one.component_quantity[k]
    along = np.nan_to_num(other.component_direction) @ np.nan_to_num(one.component_direction[k])
    return np.flatnonzero(same & (np.isnan(one.component_direction[k, 0]) | (along > 1 - 1e-9)))


def _sampled(known: Records, component: int, time: np.ndarray) -> np.ndarray:
    """Record of a component at times (n,); nan in its holes."""
    value = np.full(len(time), np.nan)
    for one in known.stretches[component]:
        inside = (time >= one.first) & (time <= one.last)
        value[inside] = one.value(time[inside])  # type: ignore[arg-type]
    return value


def _carried(known: Records, wanted: Readings, time: np.ndarray, speed: float,
             direction: np.ndarray, *, leave_out: bool = False) -> np.ndarray:
    """(n, m) records carried by a stream and interpolated in space; nan where there are none.

    With ``leave_out`` components at the place itself are not used.
    """
    fed = known.places
    guess = np.full((len(time), wanted.n_components), np.nan)
    for k in range(wanted.n_components):
        point = wanted.point[wanted.component_place[k]]
        sources = _alike(wanted, k, fed)
        points = fed.point[fed.component_place[sources]]
        if leave_out:
            away = np.any(points != point, axis=1)
            sources, points = sources[away], points[away]
        if sources.size == 0:
            continue
        delay = (point - points) @ direction / speed
        guess[:, k] = sum(weight * _sampled(known, source, time - late) for weight, source, late
                          in zip(_weights(points, point), sources, delay, strict=True))
    return guess


def _weights(points: np.ndarray, where: np.ndarray) -> np.ndarray:
    """(n,) shares of values at points (n, 3) in their interpolation to one place.

    Radial basis with the linear kernel and a constant (Duchon 1977); shares of points that
    coincide are equal.
    """
    from scipy.interpolate import RBFInterpolator
    places, number = np.unique(points, axis=0, return_inverse=True)
    number = number.ravel()
    count = np.bincount(number)
    if len(places) == 1:
        return 1.0 / count[number]
    origin, extent = places.mean(axis=0), np.ptp(places, axis=0).max()
    shares = RBFInterpolator((places - origin) / extent, np.eye(len(places)), kernel="linear",
                             degree=0)((where[None] - origin) / extent)[0]
    return np.asarray(shares[number] / count[number])


def _fit_stream(known: Records, time: np.ndarray) -> tuple[float, np.ndarray]:
    """Speed and direction of the stream that foretells fed records from the others best.

    The direction is that of their mean velocity; nan where they do not tell one.
    """
    fed = known.places
    measured = np.column_stack([_sampled(known, k, time) for k in range(fed.n_components)])
    fixed = np.flatnonzero(np.isfinite(fed.component_direction).all(axis=1))
    direction = np.zeros(3)
    for k in fixed:
        if np.isfinite(measured[:, k]).any():
            direction += np.nanmean(measured[:, k]) * fed.component_direction[k]
    count = max(len(set(fed.component_place[fixed].tolist())), 1)
    mean = float(np.linalg.norm(direction)) / count
    if not mean > 0.0 or len(fed) < 2:
        return float("nan"), direction
    direction = direction / np.linalg.norm(direction)
    tried = [np.inf, *(mean * SPEEDS)]
    left = [_root((_carried(known, fed, time, speed, direction, leave_out=True) - measured) ** 2)
            for speed in tried]
    if not np.isfinite(left).any():
        return float("nan"), direction
    return float(tried[int(np.nanargmin(left))]), direction
