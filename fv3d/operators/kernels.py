"""The compiled loops; everything else in fv3d is array code.

Each loop runs over faces or over cells and writes only what it owns, so threads never race
and the result does not depend on their number.  Every kernel has a plain reference in the tests.
"""

from __future__ import annotations

import types
import warnings
from collections.abc import Callable
from numbers import Integral
from typing import Any

import numba

from ..errors import CaseError, Fv3dWarning

prange = numba.prange
SMALL = 20_000  # below this many rows a second thread costs more than it brings


def _jit(function: Callable, **options: Any) -> Callable:
    try:
        return numba.njit(cache=True, **options)(function)
    except RuntimeError:
        warnings.warn("No folder for compiled code can be written: loops are compiled again at "
                      "every start (some seconds). Set NUMBA_CACHE_DIR to a writable folder.",
                      Fv3dWarning, stacklevel=3)
        return numba.njit(**options)(function)


def compiled(function: Callable) -> Callable:
    """Compile a loop for one thread, cached on disk where a folder can be written."""
    return _jit(function)


class ThreadedKernel:
    """A loop compiled twice, for one thread and for several; the size of the work decides."""

    def __init__(self, function: Callable) -> None:
        single = types.FunctionType(function.__code__, function.__globals__, function.__name__)
        single.__qualname__ = function.__qualname__ + "_single"  # a cache entry of its own
        single.__module__ = function.__module__
        self.plain = function
        self._single = _jit(single)
        self._threaded = _jit(function, parallel=True)

    def __call__(self, *arguments: Any) -> None:
        """Run over the rows of the first argument."""
        if len(arguments[0]) < SMALL or numba.get_num_threads() == 1:
            self._single(*arguments)
        else:
            self._threaded(*arguments)


@ThreadedKernel
def weighted_gradient(offsets, other, weights, cell_values, boundary_values, out):
    """out[c, i, :] = sum over faces of weights * (other value - own value)."""
    n_cells = offsets.shape[0] - 1
    width = cell_values.shape[1]
    for cell in numba.prange(n_cells):
        for i in range(width):
            own = cell_values[cell, i]
            gx = 0.0
            gy = 0.0
            gz = 0.0
            for k in range(offsets[cell], offsets[cell + 1]):
                o = other[k]
                if o < n_cells:
                    difference = cell_values[o, i] - own
                else:
                    difference = boundary_values[o - n_cells, i] - own
                gx += weights[k, 0] * difference
                gy += weights[k, 1] * difference
                gz += weights[k, 2] * difference
            out[cell, i, 0] = gx
            out[cell, i, 1] = gy
            out[cell, i, 2] = gz


@ThreadedKernel
def blend_with_neighbours(offsets, other, share, values, out):
    """out[c, :] = values of the cell, a share of them replaced by its neighbours' mean."""
    n_cells = offsets.shape[0] - 1
    width = values.shape[1]
    for cell in numba.prange(n_cells):
        count = 0
        for k in range(offsets[cell], offsets[cell + 1]):
            if other[k] < n_cells:
                count += 1
        s = share[cell] if count > 0 else 0.0
        for i in range(width):
            total = 0.0
            if s > 0.0:
                for k in range(offsets[cell], offsets[cell + 1]):
                    if other[k] < n_cells:
                        total += values[other[k], i]
                total *= s / count
            out[cell, i] = (1.0 - s) * values[cell, i] + total


@ThreadedKernel
def linear_face_values(left, right, weight, skew, values, gradient, out):
    """Linear interpolation of a scalar to internal faces, carried to the face centre."""
    for face in numba.prange(right.shape[0]):
        a = left[face]
        b = right[face]
        w = weight[face]
        v = w * values[a] + (1.0 - w) * values[b]
        for j in range(3):
            v += skew[face, j] * (w * gradient[a, j] + (1.0 - w) * gradient[b, j])
        out[face] = v


@ThreadedKernel
def surface_sum(offsets, faces, sign, face_values, face_area, volume, out):
    """out[c, :] = sum over faces of sign * value * area vector / volume."""
    for cell in numba.prange(offsets.shape[0] - 1):
        x = 0.0
        y = 0.0
        z = 0.0
        for k in range(offsets[cell], offsets[cell + 1]):
            f = faces[k]
            v = sign[k] * face_values[f]
            x += v * face_area[f, 0]
            y += v * face_area[f, 1]
            z += v * face_area[f, 2]
        out[cell, 0] = x / volume[cell]
        out[cell, 1] = y / volume[cell]
        out[cell, 2] = z / volume[cell]


