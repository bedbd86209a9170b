"""Comparison at withheld readings: figures checked by hand and against plain formulas."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest
from scipy.interpolate import RBFInterpolator
from scipy.spatial.distance import cdist
from scipy.spatial.transform import Rotation

from fv3d.errors import ReadingError
from fv3d.measured.compare import compare, estimate, nearest_reading, spatial_interpolation
from fv3d.measured.readings import Readings


def uniform(name, velocity, pressure=0.0):
    def sample(points):
        return SimpleNamespace(velocity=np.tile(velocity, (len(points), 1)),
                               pressure=np.full(len(points), pressure))
    return SimpleNamespace(name=name, sample=sample)


def rig(n=12, seed=1):
    """Invented readings of a linear flow, three rakes."""
    rng = np.random.default_rng(seed)
    point = rng.uniform(-0.1, 0.1, size=(n, 3))
    frame = pd.DataFrame(point, columns=["x [m]", "y [m]", "z [m]"])
    for axis, k in (("u", 0), ("v", 1), ("w", 2)):
        frame[f"{axis} [m/s]"] = (k + 1) + 3.0 * point[:, k]
        frame[f"{axis}_std [m/s]"] = 0.1
    frame["group"] = [f"rake {k % 3}" for k in range(n)]
    return frame


def test_figures_of_a_hand_computed_table():
    frame = pd.DataFrame({"x [m]": [0.0, 1.0], "y [m]": 0.0, "z [m]": 0.0, "group": "rake",
                          "u [m/s]": [1.0, 2.0], "u_std [m/s]": [0.5, 0.25],
                          "p [Pa]": [3.0, np.nan], "p_std [Pa]": 1.0})
    table = compare([uniform("plain", (1.5, 0, 0), 5.0)], Readings(frame))
    u, p = table.frame.itertuples()
    assert (u.count, u.bias, u.rms, p.count, p.bias, p.rms, p.rms_std) == (2, 0, 0.5, 1, 2, 2, 2)
    assert u.rms_std == pytest.approx(np.sqrt((1 + 4) / 2))
    assert table.rms("plain") == 0.5 and table.rms_std("plain", unit="Pa") == 2
    with pytest.raises(ReadingError, match="plain"):
        table.rms("guided")


def test_lost_values_change_nothing_and_are_counted():
    used, withheld = Readings(rig()).split(withheld=["rake 2"])
    run = uniform("plain", (1.0, 2.0, 3.0))
    lost = withheld.with_values(np.where(np.arange(12) < 9, withheld.component_value, np.nan))
    table = compare([run], lost, fed=used)
    fewer = withheld.select(np.arange(4) < 3)
    np.testing.assert_allclose(table.frame.rms, compare([run], fewer, fed=used).frame.rms)
    assert table.skipped == 3 and "3 withheld component(s)" in str(table)
    with pytest.raises(ReadingError, match="nothing to compare"):
        compare([run], withheld.with_values(np.full(12, np.nan)))


def test_sheet_is_narrow_and_complete():
    used, withheld = Readings(rig()).split(withheld=["rake 1", "rake 2"])
    text = str(compare([uniform("plain", (1, 2, 3)), uniform("guided", (1, 2, 3.1))], withheld,
                       fed=used))
    for word in ("plain", "guided", "interpolation", "nearest reading", "rake 2", "u [m/s]",
                 "velocity", "all"):
        assert word in text
    assert max(map(len, text.splitlines())) <= 80


def left_out(points, values):
    """Summed squares of the misfits at points left out one by one, each by a system of its own."""
    total = 0.0
    for k in range(len(points)):
        rest = np.delete(np.arange(len(points)), k)
        matrix = np.ones((len(rest) + 1, len(rest) + 1))
        matrix[:-1, :-1] = -cdist(points[rest], points[rest])
        matrix[-1, -1] = 0.0
        strength = np.linalg.solve(matrix, np.append(values[rest], 0.0))
        found = -np.linalg.norm(points[rest] - points[k], axis=1) @ strength[:-1] + strength[-1]
        total += (found - values[k]) ** 2
    return total


def test_the_unit_of_length_is_the_one_that_foretells_better():
    """A stretched sheet of points: measured by its spread, a field along it is met better."""
    rng = np.random.default_rng(5)
    points = rng.random((30, 3)) * [10.0, 1.0, 0.1]
    where = rng.random((50, 3)) * [10.0, 1.0, 0.1]

    def field(x):
        return np.sin(3.0 * x[:, 1]) + 20.0 * x[:, 2] ** 2 + 0.05 * x[:, 0]
    found = spatial_interpolation(points, field(points), where=where)
    rms = np.sqrt(np.mean((found - field(where)) ** 2))
    alike = RBFInterpolator(points, field(points), kernel="linear", degree=0)(where)
    assert rms < 0.7 * np.sqrt(np.mean((alike - field(where)) ** 2))


def test_interpolation_against_the_plain_linear_system():
    """Reference: the dense interpolation conditions with a constant, solved directly."""
    rng = np.random.default_rng(4)
    points, where, values = rng.normal(size=(9, 3)), rng.normal(size=(5, 3)), rng.normal(size=9)
    matrix = np.ones((10, 10))
    matrix[:9, :9] = -cdist(points, points)
    matrix[9, 9] = 0.0
    strength = np.linalg.solve(matrix, np.append(values, 0.0))
    expected = -cdist(where, points) @ strength[:9] + strength[9]
    spread = np.linalg.svd(points - points.mean(axis=0))[1]
    axes = np.linalg.svd(points - points.mean(axis=0))[2].T / spread
    matrix[:9, :9] = -cdist(points @ axes, points @ axes)
    strength = np.linalg.solve(matrix, np.append(values, 0.0))
    other = -cdist(where @ axes, points @ axes) @ strength[:9] + strength[9]
    wanted = other if left_out(points @ axes, values) < left_out(points, values) else expected
    np.testing.assert_allclose(spatial_interpolation(points, values, where=where), wanted)
    np.testing.assert_allclose(spatial_interpolation(points, values, where=points), values,
                               atol=1e-12)


def test_few_points_and_repeated_places():
    one = np.zeros((1, 3))
    where = np.array([[1.0, 0, 0], [0.25, 0, 0]])
    np.testing.assert_array_equal(spatial_interpolation(one, np.array([4.0]), where=where), 4.0)
    two = np.array([[0.0, 0, 0], [1.0, 0, 0]])
    np.testing.assert_allclose(spatial_interpolation(two, np.array([0.0, 4.0]), where=where),
                               [4.0, 1.0])
    thrice = np.array([[0.0, 0, 0], [1.0, 0, 0], [1.0, 0, 0]])
    np.testing.assert_allclose(
        spatial_interpolation(thrice, np.array([0.0, 3.0, 5.0]), where=where), [4.0, 1.0])
    np.testing.assert_allclose(nearest_reading(thrice, np.array([0.0, 3.0, 5.0]), where=where),
                               [4.0, 0.0])


def test_totals_over_unlike_counts_say_so():
    """Only u is fed: interpolation has nothing to say about v and w."""
    used, withheld = Readings(rig()).split(withheld=["rake 1"])
    only_u = used.select(np.ones(len(used), dtype=bool),
                         components=np.array(used.component_label) == "u")
    run = uniform("plain", (1, 2, 3))
    text = str(compare([run], withheld, fed=only_u))
    assert "totals [m/s] rest on unlike counts (4 to 12)" in text
    assert max(map(len, text.splitlines())) <= 80
    assert "unlike" not in str(compare([run], withheld, fed=used))


def test_estimates_do_not_depend_on_the_axes():
    readings = Readings(rig())
    turn = Rotation.from_rotvec([0.5, 0.2, -0.8])
    results = []
    for placed in (readings, readings.placed(rotation=turn, shift=(1, 2, 3), scale=4.0)):
        used, withheld = placed.split(withheld=["rake 0"])
        results.append(estimate(used, withheld, estimator=spatial_interpolation))
    np.testing.assert_allclose(results[1], results[0], rtol=1e-9)


def test_other_kinds_are_estimated_from_whole_vectors_or_not_at_all():
    frame = rig()
    point = {"x [m]": [0.0], "y [m]": [0.0], "z [m]": [0.0]}
    wanted = Readings(pd.DataFrame(point | {
        "speed [m/s]": [1.0], "speed_std [m/s]": [0.1], "along [m/s]": [1.0],
        "along_std [m/s]": [0.1], "nx": [1.0], "ny": [1.0], "nz": [0.0],
        "p [Pa]": [0.0], "p_std [Pa]": [1.0]}))
    fed = Readings(frame)
    along, speed, pressure = estimate(fed, wanted, estimator=nearest_reading)
    near = np.argmin(np.linalg.norm(fed.point, axis=1))
    vector = fed.component_value.reshape(-1, 3)[near]
    assert along == pytest.approx((vector[0] + vector[1]) / np.sqrt(2))
    assert speed == pytest.approx(np.linalg.norm(vector)) and np.isnan(pressure)
    only_u = Readings(frame.drop(columns=["v [m/s]", "v_std [m/s]", "w [m/s]", "w_std [m/s]"]))
    assert np.isnan(estimate(only_u, wanted, estimator=nearest_reading)).all()
    assert " -" in str(compare([], wanted, fed=only_u))


def test_fed_and_withheld_must_differ():
    readings = Readings(rig())
    with pytest.raises(ReadingError, match="also fed"):
        compare([], readings, fed=readings)
