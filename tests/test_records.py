"""Readings resolved in time: tables, values between samples, holes, means."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from scipy.interpolate import CubicSpline

import fv3d
from fv3d.errors import ReadingError
from fv3d.measured.records import RAMP, records

T = 0.02 * np.arange(100)


def long_table(time: np.ndarray = T, **changes: Any) -> pd.DataFrame:
    """Two places, u at both and w at the second."""
    frames = [pd.DataFrame({"time [s]": time, "name": f"wire {k}", "x [mm]": 100.0 * k,
                            "y [mm]": 0.0, "z [mm]": 5.0, "group": "rake", "u_std [m/s]": 0.01,
                            "u [m/s]": k + np.sin(5 * time), "w_std [m/s]": 0.02,
                            "w [m/s]": np.cos(5 * time) if k == 2 else np.nan})
              for k in (1, 2)]
    return pd.concat(frames, ignore_index=True).assign(**changes)


def test_records_of_a_long_table_in_any_order() -> None:
    for frame in (long_table(), long_table().sample(frac=1.0, random_state=1)):
        kept = records(fv3d.Readings(frame))
        order = np.argsort(kept.places.name)
        assert sorted(kept.places.name) == ["wire 1", "wire 2"]
        np.testing.assert_allclose(kept.places.point[order, 0], [0.1, 0.2])
        assert kept.places.n_components == 3 and not kept.places.timed
        value, share = kept.at(0.997)
        labels = [f"{kept.places.name[p]} {q}" for p, q in zip(
            kept.places.component_place, kept.places.component_label, strict=True)]
        wanted = {"wire 1 u": 1 + np.sin(4.985), "wire 2 u": 2 + np.sin(4.985),
                  "wire 2 w": np.cos(4.985)}
        np.testing.assert_allclose(value, [wanted[label] for label in labels], atol=2e-5)
        np.testing.assert_array_equal(share, 1.0)


def test_values_between_samples_are_interpolated_to_third_order() -> None:
    """Never held; halving the sampling interval divides the error by 8 at least (4 if linear)."""
    error = []
    for step in (0.1, 0.05):
        time = step * np.arange(int(4 / step))
        kept = records(fv3d.Readings(long_table(time)))
        ask = np.linspace(1.0, 3.0, 501)
        got = np.array([kept.at(t)[0][0] for t in ask])
        error.append(np.abs(got - 1 - np.sin(5 * ask)).max())
        spline = CubicSpline(time, 1 + np.sin(5 * time))(ask)  # SciPy's, of fourth order
        assert np.abs(got - spline).max() <= 1.5 * error[-1]
    assert error[0] / error[1] >= 7.5 and error[0] <= 0.02


def test_a_hole_switches_a_component_off_smoothly() -> None:
    """Only the component that lacks samples; one lost sample is bridged."""
    frame = long_table()
    lost = (frame["name"] == "wire 1") & frame["time [s]"].between(0.79, 1.21)
    bridged = (frame["name"] == "wire 2") & np.isclose(frame["time [s]"], 1.0)
    kept = records(fv3d.Readings(frame[~lost & ~bridged]))
    ask = np.linspace(-0.1, 2.1, 2201)
    share = np.array([kept.at(t)[1] for t in ask])
    value = np.array([kept.at(t)[0] for t in ask])
    inside = (ask > 0.7801) & (ask < 1.2199)
    assert not share[inside, 0].any() and not value[inside, 0].any()
    assert share[(ask > 0.2) & (ask < 0.6), 0].min() == 1.0
    assert share[(ask > 0.1) & (ask < 1.8), 1].min() == 1.0
    assert not share[(ask < 0) | (ask > T[-1] + 1e-9)].any()
    steepest = 1.5 / (RAMP * 0.02)  # of 3 x^2 - 2 x^3
    assert np.abs(np.diff(share, axis=0)).max() <= 1.01 * steepest * (ask[1] - ask[0])


def test_lost_samples_may_be_empty_cells() -> None:
    frame = long_table()
    lost = (frame["name"] == "wire 1") & frame["time [s]"].between(0.79, 1.21)
    empty = frame.copy()
    empty.loc[lost, "u [m/s]"] = np.nan
    one, two = (records(fv3d.Readings(f)) for f in (frame[~lost], empty))
    for t in np.linspace(0, 2, 41):
        np.testing.assert_array_equal(one.at(t), two.at(t))


def test_lost_values_are_holes_too() -> None:
    readings = fv3d.Readings(long_table())
    place_time = readings.time[readings.component_place]
    lost = (place_time > 0.79) & (place_time < 1.21)
    without = readings.with_values(np.where(lost, np.nan, readings.component_value))
    kept = records(without)
    assert not kept.at(1.0)[1].any() and np.all(kept.at(0.4)[1] == 1.0)
    assert np.isfinite(kept.places.component_value).all()
    np.testing.assert_allclose(without.mean().component_value[0],
                               readings.component_value[~lost & (readings.component_place < 100)
                                                        ].mean())
    assert isinstance(fv3d.Feedback(without, radius=0.1), fv3d.Feedback)
    nothing = readings.with_values(np.full(readings.n_components, np.nan))
    assert not records(nothing).at(1.0)[1].any() and np.isnan(nothing.mean().component_value).all()


def test_a_wide_table_says_the_same(tmp_path: Path) -> None:
    wide = pd.DataFrame({"time [ms]": 1e3 * T, "wire 1 u [cm/s]": 100 * (1 + np.sin(5 * T)),
                         "wire 2 u [cm/s]": 100 * (2 + np.sin(5 * T)),
                         "wire 2 w [m/s]": np.cos(5 * T)})
    places = pd.DataFrame({"name": ["wire 1", "wire 2"], "x [m]": [0.1, 0.2], "y [m]": 0.0,
                           "z [m]": 0.005, "group": "rake", "u_std [cm/s]": 1.0,
                           "w_std [m/s]": [np.nan, 0.02], "p_std [Pa]": 3.0})
    wide.to_csv(tmp_path / "record.csv", index=False)
    places.to_csv(tmp_path / "places.csv", index=False)
    read = fv3d.read_readings(tmp_path / "record.csv", places=tmp_path / "places.csv")
    one, two = records(read), records(fv3d.Readings(long_table()))
    assert read.groups == ("rake",) and one.places.name == two.places.name
    np.testing.assert_allclose(one.places.component_std, two.places.component_std)
    for t in (0.5, 0.777, 1.3):
        np.testing.assert_allclose(one.at(t), two.at(t), rtol=1e-12)


@pytest.mark.parametrize("changes, words", [
    ({"clock [s]": T}, "one column of times"), ({"wire 3 u [m/s]": T}, "'wire 3'"),
    ({"wire 1 U [m/s]": T}, "'U'"), ({"wire 2 u [cm/s]": T}, "two units"),
    ({"wire 2 u_std [m/s]": T}, "u_std")])
def test_wide_tables_that_cannot_be_used(changes: dict[str, Any], words: str) -> None:
    columns = {"time [s]": T, "wire 1 u [m/s]": T, "wire 2 w [m/s]": T} | changes
    if "clock [s]" in columns:
        del columns["time [s]"]
    places = pd.DataFrame({"name": ["wire 1", "wire 2"], "x [m]": [0.1, 0.2], "y [m]": 0.0,
                           "z [m]": 0.0, "u_std [m/s]": 1.0, "w_std [m/s]": 1.0})
    with pytest.raises(ReadingError) as caught:
        fv3d.read_readings(pd.DataFrame(columns), places=places)
    assert words in str(caught.value) and caught.value.remedy


def test_mean_and_its_uncertainty() -> None:
    """Markov process with correlation a: var(mean) = (1 + a) / (1 - a) / n (textbook)."""
    rng, n, a = np.random.default_rng(5), 3000, 0.9
    x = np.zeros(n)
    for k in range(1, n):
        x[k] = a * x[k - 1] + np.sqrt(1 - a * a) * rng.standard_normal()
    readings = fv3d.Readings(long_table(0.01 * np.arange(n)).assign(
        **{"u [m/s]": np.tile(5.0 + x, 2), "u_std [m/s]": 0.03}))
    mean = readings.mean()
    assert len(mean) == 2 and not mean.timed and mean.n_components == 3
    u = np.array(mean.component_label) == "u"
    np.testing.assert_allclose(mean.component_value[u], 5.0 + x.mean())
    expected = np.hypot(np.sqrt((1 + a) / (1 - a) / n), 0.03)
    np.testing.assert_allclose(mean.component_std[u], expected, rtol=0.25)
    assert fv3d.Readings(long_table()).mean().mean().n_components == 3
    few = fv3d.Readings(long_table(T[:5])).mean()
    assert few.component_std[0] >= np.std(np.sin(5 * T[:5]))


def test_a_record_stays_at_its_place() -> None:
    frame = long_table()
    frame.loc[7, "x [mm]"] = 101.0
    for use in (records, lambda r: r.mean()):
        with pytest.raises(ReadingError) as caught:
            use(fv3d.Readings(frame))
        assert "wire 1" in str(caught.value)


def test_another_clock() -> None:
    later = fv3d.Readings(long_table()).delayed(10.0)
    np.testing.assert_allclose(records(later).span, [10.0, 10.0 + T[-1]])
    for bad in (np.nan, "late"):
        with pytest.raises(ReadingError):
            later.delayed(bad)  # type: ignore[arg-type]
