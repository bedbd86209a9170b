"""Plain references of the compiled loops, and random arguments to call both with.

Written from the formulas, face by face or with dense matrices, without a look at the kernels'
order of work.  ``REFERENCES[name](*arguments)`` returns the arrays the kernel writes, by position.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.sparse as sparse

from fv3d.mesh.generate import box
from fv3d.mesh.mesh import Mesh
from fv3d.operators.assembly import orthogonal_factor, pattern

Arguments = list[Any]
REFERENCES: dict[str, Callable[..., dict[int, np.ndarray]]] = {}


def reference(function: Callable[..., dict[int, np.ndarray]]) -> Callable:
    REFERENCES[function.__name__] = function
    return function


def small_mesh(kind: str) -> Mesh:
    """A few skewed cells: ``hex`` or ``tet``."""
    return box((0, 0, 0), (1.0, 0.7, 0.5), cells=(4, 3, 3) if kind == "hex" else (3, 2, 2),
               tetra=kind == "tet", skew=0.3, seed=3)


def dense(indptr: np.ndarray, indices: np.ndarray, data: np.ndarray) -> np.ndarray:
    n = len(indptr) - 1
    return np.asarray(sparse.csr_matrix((data.astype(float), indices, indptr), (n, n)).todense())


@reference
def weighted_gradient(offsets, other, weights, cells, edges, out):
    both = np.vstack([cells, edges])
    result = np.zeros_like(out)
    for cell in range(len(cells)):
        for k in range(offsets[cell], offsets[cell + 1]):
            result[cell] += np.outer(both[other[k]] - cells[cell], weights[k])
    return {5: result}


@reference
def blend_with_neighbours(offsets, other, share, values, out):
    result = np.empty_like(out)
    for cell, own in enumerate(values):
        beside = [o for o in other[offsets[cell]:offsets[cell + 1]] if o < len(values)]
        mean = np.mean(values[beside], axis=0) if beside else own
        result[cell] = (1.0 - share[cell]) * own + share[cell] * mean
    return {4: result}


@reference
def linear_face_values(left, right, weight, skew, values, gradient, out):
    result = np.empty_like(out)
    for face, (a, b) in enumerate(zip(left, right)):
        on_line = weight[face] * values[a] + (1 - weight[face]) * values[b]
        slope = weight[face] * gradient[a] + (1 - weight[face]) * gradient[b]
        result[face] = on_line + slope @ skew[face]
    return {6: result}


@reference
def surface_sum(offsets, faces, sign, face_values, area, volume, out):
    result = np.zeros_like(out)
    for cell in range(len(volume)):
        for k in range(offsets[cell], offsets[cell + 1]):
            result[cell] += sign[k] * face_values[faces[k]] * area[faces[k]]
        result[cell] /= volume[cell]
    return {6: result}


@reference
def transport_faces(left, right, weight, skew, area, delta, orthogonal, face_centre, cell_centre,
                    mass_flux, viscosity, values, gradient, upwind_share, central_share,
                    full_stress, coefficient, explicit):
    implicit, rest = np.empty_like(coefficient), np.empty_like(explicit)
    for f, (a, b) in enumerate(zip(left, right)):
        w, m, mu, g = weight[f], mass_flux[f], viscosity[f], orthogonal[f]
        up = a if m >= 0 else b
        mean = w * gradient[a] + (1 - w) * gradient[b]
        central = w * values[a] + (1 - w) * values[b] + mean @ skew[f]
        ahead = values[up] + gradient[up] @ (face_centre[f] - cell_centre[up])
        carried = (values[up] + upwind_share * (ahead - values[up])
                   + central_share * (central - values[up]))
        viscous = mu * (g * (values[b] - values[a]) + mean @ (area[f] - g * delta[f]))
        if full_stress:
            viscous = viscous + mu * mean.T @ area[f]
        implicit[f] = min(m, 0.0) - mu * g, -max(m, 0.0) - mu * g
        by_coefficients = m * values[up] - mu * g * (values[b] - values[a])
        rest[f] = m * carried - viscous - by_coefficients
    return {16: implicit, 17: rest}


@reference
def fill_rows(offsets, faces, sign, entry, n_internal, coefficient, explicit, data, diagonal, rhs):
    data, diagonal, rhs = data.copy(), diagonal.copy(), rhs.copy()
    for cell in range(len(diagonal)):
        for k in range(offsets[cell], offsets[cell + 1]):
            if faces[k] >= n_internal:
                continue
            c = coefficient[faces[k], 0 if sign[k] > 0 else 1]
            data[entry[k]] = c
            diagonal[cell] -= c
            rhs[cell] -= sign[k] * explicit[faces[k]]
    return {7: data, 8: diagonal, 9: rhs}


@reference
def fill_symmetric(offsets, faces, entry, place, n_internal, inner, outer, data):
    data = data.copy()
    for cell in range(len(place)):
        data[place[cell]] = 0.0
        for k in range(offsets[cell], offsets[cell + 1]):
            boundary = faces[k] - n_internal
            if boundary < 0:
                data[entry[k]] = -inner[faces[k]]
            data[place[cell]] += outer[boundary] if boundary >= 0 else inner[faces[k]]
    return {7: data}


@reference
def face_coefficients(left, right, weight, cell_values, factor, scale, out):
    at_face = [w * cell_values[a] + (1 - w) * cell_values[b]
               for a, b, w in zip(left, right, weight)]
    return {6: scale * factor[:len(right)] * np.array(at_face)}


def square(blocks: np.ndarray) -> np.ndarray:
    """(n, 3, 3) symmetric matrices from rows (xx, yy, zz, xy, xz, yz)."""
    return np.array([[[a, d, e], [d, b, f], [e, f, c]] for a, b, c, d, e, f in blocks])


@reference
def row_residual(indptr, indices, data, block, rhs, x, out):
    matrix = dense(indptr, indices, data)
    np.fill_diagonal(matrix, 0.0)
    return {6: rhs - np.einsum("nij,nj->ni", square(block), x) - matrix @ x}


@reference
def sweep(indptr, indices, data, inverse, rhs, rows, backward, x):
    matrix, x, inverse = dense(indptr, indices, data), x.copy(), square(inverse)
    np.fill_diagonal(matrix, 0.0)
    for row in (rows[::-1] if backward else rows):
        x[row] = inverse[row] @ (rhs[row] - matrix[row] @ x)
    return {7: x}


@reference
def momentum_face_flux(left, right, weight, skew, area, delta, orthogonal, density, velocity,
                       gradient, net, pressure, force_drop, d, memory, out):
    result = np.empty_like(out)
    for f, (a, b) in enumerate(zip(left, right)):
        def mean(field, w=weight[f], a=a, b=b):
            return w * field[a] + (1 - w) * field[b]
        at_face = mean(velocity) + mean(gradient) @ skew[f]
        smooth, compact = mean(net) @ delta[f], pressure[b] - pressure[a] - force_drop[f]
        result[f] = density * (at_face @ area[f]
                               + mean(d) * (orthogonal[f] * (smooth - compact) + memory[f]))
    return {15: result}


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
def chebyshev_step(indptr, indices, data, inverse_diagonal, rhs, keep, scale, direction, work, x):
    residual = rhs.astype(float) - dense(indptr, indices, data) @ x.astype(float)
    ahead = float(keep) * direction.astype(float) + float(scale) * inverse_diagonal * residual
    return {7: ahead, 8: residual, 9: x.astype(float) + ahead}


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


SINGLE_TOO = {"product", "residual_product", "product_add", "chebyshev_start", "chebyshev_step"}


def arguments(name: str, mesh: Mesh, *, dtype: type = np.float64, seed: int = 0,
              variant: int = 0) -> Arguments:
    """Random arguments of a kernel on a mesh; ``variant`` 0 or 1 switches its flags."""
    r = np.random.default_rng(seed)
    n, faces, inside = mesh.n_cells, mesh.n_faces, mesh.n_internal
    offsets, cell_faces, sign = mesh.cell_faces
    layout = pattern(mesh)
    ends = [mesh.left[:inside], mesh.right, mesh.weight, mesh.skew_offset]
    data = r.normal(size=len(layout.indices)).astype(dtype)
    csr = [layout.indptr, layout.indices, data]
    positive = r.uniform(0.5, 2.0, n).astype(dtype)

    def vector() -> np.ndarray:
        return r.normal(size=n).astype(dtype)

    def table(rows: int = n) -> np.ndarray:
        return r.normal(size=(rows, 3))

    gradient = r.normal(size=(n, 3, 3))
    orthogonal = orthogonal_factor(mesh)
    upwind, central = ((1.0, 0.0), (0.25, 0.75))[variant]
    rows = r.permutation(n).astype(np.int32)[:n if variant else n // 2]
    made: dict[str, Arguments] = {
        "weighted_gradient": [
            offsets, r.integers(0, n + mesh.n_boundary, len(cell_faces)).astype(np.int32),
            table(len(cell_faces)), table(), table(mesh.n_boundary), np.empty((n, 3, 3))],
        "blend_with_neighbours": [
            offsets, r.integers(0, n + mesh.n_boundary, len(cell_faces)).astype(np.int32),
            r.choice([0.0, 0.5, 1.0], n), table(), np.empty((n, 3))],
        "linear_face_values": [*ends, r.normal(size=n), table(), np.empty(inside)],
        "surface_sum": [offsets, cell_faces, sign, r.normal(size=faces), mesh.face_area,
                        mesh.cell_volume, np.empty((n, 3))],
        "transport_faces": [
            *ends, mesh.face_area, mesh.delta, orthogonal, mesh.face_centre, mesh.cell_centre,
            r.normal(size=faces), r.uniform(0.5, 2.0, faces), table(), gradient, upwind, central,
            bool(variant), np.empty((inside, 2)), np.empty((inside, 3))],
        "fill_rows": [offsets, cell_faces, sign, layout.entry, inside, r.normal(size=(inside, 2)),
                      table(inside), np.zeros(len(data)), r.normal(size=n), table()],
        "fill_symmetric": [offsets, cell_faces, layout.entry, layout.diagonal, inside,
                           r.normal(size=inside), r.normal(size=mesh.n_boundary),
                           np.empty(len(data))],
        "face_coefficients": [*ends[:3], r.normal(size=n), r.normal(size=faces), 1.3,
                              np.empty(inside)],
        "row_residual": [layout.indptr, layout.indices, data.astype(float), r.normal(size=(n, 6)),
                         table(), table(), np.empty((n, 3))],
        "sweep": [layout.indptr, layout.indices, 0.1 * data.astype(float),
                  0.3 * r.normal(size=(n, 6)), table(), rows, bool(variant), table()],
        "momentum_face_flux": [
            *ends, mesh.face_area, mesh.delta, orthogonal, 1.3, table(), gradient, table(),
            r.normal(size=n), r.normal(size=faces), r.uniform(0.5, 2.0, n), r.normal(size=faces),
            np.empty(inside)],
        "product": [*csr, vector(), np.empty(n, dtype)],
        "residual_product": [*csr, vector(), vector(), np.empty(n, dtype)],
        "product_add": [*csr, vector(), vector()],
        "chebyshev_start": [positive, vector(), dtype(0.7), np.empty(n, dtype), np.empty(n, dtype)],
        "chebyshev_step": [*csr, positive, vector(), dtype(0.4), dtype(0.8), vector(),
                           np.empty(n, dtype), vector()],
    }
    return (made | limiting_arguments(mesh, r, variant))[name]


def limiting_arguments(mesh: Mesh, r: np.random.Generator, variant: int) -> dict[str, Arguments]:
    """Those of the limiters' kernels: a range around every value, now and then of no width."""
    n, inside = mesh.n_cells, mesh.n_internal
    offsets, cell_faces, sign = mesh.cell_faces

    def table(rows: int = n) -> np.ndarray:
        return r.normal(size=(rows, 3))
    values, gradient, place = table(), r.normal(size=(n, 3, 3)), [mesh.face_centre,
                                                                  mesh.cell_centre, mesh.delta]
    low = values - r.uniform(0.0, 0.5, (n, 3)) * (r.random((n, 3)) < 0.8)
    high = values + r.uniform(0.0, 0.5, (n, 3)) * (r.random((n, 3)) < 0.8)
    return {
        "neighbour_range": [offsets, mesh.across, r.random(mesh.n_boundary) < 0.5, values,
                            table(mesh.n_boundary), np.empty((n, 3)), np.empty((n, 3))],
        "widened_range": [offsets, mesh.across, low, high, np.empty((n, 3)), np.empty((n, 3))],
        "limit_gradient": [offsets, cell_faces, sign, mesh.across, mesh.left, *place, values, low,
                           high, bool(variant), gradient],
        "limited_reach": [mesh.left[:inside], mesh.right, *place, r.normal(size=mesh.n_faces),
                          values, gradient, low, high, np.empty((inside, 3))],
    }