@ThreadedKernel
def transport_faces(left, right, weight, skew, area, delta, orthogonal, face_centre, cell_centre,
                    mass_flux, viscosity, values, gradient, upwind_share, central_share,
                    full_stress, coefficient, explicit):
    """Internal faces of a transport equation by deferred correction.

    coefficient[f, 0] acts on the right cell in the left cell's row, coefficient[f, 1] the other
    way round; explicit[f, :] is the flux left to right that the coefficients do not carry.
    """
    width = values.shape[1]
    for face in numba.prange(right.shape[0]):
        a = left[face]
        b = right[face]
        w = weight[face]
        flux = mass_flux[face]
        diffusion = viscosity[face] * orthogonal[face]
        up = a if flux >= 0.0 else b
        coefficient[face, 0] = min(flux, 0.0) - diffusion
        coefficient[face, 1] = -max(flux, 0.0) - diffusion
        for i in range(width):
            reach = 0.0
            centred = w * values[a, i] + (1.0 - w) * values[b, i] - values[up, i]
            tangential = 0.0
            turned = 0.0
            for j in range(3):
                mean = w * gradient[a, i, j] + (1.0 - w) * gradient[b, i, j]
                arm = face_centre[face, j] - cell_centre[a, j]
                reach += gradient[up, i, j] * (arm if up == a else arm - delta[face, j])
                centred += skew[face, j] * mean
                tangential += (area[face, j] - orthogonal[face] * delta[face, j]) * mean
                if full_stress:
                    turned += area[face, j] * (w * gradient[a, j, i]
                                               + (1.0 - w) * gradient[b, j, i])
            explicit[face, i] = (flux * (upwind_share * reach + central_share * centred)
                                 - viscosity[face] * (tangential + turned))


@ThreadedKernel
def fill_rows(offsets, faces, sign, entry, n_internal, coefficient, explicit, data, diagonal,
              rhs):
    """Gather face coefficients into matrix rows; diagonal and right-hand side are added to."""
    width = rhs.shape[1]
    for cell in numba.prange(offsets.shape[0] - 1):
        total = 0.0
        for k in range(offsets[cell], offsets[cell + 1]):
            f = faces[k]
            if f < n_internal:
                c = coefficient[f, 0] if sign[k] > 0 else coefficient[f, 1]
                data[entry[k]] = c
                total -= c
                for i in range(width):
                    rhs[cell, i] -= sign[k] * explicit[f, i]
        diagonal[cell] += total


@ThreadedKernel
def fill_symmetric(offsets, faces, entry, place, n_internal, inner, outer, data):
    """Rows of a symmetric diffusion matrix from face and boundary coefficients."""
    for cell in numba.prange(offsets.shape[0] - 1):
        total = 0.0
        for k in range(offsets[cell], offsets[cell + 1]):
            f = faces[k]
            if f < n_internal:
                data[entry[k]] = -inner[f]
                total += inner[f]
            else:
                total += outer[f - n_internal]
        data[place[cell]] = total


@ThreadedKernel
def face_coefficients(left, right, weight, cell_values, factor, scale, out):
    """out = scale * factor * linear interpolation of cell values to internal faces."""
    for face in numba.prange(right.shape[0]):
        w = weight[face]
        out[face] = scale * factor[face] * (w * cell_values[left[face]]
                                            + (1.0 - w) * cell_values[right[face]])


@ThreadedKernel
def row_residual(indptr, indices, data, block, rhs, x, out):
    """out = rhs - A x for three right-hand sides; block = (xx, yy, zz, xy, xz, yz) diagonal."""
    for row in numba.prange(indptr.shape[0] - 1):
        x0 = x[row, 0]
        x1 = x[row, 1]
        x2 = x[row, 2]
        s0 = rhs[row, 0] - block[row, 0] * x0 - block[row, 3] * x1 - block[row, 4] * x2
        s1 = rhs[row, 1] - block[row, 3] * x0 - block[row, 1] * x1 - block[row, 5] * x2
        s2 = rhs[row, 2] - block[row, 4] * x0 - block[row, 5] * x1 - block[row, 2] * x2
        for k in range(indptr[row], indptr[row + 1]):
            column = indices[k]
            if column != row:
                s0 -= data[k] * x[column, 0]
                s1 -= data[k] * x[column, 1]
                s2 -= data[k] * x[column, 2]
        out[row, 0] = s0
        out[row, 1] = s1
        out[row, 2] = s2


