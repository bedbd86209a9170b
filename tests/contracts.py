"""One list of promises per kind of method; every new member of a kind must pass its list.

A list is a dictionary of checks, ``name -> check(method)``; a test file parametrises over the
members and the list, for example ``GRADIENT`` and ``fv3d.LeastSquares()``.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from scipy.spatial.transform import Rotation

import fv3d
from fv3d.flow.boundary import BoundaryTable
from fv3d.flow.problem import make_problem
from fv3d.mesh.generate import box
from fv3d.mesh.mesh import Mesh
from fv3d.operators import kernels
from fv3d.operators.gradient import BoundaryKnowledge

Check = Callable[[Any], None]
ROTATION = Rotation.from_rotvec([0.3, -0.5, 0.7]).as_matrix()
SLOPE = np.array([[0.7, -1.1, 0.4], [0.2, 0.5, -0.9], [1.3, 0.1, -1.2]])  # trace 0
SHIFT = np.array([0.3, -0.2, 0.1])


def skewed(n: int, *, tetra: bool = False) -> Mesh:
    """Unit cube of n cells along each axis (cut into tetrahedra), points shaken."""
    return box((0, 0, 0), (1, 1, 1), cells=(n, n, n), tetra=tetra, skew=0.15 if tetra else 0.25,
               seed=n)


def linear(points: np.ndarray) -> np.ndarray:
    """(n, 3) -> (n, 3) a linear, divergence-free vector field."""
    return points @ SLOPE.T + SHIFT


def edge_centres(mesh: Mesh) -> np.ndarray:
    """(n_boundary, 3) centres of the boundary faces."""
    return mesh.face_centre[mesh.n_internal:]


def observed_order(errors: list[float], sizes: list[float]) -> float:
    """Slope of log error over log size by least squares."""
    return float(np.polyfit(np.log(sizes), np.log(errors), 1)[0])


# ----------------------------------------------------------------------------- gradient

def _gradient(method: Any, mesh: Mesh) -> Any:
    return method.weights(mesh, BoundaryKnowledge.everywhere(mesh))


def gradient_of_a_constant_is_zero(method: Any) -> None:
    for tetra in (False, True):
        mesh = skewed(4, tetra=tetra)
        slope = _gradient(method, mesh)(np.full(mesh.n_cells, 3.7), np.full(mesh.n_boundary, 3.7))
        assert np.all(slope == 0.0)


def gradient_is_exact_on_linear_fields(method: Any) -> None:
    for tetra in (False, True):
        mesh = skewed(4, tetra=tetra)
        slope = _gradient(method, mesh)(linear(mesh.cell_centre), linear(edge_centres(mesh)))
        np.testing.assert_allclose(slope, np.broadcast_to(SLOPE, slope.shape), atol=1e-11)


def gradient_turns_with_the_mesh(method: Any) -> None:
    for tetra in (False, True):
        mesh = skewed(4, tetra=tetra)
        turned = turned_mesh(mesh, ROTATION)
        r = np.random.default_rng(0)
        cells, edges = r.normal(size=mesh.n_cells), r.normal(size=mesh.n_boundary)
        slope = _gradient(method, mesh)(cells, edges)
        again = _gradient(method, turned)(cells, edges)
        np.testing.assert_allclose(again, slope @ ROTATION.T, atol=1e-10 * np.abs(slope).max())


def turned_mesh(mesh: Mesh, rotation: np.ndarray) -> Mesh:
    """The same mesh, same numbering, about the origin."""
    blocks = [(kind, conn[np.argsort(cells)]) for kind, conn, cells in mesh.cell_blocks]
    boundaries = {name: [np.array([row[row >= 0] for row in mesh.face_points[faces]])]
                  for name, faces in mesh.boundaries.items()}
    turned = fv3d.build_mesh(mesh.points @ rotation.T, blocks, boundaries, renumber=False)
    np.testing.assert_allclose(turned.cell_centre, mesh.cell_centre @ rotation.T, atol=1e-13)
    np.testing.assert_array_equal(turned.left, mesh.left)
    return turned


def gradient_has_its_declared_order(method: Any) -> None:
    """On shaken meshes, whose cells do not become more regular as they shrink."""
    for tetra in (False, True):
        errors, sizes = [], []
        for n in (6, 10, 16) if tetra else (8, 14, 24):
            mesh = skewed(n, tetra=tetra)
            slope = _gradient(method, mesh)(_wave(mesh.cell_centre), _wave(edge_centres(mesh)))
            error = ((slope - _wave_slope(mesh.cell_centre))**2).sum(axis=1)
            errors.append(float(np.sqrt(np.average(error, weights=mesh.cell_volume))))
            sizes.append(1.0 / n)
        assert observed_order(errors, sizes) > method.order - 0.1


def gradient_extends_where_boundary_values_are_unknown(method: Any) -> None:
    """Exact on linear fields from the cells alone, wherever a cell has neighbours enough."""
    mesh = skewed(4)
    nothing = np.zeros(mesh.n_boundary, bool)
    operator = method.weights(mesh, BoundaryKnowledge(nothing, nothing))
    slope = operator(linear(mesh.cell_centre), np.full((mesh.n_boundary, 3), 1e6))
    np.testing.assert_allclose(slope, np.broadcast_to(SLOPE, slope.shape), atol=1e-10)


def _wave(x: np.ndarray) -> np.ndarray:
    return np.sin(2.0 * x[:, 0]) * np.cos(3.0 * x[:, 1]) * np.exp(x[:, 2])


def _wave_slope(x: np.ndarray) -> np.ndarray:
    a, b, c = 2.0 * x[:, 0], 3.0 * x[:, 1], np.exp(x[:, 2])
    return np.stack([2 * np.cos(a) * np.cos(b) * c, -3 * np.sin(a) * np.sin(b) * c,
                     np.sin(a) * np.cos(b) * c], axis=1)


GRADIENT: dict[str, Check] = {f.__name__: f for f in (
    gradient_of_a_constant_is_zero, gradient_is_exact_on_linear_fields,
    gradient_turns_with_the_mesh, gradient_has_its_declared_order,
    gradient_extends_where_boundary_values_are_unknown)}


# ----------------------------------------------------------------------------- convection

def face_values(scheme: Any, mesh: Mesh, flux: np.ndarray, values: np.ndarray,
                gradient: np.ndarray) -> np.ndarray:
    """(n_internal, k) values a scheme convects, by the compiled loop."""
    n = mesh.n_internal
    coefficient, explicit = np.empty((n, 2)), np.empty((n, values.shape[1]))
    kernels.transport_faces(
        mesh.left[:n], mesh.right, mesh.weight, mesh.skew_offset, mesh.face_area, mesh.delta,
        np.ones(mesh.n_faces), mesh.face_centre, mesh.cell_centre, flux, np.zeros(mesh.n_faces),
        values, gradient, float(scheme.upwind_share), float(scheme.central_share), False,
        coefficient, explicit)
    up = np.where(flux[:n] >= 0, mesh.left[:n], mesh.right)
    return values[up] + explicit / flux[:n, None]


def uniform_flux(mesh: Mesh, velocity: tuple[float, float, float]) -> np.ndarray:
    """(n_faces,) flux of a uniform velocity: conserves exactly."""
    return mesh.face_area @ np.array(velocity)


def scheme_keeps_a_constant(scheme: Any) -> None:
    for tetra in (False, True):
        mesh = skewed(4, tetra=tetra)
        values = np.full((mesh.n_cells, 3), 2.5)
        at_face = face_values(scheme, mesh, uniform_flux(mesh, (1.0, 0.4, -0.3)), values,
                              np.zeros((mesh.n_cells, 3, 3)))
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
    second = scheme.upwind_share + scheme.central_share
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
            method = _gradient(fv3d.LeastSquares(), mesh)
            slope = method(_wave(mesh.cell_centre), _wave(edge_centres(mesh)))
            at_face = face_values(scheme, mesh, uniform_flux(mesh, (1.0, 0.4, -0.3)),
                                  _wave(mesh.cell_centre)[:, None], slope[:, None, :])
            error = at_face[:, 0] - _wave(mesh.face_centre[:mesh.n_internal])
            errors.append(float(np.sqrt(np.mean(error**2))))
            sizes.append(1.0 / n)
        assert abs(observed_order(errors, sizes) - scheme.order) <= 0.2


def scheme_is_bounded_if_it_claims_to(scheme: Any) -> None:
    """A step carried obliquely through a channel stays between 0 and 1, or is seen to overshoot."""
    new_extreme = overshoot(scheme)
    if scheme.bounded:
        assert new_extreme <= 1e-12
    else:
        assert new_extreme > 1e-3


def overshoot(scheme: Any) -> float:
    """Largest value outside 0 ... 1 of a steady convected step."""
    from scipy.sparse.linalg import LinearOperator, gmres, splu
    mesh = box((0, 0, 0), (1, 1, 0.1), cells=(20, 20, 1))
    flux = uniform_flux(mesh, (1.0, 0.7, 0.0))
    n, centre = mesh.n_internal, edge_centres(mesh)
    owner, outer = mesh.left[n:], flux[n:]
    step = (centre[:, 1] < 0.3).astype(float) * (centre[:, 0] < 1e-9)
    method = _gradient(fv3d.LeastSquares(), mesh)

    def net(values: np.ndarray, entering: np.ndarray, share: Any) -> np.ndarray:
        edge = np.where(outer < 0, entering, values[owner])
        at_face = face_values(share, mesh, flux + 1e-300, values[:, None],
                              method(values, edge)[:, None, :])[:, 0]
        return np.asarray(mesh.outflow @ np.concatenate([flux[:n] * at_face, outer * edge]))

    size, none = mesh.n_cells, np.zeros(mesh.n_boundary)
    upwind = np.column_stack([net(column, none, fv3d.Upwind()) for column in np.eye(size)])
    from scipy.sparse import csc_matrix
    factors = splu(csc_matrix(upwind))
    shape = (size, size)
    solution, failed = gmres(LinearOperator(shape, lambda x: net(x.ravel(), none, scheme)),
                             -net(np.zeros(size), step, scheme), rtol=1e-12, atol=0.0,
                             maxiter=40, restart=100, M=LinearOperator(shape, factors.solve))
    assert failed == 0
    return float(max(-solution.min(), solution.max() - 1.0))


CONVECTION: dict[str, Check] = {f.__name__: f for f in (
    scheme_keeps_a_constant, scheme_conserves_to_rounding, scheme_has_its_declared_order,
    scheme_is_bounded_if_it_claims_to)}


# ----------------------------------------------------------------------------- boundaries

def filled(condition: Any, mesh: Mesh, side: str) -> tuple[BoundaryTable, slice]:
    """Boundary table with the rows of one side filled."""
    table = BoundaryTable.empty(mesh.n_boundary)
    faces = mesh.boundaries[side]
    rows = slice(faces.start - mesh.n_internal, faces.stop - mesh.n_internal)
    condition.fill(table, rows, mesh.face_centre[faces], mesh.face_normal[faces])
    return table, rows


def condition_fills_its_rows_only(condition: Any) -> None:
    mesh = skewed(3)
    table, rows = filled(condition, mesh, "y_max")
    untouched = BoundaryTable.empty(mesh.n_boundary)
    other = np.ones(mesh.n_boundary, bool)
    other[rows] = False
    for name, column in vars(table).items():
        np.testing.assert_array_equal(column[other], getattr(untouched, name)[other])
        assert np.all(np.isfinite(column))


def condition_turns_with_the_mesh(condition: Any) -> None:
    """Coefficients along and across the face do not depend on the axes."""
    mesh = skewed(3)
    here, _ = filled(condition, mesh, "y_max")
    there, _ = filled(condition, turned_mesh(mesh, ROTATION), "y_max")
    for name in ("keep_tangential", "keep_normal", "shear_tangential", "shear_normal",
                 "pressure_given", "pressure_flat", "pressure"):
        np.testing.assert_array_equal(getattr(here, name), getattr(there, name))


def condition_gives_a_velocity_or_a_pressure(condition: Any) -> None:
    """Across the face either the flux is given or the pressure, never both, never neither."""
    table, rows = filled(condition, skewed(3), "y_max")
    assert np.all(table.flux_given[rows] != table.pressure_given[rows])


def condition_is_frozen(condition: Any) -> None:
    import dataclasses
    assert dataclasses.is_dataclass(condition) and condition.__dataclass_params__.frozen


BOUNDARY: dict[str, Check] = {f.__name__: f for f in (
    condition_fills_its_rows_only, condition_turns_with_the_mesh,
    condition_gives_a_velocity_or_a_pressure, condition_is_frozen)}


# ----------------------------------------------------------------------------- linear solver

def poisson(mesh: Mesh, *, singular: bool = False, seed: int = 0,
            spread: float = 0.0) -> tuple[Any, np.ndarray]:
    """Pressure-like matrix of a mesh, coefficients spread by ``exp(+-spread)``, random rhs."""
    from fv3d.operators.assembly import orthogonal_factor, pattern, symmetric_matrix
    r, n = np.random.default_rng(seed), mesh.n_internal
    g = orthogonal_factor(mesh)
    outer = np.zeros(mesh.n_boundary)
    if not singular:
        faces = mesh.boundaries["x_max"]
        outer[faces.start - n:faces.stop - n] = g[faces]
    inner = g[:n] * np.exp(r.uniform(-spread, spread, n))
    return symmetric_matrix(mesh, pattern(mesh), inner, outer), r.normal(size=mesh.n_cells)


def true_residual(matrix: Any, x: np.ndarray, rhs: np.ndarray) -> float:
    return float(np.linalg.norm(rhs - matrix @ x) / np.linalg.norm(rhs))


def solver_meets_its_tolerance_in_the_true_residual(method: Any) -> None:
    from fv3d.operators import linear
    for tetra in (False, True):
        matrix, rhs = poisson(skewed(10, tetra=tetra), spread=1.0)
        prepared = linear.prepare(matrix, method=method)
        for tolerance in (1e-1, 1e-6, 1e-11):
            result = linear.solve(prepared, rhs, matrix=matrix, tolerance=tolerance)
            assert result.outcome.good
            assert true_residual(matrix, result.solution, rhs) <= 1.01 * tolerance
            assert result.residual == approx(true_residual(matrix, result.solution, rhs))


def approx(value: float) -> Any:
    import pytest
    return pytest.approx(value, rel=1e-6, abs=1e-16)


def solver_says_when_it_missed(method: Any) -> None:
    from fv3d.operators import linear
    matrix, rhs = poisson(skewed(10))
    result = linear.solve(linear.prepare(matrix, method=method), rhs, matrix=matrix,
                          tolerance=1e-10, max_iterations=2)
    assert not result.outcome.good and result.outcome.next_step
    assert result.iterations == 2
    assert result.residual == approx(true_residual(matrix, result.solution, rhs))
    beyond = linear.solve(linear.prepare(matrix, method=method), rhs, matrix=matrix,
                          tolerance=1e-30, max_iterations=60)  # below rounding
    assert not beyond.outcome.good


def solver_answers_as_a_direct_solver(method: Any) -> None:
    """SciPy's sparse LU as the outside check."""
    from scipy.sparse.linalg import spsolve

    from fv3d.operators import linear
    matrix, rhs = poisson(skewed(8, tetra=True), spread=1.5)
    result = linear.solve(linear.prepare(matrix, method=method), rhs, matrix=matrix,
                          tolerance=1e-12)
    exact = spsolve(matrix.tocsc(), rhs)
    assert np.abs(result.solution - exact).max() <= 1e-9 * np.abs(exact).max()


