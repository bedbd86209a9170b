"""Developed laminar flow in ducts of square and 2:1 section, one period long.

The ends are a periodic pair; the pressure drop that keeps the mean speed is found.  Reynolds
number 100 with the hydraulic diameter; developed flow does not depend on it.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

import fv3d

HEIGHT, MEAN_SPEED, DENSITY, VISCOSITY = 1.0, 1.0, 1.0, 0.01
GRADED = fv3d.TwoSided(2.5)


def duct(width: float, *, cells: tuple[int, int, int], tetra: bool = False) -> fv3d.Run:
    """Flow along x in a duct of given width; cells along x, y and z."""
    length = HEIGHT * cells[0] / cells[1]
    mesh = fv3d.box((0, 0, 0), (length, HEIGHT, width), cells=cells, tetra=tetra,
                    grading=(None, GRADED, GRADED))
    walls = {name: fv3d.Wall() for name in mesh.boundaries if name[0] != "x"}
    case = fv3d.Case(mesh, fv3d.Fluid(density=DENSITY, viscosity=VISCOSITY), boundaries={
        "x_min": fv3d.Periodic("x_max", mean_speed=MEAN_SPEED), **walls})
    return fv3d.solve_steady(case, tolerance=1e-7, max_iterations=2000, progress=False)


def friction_number(run: fv3d.Run) -> float:
    """Darcy friction factor times Reynolds number, from the pressure drop."""
    low, high = run.mesh.points.min(axis=0), run.mesh.points.max(axis=0)
    height, width = (high - low)[1:]
    diameter = 2.0 * height * width / (height + width)
    drop = fv3d.pressure_drop(run, "x_min")
    return 2.0 * drop * diameter**2 / (VISCOSITY * MEAN_SPEED)


def wall_balance(run: fv3d.Run) -> float:
    """Friction of all walls over the driving force, less one."""
    friction = sum(fv3d.force(run, name).friction[0] for name in run.mesh.boundaries)
    driving = fv3d.pressure_drop(run, "x_min") * run.mesh.cell_volume.sum()
    return float(friction / driving - 1.0)


def figures() -> dict[str, float]:
    """Friction numbers and balances."""
    square = duct(HEIGHT, cells=(3, 36, 36))
    flat = duct(2.0 * HEIGHT, cells=(3, 32, 48))
    tetrahedra = duct(HEIGHT, cells=(3, 18, 18), tetra=True)
    budget = fv3d.momentum_budget(tetrahedra)
    return {"f Re, square, hexahedra": friction_number(square),
            "f Re, 2:1, hexahedra": friction_number(flat),
            "f Re, square, tetrahedra": friction_number(tetrahedra),
            "friction over drive - 1": max(map(wall_balance, (square, flat, tetrahedra)), key=abs),
            "momentum left over": float(np.abs(budget.closure).max()) / budget.size}


if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
    from judge import main
    main(__file__, figures)
