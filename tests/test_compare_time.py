"""Judging runs in time: scores, competitors, what is refused."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest
from test_feedback_time import PLACES, fed, flow, record

import fv3d
from fv3d.errors import CaseError, ReadingError
from fv3d.measured.compare_time import _carried, _fit_stream
from fv3d.measured.records import records

STREAM = 0.8


def wave(x: np.ndarray, t: Any) -> Any:
    """A pattern that is carried along x at 0.8 m/s, strength falling across it."""
    return 1.0 + 0.3 * (1 - 0.5 * x[1]) * np.sin(9.0 * (x[0] - STREAM * t))


def rake(points: Any, time: np.ndarray, name: str) -> fv3d.Readings:
    return fv3d.Readings(pd.DataFrame([
        {"time [s]": t, "name": f"{name} {k}", "group": name, "x [m]": x[0], "y [m]": x[1],
         "z [m]": x[2], "u [m/s]": wave(np.array(x), t), "u_std [m/s]": 0.01}
        for k, x in enumerate(points) for t in time]))


FED = [(0.3, 0.3, 0.5), (0.3, 0.7, 0.5), (0.9, 0.5, 0.5), (0.6, 0.2, 0.5), (0.6, 0.8, 0.5)]
KEPT = [(0.45, 0.5, 0.5), (0.75, 0.4, 0.5)]


def test_the_stream_is_found_from_the_fed_records_alone() -> None:
    time = np.arange(0.0, 6.0, 0.02)
    known, wanted = records(rake(FED, time, "fed")), records(rake(KEPT, time, "kept"))
    inside = time[(time > 1.5) & (time < 4.5)]
    speed, direction = _fit_stream(known, inside)
    np.testing.assert_allclose(direction, (1.0, 0.0, 0.0), atol=1e-12)
    assert speed == pytest.approx(STREAM, rel=0.06)  # the grid of speeds tried
    measured = np.column_stack([wave(np.array(x), inside) for x in KEPT])
    still, carried = (np.sqrt(np.mean((_carried(known, wanted.places, inside, s, direction)
                                       - measured) ** 2)) for s in (np.inf, speed))
    assert carried <= 0.25 * still and still > 0.1


def test_runs_and_competitors_stand_in_one_table() -> None:
    time = np.arange(-2.0, 6.0, 0.05)

    def truth(t: float) -> Any:
        return (0.6 + 0.2 * np.sin(4 * t), 0.0, 0.0)

    used = record(time, truth, places=PLACES[:2])
    withheld = record(time, truth, places=PLACES[2:])
    runs = [fed(flow("hex").case, law, start=flow("hex"), end_time=1.5, time_step=0.05,
                sources=[law] if law else [], monitors=[fv3d.ReadingMonitor(withheld, name="kept")])
            for law in (None, fv3d.Feedback(used, radius=0.3, gain=50.0))]
    found = fv3d.compare_in_time(runs, withheld, name="kept", fed=used, begin=0.5)
    assert list(found.scores) == ["transient", "guided", "mean of transient", "interpolation",
                                  "carried by a stream"]
    off = runs[1].series["kept"].computed - runs[1].series["kept"].measured
    off = off[runs[1].series["kept"].time >= 0.5]
    score = found.scores["guided"]
    assert score.rms == pytest.approx(np.sqrt(np.mean(off ** 2)))
    assert score.in_std == pytest.approx(score.rms / 0.01) and score.samples == off.size
    assert score.by_group == {"probe 0": pytest.approx(score.rms)} and 0 < score.std < score.rms
    assert found.scores["interpolation"].rms <= 1e-3  # one velocity everywhere
    assert "guided" in str(found) and "stream of" in str(found)
    alone = fv3d.compare_in_time(runs[:1], withheld, name="kept")
    assert np.isnan(alone.stream) and len(alone.scores) == 2


def test_comparisons_in_time_that_cannot_be() -> None:
    time = np.arange(-1.0, 3.0, 0.05)
    withheld = record(time, lambda t: (0.5, 0.0, 0.0), places=PLACES[2:])
    run = fed(flow("hex").case, None, sources=[], start=flow("hex"), end_time=0.2,  # type: ignore[arg-type]
              monitors=[fv3d.ReadingMonitor(withheld, name="kept")])
    compare = fv3d.compare_in_time
    with pytest.raises(CaseError, match="no run"):
        compare([], withheld, name="kept")
    with pytest.raises(CaseError, match="did not watch"):
        compare([run], withheld, name="other")
    with pytest.raises(CaseError, match="must be a run"):
        compare([withheld], withheld, name="kept")
    with pytest.raises(ReadingError, match="nothing to compare"):
        compare([run], withheld, name="kept", begin=9.0)
    with pytest.raises(ReadingError, match="was fed"):
        compare([run], withheld, name="kept", fed=withheld)
    steady = fv3d.solve_steady(flow("hex").case, tolerance=1e-3, max_iterations=99, progress=False,
                               monitors=[fv3d.ReadingMonitor(withheld, name="kept")])
    with pytest.raises(CaseError, match="no run in time"):
        compare([steady], withheld, name="kept")