def solver_answers_the_same_from_an_old_setup(method: Any) -> None:
    """A hierarchy of a similar matrix, and one refreshed from it, change the cost only."""
    from fv3d.operators import linear
    mesh = skewed(9)
    old, _ = poisson(mesh, spread=0.5, seed=1)
    matrix, rhs = poisson(mesh, spread=0.5, seed=2)
    fresh, reused = linear.prepare(matrix, method=method), linear.prepare(old, method=method)
    refreshed = linear.refresh(reused, matrix)
    answers = [linear.solve(p, rhs, matrix=matrix, tolerance=1e-11)
               for p in (fresh, reused, refreshed)]
    for other in answers[1:]:
        assert other.outcome.good
        size = np.abs(answers[0].solution).max()
        assert np.abs(other.solution - answers[0].solution).max() <= 1e-8 * size
    again = linear.solve(fresh, rhs, matrix=matrix, tolerance=1e-11)
    np.testing.assert_array_equal(again.solution, answers[0].solution)


def solver_handles_singular_systems(method: Any) -> None:
    """No fixed value: the compatible part is solved, the answer has zero mean."""
    from fv3d.operators import linear
    for tetra in (False, True):
        matrix, rhs = poisson(skewed(8, tetra=tetra), singular=True)
        rhs += 0.3
        prepared = linear.prepare(matrix, method=method, singular=True)
        result = linear.solve(prepared, rhs, matrix=matrix, tolerance=1e-9)
        assert result.outcome.good
        assert abs(result.solution.mean()) <= 1e-12 * np.abs(result.solution).max()
        assert true_residual(matrix, result.solution, rhs - rhs.mean()) <= 1.01e-9


