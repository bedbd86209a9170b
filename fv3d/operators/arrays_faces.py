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
            centred = matrix @ values[:matrix.shape[1]] - values.take(up, axis=0)
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
    source = np.zeros(len(column) + len(place), dtype=np.int32)
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
    source = np.zeros(int(inner.sum()) + len(place), dtype=np.int32)
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


def momentum_face_flux(left, right, weight, skew, area, delta, orthogonal, straight, density,
                       velocity, gradient, net_gradient, pressure, force_drop, interpolation_d,
                       memory, out):
    packed = np.empty((len(velocity), 7))
    packed[:, :3], packed[:, 3:6], packed[:, 6] = velocity, net_gradient, interpolation_d
    slopes = gradient.reshape(len(gradient), 9)
    arms, areas, jumps = kept(_columns, delta), kept(_columns, area), _jumps(left, right, pressure)
    for rows, matrix in kept(_interpolation, left, right, weight):
        mean, factor = matrix @ packed[:matrix.shape[1]], orthogonal[rows]
        flux = _across(mean, areas[:, rows])
        if len(skew):
            shift = np.empty((len(mean), 3))
            along(matrix @ slopes[:matrix.shape[1]], skew[rows].T, shift)
            flux += _across(shift, areas[:, rows])
        jump = jumps[rows] - force_drop[rows] if len(force_drop) else jumps[rows]
        if straight:
            push = _across(mean[:, 3:6], areas[:, rows])
            push -= factor * jump
        else:
            push = _across(mean[:, 3:6], arms[:, rows])
            push -= jump
            push *= factor
        if len(memory):
            push += memory[rows]
        push *= mean[:, 6]
        flux += push
        np.multiply(flux, density, out=out[rows])


def pressure_fluxes(left, right, weight, area, delta, orthogonal, straight, density, inner, relaxed,
                    slope, pressure, out):
    packed = np.empty((len(slope), 6 if len(relaxed) else 3))
    packed[:, :3] = slope
    for j in range(3 if len(relaxed) else 0):
        np.multiply(slope[:, j], relaxed, out=packed[:, 3 + j])
    arms, areas, jumps = kept(_columns, delta), kept(_columns, area), _jumps(left, right, pressure)
    for rows, mean in _means(left, right, weight, packed):
        push = _across(mean, (areas if straight else arms)[:, rows])
        if straight:
            push /= orthogonal[rows]
        push -= jumps[rows]
        push *= inner[rows]
        if len(relaxed):
            through = _across(mean[:, 3:], areas[:, rows])
            through *= density
            push -= through
        out[rows] = push


def flux_defects(left, right, weight, skew, area, velocity, gradient, density, mass_flux, out):
    areas, slopes = kept(_columns, area), gradient.reshape(len(gradient), 9)
    for rows, matrix in kept(_interpolation, left, right, weight):
        mean = matrix @ velocity[:matrix.shape[1]]
        if len(skew):
            along(matrix @ slopes[:matrix.shape[1]], skew[rows].T, mean, add=True)
        out[rows] = mass_flux[rows] / density - _across(mean, areas[:, rows])


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
    for j in range(3):
        part = factor * change[:, j]
        np.subtract(field[:, j], part, out=out[:, j])


def extend_vectors(cells, values, gradient, arm, out):
    out[:] = values.take(cells, axis=0)
    along(gradient.reshape(len(gradient), 9).take(cells, axis=0), arm.T, out, add=True)


def extend_scalars(cells, values, gradient, arm, out):
    np.add(values.take(cells), _across(gradient.take(cells, axis=0), arm.T), out=out)


def _grouped(rows: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Order by rows, where each begins in it, and which they are."""
    order = np.argsort(rows, kind="stable")
    some, starts = np.unique(rows[order], return_index=True)
    return order, starts, some


def add_to_rows(rows, values, out):
    if not len(rows):
        return
    order, starts, some = kept(_grouped, rows)
    out[some] += np.add.reduceat(values[order], starts, axis=0)
