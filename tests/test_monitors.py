"""Monitors: flow rates, statistics of the field, phase averages, series of files, plots."""

from __future__ import annotations

from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np
import pandas as pd
import pytest
import pyvista as pv
from made import duct

import fv3d
from fv3d.errors import CaseError, FileError
from fv3d.flow.monitors import Series
from fv3d.mesh.generate import box

PLACES = ((1.2, 0.5, 0.5), (0.6, 0.3, 0.4))


@pytest.fixture(scope="module")
def pulsing() -> fv3d.Case:
    """Duct whose inflow pulses with a period of 0.4 s."""
    case = duct(box((0, 0, 0), (2, 1, 1), cells=(8, 5, 5)))
    inlet = fv3d.Inlet(case.boundaries["x_min"].velocity,  # type: ignore[attr-defined]
                       factor=lambda t: 1.0 + 0.3 * np.sin(2 * np.pi * t / 0.4))
    return fv3d.Case(case.mesh, case.fluid, boundaries={**case.boundaries, "x_min": inlet})


def pulsed(case: fv3d.Case, *monitors: Any, step: Any = 0.02, end: float = 1.2,
           **options: Any) -> fv3d.Run:
    return fv3d.solve_transient(case, time_step=step, end_time=end, start=(1.0, 0.0, 0.0),
                                monitors=monitors, progress=False, **options)


def test_flow_rates_pulse_with_the_inflow(pulsing: fv3d.Case) -> None:
    names = ("x_min", "x_max", "y_min")
    run = pulsed(pulsing, *(fv3d.FlowRateMonitor(name, name=name) for name in names))
    at = run.series
    swing = 1.0 + 0.3 * np.sin(2 * np.pi * at["x_min"].time / 0.4)
    steady = -at["x_min"].flow_rate / swing
    np.testing.assert_allclose(steady, steady[0], rtol=1e-12)
    np.testing.assert_allclose(at["x_max"].flow_rate, -at["x_min"].flow_rate, rtol=1e-7)
    np.testing.assert_allclose(at["x_max"].mass_flow, at["x_max"].flow_rate)  # density 1
    assert not at["y_min"].flow_rate.any() and at["x_max"].flow_rate.shape == (60,)
    assert at["x_max"].flow_rate[-1] == pytest.approx(fv3d.flow_rate(run, "x_max"), rel=1e-6)
    with pytest.raises(CaseError, match="x_min"):
        pulsed(pulsing, fv3d.FlowRateMonitor("x_mim", name="no"))


@pytest.mark.parametrize("step", [0.02, fv3d.CourantStep(0.12, first=0.01)])
def test_statistics_of_the_field_are_those_of_its_samples(pulsing: fv3d.Case, step: Any) -> None:
    """Against NumPy's weighted mean and covariance of all fields, steps of unequal size too."""
    fields, steps = [], []

    class Keep:
        name = "keep"

        def see(self, problem: Any, state: Any, record: Any) -> None:
            if state.time - state.older.step >= 0.4 - 1e-9:
                fields.append(np.column_stack([state.velocity, state.pressure]))
                steps.append(state.older.step)

    run = pulsed(pulsing, Keep(), fv3d.MeanMonitor(name="mean", begin=0.4), step=step)
    found = run.series["mean"]
    assert isinstance(found, fv3d.FieldStatistics) and found.steps == len(steps) > 20
    assert found.seconds == pytest.approx(sum(steps))
    if not isinstance(step, float):
        assert np.ptp(steps) > 0
    for cell in (0, 77, 150):
        values = np.array(fields)[:, cell]
        mean = np.average(values, axis=0, weights=steps)
        covariance = np.cov(values.T, aweights=steps, ddof=0)
        np.testing.assert_allclose(found.velocity[cell], mean[:3], atol=1e-14)
        np.testing.assert_allclose(found.pressure[cell], mean[3], rtol=1e-11)
        np.testing.assert_allclose(found.reynolds_stress[cell], covariance[:3, :3], atol=1e-13)
        np.testing.assert_allclose(found.velocity_rms[cell], np.sqrt(np.diag(covariance)[:3]),
                                   atol=1e-7)
        assert found.pressure_rms[cell] == pytest.approx(np.sqrt(covariance[3, 3]))
        assert found.energy[cell] == pytest.approx(0.5 * np.trace(covariance[:3, :3]))