def solver_does_not_slow_down_as_the_mesh_is_refined(method: Any) -> None:
    from fv3d.operators import linear
    counts = []
    for n in (8, 16, 26):
        matrix, rhs = poisson(skewed(n))
        result = linear.solve(linear.prepare(matrix, method=method), rhs, matrix=matrix,
                              tolerance=1e-8)
        counts.append(result.iterations)
    assert counts[-1] <= counts[0] + 8 and counts[-1] <= 30


def solver_repeats_to_the_last_bit(method: Any) -> None:
    from fv3d.operators import linear
    matrix, rhs = poisson(skewed(8, tetra=True), spread=1.0)
    one, two = (linear.solve(linear.prepare(matrix, method=method), rhs, matrix=matrix,
                             tolerance=1e-6).solution for _ in range(2))
    np.testing.assert_array_equal(one, two)


LINEAR: dict[str, Check] = {f.__name__: f for f in (
    solver_meets_its_tolerance_in_the_true_residual, solver_says_when_it_missed,
    solver_answers_as_a_direct_solver, solver_answers_the_same_from_an_old_setup,
    solver_handles_singular_systems, solver_does_not_slow_down_as_the_mesh_is_refined,
    solver_repeats_to_the_last_bit)}


# ----------------------------------------------------------------------------- coupling

