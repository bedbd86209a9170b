"""What every linear solver promises."""

from __future__ import annotations

from typing import Any

import numpy as np

from fv3d.mesh.mesh import Mesh

from .tools import Check, skewed


def poisson(mesh: Mesh, *, singular: bool = False, seed: int = 0,
            spread: float = 0.0) -> tuple[Any, np.ndarray]:
    """Pressure-like matrix of a mesh, coefficients spread by ``exp(+-spread)``, random rhs."""
    from fv3d.operators.assembly import orthogonal_factor, pattern, symmetric_matrix
    r, n = np.random.default_rng(seed), mesh.n_internal
    g = orthogonal_factor(mesh)
    outer = np.zeros(mesh.n_boundary)
    if not singular:
        faces = mesh.boundaries["x_max"]
        outer[faces.start - n:faces.stop - n] = g[faces]
    inner = g[:n] * np.exp(r.uniform(-spread, spread, n))
    return symmetric_matrix(mesh, pattern(mesh), inner, outer), r.normal(size=mesh.n_cells)


def true_residual(matrix: Any, x: np.ndarray, rhs: np.ndarray) -> float:
    return float(np.linalg.norm(rhs - matrix @ x) / np.linalg.norm(rhs))


def solver_meets_its_tolerance_in_the_true_residual(method: Any) -> None:
    from fv3d.operators import linear
    for tetra in (False, True):
        matrix, rhs = poisson(skewed(10, tetra=tetra), spread=1.0)
        prepared = linear.prepare(matrix, method=method)
        for tolerance in (1e-1, 1e-6, 1e-11):
            result = linear.solve(prepared, rhs, matrix=matrix, tolerance=tolerance)
            assert result.outcome.good
            assert true_residual(matrix, result.solution, rhs) <= 1.01 * tolerance
            assert result.residual == approx(true_residual(matrix, result.solution, rhs))


def approx(value: float) -> Any:
    import pytest
    return pytest.approx(value, rel=1e-6, abs=1e-16)


def solver_says_when_it_missed(method: Any) -> None:
    from fv3d.operators import linear
    matrix, rhs = poisson(skewed(10))
    result = linear.solve(linear.prepare(matrix, method=method), rhs, matrix=matrix,
                          tolerance=1e-10, max_iterations=2)
    assert not result.outcome.good and result.outcome.next_step
    assert result.iterations == 2
    assert result.residual == approx(true_residual(matrix, result.solution, rhs))
    beyond = linear.solve(linear.prepare(matrix, method=method), rhs, matrix=matrix,
                          tolerance=1e-30, max_iterations=60)  # below rounding
    assert not beyond.outcome.good


def solver_answers_as_a_direct_solver(method: Any) -> None:
    """SciPy's sparse LU as the outside check."""
    from scipy.sparse.linalg import spsolve

    from fv3d.operators import linear
    matrix, rhs = poisson(skewed(8, tetra=True), spread=1.5)
    result = linear.solve(linear.prepare(matrix, method=method), rhs, matrix=matrix,
                          tolerance=1e-12)
    exact = spsolve(matrix.tocsc(), rhs)
    assert np.abs(result.solution - exact).max() <= 1e-9 * np.abs(exact).max()


def solver_answers_the_same_from_an_old_setup(method: Any) -> None:
    """A hierarchy of a similar matrix, and one refreshed from it, change the cost only."""
    from fv3d.operators import linear
    mesh = skewed(9)
    old, _ = poisson(mesh, spread=0.5, seed=1)
    matrix, rhs = poisson(mesh, spread=0.5, seed=2)
    fresh, reused = linear.prepare(matrix, method=method), linear.prepare(old, method=method)
    refreshed = linear.refresh(reused, matrix)
    answers = [linear.solve(p, rhs, matrix=matrix, tolerance=1e-11)
               for p in (fresh, reused, refreshed)]
    for other in answers[1:]:
        assert other.outcome.good
        size = np.abs(answers[0].solution).max()
        assert np.abs(other.solution - answers[0].solution).max() <= 1e-8 * size
    again = linear.solve(fresh, rhs, matrix=matrix, tolerance=1e-11)
    np.testing.assert_array_equal(again.solution, answers[0].solution)


def solver_handles_singular_systems(method: Any) -> None:
    """No fixed value: the compatible part is solved, the answer has zero mean."""
    from fv3d.operators import linear
    for tetra in (False, True):
        matrix, rhs = poisson(skewed(8, tetra=tetra), singular=True)
        rhs += 0.3
        prepared = linear.prepare(matrix, method=method, singular=True)
        result = linear.solve(prepared, rhs, matrix=matrix, tolerance=1e-9)
        assert result.outcome.good
        assert abs(result.solution.mean()) <= 1e-12 * np.abs(result.solution).max()
        assert true_residual(matrix, result.solution, rhs - rhs.mean()) <= 1.01e-9


def solver_does_not_slow_down_as_the_mesh_is_refined(method: Any) -> None:
    from fv3d.operators import linear
    counts = []
    for n in (8, 16, 26):
        matrix, rhs = poisson(skewed(n))
        result = linear.solve(linear.prepare(matrix, method=method), rhs, matrix=matrix,
                              tolerance=1e-8)
        counts.append(result.iterations)
    assert counts[-1] <= counts[0] + 8 and counts[-1] <= 30


def solver_repeats_to_the_last_bit(method: Any) -> None:
    from fv3d.operators import linear
    matrix, rhs = poisson(skewed(8, tetra=True), spread=1.0)
    one, two = (linear.solve(linear.prepare(matrix, method=method), rhs, matrix=matrix,
                             tolerance=1e-6).solution for _ in range(2))
    np.testing.assert_array_equal(one, two)


LINEAR: dict[str, Check] = {f.__name__: f for f in (
    solver_meets_its_tolerance_in_the_true_residual, solver_says_when_it_missed,
    solver_answers_as_a_direct_solver, solver_answers_the_same_from_an_old_setup,
    solver_handles_singular_systems, solver_does_not_slow_down_as_the_mesh_is_refined,
    solver_repeats_to_the_last_bit)}
