"""Readings: place, quantity, value, standard deviation, group; and what a field would read.

A reading is one row of a table: a place with one or several measured quantities.  Each
quantity is one scalar *component*; the arrays ``component_*`` list all of them.
"""

from __future__ import annotations

import os
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import CaseError, ReadingError, as_number, did_you_mean, expect_readings, expect_run
from ..mesh.mesh import Mesh
from ..operators.interpolation import points_inside
from .axes import named_axes, placing
from .quantities import COMPONENT, PRESSURE, SPEED, Component, Pressure, Quantity, Speed
from .table import AXIS_DIRECTION, DIRECTION, PLACE, VALUES, Table, read_table

if TYPE_CHECKING:
    import pandas

@dataclass(frozen=True, eq=False, init=False)
class Readings:
    """A table of readings in SI.

    Parameters
    ----------
    table, places : path or DataFrame
        As for :func:`read_readings`.

    Attributes
    ----------
    point : (n, 3) [m]
    name, group : tuple of str, length n
    time : (n,) [s], NaN where the reading is a mean
    component_place : (m,) int32
        Row of the place of each component.
    component_quantity : (m,) int32
        Position of its quantity in ``quantities``: 0 velocity component, 1 speed, 2 pressure.
    component_direction : (m, 3)
        Unit vector of a velocity component, NaN for speed and pressure.
    component_value, component_std : (m,) [m/s or Pa]

    Raises
    ------
    ReadingError
        The table cannot be used.
    """

    point: np.ndarray
    name: tuple[str, ...]
    group: tuple[str, ...]
    time: np.ndarray
    component_place: np.ndarray
    component_quantity: np.ndarray
    component_direction: np.ndarray
    component_value: np.ndarray
    component_std: np.ndarray

    def __init__(self, table: str | os.PathLike[str] | pandas.DataFrame, *,
                 places: str | os.PathLike[str] | pandas.DataFrame | None = None) -> None:
        _fill(self, **_components(read_table(table, places=places)))

    def __len__(self) -> int:
        return len(self.name)

    def __str__(self) -> str:
        from .sheet import readings_sheet
        return readings_sheet(self)

    def __repr__(self) -> str:
        return (f"Readings({len(self)} places, {self.n_components} components; groups: "
                f"{', '.join(self.groups)})")

    @property
    def n_components(self) -> int:
        """Number m of scalar components."""
        return len(self.component_value)

    @property
    def groups(self) -> tuple[str, ...]:
        """Names of the groups in the order they appear."""
        return tuple(dict.fromkeys(self.group))

    @cached_property
    def quantities(self) -> tuple[tuple[Quantity, np.ndarray], ...]:
        """Component, Speed and Pressure, each with the components (k,) it stands for."""
        which = [np.flatnonzero(self.component_quantity == code).astype(np.int32)
                 for code in (COMPONENT, SPEED, PRESSURE)]
        along = self.component_direction[which[COMPONENT]]
        return tuple(zip((Component(along), Speed(), Pressure()), which, strict=True))

    @cached_property
    def component_label(self) -> tuple[str, ...]:
        """Column name of each component: u, v, w, along, speed or p."""
        labels = np.array(["along", "speed", "p"], dtype=object)[self.component_quantity]
        for axis, unit_vector in AXIS_DIRECTION.items():
            labels[np.all(self.component_direction == unit_vector, axis=1)] = axis
        return tuple(labels)

    def select(self, places: np.ndarray, *, components: np.ndarray | None = None) -> Readings:
        """Readings at some places, optionally with some of their components only.

        Parameters
        ----------
        places : (n,) bool
        components : (m,) bool, optional
            Places that lose all their components are dropped.
        """
        keep = np.asarray(places, dtype=bool)[self.component_place]
        if components is not None:
            keep = keep & components
            held = np.zeros(len(self), dtype=bool)
            held[self.component_place[keep]] = True
            places = places & held
        rows = np.flatnonzero(places)
        number = np.full(len(self), -1)
        number[rows] = np.arange(len(rows))
        return changed(self, point=self.point[rows], name=tuple(self.name[k] for k in rows),
                        group=tuple(self.group[k] for k in rows), time=self.time[rows],
                        component_place=number[self.component_place[keep]],
                        component_quantity=self.component_quantity[keep],
                        component_direction=self.component_direction[keep],
                        component_value=self.component_value[keep],
                        component_std=self.component_std[keep])

    def split(self, *, withheld: str | Sequence[str]) -> tuple[Readings, Readings]:
        """Used and withheld readings, by group.

        Parameters
        ----------
        withheld : names of the groups to withhold

        Raises
        ------
        ReadingError
            A group that is not in the table, or no reading left on one side.
        """
        if not isinstance(withheld, Iterable):
            raise ReadingError("The groups to withhold are given by name.",
                               where="split(withheld=...)", got=repr(withheld),
                               remedy=f"Give a list of names: {', '.join(self.groups)}.")
        asked = [withheld] if isinstance(withheld, str) else list(withheld)
        groups = "groups in the table: " + ", ".join(self.groups)
        for group in asked:
            if group not in self.groups:
                raise ReadingError("A group to withhold is not in the table.",
                                   where="split(withheld=...)", got=repr(group),
                                   remedy=f"Choose among the {groups}."
                                          + did_you_mean(group, self.groups))
        away = np.array([group in asked for group in self.group])
        if away.all() or not away.any():
            raise ReadingError("Both used and withheld readings are needed.",
                               where="split(withheld=...)", got=f"withheld: {asked}",
                               remedy=f"Withhold some but not all of the {groups}.")
        return self.select(~away), self.select(away)

    def velocity_only(self) -> Readings:
        """The same readings without pressures."""
        return self.select(np.ones(len(self), dtype=bool),
                           components=self.component_quantity != PRESSURE)

    def with_values(self, values: np.ndarray) -> Readings:
        """The same readings with other values (m,) in SI; NaN stands for a lost value."""
        values = np.array(values, dtype=np.float64)
        if values.shape != self.component_value.shape or np.isinf(values).any():
            raise ReadingError("New values do not fit the readings.", where="with_values",
                               got=f"shape {values.shape}, {int(np.isinf(values).sum())} infinite",
                               remedy=f"Give {self.n_components} finite values.")
        return changed(self, component_value=values)

    def placed(self, *, rotation: Any = None, shift: Sequence[float] = (0.0, 0.0, 0.0),
               scale: float = 1.0) -> Readings:
        """Take rig axes to mesh axes: point = rotation (scale point) + shift.

        Measured components turn with the axes: after a quarter turn about z a ``u`` is a
        ``v``, after any other turn a component along the turned axis.

        Parameters
        ----------
        rotation : (3, 3) or scipy.spatial.transform.Rotation, optional
        shift : (3,) [m], in mesh axes
        scale : float
            Of lengths only; the velocities stay.

        Raises
        ------
        ReadingError
            The rotation is no rotation, or shift or scale cannot be used.
        """
        matrix, offset = placing(rotation, shift, scale)
        direction, sign = named_axes(self.component_direction @ matrix.T)
        return changed(self, point=scale * self.point @ matrix.T + offset,
                        component_direction=direction, component_value=sign * self.component_value)

    @property
    def timed(self) -> bool:
        """Whether the readings are resolved in time."""
        return bool(np.isfinite(self.time).any())

    def mean(self) -> Readings:
        """Means of readings resolved in time, each place once; others as they are.

        The uncertainty joins that of the mean of a correlated record with the instrument's, see
        :func:`fv3d.measured.records.mean_readings`.

        Raises
        ------
        ReadingError
            Readings of one name at different places.
        """
        from .records import mean_readings
        return mean_readings(self)

    def delayed(self, seconds: float) -> Readings:
        """The same readings on a clock that shows this much more [s].

        Raises
        ------
        ReadingError
            No finite number.
        """
        if not np.isfinite(as_number(seconds)):
            raise ReadingError("A clock is shifted by a finite number of seconds.", got=seconds,
                               where="delayed(seconds)", remedy="Give 0.25, say.")
        return changed(self, time=self.time + as_number(seconds))

    def frame(self) -> pandas.DataFrame:
        """One row per component, in SI: place, quantity, direction, value and std."""
        import pandas as pd
        row = self.component_place
        label = self.component_label
        columns: dict[str, Any] = {"name": [self.name[k] for k in row],
                                   "group": [self.group[k] for k in row]}
        columns |= {f"{axis} [m]": self.point[row, k] for k, axis in enumerate(PLACE)}
        columns |= {"time [s]": self.time[row], "quantity": list(label)}
        columns |= {axis: self.component_direction[:, k] for k, axis in enumerate(DIRECTION)}
        columns |= {"value": self.component_value, "std": self.component_std,
                    "unit": [VALUES[kind].unit for kind in label]}
        return pd.DataFrame(columns)


