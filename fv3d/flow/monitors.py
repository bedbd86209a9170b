"""Monitors see every step, keep what they were asked to keep, and may stop a run."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np

from ..errors import CaseError
from ..operators.interpolation import PointInterpolation, checked_points, point_interpolation
from .coupling import Record
from .equations import boundary_traction, pressure_fields
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
    ``velocity``, ``pressure`` of points; ``force``, ``pressure_force``, ``friction``, ``moment``.
    """

    iteration: np.ndarray
    time: np.ndarray
    columns: dict[str, np.ndarray]

    def __getattr__(self, name: str) -> np.ndarray:
        columns = object.__getattribute__(self, "columns")
        if name in columns:
            return np.asarray(columns[name])
        raise AttributeError(f"this series has {', '.join(columns)}, not '{name}'")


@dataclass(eq=False)
class _Keeper:
    """Rows kept so far."""

    iteration: list[int] = field(default_factory=list)
    time: list[float] = field(default_factory=list)
    rows: list[dict[str, np.ndarray]] = field(default_factory=list)

    def keep(self, state: State, **row: np.ndarray) -> None:
        self.iteration.append(state.iteration)
        self.time.append(state.time)
        self.rows.append(row)

    def series(self) -> Series:
        names = list(self.rows[0]) if self.rows else []
        columns = {name: np.array([row[name] for row in self.rows]) for name in names}
        return Series(np.array(self.iteration, dtype=int), np.array(self.time), columns)


class PointMonitor:
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
        self.points, self.name = checked_points(points, "PointMonitor(points)"), name
        self._keeper = _Keeper()
        self._to_points: tuple[Any, PointInterpolation] | None = None

    def see(self, problem: Problem, state: State, record: Record) -> str | None:
        """Keep one row."""
        if self._to_points is None or self._to_points[0] is not problem.mesh:
            self._to_points = (problem.mesh, point_interpolation(
                problem.mesh, problem.velocity_gradient, self.points,
                where=f"PointMonitor '{self.name}'"))
        n = problem.mesh.n_internal
        at = self._to_points[1]
        face = pressure_fields(problem, state.pressure, state.mass_flux[n:]).face
        self._keeper.keep(state, velocity=at(state.velocity, state.boundary_velocity),
                          pressure=at(state.pressure, face[n:]))
        return None

    def series(self) -> Series:
        """What was kept."""
        return self._keeper.series()


class ForceMonitor:
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
        self.boundary, self.name = boundary, name
        self.centre = np.asarray(centre, dtype=float)
        self._keeper = _Keeper()

    def see(self, problem: Problem, state: State, record: Record) -> str | None:
        """Keep one row."""
        mesh, n = problem.mesh, problem.mesh.n_internal
        if self.boundary not in mesh.boundaries:
            raise CaseError("No such boundary.", where=f"ForceMonitor '{self.name}'",
                            got=repr(self.boundary),
                            remedy=f"The mesh has: {', '.join(mesh.boundaries)}.")
        faces = mesh.boundaries[self.boundary]
        rows = slice(faces.start - n, faces.stop - n)
        fields = pressure_fields(problem, state.pressure, state.mass_flux[n:])
        push = fields.face[faces, None] * mesh.face_area[faces] + fields.warp_force[faces]
        gradient = problem.velocity_gradient(state.velocity, state.boundary_velocity)
        drag = -boundary_traction(problem, state.velocity, gradient, state.boundary_velocity)[rows]
        moment = np.cross(mesh.face_centre[faces] - self.centre, push + drag).sum(axis=0)
        self._keeper.keep(state, force=(push + drag).sum(axis=0), pressure_force=push.sum(axis=0),
                          friction=drag.sum(axis=0), moment=moment)
        return None

    def series(self) -> Series:
        """What was kept."""
        return self._keeper.series()
