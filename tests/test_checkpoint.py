"""Checkpoints: a run goes on to the last bit, and nothing written is ever lost."""

from __future__ import annotations

import dataclasses
import io
import json
import random
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from made import duct
from test_feedback_time import ALWAYS, PLACES, record

import fv3d
from fv3d.errors import CaseError, FileError, Fv3dWarning
from fv3d.flow import checkpoint as checkpoints
from fv3d.flow.packing import Packer, unpack
from fv3d.mesh.generate import box

CASE = duct(box((0, 0, 0), (2, 1, 1), cells=(7, 5, 5), skew=0.2), viscosity=0.01)
TIMED = record(ALWAYS, lambda t: (0.4 + 0.2 * np.sin(3 * t), 0.1, 0.0), places=PLACES)
MEAN = TIMED.mean()


def monitors() -> list[Any]:
    return [fv3d.PointMonitor(PLACES, name="points"), fv3d.ForceMonitor("y_min", name="wall")]


def steady(steps: int, law: bool, **options: Any) -> fv3d.Run:
    sources = [fv3d.Feedback(MEAN, radius=0.2, gain=20.0)] if law else []
    with pytest.warns(Fv3dWarning, match="iteration limit"):
        return fv3d.solve_steady(CASE, tolerance=1e-30, max_iterations=steps, sources=sources,
                                 monitors=monitors(), progress=False, **options)


def pseudo(steps: int, law: bool, **options: Any) -> fv3d.Run:
    with pytest.warns(Fv3dWarning, match="iteration limit"):
        return fv3d.solve_pseudo_transient(CASE, tolerance=1e-30, max_iterations=steps,
                                           pseudo_step=fv3d.LocalStep(4.0, ramp=0.5),
                                           monitors=monitors(), progress=False, **options)


def transient(steps: int, law: bool, **options: Any) -> fv3d.Run:
    sources = [fv3d.Feedback(TIMED, radius=0.2, gain=20.0)] if law else []
    return fv3d.solve_transient(CASE, time_step=0.02, end_time=0.02 * steps, sources=sources,
                                monitors=monitors(), progress=False, **options)


def varied(steps: int, law: bool, **options: Any) -> fv3d.Run:
    """Steps from a Courant number."""
    return fv3d.solve_transient(CASE, time_step=fv3d.CourantStep(0.5, first=0.001),
                                end_time=0.01 * steps, monitors=monitors(), progress=False,
                                **options)


def same(one: fv3d.Run, other: fv3d.Run) -> None:
    for name in ("velocity", "pressure", "mass_flux", "artificial_force"):
        np.testing.assert_array_equal(getattr(one, name), getattr(other, name), err_msg=name)
    for name, column in one.history.items():
        np.testing.assert_array_equal(column, other.history[name], err_msg=name)
    for name, series in one.series.items():
        np.testing.assert_array_equal(series.iteration, other.series[name].iteration)
        for column, values in series.columns.items():
            np.testing.assert_array_equal(values, other.series[name].columns[column])


@pytest.mark.parametrize("solve, law, whole, part", [
    (steady, False, 200, 100), (steady, True, 200, 100), (pseudo, False, 60, 25),
    (transient, False, 200, 100), (transient, True, 200, 100), (varied, False, 60, 30)],
    ids=["steady", "steady guided", "pseudo", "transient", "transient guided", "varied"])
