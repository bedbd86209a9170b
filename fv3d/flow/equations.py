"""Momentum equation, face fluxes and pressure correction, in the order of the derivation.

No iteration loops here.  With ``d = V / a`` (``a`` the unrelaxed diagonal) the mass flux through
a face is

    F = rho [ u_f . S + d_f g ( grad(p)_f . delta - (p_R - p_L) + force along delta - mean ) ],

``g = |S|^2 / (S . delta)``: the interpolated velocity plus the difference between the mean of the
two cells' pressure gradients and the compact one (Rhie, C. M. and Chow, W. L. 1983, AIAA J. 21,
1525-1532).  ``d`` is taken without relaxation and time step, so neither enters the solution.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import scipy.sparse as sparse

from ..operators import kernels
from ..operators.assembly import NOTHING, Rows, symmetric_matrix
from ..operators.limiters import limited_extension
from .problem import Force, Problem
from .zones import Drag, Ease


@dataclass(frozen=True, eq=False)
class PressureFields:
    """Pressure with what follows from it, computed when it is asked for.

    ``cell`` (n_cells,) and ``edge`` (n_boundary,) [Pa]; ``slope`` (n_cells, 3) [Pa/m] by the
    gradient method.
    """

    problem: Problem
    cell: np.ndarray
    edge: np.ndarray
    slope: np.ndarray

    @cached_property
    def face(self) -> np.ndarray:
        """(n_faces,) pressure on the faces [Pa]."""
        mesh, n, zones = self.problem.mesh, self.problem.mesh.n_internal, self.problem.zones
        face = np.empty(mesh.n_faces)
        kernels.linear_face_values(mesh.left[:n], mesh.right, mesh.weight, mesh.skew, self.cell,
                                   self.slope, face[:n])
        if zones is not None:
            face[zones.seams] = zones.bending.values(self.cell, self.slope)
        face[n:] = self.edge
        return face

    @cached_property
    def warp_force(self) -> np.ndarray:
        """(n_faces, 3) the slope's share of the force on faces that are not flat [N]."""
        return _warp_force(self.problem, self.slope)

    @cached_property
    def gradient(self) -> np.ndarray:
        """(n_cells, 3) conservative gradient, the sum of the forces on the faces [Pa/m]."""
        return surface_gradient(self.problem, self.face, self.slope)


@dataclass(frozen=True, eq=False)
class Momentum:
    """The momentum equation of one iteration, unrelaxed, without pressure and force.

    ``rows`` holds ``A u = rhs``; ``diagonal`` (n_cells,) [kg/s] the part of its diagonal common to
    all components (the traction of walls, which acts along them only, is not in it);
    ``neighbours`` (n_cells,) [kg/s] the sum of the neighbours' coefficients; ``drag`` what zones of
    resistance add to the rows.
    """

    rows: Rows
    diagonal: np.ndarray
    neighbours: np.ndarray
    drag: Drag | None = None


def extended(cells: np.ndarray, values: np.ndarray, gradient: np.ndarray,
             arm: np.ndarray) -> np.ndarray:
    """Values of some cells (k,) carried by their gradients along arms (k, 3) [m]."""
    kernel = kernels.extend_scalars if values.ndim == 1 else kernels.extend_vectors
    out = np.empty((len(cells), *values.shape[1:]))
    kernel(cells, values, gradient, arm, out)
    return out


def boundary_velocity(problem: Problem, velocity: np.ndarray, gradient: np.ndarray | None,
                      boundary_flux: np.ndarray) -> np.ndarray:
    """(n_boundary, 3) velocity on the boundary faces [m/s].

    Where fluid enters through an outlet only the normal part of the cell's velocity is kept.
    Without ``gradient`` the velocity is taken as uniform in each cell.
    """
    table, mesh = problem.table, problem.mesh
    owner = mesh.left[mesh.n_internal:]
    normal = mesh.face_normal[mesh.n_internal:]
    inner = velocity[owner] if gradient is None \
        else extended(owner, velocity, gradient, problem.foot)
    across = np.einsum("ij,ij->i", inner, normal)[:, None] * normal
    entering = table.pressure_given & (boundary_flux < 0)
    tangential = np.where(entering, 0.0, table.keep_tangential)[:, None]
    return tangential * (inner - across) + table.keep_normal[:, None] * across + table.fixed


