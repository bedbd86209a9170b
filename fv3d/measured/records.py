"""Readings resolved in time: one record per component, its value at any time, its mean.

Between samples a record is a piecewise cubic through them, with the slope of the parabola through a
sample and its two neighbours: never a held value, so it does not matter how often it is asked.
Where samples are missing for longer than ``GAP`` usual intervals, the record has a hole; its
*share*, the part of the gain that acts, rises over ``RAMP`` intervals after the first sample of
each stretch and falls over as many before the last one, as ``3 x^2 - 2 x^3``, and is zero in holes
and outside the record.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from .. import signals
from ..errors import ReadingError
from .readings import Readings, changed

GAP = 2.5    # usual intervals between samples; one lost sample is bridged
RAMP = 4.0   # usual intervals, at most a third of the stretch
FEW = 16     # samples below which the correlation of a record cannot be judged


@dataclass(frozen=True, eq=False)
class Stretch:
    """A part of a record without hole: first and last time, ramp [s], value at a time."""

    first: float
    last: float
    ramp: float
    value: Callable[[float], np.ndarray]

    def share(self, time: float) -> float:
        """Part of the gain that acts, 0 to 1."""
        x = min(time - self.first, self.last - time) / self.ramp
        x = min(max(x, 0.0), 1.0)
        return x * x * (3.0 - 2.0 * x)


@dataclass(frozen=True, eq=False)
class Records:
    """Records of all components of some readings.

    ``places`` : Readings, each place once, the values being root mean squares over time.
    ``stretches`` : tuple over components of the stretches of its record; a component of readings
    without time has one stretch without end.
    """

    places: Readings
    stretches: tuple[tuple[Stretch, ...], ...]

    def at(self, time: float) -> tuple[np.ndarray, np.ndarray]:
        """Values (m,) and shares (m,) of the components at a time [s]; value 0 where share is 0."""
        value, share = np.zeros(len(self.stretches)), np.zeros(len(self.stretches))
        for k, stretches in enumerate(self.stretches):
            for one in stretches:
                if one.first <= time <= one.last and (part := one.share(time)) > 0.0:
                    value[k], share[k] = float(one.value(time)), part
        return value, share

    @property
    def span(self) -> tuple[float, float]:
        """First and last time of all records [s]; infinite for readings without time."""
        ends = [(one.first, one.last) for stretches in self.stretches for one in stretches]
        return (min((first for first, _ in ends), default=np.inf),
                max((last for _, last in ends), default=-np.inf))


def records(readings: Readings) -> Records:
    """Records of readings, the same for any order of the rows.

    Raises
    ------
    ReadingError
        Rows of one name that differ in place or group.
    """
    places, member = _grouped(readings)
    if not readings.timed:
        ends = [(Stretch(-np.inf, np.inf, 1.0, _constant(value)),)
                for value in places.component_value]
        return Records(places, tuple(ends))
    time = readings.time[readings.component_place]
    stretches, size = [], np.empty(len(member))
    for i, rows in enumerate(member):
        rows = _in_order(readings, rows, time)
        value = readings.component_value[rows]
        size[i] = np.sqrt(np.mean(value ** 2)) if value.size else 0.0
        stretches.append(_stretches(time[rows], value))
    return Records(places.with_values(size), tuple(stretches))


def mean_readings(readings: Readings) -> Readings:
    """Mean of each component over its record, each place once.

    The variance of a mean is that of the mean of a correlated record
    (:func:`fv3d.signals.mean_value`) plus the mean variance of the instrument, whose error is taken
    as the same for all samples.  Below 16 samples the scatter of the record itself stands for the
    former.

    Parameters
    ----------
    readings : Readings
        Samples of one record should be evenly spaced; they count alike.

    Raises
    ------
    ReadingError
        Rows of one name that differ in place or group.
    """
    if not readings.timed:
        return readings
    places, member = _grouped(readings)
    time = readings.time[readings.component_place]
    value, std = np.empty(len(member)), np.empty(len(member))
    for i, rows in enumerate(member):
        rows = _in_order(readings, rows, time)
        samples = readings.component_value[rows]
        if samples.size == 0:
            value[i], std[i] = np.nan, readings.component_std[member[i][0]]
            continue
        value[i] = samples.mean()
        scatter = signals.mean_value(samples).std if len(samples) >= FEW else float(samples.std())
        std[i] = np.sqrt(np.mean(readings.component_std[rows] ** 2) + scatter ** 2)
    return changed(places.with_values(value), component_std=std)


def _constant(value: float) -> Callable[[float], np.ndarray]:
    return lambda time: np.asarray(value)


def _in_order(readings: Readings, rows: np.ndarray, time: np.ndarray) -> np.ndarray:
    """Components with a value, in the order of their times."""
    rows = rows[np.isfinite(readings.component_value[rows])]
    return rows[np.argsort(time[rows], kind="stable")]


def _grouped(readings: Readings) -> tuple[Readings, list[np.ndarray]]:
    """Each place once, without time, and for each of its components the rows of its record."""
    first = {name: k for k, name in reversed(list(enumerate(readings.name)))}
    leader = np.array([first[name] for name in readings.name])
    for here, there in enumerate(leader.tolist()):
        if readings.group[here] != readings.group[there] or \
                not np.array_equal(readings.point[here], readings.point[there]):
            raise ReadingError("Readings of one name stand at different places or groups.",
                               where=f"reading '{readings.name[here]}'",
                               got=f"{readings.point[there].tolist()} m and "
                                   f"{readings.point[here].tolist()} m",
                               remedy="A record in time stays at its place; give others their own "
                                      "names.")
    keys: dict[tuple[int, int, bytes], list[int]] = {}
    for k, place in enumerate(readings.component_place):
        keys.setdefault((int(leader[place]), int(readings.component_quantity[k]),
                         readings.component_direction[k].tobytes()), []).append(k)
    order = sorted(keys, key=lambda key: keys[key][0])
    leaders = np.array(sorted({key[0] for key in order}), dtype=int)
    lead = np.array([keys[key][0] for key in order], dtype=int)
    once = changed(readings, point=readings.point[leaders],
                   name=tuple(readings.name[k] for k in leaders),
                   group=tuple(readings.group[k] for k in leaders),
                   time=np.full(len(leaders), np.nan),
                   component_place=np.searchsorted(leaders, [key[0] for key in order]),
                   component_quantity=readings.component_quantity[lead],
                   component_direction=readings.component_direction[lead],
                   component_value=readings.component_value[lead],
                   component_std=readings.component_std[lead])
    return once, [np.array(keys[key]) for key in order]


def _stretches(time: np.ndarray, value: np.ndarray) -> tuple[Stretch, ...]:
    if len(time) < 2:
        return ()
    usual = float(np.median(np.diff(time)))
    cuts = np.flatnonzero(np.diff(time) > GAP * usual) + 1
    parts = zip(np.split(time, cuts), np.split(value, cuts), strict=True)
    return tuple(_stretch(t, v, usual) for t, v in parts if len(t) >= 2)


def _stretch(time: np.ndarray, value: np.ndarray, usual: float) -> Stretch:
    from scipy.interpolate import CubicHermiteSpline
    slope = np.gradient(value, time, edge_order=2 if len(time) > 2 else 1)
    length = float(time[-1] - time[0])
    return Stretch(float(time[0]), float(time[-1]), min(RAMP * usual, length / 3.0),
                   CubicHermiteSpline(time, value, slope))
