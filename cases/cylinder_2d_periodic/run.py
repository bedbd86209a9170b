"""Plane periodic flow past a cylinder in a channel, Reynolds number 100 (Schaefer and Turek, 1996).

Shedding is developed on a coarse mesh, carried to the fine one, left to settle there and recorded
over ten periods.  Convection is central: in a periodic wake of smooth vortices nothing has to be
kept from overshooting, and the part of second-order upwind would damp them.  Takes about five
minutes on one core.
"""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path
from types import ModuleType

import numpy as np

import fv3d

HERE = Path(__file__).resolve().parent


def steady_case() -> ModuleType:
    """The script of the steady benchmark in the same channel."""
    spec = importlib.util.spec_from_file_location("steady_case",
                                                  HERE.parent / "cylinder_2d" / "run.py")
    assert spec and spec.loader
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


STEADY = steady_case()
FASTER = 5.0  # peak speed 1.5 m/s in place of 0.3 m/s
MEAN_SPEED, DIAMETER, DEPTH = FASTER * STEADY.MEAN_SPEED, STEADY.DIAMETER, STEADY.DEPTH
PERIOD = 0.333  # [s], roughly
WAKE = {"growth": 1.03, "wake_growth": 1.015, "coarsest": 0.41 / 30}  # fine far down the wake too


def inflow(points: np.ndarray) -> np.ndarray:
    """(n, 3) parabolic velocity at points of the inlet [m/s]."""
    return FASTER * np.asarray(STEADY.inflow(points))


def follow(around: int, *, time_step: float, span: float, start: object = None,
           **sizes: float) -> fv3d.Run:
    """A run in time on a mesh with so many cells around the cylinder."""
    mesh = fv3d.channel_with_cylinder(around=around, depth=DEPTH, **STEADY.GEOMETRY, **sizes)
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=1e-3), boundaries={
        "inlet": fv3d.Inlet(inflow), "outlet": fv3d.Outlet(), "walls": fv3d.Wall(),
        "cylinder": fv3d.Wall(), "sides": fv3d.Symmetry()},
        numerics=fv3d.Numerics(convection=fv3d.Central()))
    ends = [[0.15, 0.2, 0.5 * DEPTH], [0.25, 0.2, 0.5 * DEPTH]]
    return fv3d.solve_transient(case, time_step=time_step, end_time=span, start=start,
                                progress=False,
                                monitors=[fv3d.ForceMonitor("cylinder", name="cylinder"),
                                          fv3d.PointMonitor(ends, name="ends")])


def crest(time: np.ndarray, values: np.ndarray) -> tuple[float, float]:
    """Time and height of the highest point, on the parabola through it and its neighbours."""
    i = int(np.clip(np.argmax(values), 1, len(values) - 2))
    t = time[i - 1:i + 2] - time[i]
    bend, slope, level = np.polyfit(t, values[i - 1:i + 2], 2)
    return float(time[i] - slope / (2 * bend)), float(level - slope ** 2 / (4 * bend))


def evaluated(run: fv3d.Run, span: float) -> dict[str, float]:
    """The benchmark's figures from the last seconds of a run."""
    series, ends = run.series["cylinder"], run.series["ends"]
    last = series.time > series.time[-1] - span
    time = series.time[last]
    drag, lift = (series.force[last] / (0.5 * MEAN_SPEED ** 2 * DIAMETER * DEPTH))[:, :2].T
    difference = (ends.pressure[:, 0] - ends.pressure[:, 1])[last]
    frequency = fv3d.dominant_frequency(time, lift)
    strouhal = fv3d.strouhal_number(frequency, length=DIAMETER, speed=MEAN_SPEED)
    early = time < time[-1] - 1.0 / frequency.value
    top, highest = crest(time[early], lift[early])
    half_later = float(np.interp(top + 0.5 / frequency.value, time, difference))
    return {"St": strouhal.value, "std of St": strouhal.std, "c_D,max": crest(time, drag)[1],
            "c_D,min": -crest(time, -drag)[1], "c_L,max": highest,
            "c_L peak to peak": highest + crest(time, -lift)[1],
            "pressure difference": half_later}


def figures(around: int = 224, time_step: float = 0.002) -> dict[str, float]:
    """Coefficients over ten periods on about 28 000 cells."""
    coarse = follow(96, time_step=0.004, span=12 * PERIOD)
    run = follow(around, time_step=time_step, span=16 * PERIOD, start=coarse, **WAKE)
    return evaluated(run, 10 * PERIOD) | {"cells": run.mesh.n_cells}


if __name__ == "__main__":
    sys.path.insert(0, str(HERE.parent))
    from judge import main
    main(__file__, figures)