def test_phase_averages(pulsing: fv3d.Case) -> None:
    points = fv3d.PointMonitor(PLACES, name="points")
    run = pulsed(pulsing, fv3d.PhaseMonitor(name="phase", period=0.4, bins=10, begin=0.4), points,
                 end=2.0)
    found = run.series["phase"]
    assert found.velocity.shape == (10, pulsing.mesh.n_cells, 3)
    np.testing.assert_allclose(found.seconds.sum(), 1.62)  # steps from 0.4 to 2.0 s
    home = int(np.argmin(np.linalg.norm(pulsing.mesh.cell_centre - PLACES[0], axis=1)))
    swing = found.velocity[:, home, 0]
    rate = 1.0 + 0.3 * np.sin(2 * np.pi * found.phase)
    assert np.corrcoef(swing, rate)[0, 1] > 0.9
    empty = pulsed(pulsing, fv3d.PhaseMonitor(name="phase", period=0.4, bins=50), end=0.1)
    gaps = empty.series["phase"].seconds == 0
    assert gaps.sum() >= 40 and np.isnan(empty.series["phase"].pressure[gaps]).all()


def test_statistics_go_on_after_a_checkpoint(pulsing: fv3d.Case, tmp_path: Path) -> None:
    def watch() -> list[Any]:
        return [fv3d.MeanMonitor(name="mean", begin=0.1), fv3d.FlowRateMonitor("x_max", name="out"),
                fv3d.PhaseMonitor(name="phase", period=0.4, bins=4),
                fv3d.VtkSeries(tmp_path / "flow.pvd", seconds=0.1)]

    whole = pulsed(pulsing, *watch(), end=0.6)
    pulsed(pulsing, *watch(), end=0.3, checkpoint=fv3d.Checkpoint(tmp_path / "run"))
    rest = fv3d.solve_transient(pulsing, time_step=0.02, end_time=0.6, monitors=watch(),
                                start=fv3d.read_checkpoint(tmp_path / "run"), progress=False)
    for name in ("velocity", "pressure", "reynolds_stress", "pressure_rms"):
        np.testing.assert_array_equal(getattr(whole.series["mean"], name),
                                      getattr(rest.series["mean"], name))
    np.testing.assert_array_equal(whole.series["out"].flow_rate, rest.series["out"].flow_rate)
    np.testing.assert_array_equal(whole.series["phase"].velocity, rest.series["phase"].velocity)
    assert whole.series["fields"].files == rest.series["fields"].files


def test_a_mean_over_iterations_is_refused(pulsing: fv3d.Case) -> None:
    for monitor in (fv3d.MeanMonitor(name="mean"), fv3d.PhaseMonitor(name="phase", period=1.0)):
        with pytest.raises(CaseError, match="no mean in time"):
            fv3d.solve_steady(pulsing, tolerance=1e-3, max_iterations=3, monitors=[monitor],
                              progress=False)
    for bad in ({"period": 0.0}, {"period": 1.0, "bins": 0}):
        with pytest.raises(CaseError):
            fv3d.PhaseMonitor(name="phase", **bad)


def test_the_mean_is_a_run_of_its_own(pulsing: fv3d.Case, tmp_path: Path) -> None:
    """Of a pulsing flow: its flow rate is that of the inflow's mean, and it can be compared."""
    run = pulsed(pulsing, fv3d.MeanMonitor(name="mean", begin=0.4), end=1.2)
    mean = fv3d.mean_run(run, name="mean")
    steady = fv3d.flow_rate(pulsed(pulsing, end=0.2, step=0.1), "x_min")  # factor one at 0.2 s
    assert fv3d.flow_rate(mean, "x_min") == pytest.approx(steady, rel=1e-9)
    sample = mean.sample(PLACES).velocity
    readings = fv3d.Readings(pd.DataFrame({
        "x [m]": [p[0] for p in PLACES], "y [m]": [p[1] for p in PLACES],
        "z [m]": [p[2] for p in PLACES], "u [m/s]": sample[:, 0], "u_std [m/s]": 0.1}))
    np.testing.assert_allclose(fv3d.observe(mean, readings), sample[:, 0])
    assert "pulsed, mean" in str(fv3d.compare(
        [fv3d.mean_run(pulsed(pulsing, fv3d.MeanMonitor(name="mean"), end=0.1, name="pulsed"),
                       name="mean")], readings))
    assert fv3d.write_vtk(mean, tmp_path / "mean.vtu").is_file() and "Mean over 0.8 s" in str(mean)
    with pytest.raises(CaseError, match="no mean"):
        fv3d.mean_run(run, name="points")


def test_before_its_begin_a_mean_is_empty(pulsing: fv3d.Case) -> None:
    run = pulsed(pulsing, fv3d.MeanMonitor(name="mean", begin=9.0), end=0.1)
    assert run.series["mean"].steps == 0 and run.series["mean"].velocity.shape == (0, 3)


