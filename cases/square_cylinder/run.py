"""Square cylinder across a uniform stream, Reynolds number 100, a twentieth of the height blocked.

The wake sheds vortices.  It is developed on a coarse mesh from a start that is not symmetric,
carried to the fine mesh, left to settle there and recorded over ten periods.  Takes about three
minutes on one core.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

import fv3d

SIDE, SPEED, REYNOLDS, DEPTH = 1.0, 1.0, 100.0, 0.5
LENGTH, HEIGHT, MIDDLE = 35.0, 20.0, (10.5, 10.0)
SIZES = {"coarse": {"first_layer": 0.1, "growth": 1.15, "wake_growth": 1.08, "coarsest": 1.0},
         "fine": {"first_layer": 0.03, "growth": 1.1, "wake_growth": 1.05, "coarsest": 0.8}}


def slab(size: str | dict[str, float], length: float = LENGTH) -> fv3d.Mesh:
    """One layer of cells across the cylinder."""
    low, high = ([m + 0.5 * s * SIDE for m in MIDDLE] for s in (-1, 1))
    sizes = SIZES[size] if isinstance(size, str) else size
    return fv3d.channel_with_block(length=length, height=HEIGHT, depth=DEPTH, lower=low,
                                   upper=high, **sizes)


def make_case(mesh: fv3d.Mesh, **methods: object) -> fv3d.Case:
    """The stream between sides that let it slip."""
    return fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=SPEED * SIDE / REYNOLDS), boundaries={
        "inlet": fv3d.Inlet((SPEED, 0.0, 0.0)), "outlet": fv3d.Outlet(), "walls": fv3d.Slip(),
        "sides": fv3d.Symmetry(), "block": fv3d.Wall()}, **methods)


def leaning(points: np.ndarray) -> np.ndarray:
    """(n, 3) stream with a sideways gust behind the cylinder, so that shedding starts at once."""
    x, y = points[:, 0] - MIDDLE[0], points[:, 1] - MIDDLE[1]
    gust = 0.3 * SPEED * np.exp(-((x - 2.0) ** 2 + y ** 2) / 2.0)
    return np.stack([np.full(len(x), SPEED), gust, 0.0 * x], axis=1)


def follow(size: str | dict[str, float], *, time_step: float, span: float,
           start: object) -> fv3d.Run:
    """A run in time, its force kept under ``cylinder`` and its wake under ``wake``."""
    mesh = slab(size)
    wake = np.array([[MIDDLE[0] + 3.0, MIDDLE[1] + 0.5, 0.5 * DEPTH]])
    return fv3d.solve_transient(
        make_case(mesh, numerics=fv3d.Numerics(convection=fv3d.Blended(0.75))),
        time_step=time_step, end_time=span, start=start, progress=False,
        monitors=[fv3d.ForceMonitor("block", name="cylinder"),
                  fv3d.PointMonitor(wake, name="wake")])


def shedding(run: fv3d.Run, span: float) -> dict[str, fv3d.Estimate]:
    """Drag, lift and Strouhal number over the last seconds of a run."""
    series = run.series["cylinder"]
    last = series.time > series.time[-1] - span
    drag, lift = (series.force[last] / (0.5 * SPEED ** 2 * SIDE * DEPTH))[:, :2].T
    frequency = fv3d.dominant_frequency(series.time[last], lift)
    whole = np.floor(frequency.value * span) / frequency.value  # whole periods for the mean
    kept = series.time[last] > series.time[-1] - whole
    return {"drag": fv3d.mean_value(drag[kept]), "lift": fv3d.mean_value(lift[kept] ** 2),
            "strouhal": fv3d.strouhal_number(frequency, length=SIDE, speed=SPEED)}


def developed(size: str = "fine", time_step: float = 0.05, span: float = 130.0) -> fv3d.Run:
    """A run on a mesh whose start was developed on the coarse one."""
    coarse = follow("coarse", time_step=0.1, span=120.0, start=leaning)
    return follow(size, time_step=time_step, span=span, start=coarse)


def figures() -> dict[str, float]:
    """Coefficients over the last ten periods."""
    run = developed()
    found = shedding(run, 70.0)
    return {"C_D": found["drag"].value, "std of C_D": found["drag"].std,
            "rms of C_L": float(np.sqrt(found["lift"].value)), "St": found["strouhal"].value,
            "std of St": found["strouhal"].std, "blockage": SIDE / HEIGHT,
            "cells": run.mesh.n_cells}


if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
    from judge import main
    main(__file__, figures)
