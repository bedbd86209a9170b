"""Array functions in the place of the loops of the solvers and of the limiters.

Arguments and results are those of the loops of the same names; see
:mod:`fv3d.operators.arrays` for what they are for.  The Gauss-Seidel sweeps are pyamg's, over a
matrix of three rows per cell; where walls couple the components of a cell its rows are multiplied
by the inverted block, so that the sweeps solve it exactly.
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
    found = []
    for rows in blocks(len(block)):
        mixed = (block[rows, 3] != 0) | (block[rows, 4] != 0) | (block[rows, 5] != 0)
        found.append(np.flatnonzero(mixed) + rows.start)
    return np.concatenate(found) if found else np.empty(0, dtype=np.int64)


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
            out[rows, 3 + j] = 0.0
    bent = _bent(block)
    whole = block[bent][:, PLACE] + extra[bent, None, None] * np.eye(3)
    inverse = np.linalg.inv(whole).reshape(-1, 9)
    out[bent] = inverse[:, [0, 4, 8, 1, 2, 5]]


@dataclass(eq=False)
class Swept:
    """A matrix of three rows for each cell, for pyamg's sweeps.

    The rows of bent cells are multiplied by their inverted blocks, which couple their components;
    the others only meet themselves.
    """

    indptr: np.ndarray
    indices: np.ndarray
    data: np.ndarray
    bent: np.ndarray
    inverse: np.ndarray

    def run(self, rhs: np.ndarray, x: np.ndarray, order: Any) -> None:
        """Sweep over ranges of cells (start, stop, step), or cells in an order of their own."""
        from pyamg import amg_core
        known = rhs
        if len(self.bent):
            known = rhs.copy()
            known[self.bent] = _applied(self.inverse, rhs[self.bent])
        system = (self.indptr, self.indices, self.data, x.reshape(-1), known.reshape(-1))
        if isinstance(order, np.ndarray):
            three = (3 * order[:, None] + np.arange(3, dtype=np.int32)).reshape(-1)
            amg_core.gauss_seidel_indexed(*system, three, 0, len(three), 1)
        else:
            for start, stop, step in order:
                last = 0 if step > 0 else 2
                amg_core.gauss_seidel(*system, 3 * start + last, 3 * stop + last, step)


@dataclass(eq=False)
class Layout:
    """Pattern of :class:`Swept`: the data each entry comes from, its diagonal places.

    ``turned`` are the entries in the rows of bent cells, ``factor`` what they are multiplied by.
    """

    indptr: np.ndarray
    indices: np.ndarray
    entry: np.ndarray
    diagonal: np.ndarray
    turned: np.ndarray
    factor: np.ndarray


def _layout(indptr: np.ndarray, indices: np.ndarray, bent: np.ndarray) -> Layout:
    n, count = len(indptr) - 1, np.diff(indptr)
    reach = np.ones(n, dtype=np.int64)
    reach[bent] = 3  # components that each row of a cell sees
    cell = np.repeat(np.arange(n), 3 * reach)
    turn = np.arange(len(cell)) - np.repeat(np.cumsum(3 * reach) - 3 * reach, 3 * reach)
    i, j = turn // reach[cell], turn % reach[cell]
    j = np.where(reach[cell] == 1, i, j)
    lengths = count[cell]
    entry = np.repeat(indptr[cell] - (np.cumsum(lengths) - lengths), lengths)
    entry += np.arange(len(entry))
    columns = 3 * indices[entry] + np.repeat(j, lengths)
    rows = np.concatenate([[0], np.cumsum(np.repeat(count * reach, 3))])
    diagonal = np.flatnonzero(columns == np.repeat(np.arange(3 * n), np.diff(rows)))
    turned = np.flatnonzero(np.repeat(reach[cell] == 3, lengths))
    factor = np.repeat(6 * cell + PLACE[i, j], lengths)[turned]
    return Layout(rows.astype(np.int32), columns.astype(np.int32), entry, diagonal, turned, factor)


def _remembered(rows: np.ndarray) -> np.ndarray:
    """The array of the same rows that was given first."""
    known: list[np.ndarray] = kept(list)
    for old in known:
        if np.array_equal(old, rows):
            return old
    known.append(rows)
    return rows


def _equations(indptr: np.ndarray, indices: np.ndarray, data: np.ndarray,
               inverse: np.ndarray) -> Swept:
    """What is swept, from the off-diagonal entries and the inverted diagonal blocks."""
    bent = _bent(inverse)
    layout = kept(_layout, indptr, indices, _remembered(bent))
    values = np.take(data, layout.entry, mode="clip")
    values[layout.turned] *= inverse.reshape(-1)[layout.factor]
    own = 1.0 / inverse[:, :3]
    own[bent] = 1.0
    values[layout.diagonal] = own.reshape(-1)
    return Swept(layout.indptr, layout.indices, values, bent, inverse[bent])


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
        total = size[:, 0] + size[:, 1]
        total += size[:, 2]
        sums[part] = np.einsum("i,i->", total, factor[rows]) if len(factor) else total.sum()


def square_sums(values, factor, sums):
    for part, rows in _parts(len(values), sums):
        size = np.square(values[rows])
        total = size[:, 0] + size[:, 1]
        total += size[:, 2]
        sums[part] = np.einsum("i,i->", total, factor[rows])


def product(indptr, indices, data, x, out):
    out[:] = compressed(indptr, indices, data, len(x)) @ x


def residual_product(indptr, indices, data, x, rhs, out):
    np.subtract(rhs, compressed(indptr, indices, data, len(x)) @ x, out=out)


def product_add(indptr, indices, data, x, out):
    out += compressed(indptr, indices, data, len(x)) @ x


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