MESHES: dict[str, Callable[[], Mesh]] = {
    "hex": lambda: box((0, 0, 0), (2, 1, 1), cells=(10, 8, 8), skew=0.2),
    "tet": lambda: box((0, 0, 0), (2, 1, 1), cells=(6, 4, 4), tetra=True, skew=0.1),
}
_solutions: dict[str, Any] = {}


def common_solution(kind: str) -> Any:
    """The duct flow all couplings must reach, converged tightly with SIMPLEC 0.8."""
    from made import duct, solved
    if kind not in _solutions:
        numerics = fv3d.Numerics(coupling=fv3d.SIMPLEC(velocity_relaxation=0.8))
        _solutions[kind] = solved(duct(MESHES[kind](), numerics=numerics), tolerance=1e-9)
    return _solutions[kind]


def coupling_conserves_mass_in_every_cell(method: Any) -> None:
    """As it iterates, before the last correction: to the accuracy of its own pressure solve."""
    import itertools

    from made import duct
    for kind, mesh in MESHES.items():
        case = duct(mesh(), numerics=fv3d.Numerics(coupling=method, pressure_tolerance=1e-8))
        ready = make_problem(case)
        inflow = -ready.fixed_flux.clip(max=0.0).sum()
        for state, _ in itertools.islice(fv3d.iterate(case), 5):
            imbalance = np.abs(ready.mesh.outflow @ state.mass_flux)
            assert imbalance.sum() <= 1e-6 * inflow, kind


