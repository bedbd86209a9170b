"""Readings in the plane of an inlet turned into the table its boundary condition takes."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from ..errors import ReadingError
from ..flow.inlets import InletTable
from .quantities import COMPONENT, SPEED
from .readings import Readings


def inlet_table(source: Any, *, unmeasured: Sequence[float] | None = None,
                direction: Sequence[float] | None = None) -> InletTable:
    """Table of an inlet from velocity readings, units converted at the door.

    Parameters
    ----------
    source : Readings, or a path or DataFrame as for :func:`read_readings`
        Readings in or near the plane of the inlet, one velocity at each place.
    unmeasured : (3,) velocity [m/s], optional
        Stands for the directions that were not measured, such as ``(0, 0, 0)`` for cross-flow
        that is known to be small.  Without it every place needs all three components.
    direction : (3,), optional
        The direction of readings of the speed alone.

    Returns
    -------
    InletTable
        For ``Inlet(velocity=...)``.

    Raises
    ------
    ReadingError
        Readings at several times, a place without velocity, a direction that was not measured
        and not stated, components along directions that nearly coincide.
    BoundaryError
        Fewer than two places.
    """
    readings = source if isinstance(source, Readings) else Readings(source)
    if len(set(readings.time[np.isfinite(readings.time)])) > 1:
        raise ReadingError("An inlet table holds means, not a record in time.",
                           where="inlet_table(readings)", got=f"{len(readings)} rows with times",
                           remedy="Average over time first.")
    rest = None if unmeasured is None else _three(unmeasured, "unmeasured")
    ahead = None if direction is None else _three(direction, "direction")
    if ahead is not None and not np.linalg.norm(ahead) > 0:
        raise ReadingError("The direction of the inlet is zero.", where="inlet_table(direction=)",
                           got=repr(direction), remedy="Give (1.0, 0.0, 0.0), say.")
    velocity = [_velocity(readings, place, rest, ahead) for place in range(len(readings))]
    return InletTable(readings.point, np.array(velocity), name="inlet_table(readings)")


def _three(value: Any, name: str) -> np.ndarray:
    try:
        vector = np.asarray(value, dtype=float)
    except (TypeError, ValueError):
        vector = np.empty(0)
    if vector.shape != (3,) or not np.all(np.isfinite(vector)):
        raise ReadingError(f"The argument {name} is three finite numbers.", got=repr(value),
                           where=f"inlet_table({name}=)", remedy="Give (0.0, 0.0, 0.0), say.")
    return vector


def _velocity(readings: Readings, place: int, rest: np.ndarray | None,
              ahead: np.ndarray | None) -> np.ndarray:
    """(3,) velocity at one place [m/s]."""
    own = readings.component_place == place
    along = own & (readings.component_quantity == COMPONENT)
    speed = own & (readings.component_quantity == SPEED)
    where = f"inlet_table(readings), '{readings.name[place]}'"
    if not along.any() and speed.any():
        if ahead is None:
            raise ReadingError("A speed alone has no direction.", where=where,
                               got="a reading of the speed",
                               remedy="Give direction=, the way the stream enters.")
        return readings.component_value[speed][0] * ahead / np.linalg.norm(ahead)
    if not along.any():
        raise ReadingError("A place of an inlet table has no velocity.", where=where,
                           got="other quantities only", remedy="Leave it out of the table.")
    rows, values = readings.component_direction[along], readings.component_value[along]
    _, share, axes = np.linalg.svd(rows)
    known = share > 1e-3
    if np.any(share <= 0.1 * share[0]) and (np.count_nonzero(known) == len(rows)):
        raise ReadingError("The directions of a place nearly coincide.", where=where,
                           got=f"{len(rows)} components", remedy="Keep one of them.")
    if np.count_nonzero(known) < 3 and rest is None:
        raise ReadingError("A direction of the velocity was not measured.", where=where,
                           got=f"{np.count_nonzero(known)} of three components",
                           remedy="Say what it is: unmeasured=(0.0, 0.0, 0.0), or measure it.")
    found = np.linalg.lstsq(rows, values, rcond=1e-3)[0]
    if rest is not None:
        missing = axes[np.count_nonzero(known):]
        found = found + missing.T @ (missing @ rest)
    return found
