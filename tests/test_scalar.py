"""Passive scalars: exact solutions, orders, boundedness, balances."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import pyvista as pv
from contracts import linear, observed_order, skewed
from made import made_run
from scipy.special import erfc

import fv3d
from fv3d.errors import Fv3dWarning
from fv3d.flow import scalar
from fv3d.mesh.generate import box

DENSITY = 1.2  # of the made runs
SCHEMES = [fv3d.Upwind(), fv3d.SecondOrderUpwind(), fv3d.Central(), fv3d.Blended(),
           fv3d.LimitedUpwind()]


def uniform(velocity: tuple[float, float, float]) -> Any:
    return lambda x: np.tile(velocity, (len(x), 1))


def nothing(x: np.ndarray) -> np.ndarray:
    return np.zeros(len(x))


def solved(run: fv3d.Run, **options: Any) -> fv3d.ScalarField:
    field = fv3d.solve_scalar(run, **({"tolerance": 1e-11, "max_iterations": 400} | options))
    assert field.outcome.good
    return field


def wave(x: np.ndarray) -> np.ndarray:
    return np.asarray(np.sin(2 * x[:, 0]) * np.cos(x[:, 1]) * np.exp(x[:, 2]))


def wave_gain(x: np.ndarray, diffusivity: float) -> np.ndarray:
    """u . grad c - D laplacian c of the wave in the linear flow."""
    u = linear(x)
    a, b, c = np.sin(2 * x[:, 0]), np.cos(x[:, 1]), np.exp(x[:, 2])
    slope = np.stack([2 * np.cos(2 * x[:, 0]) * b * c, -a * np.sin(x[:, 1]) * c, a * b * c], axis=1)
    return np.asarray((u * slope).sum(axis=1) - diffusivity * (-4 - 1 + 1) * a * b * c)


@pytest.mark.parametrize("tetra", [False, True])
@pytest.mark.parametrize("scheme", SCHEMES, ids=lambda s: type(s).__name__)
def test_manufactured_solution(scheme: Any, tetra: bool) -> None:
    """Declared order (upwind: from 0.8) of the volume-weighted error; x_max by its flux."""
    errors, sizes = [], []
    for n in (5, 10) if tetra else (8, 16):
        mesh = box((0, 0, 0), (1, 1, 1), cells=(n, n, n), tetra=tetra, skew=0.1 if tetra else 0.0)
        run = made_run(mesh, linear, nothing)
        conditions: dict[str, Any] = {b: fv3d.ScalarValue(wave) for b in mesh.boundaries}
        conditions["x_max"] = fv3d.ScalarFlux(lambda x: (  # diffused into the fluid
            DENSITY * 0.3 * 2 * np.cos(2 * x[:, 0]) * np.cos(x[:, 1]) * np.exp(x[:, 2])))
        got = solved(run, diffusivity=0.3, boundaries=conditions, convection=scheme,
                     source=DENSITY * wave_gain(mesh.cell_centre, 0.3))
        error = (got.values - wave(mesh.cell_centre))**2
        errors.append(float(np.sqrt(np.average(error, weights=mesh.cell_volume))))
        sizes.append(1.0 / n)
    assert observed_order(errors, sizes) > (1.8 if scheme.order == 2 else 0.8)
    assert errors[-1] < (0.01 if scheme.order == 2 else 0.1)


def test_linear_fields_are_exact_with_second_order_schemes() -> None:
    for scheme in (fv3d.SecondOrderUpwind(), fv3d.Central()):
        mesh = skewed(4, tetra=True)
        got = solved(made_run(mesh, uniform((1.0, 0.5, -0.2)), nothing), diffusivity=0.1,
                     boundaries={b: fv3d.ScalarValue(lambda x: x @ [1.0, 2.0, -1.0])
                                 for b in mesh.boundaries}, convection=scheme,
                     source=DENSITY * (1.0 + 1.0 + 0.2))
        np.testing.assert_allclose(got.values, mesh.cell_centre @ [1.0, 2.0, -1.0], atol=1e-8)
        points = np.array([[0.3, 0.4, 0.6], [0.9, 0.1, 0.2]])
        np.testing.assert_allclose(got.sample(points), points @ [1.0, 2.0, -1.0], atol=1e-8)


def carried_step(scheme: Any, n: int, *, tetra: bool = False) -> tuple[fv3d.ScalarField, float]:
    """Step carried along (1, 0.5): field, and mean distance from the exact one."""
    mesh = box((0, 0, 0), (1, 1, 0.1), cells=(n, n, 1), tetra=tetra)
    run = made_run(mesh, uniform((1.0, 0.5, 0.0)), nothing)
    got = solved(run, diffusivity=0.0, convection=scheme, max_iterations=3000, boundaries={
        "x_min": fv3d.ScalarValue(lambda x: (x[:, 1] < 0.25).astype(float)),
        "y_min": fv3d.ScalarValue(1.0)})
    exact = mesh.cell_centre[:, 1] < 0.25 + 0.5 * mesh.cell_centre[:, 0]
    return got, float(np.average(np.abs(got.values - exact), weights=mesh.cell_volume))


CARRYING = [(scheme, tetra) for scheme in SCHEMES for tetra in (False, True)
            if scheme.upwind_share + scheme.limited_share + (not scheme.central_share) > 0
            and not (tetra and scheme.central_share)]  # without dissipation nothing settles


@pytest.mark.parametrize(("scheme", "tetra"), CARRYING, ids=lambda v: type(v).__name__
                         if hasattr(v, "order") else ("tet" if v else "hex"))
def test_a_step_is_carried_along(scheme: Any, tetra: bool) -> None:
    """L1 error about h^(1/2) for first, h^(2/3) for second order; bounded ones stay in 0 ... 1.

    Rates: Kuznetsov, N. N. (1976), USSR Comput. Math. Math. Phys. 16, 105-119 (first order, from
    memory); of second-order schemes common practice, no source.
    """
    coarse, fine = carried_step(scheme, 12, tetra=tetra), carried_step(scheme, 24, tetra=tetra)
    assert np.log2(coarse[1] / fine[1]) > (0.55 if scheme.order == 2 else 0.4)
    values = fine[0].values
    outside = max(-values.min(), values.max() - 1.0)
    assert outside <= 1e-8 if scheme.bounded else outside > 1e-3


def test_bounded_second_order_beats_upwind_on_a_step() -> None:
    assert carried_step(fv3d.LimitedUpwind(), 24)[1] < 0.55 * carried_step(fv3d.Upwind(), 24)[1]


def test_mixing_layer_against_the_error_function() -> None:
    """c = erfc(y / 2 sqrt(D x / U)) / 2: Carslaw, H. S. and Jaeger, J. C. (1959), Conduction of
    Heat in Solids, 2nd ed., chapter 2; diffusion along the stream is negligible."""
    def exact(x: np.ndarray) -> np.ndarray:
        return 0.5 * erfc((x[:, 1] - 0.5) / (2.0 * np.sqrt(0.002 * x[:, 0])))
    mesh = box((0.5, 0, 0), (1.5, 1, 0.1), cells=(20, 60, 1))
    got = solved(made_run(mesh, uniform((1.0, 0.0, 0.0)), nothing), diffusivity=0.002,
                 boundaries={"x_min": fv3d.ScalarValue(exact)})
    late = mesh.cell_centre[:, 0] < 1.4
    assert np.abs(got.values - exact(mesh.cell_centre))[late].max() < 4e-3


@pytest.mark.parametrize("n", [20, 40])
def test_layer_at_an_outflow_of_given_value(n: int) -> None:
    """c = (exp(P x) - 1) / (exp(P) - 1), the textbook balance of convection and diffusion."""
    mesh = box((0, 0, 0), (1, 0.1, 0.1), cells=(n, 1, 1))
    got = solved(made_run(mesh, uniform((1.0, 0.0, 0.0)), nothing), diffusivity=0.2,
                 convection=fv3d.Central(),
                 boundaries={"x_min": fv3d.ScalarValue(0.0), "x_max": fv3d.ScalarValue(1.0)})
    exact = np.expm1(5.0 * mesh.cell_centre[:, 0]) / np.expm1(5.0)
    assert np.abs(got.values - exact).max() < 8.0 / n**2


def test_conduction_through_two_layers() -> None:
    """A jump of the diffusivity by 100: fluxes equal, values linear in each layer, exactly."""
    mesh = box((0, 0, 0), (1, 1, 0.1), cells=(3, 10, 1))
    y = mesh.cell_centre[:, 1]
    rate = np.where(y < 0.5, 1.0, 100.0)
    got = solved(made_run(mesh, uniform((0.0, 0.0, 0.0)), nothing), diffusivity=rate,
                 boundaries={"y_min": fv3d.ScalarValue(0.0), "y_max": fv3d.ScalarValue(1.0)})
    middle = 1.0 / 1.01
    exact = np.where(y < 0.5, 2 * y * middle, 1.0 - 2 * (1.0 - y) * (1.0 - middle))
    np.testing.assert_allclose(got.values, exact, atol=1e-8)
    assert got.outflow("y_min") == pytest.approx(DENSITY * 2 * middle * 0.1, rel=1e-8)


def test_heat_transfer_between_plates() -> None:
    """Nusselt number 140/17 of developed flow with equal fluxes through both plates.

    Source: Shah, R. K. and London, A. L. (1978), Laminar Flow Forced Convection in Ducts,
    Academic Press; here derived anew: w'' = u 2 q / U, w(0) = 0, over the mixed mean.
    """
    speed = np.polynomial.Polynomial([0.0, 6.0, -6.0])
    rise = (2.0 * speed).integ(2)
    rise = rise - np.polynomial.Polynomial([0.0, rise(1.0)])
    exact = 2.0 / -(speed * rise).integ()(1.0)
    assert exact == pytest.approx(140 / 17, rel=1e-12)
    found = []
    for n in (16, 32):
        mesh = box((0, 0, 0), (6, 1, 0.1), cells=(48, n, 1))
        run = made_run(mesh, lambda x: np.outer(6 * x[:, 1] * (1 - x[:, 1]), (1.0, 0, 0)), nothing)
        got = solved(run, diffusivity=0.2, boundaries={
            "x_min": fv3d.ScalarValue(0.0), "y_min": fv3d.ScalarFlux(1.0),
            "y_max": fv3d.ScalarFlux(lambda x: np.ones(len(x)))})
        at = np.isclose(mesh.cell_centre[:, 0], 4.0625)
        along = run.velocity[at, 0]
        mixed = float((along * got.values[at]).sum() / along.sum())
        wall = mesh.face_centre[mesh.n_internal:]
        rim = np.isclose(wall[:, 0], 4.0625) & np.isclose(wall[:, 1] % 1.0, 0.0)
        wall_value = float(got.boundary_values[rim].mean())
        found.append(1.0 * 2.0 / (DENSITY * 0.2 * (wall_value - mixed)))
    assert found[1] == pytest.approx(exact, rel=5e-3)
    assert abs(found[1] - exact) < 0.35 * abs(found[0] - exact)


def test_scalar_in_a_periodic_duct() -> None:
    """Conduction between plates while the stream turns round: linear, whatever the flow."""
    mesh = box((0, 0, 0), (1, 1, 1), cells=(4, 6, 3))
    sides = {"x_min": fv3d.Periodic("x_max", drop_per_length=1.0), "y_min": fv3d.Wall(),
             "y_max": fv3d.Wall(), "z_min": fv3d.Symmetry(), "z_max": fv3d.Symmetry()}
    flow = fv3d.solve_steady(fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=0.2),
                                       boundaries=sides), tolerance=1e-9, max_iterations=1500,
                             progress=False)
    got = solved(flow, diffusivity=0.1, boundaries={"y_min": fv3d.ScalarValue(1.0),
                                                    "y_max": fv3d.ScalarValue(3.0)})
    assert flow.velocity[:, 0].max() > 0.3
    np.testing.assert_allclose(got.values, 1.0 + 2.0 * flow.mesh.cell_centre[:, 1], atol=1e-8)
    assert got.outflow("y_max") == pytest.approx(-0.2, rel=1e-7)
    assert got.outflow("y_min") == pytest.approx(-got.outflow("y_max"), rel=1e-7)


def test_what_enters_and_is_made_leaves() -> None:
    mesh = skewed(5, tetra=True)
    got = solved(made_run(mesh, uniform((1.0, 0.3, 0.0)), nothing), diffusivity=0.05, source=0.7,
                 boundaries={"x_min": fv3d.ScalarValue(2.0), "y_min": fv3d.ScalarValue(0.0),
                             "z_max": fv3d.ScalarFlux(0.4)})
    total = sum(got.outflow(name) for name in mesh.boundaries)
    assert total == pytest.approx(0.7 * mesh.cell_volume.sum(), rel=1e-8)
    assert got.outflow("z_max") == pytest.approx(-0.4, rel=1e-12)
    assert abs(got.outflow("z_min")) < 1e-12
    assert "converged" in str(got) and "'z_max' -0.4" in str(got)


def test_a_scalar_is_written_beside_the_flow(tmp_path: Path) -> None:
    mesh = skewed(3)
    run = made_run(mesh, uniform((1.0, 0.0, 0.0)), nothing)
    got = solved(run, diffusivity=0.1, boundaries={"x_min": fv3d.ScalarValue(1.0),
                                                   "y_min": fv3d.ScalarValue(0.0)})
    path = fv3d.write_vtk(run, tmp_path / "a.vtu", fields={
        "smoke": got.values, "wall_distance": fv3d.wall_distance(mesh, ["y_min"])})
    data = pv.read(path).cell_data
    order = np.argsort(mesh.file_index)
    np.testing.assert_array_equal(data["smoke"], got.values[order])
    np.testing.assert_allclose(data["wall_distance"], mesh.cell_centre[order, 1], atol=1e-14)


def test_residual_against_a_plain_loop() -> None:
    """Second-order upwind with diffusion on a shaken mesh, face by face."""
    mesh, random = skewed(3), np.random.default_rng(2)
    run = made_run(mesh, linear, nothing)
    made = scalar._made(run, 0.4, {b: fv3d.ScalarValue(1.0) for b in mesh.boundaries}, 0.3,
                        fv3d.SecondOrderUpwind())
    values = random.normal(size=mesh.n_cells)
    slope = made.gradient(values, made.table.value)
    wanted = 0.3 * mesh.cell_volume
    for f in range(mesh.n_faces):
        a, flux, area = mesh.left[f], run.mass_flux[f], mesh.face_area[f]
        g = area @ area / (area @ mesh.delta[f])
        if f < mesh.n_internal:
            b, w = mesh.right[f], mesh.weight[f]
            up = a if flux >= 0 else b
            face = values[up] + slope[up] @ (mesh.face_centre[f] - mesh.cell_centre[up])
            mean = w * slope[a] + (1 - w) * slope[b]
            spread = g * (values[b] - values[a]) + (area - g * mesh.delta[f]) @ mean
            warp = DENSITY * np.einsum("i,ji,j", w * run.velocity[a] + (1 - w) * run.velocity[b],
                                       mesh.warp[f], mean)
            through = flux * face - DENSITY * 0.4 * spread + warp
            wanted[b] += through - flux * values[b]
        else:
            foot = made.problem.foot[f - mesh.n_internal]
            face = values[a] + slope[a] @ mesh.delta[f] if flux > 0 else 1.0
            through = flux * face - DENSITY * 0.4 * g * (1.0 - values[a] - slope[a] @ foot)
        wanted[a] -= through - flux * values[a]
    np.testing.assert_allclose(made.residual(values), wanted, atol=1e-12)


def test_an_iteration_that_stops_early_says_so() -> None:
    mesh = skewed(4, tetra=True)
    run = made_run(mesh, uniform((1.0, 0.3, 0.0)), nothing)
    with pytest.warns(Fv3dWarning, match="iteration limit"):
        got = fv3d.solve_scalar(run, diffusivity=1e-3, tolerance=1e-12, max_iterations=2,
                                boundaries={"x_min": fv3d.ScalarValue(lambda x: x[:, 1]),
                                            "y_min": fv3d.ScalarValue(0.0)})
    assert not got.outcome.good and len(got.residuals) == 2
