"""Zones of resistance: screens, honeycombs, porous blocks."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import FrozenInstanceError, replace
from typing import Any

import numpy as np
import pytest
import scipy.sparse as sparse
from made import distance

import fv3d
from fv3d.errors import CaseError
from fv3d.mesh.mesh import Mesh
from fv3d.operators import linear
from fv3d.operators.deflation import deflated

DENSITY, SPEED, PLANES = 1.2, 2.0, (0.75, 1.0)
MESHES: dict[str, dict[str, Any]] = {"hex": {}, "skewed": {"skew": 0.25},
                                     "tet": {"tetra": True, "skew": 0.1}}


def flat_zone(**options: Any) -> Mesh:
    """Box of 2 x 1 x 1 m with skewed cells, but flat planes of points where the zone ends."""
    skew = options.pop("skew", 0.0)
    mesh = fv3d.box((0, 0, 0), (2, 1, 1), cells=(8, 3, 3), **options)
    low, high = mesh.points.min(axis=0), mesh.points.max(axis=0)
    move = np.random.default_rng(1).uniform(-skew, skew, mesh.points.shape) * (0.25, 0.33, 0.33)
    move[(mesh.points == low) | (mesh.points == high)] = 0.0
    move[np.isin(mesh.points[:, 0], PLANES), 0] = 0.0
    (kind, conn, _), = mesh.cell_blocks
    boundaries = {}
    for name, faces in mesh.boundaries.items():
        corners = mesh.face_points[faces]
        boundaries[name] = [corners[:, :3] if kind == "tetra" else corners]
    centre = mesh.points[conn].mean(axis=1)[:, 0]
    return fv3d.build_mesh(mesh.points + move, [(kind, conn)], boundaries,
                           zones={"screen": (centre > PLANES[0]) & (centre < PLANES[1])})


def straight(mesh: Mesh, law: fv3d.Resistance | None, **options: Any) -> fv3d.Case:
    """Uniform flow along x between slip walls."""
    sides = {name: fv3d.Slip() for name in mesh.boundaries}
    sides |= {"x_min": fv3d.Inlet((SPEED, 0.0, 0.0)), "x_max": fv3d.Outlet()}
    return fv3d.Case(mesh, fv3d.Fluid(density=DENSITY, viscosity=1.8e-3), boundaries=sides,
                     resistances={} if law is None else {"screen": law}, **options)


def solved(case: fv3d.Case, *, tolerance: float = 1e-7, **options: Any) -> fv3d.Run:
    run = fv3d.solve_steady(case, tolerance=tolerance, max_iterations=1000, progress=False,
                            **options)
    assert run.outcome.good
    return run


def drop(run: fv3d.Run) -> float:
    """Mean pressure on the inlet [Pa]; the outlet is at zero."""
    faces = run.mesh.boundaries["x_min"]
    return float(np.average(run.face_pressure[faces],
                            weights=run.mesh.face_area_magnitude[faces]))


LAWS = {"weak screen": fv3d.Resistance.screen(loss=0.1, thickness=0.25),
        "screen": fv3d.Resistance.screen(loss=2.0, thickness=0.25),
        "dense screen": fv3d.Resistance.screen(loss=1e4, thickness=0.25),
        "weak block": fv3d.Resistance(linear=1.0),
        "both": fv3d.Resistance(linear=(30.0, 90.0, 30.0), quadratic=(4.0, 9.0, 0.0)),
        "dense block": fv3d.Resistance(linear=1e8)}


@pytest.mark.parametrize("law", LAWS.values(), ids=LAWS)
@pytest.mark.parametrize("kind", MESHES)
def test_straight_flow_loses_what_is_given(kind: str, law: fv3d.Resistance) -> None:
    """Against arithmetic: linear u + quadratic density / 2 u^2 over a thickness of 0.25 m (Darcy
    1856; Forchheimer 1901); the velocity stays uniform."""
    tolerance = 1e-7 if law.linear[0] > 1e6 else 1e-8  # rounding of 5e7 Pa
    run = solved(straight(flat_zone(**MESHES[kind]), law), tolerance=tolerance)
    exact = 0.25 * (law.linear[0] * SPEED + law.quadratic[0] * 0.5 * DENSITY * SPEED ** 2)
    assert drop(run) == pytest.approx(exact, rel=1e-6)
    assert np.abs(run.velocity - (SPEED, 0.0, 0.0)).max() <= 1e-6 * SPEED
    budget = fv3d.momentum_budget(run)
    assert np.abs(budget.closure).max() <= 1e-6 * budget.size
    np.testing.assert_allclose(budget.resistances["screen"], (-exact, 0.0, 0.0),
                               atol=1e-6 * exact)
    assert "resistance 'screen'" in str(budget)


@pytest.mark.parametrize("coupling", [
    fv3d.SIMPLEC(velocity_relaxation=0.5), fv3d.SIMPLEC(velocity_relaxation=0.7),
    fv3d.SIMPLE(velocity_relaxation=0.5, pressure_relaxation=0.5), fv3d.SIMPLE(),
    fv3d.SIMPLE(velocity_relaxation=0.9, pressure_relaxation=0.1)], ids=repr)
def test_any_coupling(coupling: Any) -> None:
    run = solved(straight(flat_zone(skew=0.25), LAWS["dense screen"],
                          numerics=fv3d.Numerics(coupling=coupling)))
    assert drop(run) == pytest.approx(1e4 * 0.5 * DENSITY * SPEED ** 2, rel=1e-6)


@pytest.mark.parametrize("size", [1e-6, 1.0, 10.0, 1e6])
def test_ragged_zones_converge(size: float) -> None:
    """Cells chosen on a skewed mesh: never twice the iterations of the plain run."""
    mesh = fv3d.box((0, 0, 0), (2, 1, 1), cells=(16, 4, 4), skew=0.25)
    plain = solved(straight(mesh, None))
    run = solved(straight(mesh, fv3d.Resistance(
        linear=size, where=lambda x: (x[:, 0] > 0.875) & (x[:, 0] < 1.0))))
    assert len(run.history["iteration"]) <= 2 * len(plain.history["iteration"])
    assert drop(run) == pytest.approx(0.125 * size * SPEED, rel=0.05, abs=1e-6)


def channel(law: fv3d.Resistance, where: Callable[[np.ndarray], np.ndarray], cells: int,
            drop_per_length: float, low: float) -> fv3d.Run:
    """Developed flow between walls at y = low and y = 1, viscosity 0.05 Pa s."""
    mesh = fv3d.box((0, low, 0), (3 / cells, 1, 1 / cells),
                    cells=(3, round((1 - low) * cells), 1))
    sides = {"y_min": fv3d.Wall(), "y_max": fv3d.Wall(), "z_min": fv3d.Slip(),
             "z_max": fv3d.Slip(),
             "x_min": fv3d.Periodic("x_max", drop_per_length=drop_per_length)}
    return solved(fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=0.05), boundaries=sides,
                            resistances={"bed": replace(law, where=where)}))


def orders(error: Callable[[int], float], sizes: tuple[int, ...]) -> float:
    errors = [error(size) for size in sizes]
    return float(np.log2(errors[-2] / errors[-1]))


def test_porous_channel_of_second_order() -> None:
    """Against Brinkman, H. C. (1947), Appl. Sci. Res. A1, 27-34: a cosh profile."""
    k = np.sqrt(5.0 / 0.05)

    def error(cells: int) -> float:
        run = channel(fv3d.Resistance(linear=5.0), lambda x: x[:, 0] > -1.0, cells, 1.0, 0.0)
        y = run.mesh.cell_centre[:, 1]
        exact = 0.2 * (1.0 - np.cosh(k * (y - 0.5)) / np.cosh(k / 2))
        return distance(run.mesh, run.velocity[:, 0], exact)
    assert orders(error, (20, 40)) >= 1.8
    assert error(40) <= 0.01


def test_fluid_over_a_porous_bed_of_second_order() -> None:
    """Against the exact profile: parabola above, exponentials below, u and shear continuous."""
    mu, loss, drive = 0.05, 20.0, 1.0
    k = np.sqrt(loss / mu)
    a, b, c, d = np.linalg.solve(
        [[1, 1, 0, 0], [0, -1, 1, 1], [1, 0, -k, k], [0, 0, np.exp(-k), np.exp(k)]],
        [drive / (2 * mu), -drive / loss, 0.0, -drive / loss])

    def error(cells: int) -> float:
        run = channel(fv3d.Resistance(linear=loss), lambda x: x[:, 1] < 0.0, cells, drive, -1.0)
        y = run.mesh.cell_centre[:, 1]
        exact = np.where(y > 0, -drive * y ** 2 / (2 * mu) + a * y + b,
                         drive / loss + c * np.exp(k * y) + d * np.exp(-k * y))
        return distance(run.mesh, run.velocity[:, 0], exact)
    assert orders(error, (8, 16)) >= 1.7


@pytest.mark.parametrize("kind", MESHES)
def test_streamlines_are_refracted(kind: str) -> None:
    """Oblique flow from one bed into another: the tangential velocities are as the reciprocal
    resistances, the normal one is continuous (Darcy's law and continuity)."""
    mesh = flat_zone(**MESHES[kind])
    law = np.where(mesh.cell_centre[:, :1] < PLANES[0], 10.0, 40.0)

    def velocity(x: np.ndarray) -> np.ndarray:
        inside = np.where(x[:, :1] < PLANES[0], 10.0, 40.0)
        return np.hstack([1.0 + 0.0 * inside, 8.0 / inside, 0.0 * inside])
    sides = {name: fv3d.Inlet(velocity) for name in mesh.boundaries} | {
        "z_min": fv3d.Slip(), "z_max": fv3d.Slip()}
    case = fv3d.Case(mesh, fv3d.Fluid(density=1e-6, viscosity=1e-6), boundaries=sides,
                     resistances={"first": fv3d.Resistance(linear=10.0, where=lambda x:
                                                           x[:, 0] < PLANES[0]),
                                  "second": fv3d.Resistance(linear=40.0, where=lambda x:
                                                            x[:, 0] > PLANES[0])})
    run = solved(case)
    np.testing.assert_allclose(run.velocity, np.hstack([1.0 + 0 * law, 8.0 / law, 0 * law]),
                               atol=1e-5)


def test_a_honeycomb_straightens_and_a_screen_flattens() -> None:
    mesh = fv3d.box((0, 0, 0), (2, 1, 1), cells=(16, 4, 4))

    def swirl(x: np.ndarray) -> np.ndarray:
        y, z = x[:, 1] - 0.5, x[:, 2] - 0.5
        return np.stack([1.0 + 0.5 * np.sin(2 * np.pi * y), -z, y], axis=1)
    sides = {name: fv3d.Slip() for name in mesh.boundaries} | {
        "x_min": fv3d.Inlet(swirl), "x_max": fv3d.Outlet()}

    def run(**zones: fv3d.Resistance) -> fv3d.Run:
        return solved(fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=1e-3), boundaries=sides,
                                resistances=zones), tolerance=1e-6)
    behind = mesh.cell_centre[:, 0] > 1.2
    honeycomb = fv3d.Resistance.honeycomb(
        along=(1, 0, 0), linear=1.0, lateral=1e4, where=lambda x: np.abs(x[:, 0] - 0.875) < 0.25)
    screen = fv3d.Resistance.screen(loss=2.76, thickness=0.125,
                                    where=lambda x: np.abs(x[:, 0] - 0.9375) < 0.05)
    plain, combed, screened = run(), run(comb=honeycomb), run(screen=screen)
    turning = [float(np.abs(r.velocity[behind, 1:]).max()) for r in (plain, combed)]
    assert turning[1] <= 0.1 * turning[0]
    uneven = [float(np.std(r.velocity[behind, 0])) for r in (plain, screened)]
    assert uneven[1] <= 0.4 * uneven[0]


