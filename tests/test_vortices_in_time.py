"""Decaying vortices in a periodic box: order of velocity and pressure in time and in space.

Exact: Taylor, G. I. (1923), Philos. Mag. 46, 671-674; the pressure balances the vortices'
centrifugal force (derived from the Euler equations: the viscous term balances the decay).
"""

from __future__ import annotations

import itertools

import numpy as np

import fv3d

DENSITY, KINEMATIC, END = 1.3, 0.1, 1.0


def vortices(x: np.ndarray, time: float) -> tuple[np.ndarray, np.ndarray]:
    """(n, 3) velocity [m/s] and (n,) pressure without its mean [Pa]."""
    decay = np.exp(-2.0 * KINEMATIC * time)
    sines, cosines = np.sin(x), np.cos(x)
    velocity = decay * np.stack([sines[:, 0] * cosines[:, 1], -cosines[:, 0] * sines[:, 1],
                                 0.0 * x[:, 0]], axis=1)
    pressure = 0.25 * DENSITY * decay ** 2 * (np.cos(2 * x[:, 0]) + np.cos(2 * x[:, 1]))
    return velocity, pressure


def decayed(cells: int, step: float) -> fv3d.Run:
    mesh = fv3d.box((0, 0, 0), (2 * np.pi, 2 * np.pi, 1.0), cells=(cells, cells, 1))
    case = fv3d.Case(mesh, fv3d.Fluid(density=DENSITY, viscosity=DENSITY * KINEMATIC), boundaries={
        "x_min": fv3d.Periodic("x_max"), "y_min": fv3d.Periodic("y_max"),
        "z_min": fv3d.Symmetry(), "z_max": fv3d.Symmetry()})
    return fv3d.solve_transient(case, start=lambda x: vortices(x, 0.0)[0], time_step=step,
                                end_time=END, progress=False)


def rms(mesh: fv3d.Mesh, values: np.ndarray) -> float:
    square = values ** 2 if values.ndim == 1 else (values ** 2).sum(axis=1)
    return float(np.sqrt(np.average(square, weights=mesh.cell_volume)))


def test_order_in_time() -> None:
    """Halvings of the step on one mesh; must: velocity 1.9, pressure 1.5."""
    runs = [decayed(16, step) for step in (0.1, 0.05, 0.025)]
    for name, order in (("velocity", 1.9), ("pressure", 1.5)):
        change = [rms(runs[0].mesh, getattr(a, name) - getattr(b, name))
                  for a, b in itertools.pairwise(runs)]
        assert np.log2(change[0] / change[1]) >= order, name


def test_order_in_space() -> None:
    """Velocity; must: 1.9."""
    errors = []
    for cells in (16, 32):
        run = decayed(cells, 0.02)
        errors.append(rms(run.mesh, run.velocity - vortices(run.mesh.cell_centre, END)[0]))
    assert np.log2(errors[0] / errors[1]) >= 1.9


def test_pressure_of_the_vortices() -> None:
    """Within the error of second differences of a wave, (k h)^2 / 12."""
    cells = 32
    run = decayed(cells, 0.02)
    pressure = run.pressure - np.average(run.pressure, weights=run.mesh.cell_volume)
    wanted = vortices(run.mesh.cell_centre, END)[1]
    allowed = 1.5 * (2.0 * 2.0 * np.pi / cells) ** 2 / 12.0
    assert rms(run.mesh, pressure - wanted) <= allowed * rms(run.mesh, wanted)
