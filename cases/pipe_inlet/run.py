"""Laminar pipe fed by a table of measured points (invented): the stream develops to Poiseuille's.

Reynolds number about 43 with the diameter; eight diameters long, the entrance takes about three.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

import fv3d

FOLDER = Path(__file__).resolve().parent
DIAMETER, LENGTH = 0.02, 0.16
FLUID = fv3d.Fluid(density=1000.0, viscosity=0.02)


def solve(core: int, cells: int) -> fv3d.Run:
    """The flow on a mesh of this fineness."""
    mesh = fv3d.pipe(length=LENGTH, diameter=DIAMETER, cells=cells, core=core, equal_area=True)
    table = fv3d.inlet_table(FOLDER / "inlet.csv")
    case = fv3d.Case(mesh, FLUID, boundaries={
        "inlet": fv3d.Inlet(table), "outlet": fv3d.Outlet(0.0), "wall": fv3d.Wall()})
    return fv3d.solve_steady(case, tolerance=1e-7, max_iterations=1500, progress=False)


def figures(core: int = 5, cells: int = 32) -> dict[str, float]:
    """Peak, shape and friction of the stream where it has developed."""
    run = solve(core, cells)
    mesh = run.mesh
    rate = fv3d.flow_rate(run, "outlet")
    mean = rate / (0.25 * np.pi * DIAMETER**2)
    line = fv3d.profile(run, start=(0.0, -0.0099, 0.14), end=(0.0, 0.0099, 0.14), count=67)
    exact = 2.0 * mean * (1.0 - (2.0 * line.points[:, 1] / DIAMETER)**2)
    axis = fv3d.profile(run, start=(0, 0, 0.11), end=(0, 0, 0.15), count=21)
    slope = np.polyfit(axis.points[:, 2], axis.pressure, 1)[0]
    reynolds = FLUID.density * mean * DIAMETER / FLUID.viscosity
    factor = -slope * DIAMETER / (0.5 * FLUID.density * mean**2)
    split = fv3d.flow_split(run)
    return {"peak over mean speed": float(axis.velocity[-1, 2] / mean),
            "f Re (Darcy)": factor * reynolds,
            "profile off the parabola, rms over peak":
                float(np.sqrt(np.mean((line.velocity[:, 2] - exact)**2)) / (2.0 * mean)),
            "flow left over": split.imbalance / rate, "Re": reynolds, "cells": mesh.n_cells}


if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
    from judge import main
    main(__file__, figures)
