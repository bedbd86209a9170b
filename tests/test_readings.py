"""Readings: the door (units, refusals), the arrays inside, placing, splitting, predicting."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest
import scipy.constants
from scipy.spatial.transform import Rotation

from fv3d.errors import ReadingError
from fv3d.measured.readings import (
    Readings,
    linearised_direction,
    observe,
    predict,
    read_readings,
)
from fv3d.measured.units import LENGTH, PRESSURE, TIME, VELOCITY

HEADER = "x [mm], y [mm], z [mm], u [m/s], u_std [m/s], name, group"


def write(tmp_path, text):
    path = tmp_path / "rig.csv"
    path.write_text(text, encoding="utf-8")
    return path


def rich_frame():
    return pd.DataFrame({
        "name": ["a", "b", "c", "d"], "group": ["rake 1", "rake 1", "rake 2", "wall"],
        "x [mm]": [10.0, 20.0, 30.0, 40.0], "y [mm]": [1.0, 2.0, 3.0, 4.0],
        "z [mm]": [5.0, -5.0, 2.5, 0.0], "u [m/s]": [1.0, 1.5, np.nan, np.nan],
        "u_std [cm/s]": [2.0, 3.0, np.nan, np.nan], "v [m/s]": [0.1, np.nan, np.nan, np.nan],
        "v_std [m/s]": [0.01, np.nan, np.nan, np.nan], "speed [m/s]": [np.nan, np.nan, 2.0, np.nan],
        "speed_std [m/s]": [np.nan, np.nan, 0.05, np.nan],
        "along [m/s]": [np.nan, 0.7, np.nan, np.nan],
        "along_std [m/s]": [np.nan, 0.02, np.nan, np.nan],
        "nx": [np.nan, 3.0, np.nan, np.nan], "ny": [np.nan, 4.0, np.nan, np.nan],
        "nz": [np.nan, 0.0, np.nan, np.nan], "p [hPa]": [np.nan, np.nan, np.nan, 0.12],
        "p_std [Pa]": [np.nan, np.nan, np.nan, 0.3]})


def test_arrays_of_a_mixed_table():
    readings = Readings(rich_frame())
    assert len(readings) == 4 and readings.n_components == 6
    assert readings.groups == ("rake 1", "rake 2", "wall")
    np.testing.assert_allclose(readings.point[1], [0.02, 0.002, -0.005], rtol=1e-15)
    assert readings.component_label == ("u", "v", "u", "along", "speed", "p")
    np.testing.assert_array_equal(readings.component_place, [0, 0, 1, 1, 2, 3])
    np.testing.assert_array_equal(readings.component_quantity, [0, 0, 0, 0, 1, 2])
    np.testing.assert_allclose(readings.component_direction[3], [0.6, 0.8, 0.0], rtol=1e-15)
    assert np.isnan(readings.component_direction[4:]).all()
    np.testing.assert_allclose(readings.component_value, [1, 0.1, 1.5, 0.7, 2.0, 12.0])
    np.testing.assert_allclose(readings.component_std, [0.02, 0.01, 0.03, 0.02, 0.05, 0.3])
    assert readings.component_place.dtype == np.int32 and np.isnan(readings.time).all()
    with pytest.raises(ValueError):
        readings.component_value[0] = 3.0


def test_file_and_frame_agree(tmp_path):
    frame = rich_frame()
    path = tmp_path / "rig.csv"
    frame.to_csv(path, index=False)
    one, two = Readings(frame), read_readings(path)
    for key in ("point", "component_value", "component_std", "component_direction"):
        np.testing.assert_array_equal(getattr(one, key), getattr(two, key))
    assert one.name == two.name and one.group == two.group


def test_semicolons_decimal_commas_comments_and_defaults(tmp_path):
    readings = read_readings(write(tmp_path, (
        "\ufeff# rig of March, invented\nx [cm];y [cm];z [cm];u [m/s];u_std [m/s]\n"
        "1,5;0;0;2,25;0,1\n\n;;;;\n3;0;0;1e-1;0,1\n")))
    assert readings.name == readings.group == ("reading 1", "reading 2")
    np.testing.assert_allclose(readings.point[:, 0], [0.015, 0.03])
    np.testing.assert_allclose(readings.component_value, [2.25, 0.1])


BAD_TABLES = {
    "missing unit": ("x, y [mm], z [mm], u [m/s], u_std [m/s]\n1,2,3,4,5", "column 'x'"),
    "unknown unit": ("x [mm], y [mm], z [mm], u [m/sec], u_std [m/s]\n1,2,3,4,5", "[m/s]?"),
    "wrong dimension": ("x [mm], y [mm], z [Pa], u [m/s], u_std [m/s]\n1,2,3,4,5", "[Pa]"),
    "misspelt column": ("x [mm], y [mm], z [mm], speeed [m/s], speed_std [m/s]\n1,2,3,4,5",
                        "Did you mean 'speed'?"),
    "capital": ("x [mm], y [mm], z [mm], U [m/s], u_std [m/s]\n1,2,3,4,5", "Did you mean 'u'?"),
    "no place": ("x [mm], y [mm], u [m/s], u_std [m/s]\n1,2,4,5", "no column z"),
    "no quantity": ("x [mm], y [mm], z [mm], name\n1,2,3,a", "no measured quantity"),
    "no std column": ("x [mm], y [mm], z [mm], u [m/s]\n1,2,3,4", "u_std"),
    "std alone": ("x [mm], y [mm], z [mm], u [m/s], u_std [m/s], v_std [m/s]\n1,2,3,4,5,6",
                  "no column 'v'"),
    "column twice": ("x [mm], x [m], y [mm], z [mm], u [m/s], u_std [m/s]\n1,1,2,3,4,5", "twice"),
    "unit on a name": ("x [mm], y [mm], z [mm], u [m/s], u_std [m/s], name [m]\n1,2,3,4,5,a",
                       "has a unit"),
    "direction without along": ("x [mm], y [mm], z [mm], u [m/s], u_std [m/s], nx, ny, nz\n"
                                "1,2,3,4,5,1,0,0", "go together"),
    "along without direction": ("x [mm], y [mm], z [mm], along [m/s], along_std [m/s]\n1,2,3,4,5",
                                "go together"),
    "zero direction": ("x [mm], y [mm], z [mm], along [m/s], along_std [m/s], nx, ny, nz\n"
                       "1,2,3,4,5,0,0,0", "zero"),
    "half a direction": ("x [mm], y [mm], z [mm], along [m/s], along_std [m/s], nx, ny, nz\n"
                         "1,2,3,4,5,1,,0", "column 'ny'"),
    "empty file": ("", "empty"),
    "no rows": (HEADER + "\n", "no readings"),
    "empty std": (HEADER + "\n1,2,3,4,,a,g", "column 'u_std'"),
    "zero std": (HEADER + "\n1,2,3,4,0.1,a,g\n1,2,3,4,0,b,g", "row 2 ('b')"),
    "negative std": (HEADER + "\n1,2,3,4,-1,a,g", "not positive"),
    "NaN text": (HEADER + "\n1,2,3,nan,1,a,g", "column 'u'"),
    "infinite": (HEADER + "\n1,2,3,inf,1,a,g", "not a finite number"),
    "word": (HEADER + "\n1,2,3,four,1,a,g", "'four'"),
    "two names alike": (HEADER + "\n1,2,3,4,1,a,g\n2,2,3,4,1,a,g", "also in row 1"),
    "missing place": (HEADER + "\n1,,3,4,1,a,g", "column 'y'"),
    "no value": (HEADER + "\n1,2,3,,1,a,g", "carries no value"),
    "ragged row": (HEADER + "\n1,2,3,4,1,a", "6 cells, 7 columns"),
    "quotation mark": (HEADER + '\n1,2,3,4,1,"a,g', "quotation"),
    "negative speed": ("x [mm], y [mm], z [mm], speed [m/s], speed_std [m/s]\n1,2,3,-4,5",
                       "negative"),
    "some times": ("x [mm], y [mm], z [mm], u [m/s], u_std [m/s], time [s]\n1,2,3,4,5,0\n"
                   "2,2,3,4,5,", "no time"),
}


@pytest.mark.parametrize("text, says", BAD_TABLES.values(), ids=BAD_TABLES)
def test_bad_table_is_refused_in_words(tmp_path, text, says):
    with pytest.raises(ReadingError) as caught:
        read_readings(write(tmp_path, text))
    error = caught.value
    assert says in str(error)
    assert error.what.endswith(".") and error.where and error.remedy and error.got is not None


def test_bad_sources_are_refused(tmp_path):
    with pytest.raises(ReadingError, match="cannot be opened"):
        read_readings(tmp_path / "absent.csv")
    (tmp_path / "bytes.csv").write_bytes(b"x [mm]\xff\xfe\x00")
    with pytest.raises(ReadingError, match="UTF-8"):
        read_readings(tmp_path / "bytes.csv")
    with pytest.raises(ReadingError, match="file or a DataFrame"):
        Readings([1.0, 2.0])
    with pytest.raises(ReadingError, match="finite"):
        Readings(rich_frame().assign(**{"u [m/s]": [np.inf, 1, 1, 1]}))


@pytest.mark.parametrize("dimension, unit, value", [
    (LENGTH, "mm", scipy.constants.milli), (LENGTH, "cm", scipy.constants.centi),
    (LENGTH, "um", scipy.constants.micro),
    (LENGTH, "in", scipy.constants.inch), (LENGTH, "ft", scipy.constants.foot),
    (VELOCITY, "km/h", scipy.constants.kmh), (VELOCITY, "ft/s", scipy.constants.foot),
    (VELOCITY, "in/s", scipy.constants.inch),
    (PRESSURE, "mbar", scipy.constants.bar / 1000), (PRESSURE, "bar", scipy.constants.bar),
    (PRESSURE, "hPa", scipy.constants.hecto), (PRESSURE, "kPa", scipy.constants.kilo),
    (PRESSURE, "mmH2O", scipy.constants.g), (PRESSURE, "psi", scipy.constants.psi),
    (PRESSURE, "inH2O", scipy.constants.g * scipy.constants.inch * 1000),
    (TIME, "ms", scipy.constants.milli), (TIME, "min", scipy.constants.minute)])
def test_units_against_scipy_constants(dimension, unit, value):
    assert dimension.factor(unit, where="") == pytest.approx(value, rel=1e-12)


def test_millimetre_of_mercury_against_scipy_constants():
    # The conventional mmHg and the torr (atm/760) differ by 1.4e-7 by definition.
    assert PRESSURE.factor("mmHg", where="") == pytest.approx(scipy.constants.torr, rel=2e-7)


def test_shuffled_rows_and_other_units_give_the_same_arrays():
    frame = rich_frame()
    other = frame.sample(frac=1.0, random_state=3).rename(columns={
        "x [mm]": "x [m]", "y [mm]": "y [in]", "u [m/s]": "u [km/h]", "p [hPa]": "p [mmH2O]"})
    other["x [m]"] /= 1000
    other["y [in]"] /= 25.4
    other["u [km/h]"] *= 3.6
    other["p [mmH2O]"] *= 100 / 9.80665
    one, two = Readings(frame), Readings(other)
    order = np.argsort(two.name)
    np.testing.assert_allclose(two.point[order], one.point, rtol=1e-12)
    keys = [two.name[k] for k in two.component_place]
    order = np.argsort(keys, kind="stable")
    for key in ("component_value", "component_std", "component_direction", "component_quantity"):
        np.testing.assert_allclose(getattr(two, key)[order], getattr(one, key), rtol=1e-12)


def test_split_by_group():
    readings = Readings(rich_frame())
    used, withheld = readings.split(withheld=["rake 1"])
    assert used.groups == ("rake 2", "wall") and withheld.groups == ("rake 1",)
    np.testing.assert_array_equal(used.component_place, [0, 1])
    np.testing.assert_allclose(withheld.component_value, [1, 0.1, 1.5, 0.7])
    with pytest.raises(ReadingError, match="rake 1, rake 2, wall"):
        readings.split(withheld=["rake 9"])
    for nothing in ([], ["rake 1", "rake 2", "wall"]):
        with pytest.raises(ReadingError, match="Both used and withheld"):
            readings.split(withheld=nothing)


def test_velocity_only_drops_the_tap():
    readings = Readings(rich_frame()).velocity_only()
    assert len(readings) == 3 and "p" not in readings.component_label


def test_quarter_turn_names_the_axes_anew():
    readings = Readings(rich_frame()).placed(
        rotation=Rotation.from_euler("z", 90, degrees=True), shift=(1.0, 0.0, 0.0), scale=2.0)
    assert readings.component_label[:2] == ("v", "u")
    np.testing.assert_allclose(readings.component_value[:2], [1.0, -0.1])
    np.testing.assert_allclose(readings.point[0], [1.0 - 0.002, 0.02, 0.01], atol=1e-15)
    np.testing.assert_allclose(readings.component_direction[3], [-0.8, 0.6, 0], atol=1e-15)


def test_placing_turns_with_the_flow():
    """What is read does not change when rig, flow and instruments turn together."""
    readings = Readings(rich_frame())
    turn = Rotation.from_rotvec([0.3, -0.7, 0.4])
    rng = np.random.default_rng(5)
    velocity, pressure = rng.normal(size=(4, 3)), rng.normal(size=4)
    before = predict(readings, velocity, pressure=pressure) - readings.component_value
    placed = readings.placed(rotation=turn.as_matrix())
    after = predict(placed, turn.apply(velocity), pressure=pressure) - placed.component_value
    np.testing.assert_allclose(after, before, atol=1e-14)
    back = placed.placed(rotation=turn.inv())
    np.testing.assert_allclose(back.point, readings.point, atol=1e-15)
    assert back.component_label == readings.component_label


@pytest.mark.parametrize("bad", [
    {"rotation": np.eye(2)}, {"rotation": np.diag([1.0, 1.0, -1.0])},
    {"rotation": 2 * np.eye(3)}, {"rotation": "z"}, {"shift": (1.0, 2.0)},
    {"shift": (np.nan, 0, 0)}, {"scale": 0.0}, {"scale": -1.0}])
def test_bad_placing_is_refused(bad):
    with pytest.raises(ReadingError):
        Readings(rich_frame()).placed(**bad)


def test_linearised_direction_is_the_derivative():
    readings = Readings(rich_frame())
    rng = np.random.default_rng(2)
    velocity, change = rng.normal(size=(4, 3)), rng.normal(size=(4, 3))
    pressure = np.zeros(4)
    step = 1e-6
    difference = (predict(readings, velocity + step * change, pressure=pressure)
                  - predict(readings, velocity - step * change, pressure=pressure)) / (2 * step)
    along = linearised_direction(readings, velocity)
    expected = np.einsum("ij,ij->i", along, change[readings.component_place])
    np.testing.assert_allclose(difference, expected, atol=1e-8)
    assert not linearised_direction(readings, np.zeros((4, 3)))[4:].any()


def test_observe_reads_the_sampled_field():
    readings = Readings(rich_frame())

    def sample(points):
        velocity = np.stack([points[:, 0], 2 * points[:, 1], 0 * points[:, 0]], axis=1)
        return SimpleNamespace(velocity=velocity, pressure=points[:, 0] * 10)
    read = observe(SimpleNamespace(sample=sample), readings)
    np.testing.assert_allclose(read, [0.01, 0.002, 0.02, 0.6 * 0.02 + 0.8 * 0.004,
                                      np.hypot(0.03, 0.006), 0.4])


def test_with_values_and_names_at_several_times(tmp_path):
    text = ("x [mm], y [mm], z [mm], u [m/s], u_std [m/s], time [ms], name\n"
            "1,2,3,4,5,0,a\n1,2,3,4,5,10,a\n")
    readings = read_readings(write(tmp_path, text))
    np.testing.assert_allclose(readings.time, [0, 0.01])
    lost = readings.with_values([np.nan, 1.0])
    assert np.isnan(lost.component_value[0]) and readings.component_value[0] == 4
    with pytest.raises(ReadingError):
        readings.with_values([1.0])
    with pytest.raises(ReadingError, match="Two readings"):
        read_readings(write(tmp_path, text.replace("10,a", "0,a")))


def test_sheet_and_frame():
    readings = Readings(rich_frame())
    sheet = str(readings)
    assert "4 places, 6 components, 3 groups" in sheet
    assert "rake 1" in sheet and "typical std 0.025 m/s" in sheet
    assert max(map(len, sheet.splitlines())) <= 80
    frame = readings.frame()
    assert len(frame) == 6 and list(frame["quantity"][:2]) == ["u", "v"]
    np.testing.assert_allclose(frame["value"], readings.component_value)
    assert frame["unit"].iloc[-1] == "Pa"