def test_a_series_of_files_is_read_back_by_pyvista(pulsing: fv3d.Case, tmp_path: Path) -> None:
    run = pulsed(pulsing, fv3d.VtkSeries(tmp_path / "flow.pvd", every=20))
    written = run.series["fields"]
    np.testing.assert_allclose(written.time, [0.4, 0.8, 1.2])
    reader = pv.get_reader(tmp_path / "flow.pvd")
    np.testing.assert_allclose(reader.time_values, written.time)
    reader.set_active_time_value(reader.time_values[-1])
    grid = reader.read()[0]
    order = np.argsort(run.mesh.file_index)
    np.testing.assert_array_equal(grid.cell_data["velocity"], run.velocity[order])
    assert grid.n_cells == run.mesh.n_cells and len(written.files) == 3


def test_files_at_multiples_of_a_time(pulsing: fv3d.Case, tmp_path: Path) -> None:
    run = pulsed(pulsing, fv3d.VtkSeries(tmp_path / "flow.pvd", seconds=0.1), step=0.03, end=0.6)
    np.testing.assert_allclose(run.series["fields"].time, [0.03, 0.12, 0.21, 0.3, 0.42, 0.51, 0.6])


@pytest.mark.parametrize("options", [{}, {"every": 3, "seconds": 1.0}, {"every": 0},
                                     {"seconds": -1.0}])
def test_intervals_of_a_series_that_cannot_be(options: Any, tmp_path: Path) -> None:
    with pytest.raises(CaseError):
        fv3d.VtkSeries(tmp_path / "flow.pvd", **options)


def test_an_iteration_is_written_by_its_number(pulsing: fv3d.Case, tmp_path: Path) -> None:
    run = fv3d.solve_steady(pulsing, tolerance=1e-3, max_iterations=99, progress=False,
                            monitors=[fv3d.VtkSeries(tmp_path / "it.pvd", every=5)])
    assert run.series["fields"].time[0] == 5.0
    with pytest.raises(CaseError, match="no seconds"):
        fv3d.solve_steady(pulsing, tolerance=1e-3, max_iterations=9, progress=False,
                          monitors=[fv3d.VtkSeries(tmp_path / "it.pvd", seconds=5.0)])


def picture_of(path: Path) -> np.ndarray:
    """Grey values of a PNG file."""
    from matplotlib.image import imread
    return imread(path)[:, :, :3].mean(axis=2)


def test_a_strip_of_frames(pulsing: fv3d.Case, tmp_path: Path) -> None:
    pulsed(pulsing, fv3d.VtkSeries(tmp_path / "flow.pvd", every=10))
    for frames in (1, 3):
        made = fv3d.frame_strip(tmp_path / "flow.pvd", tmp_path / f"strip_{frames}.png",
                                frames=frames, plane=((1, 0.5, 0.5), (0, 0, 1)))
        assert made.is_file()
    one, three = (picture_of(tmp_path / f"strip_{k}.png") for k in (1, 3))
    assert three.shape[0] > 2 * one.shape[0] and np.std(three) > 0.1
    with pytest.raises(FileError):
        fv3d.frame_strip(tmp_path / "no.pvd", tmp_path / "strip.png")
    with pytest.raises(CaseError, match="does not cut"):
        fv3d.frame_strip(tmp_path / "flow.pvd", tmp_path / "strip.png",
                         plane=((9, 9, 9), (0, 0, 1)))


def test_lines_of_series_and_history(pulsing: fv3d.Case, tmp_path: Path) -> None:
    run = pulsed(pulsing, fv3d.PointMonitor(PLACES, name="points"),
                 fv3d.ForceMonitor("y_min", name="wall"), fv3d.MeanMonitor(name="mean"), end=0.2)
    for name in ("points", "wall"):
        made = fv3d.plot_series(run, tmp_path / f"{name}.png", name=name)
        assert np.std(picture_of(made)) > 0.02
    assert np.std(picture_of(fv3d.plot_history(run, tmp_path / "history.png"))) > 0.02
    for name in ("point", "mean"):
        with pytest.raises(CaseError, match="points"):
            fv3d.plot_series(run, tmp_path / "no.png", name=name)


def test_words_of_the_lines() -> None:
    from fv3d.results.lines import _lines
    two = np.zeros((5, 2, 3))
    assert [w for w, _ in _lines("velocity", two)][::5] == ["point 1 x", "point 2 z"]
    assert [w for w, _ in _lines("pressure", two[:, 0])] == ["point 1 ", "point 2 ", "point 3 "]
    assert [w for w, _ in _lines("force", two[:, 0])] == ["x", "y", "z"]


def test_a_series_tells_what_it_has() -> None:
    series = Series(np.arange(2), np.zeros(2), {"force": np.zeros((2, 3))})
    with pytest.raises(AttributeError, match="force"):
        series.velocity  # noqa: B018
    assert SimpleNamespace(**series.columns).force.shape == (2, 3)
