"""Kovasznay's flow behind a grid at Reynolds number 40 (1948), an exact solution.

Velocity given on all sides of -1/2 < x < 1, -1/2 < y < 1/2; three levels of hexahedra shaken by a
tenth of a cell.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

import fv3d

REYNOLDS = 40.0
RATE = REYNOLDS / 2 - np.sqrt(REYNOLDS**2 / 4 + 4 * np.pi**2)
LEVELS = (24, 36, 54)


def exact_velocity(points: np.ndarray) -> np.ndarray:
    """(n, 3) velocity at points (n, 3)."""
    x, y, z = points.T
    decay, angle = np.exp(RATE * x), 2 * np.pi * y
    return np.stack([1 - decay * np.cos(angle), RATE / (2 * np.pi) * decay * np.sin(angle), 0 * z],
                    axis=1)


def exact_pressure(points: np.ndarray) -> np.ndarray:
    """(n,) pressure at points, up to a constant."""
    return -0.5 * np.exp(2 * RATE * points[:, 0])


def solve(cells: int) -> fv3d.Run:
    """The flow on a mesh of 3/2 ``cells`` by ``cells``."""
    flat = fv3d.box((-0.5, -0.5, 0.0), (1.0, 0.5, 1.0 / cells), cells=(3 * cells // 2, cells, 1))
    points, step = flat.points.copy(), 1.0 / cells
    inside = np.all((points[:, :2] > (-0.499, -0.499)) & (points[:, :2] < (0.999, 0.499)), axis=1)
    shake = np.random.default_rng(cells).uniform(-0.1, 0.1, (len(points), 2)) * step
    first = points[:, 2] < 0.5 * step  # both layers of points alike: the flow stays plane
    place = {tuple(p): k for k, p in enumerate(np.round(points[first, :2], 9).tolist())}
    twin = np.array([place[tuple(p)] for p in np.round(points[:, :2], 9).tolist()])
    points[inside, :2] += shake[np.flatnonzero(first)[twin]][inside]
    blocks = [(kind, conn[np.argsort(order)]) for kind, conn, order in flat.cell_blocks]
    faces = {name: [flat.face_points[where]] for name, where in flat.boundaries.items()}
    mesh = fv3d.build_mesh(points, blocks, faces)
    sides = {name: fv3d.Symmetry() if name[0] == "z" else fv3d.Inlet(exact_velocity)
             for name in mesh.boundaries}
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=1.0 / REYNOLDS), boundaries=sides)
    return fv3d.solve_steady(case, tolerance=1e-7, max_iterations=2000, progress=False)


def errors(run: fv3d.Run) -> tuple[float, float]:
    """Volume-weighted L2 errors of velocity and of pressure, whose mean is taken out."""
    mesh = run.mesh
    velocity = run.velocity - exact_velocity(mesh.cell_centre)
    pressure = run.pressure - exact_pressure(mesh.cell_centre)
    pressure = pressure - np.average(pressure, weights=mesh.cell_volume)
    return (float(np.sqrt(np.average((velocity**2).sum(axis=1), weights=mesh.cell_volume))),
            float(np.sqrt(np.average(pressure**2, weights=mesh.cell_volume))))


def figures() -> dict[str, float]:
    """Observed orders over the levels, by least squares, and the errors of the finest."""
    found = np.array([errors(solve(cells)) for cells in LEVELS])
    sizes = np.log(1.0 / np.array(LEVELS))
    order = [np.polyfit(sizes, np.log(column), 1)[0] for column in found.T]
    return {"order of velocity": order[0], "order of pressure": order[1],
            "velocity error": found[-1, 0], "pressure error": found[-1, 1]}


if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
    from judge import main
    main(__file__, figures)
