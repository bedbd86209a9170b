"""Speed and memory of iterations and time steps, as ratios to what the memory here allows.

``python cases/benchmark/run.py [--cells 32 64 100] [--large] [--kind hex tet]`` prints as it goes:
the triad bandwidth of this machine in the same run (a = b + s c, McCalpin, J. D. 1995, IEEE TCCA
Newsletter, 19-25); for lid-driven cubes at Reynolds number 1000 the milliseconds of a steady
iteration by phases, beside the bytes that each moves by design and the time these take at that
bandwidth; a step in time; one thread beside all; set-up and peak memory.  ``speed.png`` shows
microseconds per cell over the cells.  The bound of a whole iteration is 3.85 kB per cell.
Nothing is asserted.
"""

from __future__ import annotations

import argparse
import os
import platform
import resource
import subprocess
import sys
import time
import warnings
from dataclasses import dataclass, field, replace
from pathlib import Path

import numba
import numpy as np
from phases import PHASES, bytes_by_design, watched

import fv3d
from fv3d.flow import coupling
from fv3d.flow.heap import kept_memory
from fv3d.flow.problem import make_problem
from fv3d.flow.start import start_state
from fv3d.flow.step_size import FixedStep
from fv3d.flow.time_step import TimeStep

BYTES_PER_CELL_AND_ITERATION = 3850.0
SETTLED = 5  # iterations and steps before the clock starts


@numba.njit(parallel=True)
def triad(a, b, c, s):
    """a = b + s c."""
    for i in numba.prange(a.shape[0]):
        a[i] = b[i] + s * c[i]


def bandwidth() -> float:
    """Best triad bandwidth of several passes [GB/s]."""
    n = 20_000_000
    a, b, c = np.zeros(n), np.ones(n), np.ones(n)
    triad(a, b, c, 2.0)
    best = np.inf
    for _ in range(8):
        began = time.perf_counter()
        triad(a, b, c, 2.0)
        best = min(best, time.perf_counter() - began)
    return 24.0 * n / best / 1e9