def test_a_run_goes_on_to_the_last_bit(solve: Any, law: bool, whole: int, part: int,
                                       tmp_path: Path) -> None:
    """run(200) = run(100) + resume + run(100)."""
    path = tmp_path / "run.checkpoint"
    if solve is varied:  # the last step of a run is cut to its end: take a checkpoint before it
        wanted = varied(whole, law, checkpoint=fv3d.Checkpoint(path, every=17))
        every = fv3d.Checkpoint(tmp_path / "other", every=17)
        count = len(wanted.history["time"])
        with pytest.MonkeyPatch.context() as patch:
            patch.setattr(checkpoints.Storing, "after", _only(17, checkpoints.Storing.after))
            varied(whole, law, checkpoint=every)
        path = tmp_path / "other"
        assert 17 < count
    else:
        solve(part, law, checkpoint=fv3d.Checkpoint(path, every=1000))
        wanted = solve(whole, law)
    stored = fv3d.read_checkpoint(path)
    again = solve(whole, law, start=stored)
    same(wanted, again)
    assert again.seconds > 0 and again.outcome.name == wanted.outcome.name
    if not law:
        assert "run 'plain'" in str(stored) or "run 'transient'" in str(stored)


def _only(count: int, original: Any) -> Any:
    def after(self: Any, records: Any, *rest: Any, **options: Any) -> None:
        if len(records) == count:
            original(self, records, *rest, **options)
    return after


def test_the_hierarchy_had_been_refreshed_in_that_test() -> None:
    """Else the tests above would not see a hierarchy that is built again wrongly."""
    from fv3d.flow.coupling import make_workspace, step
    from fv3d.flow.problem import make_problem
    from fv3d.flow.start import start_state
    problem = make_problem(CASE)
    workspace = make_workspace(problem)
    state = start_state(problem, None, workspace)
    for _ in range(100):
        state, _ = step(problem, state, workspace)
    assert workspace.prepared is not None
    first, newest = workspace.prepared.built_from
    assert first is not newest or workspace.setups == 1


def test_interrupted_runs_are_stored(tmp_path: Path) -> None:
    """After Ctrl-C the step is finished, seen by the monitors and stored."""
    class Stop:
        name = "stop"

        def see(self, problem: Any, state: Any, record: Any) -> None:
            if record.iteration == 30:
                signal.raise_signal(signal.SIGINT)

    path = tmp_path / "run"
    with pytest.warns(Fv3dWarning, match="interrupted"):
        run = fv3d.solve_steady(CASE, tolerance=1e-30, max_iterations=100, progress=False,
                                monitors=[Stop(), *monitors()], checkpoint=fv3d.Checkpoint(path))
    assert len(run.history["iteration"]) == 31 == len(run.series["points"].iteration)
    same(steady(60, False), steady(60, False, start=fv3d.read_checkpoint(path)))


def test_minutes(tmp_path: Path) -> None:
    path = tmp_path / "run"
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(checkpoints.Storing, "after", _not_at_the_end(checkpoints.Storing.after))
        transient(5, False, checkpoint=fv3d.Checkpoint(path, minutes=1e-9))
        assert fv3d.read_checkpoint(path).about["count"] == 4
        transient(5, False, checkpoint=fv3d.Checkpoint(tmp_path / "late", minutes=10.0))
    assert not (tmp_path / "late").exists()


def _not_at_the_end(original: Any) -> Any:
    def after(self: Any, *rest: Any, end: bool) -> None:
        if not end:
            original(self, *rest)
    return after


