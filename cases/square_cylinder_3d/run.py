"""Square cylinder across a uniform stream in three dimensions, Reynolds number 2000, with WALE.

The mesh is coarse: what is judged is the shedding frequency.  The start is the plane flow of the
same cylinder at Reynolds number 100 with a disturbance that varies along the span.  Convection is
half central: with nine tenths, speeds once rose to many times the stream's, most likely because
steps then let short central waves grow, as they still may at Courant numbers above one and a half.
Takes about seven minutes on one core; ``record.csv`` and ``record.png`` keep the forces,
``speed.png`` shows the wake.
"""

from __future__ import annotations

import csv
import importlib.util
import sys
from pathlib import Path

import numpy as np

import fv3d

HERE = Path(__file__).resolve().parent
SIDE, SPEED, REYNOLDS = 1.0, 1.0, 2000.0
LENGTH, HEIGHT, SPAN, LAYERS = 28.0, 20.0, 3.5, 14
MIDDLE = (8.5, 10.0)
SETTLED, RECORDED = 40.0, 100.0  # [s]


def plane_flow() -> tuple[fv3d.Run, tuple[float, float]]:
    """Shedding at Reynolds number 100 on a coarse slab, and where its cylinder stands [m]."""
    spec = importlib.util.spec_from_file_location("plane_case",
                                                  HERE.parent / "square_cylinder" / "run.py")
    assert spec and spec.loader
    plane = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(plane)
    return plane.follow("coarse", time_step=0.1, span=60.0, start=plane.leaning), plane.MIDDLE


def make_case() -> fv3d.Case:
    """The cylinder between sides that let the stream slip."""
    low, high = ([m + 0.5 * s * SIDE for m in MIDDLE] for s in (-1, 1))
    mesh = fv3d.channel_with_block(length=LENGTH, height=HEIGHT, depth=SPAN, lower=low, upper=high,
                                   first_layer=0.06, growth=1.15, wake_growth=1.07, coarsest=1.0,
                                   layers=LAYERS)
    return fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=SPEED * SIDE / REYNOLDS), boundaries={
        "inlet": fv3d.Inlet((SPEED, 0.0, 0.0)), "outlet": fv3d.Outlet(), "walls": fv3d.Slip(),
        "sides": fv3d.Symmetry(), "block": fv3d.Wall()}, turbulence=fv3d.WALE(),
        numerics=fv3d.Numerics(convection=fv3d.Blended(0.5)))


def start_field(mesh: fv3d.Mesh) -> np.ndarray:
    """(n_cells, 3) plane flow and a disturbance behind the cylinder [m/s]."""
    plane, middle = plane_flow()
    points = mesh.cell_centre - np.array([*MIDDLE, 0.0]) + np.array([*middle, 0.0])
    points[:, 2] = 0.5 * np.ptp(plane.mesh.points[:, 2])
    velocity = plane.sample(points).velocity
    x, y, z = (mesh.cell_centre - np.array([*MIDDLE, 0.0])).T
    near = 0.1 * SPEED * np.exp(-((x - 2.0) ** 2 + y ** 2) / 4.0)
    for waves in (1, 2, 3, 5):
        phase = np.pi * waves * z / SPAN
        velocity[:, 0] += near * np.cos(phase)
        velocity[:, 2] += near * np.sin(phase) * np.cos(waves * x)
    return velocity


def evenly(time: np.ndarray, values: np.ndarray, start: float) -> tuple[np.ndarray, np.ndarray]:
    """A record from a time on at even steps, as many as it had."""
    grid = np.linspace(start, time[-1], int((time >= start).sum()))
    return grid, np.interp(grid, time, values)


def keep(run: fv3d.Run, drag: np.ndarray, lift: np.ndarray) -> None:
    """The record as a table, the record and the wake as pictures."""
    series = run.series["cylinder"]
    with open(HERE / "record.csv", "w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(["time [s]", "C_D", "C_L"])
        writer.writerows([f"{t:.3f}", f"{d:.4f}", f"{x:.4f}"]
                         for t, d, x in zip(series.time[::4], drag[::4], lift[::4], strict=True))
    fv3d.plot_series(run, HERE / "record.png", name="cylinder")
    fv3d.picture(run, HERE / "speed.png", plane=((0.0, 0.0, 0.5 * SPAN), (0.0, 0.0, 1.0)),
                 title="square cylinder, Reynolds number 2000")


def figures() -> dict[str, float]:
    """Strouhal number and coefficients over the last hundred seconds, some twelve periods."""
    case = make_case()
    velocity = start_field(case.mesh)
    run = fv3d.solve_transient(case, time_step=fv3d.CourantStep(2.0), progress=False,
                               end_time=SETTLED + RECORDED, start=lambda points: velocity,
                               monitors=[fv3d.ForceMonitor("block", name="cylinder")])
    series = run.series["cylinder"]
    drag, lift = (series.force / (0.5 * SPEED ** 2 * SIDE * SPAN))[:, :2].T
    keep(run, drag, lift)
    time, even = evenly(series.time, lift, SETTLED)
    strouhal = fv3d.strouhal_number(fv3d.dominant_frequency(time, even), length=SIDE, speed=SPEED)
    mean = fv3d.mean_value(evenly(series.time, drag, SETTLED)[1])
    across = run.velocity[:, 2]
    return {"St": strouhal.value, "std of St": strouhal.std, "C_D": mean.value,
            "std of C_D": mean.std, "rms of C_L": float(np.sqrt(np.mean(even ** 2))),
            "rms of spanwise velocity": float(np.sqrt(np.average(
                across ** 2, weights=case.mesh.cell_volume))),
            "steps": len(series.time), "cells": case.mesh.n_cells}


if __name__ == "__main__":
    sys.path.insert(0, str(HERE.parent))
    from judge import main
    main(__file__, figures)
