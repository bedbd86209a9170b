"""Convection schemes against their contract; diffusion of momentum and of a scalar."""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
import pytest
from contracts import CONVECTION, SLOPE, Check, edge_centres, linear, momentum_imbalance, skewed
from made import distance, duct, solved

import fv3d
from fv3d.flow.equations import boundary_traction, momentum
from fv3d.flow.problem import make_problem
from fv3d.mesh.generate import box
from fv3d.operators.assembly import inverse_blocks, orthogonal_factor, pattern, symmetric_matrix
from fv3d.operators.interpolation import point_interpolation

SCHEMES = [fv3d.Upwind(), fv3d.SecondOrderUpwind(), fv3d.Central(), fv3d.Blended(share=0.6),
           fv3d.LimitedUpwind()]


@pytest.mark.parametrize("check", CONVECTION.values(), ids=CONVECTION)
@pytest.mark.parametrize("scheme", SCHEMES, ids=repr)
def test_contract(scheme: Any, check: Check) -> None:
    check(scheme)


def problem(mesh: fv3d.Mesh, *, density: float = 1.3, viscosity: float = 0.7,
            **numerics: Any) -> Any:
    return make_problem(fv3d.Case(mesh, fv3d.Fluid(density=density, viscosity=viscosity),
                                  boundaries={b: fv3d.Inlet(linear) for b in mesh.boundaries},
                                  numerics=fv3d.Numerics(**numerics)))


@pytest.mark.parametrize("tetra", [False, True])
def test_diffusion_matrix_is_symmetric_with_zero_row_sums(tetra: bool) -> None:
    mesh = skewed(3, tetra=tetra)
    g = orthogonal_factor(mesh)
    matrix = symmetric_matrix(mesh, pattern(mesh), g[:mesh.n_internal], np.zeros(mesh.n_boundary))
    assert abs(matrix - matrix.T).max() == 0.0
    np.testing.assert_allclose(matrix.sum(axis=1), 0.0, atol=1e-13 * abs(matrix).max())
    assert np.linalg.eigvalsh(matrix.toarray())[1] > 0  # one constant in the null space, no more
    outer = g[mesh.n_internal:]
    with_values = symmetric_matrix(mesh, pattern(mesh), g[:mesh.n_internal], outer)
    np.testing.assert_allclose(np.asarray(with_values.sum(axis=1)).ravel(),
                               np.bincount(mesh.left[mesh.n_internal:], outer, mesh.n_cells),
                               atol=1e-12 * abs(matrix).max())


def test_inverse_blocks_against_numpy() -> None:
    """Full blocks (cells at walls) and diagonal ones, stored as (xx, yy, zz, xy, xz, yz)."""
    r = np.random.default_rng(0)
    root = r.normal(size=(40, 3, 3))
    whole = root @ root.transpose(0, 2, 1) + 0.5 * np.eye(3)
    whole[20:] *= np.eye(3)
    rows, columns = [0, 1, 2, 0, 0, 1], [0, 1, 2, 1, 2, 2]
    extra = r.uniform(0.0, 1.0, 40)
    inverse = inverse_blocks(whole[:, rows, columns], extra)
    wanted = np.linalg.inv(whole + extra[:, None, None] * np.eye(3))[:, rows, columns]
    np.testing.assert_allclose(inverse, wanted, rtol=0, atol=1e-6 * np.abs(wanted).max())


@pytest.mark.parametrize("full_stress", [False, True])
@pytest.mark.parametrize("tetra", [False, True])
def test_diffusion_of_a_linear_field_vanishes_on_non_orthogonal_meshes(tetra: bool,
                                                                      full_stress: bool) -> None:
    mesh = skewed(5, tetra=tetra)
    assert fv3d.quality(mesh).non_orthogonality.max() > 20.0  # degrees
    ready = problem(mesh, density=1e-30, full_stress=full_stress)
    velocity, edge = linear(mesh.cell_centre), linear(edge_centres(mesh))
    gradient = ready.velocity_gradient(velocity, edge)
    equation = momentum(ready, velocity, gradient, edge, np.zeros(mesh.n_faces))
    through = 0.7 * np.abs(SLOPE).max() * mesh.face_area_magnitude.max()
    assert np.abs(equation.rows.residual(velocity)).max() <= 1e-12 * through


@pytest.mark.parametrize("full_stress", [False, True])
def test_traction_of_a_linear_field_is_viscosity_times_gradient_times_area(
        full_stress: bool) -> None:
    mesh = skewed(4, tetra=True)
    ready = problem(mesh, full_stress=full_stress)
    velocity, edge = linear(mesh.cell_centre), linear(edge_centres(mesh))
    gradient = np.broadcast_to(SLOPE, (mesh.n_cells, 3, 3))
    stress = 0.7 * (SLOPE + SLOPE.T if full_stress else SLOPE)
    np.testing.assert_allclose(boundary_traction(ready, velocity, gradient, edge),
                               mesh.face_area[mesh.n_internal:] @ stress.T, atol=1e-12)