@pytest.fixture(scope="module")
def written(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("checkpoint") / "run"
    transient(5, True, checkpoint=fv3d.Checkpoint(path, every=5))
    return path


def refused(kind: Any, action: Any, words: str) -> None:
    with pytest.raises(kind) as caught:
        action()
    assert words in str(caught.value) and caught.value.where and caught.value.remedy


def test_damaged_files_are_refused(written: Path, tmp_path: Path) -> None:
    whole = written.read_bytes()
    bad = tmp_path / "bad"
    refused(FileError, lambda: fv3d.read_checkpoint(bad), "no checkpoint of this name")
    rng = random.Random(1)
    cuts = [0, 1, 20, len(whole) - 1, *(rng.randrange(len(whole)) for _ in range(20))]
    for cut in cuts:
        bad.write_bytes(whole[:cut])
        refused(FileError, lambda: fv3d.read_checkpoint(bad), "no whole checkpoint")
    spoilt = 0
    for _ in range(40):
        place = rng.randrange(len(whole))
        bad.write_bytes(whole[:place] + bytes([whole[place] ^ 0x55]) + whole[place + 1:])
        try:
            stored = fv3d.read_checkpoint(bad)
        except FileError:
            spoilt += 1
        else:  # a byte of the archive's book-keeping that does not count
            assert len(stored.arrays) == len(fv3d.read_checkpoint(written).arrays)
    assert spoilt >= 35
    np.savez(bad.with_suffix(".npz"), velocity=np.zeros(3))
    refused(FileError, lambda: fv3d.read_checkpoint(bad.with_suffix(".npz")), "no whole")


def rewritten(written: Path, target: Path, **changes: Any) -> Path:
    """The same checkpoint with some entries replaced, as somebody might do with NumPy."""
    with np.load(written) as archive:
        entries = {name: archive[name] for name in archive.files}
    buffer = io.BytesIO()
    np.savez(buffer, **(entries | changes))
    target.write_bytes(buffer.getvalue())
    return target


def test_tampered_and_foreign_files_are_refused(written: Path, tmp_path: Path) -> None:
    with np.load(written) as archive:
        about, array = json.loads(str(archive["about"])), archive["array_0"]
    changed = rewritten(written, tmp_path / "changed", array_0=array * 1.001)
    refused(FileError, lambda: fv3d.read_checkpoint(changed), "changed after it was written")
    later = rewritten(written, tmp_path / "later", about=json.dumps(about | {"version": 99}))
    refused(FileError, lambda: fv3d.read_checkpoint(later), "another version")
    objects = rewritten(written, tmp_path / "objects", array_0=np.array([{}], dtype=object))
    refused(FileError, lambda: fv3d.read_checkpoint(objects), "no whole checkpoint")
    for evil in ("os:system", "fv3d.errors:as_number", "fv3d.flow.nowhere:State"):
        with pytest.raises(FileError):
            unpack({"class": evil, "fields": {}}, [])


def test_checkpoints_of_another_case_are_refused(written: Path) -> None:
    stored = fv3d.read_checkpoint(written)
    good = fv3d.Feedback(TIMED, radius=0.2, gain=20.0)
    other = duct(box((0, 0, 0), (2, 1, 1), cells=(7, 5, 5), skew=0.19), viscosity=0.01)
    values = TIMED.component_value.copy()
    values[7] += 1e-12
    changes: dict[str, tuple[Any, Any]] = {
        "mesh": (other, good),
        "fluid": (dataclasses.replace(CASE, fluid=fv3d.Fluid(density=1.0, viscosity=0.011)), good),
        "boundaries": (dataclasses.replace(CASE, boundaries={
            **CASE.boundaries, "y_min": fv3d.Slip()}), good),
        "body force": (dataclasses.replace(CASE, body_force=(0, 0, -1e-9)), good),
        "numerical methods": (dataclasses.replace(CASE, numerics=fv3d.Numerics(
            convection=fv3d.Central())), good),
        "sources and readings": (CASE, fv3d.Feedback(TIMED.with_values(values), radius=0.2,
                                                     gain=20.0))}
    for part, (case, law) in changes.items():
        with pytest.raises(CaseError, match=f"another {part}"):
            fv3d.solve_transient(case, time_step=0.02, end_time=1.0, start=stored, sources=[law],
                                 progress=False)
    refused(CaseError, lambda: fv3d.solve_steady(CASE, tolerance=1e-3, max_iterations=5,
                                                 start=stored), "another case or run")
    same(transient(8, True), transient(8, True, start=stored))
    finer = fv3d.solve_transient(CASE, time_step=0.004, end_time=0.12, sources=[good],
                                 start=stored, progress=False)  # another step is no other case
    np.testing.assert_allclose(np.diff(finer.history["time"])[4:], 0.004)


@pytest.mark.parametrize("options", [{"every": 0}, {"every": 1.5}, {"minutes": -1.0},
                                     {"every": "often"}])
def test_bad_intervals(options: Any, tmp_path: Path) -> None:
    with pytest.raises(CaseError):
        fv3d.Checkpoint(tmp_path / "run", **options)


def test_bad_places(tmp_path: Path) -> None:
    for path in (tmp_path / "no" / "run", 3):
        with pytest.raises(FileError):
            fv3d.Checkpoint(path)  # type: ignore[arg-type]
    with pytest.raises(CaseError):
        transient(2, False, checkpoint="run")
    folder = tmp_path / "run"
    folder.mkdir()
    with pytest.warns(Fv3dWarning, match="cannot be written"):  # and the run goes on
        assert len(transient(2, False, checkpoint=fv3d.Checkpoint(folder)).history["time"]) == 2


def test_what_cannot_be_stored_is_refused_before_the_first_step(tmp_path: Path) -> None:
    class Odd:
        def start(self, *_: Any) -> Any:
            return object()

        def force(self, own: Any) -> Any:
            raise AssertionError

        correct = advance = force

    with pytest.raises(CaseError, match="cannot hold"):
        fv3d.solve_transient(CASE, time_step=0.1, end_time=1.0, sources=[Odd()], progress=False,
                             checkpoint=fv3d.Checkpoint(tmp_path / "run"))


def test_packing_keeps_what_it_is_given() -> None:
    import scipy.sparse as sparse
    array = np.arange(4, dtype=np.float32)
    given = {"a": (1, 2.5, None, "text", True, float("inf")), "b": [array, array],
             "c": sparse.random(5, 4, 0.5, format="csc"), "d": fv3d.LocalStep(3.0)}
    packer = Packer()
    tree = json.loads(json.dumps(packer.pack(given)))
    back = unpack(tree, packer.arrays)
    assert back["a"] == given["a"] and back["d"] == given["d"] and len(packer.arrays) == 4
    assert back["b"][0] is back["b"][1] and (back["c"] != given["c"]).nnz == 0


CHILD = """
import sys, warnings
sys.path.insert(0, {tests!r})
warnings.simplefilter("ignore")
import fv3d
from test_checkpoint import CASE, TIMED, monitors
start = fv3d.read_checkpoint({path!r}) if {go_on} else None
print("ready", flush=True)
fv3d.solve_transient(CASE, time_step=0.02, end_time=1e6, monitors=monitors(), start=start,
    sources=[fv3d.Feedback(TIMED, radius=0.2, gain=20.0)], progress=False,
    checkpoint=fv3d.Checkpoint({path!r}, every=1))
"""


def kill_and_go_on(times: int, path: Path, *, seed: int) -> None:
    rng, count = random.Random(seed), 0
    for k in range(times):
        code = CHILD.format(tests=str(Path(__file__).parent), path=str(path), go_on=k > 0)
        child = subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.PIPE)
        assert child.stdout is not None and child.stdout.readline() == b"ready\n"
        while k == 0 and not path.exists():
            time.sleep(0.01)
        time.sleep(rng.uniform(0.0, 0.6))
        child.send_signal(signal.SIGKILL)
        child.wait()
        child.stdout.close()
        stored = fv3d.read_checkpoint(path)  # whole, whenever the end came
        assert stored.about["count"] >= count
        count = stored.about["count"]
    assert count > 0
    same(transient(count + 5, True), transient(count + 5, True, start=fv3d.read_checkpoint(path)))


def test_a_killed_run_loses_nothing_written(tmp_path: Path) -> None:
    kill_and_go_on(3, tmp_path / "run", seed=1)


@pytest.mark.long
def test_a_run_killed_at_20_random_moments_loses_nothing_written(tmp_path: Path) -> None:
    kill_and_go_on(20, tmp_path / "run", seed=2)
