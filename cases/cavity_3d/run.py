"""Lid-driven cubic cavity at Reynolds number 1000: 48 x 48 x 24 graded cells in half of it.

The flow is mirrored in the middle plane z = 1/2, which is a plane of symmetry here.  Solved on
16 and 32 cells first, each the start of the next.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

import fv3d

REYNOLDS = 1000.0
GRADING = fv3d.TwoSided(6)


def solve(cells: int, *, start: fv3d.Run | None = None) -> fv3d.Run:
    """The cavity with an even number of cells along each side."""
    nodes = GRADING.nodes(0.0, 1.0, cells)
    mesh = fv3d.box((0, 0, 0), (1, 1, 0.5), cells=(cells, cells, cells // 2),
                    grading=(GRADING, GRADING, nodes[:cells // 2 + 1]),
                    names={"x_min": "walls", "x_max": "walls", "y_min": "walls", "y_max": "lid",
                           "z_min": "walls", "z_max": "middle"})
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=1.0 / REYNOLDS), boundaries={
        "lid": fv3d.Wall(velocity=(1.0, 0.0, 0.0)), "walls": fv3d.Wall(),
        "middle": fv3d.Symmetry()})
    return fv3d.solve_steady(case, start=start, tolerance=1e-6, max_iterations=2000,
                             progress=False)


def extreme(place: np.ndarray, value: np.ndarray, *, sign: float) -> float:
    """Largest ``sign * value`` by the parabola through the largest node and its neighbours."""
    top = int(np.argmax(sign * value))
    near = slice(top - 1, top + 2)
    a, b, c = np.polyfit(place[near] - place[top], value[near], 2)
    return float(c - 0.25 * b**2 / a)


def figures() -> dict[str, float]:
    """Extremes of the velocity on the centrelines of the middle plane."""
    run = None
    for cells in (16, 32, 48):
        run = solve(cells, start=run)
    nodes = GRADING.nodes(0.0, 1.0, cells)
    along = 0.5 * (nodes[1:] + nodes[:-1])
    half = np.full(cells, 0.5)
    u = run.sample(np.stack([half, along, half], axis=1)).velocity[:, 0]
    v = run.sample(np.stack([along, half, half], axis=1)).velocity[:, 1]
    return {"u min on x = 1/2": extreme(along, u, sign=-1.0),
            "v max on y = 1/2": extreme(along, v, sign=1.0),
            "v min on y = 1/2": extreme(along, v, sign=-1.0)}


if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
    from judge import main
    main(__file__, figures)
