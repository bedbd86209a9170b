"""Kernels of the feedback: scaled, masked by walls, converged in the mesh, balanced."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pandas as pd
import pytest
from contracts import observed_order
from made import distance, duct, solved
from scipy.spatial.distance import cdist

import fv3d
from fv3d.flow.equations import pressure_fields
from fv3d.flow.problem import Correction, Force, Problem, balanced_force, make_problem
from fv3d.measured.feedback import make_layout
from fv3d.measured.kernel import Gaussian, Neighbourhood, SingleCell
from fv3d.mesh.generate import box

UNIT = "x [m]", "y [m]", "z [m]"


def at(points: Any, **values: float) -> fv3d.Readings:
    """Readings at points (n, 3), the same everywhere."""
    frame = pd.DataFrame(np.atleast_2d(points), columns=UNIT)
    for name, value in (values or {"u": 0.0}).items():
        frame[f"{name} [m/s]"], frame[f"{name}_std [m/s]"] = value, 0.01
    return fv3d.Readings(frame)


PLACES = np.array([[0.98, 0.52, 0.47], [1.0, 0.02, 0.5], [0.03, 0.03, 0.03], [1.97, 0.98, 0.02],
                   [0.51, 0.5, 0.99]])  # inside, beside a wall, in two corners, below a wall
KERNELS = [Gaussian(0.2), Gaussian(0.02), SingleCell()]


@pytest.mark.parametrize("tetra", [False, True])
@pytest.mark.parametrize("kernel", KERNELS, ids=repr)
def test_the_reading_of_its_own_kernel_is_one(kernel: Any, tetra: bool) -> None:
    """H phi = 1 for each component, inside, beside walls and in corners."""
    mesh = box((0, 0, 0), (2, 1, 1), cells=(9, 6, 6), tetra=tetra, skew=0.1)
    problem = make_problem(duct(mesh))
    layout = make_layout(problem, at(PLACES), kernel)
    for column in range(3 * len(PLACES)):
        place, axis = divmod(column, 3)
        field = layout.cell[:, [column]].toarray().reshape(-1, 3)
        assert layout.sample_change(field)[place, axis] == pytest.approx(1.0, abs=1e-12)


@pytest.mark.parametrize("kernel", [Gaussian(5.0), Gaussian(0.5)], ids=repr)
def test_a_force_that_does_not_reach_its_reading_is_refused(kernel: Any) -> None:
    """A wide kernel scaled up to be felt in a corner would swamp the rest of the duct."""
    problem = make_problem(duct(box((0, 0, 0), (2, 1, 1), cells=(9, 6, 6), skew=0.1)))
    assert make_layout(problem, at(PLACES[[0, 1, 3, 4]]), kernel).cell.nnz > 0
    with pytest.raises(fv3d.ReadingError, match="does not reach") as caught:
        make_layout(problem, at(PLACES[2]), kernel)
    assert caught.value.where and caught.value.got and caught.value.remedy


def test_shape_of_a_gaussian_in_the_open() -> None:
    """Away from walls: the plain formula at the cell centres within three radii."""
    mesh = box((0, 0, 0), (1, 1, 1), cells=(20, 20, 20))
    point = np.array([0.525, 0.475, 0.525])  # a cell centre
    home = int(np.argmin(cdist([point], mesh.cell_centre)))
    cells, value = Gaussian(0.11).shape(mesh, Neighbourhood.of(mesh), point, home)
    r = cdist([point], mesh.cell_centre)[0]
    assert set(cells) == set(np.flatnonzero(r <= 0.33))
    np.testing.assert_allclose(value, np.exp(-r[cells]**2 / (2 * 0.11**2)), rtol=1e-12)


@pytest.mark.parametrize("tetra", [False, True])
def test_a_thin_wall_hides_what_is_behind_it(tetra: bool) -> None:
    """A plate of 0.04 m thickness, the probe 0.03 m above it, radius 0.15 m."""
    mesh = fv3d.channel_with_block(length=2.0, height=1.0, depth=0.1, lower=(0.4, 0.48),
                                   upper=(1.6, 0.52), first_layer=0.04, growth=1.3, layers=2,
                                   tetra=tetra)
    point = np.array([1.0, 0.55, 0.05])
    centre = mesh.cell_centre
    below = (centre[:, 1] < 0.48) & (np.abs(centre[:, 0] - 1.0) < 0.55)
    assert np.sum(below & (cdist([point], centre)[0] < 0.3)) > 20  # the check has something to see
    layout = make_layout(make_problem(duct_around(mesh)), at(point), Gaussian(0.15))
    force = np.abs(layout.cell.toarray()).reshape(mesh.n_cells, 3, 3).max(axis=(1, 2))
    assert force[below].max() == 0.0
    above = (centre[:, 1] > 0.52) & (np.abs(centre[:, 0] - 1.0) < 0.1) & (centre[:, 1] < 0.6)
    assert force[above].min() > 0.5


def duct_around(mesh: fv3d.Mesh) -> fv3d.Case:
    return fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=0.01),
                     boundaries={"inlet": fv3d.Inlet((1.0, 0, 0)), "outlet": fv3d.Outlet(),
                                 "walls": fv3d.Wall(), "sides": fv3d.Symmetry(),
                                 "block": fv3d.Wall()})


def corrected_volume(n: int, radius: float | None) -> float:
    """Volume [m^3] where a stream takes up at least half of what its one probe asked for."""
    mesh = box((0, 0, 0), (2, 1, 1), cells=(2 * n, n, n))
    slip = {b: fv3d.Symmetry() for b in mesh.boundaries}
    case = fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=0.01), boundaries=slip | {
        "x_min": fv3d.Inlet((1.0, 0, 0)), "x_max": fv3d.Outlet()})
    probe = at([0.8, 0.5, 0.5], v=0.3)  # across the stream
    run = solved(case, tolerance=1e-4, sources=[fv3d.Feedback(probe, radius=radius, gain=1e4)])
    assert fv3d.observe(run, probe)[0] == pytest.approx(0.3, rel=1e-2)
    return float(mesh.cell_volume[run.velocity[:, 1] >= 0.15].sum())


def test_a_gaussian_is_converged_in_the_mesh_and_a_single_cell_is_not() -> None:
    """The corrected volume on meshes of 1/5, 1/10 and 1/20."""
    wide = [corrected_volume(n, 0.2) for n in (5, 10, 20)]
    cell = [corrected_volume(n, None) for n in (5, 10, 20)]
    assert max(wide) <= 1.35 * min(wide)
    assert cell[0] / cell[1] >= 4.0 and cell[1] / cell[2] >= 4.0


class Given:
    """A source of a given force."""

    def __init__(self, make: Callable[[Problem], Force]) -> None:
        self.make = make

    def start(self, problem: Problem, *_: Any) -> Force:
        return self.make(problem)

    def force(self, own: Force) -> Force:
        return own

    def correct(self, own: Force, problem: Any, state: Any, change: Any, relax: Any) -> Any:
        return Correction(own, change)


CENTRE, WIDTH = np.array([0.9, 0.45, 0.5]), 0.2


def potential(x: np.ndarray) -> np.ndarray:
    """A potential that vanishes at the outlet, about one dynamic pressure high."""
    return 0.5 * (2.0 - x[:, 0]) * np.exp(-((x - CENTRE)**2).sum(axis=1) / (2 * WIDTH**2))


def slope(x: np.ndarray) -> np.ndarray:
    bell = np.exp(-((x - CENTRE)**2).sum(axis=1) / (2 * WIDTH**2))[:, None]
    return bell * (-0.5 * (2.0 - x[:, :1]) * (x - CENTRE) / WIDTH**2 - [0.5, 0.0, 0.0])


def discrete_gradient(problem: Problem) -> Force:
    """Made by the operators of the pressure gradient from cell values of the potential."""
    mesh, n = problem.mesh, problem.mesh.n_internal
    fields = pressure_fields(problem, potential(mesh.cell_centre), np.zeros(mesh.n_boundary))
    drop = fields.face - fields.cell[mesh.left]
    drop[:n] = fields.cell[mesh.right] - fields.cell[mesh.left[:n]]
    return Force(fields.gradient, drop)


def test_a_discrete_gradient_moves_the_pressure_and_nothing_else() -> None:
    """Orthogonal graded mesh: to the tolerance; ``run.pressure`` leaves it out."""
    graded = [fv3d.TwoSided(2.0), fv3d.TwoSided(3.0), None]
    mesh = box((0, 0, 0), (2, 1, 1), cells=(12, 8, 7), grading=graded)
    case = duct(mesh, numerics=fv3d.Numerics(coupling=fv3d.SIMPLE()))
    plain = solved(case, tolerance=1e-8)
    guided = solved(case, tolerance=1e-8, sources=[Given(discrete_gradient)])
    psi = potential(mesh.cell_centre)
    assert np.abs(guided.artificial_force).max() > 1.0
    assert distance(mesh, guided.velocity, plain.velocity) <= 1e-6
    np.testing.assert_allclose(guided.force_potential[0], psi, atol=1e-6)
    np.testing.assert_allclose(guided.state.pressure - plain.pressure, psi, atol=1e-5)
    np.testing.assert_allclose(guided.pressure, plain.pressure, atol=1e-5)
    np.testing.assert_allclose(fv3d.force(guided, "y_min").total, fv3d.force(plain, "y_min").total,
                               atol=1e-5)
    assert np.linalg.norm(fv3d.momentum_budget(guided).artificial) <= 1e-5


@pytest.mark.parametrize("kind", [{"skew": 0.15}, {"tetra": True}], ids=["hex", "tet"])
def test_a_sampled_gradient_is_left_out_of_the_pressure_to_second_order(
        kind: dict[str, Any]) -> None:
    errors: dict[str, list[float]] = {"velocity": [], "pressure": []}
    sizes = (6, 8, 11) if "skew" in kind else (4, 5, 7)
    for n in sizes:
        mesh = box((0, 0, 0), (2, 1, 1), cells=(2 * n, n, n), **kind)
        case = duct(mesh, numerics=fv3d.Numerics(coupling=fv3d.SIMPLE()))
        force = balanced_force(mesh, slope(mesh.cell_centre))
        plain = solved(case, tolerance=1e-5)
        guided = solved(case, tolerance=1e-5, sources=[Given(lambda _, f=force: f)])
        for name, parts in errors.items():
            change = getattr(guided, name) - getattr(plain, name)
            square = (change.reshape(mesh.n_cells, -1)**2).sum(axis=1)
            parts.append(float(np.sqrt(np.average(square, weights=mesh.cell_volume))))
    for parts in errors.values():
        assert observed_order(parts, [1.0 / n for n in sizes]) >= 1.7
    assert errors["pressure"][-1] <= 0.05 * np.sqrt(np.mean(potential(mesh.cell_centre)**2))
