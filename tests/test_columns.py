"""What feedback keeps where it is not zero, against the same over whole fields."""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
import pytest
import scipy.sparse as sparse
from made import duct
from test_kernel import at

from fv3d.flow.coupling import Sweeps
from fv3d.flow.equations import momentum
from fv3d.flow.problem import Problem, make_problem
from fv3d.flow.projected import force_flux, force_potential, make_projection, projected
from fv3d.measured.columns import columns
from fv3d.measured.kernel import Gaussian
from fv3d.measured.layout import Layout, make_layout
from fv3d.measured.potential import force_flux_near, free_gradient, push_of
from fv3d.measured.response import (
    KEPT_FROM,
    LEVELS,
    has_changed,
    make_pushes,
    near_equation,
    sweep_response,
    swept,
)
from fv3d.mesh.generate import box
from fv3d.operators import kernels_places
from fv3d.operators.assembly import inverse_blocks

PLACES = np.array([[0.6, 0.4, 0.5], [1.3, 0.06, 0.6], [1.9, 0.5, 0.5]])  # two near boundaries
KINDS = ["hex", "tet"]


@cache
def made(kind: str) -> tuple[Problem, Layout]:
    mesh = box((0, 0, 0), (2, 1, 1), cells=(12, 8, 8) if kind == "hex" else (7, 4, 4),
               tetra=kind == "tet", skew=0.2)
    problem = make_problem(duct(mesh))
    return problem, make_layout(problem, at(PLACES, u=0.0, v=0.0, w=0.0), Gaussian(0.12))


@cache
def sweeps(kind: str, speed: float = 1.0) -> Sweeps:
    """Sweeps of the momentum equation of a uniform stream along x [m/s]."""
    problem, _ = made(kind)
    mesh = problem.mesh
    velocity = np.tile([speed, 0.0, 0.0], (mesh.n_cells, 1))
    edge = np.tile([speed, 0.0, 0.0], (mesh.n_boundary, 1))
    equation = momentum(problem, velocity, np.zeros((mesh.n_cells, 3, 3)), edge,
                        speed * mesh.face_area[:, 0])
    return Sweeps(problem.pattern, equation.rows.data.astype(np.float32),
                  inverse_blocks(equation.rows.block, 0.1 * equation.diagonal), 4)


def random_parts(rows: int, places: int, width: int) -> tuple[list[np.ndarray], list[np.ndarray]]:
    r = np.random.default_rng(5)
    reached = [np.sort(r.choice(rows, size, replace=False)).astype(np.int32)
               for size in r.integers(0, rows, places)]
    return reached, [r.normal(size=(len(part), width)) for part in reached]


