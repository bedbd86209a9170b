"""Monitors see every step, keep what they were asked to keep, and may stop a run.

Pressures and forces are without the part that only balances artificial forces, as those of a run.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np

from ..errors import CaseError, did_you_mean
from ..operators.interpolation import PointInterpolation, checked_points, point_interpolation
from .coupling import Record
from .equations import boundary_traction
from .potential import TruePressure
from .problem import Problem, State


class Monitor(Protocol):
    """Sees every step and may stop the run by returning a sentence."""

    name: str

    def see(self, problem: Problem, state: State, record: Record) -> str | None:
        """Called after each iteration or time step; a non-empty sentence ends the run."""
        ...


@dataclass(frozen=True, eq=False)
class Series:
    """What a monitor kept, one row per step.

    ``iteration`` (n,) counts iterations or time steps, ``time`` (n,) is in seconds in transient
    runs and nan in steady ones, where an iteration is no time.  The other columns are attributes:
    ``velocity``, ``pressure`` of points; ``force``, ``pressure_force``, ``friction``, ``moment``;
    ``flow_rate``.
    """

    iteration: np.ndarray
    time: np.ndarray
    columns: dict[str, np.ndarray]

    def __getattr__(self, name: str) -> np.ndarray:
        columns = object.__getattribute__(self, "columns")
        if name in columns:
            return np.asarray(columns[name])
        raise AttributeError(f"this series has {', '.join(columns)}, not '{name}'")


class Keeper:
    """A monitor that keeps one row of arrays per step: iteration, time and columns."""

    def __init__(self, name: str) -> None:
        self.name = name
        self._rows: list[tuple[int, float, dict[str, np.ndarray]]] = []

    def keep(self, state: State, **row: np.ndarray) -> None:
        """Add one row."""
        self._rows.append((state.iteration, state.time, row))

    def series(self) -> Series:
        """What was kept."""
        names = list(self._rows[0][2]) if self._rows else []
        columns = {name: np.array([row[name] for _, _, row in self._rows]) for name in names}
        return Series(np.array([count for count, _, _ in self._rows], dtype=int),
                      np.array([time for _, time, _ in self._rows], dtype=float), columns)

    def restart(self) -> None:
        """Forget what was kept: another run begins."""
        self._rows = []

    def stored(self) -> dict[str, Any]:
        """What was kept, for a checkpoint."""
        series = self.series()
        return {"iteration": series.iteration, "time": series.time, "columns": series.columns}

    def restore(self, stored: dict[str, Any]) -> None:
        """Go on from what a checkpoint kept."""
        columns = stored["columns"]
        self._rows = [(int(count), float(time), {name: column[k] for name, column
                                                 in columns.items()})
                      for k, (count, time) in enumerate(zip(stored["iteration"], stored["time"],
                                                            strict=True))]


class PointMonitor(Keeper):
    """Velocity and pressure at points, by the interpolation of ``run.sample``.

    Parameters
    ----------
    points : (n, 3) [m]
    name : str
        Key in ``run.series``; the series has ``velocity`` (steps, n, 3) and ``pressure``
        (steps, n).

    Raises
    ------
    CaseError
        Points that are no table of finite coordinates, or outside the mesh at the first step.
    """

    def __init__(self, points: Any, *, name: str) -> None:
        super().__init__(name)
        self.points = checked_points(points, "PointMonitor(points)")
        self._to_points: tuple[Any, PointInterpolation] | None = None
        self._pressure = TruePressure()

    def see(self, problem: Problem, state: State, record: Record) -> str | None:
        """Keep one row."""
        if self._to_points is None or self._to_points[0] is not problem.mesh:
            self._to_points = (problem.mesh, point_interpolation(
                problem.mesh, problem.velocity_gradient, self.points,
                where=f"PointMonitor '{self.name}'"))
        at = self._to_points[1]
        _, cell, face = self._pressure(problem, state)
        self.keep(state, velocity=at(state.velocity, state.boundary_velocity),
                  pressure=at(cell, face[problem.mesh.n_internal:]))
        return None


class ForceMonitor(Keeper):
    """Force of the fluid on a boundary, pressure and friction apart, and the moment.

    Parameters
    ----------
    boundary : str
    name : str
        Key in ``run.series``; the series has ``force``, ``pressure_force``, ``friction`` and
        ``moment`` (steps, 3).
    centre : (3,) [m]
        Point the moments are taken about.

    Raises
    ------
    CaseError
        No such boundary, at the first step.
    """

    def __init__(self, boundary: str, *, name: str,
                 centre: Sequence[float] = (0.0, 0.0, 0.0)) -> None:
        super().__init__(name)
        self.boundary = boundary
        self._pressure = TruePressure()
        self.centre = checked_points(np.asarray(centre), "ForceMonitor(centre=)")[0]

    def see(self, problem: Problem, state: State, record: Record) -> str | None:
        """Keep one row."""
        mesh, n = problem.mesh, problem.mesh.n_internal
        faces = boundary_span(problem, self.boundary, f"ForceMonitor '{self.name}'")
        rows = slice(faces.start - n, faces.stop - n)
        fields, _, pressure = self._pressure(problem, state)
        push = pressure[faces, None] * mesh.face_area[faces] + fields.warp_force[faces]
        gradient = problem.velocity_gradient(state.velocity, state.boundary_velocity)
        drag = -boundary_traction(problem, state.velocity, gradient, state.boundary_velocity)[rows]
        moment = np.cross(mesh.face_centre[faces] - self.centre, push + drag).sum(axis=0)
        self.keep(state, force=(push + drag).sum(axis=0), pressure_force=push.sum(axis=0),
                  friction=drag.sum(axis=0), moment=moment)
        return None


class FlowRateMonitor(Keeper):
    """Flow through a boundary, positive out of the domain.

    Parameters
    ----------
    boundary : str
    name : str
        Key in ``run.series``; the series has ``flow_rate`` [m^3/s] and ``mass_flow`` [kg/s], both
        (steps,), and ``back_flow`` [m^3/s], the part that flows against the net flow.

    Raises
    ------
    CaseError
        No such boundary, at the first step.
    """

    def __init__(self, boundary: str, *, name: str) -> None:
        super().__init__(name)
        self.boundary = boundary

    def see(self, problem: Problem, state: State, record: Record) -> str | None:
        """Keep one row."""
        flux = state.mass_flux[boundary_span(problem, self.boundary, f"monitor '{self.name}'")]
        net, gross = flux.sum(), np.abs(flux).sum()
        density = problem.case.fluid.density
        self.keep(state, flow_rate=net / density, mass_flow=net,
                  back_flow=0.5 * (gross - abs(net)) / density)
        return None


def boundary_span(problem: Problem, name: str, where: str) -> slice:
    """Faces of a boundary.

    Raises
    ------
    CaseError
        No such boundary.
    """
    known = problem.mesh.boundaries
    if name not in known:
        raise CaseError("No such boundary.", where=where, got=repr(name),
                        remedy=f"The mesh has: {', '.join(known)}.{did_you_mean(name, known)}")
    return known[name]
