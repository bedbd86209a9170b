"""Order of accuracy by a manufactured solution of the steady equations in three dimensions.

Method: Roache, P. J. (2002), J. Fluids Eng. 124, 4-10; the field is our own.  The force that
makes it a solution is derived here with sympy from the Navier-Stokes equations, not by hand.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
import pytest
import sympy
from contracts import observed_order
from made import solved

import fv3d
from fv3d.mesh.generate import box

# Reynolds number of the cube about 140.  Velocity is given on outflow sides too, where a coarse
# mesh at a higher one leaves an unresolved layer: at 1.7 times this number tetrahedra n <= 8 find
# other, spurious discrete solutions beside that side.
VISCOSITY, DENSITY = 0.01, 1.2
Field = Callable[[np.ndarray], np.ndarray]


@dataclass(frozen=True)
class Solution:
    """Exact velocity and pressure, and the force per mass that makes them a solution."""

    velocity: Field
    pressure: Field
    force: Field


@cache
def solution() -> Solution:
    """A convection-dominated field with all three components and all derivatives at work."""
    x = sympy.symbols("x y z")
    sin, cos = sympy.sin, sympy.cos
    a, b, c = (2 * one for one in x)
    u = [1 + sin(a) * cos(b) * cos(c) / 2,
         sympy.Rational(1, 2) - 3 * cos(a) * sin(b) * cos(c) / 10,
         sympy.Rational(1, 4) - cos(a) * cos(b) * sin(c) / 5]
    p = cos(a) * cos(b) * sin(c)
    mu, rho = sympy.Float(VISCOSITY), sympy.Float(DENSITY)
    assert sympy.simplify(sum(sympy.diff(u[i], x[i]) for i in range(3))) == 0
    force = [sum(u[j] * sympy.diff(u[i], x[j]) for j in range(3)) + sympy.diff(p, x[i]) / rho
             - mu / rho * sum(sympy.diff(u[i], x[j], 2) for j in range(3)) for i in range(3)]

    def vector(parts: list[Any]) -> Field:
        made = [sympy.lambdify(x, part, "numpy") for part in parts]
        return lambda points: np.stack([one(*points.T) for one in made], axis=1)
    scalar = sympy.lambdify(x, p, "numpy")
    return Solution(vector(u), lambda points: scalar(*points.T), vector(force))


def errors(mesh: fv3d.Mesh, numerics: fv3d.Numerics) -> tuple[float, float]:
    """Volume-weighted L2 errors of velocity and of pressure (its mean taken out)."""
    exact = solution()
    run = solved(fv3d.Case(mesh, fv3d.Fluid(density=DENSITY, viscosity=VISCOSITY),
                           boundaries={b: fv3d.Inlet(exact.velocity) for b in mesh.boundaries},
                           body_force=exact.force, numerics=numerics), tolerance=1e-6)
    volume = mesh.cell_volume
    velocity = run.velocity - exact.velocity(mesh.cell_centre)
    pressure = run.pressure - exact.pressure(mesh.cell_centre)
    pressure -= np.average(pressure, weights=volume)
    return (float(np.sqrt(np.average((velocity**2).sum(axis=1), weights=volume))),
            float(np.sqrt(np.average(pressure**2, weights=volume))))


def orders(levels: tuple[int, ...], numerics: fv3d.Numerics | None = None, *,
           make: Callable[..., fv3d.Mesh] = box, **kind: Any) -> tuple[float, float]:
    """Observed orders of velocity and pressure over a family; prints the errors."""
    found = []
    for n in levels:
        mesh = make((0, 0, 0), (1, 1, 1), cells=(n, n, n), **kind)
        found.append(errors(mesh, numerics or fv3d.Numerics()))
        print(f"n {n:3d}  cells {mesh.n_cells:7d}  velocity {found[-1][0]:.3e}  "
              f"pressure {found[-1][1]:.3e}")
    sizes = [1.0 / n for n in levels]
    velocity, pressure = (observed_order([pair[k] for pair in found], sizes) for k in (0, 1))
    last = [np.log(found[-2][k] / found[-1][k]) / np.log(levels[-1] / levels[-2]) for k in (0, 1)]
    print(f"orders: velocity {velocity:.2f}, pressure {pressure:.2f}; "
          f"last two levels {last[0]:.2f}, {last[1]:.2f}")
    return velocity, pressure


HEX = ({}, 1.9, 1.7)
SKEWED = ({"skew": 0.3}, 1.9, 1.7)
TET = ({"tetra": True}, 1.8, 1.4)


@pytest.mark.parametrize(("kind", "velocity_must", "pressure_must", "levels"), [
    (*HEX, (6, 9, 13)), (*SKEWED, (6, 9, 13)), (*TET, (6, 8, 11))],
    ids=["hex", "skewed hex", "tet"])
def test_order_on_three_levels(kind: dict[str, Any], velocity_must: float, pressure_must: float,
                               levels: tuple[int, ...]) -> None:
    velocity, pressure = orders(levels, **kind)
    assert velocity >= velocity_must
    assert pressure >= pressure_must


@pytest.mark.long
@pytest.mark.parametrize(("kind", "velocity_must", "pressure_must", "levels"), [
    (*HEX, (8, 12, 18, 27)), (*SKEWED, (8, 12, 18, 27)), (*TET, (6, 9, 13, 19))],
    ids=["hex", "skewed hex", "tet"])
def test_order_on_four_levels(kind: dict[str, Any], velocity_must: float, pressure_must: float,
                              levels: tuple[int, ...]) -> None:
    velocity, pressure = orders(levels, **kind)
    assert velocity >= velocity_must
    assert pressure >= pressure_must


FAMILIES = {
    "wedges": (fv3d.wedge_box, {"skew": 0.2}, (6, 9, 13)),
    "pyramids and hexahedra": (fv3d.pyramid_box, {"skew": 0.1}, (4, 6, 9)),
    "all kinds": (fv3d.mixed_box, {"skew": 0.1}, (4, 8, 12)),
    "warped hexahedra": (box, {"warp": 0.08, "skew": 0.2}, (6, 9, 13)),
}


@pytest.mark.parametrize(("make", "kind", "levels"), FAMILIES.values(), ids=FAMILIES)
def test_order_on_other_kinds_of_cells(make: Any, kind: dict[str, Any],
                                       levels: tuple[int, ...]) -> None:
    velocity, pressure = orders(levels, make=make, **kind)
    assert velocity >= 1.8
    assert pressure >= 1.4


@pytest.mark.long
@pytest.mark.parametrize(("make", "kind", "levels"), FAMILIES.values(), ids=FAMILIES)
def test_order_on_other_kinds_of_cells_four_levels(make: Any, kind: dict[str, Any],
                                                   levels: tuple[int, ...]) -> None:
    velocity, pressure = orders((*levels, round(1.5 * levels[-1])), make=make, **kind)
    assert velocity >= 1.8
    assert pressure >= 1.4


@pytest.mark.parametrize(("scheme", "least", "most"), [
    (fv3d.Upwind(), 0.6, 1.4), (fv3d.Central(), 1.8, 9.0), (fv3d.Blended(), 1.8, 9.0),
    (fv3d.LimitedUpwind(), 1.8, 9.0)], ids=repr)
def test_other_schemes_have_their_order(scheme: Any, least: float, most: float) -> None:
    velocity, _ = orders((6, 9, 13), fv3d.Numerics(convection=scheme), skew=0.2)
    assert least <= velocity <= most


@pytest.mark.parametrize(("gradient", "least"), [
    (fv3d.BarthJespersen(), 1.8), (fv3d.MichalakOllivierGooch(), 1.8)], ids=["sharp", "smooth"])
def test_limited_gradients_keep_the_order_of_the_flow(gradient: Any, least: float) -> None:
    velocity, _ = orders((6, 9, 13), fv3d.Numerics(gradient=gradient), skew=0.2)
    assert velocity >= least


def test_full_stress_changes_nothing_in_the_limit() -> None:
    """With constant viscosity the transposed gradient has no divergence."""
    mesh = box((0, 0, 0), (1, 1, 1), cells=(9, 9, 9), skew=0.2)
    plain, full = (errors(mesh, fv3d.Numerics(full_stress=flag)) for flag in (False, True))
    assert full[0] <= 1.1 * plain[0] and full[1] <= 1.1 * plain[1]


def test_the_force_by_finite_differences() -> None:
    """The derived force once more, by central differences of the exact fields."""
    exact, r, h = solution(), np.random.default_rng(0), 1e-4
    x = r.uniform(0.0, 1.0, (50, 3))
    u, total = exact.velocity(x), np.zeros((50, 3))
    for j, step in enumerate(h * np.eye(3)):
        ahead, behind = exact.velocity(x + step), exact.velocity(x - step)
        total += u[:, j:j + 1] * (ahead - behind) / (2 * h)
        total -= VISCOSITY / DENSITY * (ahead - 2 * u + behind) / h**2
        total[:, j] += (exact.pressure(x + step) - exact.pressure(x - step)) / (2 * h * DENSITY)
    np.testing.assert_allclose(total, exact.force(x), atol=2e-6)
