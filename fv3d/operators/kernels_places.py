"""Compiled loops around places of measurement, by the rules of :mod:`fv3d.operators.kernels`."""

from __future__ import annotations

import numpy as np

from .compiling import ThreadedKernel, compiled, prange

CHUNK = 2048  # rows whose sums stay in the nearest memory


@ThreadedKernel
def add_vectors(rows, offsets, place, block, strength, out):
    """out[rows[k], :] += sum of 3 x 3 blocks times the vector strengths of their places."""
    for k in prange(rows.shape[0]):
        s0 = 0.0
        s1 = 0.0
        s2 = 0.0
        for entry in range(offsets[k], offsets[k + 1]):
            p = place[entry]
            a = strength[p, 0]
            b = strength[p, 1]
            c = strength[p, 2]
            s0 += block[entry, 0] * a + block[entry, 1] * b + block[entry, 2] * c
            s1 += block[entry, 3] * a + block[entry, 4] * b + block[entry, 5] * c
            s2 += block[entry, 6] * a + block[entry, 7] * b + block[entry, 8] * c
        row = rows[k]
        out[row, 0] += s0
        out[row, 1] += s1
        out[row, 2] += s2


@ThreadedKernel
def add_scalars(rows, offsets, place, block, strength, out):
    """out[rows[k]] += sum of rows of three times the vector strengths of their places."""
    for k in prange(rows.shape[0]):
        s = 0.0
        for entry in range(offsets[k], offsets[k + 1]):
            p = place[entry]
            s += (block[entry, 0] * strength[p, 0] + block[entry, 1] * strength[p, 1]
                  + block[entry, 2] * strength[p, 2])
        out[rows[k]] += s


@ThreadedKernel
def add_dense(out, columns, factor):
    """out[row] += sum over the columns j of factor[j] * columns[j, row], by chunks of rows.

    Summed in the precision of ``factor``.
    """
    n = out.shape[0]
    for chunk in prange((n + CHUNK - 1) // CHUNK):
        first = np.int64(chunk) * CHUNK
        beyond = min(first + CHUNK, n)
        total = np.zeros(CHUNK, dtype=factor.dtype)
        for j in range(columns.shape[0]):
            scale = factor[j]
            if scale != 0.0:
                column = columns[j, first:beyond]
                for k in range(beyond - first):
                    total[k] += scale * factor.dtype.type(column[k])
        for k in range(beyond - first):
            out[first + k] += total[k]


@compiled
def sweep_blocks(indptr, indices, data, inverse, rows, local, rhs, backward, x):
    """One Gauss-Seidel sweep over some rows for 3 x 3 blocks of unknowns, stored by rows.

    ``local`` is the place of each row in ``rows``, negative for those that stay zero; ``rhs`` and
    ``x`` (len(rows), 9); ``inverse`` as in :func:`fv3d.operators.kernels_solving.sweep`.
    """
    n = rows.shape[0]
    for step in range(n):
        k = n - 1 - step if backward else step
        row = rows[k]
        s0 = rhs[k, 0]
        s1 = rhs[k, 1]
        s2 = rhs[k, 2]
        s3 = rhs[k, 3]
        s4 = rhs[k, 4]
        s5 = rhs[k, 5]
        s6 = rhs[k, 6]
        s7 = rhs[k, 7]
        s8 = rhs[k, 8]
        for entry in range(indptr[row], indptr[row + 1]):
            other = local[indices[entry]]
            if other >= 0:
                factor = data[entry]
                s0 -= factor * x[other, 0]
                s1 -= factor * x[other, 1]
                s2 -= factor * x[other, 2]
                s3 -= factor * x[other, 3]
                s4 -= factor * x[other, 4]
                s5 -= factor * x[other, 5]
                s6 -= factor * x[other, 6]
                s7 -= factor * x[other, 7]
                s8 -= factor * x[other, 8]
        xx = inverse[row, 0]
        yy = inverse[row, 1]
        zz = inverse[row, 2]
        xy = inverse[row, 3]
        xz = inverse[row, 4]
        yz = inverse[row, 5]
        x[k, 0] = xx * s0 + xy * s3 + xz * s6
        x[k, 1] = xx * s1 + xy * s4 + xz * s7
        x[k, 2] = xx * s2 + xy * s5 + xz * s8
        x[k, 3] = xy * s0 + yy * s3 + yz * s6
        x[k, 4] = xy * s1 + yy * s4 + yz * s7
        x[k, 5] = xy * s2 + yy * s5 + yz * s8
        x[k, 6] = xz * s0 + yz * s3 + zz * s6
        x[k, 7] = xz * s1 + yz * s4 + zz * s7
        x[k, 8] = xz * s2 + yz * s5 + zz * s8
