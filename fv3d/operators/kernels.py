"""The compiled loops over faces and cells; everything else in fv3d is array code.

Each loop writes only what it owns, so threads never race and the result does not depend on their
number.  Every kernel has a plain reference in the tests.
"""

from __future__ import annotations

from .compiling import ThreadedKernel, compiled, prange


@ThreadedKernel
def weighted_gradient(offsets, other, weights, cell_values, boundary_values, out):
    """out[c, i, :] = sum over faces of weights * (other value - own value)."""
    n_cells = offsets.shape[0] - 1
    width = cell_values.shape[1]
    for cell in prange(n_cells):
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
def vector_gradient(offsets, other, weights, cell_values, boundary_values, out):
    """As :func:`weighted_gradient` for three columns, the weights read once."""
    n_cells = offsets.shape[0] - 1
    for cell in prange(n_cells):
        u = cell_values[cell, 0]
        v = cell_values[cell, 1]
        w = cell_values[cell, 2]
        ux, uy, uz = 0.0, 0.0, 0.0
        vx, vy, vz = 0.0, 0.0, 0.0
        wx, wy, wz = 0.0, 0.0, 0.0
        for k in range(offsets[cell], offsets[cell + 1]):
            o = other[k]
            if o < n_cells:
                du = cell_values[o, 0] - u
                dv = cell_values[o, 1] - v
                dw = cell_values[o, 2] - w
            else:
                du = boundary_values[o - n_cells, 0] - u
                dv = boundary_values[o - n_cells, 1] - v
                dw = boundary_values[o - n_cells, 2] - w
            x = weights[k, 0]
            y = weights[k, 1]
            z = weights[k, 2]
            ux += x * du
            uy += y * du
            uz += z * du
            vx += x * dv
            vy += y * dv
            vz += z * dv
            wx += x * dw
            wy += y * dw
            wz += z * dw
        out[cell, 0, 0], out[cell, 0, 1], out[cell, 0, 2] = ux, uy, uz
        out[cell, 1, 0], out[cell, 1, 1], out[cell, 1, 2] = vx, vy, vz
        out[cell, 2, 0], out[cell, 2, 1], out[cell, 2, 2] = wx, wy, wz


@ThreadedKernel
def blend_with_neighbours(offsets, other, share, values, out):
    """out[c, :] = values of the cell, a share of them replaced by its neighbours' mean."""
    n_cells = offsets.shape[0] - 1
    width = values.shape[1]
    for cell in prange(n_cells):
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
    """Linear interpolation of a scalar to internal faces, carried to the face centre.

    ``skew`` (0, 3): the centres lie between the cells, nothing is to be carried.
    """
    skewed = skew.shape[0] > 0
    for face in prange(right.shape[0]):
        a = left[face]
        b = right[face]
        w = weight[face]
        v = w * values[a] + (1.0 - w) * values[b]
        if skewed:
            for j in range(3):
                v += skew[face, j] * (w * gradient[a, j] + (1.0 - w) * gradient[b, j])
        out[face] = v


@ThreadedKernel
def surface_sum(offsets, faces, sign, face_values, face_area, volume, out):
    """out[c, :] = sum over faces of sign * value * area vector / volume."""
    for cell in prange(offsets.shape[0] - 1):
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
def transport_faces(left, right, weight, skew, area, delta, orthogonal, straight, mass_flux,
                    viscosity, values, gradient, upwind_share, central_share, full_stress,
                    coefficient, explicit):
    """Internal faces of a transport equation by deferred correction.

    coefficient[f, 0] acts on the right cell in the left cell's row, coefficient[f, 1] the other
    way round; explicit[f, :] is the flux left to right that the coefficients do not carry.
    ``skew`` (0, 3): no face centre lies off its line; ``straight``: all faces stand across theirs.
    """
    width = values.shape[1]
    skewed = skew.shape[0] > 0
    central = central_share != 0.0
    carried = skewed and central
    for face in prange(right.shape[0]):
        a = left[face]
        b = right[face]
        w = weight[face]
        flux = mass_flux[face]
        diffusion = viscosity[face] * orthogonal[face]
        coefficient[face, 0] = min(flux, 0.0) - diffusion
        coefficient[face, 1] = -max(flux, 0.0) - diffusion
        up = a
        along = 1.0 - w
        if flux < 0.0:
            up = b
            along = -w
        arm0 = along * delta[face, 0]
        arm1 = along * delta[face, 1]
        arm2 = along * delta[face, 2]
        if skewed:
            arm0 += skew[face, 0]
            arm1 += skew[face, 1]
            arm2 += skew[face, 2]
        g = orthogonal[face]
        for i in range(width):
            reach = (gradient[up, i, 0] * arm0 + gradient[up, i, 1] * arm1
                     + gradient[up, i, 2] * arm2)
            centred = 0.0
            if central:
                centred = w * values[a, i] + (1.0 - w) * values[b, i] - values[up, i]
            stress = 0.0
            if carried or not straight:
                for j in range(3):
                    mean = w * gradient[a, i, j] + (1.0 - w) * gradient[b, i, j]
                    if carried:
                        centred += skew[face, j] * mean
                    stress += (area[face, j] - g * delta[face, j]) * mean
            if full_stress:
                for j in range(3):
                    stress += area[face, j] * (w * gradient[a, j, i]
                                               + (1.0 - w) * gradient[b, j, i])
            explicit[face, i] = (flux * (upwind_share * reach + central_share * centred)
                                 - viscosity[face] * stress)


