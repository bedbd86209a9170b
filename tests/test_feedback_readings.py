"""Feedback laws: readings that cannot be fed, speeds and slanted components, other sources."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from made import distance, duct, solved
from test_feedback import (
    LAWS,
    OFF,
    PLACES,
    Law,
    common,
    guided,
    plain,
    readings_off,
    strengths,
    table,
)

import fv3d
from fv3d.errors import CaseError, ReadingError
from fv3d.flow.problem import Correction, Force
from fv3d.mesh.generate import box

# ------------------------------------------------------------------------------- bad input

def refused(kind: type[fv3d.Fv3dError], action: Callable[[], Any]) -> fv3d.Fv3dError:
    """The error of an action, complete with place, value and remedy."""
    with pytest.raises(kind) as caught:
        action()
    error = caught.value
    assert error.what and error.where and error.got is not None and error.remedy
    return error


@pytest.mark.parametrize("options", [
    {"gain": -1.0}, {"gain": float("nan")}, {"gain": float("inf")}, {"radius": 0.0},
    {"radius": -0.1}, {"radius": float("nan")}, {"radius": float("inf")}, {"gain": "high"},
    {"radius": "wide"}, {"gain": [1.0, 2.0]}], ids=repr)
def test_gain_and_radius_that_cannot_be(options: dict[str, Any]) -> None:
    readings = fv3d.Readings(table(PLACES, OFF))
    error = refused(CaseError, lambda: fv3d.Feedback(readings, **({"radius": 0.1} | options)))
    assert next(iter(options)) in str(error)


def test_readings_that_cannot_be_fed() -> None:
    frame = table(PLACES, OFF)
    bare = frame.drop(columns=[c for c in frame if c[0] in "uvw"])
    tapped = fv3d.Readings(bare.assign(**{"p [Pa]": 1.0, "p_std [Pa]": 0.1}))
    assert "velocities" in str(refused(ReadingError, lambda: fv3d.Feedback(tapped, radius=0.1)))
    timed = fv3d.Readings(frame.assign(**{"time [s]": 0.1}))
    law = fv3d.Feedback(timed, radius=0.1)
    assert "mean()" in str(refused(ReadingError, lambda: guided("hex", law)))
    readings = fv3d.Readings(frame)
    lost = readings.with_values(np.where(np.arange(18) == 7, np.nan, readings.component_value))
    assert "probe 2" in str(refused(ReadingError, lambda: fv3d.Feedback(lost, radius=0.1)))
    refused(ReadingError, lambda: fv3d.Feedback(frame, radius=0.1))  # a table is no Readings


@pytest.mark.parametrize("law", LAWS.values(), ids=LAWS)
@pytest.mark.parametrize("point, words", [
    ((2.5, 0.5, 0.5), "outside"), ((1.0, 0.0, 0.5), "velocity is given"),
    ((1.0, 1e-9, 0.5), "velocity is given"), ((0.0, 0.5, 0.5), "velocity is given")])
def test_places_that_cannot_be_fed(point: Any, words: str, law: Law) -> None:
    """Before the first iteration, with the name of the reading."""
    points = np.vstack([PLACES[:2], point])
    source = law(fv3d.Readings(table(points, OFF[:3])), gain=1.0)
    error = refused(ReadingError, lambda: guided("hex", source))
    assert words in str(error) and "probe 2" in str(error)


# ------------------------------------------------------------------------------- other readings

@pytest.mark.parametrize("law", LAWS.values(), ids=LAWS)
def test_speeds_are_met(law: Law) -> None:
    """The speed is not linear in the velocity; its direction follows the flow."""
    speed = np.linalg.norm(plain("hex").sample(PLACES).velocity, axis=1)
    wanted = speed + np.array([0.25, -0.25, 0.3, -0.3, 0.2, -0.25])
    readings = fv3d.Readings(table(PLACES, OFF)[["x [m]", "y [m]", "z [m]"]].assign(
        **{"speed [m/s]": wanted, "speed_std [m/s]": 0.02}))
    run = guided("hex", law(readings, gain=1e6))
    computed = np.linalg.norm(run.sample(PLACES).velocity, axis=1)
    np.testing.assert_allclose(computed, wanted, atol=1e-3)
    np.testing.assert_allclose(computed - wanted, strengths(run) / 1e6, atol=1e-6)


@pytest.mark.parametrize("law", LAWS.values(), ids=LAWS)
def test_components_along_slanted_directions_are_met(law: Law) -> None:
    """A slanted wire: two directions at one place, one at the others."""
    points = PLACES[[0, 0, 2, 4]]
    along = np.array([[1.0, 1, 0], [1, -1, 0.2], [2, 0, 1], [0.3, 1, -1]])
    unit = along / np.linalg.norm(along, axis=1)[:, None]
    wanted = np.einsum("ij,ij->i", unit, plain("hex").sample(points).velocity)
    wanted += [0.2, 0.25, -0.3, 0.2]
    frame = table(points, OFF[:4])[["x [m]", "y [m]", "z [m]"]]
    readings = fv3d.Readings(frame.assign(nx=along[:, 0], ny=along[:, 1], nz=along[:, 2],
                                          **{"along [m/s]": wanted, "along_std [m/s]": 0.02}))
    run = guided("hex", law(readings, gain=1e6))
    computed = np.einsum("ij,ij->i", unit, run.sample(points).velocity)
    np.testing.assert_allclose(computed, wanted, atol=1e-3)


@pytest.mark.parametrize("law", LAWS.values(), ids=LAWS)
def test_contradicting_readings_at_one_place_end_in_a_compromise(law: Law) -> None:
    velocity = plain("hex").sample(PLACES[[4, 4]]).velocity
    velocity[:, 0] += [0.3, 0.1]
    readings = fv3d.Readings(table(PLACES[[4, 4]], velocity, ["rake 1", "rake 2"]))
    for gain in (10.0, 1e6):
        run = guided("hex", law(readings, gain=gain))
        misfit = fv3d.observe(run, readings) - readings.component_value
        np.testing.assert_allclose(misfit, strengths(run) / gain, atol=1e-6)
    np.testing.assert_allclose(misfit[[0, 3]], [-0.1, 0.1], atol=1e-3)


def test_default_gain_is_five_speeds_over_the_radius() -> None:
    """The larger of measured and computed speed; the size of the cell stands for no radius."""
    readings = fv3d.Readings(table(PLACES, np.tile([2.0, 0.0, 0.0], (6, 1))))
    for radius, length in ((0.12, 0.12), (None, 0.125)):
        law = fv3d.Feedback(readings, radius=radius)
        case = duct(box((0, 0, 0), (2, 1, 1), cells=(16, 8, 8)))
        state, _ = next(fv3d.iterate(case, sources=[law]))
        np.testing.assert_allclose(state.sources[0].gain, 5 * 2.0 / length)
        assert "5 local speed / radius" in "".join(law.describe(state.sources[0]))


# ------------------------------------------------------------------------------- twin, restart

def strong_jet(mesh: fv3d.Mesh, speed: float) -> fv3d.Case:
    """The duct with an inlet profile whose peak lies on the other side."""
    def profile(x: np.ndarray) -> np.ndarray:
        y, z = x[:, 1], x[:, 2]
        return np.outer(speed * 16 * y**2 * (1 - y) * z * (1 - z) * 27 / 16, (1.0, 0.0, 0.0))
    case = duct(mesh, viscosity=0.005)
    return fv3d.Case(mesh, case.fluid, boundaries=dict(case.boundaries) | {
        "x_min": fv3d.Inlet(profile)})


def test_a_twin_is_closer_to_the_truth_at_withheld_points() -> None:
    """Truth: a jet on the other side, finer mesh.  The guided run knows eight readings,
    0.2 m apart, and reaches with half of that."""
    truth = solved(strong_jet(box((0, 0, 0), (2, 1, 1), cells=(18, 12, 12)), 1.0), tolerance=1e-5)
    y, z = (g.ravel() for g in np.meshgrid([0.2, 0.4, 0.6, 0.8], [0.3, 0.7]))
    fed = np.column_stack([np.full(8, 0.5), y, z])
    rng = np.random.default_rng(5)
    withheld = np.column_stack([rng.uniform(0.7, 1.8, 40), rng.uniform(0.1, 0.9, (40, 2))])
    mesh = box((0, 0, 0), (2, 1, 1), cells=(12, 8, 8))
    model = duct(mesh, viscosity=0.005)
    readings = fv3d.Readings(table(fed, truth.sample(fed).velocity))
    wanted = truth.sample(withheld).velocity

    def error(run: fv3d.Run) -> float:
        return float(np.sqrt(np.mean((run.sample(withheld).velocity - wanted)**2)))
    bare = solved(model, tolerance=1e-5)
    with_force = solved(model, tolerance=1e-5, sources=[fv3d.Feedback(readings, radius=0.1)])
    assert error(with_force) <= 0.6 * error(bare)


@pytest.mark.parametrize("law", LAWS.values(), ids=LAWS)
def test_going_on_with_the_same_law_does_not_jump(law: Law) -> None:
    source = law(readings_off("hex"), gain=50.0)
    run = guided("hex", source)
    more = guided("hex", source, start=run, tolerance=1e-9)
    first = max(more.history[name][0] for name in ("momentum", "mass", "misfit"))
    assert first <= 1e-5
    assert distance(run.mesh, more.velocity, run.velocity) <= 1e-4
    again = law(readings_off("hex"), gain=50.0)  # a new law starts from zero strengths, ends equal
    other = guided("hex", again, start=run)
    assert distance(run.mesh, other.velocity, run.velocity) <= 1e-4


@pytest.mark.parametrize("law", LAWS.values(), ids=LAWS)
def test_start_from_a_guided_run_on_another_mesh(law: Law) -> None:
    source = law(readings_off("hex"), gain=20.0)
    coarse = solved(duct(box((0, 0, 0), (2, 1, 1), cells=(8, 5, 5))), tolerance=1e-4,
                    sources=[source])
    run = guided("hex", source, start=coarse)
    assert distance(run.mesh, run.velocity, common("hex", law).velocity) <= 1e-4


def test_two_laws_side_by_side_do_the_same_as_one() -> None:
    readings = readings_off("hex")
    first, rest = readings.split(withheld=["rake 2", "rake 3"])
    law = LAWS["kernel"]
    both = guided("hex", law(first, gain=20.0), sources=[law(first, gain=20.0),
                                                         law(rest, gain=20.0)])
    assert distance(both.mesh, both.velocity, common("hex", law).velocity) <= 1e-4


def test_a_source_without_force_leaves_the_run_plain() -> None:
    class Idle:
        def start(self, problem: Any, state: Any, earlier: Any) -> Force:
            return Force(np.zeros((problem.mesh.n_cells, 3)), np.zeros(problem.mesh.n_faces))

        def force(self, own: Force) -> Force:
            return own

        def correct(self, own: Force, problem: Any, state: Any, change: Any, relax: Any) -> Any:
            return Correction(own, change)
    run = solved(plain("hex").case, tolerance=1e-6, sources=[Idle()])
    np.testing.assert_array_equal(run.velocity, plain("hex").velocity)
    assert not run.guided
