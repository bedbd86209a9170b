"""Feedback in time: decay rates, any gain, closure, zero gain, holes, continued runs."""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
import pandas as pd
import pytest
from made import duct, solved

import fv3d
from fv3d.errors import CaseError, Fv3dWarning, ReadingError
from fv3d.flow.time_step import Differencing
from fv3d.measured.feedback_time import StateInTime
from fv3d.mesh.generate import box

CENTRE = (0.5, 0.5, 0.5)


def record(time: np.ndarray, velocity: Any, *, places: Any = (CENTRE,),
           axes: str = "uvw") -> fv3d.Readings:
    """Readings in time; ``velocity`` a vector per place, or a function of time for all."""
    rows = []
    for k, place in enumerate(places):
        for t in time:
            value = velocity(t) if callable(velocity) else velocity[k]
            rows.append(dict(zip(("x [m]", "y [m]", "z [m]"), place, strict=True))
                        | {"time [s]": t, "name": f"probe {k}"}
                        | {f"{a} [m/s]": value["uvw".index(a)] for a in axes}
                        | {f"{a}_std [m/s]": 0.01 for a in axes})
    return fv3d.Readings(pd.DataFrame(rows))


FRICTIONLESS = pytest.mark.filterwarnings("ignore:Run 'guided' is laminar but")
ALWAYS = np.linspace(-5.0, 20.0, 300)


@cache
def room(kind: str) -> fv3d.Case:
    """Closed box of nearly frictionless fluid at rest."""
    mesh = box((0, 0, 0), (1, 1, 1), cells=(10, 10, 10)) if kind == "hex" else \
        box((0, 0, 0), (1, 1, 1), cells=(6, 6, 6), tetra=True)
    return fv3d.Case(mesh, fv3d.Fluid(density=1.2, viscosity=1e-9),
                     boundaries={name: fv3d.Wall() for name in mesh.boundaries})


def fed(case: fv3d.Case, law: fv3d.Feedback, **options: Any) -> fv3d.Run:
    monitor = fv3d.PointMonitor([CENTRE], name="probe")
    return fv3d.solve_transient(case, **({"time_step": 0.02, "end_time": 2.0, "start": (0, 0, 0),
                                          "progress": False, "sources": [law],
                                          "monitors": [monitor]} | options))


@pytest.mark.parametrize("gain", [0.1, 1.0, 3.0])
def test_a_scalar_decays_at_the_gain(gain: float) -> None:
    """du/dt = -K (u - u*) by the law and the time differences of the solver: exp(-K t) to 0.1 %."""
    once = record(np.zeros(1), [(1.0, 0.0, 0.0)], axes="u")
    nothing, unit = np.empty(0), np.eye(3).reshape(1, 3, 1, 3)
    own = StateInTime(once, None, np.arange(3), nothing, nothing, unit,  # type: ignore[arg-type]
                      np.array([gain]), np.zeros(1), np.zeros((1, 3)))
    step, along = 0.01 / gain, np.array([[1.0, 0.0, 0.0]])
    levels = [1.0 - np.exp(gain * step), 0.0]
    for k in range(1, 201):
        difference = Differencing.of(step, step)
        free = difference.mixed(np.array(levels[-1]), np.array(levels[-2])) / difference.lead
        part = step / difference.lead
        strength = own.solve(free * along, along, np.ones(1), own.gain, part)
        levels.append(float(free - part * strength[0]))
        assert abs((1.0 - levels[-1]) / np.exp(-gain * k * step) - 1.0) <= 1e-3


@FRICTIONLESS
@pytest.mark.parametrize("kind, share", [("hex", 2 / 3), ("tet", 2 / 3)])
def test_in_the_solver_a_reading_relaxes_at_its_own_rate(kind: str, share: float) -> None:
    """exp(-K HPphi t) to 1 %, HPphi near the 2/3 of a Gaussian in unbounded fluid."""
    gain, aim = 1.0, 1e-5
    run = fed(room(kind), fv3d.Feedback(record(ALWAYS, [(aim, 0.0, 0.0)]), radius=0.15, gain=gain))
    answer = run.state.sources[0].own_answer
    assert np.abs(answer - share).max() <= 0.06
    series = run.series["probe"]
    left = 1.0 - series.velocity[:, 0, 0] / aim
    np.testing.assert_allclose(left, np.exp(-gain * answer[0] * series.time), rtol=0.01)


