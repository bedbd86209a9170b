"""Runs judged at withheld readings, beside competitors that know no flow physics."""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np

from ..errors import Fv3dWarning, ReadingError, did_you_mean, expect_readings, expect_run
from .quantities import COMPONENT, PRESSURE, SPEED
from .readings import Readings, observe
from .table import VALUES

if TYPE_CHECKING:
    import pandas

ALL = "all"
NEIGHBOURS = 64


class Estimator(Protocol):
    """Carries values from places to other places."""

    def __call__(self, points: np.ndarray, values: np.ndarray, *,
                 where: np.ndarray) -> np.ndarray:
        """(k,) values at ``where`` (k, 3) from ``values`` (n,) at ``points`` (n, 3)."""


def spatial_interpolation(points: np.ndarray, values: np.ndarray, *,
                          where: np.ndarray) -> np.ndarray:
    """Radial basis interpolation with the linear kernel and a constant.

    Exact at the points, and the smoothest such field in the sense of Duchon (1977) for this
    kernel.  Lengths count alike along all directions, or are measured by the spread of the
    points along their principal axes: whichever foretells better the points left out in turn.
    Several values at one place are averaged; one place alone gives a constant.

    Parameters
    ----------
    points : (n, 3) [m], values : (n,), where : (k, 3) [m]

    Returns
    -------
    (k,) array in the unit of ``values``
    """
    from scipy.interpolate import RBFInterpolator
    places, number = np.unique(points, axis=0, return_inverse=True)
    number = number.ravel()
    means = np.bincount(number, values) / np.bincount(number)
    if len(places) == 1:
        return np.full(len(where), means[0])
    origin, unit = places.mean(axis=0), _unit(places, means)
    near = NEIGHBOURS if len(places) > 20 * NEIGHBOURS else None
    field = RBFInterpolator((places - origin) @ unit, means, kernel="linear", degree=0,
                            neighbors=near)
    return np.asarray(field((where - origin) @ unit))


def _unit(places: np.ndarray, values: np.ndarray) -> np.ndarray:
    """(3, 3) matrix from lengths [m] to scaled ones, see :func:`spatial_interpolation`.

    What is left out in turn follows from one inverse (Rippa, S. 1999, Adv. Comput. Math. 11,
    193-210).
    """
    n = len(places)
    _, spread, axes = np.linalg.svd(places - places.mean(axis=0))
    spread = np.resize(np.append(spread, [0.0, 0.0]), 3)
    alike = np.eye(3) / np.ptp(places, axis=0).max()
    if n < 4 or n > 20 * NEIGHBOURS:
        return alike
    choices = (alike, axes.T / np.where(spread > 1e-6 * spread[0], spread, spread[0]))
    misfit = []
    for unit in choices:
        scaled = places @ unit
        system = np.ones((n + 1, n + 1))
        system[:n, :n] = -np.linalg.norm(scaled[:, None] - scaled, axis=2)
        system[n, n] = 0.0
        inverse = np.linalg.inv(system)
        weights = inverse[:n, :n] @ values
        misfit.append(float(np.sum((weights / np.diag(inverse)[:n]) ** 2)))
    return choices[int(np.argmin(misfit))]


def nearest_reading(points: np.ndarray, values: np.ndarray, *, where: np.ndarray) -> np.ndarray:
    """Value of the nearest point; of several at one distance their mean.

    Parameters
    ----------
    points : (n, 3) [m], values : (n,), where : (k, 3) [m]

    Returns
    -------
    (k,) array in the unit of ``values``
    """
    found = np.empty(len(where))
    reach = max(float(np.ptp(points, axis=0).max()), 1e-300)
    for k, place in enumerate(where):
        distance = np.linalg.norm(points - place, axis=1)
        found[k] = values[distance <= distance.min() + 1e-9 * reach].mean()
    return found


COMPETITORS: tuple[tuple[str, Estimator], ...] = (
    ("interpolation", spatial_interpolation), ("nearest reading", nearest_reading))


