"""Coarse-to-fine start: the same solution in fewer iterations."""

from __future__ import annotations

import itertools
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from made import distance, duct, made_run, solved
from test_feedback import table

import fv3d
from fv3d.errors import CaseError, Fv3dWarning
from fv3d.flow import coupling
from fv3d.flow.coarser import coarse_case
from fv3d.flow.start import sample_anywhere
from fv3d.mesh.generate import box


def cavity(cells: int) -> fv3d.Case:
    """Lid-driven cube at Reynolds number 100."""
    sides = ("x_min", "x_max", "y_min", "z_min", "z_max")
    mesh = box((0, 0, 0), (1, 1, 1), cells=(cells,) * 3,
               names={"y_max": "lid"} | dict.fromkeys(sides, "walls"))
    return fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=0.01), boundaries={
        "lid": fv3d.Wall((1.0, 0.0, 0.0)), "walls": fv3d.Wall()})


def channel(cells: int, **options: Any) -> fv3d.Mesh:
    """Box for the case ``duct``."""
    return box((0, 0, 0), (2, 1, 1), cells=(2 * cells, cells, cells), **options)


@pytest.fixture(scope="module")
def rest() -> fv3d.Run:
    """The cavity from rest."""
    return solved(cavity(16), tolerance=1e-6)


@pytest.fixture(scope="module")
def nested(rest: fv3d.Run) -> fv3d.Run:
    """The cavity from two coarser meshes."""
    family = [cavity(4).mesh, cavity(8).mesh]
    return solved(rest.case, tolerance=1e-6, start=fv3d.CoarserMeshes(family, tolerance=1e-3))


def test_same_solution_in_fewer_iterations(rest: fv3d.Run, nested: fv3d.Run) -> None:
    """Both are converged to 1e-6; the difference of their fields is of that order."""
    assert distance(rest.mesh, nested.velocity, rest.velocity) < 2e-5
    assert distance(rest.mesh, nested.pressure, rest.pressure) < 2e-4
    assert len(nested.history["iteration"]) < len(rest.history["iteration"])


def test_told_and_counted(rest: fv3d.Run, nested: fv3d.Run) -> None:
    assert [line.split(":")[0] for line in nested.before] == ["64 cells", "512 cells"]
    assert all("converged" in line for line in nested.before)
    assert "  start      64 cells: converged" in str(nested)
    assert "512 cells" not in str(rest)
    spent = [float(line.split(",")[-1].split()[0]) for line in nested.before]
    assert nested.seconds > sum(spent) > 0.0
    assert nested.name == "plain"


@pytest.mark.parametrize("options", [{"tetra": True}, {"skew": 0.2}], ids=["tetra", "skewed"])
def test_any_kind_of_cells(options: dict[str, Any]) -> None:
    """The meshes need not be nested, nor of the same cells."""
    case = duct(channel(6, **options))
    one = solved(case)
    other = solved(case, start=fv3d.CoarserMeshes(channel(4)))
    assert distance(case.mesh, other.velocity, one.velocity) < 1e-5


def test_linear_fields_arrive_exactly() -> None:
    """Velocity and pressure extended from the nearest cell meet linear fields."""
    coarse, fine = channel(3, skew=0.3), channel(5, tetra=True)
    slope = np.array([[0.3, -0.2, 0.5], [0.1, 0.4, -0.3], [0.7, 0.2, -0.7]])
    run = made_run(coarse, lambda x: x @ slope + 1.0, lambda x: x @ slope[0] - 2.0)
    velocity, pressure = sample_anywhere(run, fine.cell_centre)
    np.testing.assert_allclose(velocity, fine.cell_centre @ slope + 1.0, atol=1e-12)
    np.testing.assert_allclose(pressure, fine.cell_centre @ slope[0] - 2.0, atol=1e-10)


def test_pseudo_transient_and_open_door() -> None:
    case, start = duct(channel(6)), fv3d.CoarserMeshes(channel(3))
    run = fv3d.solve_pseudo_transient(case, pseudo_step=fv3d.LocalStep(9.0), start=start,
                                      tolerance=1e-6, max_iterations=300, progress=False)
    assert run.outcome.good and len(run.before) == 1
    _, (_, from_coarse) = itertools.islice(fv3d.iterate(case, start=start), 2)
    _, (_, from_rest) = itertools.islice(fv3d.iterate(case), 2)
    assert from_coarse.momentum < 0.5 * from_rest.momentum


def test_a_coarse_run_that_diverges_is_left_out(monkeypatch: pytest.MonkeyPatch) -> None:
    """The step of the coarser run is spoilt: the run then begins as without it."""
    honest, case = coupling.step, duct(channel(4))

    def spoilt(problem: Any, state: Any, workspace: Any) -> Any:
        state, record = honest(problem, state, workspace)
        if problem.mesh.n_cells < case.mesh.n_cells:
            state.velocity[0] = np.nan
        return state, record
    plain = solved(case)
    monkeypatch.setattr(coupling, "step", spoilt)
    with pytest.warns(Fv3dWarning, match="16 cells: diverged"):
        run = solved(case, start=fv3d.CoarserMeshes(channel(2)))
    assert "diverged" in run.before[0]
    np.testing.assert_array_equal(run.velocity, plain.velocity)


def test_interruption_on_a_coarser_mesh_ends_all(monkeypatch: pytest.MonkeyPatch) -> None:
    def stopped(*arguments: Any) -> Any:
        raise KeyboardInterrupt
    case = duct(channel(4))
    monkeypatch.setattr(coupling, "step", stopped)
    with pytest.raises(KeyboardInterrupt):
        solved(case, start=fv3d.CoarserMeshes(channel(2)))


