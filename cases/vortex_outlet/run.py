"""A vortex carried by a uniform stream out of the domain: what stays behind was reflected.

A vortex without circulation, speed ``S exp((1 - r^2 / R^2) / 2) r / R`` around its centre (Taylor,
G. I. (1918), ARC Reports and Memoranda 598, frozen at one time), starts one length in front of the
outlet; S is a fifth of the stream.  When its centre is five radii beyond the outlet the stream
should be uniform again.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

import fv3d

STREAM, RADIUS, STRENGTH = 1.0, 0.15, 0.2
START, OUTLET = 1.0, 2.0


def vortex(points: np.ndarray) -> np.ndarray:
    """(n, 3) stream with the vortex in front of the outlet [m/s]."""
    arm = points[:, :2] - (START, 0.0)
    turn = STRENGTH / RADIUS * np.exp(0.5 - 0.5 * (arm**2).sum(axis=1) / RADIUS**2)
    return np.stack([STREAM - turn * arm[:, 1], turn * arm[:, 0], np.zeros(len(points))], axis=1)


def figures(cells: int = 40) -> dict[str, float]:
    """Disturbances over the strength of the vortex, before and after it has left."""
    mesh = fv3d.box((0, -1, 0), (OUTLET, 1, 0.1), cells=(2 * cells, 2 * cells, 1))
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=1e-5), boundaries={
        "x_min": fv3d.Inlet((STREAM, 0.0, 0.0)), "x_max": fv3d.Outlet(), "y_min": fv3d.Slip(),
        "y_max": fv3d.Slip(), "z_min": fv3d.Symmetry(), "z_max": fv3d.Symmetry()})
    points = np.array([[0.5, y, 0.05] for y in np.linspace(-0.9, 0.9, 13)])
    watch = fv3d.PointMonitor(points, name="upstream")
    run, disturbed = None, []
    gone = (OUTLET - START + 5.0 * RADIUS) / STREAM
    for end in (0.5, gone):
        run = fv3d.solve_transient(case, time_step=0.4 / cells, end_time=end, progress=False,
                                   start=vortex, monitors=[watch])
        off = np.linalg.norm(run.velocity - (STREAM, 0.0, 0.0), axis=1)
        disturbed.append(float(off.max()) / STRENGTH)
    back = np.abs(run.series["upstream"].velocity - (STREAM, 0.0, 0.0)).max() / STRENGTH
    return {"vortex half-way to the outlet": disturbed[0], "left behind": disturbed[1],
            "felt 1.5 lengths upstream": float(back), "cells": mesh.n_cells}


if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
    from judge import main
    main(__file__, figures)
