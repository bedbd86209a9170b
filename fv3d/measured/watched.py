"""What the instruments would read, step by step of a run."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..errors import expect_readings
from ..flow.coupling import Record
from ..flow.monitors import Keeper
from ..flow.potential import TruePressure
from ..flow.problem import Problem, State
from ..operators.interpolation import PointInterpolation, point_interpolation
from .readings import Readings, check_inside, predict
from .records import records


class ReadingMonitor(Keeper):
    """Computed and measured values of readings at every step.

    Parameters
    ----------
    readings : Readings
        Resolved in time, or not: then the measured values are the same at all steps.
    name : str
        Key in ``run.series``; the series has ``computed`` and ``measured`` (steps, m), in the
        order of ``places.component_value``; measured is nan where the record has a hole.

    Attributes
    ----------
    places : Readings
        Each place once, without time.

    Raises
    ------
    ReadingError
        No readings; at the first step, a reading outside the mesh.
    """

    def __init__(self, readings: Readings, *, name: str) -> None:
        super().__init__(name)
        expect_readings(readings, "ReadingMonitor(readings)")
        self._records = records(readings)
        self._at: tuple[Any, PointInterpolation] | None = None
        self._pressure = TruePressure()

    @property
    def places(self) -> Readings:
        """Each place once, without time."""
        return self._records.places

    def see(self, problem: Problem, state: State, record: Record) -> str | None:
        """Keep one row."""
        mesh, places = problem.mesh, self.places
        if self._at is None or self._at[0] is not mesh:
            check_inside(mesh, places)
            self._at = (mesh, point_interpolation(mesh, problem.velocity_gradient, places.point,
                                                  where=f"ReadingMonitor '{self.name}'"))
        at = self._at[1]
        _, cell, face = self._pressure(problem, state)
        computed = predict(places, at(state.velocity, state.boundary_velocity),
                           pressure=at(cell, face[mesh.n_internal:]))
        value, share = self._records.at(0.0 if np.isnan(state.time) else state.time)
        self.keep(state, computed=computed, measured=np.where(share > 0, value, np.nan))
        return None
