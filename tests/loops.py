"""Plain references of the compiled loops of :mod:`fv3d.operators.kernels`.

Written from the formulas, face by face or with dense matrices, without a look at the kernels'
order of work.  ``REFERENCES[name](*arguments)`` returns the arrays the kernel writes, by position;
``tests/loops_solving.py`` adds those of the solvers and limiters.
"""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise

import numpy as np

REFERENCES: dict[str, Callable[..., dict[int, np.ndarray]]] = {}


def reference(function: Callable[..., dict[int, np.ndarray]]) -> Callable:
    REFERENCES[function.__name__] = function
    return function


def whole(skew: np.ndarray, faces: int) -> np.ndarray:
    """Offsets (faces, 3) from what stands for them."""
    return skew if len(skew) else np.zeros((faces, 3))


def mean_of(weight: float, a: int, b: int) -> Callable[[np.ndarray], np.ndarray]:
    """Linear interpolation between two cells."""
    return lambda field: weight * field[a] + (1 - weight) * field[b]


@reference
def weighted_gradient(offsets, other, weights, cells, edges, out):
    both = np.vstack([cells, edges])
    result = np.zeros_like(out)
    for cell in range(len(cells)):
        for k in range(offsets[cell], offsets[cell + 1]):
            result[cell] += np.outer(both[other[k]] - cells[cell], weights[k])
    return {5: result}


@reference
def vector_gradient(*given):
    return weighted_gradient(*given)


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
    result, skew = np.empty_like(out), whole(skew, len(right))
    for face, (a, b) in enumerate(zip(left, right)):
        mean = mean_of(weight[face], a, b)
        result[face] = mean(values) + mean(gradient) @ skew[face]
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
def transport_faces(left, right, weight, skew, area, delta, orthogonal, straight, mass_flux,
                    viscosity, values, gradient, upwind_share, central_share, full_stress,
                    coefficient, explicit):
    implicit, rest = np.empty_like(coefficient), np.empty_like(explicit)
    skew = whole(skew, len(right))
    for f, (a, b) in enumerate(zip(left, right)):
        w, m, mu, g = weight[f], mass_flux[f], viscosity[f], orthogonal[f]
        mean = mean_of(w, a, b)
        to_face = (1 - w) * delta[f] + skew[f]
        up, arm = (a, to_face) if m >= 0 else (b, to_face - delta[f])
        central = mean(values) + mean(gradient) @ skew[f]
        ahead = values[up] + gradient[up] @ arm
        carried = (values[up] + upwind_share * (ahead - values[up])
                   + central_share * (central - values[up]))
        viscous = mu * (g * (values[b] - values[a]) + mean(gradient) @ (area[f] - g * delta[f]))
        if full_stress:
            viscous = viscous + mu * mean(gradient).T @ area[f]
        implicit[f] = min(m, 0.0) - mu * g, -max(m, 0.0) - mu * g
        by_coefficients = m * values[up] - mu * g * (values[b] - values[a])
        rest[f] = m * carried - viscous - by_coefficients
    return {15: implicit, 16: rest}


@reference
def fill_rows(offsets, faces, sign, entry, place, n_internal, coefficient, explicit, data, diagonal,
              rhs):
    data, diagonal, rhs = np.zeros_like(data), np.zeros_like(diagonal), np.zeros_like(rhs)
    for cell in range(len(diagonal)):
        for k in range(offsets[cell], offsets[cell + 1]):
            if faces[k] >= n_internal:
                continue
            c = coefficient[faces[k], 0 if sign[k] > 0 else 1]
            data[entry[k]] = c
            diagonal[cell] -= c
            rhs[cell] -= sign[k] * explicit[faces[k]]
    return {8: data, 9: diagonal, 10: rhs}


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
    at_face = [mean_of(w, a, b)(cell_values) for a, b, w in zip(left, right, weight)]
    return {6: scale * factor[:len(right)] * np.array(at_face)}


@reference
def momentum_face_flux(left, right, weight, skew, area, delta, orthogonal, straight, density,
                       velocity, gradient, net, pressure, force_drop, d, memory, out):
    result, skew = np.empty_like(out), whole(skew, len(right))
    drop = force_drop if len(force_drop) else np.zeros(len(right))
    older = memory if len(memory) else np.zeros(len(right))
    for f, (a, b) in enumerate(zip(left, right)):
        mean = mean_of(weight[f], a, b)
        at_face = mean(velocity) + mean(gradient) @ skew[f]
        smooth, compact = mean(net) @ delta[f], pressure[b] - pressure[a] - drop[f]
        result[f] = density * (at_face @ area[f]
                               + mean(d) * (orthogonal[f] * (smooth - compact) + older[f]))
    return {16: result}


@reference
def pressure_fluxes(left, right, weight, area, delta, orthogonal, straight, density, inner, relaxed,
                    slope, pressure, out):
    result = np.empty_like(out)
    change = -relaxed[:, None] * slope if len(relaxed) else np.zeros_like(slope)
    for f, (a, b) in enumerate(zip(left, right)):
        mean = mean_of(weight[f], a, b)
        difference = mean(slope) @ delta[f] - (pressure[b] - pressure[a])
        result[f] = inner[f] * difference + density * mean(change) @ area[f]
    return {12: result}


@reference
def flux_defects(left, right, weight, skew, area, velocity, gradient, density, mass_flux, out):
    result, skew = np.empty_like(out), whole(skew, len(right))
    for f, (a, b) in enumerate(zip(left, right)):
        mean = mean_of(weight[f], a, b)
        result[f] = mass_flux[f] / density - (mean(velocity) + mean(gradient) @ skew[f]) @ area[f]
    return {9: result}


@reference
def memory_factors(left, right, weight, with_time, without, out):
    means = [mean_of(w, a, b) for a, b, w in zip(left, right, weight)]
    return {5: np.array([1 / mean(with_time) - 1 / mean(without) for mean in means])}


@reference
def net_outflow(offsets, faces, sign, face_flux, out):
    result = np.zeros_like(out)
    for cell in range(len(out)):
        for k in range(offsets[cell], offsets[cell + 1]):
            result[cell] += sign[k] * face_flux[faces[k]]
    return {4: result}


@reference
def coefficient_sums(offsets, faces, n_internal, inner, outer, out):
    both = np.concatenate([inner[:n_internal], outer])
    return {5: np.array([both[faces[start:stop]].sum() for start, stop in pairwise(offsets)])}


@reference
def correct_flux(left, right, inner, correction, flux):
    result = flux.copy()
    for f, (a, b) in enumerate(zip(left, right)):
        result[f] += inner[f] * (correction[a] - correction[b])
    return {4: result}


@reference
def subtract_scaled(field, factor, change, out):
    return {3: np.array([row - f * c for row, f, c in zip(field, factor, change)])}


@reference
def extend_vectors(cells, values, gradient, arm, out):
    return {4: np.array([values[c] + gradient[c] @ arm[f] for f, c in enumerate(cells)])}


@reference
def extend_scalars(cells, values, gradient, arm, out):
    return {4: np.array([values[c] + gradient[c] @ arm[f] for f, c in enumerate(cells)])}


@reference
def add_to_rows(rows, values, out):
    result = out.copy()
    for row, value in zip(rows, values):
        result[row] += value
    return {2: result}
