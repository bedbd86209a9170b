"""Plane lid-driven square cavity at Reynolds numbers 100 and 1000, 128 x 128 graded cells.

Solved on 32 and 64 cells first, each the start of the next.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

import fv3d

GRADING = fv3d.TwoSided(4)
DEPTH = 0.02


def solve(cells: int, *, reynolds: float = 100.0, tolerance: float = 1e-7,
          start: fv3d.Run | None = None, **methods: object) -> fv3d.Run:
    """The cavity with a number of cells along each side."""
    mesh = fv3d.box((0, 0, 0), (1, 1, DEPTH), cells=(cells, cells, 1),
                    grading=(GRADING, GRADING, None),
                    names={"x_min": "walls", "x_max": "walls", "y_min": "walls", "y_max": "lid",
                           "z_min": "sides", "z_max": "sides"})
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=1.0 / reynolds), boundaries={
        "lid": fv3d.Wall(velocity=(1.0, 0.0, 0.0)), "walls": fv3d.Wall(),
        "sides": fv3d.Symmetry()},
        numerics=fv3d.Numerics(coupling=fv3d.SIMPLEC(velocity_relaxation=0.95), **methods))
    return fv3d.solve_steady(case, start=start, tolerance=tolerance, max_iterations=3000,
                             progress=False)


def extreme(place: np.ndarray, value: np.ndarray, *, sign: float) -> float:
    """Largest ``sign * value`` by the parabola through the largest node and its neighbours."""
    top = int(np.argmax(sign * value))
    near = slice(top - 1, top + 2)
    a, b, c = np.polyfit(place[near] - place[top], value[near], 2)
    return float(c - 0.25 * b**2 / a)


def extremes(run: fv3d.Run) -> list[float]:
    """Extremes of the velocity on the centrelines: least u, greatest v, least v."""
    cells = round(np.sqrt(run.mesh.n_cells))
    nodes = GRADING.nodes(0.0, 1.0, cells)
    along = 0.5 * (nodes[1:] + nodes[:-1])
    middle, depth = np.full(cells, 0.5), np.full(cells, 0.5 * DEPTH)
    u = run.sample(np.stack([middle, along, depth], axis=1)).velocity[:, 0]
    v = run.sample(np.stack([along, middle, depth], axis=1)).velocity[:, 1]
    return [extreme(along, u, sign=-1.0), extreme(along, v, sign=1.0),
            extreme(along, v, sign=-1.0)]


def figures() -> dict[str, float]:
    """Extremes at Reynolds number 100, then at 1000 with two convection schemes."""
    low = high = None
    for cells in (32, 64, 128):
        low = solve(cells, start=low)
    for cells in (32, 64, 128):
        high = solve(cells, reynolds=1000.0, tolerance=1e-6, start=high,
                     convection=fv3d.Central())
    upwind = solve(128, reynolds=1000.0, tolerance=1e-6, start=high)
    found = {"": low, "Re 1000, central: ": high, "Re 1000, second-order upwind: ": upwind}
    names = ("u min on x = 1/2", "v max on y = 1/2", "v min on y = 1/2")
    return {first + name: value for first, run in found.items()
            for name, value in zip(names, extremes(run), strict=True)}


if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
    from judge import main
    main(__file__, figures)
