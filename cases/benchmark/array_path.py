"""Steady iterations with the compiled loops beside the same iterations with array code.

``python cases/benchmark/array_path.py [--cells 64 100] [--kind hex tet]`` takes a lid-driven cube
some iterations on, then goes on from that state with the compiled loops, with NumPy, SciPy and
pyamg (:mod:`fv3d.operators.arrays`, one thread) and once more with the compiled loops.  Printed
are milliseconds, their ratio, ratios to the bound of 3.85 kB per cell at the triad bandwidth of the
same run, the milliseconds by phases, and how far the fields of both lie apart in the end.
Processor milliseconds much below the others (times threads) tell that the machine was busy.
"""

from __future__ import annotations

import argparse
import time
import warnings
from collections.abc import Iterator
from contextlib import AbstractContextManager, contextmanager, nullcontext
from dataclasses import dataclass, replace

import numpy as np
from phases import PHASES, watched
from run import BYTES_PER_CELL_AND_ITERATION, SETTLED, bandwidth, cavity

import fv3d
from fv3d.flow import coupling
from fv3d.flow.heap import kept_memory
from fv3d.flow.problem import Problem, State, make_problem
from fv3d.flow.start import start_state
from fv3d.operators.arrays import array_path


@dataclass
class Path:
    """Median seconds of an iteration, those of its phases, solver iterations, last state.

    ``processor``: seconds of all threads together, the mean of the iterations.
    """

    seconds: float
    processor: float
    phases: dict[str, float]
    effort: float
    state: State


def timed(problem: Problem, state: State, workspace: coupling.Workspace, count: int) -> Path:
    """Iterations from a state; the workspace given stays as it is but for its work arrays."""
    workspace, spans, efforts = replace(workspace), [], []
    state, _ = coupling.step(problem, state, workspace)  # what is made once
    busy = time.process_time()
    with watched() as watch:
        for _ in range(count):
            began = time.perf_counter()
            state, record = coupling.step(problem, state, workspace)
            spans.append(time.perf_counter() - began)
            efforts.append(record.pressure_iterations)
    busy = (time.process_time() - busy) / count
    watch.seconds["rest"] += sum(spans) - sum(watch.seconds.values())
    middle = float(np.median(spans))
    phases = {name: seconds * middle / sum(spans) for name, seconds in watch.seconds.items()}
    return Path(middle, busy, phases, float(np.mean(efforts)), state)


def compared(case: fv3d.Case, count: int) -> tuple[Path, Path, Path]:
    """By compiled loops (the better of two runs), by arrays, by compiled loops on one thread."""
    problem = make_problem(case)
    workspace = coupling.make_workspace(problem)
    state, threads = start_state(problem, None, workspace), fv3d.get_threads()
    with np.errstate(all="ignore"), kept_memory():
        for _ in range(SETTLED + 1):
            state, _ = coupling.step(problem, state, workspace)
        first, arrays, last = (
            _within(way, problem, state, workspace, count)
            for way in (nullcontext(), array_path(), nullcontext()))
        with one_thread():
            single = timed(problem, state, workspace, count) if threads > 1 else last
    return min(first, last, key=lambda path: path.seconds), arrays, single


def _within(way: AbstractContextManager, problem: Problem, state: State,
            workspace: coupling.Workspace, count: int) -> Path:
    with way:
        return timed(problem, state, workspace, count)


@contextmanager
def one_thread() -> Iterator[None]:
    """The compiled loops with one thread."""
    threads = fv3d.get_threads()
    fv3d.set_threads(1)
    try:
        yield
    finally:
        fv3d.set_threads(threads)


def show(kind: str, cells: int, rate: float, paths: tuple[Path, Path, Path]) -> None:
    """The table of one mesh."""
    compiled, arrays, single = paths
    bound = cells * BYTES_PER_CELL_AND_ITERATION / (rate * 1e9)
    apart = (np.abs(compiled.state.velocity - arrays.state.velocity).max()
             / np.abs(compiled.state.velocity).max())
    print(f"\n{kind}, {cells} cells; bound {bound * 1e3:.1f} ms at {rate:.1f} GB/s")
    print("  phase           compiled ms   arrays ms   ratio")
    for name in PHASES:
        one, other = compiled.phases.get(name, 0.0), arrays.phases.get(name, 0.0)
        if one:
            print(f"  {name:15s} {one * 1e3:11.1f} {other * 1e3:11.1f} {other / one:7.1f}")
    print(f"  iteration       {compiled.seconds * 1e3:11.1f} {arrays.seconds * 1e3:11.1f} "
          f"{arrays.seconds / compiled.seconds:7.1f}")
    print(f"  processor       {compiled.processor * 1e3:11.1f} {arrays.processor * 1e3:11.1f}")
    print(f"  over the bound  {compiled.seconds / bound:11.1f} {arrays.seconds / bound:11.1f}")
    print(f"  compiled, one thread {single.seconds * 1e3:.1f} ms (processor "
          f"{single.processor * 1e3:.1f}), arrays {arrays.seconds / single.seconds:.1f} times that")
    print(f"  solver iterations {compiled.effort:.1f} and {arrays.effort:.1f}; velocities "
          f"{apart:.0e} apart in the end", flush=True)


def main() -> None:
    """Measure and print."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--cells", type=int, nargs="+", default=[64, 100],
                         help="hexahedra along each edge; tetrahedra are half as many")
    options.add_argument("--kind", nargs="+", choices=["hex", "tet"], default=["hex", "tet"])
    options.add_argument("--iterations", type=int, default=8)
    chosen = options.parse_args()
    rate = bandwidth()
    print(f"triad {rate:.1f} GB/s, {fv3d.get_threads()} threads", flush=True)
    compared(cavity(8, False), 2)  # compiles
    for kind in chosen.kind:
        for cells in chosen.cells:
            case = cavity(cells, kind == "tet")
            paths = compared(case, chosen.iterations)
            rate = max(rate, bandwidth())
            show(kind, case.mesh.n_cells, rate, paths)


if __name__ == "__main__":
    warnings.simplefilter("ignore", fv3d.Fv3dWarning)
    main()
