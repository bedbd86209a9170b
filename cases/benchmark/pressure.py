"""The pressure solve to 1e-6 beside a general algebraic-multigrid library, and stretched cells.

``python cases/benchmark/pressure.py [--cells 100] [--tetra]`` prints set-up and solve of the
pressure-correction matrix of a lid-driven cube, right-hand side included, by fv3d and by pyamg:
as it comes, and tuned (classical strength 0.25, Chebyshev smoothing of second degree between an
eighth and 1.1 of the largest eigenvalue).  Both are conjugate gradients preconditioned by one
cycle, to the same relative residual.  Then the iterations on cells of aspect ratio 100.
Nothing is asserted.
"""

from __future__ import annotations

import argparse
import time
import warnings
from collections.abc import Callable
from typing import Any

import numpy as np
import pyamg
from run import cavity
from threadpoolctl import threadpool_limits

import fv3d
from fv3d.flow import coupling
from fv3d.flow.problem import make_problem
from fv3d.flow.start import start_state
from fv3d.operators import linear

TOLERANCE = 1e-6
SMOOTHER = ("chebyshev", {"degree": 2, "lower_bound": 1 / 8, "upper_bound": 1.1})


def pressure_equation(case: fv3d.Case) -> tuple[Any, np.ndarray]:
    """Matrix and right-hand side of the third iteration's pressure correction."""
    taken: list[tuple[Any, np.ndarray]] = []
    kept = coupling.solve_pressure

    def noting(problem: Any, workspace: Any, matrix: Any, rhs: np.ndarray, tolerance: float) -> Any:
        taken.append((matrix, rhs))
        return kept(problem, workspace, matrix, rhs, tolerance)

    problem = make_problem(case)
    workspace = coupling.make_workspace(problem)
    state = start_state(problem, None, workspace)
    coupling.solve_pressure = noting
    try:
        for _ in range(3):
            state, _ = coupling.step(problem, state, workspace)
    finally:
        coupling.solve_pressure = kept
    matrix, rhs = taken[-1]
    return matrix, rhs - rhs.mean()


def best(function: Callable[[], Any], count: int = 3) -> tuple[float, Any]:
    """Shortest of some calls [s], and what the last gave."""
    spans = []
    for _ in range(count):
        began = time.perf_counter()
        given = function()
        spans.append(time.perf_counter() - began)
    return min(spans), given


def by_fv3d(matrix: Any, rhs: np.ndarray) -> float:
    """Print and return the seconds of a solve."""
    setup, prepared = best(lambda: linear.prepare(matrix, singular=True), 1)
    span, result = best(lambda: linear.solve(prepared, rhs, matrix=matrix, tolerance=TOLERANCE))
    print(f"  fv3d            {span * 1e3:8.0f} ms, {result.iterations:3d} iterations, residual "
          f"{result.residual:.1e}, set-up {setup:.1f} s", flush=True)
    return span


def by_pyamg(name: str, matrix: Any, rhs: np.ndarray, **options: Any) -> float:
    """Print and return the seconds of a solve."""
    with threadpool_limits(limits=1):
        setup, hierarchy = best(lambda: pyamg.smoothed_aggregation_solver(
            matrix, coarse_solver="pinv", **options), 1)
        history: list[float] = []

        def solve() -> np.ndarray:
            history.clear()
            return hierarchy.solve(rhs, tol=TOLERANCE, accel="cg", residuals=history, maxiter=100)

        span, x = best(solve)
    left = np.linalg.norm(rhs - matrix @ x) / np.linalg.norm(rhs)
    print(f"  {name:15s} {span * 1e3:8.0f} ms, {len(history) - 1:3d} iterations, residual "
          f"{left:.1e}, set-up {setup:.1f} s", flush=True)
    return span


def stretched(cells: int) -> None:
    """Iterations on cells of aspect ratio 100."""
    from fv3d.operators.assembly import orthogonal_factor, pattern, symmetric_matrix
    mesh = fv3d.box((0, 0, 0), (1.0, 1.0, 0.01), cells=(cells, cells, cells))
    inner = orthogonal_factor(mesh)[:mesh.n_internal]
    matrix = symmetric_matrix(mesh, pattern(mesh), inner, np.zeros(mesh.n_boundary))
    rhs = np.random.default_rng(0).standard_normal(mesh.n_cells)
    prepared = linear.prepare(matrix, singular=True)
    result = linear.solve(prepared, rhs, matrix=matrix, tolerance=TOLERANCE)
    print(f"stretched   aspect ratio 100, {mesh.n_cells} cells: {result.iterations} iterations to "
          f"{result.residual:.1e}")


def main() -> None:
    """Measure and print."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--cells", type=int, default=100)
    options.add_argument("--tetra", action="store_true")
    chosen = options.parse_args()
    matrix, rhs = pressure_equation(cavity(chosen.cells, chosen.tetra))
    print(f"pressure    {matrix.shape[0]} rows, {matrix.nnz} entries, {fv3d.get_threads()} threads")
    own = by_fv3d(matrix, rhs)
    usual = by_pyamg("pyamg", matrix, rhs)
    tuned = by_pyamg("pyamg, tuned", matrix, rhs, strength=("classical", {"theta": 0.25}),
                     improve_candidates=None, symmetry="symmetric", max_coarse=300,
                     presmoother=SMOOTHER, postsmoother=SMOOTHER)
    print(f"ratios      as it comes {usual / own:.1f}, tuned {tuned / own:.1f}")
    stretched(min(chosen.cells, 50))


if __name__ == "__main__":
    warnings.simplefilter("ignore")
    main()
