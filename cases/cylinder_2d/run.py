"""Plane steady flow past a cylinder in a channel, Reynolds number 20 (Schaefer and Turek, 1996)."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

import fv3d

HEIGHT, DIAMETER, PEAK_SPEED, DEPTH = 0.41, 0.1, 0.3, 0.02
MEAN_SPEED = 2.0 / 3.0 * PEAK_SPEED
GEOMETRY = {"length": 2.2, "height": HEIGHT, "centre": (0.2, 0.2), "diameter": DIAMETER}


def inflow(points: np.ndarray) -> np.ndarray:
    """(n, 3) parabolic velocity at points of the inlet [m/s]."""
    velocity = np.zeros_like(points)
    velocity[:, 0] = 4.0 * PEAK_SPEED * points[:, 1] * (HEIGHT - points[:, 1]) / HEIGHT**2
    return velocity


def make_case(mesh: fv3d.Mesh, **methods: object) -> fv3d.Case:
    """The benchmark on a mesh."""
    return fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=1e-3), boundaries={
        "inlet": fv3d.Inlet(inflow), "outlet": fv3d.Outlet(0.0), "walls": fv3d.Wall(),
        "cylinder": fv3d.Wall(), "sides": fv3d.Symmetry()}, **methods)


def coefficients(run: fv3d.Run) -> dict[str, float]:
    """Drag and lift coefficient and the pressure difference across the cylinder."""
    depth = float(np.ptp(run.mesh.points[:, 2]))
    dynamic = 0.5 * MEAN_SPEED**2 * DIAMETER * depth
    drag, lift, _ = fv3d.force(run, "cylinder").total / dynamic
    front, back = run.sample([[0.15, 0.2, 0.5 * depth], [0.25, 0.2, 0.5 * depth]]).pressure
    return {"c_D": drag, "c_L": lift, "pressure difference": front - back}


def figures() -> dict[str, float]:
    """Coefficients on about 14 000 cells."""
    mesh = fv3d.channel_with_cylinder(around=192, depth=DEPTH, **GEOMETRY)
    run = fv3d.solve_steady(make_case(mesh), tolerance=1e-7, max_iterations=2000, progress=False)
    return coefficients(run) | {"cells": mesh.n_cells}


if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
    from judge import main
    main(__file__, figures)