@compiled
def sweep(indptr, indices, data, inverse, rhs, rows, backward, x):
    """One Gauss-Seidel sweep over the given rows (in their order, or backwards), three columns.

    inverse = (xx, yy, zz, xy, xz, yz) of each row's inverted diagonal block.
    """
    n = rows.shape[0]
    for step in range(n):
        row = rows[n - 1 - step] if backward else rows[step]
        s0 = rhs[row, 0]
        s1 = rhs[row, 1]
        s2 = rhs[row, 2]
        for k in range(indptr[row], indptr[row + 1]):
            column = indices[k]
            if column != row:
                s0 -= data[k] * x[column, 0]
                s1 -= data[k] * x[column, 1]
                s2 -= data[k] * x[column, 2]
        x[row, 0] = inverse[row, 0] * s0 + inverse[row, 3] * s1 + inverse[row, 4] * s2
        x[row, 1] = inverse[row, 3] * s0 + inverse[row, 1] * s1 + inverse[row, 5] * s2
        x[row, 2] = inverse[row, 4] * s0 + inverse[row, 5] * s1 + inverse[row, 2] * s2


@ThreadedKernel
def momentum_face_flux(left, right, weight, skew, area, delta, orthogonal, density, velocity,
                       gradient, net_gradient, pressure, force_drop, interpolation_d, memory,
                       out):
    """Mass flux by momentum interpolation, see :mod:`fv3d.flow.equations`."""
    for face in numba.prange(right.shape[0]):
        a = left[face]
        b = right[face]
        w = weight[face]
        flux = 0.0
        smooth = 0.0
        for i in range(3):
            u = w * velocity[a, i] + (1.0 - w) * velocity[b, i]
            for j in range(3):
                u += skew[face, j] * (w * gradient[a, i, j] + (1.0 - w) * gradient[b, i, j])
            flux += u * area[face, i]
            smooth += (w * net_gradient[a, i] + (1.0 - w) * net_gradient[b, i]) * delta[face, i]
        d = w * interpolation_d[a] + (1.0 - w) * interpolation_d[b]
        jump = pressure[b] - pressure[a] - force_drop[face]
        out[face] = density * (flux + d * (orthogonal[face] * (smooth - jump) + memory[face]))


@ThreadedKernel
def product(indptr, indices, data, x, out):
    """out = A x for one vector."""
    for row in numba.prange(indptr.shape[0] - 1):
        s = data.dtype.type(0.0)
        for k in range(indptr[row], indptr[row + 1]):
            s += data[k] * x[indices[k]]
        out[row] = s


@ThreadedKernel
def residual_product(indptr, indices, data, x, rhs, out):
    """out = rhs - A x for one vector."""
    for row in numba.prange(indptr.shape[0] - 1):
        s = rhs[row]
        for k in range(indptr[row], indptr[row + 1]):
            s -= data[k] * x[indices[k]]
        out[row] = s


@ThreadedKernel
def product_add(indptr, indices, data, x, out):
    """out += A x for one vector."""
    for row in numba.prange(indptr.shape[0] - 1):
        s = out[row]
        for k in range(indptr[row], indptr[row + 1]):
            s += data[k] * x[indices[k]]
        out[row] = s


@ThreadedKernel
def chebyshev_start(inverse_diagonal, rhs, scale, direction, x):
    """First Chebyshev step from x = 0."""
    for row in numba.prange(rhs.shape[0]):
        direction[row] = scale * inverse_diagonal[row] * rhs[row]
        x[row] = direction[row]


@ThreadedKernel
def chebyshev_step(indptr, indices, data, inverse_diagonal, rhs, keep, scale, direction, work,
                   x):
    """direction = keep * direction + scale * D^-1 (rhs - A x); x += direction."""
    n = indptr.shape[0] - 1
    for row in numba.prange(n):
        s = rhs[row]
        for k in range(indptr[row], indptr[row + 1]):
            s -= data[k] * x[indices[k]]
        work[row] = s
    for row in numba.prange(n):
        direction[row] = keep * direction[row] + scale * inverse_diagonal[row] * work[row]
        x[row] += direction[row]


def set_threads(count: int) -> None:
    """Set the number of threads of the compiled loops, for this process.

    Parameters
    ----------
    count : int
        From 1 to the number of cores, or to the environment variable ``NUMBA_NUM_THREADS``
        where it is set.

    Raises
    ------
    CaseError
        Not a whole number in this range.
    """
    most = int(numba.config.NUMBA_NUM_THREADS)  # type: ignore[attr-defined]
    whole = isinstance(count, Integral) and not isinstance(count, bool)
    if not whole or not 1 <= count <= most:
        raise CaseError(f"The number of threads is a whole number from 1 to {most} here.",
                        where="set_threads(count)", got=repr(count),
                        remedy="Give a number in this range; for more, set the environment "
                               "variable NUMBA_NUM_THREADS before Python starts.")
    numba.set_num_threads(int(count))


def get_threads() -> int:
    """Number of threads of the compiled loops.

    Returns
    -------
    int
        All cores, unless :func:`set_threads` or ``NUMBA_NUM_THREADS`` says otherwise.
    """
    return int(numba.get_num_threads())