@FRICTIONLESS
@pytest.mark.parametrize("kind", ["hex", "tet"])
@pytest.mark.parametrize("product", [1e-2, 1.0, 1e2, 1e4, 1e6])
def test_no_gain_is_too_large(product: float, kind: str) -> None:
    """K dt from 0.01 to 1e6: the misfit never grows; a large one is met at once."""
    law = fv3d.Feedback(record(ALWAYS, [(1e-3, 0.0, 0.0)]), radius=0.15, gain=product / 0.02)
    run = fed(room(kind), law, end_time=1.0)
    left = np.abs(1.0 - run.series["probe"].velocity[:, 0, 0] / 1e-3)
    assert left.max() <= 1.0 and left[-1] <= 1.01 * np.exp(-product * 0.6 * 50) + 1e-4
    assert np.abs(run.velocity).max() <= 2e-3
    if product >= 1e4:
        assert left.max() <= 1e-3


@cache
def flow(kind: str) -> fv3d.Run:
    mesh = box((0, 0, 0), (2, 1, 1), cells=(12, 8, 8), skew=0.2) if kind == "hex" else \
        box((0, 0, 0), (2, 1, 1), cells=(7, 5, 5), tetra=True, skew=0.1)
    coupling = fv3d.SIMPLEC() if kind == "hex" else fv3d.SIMPLE()
    return solved(duct(mesh, numerics=fv3d.Numerics(coupling=coupling)), tolerance=1e-8)


PLACES = ((0.6, 0.3, 0.4), (0.6, 0.7, 0.6), (1.2, 0.5, 0.5))
OFF = np.array([(-.25, .1, 0.), (.25, -.2, .1), (-.3, .1, .2)])


def off(kind: str, **options: Any) -> fv3d.Readings:
    return record(ALWAYS, flow(kind).sample(PLACES).velocity + OFF, places=PLACES, **options)


@pytest.mark.parametrize("kind, radius, steps", [("hex", 0.12, (0.1, 0.4)), ("tet", 0.2, (0.2,)),
                                                 ("hex", None, (0.2,))])
def test_the_steady_end_is_that_of_the_steady_law(kind: str, radius: float | None,
                                                  steps: tuple[float, ...]) -> None:
    """Same readings, same gain: fields to 1e-5, forces close to 1e-6, whatever the step."""
    readings = off(kind)
    mean = fv3d.solve_steady(flow(kind).case, tolerance=1e-7, max_iterations=2000, start=flow(kind),
                             sources=[fv3d.Feedback(readings.mean(), radius=radius, gain=20.0)],
                             progress=False)
    for step in steps:
        run = fed(flow(kind).case, fv3d.Feedback(readings, radius=radius, gain=20.0),
                  start=flow(kind), time_step=step, end_time=15.0)
        assert run.guided
        np.testing.assert_allclose(run.velocity, mean.velocity, atol=1e-5)
        force, same = (fv3d.momentum_budget(r).artificial for r in (run, mean))
        np.testing.assert_allclose(force, same, atol=1e-4 * np.linalg.norm(same))
        budget = fv3d.momentum_budget(run)
        assert np.linalg.norm(budget.artificial) > 1e-4 * budget.size
        assert np.linalg.norm(budget.closure) <= 1e-6 * budget.size
        misfit = fv3d.observe(run, run.state.sources[0].readings)
        assert "readings acted in" in str(run) and np.all(np.isfinite(misfit))


def test_momentum_closes_while_the_flow_changes() -> None:
    """Rate of change of momentum included, iterated within the step: to 1e-3 of that rate."""
    case, levels = flow("hex").case, []

    class Keep:
        name = "keep"

        def see(self, problem: Any, state: Any, record: Any) -> None:
            levels.append(state.velocity)

    def wave(t: float) -> Any:
        return (0.6 + 0.3 * np.sin(4 * t), 0.2 * np.cos(4 * t), 0.0)

    run = fed(case, fv3d.Feedback(record(ALWAYS, wave, places=PLACES), radius=0.12, gain=20.0),
              start=flow("hex"), time_step=0.02, end_time=0.4, outer_iterations=12,
              monitors=[Keep()])
    mass = case.fluid.density * case.mesh.cell_volume[:, None]
    rate = (mass * (1.5 * levels[-1] - 2 * levels[-2] + 0.5 * levels[-3])).sum(axis=0) / 0.02
    budget = fv3d.momentum_budget(run)
    assert np.linalg.norm(rate) > 1e-4 * budget.size
    assert np.linalg.norm(budget.closure - rate) <= 1e-3 * np.linalg.norm(rate)


