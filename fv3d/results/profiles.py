"""Values along a straight line."""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..errors import CaseError, Fv3dWarning, as_number, expect_run
from ..flow.run import Run
from ..operators.interpolation import checked_points, locate

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, eq=False)
class Profile:
    """Values along a line; NaN at points outside the mesh.

    Attributes
    ----------
    distance : (n,) from the start [m]
    points : (n, 3) [m]
    velocity : (n, 3) [m/s]
    pressure : (n,) [Pa]
    """

    distance: np.ndarray
    points: np.ndarray
    velocity: np.ndarray
    pressure: np.ndarray

    @property
    def inside(self) -> np.ndarray:
        """(n,) whether each point lies in the mesh."""
        return np.isfinite(self.pressure)

    def frame(self) -> pd.DataFrame:
        """One row per point, units in the headers."""
        import pandas as pd
        columns = {"distance [m]": self.distance}
        columns |= {f"{axis} [m]": self.points[:, k] for k, axis in enumerate("xyz")}
        columns |= {f"{axis} [m/s]": self.velocity[:, k] for k, axis in enumerate("uvw")}
        return pd.DataFrame(columns | {"p [Pa]": self.pressure})


def profile(run: Run, *, start: Sequence[float], end: Sequence[float], count: int,
            gaps: bool = False) -> Profile:
    """Velocity and pressure at equally spaced points of a straight line.

    Parameters
    ----------
    run : Run
    start, end : (3,) [m]
        Both belong to the line.
    count : int
        Number of points, at least two.
    gaps : bool
        Whether points may lie outside the mesh; they carry NaN then, and a warning says how
        many.

    Returns
    -------
    Profile

    Raises
    ------
    CaseError
        Not a run, ends that are no points or coincide, fewer than two points, a point outside
        the mesh where gaps are not allowed, no point inside where they are.
    """
    expect_run(run, "profile(run)")
    ends = [checked_points(point, f"profile({name}=)") for name, point in
            (("start", start), ("end", end))]
    if any(len(point) != 1 for point in ends) or not np.linalg.norm(ends[1] - ends[0]) > 0:
        raise CaseError("A line needs two different ends.", where="profile(start=, end=)",
                        got=f"{start} and {end}", remedy="Give two points [m].")
    if not (as_number(count) >= 2 and as_number(count) % 1 == 0):
        raise CaseError("A profile needs at least two points.", where="profile(count=)", got=count,
                        remedy="Give a whole number, 50 say.")
    share = np.linspace(0.0, 1.0, int(count))
    points = (1.0 - share)[:, None] * ends[0] + share[:, None] * ends[1]
    distance = share * float(np.linalg.norm(ends[1] - ends[0]))
    inside = np.ones(len(points), bool)
    if gaps:
        inside = locate(run.mesh, points) >= 0
        _tell_gaps(inside, points)
    values = run.sample(points[inside])
    velocity, pressure = np.full((len(points), 3), np.nan), np.full(len(points), np.nan)
    velocity[inside], pressure[inside] = values.velocity, values.pressure
    return Profile(distance, points, velocity, pressure)


def _tell_gaps(inside: np.ndarray, points: np.ndarray) -> None:
    if not inside.any():
        raise CaseError("The line does not meet the mesh.", where="profile(start=, end=)",
                        got=f"{points[0].tolist()} to {points[-1].tolist()} m",
                        remedy="Check units and axes.")
    if not inside.all():
        first = points[int(np.argmin(inside))]
        warnings.warn(f"{np.count_nonzero(~inside)} of {len(inside)} points of the profile lie "
                      f"outside the mesh and carry NaN, the first at "
                      f"{np.round(first, 6).tolist()} m.", Fv3dWarning, stacklevel=3)