@ThreadedKernel
def fill_rows(offsets, faces, sign, entry, place, n_internal, coefficient, explicit, data,
              diagonal, rhs):
    """Gather face coefficients into matrix rows, zero in their diagonal places; 1 or 3 columns.

    diagonal = minus the sum of a row's coefficients; rhs = minus the net explicit outflow.
    """
    width = rhs.shape[1]
    for cell in prange(offsets.shape[0] - 1):
        total = 0.0
        first = 0.0
        second = 0.0
        third = 0.0
        for k in range(offsets[cell], offsets[cell + 1]):
            f = faces[k]
            if f < n_internal:
                s = float(sign[k])
                c = coefficient[f, 0] if s > 0.0 else coefficient[f, 1]
                data[entry[k]] = c
                total -= c
                first -= s * explicit[f, 0]
                if width == 3:
                    second -= s * explicit[f, 1]
                    third -= s * explicit[f, 2]
        data[place[cell]] = 0.0
        diagonal[cell] = total
        rhs[cell, 0] = first
        if width == 3:
            rhs[cell, 1] = second
            rhs[cell, 2] = third


@ThreadedKernel
def fill_symmetric(offsets, faces, entry, place, n_internal, inner, outer, data):
    """Rows of a symmetric diffusion matrix from face and boundary coefficients."""
    for cell in prange(offsets.shape[0] - 1):
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
    for face in prange(right.shape[0]):
        w = weight[face]
        out[face] = scale * factor[face] * (w * cell_values[left[face]]
                                            + (1.0 - w) * cell_values[right[face]])


@ThreadedKernel
def momentum_face_flux(left, right, weight, skew, area, delta, orthogonal, straight, density,
                       velocity, gradient, net_gradient, pressure, force_drop, interpolation_d,
                       memory, out):
    """Mass flux by momentum interpolation, see :mod:`fv3d.flow.equations`.

    ``skew`` (0, 3), ``force_drop`` and ``memory`` (0,): there is none.  ``straight``: the area
    vectors are ``orthogonal`` times ``delta``.
    """
    skewed = skew.shape[0] > 0
    forced = force_drop.shape[0] > 0
    older = memory.shape[0] > 0
    for face in prange(right.shape[0]):
        a = left[face]
        b = right[face]
        w = weight[face]
        g = orthogonal[face]
        flux = 0.0
        smooth = 0.0
        for i in range(3):
            u = w * velocity[a, i] + (1.0 - w) * velocity[b, i]
            if skewed:
                for j in range(3):
                    u += skew[face, j] * (w * gradient[a, i, j] + (1.0 - w) * gradient[b, i, j])
            flux += u * area[face, i]
            slope = w * net_gradient[a, i] + (1.0 - w) * net_gradient[b, i]
            smooth += slope * (area[face, i] if straight else g * delta[face, i])
        d = w * interpolation_d[a] + (1.0 - w) * interpolation_d[b]
        jump = pressure[b] - pressure[a]
        if forced:
            jump -= force_drop[face]
        push = smooth - g * jump
        if older:
            push += memory[face]
        out[face] = density * (flux + d * push)


