"""How runs start, end and print."""

from __future__ import annotations

import itertools
import os
import signal
import subprocess
import sys
from typing import Any

import numpy as np
import pytest
from made import distance, duct, solved

import fv3d
from fv3d.errors import CaseError, DivergenceError, Fv3dWarning
from fv3d.mesh.generate import box


@pytest.fixture(scope="module")
def case() -> fv3d.Case:
    return duct(box((0, 0, 0), (2, 1, 1), cells=(8, 6, 6)))


@pytest.fixture(scope="module")
def run(case: fv3d.Case) -> fv3d.Run:
    return solved(case, tolerance=1e-8)


class Watch:
    """A monitor that does something at one iteration."""

    name = "watch"

    def __init__(self, at: int, act: Any) -> None:
        self.at, self.act, self.seen = at, act, 0

    def see(self, problem: Any, state: Any, record: Any) -> str | None:
        self.seen += 1
        return self.act() if self.seen == self.at else None


def interrupt() -> None:
    raise KeyboardInterrupt


def steady(case: fv3d.Case, **options: Any) -> fv3d.Run:
    return fv3d.solve_steady(case, **({"tolerance": 1e-12, "max_iterations": 200,
                                       "progress": False} | options))


def test_interruption_keeps_the_run_so_far(case: fv3d.Case) -> None:
    with pytest.warns(Fv3dWarning, match="interrupted"):
        stopped = steady(case, monitors=[Watch(7, interrupt)])
    assert stopped.outcome.name == "interrupted" and not stopped.outcome.good
    assert stopped.outcome.next_step
    assert len(stopped.history["iteration"]) == 7
    assert np.all(np.isfinite(stopped.velocity)) and np.any(stopped.velocity)
    *_, (state, _) = itertools.islice(fv3d.iterate(case), 7)
    np.testing.assert_array_equal(stopped.velocity, state.velocity)


def test_a_signal_from_the_keyboard_keeps_the_run(tmp_path: Any) -> None:
    """The real thing: SIGINT to a process that computes, as Ctrl-C sends it."""
    script = tmp_path / "long.py"
    script.write_text(
        "import sys, warnings\n"
        f"sys.path.insert(0, {os.path.dirname(__file__)!r})\n"
        "import fv3d; from made import duct; from fv3d.mesh.generate import box\n"
        "warnings.simplefilter('ignore')\n"
        "class Started:\n"
        "    name = 'started'\n"
        "    def see(self, problem, state, record):\n"
        "        if record.iteration == 3: print('started', flush=True)\n"
        "run = fv3d.solve_steady(duct(box((0, 0, 0), (2, 1, 1), cells=(12, 10, 10))),\n"
        "    tolerance=1e-30, max_iterations=10**6, progress=False, monitors=[Started()])\n"
        "print(run.outcome.name, len(run.history['iteration']) >= 3)\n")
    process = subprocess.Popen([sys.executable, str(script)], stdout=subprocess.PIPE, text=True)
    assert process.stdout is not None
    assert process.stdout.readline().strip() == "started"
    process.send_signal(signal.SIGINT)
    rest, _ = process.communicate(timeout=60)
    assert rest.strip() == "interrupted True" and process.returncode == 0


def test_a_monitor_may_stop_the_run(case: fv3d.Case) -> None:
    idle, stopper = Watch(10**9, None), Watch(5, lambda: "Seen enough.")
    idle.name = "idle"
    stopped = steady(case, monitors=[idle, stopper])
    assert stopped.outcome.name == "stopped by monitor" and stopped.outcome.good
    assert "Seen enough." in str(stopped.outcome)
    assert len(stopped.history["iteration"]) == 5


def test_an_unconverged_run_warns_and_is_returned(case: fv3d.Case) -> None:
    with pytest.warns(Fv3dWarning, match="above the tolerance"):
        short = steady(case, max_iterations=4)
    assert short.outcome.name == "iteration limit" and not short.outcome.good
    assert short.outcome.next_step
    assert len(short.history["iteration"]) == 4
    # its fluxes conserve mass all the same
    inflow = -short.mass_flux.clip(max=0.0)[short.mesh.n_internal:].sum()
    assert np.abs(short.mesh.outflow @ short.mass_flux).sum() <= 1e-8 * inflow


def test_going_on_equals_not_having_stopped(case: fv3d.Case, run: fv3d.Run) -> None:
    with pytest.warns(Fv3dWarning):
        short = steady(case, max_iterations=10)
    assert distance(run.mesh, solved(case, start=short).velocity, run.velocity) <= 1e-5


class Explosion:
    """A source whose force grows without limit."""

    def start(self, problem: Any, *_: Any) -> Any:
        self.mesh = problem.mesh
        return np.ones((self.mesh.n_cells, 3))

    def force(self, own: Any) -> Any:
        from fv3d.flow.problem import balanced_force
        return balanced_force(self.mesh, own)

    def correct(self, own: Any, problem: Any, state: Any, change: Any, relax: Any) -> Any:
        from fv3d.flow.problem import Correction
        return Correction(1e8 * own * (1.0 + self.mesh.cell_centre), change, 1.0)