@pytest.mark.parametrize("kind", ["hex", "tet"])
def test_zero_gain_is_the_plain_run(kind: str) -> None:
    options = {"start": flow(kind), "end_time": 0.1}
    run = fed(flow(kind).case, fv3d.Feedback(off(kind), radius=0.12, gain=0.0), **options)
    plain = fed(flow(kind).case, None, sources=[], **options)  # type: ignore[arg-type]
    for name in ("velocity", "pressure", "mass_flux"):
        np.testing.assert_array_equal(getattr(run, name), getattr(plain, name))
    assert not run.guided and plain.name == "transient" and run.name == "guided"


def test_nothing_where_computed_equals_measured() -> None:
    """Against the plain run of the same steps, whose steady state the readings are."""
    exact = solved(flow("hex").case, tolerance=1e-10)
    readings = record(ALWAYS, exact.sample(PLACES).velocity, places=PLACES)
    run = fed(exact.case, fv3d.Feedback(readings, radius=0.12, gain=20.0), start=exact)
    assert np.abs(run.velocity - exact.velocity).max() <= 1e-6
    assert np.abs(run.state.sources[0].strength).max() <= 1e-4  # 1 to 10 for readings off


def test_order_of_the_table_does_not_matter() -> None:
    readings = off("hex")
    frame = pd.DataFrame({f"{a} [m]": readings.point[:, k] for k, a in enumerate("xyz")}
                         | {"time [s]": readings.time, "name": readings.name}
                         | {f"{a} [m/s]": readings.component_value[k::3]
                            for k, a in enumerate("uvw")}
                         | {f"{a}_std [m/s]": 0.01 for a in "uvw"})
    one, two = (fed(flow("hex").case, fv3d.Feedback(fv3d.Readings(f), radius=0.12, gain=20.0),
                    start=flow("hex"), end_time=0.2)
                for f in (frame, frame.sample(frac=1.0, random_state=2)))
    assert np.abs(one.velocity - two.velocity).max() <= 1e-10


def test_speeds_are_met() -> None:
    rows = pd.DataFrame({"time [s]": ALWAYS, "name": "wire", "x [m]": 1.2, "y [m]": 0.5,
                         "z [m]": 0.5, "speed [m/s]": 0.3, "speed_std [m/s]": 0.01})
    run = fed(flow("hex").case, fv3d.Feedback(fv3d.Readings(rows), radius=0.12, gain=1e5),
              start=flow("hex"), time_step=0.05)
    assert np.linalg.norm(run.sample([(1.2, 0.5, 0.5)]).velocity) == pytest.approx(0.3, rel=1e-3)


@FRICTIONLESS
def test_samples_do_not_depend_on_the_step() -> None:
    """A measured wave is followed alike at two steps: not held between its samples."""
    def wave(t: float) -> Any:
        return (0.2 * np.sin(6 * t), 0.0, 0.0)

    readings = record(np.arange(-1.0, 3.0, 0.1), wave, axes="u")
    law = fv3d.Feedback(readings, radius=0.15, gain=1e4)
    for step in (0.02, 0.01):
        run = fed(room("hex"), law, time_step=step, end_time=1.0)
        series = run.series["probe"]
        off = series.velocity[:, 0, 0] - 0.2 * np.sin(6 * series.time)
        assert np.abs(off).max() <= 0.01 * 0.2


def test_a_hole_lets_the_flow_go_free() -> None:
    """The force dies away in the hole, without jumps, and comes back after it."""
    time = np.arange(-1.0, 4.0, 0.02)
    time = time[(time < 0.5) | (time > 1.5)]
    strength: list[float] = []

    class Keep:
        name = "keep"

        def see(self, problem: Any, state: Any, record: Any) -> None:
            strength.append(float(np.abs(state.sources[0].vector).max()))

    law = fv3d.Feedback(record(time, OFF, places=PLACES), radius=0.12, gain=20.0)
    run = fed(flow("hex").case, law, start=flow("hex"), time_step=0.01, monitors=[Keep()])
    strength = np.array(strength)  # type: ignore[assignment]
    clock = run.history["time"]
    assert not np.any(strength[(clock > 0.51) & (clock < 1.49)])
    assert strength[-1] > 0.5 and np.abs(np.diff(strength)).max() <= 0.4 * max(strength)


