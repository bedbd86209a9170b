"""Array functions in the place of the loops of the solvers and of the limiters.

Arguments and results are those of the loops of the same names; see
:mod:`fv3d.operators.arrays` for what they are for.  The Gauss-Seidel sweeps are pyamg's, column by
column; where walls couple the components of a cell (their diagonal blocks are not diagonal) all
three run in one matrix of three rows per cell, multiplied by the inverted blocks.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np

from .arrays import along, blocks, compressed, kept

PLACE = np.array([[0, 3, 4], [3, 1, 5], [4, 5, 2]])  # of a symmetric block's entries in six columns


def _bent(block: np.ndarray) -> np.ndarray:
    """Rows whose blocks are not diagonal."""
    return np.flatnonzero((block[:, 3] != 0) | (block[:, 4] != 0) | (block[:, 5] != 0))


def _applied(block: np.ndarray, x: np.ndarray) -> np.ndarray:
    """(n, 3) symmetric blocks (n, 6) times vectors (n, 3)."""
    return np.einsum("nij,nj->ni", block[:, PLACE], x)


def momentum_residual(indptr, indices, data, block, rhs, x, volume, net_gradient, out):
    around = compressed(indptr, indices, data, len(x)) @ x
    for rows in blocks(len(out)):
        for j in range(3):
            left = rhs[rows, j] - around[rows, j]
            left -= block[rows, j] * x[rows, j]
            if len(volume):
                left -= volume[rows] * net_gradient[rows, j]
            out[rows, j] = left
    bent = _bent(block)
    beside = block[bent]
    beside[:, :3] = 0.0
    out[bent] -= _applied(beside, x[bent])


def invert_blocks(block, extra, out):
    for rows in blocks(len(out)):
        for j in range(3):
            out[rows, j] = 1.0 / (block[rows, j] + extra[rows])
    out[:, 3:] = 0.0
    bent = _bent(block)
    whole = block[bent][:, PLACE] + extra[bent, None, None] * np.eye(3)
    inverse = np.linalg.inv(whole).reshape(-1, 9)
    out[bent] = inverse[:, [0, 4, 8, 1, 2, 5]]


@dataclass(eq=False)
class Separate:
    """Rows whose components are swept one after the other.

    ``data`` carries the diagonal of the first component; ``walls`` are the places where the others
    have another, ``diagonal`` (k, 3) all of them there.
    """

    indptr: np.ndarray
    indices: np.ndarray
    data: np.ndarray
    places: np.ndarray
    diagonal: np.ndarray

    def run(self, rhs: np.ndarray, x: np.ndarray, order: Any) -> None:
        """Sweep over ranges of rows (start, stop, step), or rows in an order of their own."""
        from pyamg import amg_core
        for j in range(3):
            self.data[self.places] = self.diagonal[:, j]
            column, known = x[:, j].copy(), rhs[:, j].copy()
            system = (self.indptr, self.indices, self.data, column, known)
            if isinstance(order, np.ndarray):
                amg_core.gauss_seidel_indexed(*system, order, 0, len(order), 1)
            else:
                for start, stop, step in order:
                    amg_core.gauss_seidel(*system, start, stop, step)
            x[:, j] = column


@dataclass(eq=False)
class Together:
    """Three rows for each cell, multiplied by its inverted diagonal block."""

    indptr: np.ndarray
    indices: np.ndarray
    data: np.ndarray
    inverse: np.ndarray

    def run(self, rhs: np.ndarray, x: np.ndarray, order: Any) -> None:
        """As :meth:`Separate.run`."""
        from pyamg import amg_core
        known = _applied(self.inverse, rhs).astype(x.dtype).reshape(-1)
        system = (self.indptr, self.indices, self.data, x.reshape(-1), known)
        if isinstance(order, np.ndarray):
            three = (3 * order[:, None] + np.arange(3, dtype=np.int32)).reshape(-1)
            amg_core.gauss_seidel_indexed(*system, three, 0, len(three), 1)
        else:
            for start, stop, step in order:
                low = 3 * start if step > 0 else 3 * start + 2
                amg_core.gauss_seidel(*system, low, 3 * stop if step > 0 else 3 * stop + 2, step)


def _diagonal_places(indptr: np.ndarray, indices: np.ndarray) -> np.ndarray:
    return np.flatnonzero(indices == np.repeat(np.arange(len(indptr) - 1), np.diff(indptr)))


def _expanded(indptr: np.ndarray, indices: np.ndarray, bent: np.ndarray) -> tuple[np.ndarray, ...]:
    """Pattern of three rows per cell, and which data and which inverse make each entry."""
    n, count = len(indptr) - 1, np.diff(indptr)
    each = np.ones(n, dtype=np.int64)
    each[bent] = 3  # components that the rows of a cell reach
    cell = np.repeat(np.arange(n), 3 * each)
    first = np.cumsum(3 * each) - 3 * each
    turn = np.arange(len(cell)) - np.repeat(first, 3 * each)
    i, j = turn // each[cell], turn % each[cell]
    j = np.where(each[cell] == 1, i, j)
    lengths = count[cell]
    starts = np.cumsum(lengths) - lengths
    entry = np.repeat(indptr[cell] - starts, lengths) + np.arange(lengths.sum())
    columns = 3 * indices[entry] + np.repeat(j, lengths)
    factor = np.repeat(6 * cell + PLACE[i, j], lengths)
    rows = np.concatenate([[0], np.cumsum(np.repeat(count * each, 3))])
    diagonal = np.flatnonzero(columns == np.repeat(np.arange(3 * n), np.diff(rows)))
    return tuple(a.astype(np.int32) for a in (rows, columns, entry, factor, diagonal))


def _equations(indptr: np.ndarray, indices: np.ndarray, data: np.ndarray,
               inverse: np.ndarray) -> Separate | Together:
    """What is swept, from the off-diagonal entries and the inverted diagonal blocks."""
    bent = _bent(inverse)
    if len(bent):
        rows, columns, entry, factor, diagonal = kept(_expanded, indptr, indices, bent)
        values = data[entry] * inverse.reshape(-1)[factor]
        values[diagonal] = 1.0
        return Together(rows, columns, values, inverse)
    places = kept(_diagonal_places, indptr, indices)
    own = data.copy()
    own[places] = 1.0 / inverse[:, 0]
    walls = np.flatnonzero((inverse[:, 0] != inverse[:, 1]) | (inverse[:, 0] != inverse[:, 2]))
    return Separate(indptr, indices, own, places[walls],
                    (1.0 / inverse[walls, :3]).astype(data.dtype))


def sweep(indptr, indices, data, inverse, rhs, rows, backward, x):
    order = np.ascontiguousarray(rows[::-1] if backward else rows, dtype=np.int32)
    kept(_equations, indptr, indices, data, inverse, newest=True).run(rhs, x, order)


def sweep_pieces(indptr, indices, data, inverse, rhs, pieces, odd, backward, x):
    ranges = [(int(start), int(stop), 1) for start, stop in zip(pieces[odd:-1:2],
                                                                pieces[odd + 1::2])]
    if backward:
        ranges = [(stop - 1, start - 1, -1) for start, stop, _ in ranges]
    kept(_equations, indptr, indices, data, inverse, newest=True).run(rhs, x, ranges)


def _parts(n: int, sums: np.ndarray) -> Any:
    """The rows of each partial sum."""
    ends = [n * part // len(sums) for part in range(len(sums) + 1)]
    return enumerate(slice(start, stop) for start, stop in pairwise(ends))


def absolute_sums(values, factor, sums):
    for part, rows in _parts(len(values), sums):
        size = np.abs(values[rows])
        sums[part] = np.einsum("ij,i->", size, factor[rows]) if len(factor) else size.sum()


def square_sums(values, factor, sums):
    for part, rows in _parts(len(values), sums):
        sums[part] = np.einsum("ij,ij,i->", values[rows], values[rows], factor[rows])


def product(indptr, indices, data, x, out):
    out[:] = compressed(indptr, indices, data, len(x)) @ x


def residual_product(indptr, indices, data, x, rhs, out):
    np.subtract(rhs, compressed(indptr, indices, data, len(x)) @ x, out=out)


def product_add(indptr, indices, data, x, out):
    out += compressed(indptr, indices, data, len(x)) @ x


def copy_rows(indptr, indices, data, copy, inverse_diagonal):
    copy[:] = data
    np.divide(1.0, data[kept(_diagonal_places, indptr, indices)], out=inverse_diagonal,
              casting="same_kind")


def chebyshev_start(inverse_diagonal, rhs, scale, direction, x):
    np.multiply(inverse_diagonal, rhs, out=direction)
    direction *= scale
    x[:] = direction


def chebyshev_step(indptr, indices, data, inverse_diagonal, rhs, keep, scale, direction, x, out):
    around = compressed(indptr, indices, data, len(x)) @ x
    for rows in blocks(len(x)):
        left = rhs[rows] - around[rows]
        left *= inverse_diagonal[rows]
        left *= scale
        direction[rows] *= keep
        direction[rows] += left
        np.add(x[rows], direction[rows], out=out[rows])


def product_dot(indptr, indices, data, x, out, sums):
    product(indptr, indices, data, x, out)
    for part, rows in _parts(len(x), sums):
        sums[part] = np.einsum("i,i->", x[rows], out[rows])


def advance_solution(x, r, p, q, step, sums):
    for part, rows in _parts(len(x), sums):
        x[rows] += step * p[rows]
        r[rows] -= step * q[rows]
        sums[part] = np.einsum("i,i->", r[rows], r[rows])


def next_direction(z, ratio, p):
    for rows in blocks(len(z)):
        p[rows] *= ratio
        p[rows] += z[rows]


def _per_face(offsets: np.ndarray) -> np.ndarray:
    """(k,) cell of each entry of the cells' faces."""
    return np.repeat(np.arange(len(offsets) - 1), np.diff(offsets))