def read_readings(source: str | os.PathLike[str] | pandas.DataFrame, *,
                  places: str | os.PathLike[str] | pandas.DataFrame | None = None) -> Readings:
    """Readings of a CSV file or a DataFrame; units stand in the header.

    Parameters
    ----------
    source : path or DataFrame
        Columns ``x [mm], y [mm], z [mm]``; any of ``u, v, w, speed, along [m/s], p [Pa]``,
        each with its standard deviation beside it (``u_std [m/s]``); ``nx, ny, nz`` with
        ``along``; ``name``, ``group`` and ``time [s]`` as wanted.  An empty cell means that
        nothing was measured.  Other units: see :mod:`fv3d.measured.units`.
        A reading resolved in time repeats its name, place and group in one row per time.
    places : path or DataFrame, optional
        For a source with one row per time and one column per value, such as ``time [s],
        rake 1 u [m/s]``: the table of places, see :mod:`fv3d.measured.wide`.

    Returns
    -------
    Readings

    Raises
    ------
    ReadingError
        The table cannot be used: what, which row and column, what was got, what to do.
    """
    return Readings(source, places=places)


def predict(readings: Readings, velocity: np.ndarray, *, pressure: np.ndarray) -> np.ndarray:
    """What the instruments would read in a given field.

    Parameters
    ----------
    readings : Readings
    velocity : (n, 3) [m/s], pressure : (n,) [Pa]
        At the places of the readings.

    Returns
    -------
    (m,) array [m/s or Pa], one per component
    """
    value = np.empty(readings.n_components)
    for quantity, which in readings.quantities:
        row = readings.component_place[which]
        value[which] = quantity.value(velocity[row], pressure[row])
    return value


