"""What every convection scheme promises."""

from __future__ import annotations

from typing import Any

import numpy as np

import fv3d
from fv3d.flow.problem import make_problem
from fv3d.mesh.generate import box
from fv3d.mesh.mesh import Mesh
from fv3d.operators import kernels
from fv3d.operators.limiters import limited_extension

from .tools import Check, edge_centres, gradient_on, linear, observed_order, skewed, wave


def face_values(scheme: Any, mesh: Mesh, flux: np.ndarray, values: np.ndarray,
                gradient: np.ndarray, edge: np.ndarray) -> np.ndarray:
    """(n_internal, k) values a scheme convects, by the compiled loops."""
    n = mesh.n_internal
    coefficient, explicit = np.empty((n, 2)), np.empty((n, values.shape[1]))
    kernels.transport_faces(
        mesh.left[:n], mesh.right, mesh.weight, mesh.skew_offset, mesh.face_area, mesh.delta,
        np.ones(mesh.n_faces), mesh.face_centre, mesh.cell_centre, flux, np.zeros(mesh.n_faces),
        values, gradient, float(scheme.upwind_share), float(scheme.central_share), False,
        coefficient, explicit)
    up = np.where(flux[:n] >= 0, mesh.left[:n], mesh.right)
    limited = limited_extension(mesh, values, edge, gradient, flux)
    return values[up] + explicit / flux[:n, None] + scheme.limited_share * limited


def uniform_flux(mesh: Mesh, velocity: tuple[float, float, float]) -> np.ndarray:
    """(n_faces,) flux of a uniform velocity: conserves exactly."""
    return mesh.face_area @ np.array(velocity)


def scheme_keeps_a_constant(scheme: Any) -> None:
    for tetra in (False, True):
        mesh = skewed(4, tetra=tetra)
        values = np.full((mesh.n_cells, 3), 2.5)
        at_face = face_values(scheme, mesh, uniform_flux(mesh, (1.0, 0.4, -0.3)), values,
                              np.zeros((mesh.n_cells, 3, 3)),
                              np.full((mesh.n_boundary, 3), 2.5))
        np.testing.assert_allclose(at_face, 2.5, rtol=1e-15)


def scheme_conserves_to_rounding(scheme: Any) -> None:
    """What the cells gain is what the boundary brings: interior fluxes cancel in pairs."""
    for tetra in (False, True):
        mesh = skewed(4, tetra=tetra)
        case = fv3d.Case(mesh, fv3d.Fluid(density=1.2, viscosity=0.3),
                         boundaries={b: fv3d.Inlet(linear) for b in mesh.boundaries},
                         numerics=fv3d.Numerics(convection=scheme))
        imbalance, size = momentum_imbalance(make_problem(case))
        assert np.abs(imbalance).max() <= 1e-13 * size


def momentum_imbalance(problem: Any) -> tuple[np.ndarray, float]:
    """Sum of all cells' residuals less what enters through the boundary, random fields."""
    from fv3d.flow.equations import boundary_traction, momentum
    mesh, r = problem.mesh, np.random.default_rng(5)
    velocity, gradient = r.normal(size=(mesh.n_cells, 3)), r.normal(size=(mesh.n_cells, 3, 3))
    edge, flux = r.normal(size=(mesh.n_boundary, 3)), r.normal(size=mesh.n_faces)
    equation = momentum(problem, velocity, gradient, edge, flux)
    gained = equation.rows.residual(velocity)
    # the rows hold div(F u) - u div F: the imbalance of these random fluxes belongs to the cells
    own = (mesh.outflow @ flux)[:, None] * velocity
    # what leaves through a side of given velocity carries the value from inside
    out = flux[mesh.n_internal:] > 0
    owner = mesh.left[mesh.n_internal:]
    scheme = problem.case.numerics.convection
    second = scheme.upwind_share + scheme.central_share + scheme.limited_share
    inner = velocity[owner] + second * np.einsum("fij,fj->fi", gradient[owner],
                                                 mesh.delta[mesh.n_internal:])
    carried = np.where(out[:, None], inner, edge)
    entering = (boundary_traction(problem, velocity, gradient, edge)
                - flux[mesh.n_internal:, None] * carried)
    return (gained - own).sum(axis=0) - entering.sum(axis=0), float(np.abs(gained).sum())


