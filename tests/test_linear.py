"""Multigrid conjugate gradients against their contract; stretched cells."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import scipy.sparse as sparse
from contracts import LINEAR, Check, poisson, skewed, true_residual

import fv3d
from fv3d.errors import CaseError
from fv3d.mesh.generate import box
from fv3d.operators import linear

METHODS = [fv3d.SmoothedAggregation(), fv3d.Classical(), fv3d.ByAnisotropy()]


@pytest.mark.parametrize("check", LINEAR.values(), ids=LINEAR)
@pytest.mark.parametrize("method", METHODS, ids=lambda m: type(m).__name__)
def test_contract(method: Any, check: Check) -> None:
    check(method)


def stretched(n: int, ratio: float) -> fv3d.Mesh:
    """Box of n^3 cells, ``ratio`` times as long as high."""
    return box((0, 0, 0), (ratio, 1.0, 1.0), cells=(n, n, n))


@pytest.mark.parametrize("singular", [False, True])
def test_aspect_ratio_100_within_25_iterations(singular: bool) -> None:
    mesh = stretched(24, 100.0)
    assert fv3d.quality(mesh).aspect_ratio.max() == pytest.approx(100.0, rel=1e-6)
    matrix, rhs = poisson(mesh, singular=singular)
    rhs -= rhs.mean() if singular else 0.0
    result = linear.solve(linear.prepare(matrix, singular=singular), rhs, matrix=matrix,
                          tolerance=1e-6)
    assert true_residual(matrix, result.solution, rhs) <= 1.01e-6
    assert result.iterations <= 25


def test_graded_towards_the_walls_within_25_iterations() -> None:
    """Aspect ratios from 1 to 100 in one mesh, as boundary layers have them."""
    mesh = box((0, 0, 0), (1, 1, 1), cells=(24, 24, 24),
               grading=(None, fv3d.TwoSided(100.0), fv3d.TwoSided(100.0)))
    assert fv3d.quality(mesh).aspect_ratio.max() > 40.0
    matrix, rhs = poisson(mesh)
    result = linear.solve(linear.prepare(matrix), rhs, matrix=matrix, tolerance=1e-6)
    assert result.outcome.good and result.iterations <= 25


def test_anisotropy_decides_the_method() -> None:
    for mesh, method in ((stretched(8, 1.0), fv3d.SmoothedAggregation()),
                         (skewed(6, tetra=True), fv3d.SmoothedAggregation()),
                         (stretched(8, 100.0), fv3d.Classical())):
        matrix, _ = poisson(mesh)
        chosen = fv3d.ByAnisotropy().prolongations(matrix)
        wanted = method.prolongations(matrix)
        assert [p.shape for p in chosen] == [p.shape for p in wanted]


def test_share_of_stretched_rows_by_a_plain_loop() -> None:
    matrix, _ = poisson(skewed(5), spread=1.5)
    rows = 0
    for i in range(matrix.shape[0]):
        row = np.abs(matrix.getrow(i).toarray().ravel())
        row[i] = 0.0
        rows += row.max() > 12.0 * row[row > 0].min()
    assert linear.stretched_share(matrix, limit=12.0) == rows / matrix.shape[0]


def test_a_good_start_costs_nothing() -> None:
    matrix, rhs = poisson(skewed(6))
    prepared = linear.prepare(matrix)
    first = linear.solve(prepared, rhs, matrix=matrix, tolerance=1e-9)
    again = linear.solve(prepared, rhs, matrix=matrix, tolerance=1e-8, start=first.solution)
    assert again.iterations == 0
    assert linear.solve(prepared, 0 * rhs, matrix=matrix, tolerance=1e-8).iterations == 0


def test_one_cell_and_few_cells() -> None:
    for n in (1, 2):
        matrix, rhs = poisson(box((0, 0, 0), (1, 1, 1), cells=(n, n, n)))
        result = linear.solve(linear.prepare(matrix), rhs, matrix=matrix, tolerance=1e-10)
        assert true_residual(matrix, result.solution, rhs) <= 1.01e-10


def test_a_row_without_diagonal_is_refused() -> None:
    matrix = sparse.csr_matrix(np.diag([1.0, 0.0, 2.0]))
    with pytest.raises(CaseError, match="row 1"):
        linear.prepare(matrix)


def test_it_says_what_it_is() -> None:
    matrix, _ = poisson(skewed(10))
    assert "levels 1000 > " in repr(linear.prepare(matrix))


def test_the_global_random_state_is_left_alone() -> None:
    np.random.seed(7)  # noqa: NPY002
    before = np.random.get_state()[1].copy()  # noqa: NPY002
    linear.prepare(poisson(skewed(8))[0])
    np.testing.assert_array_equal(before, np.random.get_state()[1])  # noqa: NPY002


@pytest.mark.parametrize("singular", [False, True])
def test_small_constant_matrices_are_factorised(singular: bool) -> None:
    """Against SciPy's conjugate gradients."""
    matrix, rhs = poisson(skewed(6, tetra=True), singular=singular)
    rhs = rhs - rhs.mean() if singular else rhs
    prepared = linear.prepare_constant(matrix, singular=singular)
    result = linear.solve(prepared, rhs, matrix=matrix, tolerance=1e-9)
    assert isinstance(prepared, linear.Factorised) and result.outcome.good
    wanted, _ = sparse.linalg.cg(matrix, rhs, rtol=1e-12)
    wanted -= wanted.mean() if singular else 0.0
    np.testing.assert_allclose(result.solution, wanted, atol=1e-8 * np.abs(wanted).max())
    large = linear.prepare_constant(matrix, singular=singular, direct_below=10)
    assert isinstance(large, linear.Prepared)


def test_a_hierarchy_is_built_again_from_its_matrices() -> None:
    """To the last bit: what a checkpoint stores of it."""
    matrix, rhs = poisson(skewed(8, tetra=True))
    changed = matrix.copy()
    changed.data *= np.exp(0.1 * np.sin(np.abs(changed.data)))
    changed = 0.5 * (changed + changed.T).tocsr()
    once = linear.refresh(linear.refresh(linear.prepare(matrix), 2.0 * changed), changed)
    again = linear.refresh(linear.prepare(once.built_from[0]), once.built_from[1])
    np.testing.assert_array_equal(once.precondition(rhs), again.precondition(rhs))