@pytest.mark.parametrize("law", [{"radius": 0.3}, {"radius": None}], ids=["kernel", "single cell"])
def test_readings_are_fed_as_from_rest(law: dict[str, Any]) -> None:
    """With a given gain the guided solution does not depend on the start."""
    case = duct(channel(6))
    places = np.array([[0.7, 0.4, 0.5], [1.4, 0.6, 0.5]])
    plain = solved(case)
    off = np.array([[0.1, 0.0, 0.05], [-0.1, 0.05, 0.0]])  # [m/s]
    velocity = plain.sample(places).velocity + off
    fed = fv3d.Feedback(fv3d.Readings(table(places, velocity)), gain=10.0, **law)
    one = solved(case, sources=[fed], tolerance=1e-8)
    other = solved(case, sources=[fed], tolerance=1e-8, start=fv3d.CoarserMeshes(channel(4)))
    assert other.name == "guided" and other.guided and "converged" in other.before[0]
    assert distance(case.mesh, one.velocity, plain.velocity) > 1e-3
    assert distance(case.mesh, other.velocity, one.velocity) < 1e-6
    assert distance(case.mesh, other.artificial_force, one.artificial_force) < 1e-4


def test_resumed_to_the_last_bit(tmp_path: Path) -> None:
    """run(20) = run(8) + resume + run(12); the sheet keeps what ran before."""
    case, path = duct(channel(5)), tmp_path / "run.checkpoint"

    def iterated(count: int, **options: Any) -> fv3d.Run:
        with pytest.warns(Fv3dWarning, match="iteration limit"):
            return fv3d.solve_steady(case, tolerance=1e-30, max_iterations=count, progress=False,
                                     **options)
    start = fv3d.CoarserMeshes(channel(3))
    whole = iterated(20, start=start)
    iterated(8, start=start, checkpoint=fv3d.Checkpoint(path))
    resumed = iterated(20, start=fv3d.read_checkpoint(path))
    np.testing.assert_array_equal(resumed.velocity, whole.velocity)
    np.testing.assert_array_equal(resumed.mass_flux, whole.mass_flux)
    assert [line.split(",")[:2] for line in resumed.before] == \
        [line.split(",")[:2] for line in whole.before]


def test_periodic_flow_through_a_driven_pair() -> None:
    """The pair is joined on the coarser meshes, too, and its drive is handed on."""
    def driven(mesh: fv3d.Mesh) -> fv3d.Case:
        walls = {name: fv3d.Wall() for name in ("y_min", "y_max", "z_min", "z_max")}
        return fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=0.1), boundaries=walls | {
            "x_min": fv3d.Periodic("x_max", mean_speed=1.0)})
    case = driven(channel(6))
    one = solved(case, tolerance=1e-8)
    other = solved(case, tolerance=1e-8, start=fv3d.CoarserMeshes(channel(4)))
    assert fv3d.pressure_drop(other, "x_min") == pytest.approx(fv3d.pressure_drop(one, "x_min"),
                                                               rel=1e-6)
    assert len(other.history["iteration"]) < len(one.history["iteration"])


def test_cell_values_and_zones_on_the_coarser_mesh() -> None:
    """Means of the cells where meshes are nested; a zone too thin for coarse cells stays out."""
    fine, coarse = channel(4), channel(2)
    x, y, z = fine.cell_centre.T
    case = duct(fine, body_force=np.stack([x, y, z], axis=1), resistances={
        "block": fv3d.Resistance(linear=1.0, where=lambda p: p[:, 0] > 1.0),
        "screen": fv3d.Resistance(linear=1.0, where=lambda p: np.abs(p[:, 0] - 0.625) < 0.1)})
    coarser = coarse_case(case, coarse)
    np.testing.assert_allclose(coarser.body_force, coarse.cell_centre, atol=1e-12)
    assert list(coarser.resistances) == ["block"]


def test_refused() -> None:
    """All before the first iteration."""
    mesh = channel(3)
    case, one, two = duct(mesh), channel(1), channel(2)
    for meshes, problem in (
            ((), "needs coarser meshes"), ("coarse", "needs coarser meshes"),
            ((one, "fine"), "needs coarser meshes"), (None, "needs coarser meshes"),
            ((two, one), "coarsest to the finest"), ((one, one), "coarsest to the finest")):
        with pytest.raises(CaseError, match=problem):
            fv3d.CoarserMeshes(meshes)
    for option in ({"tolerance": 0.0}, {"tolerance": "1"}, {"max_iterations": 0},
                   {"max_iterations": 2.5}):
        with pytest.raises(CaseError, match=r"positive|whole number"):
            fv3d.CoarserMeshes(one, **option)
    renamed = channel(2, names={"y_min": "floor"})
    far = box((0, 0, 0), (2000, 1000, 1000), cells=(4, 2, 2))
    short = box((0, 0, 0), (1.5, 1, 1), cells=(3, 2, 2))
    for other, problem in ((mesh, "not coarser"), (channel(4), "not coarser"),
                           (renamed, "boundaries of the case"), (far, "another domain"),
                           (short, "another domain")):
        with pytest.raises(CaseError, match=problem):
            solved(case, start=fv3d.CoarserMeshes(other))
    with pytest.raises(CaseError, match="steady"):
        fv3d.solve_transient(case, time_step=0.1, end_time=0.2, progress=False,
                             start=fv3d.CoarserMeshes(one))
