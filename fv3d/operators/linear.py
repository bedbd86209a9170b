"""Conjugate gradients preconditioned by algebraic multigrid: ``prepare`` once, ``solve`` often.

The hierarchy is built by pyamg, kept in single precision and reused as preconditioner of a
double-precision conjugate-gradient iteration while the matrix changes slowly; ``refresh``
recomputes the coarse matrices with the prolongation kept.  The only home of pyamg.

Sources: Vanek, P., Mandel, J. and Brezina, M. (1996), Computing 56, 179-196 (smoothed
aggregation); Ruge, J. W. and Stueben, K. (1987) (classical); Adams, M. et al. (2003),
J. Comput. Phys. 188, 593-610 (Chebyshev smoothing).
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np
import scipy.sparse as sparse

from ..errors import CaseError, Outcome
from . import kernels_solving as kernels

SINGLE = np.float32
LOOSE = 1e-4  # tolerance above which the residual is not computed once more at the end


@dataclass(frozen=True)
class SmoothedAggregation:
    """Smoothed aggregation; for meshes whose cells are not far from isotropic."""

    strength: float = 0.25
    max_coarse: int = 300

    def prolongations(self, matrix: sparse.csr_matrix) -> list[sparse.csr_matrix]:
        """Prolongation of each level, finest first."""
        import pyamg
        hierarchy = pyamg.smoothed_aggregation_solver(
            matrix, strength=("classical", {"theta": self.strength}), improve_candidates=None,
            symmetry="symmetric", max_coarse=self.max_coarse, presmoother=None, postsmoother=None,
            coarse_solver=None)
        return [sparse.csr_matrix(level.P) for level in hierarchy.levels[:-1]]


@dataclass(frozen=True)
class Classical:
    """Classical coarse/fine splitting; for stretched cells, which break aggregation."""

    strength: float = 0.25
    max_coarse: int = 300

    def prolongations(self, matrix: sparse.csr_matrix) -> list[sparse.csr_matrix]:
        """Prolongation of each level, finest first."""
        import pyamg
        hierarchy = pyamg.ruge_stuben_solver(
            matrix, strength=("classical", {"theta": self.strength}), max_coarse=self.max_coarse,
            presmoother=None, postsmoother=None, coarse_solver=None)
        return [sparse.csr_matrix(level.P) for level in hierarchy.levels[:-1]]


@dataclass(frozen=True)
class ByAnisotropy:
    """Aggregation where the matrix is near isotropic, classical splitting where it is not.

    ``limit`` is the ratio of a row's largest to its median off-diagonal entry above which the
    row counts as stretched, ``share`` the share of such rows that decides.
    """

    limit: float = 12.0
    share: float = 0.05

    def prolongations(self, matrix: sparse.csr_matrix) -> list[sparse.csr_matrix]:
        """Prolongation of each level, finest first."""
        chosen = Classical() if stretched_share(matrix, limit=self.limit) > self.share \
            else SmoothedAggregation()
        return chosen.prolongations(matrix)


def stretched_share(matrix: sparse.csr_matrix, *, limit: float) -> float:
    """Share of rows whose largest off-diagonal entry exceeds ``limit`` times the smallest."""
    size = np.abs(matrix.data)
    rows = np.repeat(np.arange(matrix.shape[0]), np.diff(matrix.indptr))
    off = (matrix.indices != rows) & (size > 0)
    largest = np.zeros(matrix.shape[0])
    smallest = np.full(matrix.shape[0], np.inf)
    np.maximum.at(largest, rows[off], size[off])
    np.minimum.at(smallest, rows[off], size[off])
    return float(np.mean(largest > limit * smallest))


@dataclass(eq=False)
class _Level:
    """One level of the cycle; work vectors included, all single precision."""

    matrix: sparse.csr_matrix
    inverse_diagonal: np.ndarray
    bound: float
    prolongation: sparse.csr_matrix | None = None
    restriction: sparse.csr_matrix | None = None
    work: list[np.ndarray] = field(default_factory=list)


@dataclass(eq=False)
class Prepared:
    """A multigrid hierarchy ready for :func:`solve`.

    ``built_from`` holds the matrix of the prolongations and that of the coarse matrices: preparing
    with the first and refreshing with the second builds the same hierarchy again.  Work space of
    one solver; not for use by two threads at once.
    """

    levels: list[_Level]
    prolongations: list[sparse.csr_matrix]
    coarse_inverse: np.ndarray
    singular: bool
    built_from: tuple[sparse.csr_matrix, sparse.csr_matrix]
    iterations_when_fresh: int = 0

    def __repr__(self) -> str:
        sizes = " > ".join(str(level.matrix.shape[0]) for level in self.levels)
        entries = sum(level.matrix.nnz for level in self.levels) / self.levels[0].matrix.nnz
        return f"Prepared(levels {sizes}, operator complexity {entries:.2f})"

    def precondition(self, rhs: np.ndarray) -> np.ndarray:
        """One V-cycle from zero on ``rhs`` (n,) -> (n,), float64 in and out."""
        self.levels[0].work[0][:] = rhs
        return self._cycle(0).astype(np.float64)

    def _cycle(self, depth: int) -> np.ndarray:
        """Approximate solution for the right-hand side in the level's first work vector."""
        level = self.levels[depth]
        rhs, x, direction, other = level.work
        if level.prolongation is None or level.restriction is None:
            x[:] = np.einsum("ij,j->i", self.coarse_inverse, rhs)
            return x
        a, p, r = level.matrix, level.prolongation, level.restriction
        keep, first, second = _chebyshev_numbers(level.bound)
        smoother = (a.indptr, a.indices, a.data, level.inverse_diagonal, rhs)
        kernels.chebyshev_start(level.inverse_diagonal, rhs, first, direction, x)
        kernels.chebyshev_step(*smoother, keep, second, direction, x, other)
        kernels.residual_product(a.indptr, a.indices, a.data, other, rhs, x)
        kernels.product(r.indptr, r.indices, r.data, x, self.levels[depth + 1].work[0])
        kernels.product_add(p.indptr, p.indices, p.data, self._cycle(depth + 1), other)
        kernels.chebyshev_step(*smoother, SINGLE(0), first, direction, other, x)
        kernels.chebyshev_step(*smoother, keep, second, direction, x, other)
        return other