def estimate(fed: Readings, wanted: Readings, *, estimator: Estimator) -> np.ndarray:
    """What the ``wanted`` readings would be, from the ``fed`` readings alone.

    A component is carried over from fed components along the same direction; where there are
    none, from the places with a whole velocity vector; else from its parts in u, v, w.  A
    speed comes from fed speeds and places with a whole vector.

    Parameters
    ----------
    fed, wanted : Readings
    estimator : function of (points, values, where)

    Returns
    -------
    (m,) array [m/s or Pa]
        NaN where the fed readings hold nothing of the kind.
    """
    value = np.full(wanted.n_components, np.nan)
    point = wanted.point[wanted.component_place]
    component = wanted.component_quantity == COMPONENT
    directions = np.round(wanted.component_direction[component], 9)
    for direction in np.unique(directions, axis=0):
        which = np.flatnonzero(component)[np.all(directions == direction, axis=1)]
        value[which] = _component_at(fed, direction, point[which], estimator)
    for code, given in ((SPEED, _fed_speeds(fed)), (PRESSURE, _fed_of(fed, PRESSURE))):
        which = np.flatnonzero(wanted.component_quantity == code)
        if len(which) and len(given[1]):
            value[which] = estimator(*given, where=point[which])
    return value


def _component_at(fed: Readings, direction: np.ndarray, where: np.ndarray,
                  estimator: Estimator) -> np.ndarray:
    points, values = _fed_along(fed, direction)
    if len(values):
        return estimator(points, values, where=where)
    total = np.zeros(len(where))
    if np.count_nonzero(np.abs(direction) > 1e-9) < 2:
        return np.full(len(where), np.nan)
    for share, axis in zip(direction, np.eye(3), strict=True):
        if abs(share) > 1e-9:
            points, values = _fed_along(fed, axis)
            total += share * (estimator(points, values, where=where) if len(values) else np.nan)
    return total


