"""A fluid at rest under a force with a potential: the pressure takes it up, nothing moves.

Common practice, no source: the check known as "well balanced" or "parasitic currents".
"""

from __future__ import annotations

import warnings
from typing import Any

import numpy as np
import pytest
from contracts import observed_order
from made import solved

import fv3d
from fv3d.errors import Fv3dWarning
from fv3d.flow.problem import balanced_force
from fv3d.mesh.generate import box

FAMILIES: dict[str, tuple[dict[str, Any], tuple[int, ...]]] = {
    "hex": ({}, (8, 12, 18)),
    "skewed hex": ({"skew": 0.2}, (8, 12, 18)),
    "tet": ({"tetra": True}, (5, 7, 10)),
    "skewed tet": ({"tetra": True, "skew": 0.1}, (5, 7, 10)),
}
CENTRE, WIDTH = np.array([0.45, 0.55, 0.5]), 0.25


def cube(n: int, **kind: Any) -> fv3d.Mesh:
    return box((0, 0, 0), (1, 1, 1), cells=(n, n, n), **kind)


def closed(mesh: fv3d.Mesh, force: Any) -> fv3d.Case:
    return fv3d.Case(mesh, fv3d.Fluid(density=1.2, viscosity=0.05), body_force=force,
                     boundaries={b: fv3d.Wall() for b in mesh.boundaries})


def potential(x: np.ndarray) -> np.ndarray:
    return np.exp(-((x - CENTRE)**2).sum(axis=1) / (2 * WIDTH**2))


def gaussian(x: np.ndarray) -> np.ndarray:
    """Gradient of the potential [m/s^2]."""
    return -(x - CENTRE) / WIDTH**2 * potential(x)[:, None]


@pytest.mark.parametrize("family", FAMILIES)
def test_uniform_force_moves_nothing(family: str) -> None:
    mesh = cube(6, **FAMILIES[family][0])
    with warnings.catch_warnings():
        # at rest the residuals are rounding over rounding: no verdict on convergence here
        warnings.simplefilter("ignore", Fv3dWarning)
        run = fv3d.solve_steady(closed(mesh, (0.0, -9.81, 3.0)), tolerance=1e-8,
                                max_iterations=700, progress=False)
    assert np.linalg.norm(run.velocity, axis=1).max() <= 1e-10
    hydrostatic = 1.2 * mesh.cell_centre @ np.array([0.0, -9.81, 3.0])
    hydrostatic -= np.average(hydrostatic, weights=mesh.cell_volume)
    np.testing.assert_allclose(run.pressure, hydrostatic, atol=1e-9)
    np.testing.assert_allclose(fv3d.momentum_budget(run).closure, 0.0, atol=1e-9)


@pytest.mark.parametrize("family", FAMILIES)
def test_spurious_velocity_of_a_gaussian_potential_falls_at_second_order(family: str) -> None:
    kind, levels = FAMILIES[family]
    mean, largest = [], []
    for n in levels:
        mesh = cube(n, **kind)
        run = solved(closed(mesh, gaussian), tolerance=1e-6)
        speed = np.linalg.norm(run.velocity, axis=1)
        mean.append(float(np.sqrt(np.average(speed**2, weights=mesh.cell_volume))))
        largest.append(float(speed.max()))
    sizes = [1.0 / n for n in levels]
    assert observed_order(mean, sizes) >= 2.0
    assert observed_order(largest, sizes) >= 2.0


@pytest.mark.parametrize("family", FAMILIES)
def test_uniform_and_total_force_are_kept(family: str) -> None:
    """The force the equations use: exact where uniform; its total that of the field, nearly."""
    mesh = cube(6, **FAMILIES[family][0])
    uniform = balanced_force(mesh, np.tile([1.0, -2.0, 0.5], (mesh.n_cells, 1)))
    np.testing.assert_allclose(uniform.cell, np.tile([1.0, -2.0, 0.5], (mesh.n_cells, 1)),
                               atol=1e-13)
    np.testing.assert_allclose(uniform.drop, mesh.delta @ [1.0, -2.0, 0.5], atol=1e-14)


def test_a_force_and_the_pressure_drop_it_replaces_give_the_same_flow() -> None:
    """Channel flow driven by a force or, the same, by a higher pressure at its start."""
    mesh = box((0, 0, 0), (2, 1, 1), cells=(8, 6, 6), skew=0.2)
    sides = {b: fv3d.Wall() for b in mesh.boundaries}
    fluid = fv3d.Fluid(density=1.2, viscosity=0.2)
    profile = fv3d.Inlet(lambda x: np.outer(x[:, 1] * (1 - x[:, 1]) * x[:, 2] * (1 - x[:, 2]),
                                            (4.0, 0.0, 0.0)))
    ends = {"x_min": profile, "x_max": fv3d.Outlet()}
    pushed, plain = (solved(fv3d.Case(mesh, fluid, boundaries=sides | ends, body_force=force),
                            tolerance=1e-8) for force in ((0.7, 0.0, 0.0), None))
    np.testing.assert_allclose(pushed.velocity, plain.velocity, atol=1e-6)
    carried = 1.2 * 0.7 * (mesh.cell_centre[:, 0] - 2.0)
    np.testing.assert_allclose(pushed.pressure - carried, plain.pressure, atol=1e-6)