@pytest.mark.parametrize("scheme", SCHEMES[1:], ids=repr)
@pytest.mark.parametrize("tetra", [False, True])
def test_convection_of_a_linear_field_is_exact(tetra: bool, scheme: Any) -> None:
    """div(u u) = (grad u) U for u = U + small linear field, to first order in the small one.

    (The surface integral of a product of two linear fields is not exact on one point per face.)
    """
    mesh, small = skewed(4, tetra=tetra), 1e-7
    ready = problem(mesh, viscosity=1e-30, convection=scheme)
    carrier = np.array([0.8, -0.3, 0.5])
    velocity = carrier + small * linear(mesh.cell_centre)
    edge = carrier + small * linear(edge_centres(mesh))
    gradient = ready.velocity_gradient(velocity, edge)
    flux = 1.3 * mesh.face_area @ carrier
    residual = momentum(ready, velocity, gradient, edge, flux).rows.residual(velocity)
    wanted = -1.3 * mesh.cell_volume[:, None] * (SLOPE @ carrier)
    np.testing.assert_allclose(residual / small, wanted, atol=1e-6 * np.abs(wanted).max())


def test_variable_viscosity_conserves_momentum() -> None:
    mesh = box((0, 0, 0), (1, 1, 1), cells=(4, 4, 4), skew=0.2)
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=1.0),
                     boundaries={b: fv3d.Wall() for b in mesh.boundaries},
                     viscosity=np.random.default_rng(0).uniform(0.1, 10.0, mesh.n_cells))
    ready = make_problem(case)
    assert ready.full_stress
    imbalance, size = momentum_imbalance(ready)
    assert np.abs(imbalance).max() <= 1e-13 * size


@pytest.mark.parametrize("full_stress", [False, True])
def test_layers_of_unlike_viscosity_carry_the_same_shear_stress(full_stress: bool) -> None:
    """Couette flow of two layers is an exact solution: stress = U / (h1/mu1 + h2/mu2)."""
    mesh = box((0, 0, 0), (1, 1, 1), cells=(3, 6, 1))
    low, high = 1.0, 20.0
    stress = 1.0 / (0.5 / low + 0.5 / high)

    def couette(x: np.ndarray) -> np.ndarray:
        u = stress * (np.minimum(x[:, 1], 0.5) / low + np.maximum(x[:, 1] - 0.5, 0.0) / high)
        return np.outer(u, (1.0, 0.0, 0.0))
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=1.0),
                     boundaries={b: fv3d.Inlet(couette) for b in mesh.boundaries},
                     viscosity=np.where(mesh.cell_centre[:, 1] < 0.5, low, high),
                     numerics=fv3d.Numerics(full_stress=full_stress))
    ready = make_problem(case)
    velocity, edge = couette(mesh.cell_centre), couette(edge_centres(mesh))
    gradient = ready.velocity_gradient(velocity, edge)
    equation = momentum(ready, velocity, gradient, edge, np.zeros(mesh.n_faces))
    assert np.abs(equation.rows.residual(velocity)[:, 0]).max() <= 1e-12 * stress
    faces = mesh.boundaries["y_max"]
    rows = slice(faces.start - mesh.n_internal, faces.stop - mesh.n_internal)
    traction = boundary_traction(ready, velocity, gradient, edge)[rows, 0]
    assert traction.sum() == pytest.approx(stress, rel=1e-12)


@pytest.mark.parametrize("numerics", [
    {"convection": fv3d.LimitedUpwind()}, {"gradient": fv3d.BarthJespersen()},
    {"gradient": fv3d.MichalakOllivierGooch()}], ids=["scheme", "sharp", "smooth"])
def test_limited_flow_converges_near_the_unlimited(numerics: Any) -> None:
    """Cell Reynolds number 100: nearer to second-order upwind than first-order upwind is."""
    wanted = limited_flow()
    first = limited_flow(convection=fv3d.Upwind())
    found = limited_flow(**numerics)
    assert distance(wanted.mesh, found.velocity, wanted.velocity) < 0.3 * distance(
        wanted.mesh, first.velocity, wanted.velocity)


@cache
def limited_flow(**options: Any) -> fv3d.Run:
    """Flow through a short duct with these methods, relaxed as limiters ask for."""
    mesh = box((0, 0, 0), (2, 1, 1), cells=(10, 7, 7), skew=0.2)
    methods = fv3d.Numerics(coupling=fv3d.SIMPLEC(velocity_relaxation=0.4), **options)
    return solved(duct(mesh, viscosity=0.002, numerics=methods), tolerance=1e-5)


@pytest.mark.parametrize("limiter", [fv3d.BarthJespersen, fv3d.MichalakOllivierGooch])
@pytest.mark.parametrize("wrapped", ["least squares", fv3d.LeastSquares, None])
def test_a_limiter_of_no_gradient_method_is_refused(limiter: Any, wrapped: Any) -> None:
    with pytest.raises(fv3d.CaseError, match="wraps a gradient method"):
        limiter(gradient=wrapped)


def test_values_at_points_and_pressure_use_the_gradient_that_is_wrapped() -> None:
    mesh = skewed(3, tetra=True)
    plain = problem(mesh)
    limited = problem(mesh, gradient=fv3d.BarthJespersen(fv3d.MichalakOllivierGooch()))
    np.testing.assert_array_equal(limited.pressure_gradient.weights,
                                  plain.pressure_gradient.weights)
    points = mesh.cell_centre[:4] + 1e-3
    one, other = (point_interpolation(mesh, p.velocity_gradient, points) for p in (plain, limited))
    assert abs(one.cells - other.cells).max() == 0.0