def boundary_pressure(problem: Problem, pressure: np.ndarray, gradient: np.ndarray | None,
                      boundary_flux: np.ndarray) -> np.ndarray:
    """(n_boundary,) pressure on the boundary faces [Pa].

    Given at outlets (less the dynamic pressure where fluid enters), extrapolated with the cell
    gradient at walls and inlets, along the plane only at symmetry planes; without ``gradient`` the
    cell's.
    """
    table, mesh = problem.table, problem.mesh
    owner = mesh.left[mesh.n_internal:]
    reach = np.where(table.pressure_flat[:, None], problem.foot, mesh.delta[mesh.n_internal:])
    outward = pressure[owner] if gradient is None else extended(owner, pressure, gradient, reach)
    if not table.pressure_given.any():
        return outward
    density = problem.case.fluid.density
    speed = np.minimum(boundary_flux, 0.0) / (density * mesh.face_area_magnitude[mesh.n_internal:])
    given = table.pressure - 0.5 * density * speed ** 2
    return np.where(table.pressure_given, given, outward)


def pressure_fields(problem: Problem, pressure: np.ndarray,
                    boundary_flux: np.ndarray) -> PressureFields:
    """Boundary pressures and the slope; the rest when it is asked for."""
    known = boundary_pressure(problem, pressure, None, boundary_flux)
    method = problem.pressure_gradient if problem.zones is None else problem.zones.bending
    slope = method(pressure, known)
    return PressureFields(problem, pressure,
                          boundary_pressure(problem, pressure, slope, boundary_flux), slope)


def surface_gradient(problem: Problem, face_values: np.ndarray,
                     slope: np.ndarray) -> np.ndarray:
    """(n_cells, 3) surface integral of a scalar over the cell volume.

    ``slope`` (n_cells, 3), the scalar's gradient, carries the integral over warped faces.
    """
    mesh = problem.mesh
    offsets, faces, sign = mesh.cell_faces
    out = np.empty((mesh.n_cells, 3))
    kernels.surface_sum(offsets, faces, sign, face_values, mesh.face_area, mesh.cell_volume, out)
    if mesh.warped:
        out += (mesh.outflow @ _warp_force(problem, slope)) / mesh.cell_volume[:, None]
    return out


def _warp_force(problem: Problem, slope: np.ndarray) -> np.ndarray:
    mesh = problem.mesh
    if not mesh.warped:
        return np.zeros((mesh.n_faces, 3))
    at_face = mesh.to_faces(slope)
    if problem.zones is not None:
        at_face[problem.zones.seams] = slope[problem.zones.bending.yielding]
    return np.einsum("fj,fji->fi", at_face, mesh.warp)


