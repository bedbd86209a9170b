"""Where the time of an iteration goes, and the bytes each phase moves by design.

A phase is timed without the phases inside it.  The bytes are counted from the loops: every array
that a loop reads or writes once, neighbours' values from the cache, 8 bytes a number and 4 an
index; single precision in the sweeps and in the multigrid cycle.
"""

from __future__ import annotations

import functools
import time
from collections import defaultdict
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

from fv3d.flow import coupling, time_step
from fv3d.flow.problem import Problem
from fv3d.operators import linear
from fv3d.operators.assembly import Rows
from fv3d.operators.gradient import GradientOperator

PHASES = ("gradient", "assembly", "sweeps", "flux", "pressure solve", "corrections", "feedback",
          "rest")


class Stopwatch:
    """Seconds of each phase, those of inner phases taken out of the outer ones."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = defaultdict(float)
        self._open: list[list[float]] = []

    def timed(self, phase: str, function: Callable) -> Callable:
        """The function with its time booked on a phase."""
        @functools.wraps(function)
        def run(*given: Any, **named: Any) -> Any:
            began = time.perf_counter()
            self._open.append([0.0])
            try:
                return function(*given, **named)
            finally:
                whole = time.perf_counter() - began
                self.seconds[phase] += whole - self._open.pop()[0]
                if self._open:
                    self._open[-1][0] += whole
        return run


@contextmanager
def watched(sources: tuple[Any, ...] = ()) -> Iterator[Stopwatch]:
    """Time the phases of steady iterations and of time steps within the block."""
    watch = Stopwatch()
    places = [(GradientOperator, "__call__", "gradient"), (Rows, "residual", "assembly"),
              (coupling.Sweeps, "__call__", "sweeps"),
              (coupling, "solve_pressure", "pressure solve"),
              (coupling, "_correct_pressure", "corrections"),
              (time_step.TimeStep, "_project", "corrections"), (linear, "solve", "pressure solve")]
    for module in (coupling, time_step):
        places += [(module, "momentum", "assembly"), (module, "inverse_blocks", "assembly"),
                   (module, "interpolated_flux", "flux"), (module, "net_outflow", "flux")]
    places += [(coupling, "correction_matrix", "assembly")]
    places += [(type(source), name, "feedback") for source in sources
               for name in ("correct", "force", "advance") if hasattr(source, name)]
    kept = [(owner, name, getattr(owner, name)) for owner, name, _ in places]
    for owner, name, phase in places:
        setattr(owner, name, watch.timed(phase, getattr(owner, name)))
    try:
        yield watch
    finally:
        for owner, name, function in reversed(kept):
            setattr(owner, name, function)


def bytes_by_design(problem: Problem, prepared: linear.Prepared, *, sweeps: int,
                    solver_iterations: float) -> dict[str, float]:
    """Bytes that the phases of a steady iteration move, see the module text."""
    mesh, entries = problem.mesh, len(problem.pattern.indices)
    n, faces, sides = mesh.n_cells, mesh.n_internal, len(mesh.cell_faces[1])
    skew, bent = (0 if len(mesh.skew) == 0 else 24), (0 if mesh.straight else 24)
    vector = 28 * sides + n * (4 + 24 + 72)
    scalar = 28 * sides + n * (4 + 8 + 24)
    smoothing = problem.velocity_gradient.smoothed is not None
    if smoothing:  # the gradient is read and written once more
        vector, scalar = vector + 4 * sides + 144 * n, scalar + 4 * sides + 48 * n
    pairs = 2 if len(coupling.pressure_response(problem).fine_steps) > 1 else 1
    outflow = 5 * sides + 8 * faces + 8 * n
    transport = faces * (8 + 8 + 24 + bent + skew + 8 + 8 + 8 + 16 + 24) + 96 * n
    rows = 9 * sides + 40 * faces + 8 * entries + n * (4 + 8 + 24)
    residual = 12 * entries + n * (48 + 24 + 24 + 8 + 24 + 24)
    matrix = faces * 40 + 8 * n + 8 * sides + 8 * entries
    levels = 0.0
    for level in prepared.levels[:-1]:
        size, own = level.matrix.shape[0], level.matrix.nnz
        levels += 4 * (8 * own + 20 * size) + 16 * size
        levels += 16 * level.prolongation.nnz + 12 * size
    iteration = levels + 12 * entries + n * (8 + 8 + 12 + 16 + 24 + 48)
    return {
        "gradient": vector + (2 + pairs - 1) * scalar,
        "assembly": transport + rows + residual + matrix + n * (48 + 24),
        "sweeps": sweeps * (8 * entries + n * (4 + 24 + 12 + 24)) + n * (56 + 84 + 36),
        "flux": faces * (16 + 24 + skew + bent + 8 + 8) + n * (64 + (72 if skew else 0)) + outflow,
        "pressure solve": solver_iterations * iteration,
        "corrections": (faces * (24 + 32) + n * 80 + pairs * (
            faces * (16 + 24 + bent + 24) + 48 * n + outflow) + 4 * sides + 16 * n
            + faces * (8 + 24 + (24 if skew else 0)) + sides * 37 + 48 * n),
    }
