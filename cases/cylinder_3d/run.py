"""Steady flow past a cylinder across a square channel, Reynolds number 20 (3D-1Z).

Benchmark of Schaefer and Turek (1996).  Half of the channel is computed, its middle plane
z = 0.205 m is a plane of symmetry.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

import fv3d

HEIGHT, DIAMETER, PEAK_SPEED = 0.41, 0.1, 0.45
MEAN_SPEED = 4.0 / 9.0 * PEAK_SPEED
CHANNEL = {"length": 2.5, "height": HEIGHT, "depth": 0.5 * HEIGHT, "centre": (0.5, 0.2),
           "diameter": DIAMETER}


def inflow(points: np.ndarray) -> np.ndarray:
    """(n, 3) velocity at points of the inlet [m/s]."""
    _, y, z = points.T
    velocity = np.zeros_like(points)
    velocity[:, 0] = 16.0 * PEAK_SPEED * y * z * (HEIGHT - y) * (HEIGHT - z) / HEIGHT**4
    return velocity


def half_channel(**options: object) -> fv3d.Mesh:
    """Half of the channel; ``sides`` at z = 0, ``middle`` at z = 0.205 m."""
    mesh = fv3d.channel_with_cylinder(**CHANNEL, **options)
    faces = {}
    for name, where in mesh.boundaries.items():
        corners, middle = mesh.face_points[where], mesh.face_centre[where, 2] > 0.25 * HEIGHT
        for part, chosen in (("middle", middle), (name, ~middle)) if name == "sides" else (
                (name, slice(None)),):
            rows = corners[chosen]
            faces[part] = [rows[rows[:, 3] < 0, :3], rows[rows[:, 3] >= 0]]
    blocks = [(kind, conn[np.argsort(cells)]) for kind, conn, cells in mesh.cell_blocks]
    return fv3d.build_mesh(mesh.points, blocks, faces)


def solve(mesh: fv3d.Mesh) -> fv3d.Run:
    """The benchmark on a mesh."""
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=1e-3), boundaries={
        "inlet": fv3d.Inlet(inflow), "outlet": fv3d.Outlet(0.0), "walls": fv3d.Wall(),
        "sides": fv3d.Wall(), "cylinder": fv3d.Wall(), "middle": fv3d.Symmetry()})
    return fv3d.solve_steady(case, tolerance=1e-6, max_iterations=2000, progress=False)


def coefficients(run: fv3d.Run) -> dict[str, float]:
    """Drag and lift coefficient and the pressure difference across the cylinder."""
    dynamic = 0.5 * MEAN_SPEED**2 * DIAMETER * 0.5 * HEIGHT  # of the half that is computed
    drag, lift, _ = fv3d.force(run, "cylinder").total / dynamic
    z = 0.5 * HEIGHT - 1e-6
    front, back = run.sample([[0.45 - 1e-6, 0.2, z], [0.55 + 1e-6, 0.2, z]]).pressure
    return {"c_D": drag, "c_L": lift, "pressure difference": front - back}


def tetrahedra() -> dict[str, float]:
    """Coefficients on tetrahedra."""
    mesh = half_channel(around=48, layers=18, tetra=True, growth=1.12, wake_growth=1.1)
    run = solve(mesh)
    return {f"tetrahedra: {name}": value for name, value in coefficients(run).items()} | {
        "tetrahedra: cells": mesh.n_cells}


def hexahedra() -> dict[str, float]:
    """Coefficients on hexahedra."""
    mesh = half_channel(around=128, layers=20, depth_grading=fv3d.OneSided(8.0), growth=1.1,
                        wake_growth=1.08)
    run = solve(mesh)
    return {f"hexahedra: {name}": value for name, value in coefficients(run).items()} | {
        "hexahedra: cells": mesh.n_cells}


def figures() -> dict[str, float]:
    """Coefficients on both kinds of cells."""
    return hexahedra() | tetrahedra()


if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
    from judge import main
    main(__file__, figures)