@dataclass(eq=False)
class Factorised:
    """A triangular factorisation ready for :func:`solve`; of small matrices that stay constant."""

    factors: Any
    singular: bool
    built_from: tuple[sparse.csr_matrix, sparse.csr_matrix]

    def __repr__(self) -> str:
        return f"Factorised({self.built_from[0].shape[0]} rows, {self.factors.nnz} entries)"


class Preconditioner(Protocol):
    """What :func:`solve` needs of a hierarchy or of what takes its place."""

    @property
    def singular(self) -> bool:
        """Whether the constant vector is in the null space."""
        ...

    def precondition(self, rhs: np.ndarray) -> np.ndarray:
        """Approximate solution (n,) of a right-hand side (n,), symmetric."""
        ...


@dataclass(frozen=True, eq=False)
class LinearResult:
    """Solution of a linear system and how well it was reached.

    ``residual`` is the true residual norm relative to the right-hand side; of a loose solution
    (tolerance from ``LOOSE`` on) the running one of the iteration, which is the same to rounding.
    """

    solution: np.ndarray
    outcome: Outcome
    iterations: int
    residual: float


def _chebyshev_numbers(bound: float) -> tuple[np.float32, np.float32, np.float32]:
    low, high = bound / 8.0, 1.1 * bound
    middle, half = 0.5 * (high + low), 0.5 * (high - low)
    sigma = middle / half
    rho = 1.0 / (2.0 * sigma - 1.0 / sigma)
    return SINGLE(rho / sigma), SINGLE(1.0 / middle), SINGLE(2.0 * rho / half)