def _fed_along(fed: Readings, direction: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    cosine = fed.component_direction @ direction
    which = np.abs(cosine) > 1.0 - 1e-9
    if not which.any():
        points, vectors = _fed_vectors(fed)
        return points, vectors @ direction
    return (fed.point[fed.component_place[which]],
            np.sign(cosine[which]) * fed.component_value[which])


def _fed_of(fed: Readings, code: int) -> tuple[np.ndarray, np.ndarray]:
    which = fed.component_quantity == code
    return fed.point[fed.component_place[which]], fed.component_value[which]


def _fed_vectors(fed: Readings) -> tuple[np.ndarray, np.ndarray]:
    """Places (k, 3) whose components span all three directions, with the velocity (k, 3)."""
    component = fed.component_quantity == COMPONENT
    rows, vectors = [], []
    for row in range(len(fed)):
        which = component & (fed.component_place == row)
        matrix = fed.component_direction[which]
        if which.sum() >= 3 and np.linalg.matrix_rank(matrix, tol=1e-3) == 3:
            rows.append(row)
            vectors.append(np.linalg.lstsq(matrix, fed.component_value[which])[0])
    return fed.point[rows].reshape(-1, 3), np.array(vectors).reshape(-1, 3)


def _fed_speeds(fed: Readings) -> tuple[np.ndarray, np.ndarray]:
    points, speeds = _fed_of(fed, SPEED)
    places, vectors = _fed_vectors(fed)
    return (np.concatenate([points, places]),
            np.concatenate([speeds, np.linalg.norm(vectors, axis=1)]))


@dataclass(frozen=True, eq=False)
class Comparison:
    """How far runs and competitors are from the withheld readings.

    Attributes
    ----------
    frame : DataFrame
        One row per group, quantity and competitor: ``group, quantity, unit, competitor,
        count, bias, rms, rms_std``; bias is computed minus measured [unit], ``rms_std``
        the root mean square of misfit over standard deviation.
    totals : DataFrame
        The same columns over all groups, one row per unit and competitor.
    skipped : int
        Withheld components without a value.
    """

    frame: pandas.DataFrame
    totals: pandas.DataFrame
    skipped: int

    def rms(self, competitor: str, *, unit: str = "m/s") -> float:
        """Root mean square misfit of a competitor over all withheld readings of a unit.

        Raises
        ------
        ReadingError
            No such competitor or unit in the comparison.
        """
        return self._total(competitor, unit, "rms")

    def rms_std(self, competitor: str, *, unit: str = "m/s") -> float:
        """As :meth:`rms`, each misfit over its standard deviation."""
        return self._total(competitor, unit, "rms_std")

    def _total(self, competitor: str, unit: str, column: str) -> float:
        rows = self.totals[(self.totals.competitor == competitor) & (self.totals.unit == unit)]
        if len(rows) != 1:
            names = self.totals.competitor.unique()
            hint = "" if competitor in names else did_you_mean(competitor, names)
            raise ReadingError("The comparison holds no such total.", where="Comparison",
                               got=f"{competitor!r} in {unit!r}",
                               remedy="Competitors: " + ", ".join(names) + "; units: "
                                      + ", ".join(self.totals.unit.unique()) + "." + hint)
        return float(rows[column].iloc[0])

    def __str__(self) -> str:
        import pandas as pd
        rows = list(pd.concat([self.frame, self.totals]).itertuples())
        wide = max(len("group"), *(len(row.group) for row in rows))
        name = max(len("competitor"), *(len(row.competitor) for row in rows))
        kinds = max(len(f"{row.quantity} [{row.unit}]") for row in rows)
        lines = ["Misfit at withheld readings (computed - measured)",
                 f"{'group':<{wide}}  {'quantity':<{kinds}}  {'competitor':<{name}}  count"
                 f"{'bias':>10}{'rms':>10}{'rms/std':>9}"]
        before: tuple[str, str] = ("", "")
        for row in rows:
            here = (row.group, row.quantity)
            if here != before:
                lines.append("-" * len(lines[1]) if row.group == ALL != before[0] else "")
            group, quantity = here if here != before else ("", "")
            before = here
            kind = "" if not quantity else f"{quantity} [{row.unit}]"
            lines.append(f"{group:<{wide}}  {kind:<{kinds}}  {row.competitor:<{name}}"
                         f"  {row.count:5d}{_figure(row.bias):>10}{_figure(row.rms):>10}"
                         f"{_figure(row.rms_std):>9}")
        if self.skipped:
            lines.append(f"{self.skipped} withheld component(s) without a value left out")
        lines += self._uneven()
        return "\n".join(line.rstrip() for line in lines if line)

    def _uneven(self) -> list[str]:
        """A line for each total whose competitors were not judged at the same components."""
        return [f"totals [{unit}] rest on unlike counts ({rows['count'].min()} to "
                f"{rows['count'].max()}): compare them with care"
                for unit, rows in self.totals.groupby("unit", sort=False)
                if rows["count"].nunique() > 1]


def _figure(number: float) -> str:
    return "-" if np.isnan(number) else f"{number:.3g}"


def compare(runs: Sequence[Any] | Any, withheld: Readings, *,
            fed: Readings | None = None) -> Comparison:
    """Judge runs at withheld readings, beside what the fed readings alone would say there.

    Parameters
    ----------
    runs : run or sequence of runs
    withheld : Readings
        Components without a value (NaN) are left out and counted.
    fed : Readings, optional
        Adds two competitors: spatial interpolation of these readings and the nearest one.

    Returns
    -------
    Comparison

    Raises
    ------
    ReadingError
        No withheld value at all, a fed reading without value, or a withheld reading at the
        place of one that was fed, here or to one of the runs; no table of readings, or a
        reading outside the mesh of a run; neither runs nor fed readings.
    CaseError
        Something among the runs that is no run.
    """
    call = "compare([run, ...], withheld)"
    listed = list(runs) if isinstance(runs, Sequence) and not isinstance(runs, str) else [runs]
    for run in listed:
        expect_run(run, call)
    expect_readings(withheld, call)
    if fed is not None:
        expect_readings(fed, "compare(fed=)")
    elif not listed:
        raise ReadingError("There is nothing to judge.", where=call, got="no runs, no fed readings",
                           remedy="Give at least one run, or fed=.")
    judged = ~np.isnan(withheld.component_value)
    if not judged.any():
        raise ReadingError("There is nothing to compare with.", where="compare(withheld)",
                           got=f"{withheld.n_components} components, none with a value",
                           remedy="Withhold a group that holds values.")
    computed: dict[str, np.ndarray] = {}
    for run in listed:
        computed[_free_name(str(run.name), computed)] = observe(run, withheld)
        for source in getattr(getattr(run, "problem", None), "sources", ()):
            if isinstance(getattr(source, "readings", None), Readings):
                _check_fed(source.readings, withheld)
    if fed is not None:
        _check_fed(fed, withheld)
        for name, estimator in COMPETITORS:
            computed[_free_name(name, computed)] = estimate(fed, withheld, estimator=estimator)
    return _judge(computed, withheld, judged)


def _free_name(name: str, taken: dict[str, np.ndarray]) -> str:
    free, number = name, 2
    while free in taken:
        free, number = f"{name} ({number})", number + 1
    return free


def _check_fed(fed: Readings, withheld: Readings) -> None:
    if np.isnan(fed.component_value).any():
        row = int(fed.component_place[np.argmax(np.isnan(fed.component_value))])
        raise ReadingError("A fed reading has no value.", where=f"compare(fed), '{fed.name[row]}'",
                           got="NaN", remedy="Remove it from the fed readings.")
    places = {(*point, time) for point, time in
              zip(fed.point.tolist(), np.nan_to_num(fed.time).tolist())}
    for name, point, time in zip(withheld.name, withheld.point.tolist(),
                                 np.nan_to_num(withheld.time).tolist()):
        if (*point, time) in places and name not in fed.name:
            warnings.warn(f"The withheld reading '{name}' lies at the place of a fed one: it is "
                          "no independent evidence.", Fv3dWarning, stacklevel=3)
        elif (*point, time) in places:
            raise ReadingError("A withheld reading is also fed.", where=f"compare, '{name}'",
                               got=f"the same place {point}",
                               remedy="Take both from readings.split(withheld=[...]).")


def _judge(computed: dict[str, np.ndarray], withheld: Readings,
           judged: np.ndarray) -> Comparison:
    import pandas as pd
    label = np.array(withheld.component_label)
    group = np.array(withheld.group)[withheld.component_place]
    unit = np.array([VALUES[kind].unit for kind in withheld.component_label])
    rows, totals = [], []
    for one in withheld.groups:
        for kind in VALUES:
            which = judged & (group == one) & (label == kind)
            if which.any():
                rows += [{"group": one, "quantity": kind, "unit": VALUES[kind].unit,
                          **_misfit(name, values, withheld, which)}
                         for name, values in computed.items()]
    for measure, quantity in (("m/s", "velocity"), ("Pa", "p")):
        which = judged & (unit == measure)
        if which.any():
            totals += [{"group": ALL, "quantity": quantity, "unit": measure,
                        **_misfit(name, values, withheld, which)}
                       for name, values in computed.items()]
    return Comparison(pd.DataFrame(rows), pd.DataFrame(totals), int((~judged).sum()))


def _misfit(name: str, values: np.ndarray, withheld: Readings,
            which: np.ndarray) -> dict[str, Any]:
    which = which & np.isfinite(values)
    misfit = values[which] - withheld.component_value[which]
    count = len(misfit)
    if not count:
        return {"competitor": name, "count": 0, "bias": np.nan, "rms": np.nan, "rms_std": np.nan}
    return {"competitor": name, "count": count, "bias": float(misfit.mean()),
            "rms": float(np.sqrt(np.mean(misfit**2))),
            "rms_std": float(np.sqrt(np.mean((misfit / withheld.component_std[which])**2)))}
