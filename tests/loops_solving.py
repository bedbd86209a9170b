"""Plain references of the compiled loops of the linear solvers and of the limiters."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import scipy.sparse as sparse
from loops import reference


def dense(indptr: np.ndarray, indices: np.ndarray, data: np.ndarray) -> np.ndarray:
    n = len(indptr) - 1
    return np.asarray(sparse.csr_matrix((data.astype(float), indices, indptr), (n, n)).todense())


def square(blocks: np.ndarray) -> np.ndarray:
    """(n, 3, 3) symmetric matrices from rows (xx, yy, zz, xy, xz, yz)."""
    return np.array([[[a, d, e], [d, b, f], [e, f, c]] for a, b, c, d, e, f in
                     blocks.astype(float)])


def part_sums(values: np.ndarray, parts: int) -> np.ndarray:
    """Sums over as equal parts as there can be, rounded down."""
    ends = [len(values) * part // parts for part in range(parts + 1)]
    return np.array([values[start:stop].sum() for start, stop in pairwise(ends)])


@reference
def momentum_residual(indptr, indices, data, block, rhs, x, volume, net_gradient, out):
    result = rhs - np.einsum("nij,nj->ni", square(block), x) - dense(indptr, indices, data) @ x
    return {8: result - volume[:, None] * net_gradient if len(volume) else result}


@reference
def invert_blocks(block, extra, out):
    inverse = np.linalg.inv(square(block) + extra[:, None, None] * np.eye(3))
    return {2: inverse[:, [0, 1, 2, 0, 0, 1], [0, 1, 2, 1, 2, 2]]}


@reference
def sweep(indptr, indices, data, inverse, rhs, rows, backward, x):
    matrix, x, inverse = dense(indptr, indices, data), x.astype(float), square(inverse)
    for row in (rows[::-1] if backward else rows):
        x[row] = inverse[row] @ (rhs[row] - matrix[row] @ x)
    return {7: x}


@reference
def sweep_pieces(indptr, indices, data, inverse, rhs, pieces, odd, backward, x):
    chosen = zip(pieces[odd:-1:2], pieces[odd + 1::2])
    rows = np.concatenate([np.arange(start, stop) for start, stop in chosen])
    return {8: sweep(indptr, indices, data, inverse, rhs, rows, backward, x)[7]}


@reference
def absolute_sums(values, factor, sums):
    size = np.abs(values).sum(axis=1)
    return {2: part_sums(factor * size if len(factor) else size, len(sums))}


@reference
def square_sums(values, factor, sums):
    return {2: part_sums(factor * (values**2).sum(axis=1), len(sums))}


@reference
def product(indptr, indices, data, x, out):
    return {4: dense(indptr, indices, data) @ x.astype(float)}


@reference
def residual_product(indptr, indices, data, x, rhs, out):
    return {5: rhs.astype(float) - dense(indptr, indices, data) @ x.astype(float)}


@reference
def product_add(indptr, indices, data, x, out):
    return {4: out.astype(float) + dense(indptr, indices, data) @ x.astype(float)}


@reference
def chebyshev_start(inverse_diagonal, rhs, scale, direction, x):
    first = float(scale) * inverse_diagonal.astype(float) * rhs
    return {3: first, 4: first}


@reference
def chebyshev_step(indptr, indices, data, inverse_diagonal, rhs, keep, scale, direction, x, out):
    residual = rhs.astype(float) - dense(indptr, indices, data) @ x.astype(float)
    ahead = float(keep) * direction.astype(float) + float(scale) * inverse_diagonal * residual
    return {7: ahead, 9: x.astype(float) + ahead}


@reference
def product_dot(indptr, indices, data, x, out, sums):
    result = dense(indptr, indices, data) @ x
    return {4: result, 5: part_sums(x * result, len(sums))}


@reference
def advance_solution(x, r, p, q, step, sums):
    left = r - step * q
    return {0: x + step * p, 1: left, 5: part_sums(left**2, len(sums))}


@reference
def next_direction(z, ratio, p):
    return {2: z + ratio * p}


@reference
def neighbour_range(offsets, across, used, cells, edges, low, high):
    n = len(cells)
    around = [[c, *(o for o in across[offsets[c]:offsets[c + 1]] if o < n or used[o - n])]
              for c in range(n)]
    both = np.vstack([cells, edges])
    return {5: np.array([both[row].min(axis=0) for row in around]),
            6: np.array([both[row].max(axis=0) for row in around])}


@reference
def widened_range(offsets, across, low, high, wide_low, wide_high):
    n = len(low)
    around = [[c, *(o for o in across[offsets[c]:offsets[c + 1]] if o < n)] for c in range(n)]
    return {4: np.array([low[row].min(axis=0) for row in around]),
            5: np.array([high[row].max(axis=0) for row in around])}


def limiting(room, change, smooth):
    """Factor that a change may be multiplied by."""
    if change == 0.0:
        return 1.0
    y = room / change
    return min(1.0, y) if not smooth else 1.0 if y >= 1.5 else y - 4 * y**3 / 27


@reference
def limit_gradient(offsets, faces, sign, across, left, face_centre, cell_centre, delta, values,
                   low, high, smooth, gradient):
    result = gradient.copy()
    for c in range(len(values)):
        inner = [k for k in range(offsets[c], offsets[c + 1]) if across[k] < len(values)]
        for i in range(values.shape[1]):
            changes = [gradient[c, i] @ (face_centre[faces[k]] - cell_centre[c]) for k in inner]
            result[c, i] *= min(limiting((high if d > 0 else low)[c, i] - values[c, i], d, smooth)
                                for d in changes)
    return {12: result}


@reference
def limited_reach(left, right, face_centre, cell_centre, delta, flux, values, gradient, low, high,
                  out):
    result = np.empty_like(out)
    for f, (a, b) in enumerate(zip(left, right)):
        up = a if flux[f] >= 0 else b
        for i, d in enumerate(gradient[up] @ (face_centre[f] - cell_centre[up])):
            ahead, behind = (high, low) if d > 0 else (low, high)
            room = min(0.7 * abs(ahead[up, i] - values[up, i]),
                       3.0 * abs(behind[up, i] - values[up, i]))
            result[f, i] = d * limiting(room, abs(d), True)
    return {10: result}