def linearised_direction(readings: Readings, velocity: np.ndarray) -> np.ndarray:
    """(m, 3) derivative of each component with respect to the velocity (n, 3) at its place."""
    direction = np.empty((readings.n_components, 3))
    for quantity, which in readings.quantities:
        direction[which] = quantity.direction(velocity[readings.component_place[which]])
    return direction


def observe(run: Any, readings: Readings) -> np.ndarray:
    """What the instruments would read in a run.

    Parameters
    ----------
    run : Run
    readings : Readings

    Returns
    -------
    (m,) array [m/s or Pa], one per component

    Raises
    ------
    ReadingError
        A reading lies outside the mesh, readings resolved in time, or no table of readings.
    CaseError
        Not a run.
    """
    expect_run(run, "observe(run, readings)")
    expect_readings(readings, "observe(run, readings)")
    if readings.timed:
        raise ReadingError("Readings resolved in time cannot be compared with one field.",
                           where="observe(run, readings)", got="a column 'time'",
                           remedy="Use readings.mean() with a mean or steady run, or give the run "
                                  "in time a ReadingMonitor.")
    try:
        sample = run.sample(readings.point)
    except CaseError:
        check_inside(run.mesh, readings)
        raise
    return predict(readings, sample.velocity, pressure=sample.pressure)


def check_inside(mesh: Mesh, readings: Readings) -> None:
    """Refuse readings outside a mesh.

    Raises
    ------
    ReadingError
        Names the first reading outside.
    """
    try:
        points_inside(mesh, readings.point, where="readings", names=list(readings.name))
    except CaseError as error:
        raise ReadingError(error.what.replace("point(s) lie", "reading(s) lie"),
                           where=error.where, got=error.got, remedy=error.remedy) from None


def _fill(readings: Readings, **parts: Any) -> None:
    for key, part in parts.items():
        if isinstance(part, np.ndarray):
            kind = np.int32 if key in ("component_place", "component_quantity") else np.float64
            part = np.array(part, dtype=kind)
            part.flags.writeable = False
        object.__setattr__(readings, key, part)


def changed(readings: Readings, **parts: Any) -> Readings:
    """The same readings with some attributes replaced."""
    fresh = object.__new__(Readings)
    kept = {key: getattr(readings, key) for key in Readings.__dataclass_fields__}
    _fill(fresh, **(kept | parts))
    return fresh


def _components(table: Table) -> dict[str, Any]:
    """Flatten the columns of a table: place after place, within a place column after column."""
    n = len(table.name)
    numbers = table.numbers
    columns = [column for column in VALUES if column in numbers]
    value = np.stack([numbers[column] for column in columns], axis=1)
    std = np.stack([numbers[f"{column}_std"] for column in columns], axis=1)
    code = {"speed": SPEED, "p": PRESSURE}
    kind = np.array([code.get(column, COMPONENT) for column in columns])
    direction = np.full((n, len(columns), 3), np.nan)
    for k, column in enumerate(columns):
        if column in AXIS_DIRECTION:
            direction[:, k] = AXIS_DIRECTION[column]
        elif column == "along":
            given = np.stack([numbers[axis] for axis in DIRECTION], axis=1)
            with np.errstate(invalid="ignore"):
                direction[:, k] = given / np.linalg.norm(given, axis=1)[:, None]
    row, column_of = np.nonzero(~np.isnan(value))
    turned, sign = named_axes(direction[row, column_of])
    return {"point": np.stack([numbers[axis] for axis in PLACE], axis=1),
            "name": table.name, "group": table.group,
            "time": numbers.get("time", np.full(n, np.nan)),
            "component_place": row, "component_quantity": kind[column_of],
            "component_direction": turned, "component_value": sign * value[row, column_of],
            "component_std": std[row, column_of]}
