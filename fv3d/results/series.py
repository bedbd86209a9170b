"""Fields at many times: a series of VTK files with its index, and a strip of frames."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from ..errors import CaseError, FileError, Outcome, as_number
from ..flow.run import Run
from .canvas import frame_of_plane
from .files import PathLike, target_path, write_aside, write_vtk
from .lines import save_figure

UNDERWAY = Outcome("underway", "The run goes on.", "", True)


@dataclass(frozen=True, eq=False)
class FieldFiles:
    """Files of a series: ``time`` (n,) [s], or iterations, and their paths."""

    time: np.ndarray
    files: tuple[str, ...]


class VtkSeries:
    """A monitor that writes the fields as it goes: ``.vtu`` files and a ``.pvd`` index.

    The index is written anew after every file, so it is whole at any time.

    Parameters
    ----------
    path : path ending in ``.pvd``
        The files are named after it, with the number of the step.
    every : int, optional
        Steps between two files.
    seconds : float, optional
        Time between two files [s]; the first step at or after each multiple is written.
    name : str
        Key in ``run.series``.

    Raises
    ------
    FileError
        The folder does not exist, or another ending.
    CaseError
        Neither or both of ``every`` and ``seconds``, or not positive.
    """

    def __init__(self, path: PathLike, *, every: int | None = None, seconds: float | None = None,
                 name: str = "fields") -> None:
        given = [value for value in (every, seconds) if value is not None]
        if len(given) != 1 or not 0.0 < as_number(given[0]) < np.inf:
            raise CaseError("A series of fields needs one positive interval.",
                            where="VtkSeries(every= or seconds=)", got=(every, seconds),
                            remedy="Give every=10 steps, or seconds=0.1.")
        self.path, self.name = target_path(path, (".pvd",)), name
        self.every, self.seconds = every, seconds
        self._time: list[float] = []
        self._files: list[str] = []
        self._next = 0.0

    def see(self, problem: Any, state: Any, record: Any) -> str | None:
        """Write one file where it is due."""
        if self.every is not None and state.iteration % self.every:
            return None
        if self.seconds is not None:
            if np.isnan(state.time):
                raise CaseError("An iteration has no seconds.", where=f"VtkSeries '{self.name}'",
                                got="seconds=", remedy="Give every= in iterations.")
            if state.time < self._next - 1e-9 * self.seconds:
                return None
            self._next = (np.floor(state.time / self.seconds + 1e-9) + 1.0) * self.seconds
        run = Run(problem, state, {}, UNDERWAY, self.name)
        file = write_vtk(run, self.path.with_name(f"{self.path.stem}_{state.iteration:06d}.vtu"))
        self._time.append(float(state.iteration if np.isnan(state.time) else state.time))
        self._files.append(file.name)
        self._write_index()
        return None

    def _write_index(self) -> None:
        rows = "".join(f'    <DataSet timestep="{time!r}" part="0" file="{file}"/>\n'
                       for time, file in zip(self._time, self._files, strict=True))
        text = ('<?xml version="1.0"?>\n<VTKFile type="Collection" version="0.1">\n'
                f"  <Collection>\n{rows}  </Collection>\n</VTKFile>\n")

        def write(aside: Path) -> None:
            aside.write_text(text, encoding="utf-8")

        write_aside(self.path, write)

    def series(self) -> FieldFiles:
        """The files written so far."""
        folder = self.path.parent
        return FieldFiles(np.array(self._time), tuple(str(folder / file) for file in self._files))

    def restart(self) -> None:
        """Begin a new index: another run begins."""
        self._time, self._files, self._next = [], [], 0.0

    def stored(self) -> dict[str, Any]:
        """What was written, for a checkpoint."""
        return {"time": list(self._time), "files": list(self._files), "next": float(self._next)}

    def restore(self, stored: dict[str, Any]) -> None:
        """Go on from what a checkpoint kept."""
        self._time, self._files = list(stored["time"]), list(stored["files"])
        self._next = stored["next"]


def frame_strip(source: PathLike, path: PathLike, *, frames: int = 6,
                plane: tuple[Sequence[float], Sequence[float]] | None = None,
                limits: tuple[float, float] | None = None) -> Path:
    """Draw the speed on a plane at several times of a series, one below the other.

    Parameters
    ----------
    source : path of the ``.pvd`` index of a :class:`VtkSeries`
    path : path ending in ``.png``
    frames : int
        Frames, evenly over the series.
    plane : (point [m], normal), optional
        If not given, through the middle, normal to the thinnest extent.
    limits : (lowest, highest), optional
        Speed at the ends of the colour bar [m/s]; common to all frames in any case.

    Raises
    ------
    FileError
        The index cannot be read, the picture not be written.
    CaseError
        Fewer than one frame, a plane that does not cut the mesh.
    """
    from xml.etree import ElementTree

    import pyvista as pv
    target = target_path(path, (".png",))
    if not os.path.isfile(source):
        raise FileError("There is no such series.", where=str(source), got="no file",
                        remedy="Give the .pvd file that VtkSeries wrote.")
    if not as_number(frames) >= 1:
        raise CaseError("A strip has one frame at least.", where="frame_strip(frames=)",
                        got=frames, remedy="Give 6, say.")
    try:
        reader = pv.get_reader(os.fspath(source))
        times = np.array(reader.time_values)
    except (ElementTree.ParseError, ValueError, KeyError, TypeError, AttributeError) as error:
        raise FileError("The index of the series cannot be read.", where=str(source),
                        got=f"{type(error).__name__}: {error}",
                        remedy="Give the .pvd file that VtkSeries wrote, undamaged.") from error
    chosen = np.unique(np.linspace(0, len(times) - 1, int(frames)).round().astype(int))
    cuts = []
    for k in chosen:
        reader.set_active_time_point(int(k))
        cuts.append(_cut(reader.read()[0], plane))
    save_figure(_strip(cuts, times[chosen], limits), target)
    return target


def _cut(grid: Any, plane: Any) -> Any:
    """Triangles of a slice, with speed at the points and the plane's frame."""
    low, high = np.array(grid.bounds).reshape(3, 2).T
    if plane is None:
        normal = np.eye(3)[int(np.argmin(high - low))]
        origin = 0.5 * (low + high) + 1e-5 * (high - low) * normal
    else:
        origin, normal = (np.asarray(part, dtype=float) for part in plane)
        normal = normal / np.linalg.norm(normal)
    grid["speed"] = np.linalg.norm(grid["velocity"], axis=1)
    cut = grid.cell_data_to_point_data().slice(origin=origin, normal=normal).triangulate()
    if cut.n_points == 0:
        raise CaseError("The plane does not cut the mesh.", where="frame_strip(plane=)",
                        got=f"point {origin.tolist()}, normal {normal.tolist()}",
                        remedy="Choose a point inside the mesh.")
    frame = frame_of_plane(cut.points, origin=origin, normal=normal)
    return (cut.points @ frame.right, cut.points @ frame.up, cut.faces.reshape(-1, 4)[:, 1:],
            np.array(cut["speed"]), frame)


def _strip(cuts: list[Any], times: np.ndarray, limits: tuple[float, float] | None) -> Any:
    from matplotlib.figure import Figure
    frame = cuts[0][4]
    low, high = limits or (min(cut[3].min() for cut in cuts), max(cut[3].max() for cut in cuts))
    wide = 10.0
    tall = max(wide * frame.height / frame.width, 0.8) + 0.45
    figure = Figure(figsize=(wide, tall * len(cuts) + 1.2), layout="constrained")
    axes = np.atleast_1d(figure.subplots(len(cuts), 1, sharex=True, sharey=True))
    for axis, (x, y, triangles, speed, _), time in zip(axes, cuts, times, strict=True):
        drawn = axis.tripcolor(x, y, triangles, speed, shading="gouraud", vmin=low, vmax=high)
        axis.set_aspect("equal")
        axis.set_title(f"{time:.6g} s", loc="left", fontsize=9)
        axis.set_ylabel(frame.labels[1])
    axes[-1].set_xlabel(frame.labels[0])
    figure.colorbar(drawn, ax=axes.tolist(), location="bottom", label="speed [m/s]", shrink=0.5,
                    aspect=40)
    return figure