def scheme_has_its_declared_order(scheme: Any) -> None:
    """Of the face value, with least-squares gradients on shaken meshes: declared +- 0.2."""
    for tetra in (False, True):
        errors, sizes = [], []
        for n in (6, 10, 16) if tetra else (8, 14, 24):
            mesh = skewed(n, tetra=tetra)
            method = gradient_on(fv3d.LeastSquares(), mesh)
            slope = method(wave(mesh.cell_centre), wave(edge_centres(mesh)))
            at_face = face_values(scheme, mesh, uniform_flux(mesh, (1.0, 0.4, -0.3)),
                                  wave(mesh.cell_centre)[:, None], slope[:, None, :],
                                  wave(edge_centres(mesh))[:, None])
            error = at_face[:, 0] - wave(mesh.face_centre[:mesh.n_internal])
            errors.append(float(np.sqrt(np.mean(error**2))))
            sizes.append(1.0 / n)
        assert abs(observed_order(errors, sizes) - scheme.order) <= 0.2


def scheme_is_bounded_if_it_claims_to(scheme: Any) -> None:
    """A step carried obliquely through a channel stays between 0 and 1, or is seen to overshoot."""
    meshes = {"even": box((0, 0, 0), (1, 1, 0.1), cells=(20, 20, 1)),
              "shaken": box((0, 0, 0), (1, 1, 0.2), cells=(14, 14, 2), skew=0.3, seed=1),
              "tetrahedra": box((0, 0, 0), (1, 1, 0.2), cells=(8, 8, 2), tetra=True, skew=0.1)}
    for name, mesh in meshes.items():
        if not (scheme.bounded or name == "even"):
            continue
        values = carried_step(scheme, mesh)
        outside = float(max(-values.min(), values.max() - 1.0))
        assert outside <= 1e-11 if scheme.bounded else outside > 1e-3, name


def carried_step(scheme: Any, mesh: Mesh) -> np.ndarray:
    """(n_cells,) steady solution of convecting a step through a box, to rounding."""
    from scipy.sparse import csc_matrix
    from scipy.sparse.linalg import LinearOperator, gmres, splu
    flux = uniform_flux(mesh, (1.0, 0.7, 0.0)) + 1e-300
    n, centre = mesh.n_internal, edge_centres(mesh)
    owner, outer = mesh.left[n:], flux[n:]
    step = (centre[:, 1] < 0.3).astype(float) * (centre[:, 0] < 1e-9)
    method = gradient_on(fv3d.LeastSquares(), mesh)

    def net(values: np.ndarray, entering: np.ndarray, share: Any) -> np.ndarray:
        edge = np.where(outer < 0, entering, values[owner])
        at_face = face_values(share, mesh, flux, values[:, None],
                              method(values, edge)[:, None, :], edge[:, None])[:, 0]
        return np.asarray(mesh.outflow @ np.concatenate([flux[:n] * at_face, outer * edge]))

    size, none = mesh.n_cells, np.zeros(mesh.n_boundary)
    upwind = np.column_stack([net(column, none, fv3d.Upwind()) for column in np.eye(size)])
    factors = splu(csc_matrix(upwind))
    if scheme.limited_share:  # not linear: deferred correction
        values = factors.solve(-net(np.zeros(size), step, fv3d.Upwind()))
        for _ in range(600):
            change = factors.solve(net(values, step, scheme))
            values = values - 0.4 * change
            if np.abs(change).max() <= 1e-13:
                return np.asarray(values)
        raise AssertionError(f"still changing by {np.abs(change).max():.1e}")
    shape = (size, size)
    solution, failed = gmres(LinearOperator(shape, lambda x: net(x.ravel(), none, scheme)),
                             -net(np.zeros(size), step, scheme), rtol=1e-12, atol=0.0,
                             maxiter=40, restart=100, M=LinearOperator(shape, factors.solve))
    assert failed == 0
    return np.asarray(solution)


CONVECTION: dict[str, Check] = {f.__name__: f for f in (
    scheme_keeps_a_constant, scheme_conserves_to_rounding, scheme_has_its_declared_order,
    scheme_is_bounded_if_it_claims_to)}