@pytest.mark.parametrize("width", [3, 9])
def test_columns_add_what_a_sparse_product_adds(width: int) -> None:
    """SciPy's product with the same matrix, from one and from two threads alike."""
    rows, places = 500, 7
    reached, blocks = random_parts(rows, places, width)
    matrix = np.zeros((rows, width // 3, places, 3))
    for place, (where, block) in enumerate(zip(reached, blocks, strict=True)):
        matrix[where, :, place] = block.reshape(len(where), -1, 3)
    strength = np.random.default_rng(6).normal(size=(places, 3))
    before = np.random.default_rng(7).normal(size=(rows, 3) if width == 9 else rows)
    wanted = before.ravel() + sparse.csr_matrix(matrix.reshape(-1, 3 * places)) @ strength.ravel()
    own = columns(reached, blocks)
    got = own.add(strength, before.copy())
    np.testing.assert_allclose(got.ravel(), wanted, atol=1e-12)
    np.testing.assert_array_equal(own.filled(blocks).block, own.block)
    kernel = kernels_places.add_vectors if width == 9 else kernels_places.add_scalars
    threaded = before.copy()
    kernel._threaded(*(a.view(np.uint32) if a.dtype == np.int32 else a for a in
                       (own.rows, own.offsets, own.place, own.block, strength, threaded)))
    np.testing.assert_array_equal(threaded, got)


@pytest.mark.parametrize("rows", [1, 2048, 5000])
def test_dense_columns_add_their_product(rows: int) -> None:
    r = np.random.default_rng(8)
    matrix = r.integers(-LEVELS, LEVELS, (12, rows)).astype(np.int16)
    factor = r.normal(size=12).astype(np.float32) / np.float32(LEVELS)
    factor[3] = 0.0
    before = r.normal(size=rows)
    out, threaded = before.copy(), before.copy()
    kernels_places.add_dense(out, matrix, factor)
    np.testing.assert_allclose(out, before + matrix.T.astype(float) @ factor, atol=1e-5)
    exact = before.copy()
    kernels_places.add_dense(exact, matrix, factor.astype(float))
    np.testing.assert_allclose(exact, before + matrix.T.astype(float) @ factor, atol=1e-12)
    kernels_places.add_dense._threaded(threaded, matrix, factor)
    np.testing.assert_array_equal(threaded, out)


@pytest.mark.parametrize("kind", KINDS)
def test_force_near_the_readings_is_the_whole_one(kind: str) -> None:
    _, layout = made(kind)
    strength = np.random.default_rng(9).normal(size=(len(PLACES), 3))
    force = layout.force(strength)
    np.testing.assert_allclose(force.cell.ravel(), layout.cell @ strength.ravel(), atol=1e-13)
    np.testing.assert_allclose(force.drop, layout.drop @ strength.ravel(), atol=1e-13)
    assert not layout.force(np.zeros_like(strength)).cell.any()


@pytest.mark.parametrize("kind", KINDS)
def test_flux_and_gradient_of_one_force(kind: str) -> None:
    problem, layout = made(kind)
    force = layout.force(np.eye(3)[[1, 2, 0]])
    np.testing.assert_allclose(force_flux_near(problem, force), force_flux(problem, force),
                               atol=1e-14)
    potential = force_potential(problem, make_projection(problem), force)
    push = projected(problem, force, potential)
    rest = 0.1 * potential[::-1]
    one, other = (f(problem, force, potential, rest) for f in (projected, push_of))
    for name in ("velocity", "mass_flux", "pressure"):
        np.testing.assert_allclose(getattr(other, name), getattr(one, name), atol=1e-12)
    np.testing.assert_allclose(force.cell - free_gradient(problem, potential), push.velocity,
                               atol=1e-12)


def pushes(kind: str) -> Any:
    problem, layout = made(kind)
    return make_pushes(problem, layout, np.ones(3 * len(PLACES), dtype=bool))


@pytest.mark.parametrize("kind", KINDS)
def test_pushes_are_the_projected_forces(kind: str) -> None:
    """Net force to what is dropped, pressure to its 16 bits, both to the potential's 1e-2."""
    problem, layout = made(kind)
    own, projection = pushes(kind), make_projection(problem)
    mass = problem.case.fluid.density * problem.mesh.cell_volume
    for place in range(len(PLACES)):
        for axis in range(3):
            strength = np.zeros((len(PLACES), 3))
            strength[place, axis] = 1.0
            force = layout.force(strength)
            push = projected(problem, force, force_potential(problem, projection, force))
            net = np.zeros_like(force.cell)
            region = own.regions[place]
            net[region] = own.net[place].reshape(-1, 3, 3)[..., axis] / mass[region, None]
            size = np.abs(push.velocity).max()
            assert np.abs(net - push.velocity).max() <= (KEPT_FROM + 0.03) * size
            got = own.pressure_change(strength)
            assert np.abs(got - push.pressure).max() <= 0.03 * np.abs(push.pressure).max()


@pytest.mark.parametrize("kind", KINDS)
def test_answers_in_regions_are_those_of_the_sweeps(kind: str) -> None:
    """The general sweep over the same rows, one axis at a time; at the readings SciPy's product."""
    problem, layout = made(kind)
    own, relax, n = pushes(kind), sweeps(kind), problem.mesh.n_cells
    response = sweep_response(n, own, relax)
    for place, region in enumerate(own.regions):
        local = np.full(n, -1, dtype=np.int32)
        local[region] = np.arange(len(region))
        blocks = swept(relax, region, local, own.net[place]).reshape(-1, 3, 3)
        for axis in range(3):
            rhs = np.zeros((n, 3), dtype=np.float32)
            rhs[region] = own.net[place].reshape(-1, 3, 3)[..., axis]
            wanted = relax(rhs, region, np.zeros((n, 3), dtype=np.float32))
            size = np.abs(wanted).max()
            np.testing.assert_allclose(blocks[..., axis], wanted[region], atol=1e-5 * size)
            strength = np.zeros((len(PLACES), 3))
            strength[place, axis] = 1.0
            answer = response.velocity.add(strength, np.zeros((n, 3)))
            np.testing.assert_allclose(answer, wanted, atol=1e-5 * size)
            np.testing.assert_allclose(response.net[:, 3 * place + axis],
                                       layout.sampling @ wanted.ravel(), atol=1e-5 * size)
    assert np.diag(response.whole).min() > 0.0


def test_an_answer_is_outdated_when_the_equation_has_changed() -> None:
    own = pushes("hex")
    response = sweep_response(made("hex")[0].mesh.n_cells, own, sweeps("hex"))
    for speed, wanted in ((1.0, False), (1.001, False), (3.0, True), (-1.0, True)):
        equation = near_equation(own, sweeps("hex", speed))
        assert has_changed(response, equation, len(own.sampled)) is wanted