def test_divergence_raises_with_the_last_finite_run() -> None:
    mesh = box((0, 0, 0), (1, 1, 1), cells=(4, 4, 4))
    with pytest.raises(DivergenceError) as caught:
        steady(duct(mesh), sources=[Explosion()])
    assert len(caught.value.run.history["iteration"]) >= 1
    check_diverged(caught.value)


def test_divergence_in_the_first_iteration() -> None:
    mesh = box((0, 0, 0), (1, 1, 1), cells=(4, 4, 4))
    with pytest.raises(DivergenceError) as caught:
        steady(duct(mesh, body_force=(1e300, 0.0, 0.0)))
    check_diverged(caught.value)


def check_diverged(error: DivergenceError) -> None:
    last = error.run
    assert error.what and error.where and error.remedy
    assert last.outcome.name == "diverged" and not last.outcome.good
    for field in (last.velocity, last.pressure, last.mass_flux):
        assert np.all(np.isfinite(field))
    assert "diverged" in str(last)


def test_the_open_door_gives_the_same_iterations(case: fv3d.Case) -> None:
    records = [record for _, record in itertools.islice(fv3d.iterate(case), 6)]
    with pytest.warns(Fv3dWarning):
        short = steady(case, max_iterations=6)
    np.testing.assert_array_equal(short.history["momentum"], [r.momentum for r in records])
    np.testing.assert_array_equal(short.history["mass"], [r.mass for r in records])


def test_runs_repeat_to_the_last_bit(case: fv3d.Case) -> None:
    one, two = (solved(case, tolerance=1e-6) for _ in range(2))
    np.testing.assert_array_equal(one.velocity, two.velocity)
    np.testing.assert_array_equal(one.pressure, two.pressure)


def test_history_and_sheet(run: fv3d.Run) -> None:
    lengths = {len(column) for column in run.history.values()}
    assert lengths == {run.history["iteration"][-1] + 1 - run.history["iteration"][0]}
    assert {"iteration", "momentum", "mass", "misfit"} <= set(run.history)
    assert max(run.history["momentum"][-1], run.history["mass"][-1]) <= 1e-8
    sheet = str(run)
    assert "converged" in sheet and "288 hexahedron" in sheet and "iterations" in sheet
    assert max(map(len, sheet.splitlines())) <= 100
    with pytest.raises(TypeError):
        run.history["iteration"] = 0  # type: ignore[index]


@pytest.mark.parametrize("start", [(0.3, 0.0, 0.0), lambda x: np.sin(9 * x), "coarse"])
def test_the_start_does_not_change_the_solution(case: fv3d.Case, run: fv3d.Run,
                                                start: Any) -> None:
    if start == "coarse":
        start = solved(duct(box((0, 0, 0), (2, 1, 1), cells=(4, 3, 3), tetra=True)))
    assert distance(run.mesh, solved(case, start=start).velocity, run.velocity) <= 1e-5


def test_a_good_start_saves_iterations(case: fv3d.Case, run: fv3d.Run) -> None:
    again = steady(case, start=run, tolerance=1e-7)
    assert len(again.history["iteration"]) == 1
    finer = duct(box((0, 0, 0), (2, 1, 1), cells=(10, 8, 8)))
    alone, helped = solved(finer, tolerance=1e-5), solved(finer, start=run, tolerance=1e-5)
    assert len(helped.history["iteration"]) <= len(alone.history["iteration"])


def test_the_start_field_follows_the_inflow() -> None:
    """Potential flow through a straight box with a uniform inlet is uniform, and a solution."""
    mesh = box((0, 0, 0), (2, 1, 1), cells=(6, 4, 4))
    sides = {b: fv3d.Symmetry() for b in mesh.boundaries}
    uniform = fv3d.Case(
        mesh, fv3d.water(temperature=293.15),
        boundaries=sides | {"x_min": fv3d.Inlet((0.7, 0, 0)), "x_max": fv3d.Outlet()})
    state, record = next(iter(fv3d.iterate(uniform)))
    np.testing.assert_allclose(state.velocity, np.broadcast_to([0.7, 0, 0], (96, 3)), atol=1e-5)
    assert record.residual <= 1e-4


def test_progress_goes_to_the_error_stream_only(case: fv3d.Case, capsys: Any) -> None:
    solved_quietly = fv3d.solve_steady(case, tolerance=1e-3, max_iterations=300)
    captured = capsys.readouterr()
    assert captured.out == "" and "GiB" in captured.err and "min" in captured.err
    assert solved_quietly.outcome.good


def test_a_start_of_a_wrong_kind_is_refused(case: fv3d.Case) -> None:
    with pytest.raises(CaseError):
        steady(case, start="yesterday")
