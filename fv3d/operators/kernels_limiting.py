"""Compiled loops of the limiters, by the rules of :mod:`fv3d.operators.kernels`."""

from __future__ import annotations

from .compiling import ThreadedKernel, prange


@ThreadedKernel
def neighbour_range(offsets, across, used, cell_values, boundary_values, low, high):
    """Smallest and largest value of each cell, its neighbours and its used boundary faces."""
    n_cells = offsets.shape[0] - 1
    for cell in prange(n_cells):
        for i in range(cell_values.shape[1]):
            least = cell_values[cell, i]
            most = least
            for k in range(offsets[cell], offsets[cell + 1]):
                o = across[k]
                if o < n_cells:
                    value = cell_values[o, i]
                elif used[o - n_cells]:
                    value = boundary_values[o - n_cells, i]
                else:
                    continue
                least = min(least, value)
                most = max(most, value)
            low[cell, i] = least
            high[cell, i] = most


@ThreadedKernel
def widened_range(offsets, across, low, high, wide_low, wide_high):
    """Smallest ``low`` and largest ``high`` among each cell and its neighbours."""
    n_cells = offsets.shape[0] - 1
    for cell in prange(n_cells):
        for i in range(low.shape[1]):
            least = low[cell, i]
            most = high[cell, i]
            for k in range(offsets[cell], offsets[cell + 1]):
                o = across[k]
                if o < n_cells:
                    least = min(least, low[o, i])
                    most = max(most, high[o, i])
            wide_low[cell, i] = least
            wide_high[cell, i] = most


@ThreadedKernel
def limit_gradient(offsets, faces, sign, across, left, face_centre, cell_centre, delta,
                   values, low, high, smooth, gradient):
    """Scale each cell's gradient so that its values at inner face centres keep to the range.

    By the least over the faces of min(1, y), ``y`` the ratio of room to change; where ``smooth``
    of y - 4/27 y^3 below y = 1.5 and one above.
    """
    n_cells = offsets.shape[0] - 1
    for cell in prange(n_cells):
        for i in range(values.shape[1]):
            factor = 1.0
            for k in range(offsets[cell], offsets[cell + 1]):
                if across[k] >= n_cells:
                    continue
                f = faces[k]
                change = 0.0
                for j in range(3):
                    arm = face_centre[f, j] - cell_centre[left[f], j]
                    if sign[k] < 0:
                        arm -= delta[f, j]
                    change += gradient[cell, i, j] * arm
                if change == 0.0:
                    continue
                room = (high[cell, i] if change > 0.0 else low[cell, i]) - values[cell, i]
                y = room / change
                if smooth:
                    y = y - 4.0 / 27.0 * y * y * y if y < 1.5 else 1.0
                factor = min(factor, y)
            for j in range(3):
                gradient[cell, i, j] *= factor


@ThreadedKernel
def limited_reach(left, right, face_centre, cell_centre, delta, mass_flux, values, gradient, low,
                  high, out):
    """Extrapolation from the upwind cell to the face centre, kept inside the range around it.

    The change is multiplied by y - 4/27 y^3 below y = 1.5 and by one above, ``y`` the ratio of
    room to change, room the lesser of 0.7 of that ahead and three times that behind.
    """
    for face in prange(right.shape[0]):
        forward = mass_flux[face] >= 0.0
        up = left[face] if forward else right[face]
        for i in range(values.shape[1]):
            change = 0.0
            for j in range(3):
                arm = face_centre[face, j] - cell_centre[left[face], j]
                if not forward:
                    arm -= delta[face, j]
                change += gradient[up, i, j] * arm
            above = high[up, i] - values[up, i]
            below = values[up, i] - low[up, i]
            if change > 0.0:
                room = min(0.7 * above, 3.0 * below)
            else:
                room = min(0.7 * below, 3.0 * above)
            if room < 1.5 * abs(change):
                y = room / abs(change)
                change *= y - 4.0 / 27.0 * y * y * y
            out[face, i] = change
