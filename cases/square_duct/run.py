"""Developed laminar flow in a square duct, 40 x 40 cells across.

The inlet first has the velocity profile of the series solution (White, 2006, section 3-3); then
the profile that leaves at the outlet is fed back into the inlet until it no longer changes, so
the flow is developed on this mesh too and friction alone balances the pressure drop.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

import fv3d

SIDE, LENGTH, MEAN_SPEED, DENSITY, VISCOSITY = 1.0, 0.5, 1.0, 1.0, 1.0  # Reynolds number 1
CELLS = (40, 40, 10)
ROUNDS = 4
MEAN_OVER_GRADIENT = 0.1405770150  # mean speed over G a^2 / viscosity, a half side


def series_speed(points: np.ndarray) -> np.ndarray:
    """(n,) developed axial speed [m/s] at points (n, 3) in the duct."""
    half = 0.5 * SIDE
    gradient = MEAN_SPEED * VISCOSITY / (MEAN_OVER_GRADIENT * half**2)
    y, z = (points[:, :2] - half).T
    odd = np.arange(1, 200, 2)
    k = 0.5 * np.pi * odd / half
    decay = (np.exp(k * (np.abs(z)[:, None] - half)) + np.exp(-k * (np.abs(z)[:, None] + half)))
    decay /= 1.0 + np.exp(-2.0 * k * half)  # cosh(k z) / cosh(k half), without overflow
    sign = (-1.0) ** ((odd - 1) // 2)
    terms = sign / odd**3 * (1.0 - decay) * np.cos(k * y[:, None])
    return 16.0 * half**2 * gradient / (VISCOSITY * np.pi**3) * terms.sum(axis=1)


def along_duct(speed: np.ndarray) -> np.ndarray:
    """(n, 3) velocity of an axial speed (n,)."""
    return np.stack([np.zeros_like(speed), np.zeros_like(speed), speed], axis=1)


def outlet_speed(run: fv3d.Run) -> np.ndarray:
    """(n,) axial speed on the outlet faces [m/s], scaled to the mean speed."""
    mesh = run.mesh
    faces = mesh.boundaries["outlet"]
    rows = slice(faces.start - mesh.n_internal, faces.stop - mesh.n_internal)
    speed = run.state.boundary_velocity[rows, 2]
    area = mesh.face_area_magnitude[faces]
    return speed * MEAN_SPEED * area.sum() / (area * speed).sum()


def solve() -> fv3d.Run:
    """The developed flow."""
    mesh = fv3d.box((0, 0, 0), (SIDE, SIDE, LENGTH), cells=CELLS,
                    names={"x_min": "walls", "x_max": "walls", "y_min": "walls",
                           "y_max": "walls", "z_min": "inlet", "z_max": "outlet"})
    inlet, outlet = (mesh.face_centre[mesh.boundaries[name]] for name in ("inlet", "outlet"))
    same = np.lexsort(np.round(outlet[:, :2], 9).T)[  # the outlet face opposite each inlet face
        np.argsort(np.lexsort(np.round(inlet[:, :2], 9).T))]
    run, speed = None, series_speed(inlet)
    for _ in range(ROUNDS):
        case = fv3d.Case(mesh, fv3d.Fluid(density=DENSITY, viscosity=VISCOSITY), boundaries={
            "inlet": fv3d.Inlet(lambda points, speed=speed: along_duct(speed)),
            "outlet": fv3d.Outlet(0.0), "walls": fv3d.Wall()})
        run = fv3d.solve_steady(case, start=run, tolerance=1e-9, max_iterations=2000,
                                progress=False)
        speed = outlet_speed(run)[same]
    return run


def figures() -> dict[str, float]:
    """Friction factor times Reynolds number, and the balances."""
    run = solve()
    mesh = run.mesh
    friction = fv3d.force(run, "walls").friction[2]
    faces = mesh.boundaries["inlet"]
    drop = run.face_pressure[faces] @ mesh.face_area_magnitude[faces]  # outlet pressure is zero
    mean_speed = -run.mass_flux[faces].sum() / (DENSITY * SIDE**2)
    factor = 4.0 * friction / (4.0 * SIDE * LENGTH) / (0.5 * DENSITY * mean_speed**2)
    budget = fv3d.momentum_budget(run)
    return {"f Re (Darcy)": factor * DENSITY * mean_speed * SIDE / VISCOSITY,
            "friction / pressure drop - 1": friction / drop - 1.0,
            "momentum left over": float(np.abs(budget.closure).max()) / budget.size}


if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
    from judge import main
    main(__file__, figures)