@ThreadedKernel
def pressure_fluxes(left, right, weight, area, delta, orthogonal, straight, density, inner, relaxed,
                    slope, pressure, out):
    """What a pressure change with this slope adds to the fluxes of momentum interpolation.

    ``inner``: flux per difference of pressures; ``relaxed``: velocity per slope of the change that
    has been made already, (0,) for none.
    """
    moved = relaxed.shape[0] > 0
    for face in prange(right.shape[0]):
        a = left[face]
        b = right[face]
        w = weight[face]
        g = orthogonal[face]
        from_a = w * relaxed[a] if moved else 0.0
        from_b = (1.0 - w) * relaxed[b] if moved else 0.0
        through = 0.0
        smooth = 0.0
        for i in range(3):
            mean = w * slope[a, i] + (1.0 - w) * slope[b, i]
            smooth += mean * (area[face, i] if straight else g * delta[face, i])
            if moved:
                through += (from_a * slope[a, i] + from_b * slope[b, i]) * area[face, i]
        jump = pressure[b] - pressure[a]
        out[face] = inner[face] / g * smooth - inner[face] * jump - density * through


@ThreadedKernel
def flux_defects(left, right, weight, skew, area, velocity, gradient, density, mass_flux, out):
    """out = volume flux of internal faces less that of the interpolated velocity."""
    skewed = skew.shape[0] > 0
    for face in prange(right.shape[0]):
        a = left[face]
        b = right[face]
        w = weight[face]
        through = 0.0
        for i in range(3):
            u = w * velocity[a, i] + (1.0 - w) * velocity[b, i]
            if skewed:
                for j in range(3):
                    u += skew[face, j] * (w * gradient[a, i, j] + (1.0 - w) * gradient[b, i, j])
            through += u * area[face, i]
        out[face] = mass_flux[face] / density - through


@ThreadedKernel
def memory_factors(left, right, weight, with_time, without, out):
    """out = 1 / with_time - 1 / without, both interpolated to internal faces first."""
    for face in prange(right.shape[0]):
        a = left[face]
        b = right[face]
        w = weight[face]
        out[face] = (1.0 / (w * with_time[a] + (1.0 - w) * with_time[b])
                     - 1.0 / (w * without[a] + (1.0 - w) * without[b]))


@ThreadedKernel
def net_outflow(offsets, faces, sign, face_flux, out):
    """out[c] = sum over faces of sign * flux."""
    for cell in prange(offsets.shape[0] - 1):
        total = 0.0
        for k in range(offsets[cell], offsets[cell + 1]):
            total += sign[k] * face_flux[faces[k]]
        out[cell] = total


@ThreadedKernel
def coefficient_sums(offsets, faces, n_internal, inner, outer, out):
    """out[c] = sum of a cell's face coefficients, the diagonal of a diffusion matrix."""
    for cell in prange(offsets.shape[0] - 1):
        total = 0.0
        for k in range(offsets[cell], offsets[cell + 1]):
            f = faces[k]
            total += inner[f] if f < n_internal else outer[f - n_internal]
        out[cell] = total


@ThreadedKernel
def correct_flux(left, right, inner, correction, flux):
    """flux -= inner * difference of the correction across each internal face."""
    for face in prange(right.shape[0]):
        flux[face] -= inner[face] * (correction[right[face]] - correction[left[face]])


@ThreadedKernel
def subtract_scaled(field, factor, change, out):
    """out = field - factor * change for three columns, one factor for each row."""
    for row in prange(field.shape[0]):
        f = factor[row]
        out[row, 0] = field[row, 0] - f * change[row, 0]
        out[row, 1] = field[row, 1] - f * change[row, 1]
        out[row, 2] = field[row, 2] - f * change[row, 2]


@ThreadedKernel
def extend_vectors(cells, values, gradient, arm, out):
    """out[f, :] = values[c, :] + gradient[c, :, :] . arm[f], c the f-th of the cells."""
    for f in prange(cells.shape[0]):
        c = cells[f]
        for i in range(3):
            out[f, i] = (values[c, i] + gradient[c, i, 0] * arm[f, 0]
                         + gradient[c, i, 1] * arm[f, 1] + gradient[c, i, 2] * arm[f, 2])


@ThreadedKernel
def extend_scalars(cells, values, gradient, arm, out):
    """out[f] = values[c] + gradient[c, :] . arm[f], c the f-th of the cells."""
    for f in prange(cells.shape[0]):
        c = cells[f]
        out[f] = (values[c] + gradient[c, 0] * arm[f, 0] + gradient[c, 1] * arm[f, 1]
                  + gradient[c, 2] * arm[f, 2])


@compiled
def add_to_rows(rows, values, out):
    """out[rows[k], :] += values[k, :], one after the other."""
    for k in range(rows.shape[0]):
        for i in range(values.shape[1]):
            out[rows[k], i] += values[k, i]
