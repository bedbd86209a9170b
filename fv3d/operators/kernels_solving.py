"""Compiled loops of the linear solvers, by the rules of :mod:`fv3d.operators.kernels`."""

from __future__ import annotations

import numpy as np

from .compiling import ThreadedKernel, compiled, prange

CHUNKS = 64  # partial sums, whatever the number of threads: totals then do not depend on it


@ThreadedKernel
def momentum_residual(indptr, indices, data, block, rhs, x, volume, net_gradient, out):
    """out = rhs - A x - volume * net gradient for three right-hand sides.

    block = (xx, yy, zz, xy, xz, yz) of the diagonal; the diagonal places of data hold zero.
    """
    pushed = volume.shape[0] > 0
    for row in prange(indptr.shape[0] - 1):
        x0 = x[row, 0]
        x1 = x[row, 1]
        x2 = x[row, 2]
        s0 = rhs[row, 0] - block[row, 0] * x0 - block[row, 3] * x1 - block[row, 4] * x2
        s1 = rhs[row, 1] - block[row, 3] * x0 - block[row, 1] * x1 - block[row, 5] * x2
        s2 = rhs[row, 2] - block[row, 4] * x0 - block[row, 5] * x1 - block[row, 2] * x2
        for k in range(indptr[row], indptr[row + 1]):
            column = indices[k]
            entry = data[k]
            s0 -= entry * x[column, 0]
            s1 -= entry * x[column, 1]
            s2 -= entry * x[column, 2]
        if pushed:
            v = volume[row]
            s0 -= v * net_gradient[row, 0]
            s1 -= v * net_gradient[row, 1]
            s2 -= v * net_gradient[row, 2]
        out[row, 0] = s0
        out[row, 1] = s1
        out[row, 2] = s2


@ThreadedKernel
def invert_blocks(block, extra, out):
    """out = inverse of symmetric 3 x 3 blocks (xx, yy, zz, xy, xz, yz) + extra * identity."""
    for row in prange(block.shape[0]):
        a = block[row, 0] + extra[row]
        b = block[row, 1] + extra[row]
        c = block[row, 2] + extra[row]
        d = block[row, 3]
        e = block[row, 4]
        f = block[row, 5]
        if d == 0.0 and e == 0.0 and f == 0.0:
            out[row, 0], out[row, 1], out[row, 2] = 1.0 / a, 1.0 / b, 1.0 / c
            out[row, 3], out[row, 4], out[row, 5] = 0.0, 0.0, 0.0
        else:
            xx = b * c - f * f
            xy = e * f - c * d
            xz = d * f - b * e
            scale = 1.0 / (a * xx + d * xy + e * xz)
            out[row, 0] = scale * xx
            out[row, 1] = scale * (a * c - e * e)
            out[row, 2] = scale * (a * b - d * d)
            out[row, 3] = scale * xy
            out[row, 4] = scale * xz
            out[row, 5] = scale * (d * e - a * f)


@compiled
def sweep(indptr, indices, data, inverse, rhs, rows, backward, x):
    """One Gauss-Seidel sweep over the given rows (in their order, or backwards), three columns.

    inverse = (xx, yy, zz, xy, xz, yz) of each row's inverted diagonal block; the diagonal places
    of data hold zero.
    """
    n = rows.shape[0]
    for step in range(n):
        row = rows[n - 1 - step] if backward else rows[step]
        s0 = rhs[row, 0]
        s1 = rhs[row, 1]
        s2 = rhs[row, 2]
        for k in range(indptr[row], indptr[row + 1]):
            column = indices[k]
            entry = data[k]
            s0 -= entry * x[column, 0]
            s1 -= entry * x[column, 1]
            s2 -= entry * x[column, 2]
        x[row, 0] = inverse[row, 0] * s0 + inverse[row, 3] * s1 + inverse[row, 4] * s2
        x[row, 1] = inverse[row, 3] * s0 + inverse[row, 1] * s1 + inverse[row, 5] * s2
        x[row, 2] = inverse[row, 4] * s0 + inverse[row, 5] * s1 + inverse[row, 2] * s2