def prepare(matrix: sparse.csr_matrix, *, method: Any = None, singular: bool = False) -> Prepared:
    """Build a multigrid hierarchy for a symmetric positive (semi)definite matrix.

    Parameters
    ----------
    matrix : (n, n) csr_matrix
    method : SmoothedAggregation, Classical or ByAnisotropy (default)
    singular : bool
        The constant vector is in the null space (no fixed value anywhere).

    Raises
    ------
    CaseError
        A row has no positive diagonal.
    """
    from threadpoolctl import threadpool_limits
    diagonal = matrix.diagonal()
    if not np.all(diagonal > 0):
        bad = int(np.flatnonzero(~(diagonal > 0))[0])
        raise CaseError("A linear system has a row without positive diagonal.", where=f"row {bad}",
                        got=float(diagonal[bad]), remedy="Look for cells cut off from the mesh.")
    with threadpool_limits(limits=1), _fixed_randomness():
        prolongations = (method or ByAnisotropy()).prolongations(matrix)
        return _with_coarse_matrices(matrix, prolongations, singular, matrix)


def prepare_constant(matrix: sparse.csr_matrix, *, method: Any = None, singular: bool = False,
                     direct_below: int = 10_000) -> Prepared | Factorised:
    """Prepare for many solutions with one matrix: factorised below a number of rows.

    Parameters
    ----------
    matrix, method, singular
        As in :func:`prepare`.
    direct_below : int
        Rows below which the matrix is factorised.
    """
    if matrix.shape[0] >= direct_below:
        return prepare(matrix, method=method, singular=singular)
    from scipy.sparse.linalg import splu
    whole = matrix.tocsc(copy=True)
    if singular:  # one value is held at zero; what is solved for has zero mean in the end
        whole[0, 0] *= 2.0
    factors = splu(whole, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0,
                   options={"SymmetricMode": True})
    return Factorised(factors, singular, (matrix, matrix))


@contextmanager
def _fixed_randomness() -> Iterator[None]:
    """pyamg draws start vectors from numpy's global generator: fix it, so that runs repeat."""
    kept = np.random.get_state()  # noqa: NPY002
    np.random.seed(1)  # noqa: NPY002
    try:
        yield
    finally:
        np.random.set_state(kept)  # noqa: NPY002


def refresh(prepared: Prepared, matrix: sparse.csr_matrix) -> Prepared:
    """New coarse matrices for a changed matrix of the same pattern, prolongations kept."""
    return _with_coarse_matrices(matrix, prepared.prolongations, prepared.singular,
                                 prepared.built_from[0])


def _with_coarse_matrices(matrix: sparse.csr_matrix, prolongations: list[sparse.csr_matrix],
                          singular: bool, first: sparse.csr_matrix) -> Prepared:
    levels, built_from = [], (first, matrix)
    for depth in range(len(prolongations) + 1):
        inverse = 1.0 / matrix.diagonal()
        last = depth == len(prolongations)
        p = None if last else prolongations[depth]
        r = None if p is None else p.T.tocsr()
        level = _Level(_single(matrix), inverse.astype(SINGLE),
                       1.0 if last else _spectral_bound(matrix, inverse),
                       None if p is None else _single(p), None if r is None else _single(r),
                       [np.zeros(matrix.shape[0], SINGLE) for _ in range(4)])
        levels.append(level)
        if p is not None and r is not None:
            matrix = (r @ (matrix @ p)).tocsr()
    dense = matrix.toarray()
    coarse = np.linalg.pinv(0.5 * (dense + dense.T), rcond=1e-9, hermitian=True)
    return Prepared(levels, prolongations, coarse.astype(SINGLE), singular, built_from)


def _single(matrix: sparse.csr_matrix) -> sparse.csr_matrix:
    copy = sparse.csr_matrix(matrix.shape, dtype=SINGLE)
    copy.indptr = matrix.indptr.astype(np.uint32)
    copy.indices = matrix.indices.astype(np.uint32)
    copy.data = matrix.data.astype(SINGLE)
    return copy


