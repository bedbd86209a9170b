"""What every convection scheme promises."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

import fv3d
from fv3d.flow.problem import make_problem
from fv3d.mesh.generate import box
from fv3d.mesh.mesh import Mesh
from fv3d.operators import kernels
from fv3d.operators.gradient import BoundaryKnowledge
from fv3d.operators.limiters import limited_extension, limited_outflow

from .tools import Check, edge_centres, gradient_on, linear, observed_order, skewed, wave


def face_values(scheme: Any, mesh: Mesh, flux: np.ndarray, values: np.ndarray,
                gradient: np.ndarray, edge: np.ndarray) -> np.ndarray:
    """(n_internal, k) values a scheme convects, by the compiled loops."""
    n = mesh.n_internal
    coefficient, explicit = np.empty((n, 2)), np.empty((n, values.shape[1]))
    kernels.transport_faces(
        mesh.left[:n], mesh.right, mesh.weight, mesh.skew, mesh.face_area, mesh.delta,
        np.ones(mesh.n_faces), mesh.straight, flux, np.zeros(mesh.n_faces), values,
        gradient, float(scheme.upwind_share), float(scheme.central_share), False, coefficient,
        explicit)
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
        values = carried(scheme, mesh, lambda x: (x[:, 1] < 0.3) * (x[:, 0] < 1e-9) * 1.0)
        outside = float(max(-values.min(), values.max() - 1.0))
        assert outside <= 1e-11 if scheme.bounded else outside > 1e-3, name


def scheme_carries_a_smooth_profile_with_its_order(scheme: Any) -> None:
    """The steady solution against the profile moved along the stream: declared order at least.

    (On even meshes errors of opposite signs can cancel, so that it may be higher.)
    """
    def profile(x: np.ndarray) -> np.ndarray:
        return np.sin(2.0 * (x[:, 1] - 0.7 * x[:, 0]))
    errors, counts = [], (12, 24, 36)
    for n in counts:
        mesh = box((0, 0, 0), (1, 1, 1 / n), cells=(n, n, 1))
        error = carried(scheme, mesh, profile, extended=True) - profile(mesh.cell_centre)
        errors.append(float(np.sqrt(np.mean(error**2))))
    assert observed_order(errors, [1.0 / n for n in counts]) >= scheme.order - 0.2


def carried(scheme: Any, mesh: Mesh, profile: Callable[[np.ndarray], np.ndarray], *,
            extended: bool = False) -> np.ndarray:
    """(n_cells,) steady solution of convecting a profile into a box, to rounding.

    The cells' values leave it, or where ``extended`` the scheme's extension of them.
    """
    from scipy.sparse import csr_matrix, diags
    from scipy.sparse.linalg import LinearOperator, gmres, splu
    flux = uniform_flux(mesh, (1.0, 0.7, 0.0)) + 1e-300
    n, centre = mesh.n_internal, edge_centres(mesh)
    owner, outer = mesh.left[n:], flux[n:]
    given = profile(centre)
    known = BoundaryKnowledge(outer < 0, np.zeros(mesh.n_boundary, bool))
    method = fv3d.LeastSquares().weights(mesh, known)

    def net(values: np.ndarray, entering: np.ndarray, share: Any) -> np.ndarray:
        slope = method(values, entering)
        edge = np.where(outer < 0, entering, values[owner])
        if extended or not share.bounded:
            second = min(share.upwind_share + share.central_share, 1.0)
            more = second * np.einsum("ij,ij->i", slope[owner], mesh.delta[n:])
            more += share.limited_share * limited_outflow(
                mesh, values[:, None], edge[:, None], slope[:, None, :])[:, 0]
            edge = np.where(outer < 0, entering, values[owner] + more)
        at_face = face_values(share, mesh, flux, values[:, None], slope[:, None, :],
                              edge[:, None])[:, 0]
        return np.asarray(mesh.outflow @ np.concatenate([flux[:n] * at_face, outer * edge]))

    size, none = mesh.n_cells, np.zeros(mesh.n_boundary)
    source = np.where(flux >= 0, mesh.left, np.concatenate([mesh.right, owner]))
    keep = flux * np.concatenate([np.ones(n), outer >= 0])
    select = csr_matrix((np.ones(mesh.n_faces), (np.arange(mesh.n_faces), source)))
    factors = splu((mesh.outflow @ diags(keep) @ select).tocsc())
    if scheme.limited_share:  # not linear: deferred correction
        values = factors.solve(-net(np.zeros(size), given, fv3d.Upwind()))
        for _ in range(2000):
            change = factors.solve(net(values, given, scheme))
            values = values - 0.4 * change
            if np.abs(change).max() <= 1e-13:
                return np.asarray(values)
        raise AssertionError(f"still changing by {np.abs(change).max():.1e}")
    shape = (size, size)
    solution, failed = gmres(LinearOperator(shape, lambda x: net(x.ravel(), none, scheme)),
                             -net(np.zeros(size), given, scheme), rtol=1e-12, atol=0.0,
                             maxiter=40, restart=100, M=LinearOperator(shape, factors.solve))
    assert failed == 0
    return np.asarray(solution)


CONVECTION: dict[str, Check] = {f.__name__: f for f in (
    scheme_keeps_a_constant, scheme_conserves_to_rounding, scheme_has_its_declared_order,
    scheme_carries_a_smooth_profile_with_its_order, scheme_is_bounded_if_it_claims_to)}