@ThreadedKernel
def sweep_pieces(indptr, indices, data, inverse, rhs, pieces, odd, backward, x):
    """One Gauss-Seidel sweep over every other piece of the rows, three columns.

    Piece p holds the rows from pieces[p] to pieces[p + 1]; it must not touch the pieces p - 2 and
    p + 2, so that all even ones, and then all odd ones, may be swept at once.
    """
    for half in prange((pieces.shape[0] - 1 - odd + 1) // 2):
        piece = 2 * np.int64(half) + odd
        first = pieces[piece]
        beyond = pieces[piece + 1]
        for step in range(beyond - first):
            row = np.uint64(beyond - 1 - step if backward else first + step)
            s0 = rhs[row, 0]
            s1 = rhs[row, 1]
            s2 = rhs[row, 2]
            for k in range(indptr[row], indptr[row + np.uint64(1)]):
                column = indices[k]
                entry = data[k]
                s0 -= entry * x[column, 0]
                s1 -= entry * x[column, 1]
                s2 -= entry * x[column, 2]
            x[row, 0] = inverse[row, 0] * s0 + inverse[row, 3] * s1 + inverse[row, 4] * s2
            x[row, 1] = inverse[row, 3] * s0 + inverse[row, 1] * s1 + inverse[row, 5] * s2
            x[row, 2] = inverse[row, 4] * s0 + inverse[row, 5] * s1 + inverse[row, 2] * s2


@ThreadedKernel
def absolute_sums(values, factor, sums):
    """sums[c] = sum of factor[row] * |values[row, :]| over the c-th part of the rows.

    ``factor`` (0,): all are one.
    """
    weighted = factor.shape[0] > 0
    n = values.shape[0]
    parts = sums.shape[0]
    for part in prange(parts):
        total = 0.0
        chunk = np.int64(part)
        for row in range(n * chunk // parts, n * (chunk + 1) // parts):
            size = abs(values[row, 0]) + abs(values[row, 1]) + abs(values[row, 2])
            total += factor[row] * size if weighted else size
        sums[part] = total


@ThreadedKernel
def square_sums(values, factor, sums):
    """sums[c] = sum of factor[row] * |values[row, :]|^2 over the c-th part of the rows."""
    n = values.shape[0]
    parts = sums.shape[0]
    for part in prange(parts):
        chunk = np.int64(part)
        total = 0.0
        for row in range(n * chunk // parts, n * (chunk + 1) // parts):
            total += factor[row] * (values[row, 0] ** 2 + values[row, 1] ** 2
                                    + values[row, 2] ** 2)
        sums[part] = total


@ThreadedKernel
def product(indptr, indices, data, x, out):
    """out = A x for one vector."""
    for row in prange(indptr.shape[0] - 1):
        s = data.dtype.type(0.0)
        for k in range(indptr[row], indptr[row + 1]):
            s += data[k] * x[indices[k]]
        out[row] = s


@ThreadedKernel
def residual_product(indptr, indices, data, x, rhs, out):
    """out = rhs - A x for one vector."""
    for row in prange(indptr.shape[0] - 1):
        s = rhs[row]
        for k in range(indptr[row], indptr[row + 1]):
            s -= data[k] * x[indices[k]]
        out[row] = s


@ThreadedKernel
def product_add(indptr, indices, data, x, out):
    """out += A x for one vector."""
    for row in prange(indptr.shape[0] - 1):
        s = out[row]
        for k in range(indptr[row], indptr[row + 1]):
            s += data[k] * x[indices[k]]
        out[row] = s


@ThreadedKernel
def chebyshev_start(inverse_diagonal, rhs, scale, direction, x):
    """First Chebyshev step from x = 0."""
    for row in prange(rhs.shape[0]):
        direction[row] = scale * inverse_diagonal[row] * rhs[row]
        x[row] = direction[row]


@ThreadedKernel
def chebyshev_step(indptr, indices, data, inverse_diagonal, rhs, keep, scale, direction, x, out):
    """direction = keep * direction + scale * D^-1 (rhs - A x); out = x + direction."""
    for row in prange(indptr.shape[0] - 1):
        s = rhs[row]
        for k in range(indptr[row], indptr[row + 1]):
            s -= data[k] * x[indices[k]]
        d = keep * direction[row] + scale * inverse_diagonal[row] * s
        direction[row] = d
        out[row] = x[row] + d


@ThreadedKernel
def product_dot(indptr, indices, data, x, out, sums):
    """out = A x; sums[c] = x . out over the c-th part of the rows."""
    n = indptr.shape[0] - 1
    parts = sums.shape[0]
    for part in prange(parts):
        total = 0.0
        chunk = np.int64(part)
        for row in range(n * chunk // parts, n * (chunk + 1) // parts):
            s = 0.0
            for k in range(indptr[row], indptr[row + 1]):
                s += data[k] * x[indices[k]]
            out[row] = s
            total += s * x[row]
        sums[part] = total


@ThreadedKernel
def advance_solution(x, r, p, q, step, sums):
    """x += step p; r -= step q; sums[c] = r . r over the c-th part of the rows."""
    n = x.shape[0]
    parts = sums.shape[0]
    for part in prange(parts):
        total = 0.0
        chunk = np.int64(part)
        for row in range(n * chunk // parts, n * (chunk + 1) // parts):
            x[row] += step * p[row]
            s = r[row] - step * q[row]
            r[row] = s
            total += s * s
        sums[part] = total


@ThreadedKernel
def next_direction(z, ratio, p):
    """p = z + ratio p."""
    for row in prange(z.shape[0]):
        p[row] = z[row] + ratio * p[row]