def _spectral_bound(matrix: sparse.csr_matrix, inverse_diagonal: np.ndarray, *,
                    steps: int = 12) -> float:
    """Estimate of the largest eigenvalue of D^-1 A by power iteration, from above by rows."""
    n = matrix.shape[0]
    size = np.sqrt(inverse_diagonal)
    x = np.random.default_rng(1).standard_normal(n)
    value = 1.0
    for _ in range(steps):
        x /= np.linalg.norm(x)
        y = size * (matrix @ (size * x))
        value = float(np.linalg.norm(y))
        x = y
    rows = np.abs(matrix) @ np.ones(n) * inverse_diagonal
    return min(1.05 * value, float(rows.max()))


def solve(prepared: Factorised | Preconditioner, rhs: np.ndarray, *, matrix: sparse.csr_matrix,
          tolerance: float, max_iterations: int = 200,
          start: np.ndarray | None = None) -> LinearResult:
    """Solve ``matrix x = rhs`` to a relative true residual.

    Parameters
    ----------
    prepared : Prepared, Factorised or Deflated
        Hierarchy of this or of a similar matrix; factors of this very matrix.
    rhs : (n,)
    matrix : (n, n) csr_matrix, symmetric
    tolerance : float
        On ``|rhs - matrix x| / |rhs|``.

    Returns
    -------
    LinearResult
    """
    rhs = rhs - rhs.mean() if prepared.singular else rhs
    size = _norm(rhs)
    x = np.zeros_like(rhs) if start is None else start.copy()
    if size == 0.0:
        return LinearResult(np.zeros_like(rhs), _linear_outcome(True, 0, 0.0, tolerance), 0, 0.0)
    if isinstance(prepared, Factorised):
        x = prepared.factors.solve(rhs)
        return _checked(prepared, matrix, rhs, x, 1, tolerance)
    r = rhs - _times(matrix, x) if start is not None else rhs.copy()
    p, q, sums = np.zeros_like(rhs), np.empty_like(rhs), np.empty(kernels.CHUNKS)
    rz, done, left = 1.0, 0, _norm(r)
    while left > tolerance * size and done < max_iterations:
        z = prepared.precondition(r)
        rz, last = _dot(r, z), rz
        kernels.next_direction(z, rz / last if done else 0.0, p)
        kernels.product_dot(matrix.indptr, matrix.indices, matrix.data, p, q, sums)
        kernels.advance_solution(x, r, p, q, rz / float(sums.sum()), sums)
        left = math.sqrt(sums.sum())
        done += 1
    if done and tolerance >= LOOSE:  # the running residual has not drifted from the true one
        good = left <= tolerance * size
        x = x - x.mean() if prepared.singular else x
        return LinearResult(x, _linear_outcome(good, done, left / size, tolerance), done,
                            left / size)
    return _checked(prepared, matrix, rhs, x, done, tolerance)


def _checked(prepared: Factorised | Preconditioner, matrix: sparse.csr_matrix, rhs: np.ndarray,
             x: np.ndarray, done: int, tolerance: float) -> LinearResult:
    """Solution with its true residual; of a singular matrix the one with zero mean."""
    residual = _norm(rhs - _times(matrix, x)) / _norm(rhs)
    if prepared.singular:
        x = x - x.mean()
    good = residual <= 1.5 * tolerance
    return LinearResult(x, _linear_outcome(good, done, residual, tolerance), done, residual)


def _dot(a: np.ndarray, b: np.ndarray) -> float:
    """Inner product without BLAS, whose waiting threads would slow the loops around it."""
    return float(np.einsum("i,i->", a, b))


def _norm(a: np.ndarray) -> float:
    return math.sqrt(_dot(a, a))


def _times(matrix: sparse.csr_matrix, x: np.ndarray) -> np.ndarray:
    out = np.empty_like(x)
    kernels.product(matrix.indptr, matrix.indices, matrix.data, x, out)
    return out


def _linear_outcome(good: bool, iterations: int, residual: float, tolerance: float) -> Outcome:
    if good:
        return Outcome("converged", f"Relative residual {residual:.1e} after {iterations} "
                                    "iterations.", "", True)
    return Outcome("iteration limit",
                   f"Relative residual {residual:.1e} after {iterations} iterations, above "
                   f"{tolerance:g}.", "Prepare again for this matrix, or allow more iterations.",
                   False)