def test_a_case_without_resistance_is_untouched() -> None:
    case = straight(flat_zone(), None)
    problem = fv3d.flow.problem.make_problem(case)  # type: ignore[attr-defined]
    assert problem.zones is None
    assert not fv3d.momentum_budget(solved(case)).resistances


def test_a_stored_run_goes_on(tmp_path: Any) -> None:
    mesh = flat_zone(skew=0.25)
    case, other = straight(mesh, LAWS["screen"]), straight(mesh, LAWS["both"])
    path = tmp_path / "run.npz"
    options: dict[str, Any] = {"tolerance": 1e-12, "progress": False}
    with pytest.warns(fv3d.Fv3dWarning):
        whole = fv3d.solve_steady(case, max_iterations=12, **options)
        fv3d.solve_steady(case, max_iterations=6, checkpoint=fv3d.Checkpoint(path), **options)
        rest = fv3d.solve_steady(case, max_iterations=12, start=fv3d.read_checkpoint(path),
                                 **options)
    np.testing.assert_array_equal(rest.velocity, whole.velocity)
    np.testing.assert_array_equal(rest.pressure, whole.pressure)
    with pytest.raises(CaseError, match="another resistances"):
        fv3d.solve_steady(other, max_iterations=12, start=fv3d.read_checkpoint(path), **options)