def momentum(problem: Problem, velocity: np.ndarray, gradient: np.ndarray, edge: np.ndarray,
             mass_flux: np.ndarray) -> Momentum:
    """Assemble convection and diffusion of momentum.

    Parameters
    ----------
    gradient : (n_cells, 3, 3) velocity gradient, ``edge`` (n_boundary, 3) boundary velocity
    mass_flux : (n_faces,) [kg/s]
    """
    mesh, layout, n = problem.mesh, problem.pattern, problem.mesh.n_internal
    scheme = problem.case.numerics.convection
    coefficient, explicit = np.empty((n, 2)), np.empty((n, 3))
    kernels.transport_faces(
        mesh.left[:n], mesh.right, mesh.weight, mesh.skew, mesh.face_area, mesh.delta,
        problem.orthogonal, mesh.straight, mass_flux, problem.face_viscosity, velocity, gradient,
        float(scheme.upwind_share), float(scheme.central_share), problem.full_stress, coefficient,
        explicit)
    if scheme.limited_share:
        reach = limited_extension(mesh, velocity, edge, gradient, mass_flux)
        explicit += scheme.limited_share * mass_flux[:n, None] * reach
    if mesh.warped:
        explicit += _warp_convection(problem, velocity, gradient)[:n]
    data, rhs = np.empty(len(layout.indices)), np.empty((mesh.n_cells, 3))
    neighbours = np.empty(mesh.n_cells)
    kernels.fill_rows(*mesh.cell_faces, layout.entry, layout.diagonal, n, coefficient, explicit,
                      data, neighbours, rhs)
    implicit, block, outer = _boundary_momentum(problem, velocity, gradient, edge, mass_flux[n:])
    owner = mesh.left[n:]
    diagonal = neighbours + np.bincount(owner, implicit, mesh.n_cells)
    full = np.zeros((mesh.n_cells, 6))
    full[:, :3] = diagonal[:, None]
    kernels.add_to_rows(owner, block, full)
    kernels.add_to_rows(owner, outer, rhs)
    drag = None if problem.zones is None else problem.zones.drag(velocity)
    if drag is not None:
        full[:, :3] += mesh.cell_volume[:, None] * drag.secant
    return Momentum(Rows(layout, data, full, rhs), diagonal, neighbours, drag)


def _warp_convection(problem: Problem, velocity: np.ndarray, gradient: np.ndarray) -> np.ndarray:
    """(n_faces, 3) convection of the velocity's slope over warped faces [N]."""
    mesh = problem.mesh
    through = np.einsum("fi,fji->fj", mesh.to_faces(velocity), mesh.warp)
    return problem.case.fluid.density * np.einsum("fj,fkj->fk", through, mesh.to_faces(gradient))


def _boundary_momentum(problem: Problem, velocity: np.ndarray, gradient: np.ndarray,
                       edge: np.ndarray, flux: np.ndarray) -> tuple[np.ndarray, ...]:
    """Common diagonal, rest of the diagonal block and right-hand side of the boundary faces."""
    mesh, n = problem.mesh, problem.mesh.n_internal
    normal, own = mesh.face_normal[n:], velocity[mesh.left[n:]]
    c, along, across = _shear_coefficients(problem)
    common = np.minimum(along, across)
    implicit = c * common + np.where(flux < 0, -flux, 0.0)
    x, y, z = normal.T
    nn = np.stack([x * x, y * y, z * z, x * y, x * z, y * z], axis=1)
    block = (c * (across - along))[:, None] * nn
    block[:, :3] += (c * (along - common))[:, None]
    carried = boundary_carried(problem, velocity, gradient, edge, flux)
    total = boundary_traction(problem, velocity, gradient, edge) - flux[:, None] * (carried - own)
    acting = np.empty_like(own)
    acting[:, 0] = block[:, 0] * own[:, 0] + block[:, 3] * own[:, 1] + block[:, 4] * own[:, 2]
    acting[:, 1] = block[:, 3] * own[:, 0] + block[:, 1] * own[:, 1] + block[:, 5] * own[:, 2]
    acting[:, 2] = block[:, 4] * own[:, 0] + block[:, 5] * own[:, 1] + block[:, 2] * own[:, 2]
    return implicit, block, total + implicit[:, None] * own + acting


def boundary_carried(problem: Problem, velocity: np.ndarray, gradient: np.ndarray,
                     edge: np.ndarray, flux: np.ndarray) -> np.ndarray:
    """(n_boundary, 3) velocity that the mass flux carries through each boundary face [m/s].

    Fluid that leaves through a boundary of given velocity carries the value extrapolated from
    inside, as convection asks for; the given value acts by diffusion.
    """
    mesh, n = problem.mesh, problem.mesh.n_internal
    scheme, owner = problem.case.numerics.convection, mesh.left[n:]
    share = min(scheme.upwind_share + scheme.central_share + scheme.limited_share, 1.0)
    inner = extended(owner, velocity, gradient, share * mesh.delta[n:])
    leaving = (flux > 0) & ~problem.table.pressure_given
    return np.where(leaving[:, None], inner, edge)


