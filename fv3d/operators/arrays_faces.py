"""Array functions in the place of the loops of :mod:`fv3d.operators.kernels`.

Arguments and results are those of the loops of the same names; see
:mod:`fv3d.operators.arrays` for what they are for.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.sparse as sparse

from .arrays import along, blocks, compressed, kept


def _gradient_rows(offsets: np.ndarray, other: np.ndarray, weights: np.ndarray,
                   n_boundary: int) -> sparse.csr_matrix:
    """(3 n_cells, n_cells + n_boundary) matrix from values to gradients."""
    n, count = len(offsets) - 1, len(other)
    cell = np.repeat(np.arange(n), np.diff(offsets))
    place, own = np.arange(count) + cell, offsets[1:].astype(np.int64) + np.arange(n)
    columns = np.empty(count + n, dtype=np.int32)
    columns[place], columns[own] = other, np.arange(n)
    data = np.empty((count + n, 3, 1))
    data[place, :, 0] = weights
    data[own, :, 0] = -compressed(offsets, np.arange(count, dtype=np.int32), np.ones(count),
                                  count) @ weights
    starts = np.concatenate([offsets[:1], own + 1]).astype(np.int32)
    return sparse.bsr_matrix((data, columns, starts), shape=(3 * n, n + n_boundary)).tocsr()


def weighted_gradient(offsets, other, weights, cell_values, boundary_values, out):
    matrix = kept(_gradient_rows, offsets, other, weights, len(boundary_values))
    n, width = cell_values.shape
    for i in range(width):
        values = np.concatenate([cell_values[:, i], boundary_values[:, i]])
        out[:, i] = (matrix @ values).reshape(n, 3)


def vector_gradient(offsets, other, weights, cell_values, boundary_values, out):
    weighted_gradient(offsets, other, weights, cell_values, boundary_values, out)


def _neighbour_mean(offsets: np.ndarray, other: np.ndarray) -> tuple[sparse.csr_matrix, np.ndarray]:
    n = len(offsets) - 1
    inner = other < n
    cell = np.repeat(np.arange(n), np.diff(offsets))[inner]
    count = np.bincount(cell, minlength=n)
    starts = np.concatenate([[0], np.cumsum(count)]).astype(np.int32)
    return compressed(starts, other[inner], 1.0 / count[cell], n), count > 0


def blend_with_neighbours(offsets, other, share, values, out):
    mean, some = kept(_neighbour_mean, offsets, other)
    share = np.where(some, share, 0.0)
    around = mean @ values
    for rows in blocks(len(values)):
        s = share[rows, None]
        out[rows] = (1.0 - s) * values[rows] + s * around[rows]


def _interpolation(left: np.ndarray, right: np.ndarray,
                   weight: np.ndarray) -> list[tuple[slice, sparse.csr_matrix]]:
    """Blocks of internal faces with the matrix from cells to their linear mean."""
    cells = int(max(left.max(initial=0), right.max(initial=0))) + 1
    sides = np.stack([left, right], axis=1).ravel()
    shares = np.stack([weight, 1.0 - weight], axis=1).ravel()
    starts = np.arange(2 * len(right) + 1, step=2, dtype=np.int32)
    return [(rows, compressed(starts[:rows.stop - rows.start + 1],
                              sides[2 * rows.start:2 * rows.stop],
                              shares[2 * rows.start:2 * rows.stop], cells))
            for rows in blocks(len(right))]


def _difference(left: np.ndarray, right: np.ndarray) -> sparse.csr_matrix:
    """Matrix from cells to right value less left value of internal faces."""
    cells = int(max(left.max(initial=0), right.max(initial=0))) + 1
    sides = np.stack([left, right], axis=1).ravel()
    starts = np.arange(2 * len(right) + 1, step=2, dtype=np.int32)
    return compressed(starts, sides, np.tile([-1.0, 1.0], len(right)), cells)


def _means(left: Any, right: Any, weight: Any, values: np.ndarray) -> Any:
    """Blocks of faces with the linear means of cell values."""
    for rows, matrix in kept(_interpolation, left, right, weight):
        yield rows, matrix @ values[:matrix.shape[1]]


def _jumps(left: Any, right: Any, values: np.ndarray) -> np.ndarray:
    matrix = kept(_difference, left, right)
    return matrix @ values[:matrix.shape[1]]


def _columns(vectors: np.ndarray) -> np.ndarray:
    return np.ascontiguousarray(vectors.T)


def _across(table: np.ndarray, vectors: np.ndarray) -> np.ndarray:
    """Inner products of three columns of a table with vectors (3, n)."""
    total = table[:, 0] * vectors[0]
    total += table[:, 1] * vectors[1]
    total += table[:, 2] * vectors[2]
    return total


def linear_face_values(left, right, weight, skew, values, gradient, out):
    for rows, mean in _means(left, right, weight, values):
        out[rows] = mean
    if len(skew):
        for rows, mean in _means(left, right, weight, gradient):
            out[rows] += _across(mean, skew[rows].T)


def _surface_rows(offsets: np.ndarray, faces: np.ndarray, sign: np.ndarray, area: np.ndarray,
                  volume: np.ndarray) -> sparse.csr_matrix:
    """(3 n_cells, n_faces) matrix from face values to their surface integrals over volume."""
    share = area[faces] * (sign / np.repeat(volume, np.diff(offsets)))[:, None]
    return sparse.bsr_matrix((share[:, :, None], faces, offsets),
                             shape=(3 * len(volume), len(area))).tocsr()


def surface_sum(offsets, faces, sign, face_values, face_area, volume, out):
    matrix = kept(_surface_rows, offsets, faces, sign, face_area, volume)
    out[:] = (matrix @ face_values).reshape(out.shape)


def transport_faces(left, right, weight, skew, area, delta, orthogonal, straight, mass_flux,
                    viscosity, values, gradient, upwind_share, central_share, full_stress,
                    coefficient, explicit):
    width = values.shape[1]
    slopes = gradient.reshape(len(gradient), 3 * width)
    arms, areas = kept(_columns, delta), kept(_columns, area)
    carried = len(skew) > 0 and central_share != 0.0
    for rows, matrix in kept(_interpolation, left, right, weight):
        flux, thick = mass_flux[rows], viscosity[rows]
        diffusion = thick * orthogonal[rows]
        np.subtract(np.minimum(flux, 0.0), diffusion, out=coefficient[rows, 0])
        np.subtract(-np.maximum(flux, 0.0), diffusion, out=coefficient[rows, 1])
        forward = flux >= 0.0
        up = np.where(forward, left[rows], right[rows])
        arm = arms[:, rows] * (forward - weight[rows])
        if len(skew):
            arm += skew[rows].T
        arm *= upwind_share * flux
        along(np.take(slopes, up, axis=0, mode="clip"), arm, explicit[rows])
        if central_share:
            centred = matrix @ values[:matrix.shape[1]] - np.take(values, up, axis=0, mode="clip")
            for i in range(width):
                explicit[rows, i] += central_share * flux * centred[:, i]
        if carried or full_stress or not straight:
            mean = matrix @ slopes[:matrix.shape[1]]
            arm = np.zeros_like(arm)
            if carried:
                arm += central_share * flux * skew[rows].T
            if not straight:
                arm += diffusion * arms[:, rows] - thick * areas[:, rows]
            along(mean, arm, explicit[rows], add=True)
            if full_stress:
                turned = mean.reshape(len(mean), 3, 3).transpose(0, 2, 1).reshape(len(mean), 9)
                along(turned, -thick * areas[:, rows], explicit[rows], add=True)


def _row_places(offsets: np.ndarray, faces: np.ndarray, sign: np.ndarray, entry: np.ndarray,
                place: np.ndarray, n_internal: int) -> tuple[np.ndarray, Any, Any]:
    """Where each matrix entry is found among the coefficients; their sums; signs of faces."""
    inner = faces < n_internal
    column = (2 * faces[inner] + (sign[inner] < 0)).astype(np.int32)
    source = np.zeros(len(column) + len(place), dtype=np.intp)
    source[entry[inner]] = column
    starts = np.concatenate([[0], np.cumsum(inner)])[offsets].astype(np.int32)
    sums = compressed(starts, column, np.ones(len(column)), 2 * n_internal)
    return source, sums, compressed(starts, faces[inner], sign[inner].astype(float), n_internal)


def fill_rows(offsets, faces, sign, entry, place, n_internal, coefficient, explicit, data,
              diagonal, rhs):
    source, sums, signs = kept(_row_places, offsets, faces, sign, entry, place, n_internal)
    flat = coefficient.reshape(-1)
    np.take(flat, source, out=data, mode="clip")
    data[place] = 0.0
    np.negative(sums @ flat, out=diagonal)
    np.negative(signs @ explicit, out=rhs)


def _incidence(offsets: np.ndarray, faces: np.ndarray, n_faces: int) -> sparse.csr_matrix:
    """Ones where a face belongs to a cell."""
    return compressed(offsets, faces, np.ones(len(faces)), n_faces)


def _symmetric_places(faces: np.ndarray, entry: np.ndarray, place: np.ndarray,
                      n_internal: int) -> np.ndarray:
    inner = faces < n_internal
    source = np.zeros(int(inner.sum()) + len(place), dtype=np.intp)
    source[entry[inner]] = faces[inner]
    return source


def fill_symmetric(offsets, faces, entry, place, n_internal, inner, outer, data):
    source = kept(_symmetric_places, faces, entry, place, n_internal)
    np.take(-inner, source, out=data, mode="clip")
    total = np.empty(len(place))
    coefficient_sums(offsets, faces, n_internal, inner, outer, total)
    data[place] = total


def coefficient_sums(offsets, faces, n_internal, inner, outer, out):
    both = np.concatenate([inner[:n_internal], outer])
    out[:] = kept(_incidence, offsets, faces, len(both)) @ both


def face_coefficients(left, right, weight, cell_values, factor, scale, out):
    for rows, mean in _means(left, right, weight, cell_values):
        np.multiply(mean, factor[rows], out=out[rows])
        out[rows] *= scale


def _through(left: np.ndarray, right: np.ndarray, weight: np.ndarray,
             vectors: np.ndarray) -> sparse.csr_matrix:
    """(n_internal, 3 n_cells) matrix from cell vectors to inner products of their means."""
    n = len(right)
    cells = int(max(left.max(initial=0), right.max(initial=0))) + 1
    sides = np.stack([left, right], axis=1)
    columns = (3 * sides[:, :, None] + np.arange(3, dtype=np.int32)).reshape(-1)
    shares = np.stack([weight, 1.0 - weight], axis=1)[:, :, None] * vectors[:n, None, :]
    starts = np.arange(6 * n + 1, step=6, dtype=np.int32)
    return compressed(starts, columns.astype(np.int32), shares.reshape(-1), 3 * cells)


def _crossing(left: Any, right: Any, weight: Any, vectors: np.ndarray,
              values: np.ndarray) -> np.ndarray:
    """(n_internal,) inner products of face vectors with the linear means of cell vectors."""
    matrix = kept(_through, left, right, weight, vectors)
    return matrix @ values.reshape(-1)[:matrix.shape[1]]


def momentum_face_flux(left, right, weight, skew, area, delta, orthogonal, straight, density,
                       velocity, gradient, net_gradient, pressure, force_drop, interpolation_d,
                       memory, out):
    flux = _crossing(left, right, weight, area, velocity)
    push = _crossing(left, right, weight, area if straight else delta, net_gradient)
    jumps = _jumps(left, right, pressure)
    areas, slopes = kept(_columns, area), gradient.reshape(len(gradient), 9)
    for rows, matrix in kept(_interpolation, left, right, weight):
        factor, part, jump = orthogonal[rows], push[rows], jumps[rows]
        if len(skew):
            shift = np.empty((len(part), 3))
            along(matrix @ slopes[:matrix.shape[1]], skew[rows].T, shift)
            flux[rows] += _across(shift, areas[:, rows])
        if len(force_drop):
            jump -= force_drop[rows]
        if straight:
            jump *= factor
            part -= jump
        else:
            part -= jump
            part *= factor
        if len(memory):
            part += memory[rows]
        part *= matrix @ interpolation_d[:matrix.shape[1]]
        part += flux[rows]
        np.multiply(part, density, out=out[rows])


def pressure_fluxes(left, right, weight, area, delta, orthogonal, straight, density, inner, relaxed,
                    slope, pressure, out):
    push = _crossing(left, right, weight, area if straight else delta, slope)
    jumps = _jumps(left, right, pressure)
    through = push[:0]
    if len(relaxed):
        moved = np.empty_like(slope)
        for j in range(3):
            np.multiply(slope[:, j], relaxed, out=moved[:, j])
        through = _crossing(left, right, weight, area, moved)
    for rows in blocks(len(right)):
        part = push[rows]
        if straight:
            part /= orthogonal[rows]
        part -= jumps[rows]
        part *= inner[rows]
        if len(relaxed):
            through[rows] *= density
            part -= through[rows]
        out[rows] = part


def flux_defects(left, right, weight, skew, area, velocity, gradient, density, mass_flux, out):
    areas, slopes = kept(_columns, area), gradient.reshape(len(gradient), 9)
    np.subtract(mass_flux[:len(right)] / density,
                _crossing(left, right, weight, area, velocity), out=out)
    if len(skew):
        for rows, matrix in kept(_interpolation, left, right, weight):
            shift = np.empty((rows.stop - rows.start, 3))
            along(matrix @ slopes[:matrix.shape[1]], skew[rows].T, shift)
            out[rows] -= _across(shift, areas[:, rows])


def memory_factors(left, right, weight, with_time, without, out):
    both = np.stack([with_time, without], axis=1)
    for rows, mean in _means(left, right, weight, both):
        out[rows] = 1.0 / mean[:, 0] - 1.0 / mean[:, 1]


def _signs(offsets: np.ndarray, faces: np.ndarray, sign: np.ndarray,
           n_faces: int) -> sparse.csr_matrix:
    return compressed(offsets, faces, sign.astype(float), n_faces)


def net_outflow(offsets, faces, sign, face_flux, out):
    out[:] = kept(_signs, offsets, faces, sign, len(face_flux)) @ face_flux


def correct_flux(left, right, inner, correction, flux):
    change = _jumps(left, right, correction)
    change *= inner[:len(change)]
    flux[:len(change)] -= change


def subtract_scaled(field, factor, change, out):
    for rows in blocks(len(field)):
        part = np.repeat(factor[rows], 3).reshape(-1, 3)
        part *= change[rows]
        np.subtract(field[rows], part, out=out[rows])


def extend_vectors(cells, values, gradient, arm, out):
    np.take(values, cells, axis=0, out=out, mode="clip")
    slopes = np.take(gradient.reshape(len(gradient), 9), cells, axis=0, mode="clip")
    along(slopes, arm.T, out, add=True)


def extend_scalars(cells, values, gradient, arm, out):
    slopes = np.take(gradient, cells, axis=0, mode="clip")
    np.add(np.take(values, cells, mode="clip"), _across(slopes, arm.T), out=out)


def _grouped(rows: np.ndarray) -> tuple[sparse.csr_matrix, np.ndarray]:
    """Matrix that sums over equal rows, and which rows there are."""
    some, place = np.unique(rows, return_inverse=True)
    ones = (np.ones(len(rows)), (place, np.arange(len(rows))))
    return sparse.csr_matrix(ones, shape=(len(some), len(rows))), some


def add_to_rows(rows, values, out):
    sums, some = kept(_grouped, rows)
    out[some] += sums @ values