def test_parts_joined_by_tiny_coefficients() -> None:
    """Two bars of 400 cells joined by a link of 1e-7; against SciPy's direct solver."""
    link = np.ones(799)
    link[399] = 1e-7
    matrix = sparse.diags([-link, np.r_[link, 0.0] + np.r_[0.0, link], -link], [-1, 0, 1]).tolil()
    matrix[799, 799] += 1.0
    matrix = sparse.csr_matrix(matrix)
    rhs = np.random.default_rng(2).standard_normal(800)
    helped = deflated(linear.prepare(matrix), matrix, np.repeat([0, 1], 400))
    result = linear.solve(helped, rhs, matrix=matrix, tolerance=1e-6)
    assert result.outcome.good and result.iterations <= 40
    exact = sparse.linalg.spsolve(matrix.tocsc(), rhs)
    np.testing.assert_allclose(result.solution, exact, rtol=1e-4)


def test_laws_are_small_frozen_values() -> None:
    assert LAWS["screen"].quadratic == (8.0, 8.0, 8.0)
    comb = fv3d.Resistance.honeycomb(along=(0, 0, -2), linear=3.0, quadratic=0.5, lateral=10.0)
    assert (comb.linear, comb.quadratic) == ((30.0, 30.0, 3.0), (5.0, 5.0, 0.5))
    with pytest.raises(FrozenInstanceError):
        comb.linear = 1.0  # type: ignore[misc]