def _shear_coefficients(problem: Problem) -> tuple[np.ndarray, ...]:
    n = problem.mesh.n_internal
    c = problem.face_viscosity[n:] * problem.orthogonal[n:]
    across = problem.table.shear_normal
    if not problem.full_stress:
        across = np.minimum(across, 1.0)
    return c, problem.table.shear_tangential, across


def boundary_traction(problem: Problem, velocity: np.ndarray, gradient: np.ndarray,
                      edge: np.ndarray) -> np.ndarray:
    """(n_boundary, 3) viscous force of the surroundings on the fluid through each face [N].

    The velocity difference is taken between the face and the foot of its normal in the cell.
    """
    mesh, n = problem.mesh, problem.mesh.n_internal
    owner, normal = mesh.left[n:], mesh.face_normal[n:]
    c, tangential, across = _shear_coefficients(problem)
    inner = extended(owner, velocity, gradient, problem.foot)
    jump = edge - inner
    jump_across = np.einsum("ij,ij->i", jump, normal)[:, None] * normal
    force = (c * tangential)[:, None] * (jump - jump_across) + (c * across)[:, None] * jump_across
    if problem.full_stress:
        turned = np.einsum("fji,fj->fi", gradient[owner], mesh.face_area[n:])
        force += (problem.face_viscosity[n:] * problem.table.turned_stress)[:, None] * turned
    return force


def interpolated_flux(problem: Problem, velocity: np.ndarray, gradient: np.ndarray,
                      edge: np.ndarray, fields: PressureFields, force: Force | None,
                      diagonal: np.ndarray, memory: np.ndarray,
                      drag: Drag | None = None) -> np.ndarray:
    """(n_faces,) mass flux by momentum interpolation [kg/s], see the module text.

    Parameters
    ----------
    diagonal : (n_cells,) unrelaxed momentum diagonal, time term included [kg/s]
    memory : (n_faces,) [kg/(m^3 s) m^3/s] older face fluxes less their interpolated velocities,
        times density over time step; empty in a steady run.
    drag : resistance of the zones, or None
    """
    mesh, n, density = problem.mesh, problem.mesh.n_internal, problem.case.fluid.density
    net, drop = fields.slope, NOTHING
    if force is not None:
        net = net - density * force.cell
        drop = density * force.drop
    d = mesh.cell_volume / diagonal
    flux = np.empty(mesh.n_faces)
    kernels.momentum_face_flux(mesh.left[:n], mesh.right, mesh.weight, mesh.skew, mesh.face_area,
                               mesh.delta, problem.orthogonal, mesh.straight, density, velocity,
                               gradient, net, fields.cell, drop, d, memory, flux)
    owner = mesh.left[n:]
    edge_d = d[owner]
    if problem.zones is not None and drag is not None:
        ease = problem.zones.ease(diagonal, drag)
        flux[problem.zones.faces] = problem.zones.flux(
            velocity, gradient, fields, net, drop if len(drop) else np.zeros(mesh.n_faces), ease,
            problem.orthogonal)
        edge_d[problem.zones.edges] = ease.edge
        gradient = ease.fluid[:, None, None] * gradient
    smooth = np.einsum("ij,ij->i", net[owner], mesh.delta[n:])
    jump = fields.edge - fields.cell[owner]
    jump -= drop[n:] if len(drop) else 0.0
    older = memory[n:] if len(memory) else 0.0
    through = np.einsum("ij,ij->i", edge, mesh.face_area[n:])
    free = density * (through + edge_d * (problem.orthogonal[n:] * (smooth - jump) + older))
    flux[n:] = np.where(problem.table.pressure_given, free, problem.fixed_flux)
    if mesh.warped:
        slope = mesh.to_faces(gradient)
        flux[:n] += density * np.einsum("fij,fji->f", slope[:n], mesh.warp[:n])
    return flux


