"""What a long run tells while it works: an estimate before, a bar with time left during it."""

from __future__ import annotations

import math
import sys
import time
from types import TracebackType
from typing import Any

import numpy as np

from .coupling import Record
from .problem import Problem

BYTES_PER_CELL = 3500.0  # peak of a steady run on hexahedra, see cases/benchmark/run.py
GRADIENTS_PER_ITERATION = 55.0  # cost of an iteration in vector gradients, measured likewise


def estimate(problem: Problem, max_iterations: int) -> tuple[float, float]:
    """Memory [GiB] and the longest time [min] a steady run may take.

    Times one velocity gradient on this mesh and scales it.
    """
    mesh = problem.mesh
    faces_per_cell = (mesh.n_faces + mesh.n_internal) / mesh.n_cells
    memory = mesh.n_cells * BYTES_PER_CELL * faces_per_cell / 6.0 / 2**30
    values, edge = np.zeros((mesh.n_cells, 3)), np.zeros((mesh.n_boundary, 3))
    problem.velocity_gradient(values, edge)
    began = time.perf_counter()
    problem.velocity_gradient(values, edge)
    one = time.perf_counter() - began
    return memory, one * GRADIENTS_PER_ITERATION * max_iterations / 60.0


def _bar(name: str) -> Any:
    from tqdm import tqdm
    return tqdm(total=100.0, desc=name, unit="%", file=sys.stderr, leave=False,
                bar_format="{desc}: {percentage:3.0f}%|{bar:24}| {postfix}", mininterval=0.5)


class Progress:
    """Progress bar of an iteration; counts decades of the residual towards the tolerance."""

    def __init__(self, problem: Problem, name: str, tolerance: float, max_iterations: int,
                 shown: bool) -> None:
        self._name, self._tolerance, self._limit = name, tolerance, max_iterations
        self._problem, self._shown = problem, shown
        self._bar: Any = None
        self._first = 0.0
        self._began = 0.0
        self._count = 0

    def __enter__(self) -> Progress:
        if self._shown:
            memory, minutes = estimate(self._problem, self._limit)
            print(f"{self._name}: {self._problem.mesh.n_cells} cells, about {memory:.2g} GiB, at "
                  f"most {minutes:.2g} min for {self._limit} iterations", file=sys.stderr)
            self._bar = _bar(self._name)
        self._began = time.perf_counter()
        return self

    def show(self, record: Record) -> None:
        """Move the bar; time left from the slope of the residual in decades."""
        self._count += 1
        if self._bar is None or record.residual <= 0:
            return
        self._first = max(self._first, min(record.residual, 1.0))
        whole = math.log10(max(self._first / self._tolerance, 1.0 + 1e-9))
        share = 1.0 - math.log10(max(record.residual / self._tolerance, 1.0)) / whole
        elapsed = time.perf_counter() - self._began
        by_limit = elapsed / self._count * (self._limit - self._count)
        left = min(elapsed * (1.0 / share - 1.0), by_limit) if share > 0.02 else by_limit
        self._bar.n = 100.0 * share
        self._bar.set_postfix_str(f"iteration {self._count}, residual {record.residual:.1e}, "
                                  f"{left:.0f} s left", refresh=False)
        self._bar.update(0)

    def __exit__(self, kind: type[BaseException] | None, value: BaseException | None,
                 trace: TracebackType | None) -> None:
        if self._bar is not None:
            self._bar.close()


class TimeProgress:
    """Progress bar of a run in time, by the share of the time that has passed."""

    def __init__(self, problem: Problem, name: str, *, begin: float, end: float, steps: int,
                 shown: bool) -> None:
        self._problem, self._name, self._shown = problem, name, shown
        self._begin, self._end, self._steps = begin, end, steps
        self._bar: Any = None
        self._began = 0.0

    def __enter__(self) -> TimeProgress:
        if self._shown:
            print(f"{self._name}: {self._problem.mesh.n_cells} cells, about {self._steps} steps to "
                  f"{self._end:g} s", file=sys.stderr)
            self._bar = _bar(self._name)
        self._began = time.perf_counter()
        return self

    def show(self, record: Record) -> None:
        """Move the bar; computing time left from the share done."""
        if self._bar is None:
            return
        share = min((record.time - self._begin) / (self._end - self._begin), 1.0)
        elapsed = time.perf_counter() - self._began
        self._bar.n = 100.0 * share
        self._bar.set_postfix_str(f"{record.time:.4g} s of {self._end:g} s, "
                                  f"{elapsed * (1.0 / max(share, 1e-9) - 1.0):.0f} s left",
                                  refresh=False)
        self._bar.update(0)

    def __exit__(self, kind: type[BaseException] | None, value: BaseException | None,
                 trace: TracebackType | None) -> None:
        if self._bar is not None:
            self._bar.close()