def transient(_: Any = None) -> Any:
    return fv3d.solve_transient(straight(flat_zone(), LAWS["screen"]), time_step=0.1,
                                end_time=0.2, progress=False)


BAD: dict[str, tuple[Callable[[], Any], str]] = {
    "negative": (lambda: fv3d.Resistance(linear=-1.0), "not negative"),
    "no number": (lambda: fv3d.Resistance(quadratic="much"), "one number or three"),
    "two numbers": (lambda: fv3d.Resistance(linear=(1.0, 2.0)), "one number or three"),
    "not finite": (lambda: fv3d.Resistance(linear=float("nan")), "one number or three"),
    "nothing": (lambda: fv3d.Resistance(), "above zero"),
    "place": (lambda: fv3d.Resistance(linear=1.0, where=3), "function of points"),  # type: ignore
    "loss": (lambda: fv3d.Resistance.screen(loss=0.0, thickness=0.1), "positive"),
    "thickness": (lambda: fv3d.Resistance.screen(loss=1.0, thickness=-0.1), "positive"),
    "direction": (lambda: fv3d.Resistance.honeycomb(along=(1, 1, 0), linear=1.0), "one of the"),
    "lateral": (lambda: fv3d.Resistance.honeycomb(along=(1, 0, 0), linear=1.0, lateral=0.0),
                "positive"),
    "honeycomb of nothing": (lambda: fv3d.Resistance.honeycomb(along=(1, 0, 0)), "above zero"),
    "no mapping": (lambda: straight(flat_zone(), None, **{}) and fv3d.Case(
        flat_zone(), fv3d.Fluid(density=1.0, viscosity=1.0),
        boundaries=straight(flat_zone(), None).boundaries,
        resistances=[LAWS["screen"]]), "by the name"),  # type: ignore[arg-type]
    "no resistance": (lambda: straight(flat_zone(), 3.0), "no resistance"),  # type: ignore
    "no such zone": (lambda: replace(straight(flat_zone(), None),
                                     resistances={"scren": LAWS["screen"]}), "Did you mean"),
    "no cells": (lambda: straight(flat_zone(), fv3d.Resistance(
        linear=1.0, where=lambda x: x[:, 0] > 5.0)), "0 cells"),
    "no booleans": (lambda: straight(flat_zone(), fv3d.Resistance(
        linear=1.0, where=lambda x: x[:, 0])), "one boolean per point"),
    "shared cells": (lambda: replace(straight(flat_zone(), LAWS["screen"]), resistances={
        "screen": LAWS["screen"],
        "all": fv3d.Resistance(linear=1.0, where=lambda x: x[:, 0] > 0.0)}), "share cells"),
    "in time": (transient, "takes no resistances"),
}


@pytest.mark.parametrize("bad", BAD.values(), ids=BAD)
def test_bad_input(bad: tuple[Callable[[], Any], str]) -> None:
    act, words = bad
    with pytest.raises(CaseError, match=words):
        act()
