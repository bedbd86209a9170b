"""Line plots of what monitors kept and of the history of a run."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from ..errors import CaseError, did_you_mean, expect_run
from ..flow.monitors import Series
from .files import PathLike, target_path, write_aside

UNITS = {"velocity": "m/s", "pressure": "Pa", "force": "N", "pressure_force": "N",
         "friction": "N", "moment": "N m", "flow_rate": "m3/s", "mass_flow": "kg/s",
         "back_flow": "m3/s"}
MOST = 12  # lines in one panel


def plot_series(run: Any, path: PathLike, *, name: str) -> Path:
    """Draw what a monitor of points, forces or flow rates kept, one panel per quantity.

    The horizontal axis is time in runs in time and the iteration number in others.

    Parameters
    ----------
    run : Run
    path : path ending in ``.png``
    name : str
        Of the monitor.

    Raises
    ------
    CaseError
        No such monitor, one that keeps no series, or one that kept nothing.
    FileError
        The picture cannot be written.
    """
    expect_run(run, "plot_series(run, path)")
    target = target_path(path, (".png",))
    series = run.series.get(name)
    if not isinstance(series, Series) or len(series.iteration) == 0:
        raise CaseError("There is no series to draw.", where="plot_series(name=)", got=repr(name),
                        remedy=f"The run kept: {', '.join(run.series) or 'none'}."
                        + did_you_mean(name, run.series))
    across, label = _axis(series.time, series.iteration)
    figure, panels = _panels(len(series.columns), f"{run.name}: {name}", label)
    for panel, (quantity, values) in zip(panels, series.columns.items(), strict=True):
        for words, line in _lines(quantity, values):
            panel.plot(across, line, label=words, linewidth=1.2)
        panel.set_ylabel(f"{quantity.replace('_', ' ')} [{UNITS.get(quantity, '')}]")
        if values.ndim > 1:
            panel.legend(fontsize=7, ncols=3, loc="best")
    save_figure(figure, target)
    return target


def plot_history(run: Any, path: PathLike) -> Path:
    """Draw the residuals of a run over its iterations or its time.

    Parameters
    ----------
    run : Run
    path : path ending in ``.png``

    Raises
    ------
    CaseError
        No run, or one without residuals, such as a mean.
    FileError
        The picture cannot be written.
    """
    expect_run(run, "plot_history(run, path)")
    target, history = target_path(path, (".png",)), run.history
    if "momentum" not in history:
        raise CaseError("This run has no residuals: it was not iterated.", got=run.name,
                        where="plot_history(run, path)",
                        remedy="Give the run that the mean was taken of.")
    iteration = history["iteration"]
    across, label = _axis(history.get("time", np.full(len(iteration), np.nan)), iteration)
    figure, panels = _panels(1, f"{run.name}: {run.outcome.name}", label)
    for name in ("momentum", "mass", "misfit"):
        values = np.where(history[name] > 0, history[name], np.nan)
        if np.isfinite(values).any():
            panels[0].semilogy(across, values, label=name, linewidth=1.2)
    panels[0].set_ylabel("residual")
    panels[0].legend(fontsize=8)
    save_figure(figure, target)
    return target


def _axis(time: np.ndarray, iteration: np.ndarray) -> tuple[np.ndarray, str]:
    if len(time) and np.all(np.isfinite(time)):
        return time, "time [s]"
    return iteration, "iteration (no time)"


def _panels(count: int, title: str, label: str) -> tuple[Any, Any]:
    from matplotlib.figure import Figure
    figure = Figure(figsize=(9.0, 1.2 + 2.3 * count), layout="constrained")
    panels = np.atleast_1d(figure.subplots(count, 1, sharex=True))
    figure.suptitle(title, fontsize=11)
    panels[-1].set_xlabel(label)
    for panel in panels:
        panel.grid(alpha=0.3)
    return figure, panels


def _lines(quantity: str, values: np.ndarray) -> list[tuple[str, np.ndarray]]:
    """Words and values of the lines of a column, one value, vector or point after the other."""
    flat = values.reshape(len(values), -1)
    points = values.ndim > 1 and quantity in ("velocity", "pressure")
    axes = "xyz" if values.ndim == 3 or (values.ndim == 2 and not points) else ""
    lines = []
    for k in range(min(flat.shape[1], MOST)):
        point = f"point {k // max(len(axes), 1) + 1} " if points else ""
        lines.append((point + (axes[k % 3] if axes else ""), flat[:, k]))
    return lines


def save_figure(figure: Any, target: Path) -> None:
    """Write a figure aside and rename it."""
    write_aside(target, lambda aside: figure.savefig(aside, dpi=130))