def correction_coefficients(problem: Problem, d: np.ndarray,
                            ease: Ease | None = None) -> tuple[np.ndarray, np.ndarray]:
    """(n_internal,) and (n_boundary,) flux per difference of a pressure correction [kg/(s Pa)].

    ``d`` (n_cells,) is volume over the coupling's correction diagonal, ``ease`` the same beside
    resistances.
    """
    mesh, n, density = problem.mesh, problem.mesh.n_internal, problem.case.fluid.density
    inner = np.empty(n)
    kernels.face_coefficients(mesh.left[:n], mesh.right, mesh.weight, d, problem.orthogonal,
                              density, inner)
    edge_d = d[mesh.left[n:]]
    if problem.zones is not None and ease is not None:
        faces = problem.zones.faces
        inner[faces] = density * problem.orthogonal[faces] * ease.face
        edge_d[problem.zones.edges] = ease.edge
    outer = np.where(problem.table.pressure_given, density * edge_d * problem.orthogonal[n:], 0.0)
    return inner, outer


def correction_matrix(problem: Problem, d: np.ndarray, ease: Ease | None = None
                      ) -> tuple[sparse.csr_matrix, np.ndarray, np.ndarray]:
    """Pressure-correction matrix with its coefficients, see :func:`correction_coefficients`."""
    inner, outer = correction_coefficients(problem, d, ease)
    return symmetric_matrix(problem.mesh, problem.pattern, inner, outer), inner, outer


def correction_diagonal(problem: Problem, inner: np.ndarray, outer: np.ndarray) -> np.ndarray:
    """(n_cells,) diagonal of the matrix of these coefficients."""
    offsets, faces, _ = problem.mesh.cell_faces
    out = np.empty(problem.mesh.n_cells)
    kernels.coefficient_sums(offsets, faces, problem.mesh.n_internal, inner, outer, out)
    return out


def corrected_flux(problem: Problem, flux: np.ndarray, correction: np.ndarray, inner: np.ndarray,
                   outer: np.ndarray) -> np.ndarray:
    """Mass flux after a pressure correction (n_cells,) [Pa]."""
    mesh, n = problem.mesh, problem.mesh.n_internal
    flux = flux.copy()
    kernels.correct_flux(mesh.left[:n], mesh.right, inner, correction, flux)
    flux[n:] += outer * correction[mesh.left[n:]]
    return flux


def net_outflow(problem: Problem, flux: np.ndarray) -> np.ndarray:
    """(n_cells,) net outflow of each cell [kg/s] from the face fluxes."""
    out = np.empty(problem.mesh.n_cells)
    kernels.net_outflow(*problem.mesh.cell_faces, flux, out)
    return out


def pressure_outflow(problem: Problem, inner: np.ndarray, outer: np.ndarray, slope: np.ndarray,
                     pressure: np.ndarray, edge: np.ndarray,
                     relaxed: np.ndarray = NOTHING) -> np.ndarray:
    """(n_cells,) what a pressure change adds to the net outflow by momentum interpolation [kg/s].

    Parameters
    ----------
    inner, outer : unrelaxed :func:`correction_coefficients`
    slope, pressure, edge : (n_cells, 3), (n_cells,), (n_boundary,)
        The change, and what it is on boundaries where pressure is given.
    relaxed : (n_cells,), optional
        The velocity has changed by minus this times the slope.
    """
    mesh, n, density = problem.mesh, problem.mesh.n_internal, problem.case.fluid.density
    flux = np.zeros(mesh.n_faces)
    kernels.pressure_fluxes(mesh.left[:n], mesh.right, mesh.weight, mesh.face_area, mesh.delta,
                            problem.orthogonal, mesh.straight, density, inner, relaxed, slope,
                            pressure, flux[:n])
    free = np.flatnonzero(problem.table.pressure_given)
    cell = mesh.left[n + free]
    along = np.einsum("ij,ij->i", slope[cell], mesh.delta[n + free])
    flux[n + free] = outer[free] * (along - edge[free] + pressure[cell])
    if len(relaxed):
        through = np.einsum("ij,ij->i", slope[cell], mesh.face_area[n + free])
        flux[n + free] -= density * relaxed[cell] * through
    return net_outflow(problem, flux)