def test_a_guided_run_goes_on_in_time() -> None:
    law = fv3d.Feedback(off("hex"), radius=0.12, gain=20.0)
    whole, half = (fed(flow("hex").case, law, start=flow("hex"), end_time=end)
                   for end in (0.4, 0.2))
    rest = fed(flow("hex").case, law, start=half, end_time=0.4)
    np.testing.assert_allclose(rest.velocity, whole.velocity, atol=1e-7)
    assert rest.state.sources[0].tally.steps == 20


def test_what_cannot_be_fed_in_time() -> None:
    mean = off("hex").mean()
    with pytest.warns(Fv3dWarning, match="every instant"):
        fed(flow("hex").case, fv3d.Feedback(mean, radius=0.12, gain=1.0), end_time=0.02)
    for sources in ([object()], 3, [fv3d.Feedback]):
        with pytest.raises(CaseError):
            fed(flow("hex").case, None, sources=sources)  # type: ignore[arg-type]
    late = fed(flow("hex").case, fv3d.Feedback(off("hex").delayed(100.0), radius=0.12),
               end_time=0.04)
    assert "NO reading acted" in str(late) and not late.guided
    outside = record(ALWAYS, OFF[:1], places=((9.0, 0.5, 0.5),))
    with pytest.raises(ReadingError, match="outside"):
        fed(flow("hex").case, fv3d.Feedback(outside, radius=0.12))


@pytest.mark.parametrize("kind", ["hex", "tet"])
def test_monitors_see_the_pressure_without_the_artificial_part(kind: str) -> None:
    """Forces and pressures of the series are those of the run, step by step and at the end."""
    law = fv3d.Feedback(off(kind), radius=0.2, gain=20.0)
    wall = fv3d.ForceMonitor("y_min", name="wall")
    run = fed(flow(kind).case, law, start=flow(kind), end_time=0.2,
              monitors=[wall, fv3d.PointMonitor([CENTRE], name="probe")])
    assert np.abs(run.pressure - run.state.pressure).max() > 0.01
    force = fv3d.force(run, "y_min")
    np.testing.assert_allclose(run.series["wall"].pressure_force[-1], force.pressure, rtol=1e-5)
    np.testing.assert_allclose(run.series["wall"].friction[-1], force.friction, rtol=1e-5)
    assert run.series["probe"].pressure[-1, 0] == pytest.approx(
        run.sample([CENTRE]).pressure[0], rel=1e-5)


def test_what_the_instruments_would_read() -> None:
    """At fed readings the law's own misfit, at others what the field says; holes are nan."""
    readings = record(ALWAYS[ALWAYS < 0.5], lambda t: (0.5 + 0.1 * t, 0.0, 0.0), places=PLACES)
    law = fv3d.Feedback(off("hex"), radius=0.12, gain=1e5)
    watch = [fv3d.ReadingMonitor(off("hex"), name="fed"),
             fv3d.ReadingMonitor(readings, name="others")]
    run = fed(flow("hex").case, law, start=flow("hex"), end_time=1.0, monitors=watch)
    met = run.series["fed"]
    assert met.computed.shape == met.measured.shape == (50, 9)
    assert np.abs(met.computed - met.measured)[-20:].max() <= 2e-3
    others = run.series["others"]
    assert np.isnan(others.measured[others.time > 0.5]).all()
    np.testing.assert_allclose(others.measured[5:10, 0], 0.5 + 0.1 * others.time[5:10], rtol=1e-6)
    places = watch[1].places
    np.testing.assert_allclose(others.computed[-1], fv3d.observe(run, places), atol=1e-6)
    for use in (lambda: fv3d.observe(run, readings), lambda: fv3d.compare(run, readings)):
        with pytest.raises(ReadingError, match="one field"):
            use()


def test_pseudo_transient_takes_no_time_either() -> None:
    for options in ({}, {"start": flow("hex")}):
        with pytest.raises(ReadingError, match="no time"):
            fv3d.solve_pseudo_transient(flow("hex").case, tolerance=1e-4, max_iterations=5,
                                        pseudo_step=fv3d.LocalStep(), progress=False,
                                        sources=[fv3d.Feedback(off("hex"), radius=0.12)], **options)