def coupling_reaches_the_common_solution(method: Any) -> None:
    """Independent of the method and its relaxation to 0.1 %; mass to 1e-8 of the inflow."""
    from made import distance, duct, solved
    for kind in MESHES:
        wanted = common_solution(kind)
        case = duct(wanted.mesh, numerics=fv3d.Numerics(coupling=method))
        run = solved(case, tolerance=1e-6)
        assert distance(run.mesh, run.velocity, wanted.velocity) <= 1e-3, kind
        assert distance(run.mesh, run.pressure, wanted.pressure) <= 1e-3, kind
        inflow = -run.mass_flux.clip(max=0.0)[run.mesh.n_internal:].sum()
        assert np.abs(run.mesh.outflow @ run.mass_flux).sum() <= 1e-8 * inflow


def coupling_removes_a_checkerboard(method: Any) -> None:
    """From a start pressure that alternates from cell to cell, ten dynamic pressures high."""
    from dataclasses import replace

    from made import distance, duct, solved
    for kind in MESHES:
        wanted = common_solution(kind)
        mesh = wanted.mesh
        sign = np.where(np.floor(mesh.cell_centre / [0.2, 0.125, 0.125]).sum(axis=1) % 2, 1., -1.)
        if kind == "tet":
            sign = np.random.default_rng(0).choice([-1.0, 1.0], mesh.n_cells)
        spoiled = replace(wanted, state=replace(wanted.state,
                                                pressure=wanted.pressure + 5.0 * sign))
        run = solved(duct(mesh, numerics=fv3d.Numerics(coupling=method)), start=spoiled,
                     tolerance=1e-6)
        left = (run.pressure - wanted.pressure) @ sign / mesh.n_cells
        assert abs(left) <= 1e-3 * np.ptp(wanted.pressure), kind
        assert distance(mesh, run.pressure, wanted.pressure) <= 1e-3, kind


def coupling_stays_at_the_solution(method: Any) -> None:
    """Started from the converged run it converges at once and does not move."""
    from made import distance, duct
    for kind in MESHES:
        wanted = common_solution(kind)
        case = duct(wanted.mesh, numerics=fv3d.Numerics(coupling=method))
        run = fv3d.solve_steady(case, start=wanted, tolerance=1e-6, max_iterations=3,
                                progress=False)
        assert len(run.history["iteration"]) == 1
        assert distance(run.mesh, run.velocity, wanted.velocity) <= 1e-6


COUPLING: dict[str, Check] = {f.__name__: f for f in (
    coupling_conserves_mass_in_every_cell, coupling_reaches_the_common_solution,
    coupling_removes_a_checkerboard, coupling_stays_at_the_solution)}