def neighbour_range(offsets, across, used, cell_values, boundary_values, low, high):
    n = len(cell_values)
    outer = np.flatnonzero(across >= n)
    outer = outer[~used[across[outer] - n]]
    around = across.astype(np.int64)
    around[outer] = _per_face(offsets)[outer]  # an unused face counts as the cell itself
    values = np.concatenate([cell_values, boundary_values])[around]
    np.minimum(cell_values, np.minimum.reduceat(values, offsets[:-1]), out=low)
    np.maximum(cell_values, np.maximum.reduceat(values, offsets[:-1]), out=high)


def widened_range(offsets, across, low, high, wide_low, wide_high):
    around = np.where(across < len(low), across, _per_face(offsets))
    np.minimum(low, np.minimum.reduceat(low[around], offsets[:-1]), out=wide_low)
    np.maximum(high, np.maximum.reduceat(high[around], offsets[:-1]), out=wide_high)


def limit_gradient(offsets, faces, sign, across, left, face_centre, cell_centre, delta,
                   values, low, high, smooth, gradient):
    cell, width = _per_face(offsets), values.shape[1]
    arm = face_centre[faces] - cell_centre[left[faces]]
    arm -= np.where(sign < 0, 1.0, 0.0)[:, None] * delta[faces]
    change = np.empty((len(faces), width))
    along(gradient.reshape(len(gradient), 3 * width)[cell], arm.T, change)
    room = np.where(change > 0.0, high[cell], low[cell]) - values[cell]
    free = (change == 0.0) | (across >= len(values))[:, None]
    y = room / np.where(free, 1.0, change)
    if smooth:
        y = np.where(y < 1.5, y - 4.0 / 27.0 * y * y * y, 1.0)
    y[free] = 1.0
    gradient *= np.minimum(np.minimum.reduceat(y, offsets[:-1]), 1.0)[:, :, None]


def limited_reach(left, right, face_centre, cell_centre, delta, mass_flux, values, gradient, low,
                  high, out):
    n, width = len(right), values.shape[1]
    forward = mass_flux[:n] >= 0.0
    up = np.where(forward, left[:n], right)
    arm = face_centre[:n] - cell_centre[left[:n]]
    arm -= np.where(forward, 0.0, 1.0)[:, None] * delta[:n]
    along(gradient.reshape(len(gradient), 3 * width)[up], arm.T, out)
    above, below = high[up] - values[up], values[up] - low[up]
    ahead, behind = np.where(out > 0.0, above, below), np.where(out > 0.0, below, above)
    room, size = np.minimum(0.7 * ahead, 3.0 * behind), np.abs(out)
    bent = np.flatnonzero(room.reshape(-1) < 1.5 * size.reshape(-1))
    y = room.reshape(-1)[bent] / size.reshape(-1)[bent]
    out.reshape(-1)[bent] *= y - 4.0 / 27.0 * y * y * y