def peak() -> float:
    """Peak memory of this process [GiB]."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20


def cavity(cells: int, tetra: bool) -> fv3d.Case:
    """Lid-driven cube at Reynolds number 1000; tetrahedra are half as many as hexahedra."""
    edge = round((cells ** 3 / 12) ** (1 / 3)) if tetra else cells
    walls = {side: "walls" for side in ("x_min", "x_max", "y_min", "z_min", "z_max")}
    mesh = fv3d.box((0, 0, 0), (1, 1, 1), cells=(edge, edge, edge), tetra=tetra,
                    names={"y_max": "lid", **walls})
    return fv3d.Case(mesh, fv3d.Fluid(density=1.0, viscosity=1e-3),
                     boundaries={"lid": fv3d.Wall((1.0, 0.0, 0.0)), "walls": fv3d.Wall()})


@dataclass
class Measured:
    """Seconds of one mesh: a median iteration and step, phases, set-up; peak memory [GiB]."""

    cells: int
    iteration: float = 0.0
    single: float = 0.0
    step: float = 0.0
    setup: float = 0.0
    divergence: float = 0.0
    phases: dict[str, float] = field(default_factory=dict)
    moved: dict[str, float] = field(default_factory=dict)
    memory: float = 0.0


def measure(case: fv3d.Case, iterations: int, steps: int) -> Measured:
    """Iterations with all threads and one, then steps at a Courant number of about a half."""
    began = time.perf_counter()
    problem = make_problem(case)
    workspace = coupling.make_workspace(problem)
    state = start_state(problem, None, workspace)
    made = Measured(case.mesh.n_cells)
    with np.errstate(all="ignore"), kept_memory():
        state, _ = coupling.step(problem, state, workspace)
        first = time.perf_counter() - began
        for _ in range(SETTLED):
            state, _ = coupling.step(problem, state, workspace)
        spans, efforts = [], []
        with watched() as watch:
            for _ in range(iterations):
                began = time.perf_counter()
                state, record = coupling.step(problem, state, workspace)
                spans.append(time.perf_counter() - began)
                efforts.append(record.pressure_iterations)
        made.iteration = float(np.median(spans))
        made.setup = first - made.iteration
        rest = sum(spans) - sum(watch.seconds.values())
        watch.seconds["rest"] += rest
        spread = made.iteration / sum(spans)
        made.phases = {name: watch.seconds[name] * spread for name in PHASES}
        assert workspace.prepared is not None
        made.moved = bytes_by_design(problem, workspace.prepared, sweeps=workspace.sweeps,
                                     solver_iterations=float(np.mean(efforts)))
        threads = fv3d.get_threads()
        fv3d.set_threads(1)
        made.single = median_of(lambda s: coupling.step(problem, s, workspace)[0], state,
                                max(iterations // 2, 2))
        fv3d.set_threads(threads)
        if steps:
            edge = case.mesh.n_cells ** (1 / 3)
            advance = TimeStep(FixedStep(0.5 / edge))
            state = replace(state, iteration=0)
            for _ in range(SETTLED):
                state, record = advance(problem, state, workspace)
            made.step = median_of(lambda s: advance(problem, s, workspace)[0], state, steps)
            made.divergence = record.mass
    made.memory = peak()
    return made


def median_of(advance, state, count: int) -> float:
    """Median seconds of some advances."""
    spans = []
    for _ in range(count):
        began = time.perf_counter()
        state = advance(state)
        spans.append(time.perf_counter() - began)
    return float(np.median(spans))


def show(kind: str, made: Measured, rate: float) -> None:
    """The table of one mesh."""
    bound = made.cells * BYTES_PER_CELL_AND_ITERATION / (rate * 1e9)
    print(f"\n{kind}, {made.cells} cells; bound {bound * 1e3:.1f} ms at {rate:.1f} GB/s")
    print("  phase              ms     MB moved   ms at the bandwidth   ratio")
    for name in PHASES:
        seconds, size = made.phases[name], made.moved.get(name, 0.0)
        row = f"  {name:14s} {seconds * 1e3:8.1f}"
        if size:
            ideal = size / (rate * 1e9)
            row += f" {size / 1e6:10.0f} {ideal * 1e3:16.1f} {seconds / ideal:12.1f}"
        print(row)
    times = made.iteration / bound
    print(f"  iteration      {made.iteration * 1e3:8.1f}   {times:.2f} x the bound;"
          f" one thread {made.single * 1e3:.0f} ms, {made.single / made.iteration:.2f} x")
    total = sum(made.moved.values())
    print(f"  moved by design {total / made.cells / 1e3:.2f} kB per cell, "
          f"{total / made.cells / 1e3 / 3.85:.2f} x the bound's")
    if made.step:
        print(f"  time step      {made.step * 1e3:8.1f}   {made.step / made.iteration:.2f} x an "
              f"iteration, flux divergence {made.divergence:.1e} of the reference flux")
    share = made.setup / (made.setup + 400 * made.iteration)
    print(f"  set-up         {made.setup:8.1f} s, {share:.1%} of a run of 400 iterations")
    print(f"  memory         {made.memory:8.2f} GiB peak so far", flush=True)


def draw(rows: dict[str, list[Measured]], rate: float, path: Path) -> None:
    """Microseconds per cell over the cells: all threads, one thread, steps, and the bound."""
    from matplotlib.figure import Figure
    figure = Figure(figsize=(7.0, 4.6), layout="constrained")
    panel = figure.subplots()
    for colour, (kind, made) in zip(("tab:blue", "tab:red"), rows.items()):
        cells = [m.cells for m in made]
        for name, style, values in (("iteration", "o-", [m.iteration for m in made]),
                                    ("iteration, one thread", "o:", [m.single for m in made]),
                                    ("step in time", "s--", [m.step for m in made])):
            if all(values):
                panel.semilogx(cells, [v / c * 1e6 for v, c in zip(values, cells)], style,
                               color=colour, label=f"{kind}, {name}")
    panel.axhline(BYTES_PER_CELL_AND_ITERATION / rate / 1e3, color="grey",
                  label=f"3.85 kB per cell at {rate:.0f} GB/s")
    panel.set_xlabel("cells")
    panel.set_ylabel("time per cell [microseconds]")
    panel.set_ylim(bottom=0.0)
    panel.grid(alpha=0.3, which="both")
    panel.legend(fontsize=8)
    figure.savefig(path, dpi=130)


def starting() -> None:
    """Seconds of importing fv3d, and of a first iteration with everything compiled before."""
    script = ("import time; a = time.perf_counter(); import fv3d; b = time.perf_counter()\n"
              "m = fv3d.box((0, 0, 0), (1, 1, 1), cells=(8, 8, 8), names={'y_max': 'lid'} | "
              "dict.fromkeys(('x_min', 'x_max', 'y_min', 'z_min', 'z_max'), 'walls'))\n"
              "c = fv3d.Case(m, fv3d.Fluid(density=1.0, viscosity=0.01), boundaries={"
              "'lid': fv3d.Wall((1.0, 0.0, 0.0)), 'walls': fv3d.Wall()})\n"
              "next(iter(fv3d.iterate(c))); print(b - a, time.perf_counter() - b)")
    for _ in range(2):
        said = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True,
                              check=True).stdout.split()
    print(f"start       import {float(said[0]):.2f} s, mesh, case and first iteration of a second "
          f"start {float(said[1]):.2f} s")


def main() -> None:
    """Measure, print, draw."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--cells", type=int, nargs="+", default=[32, 64, 100],
                         help="hexahedra along each edge; tetrahedra are half as many")
    options.add_argument("--large", action="store_true", help="144 along each edge too")
    options.add_argument("--kind", nargs="+", choices=["hex", "tet"], default=["hex", "tet"])
    options.add_argument("--iterations", type=int, default=12)
    options.add_argument("--steps", type=int, default=6)
    chosen = options.parse_args()
    print(f"machine     {platform.processor() or platform.machine()}, {os.cpu_count()} cores, "
          f"{fv3d.get_threads()} threads, Python {platform.python_version()}")
    starting()
    rate = bandwidth()
    print(f"triad       {rate:.1f} GB/s", flush=True)
    measure(cavity(8, False), 2, 2)  # compiles
    rows: dict[str, list[Measured]] = {}
    for kind in chosen.kind:
        for cells in [*chosen.cells, *([144] if chosen.large else [])]:
            made = measure(cavity(cells, kind == "tet"), chosen.iterations, chosen.steps)
            before, rate = rate, bandwidth()
            show(kind, made, max(before, rate))
            rows.setdefault(kind, []).append(made)
    draw(rows, rate, Path(__file__).with_name("speed.png"))


if __name__ == "__main__":
    warnings.simplefilter("ignore", fv3d.Fv3dWarning)
    main()
