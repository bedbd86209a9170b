"""Pictures: a slice of speed with the readings on it, the readings inside the mesh.

Drawn off-screen.  Where nothing can be drawn a warning says so and the run goes on.
"""

from __future__ import annotations

import warnings
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from ..errors import (
    CaseError,
    FileError,
    Fv3dWarning,
    as_number,
    expect_mesh,
    expect_readings,
    expect_run,
)
from ..measured.readings import Readings, check_inside
from ..mesh.mesh import Mesh
from .canvas import Canvas, frame_of_plane
from .files import PathLike, as_path, check_folder, vtk_grid, write_aside

ENDINGS = (".png",)


def picture(run: Any, path: PathLike, *, readings: Readings | None = None,
            plane: tuple[Sequence[float], Sequence[float]] | None = None,
            limits: tuple[float, float] | None = None, title: str | None = None) -> Path | None:
    """Draw the speed of a run on a plane, with the readings on it.

    Parameters
    ----------
    run : Run
    path : path ending in ``.png``
    readings : Readings, optional
        All of them are drawn, moved along the normal onto the plane; one colour per group.
    plane : (point [m], normal), optional
        If not given, through the middle, normal to the thinnest extent of the mesh.
    limits : (lowest, highest), optional
        Speed at the ends of the colour bar [m/s].
    title : str, optional
        Above the picture; the name of the run if not given.

    Returns
    -------
    Path, or None with a warning where nothing can be drawn.

    Raises
    ------
    FileError
        The folder does not exist or the file cannot be written.
    CaseError
        No run, a plane that has no direction or does not cut the mesh, limits that do not
        ascend.
    ReadingError
        No table of readings, or a reading outside the mesh.
    """
    expect_run(run, "picture(run, path)")
    target, limits = _target(path), _checked_limits(limits)
    mesh = run.mesh
    if readings is not None:
        expect_readings(readings, "picture(readings=)")
        check_inside(mesh, readings)
    point, normal = _middle(mesh) if plane is None else _checked(plane)
    speed = np.linalg.norm(run.velocity, axis=1)
    grid = vtk_grid(mesh, cell_data={"speed": speed})
    cut = grid.cell_data_to_point_data().slice(origin=point, normal=normal)
    if cut.n_points == 0:
        raise CaseError("The plane does not cut the mesh.", where="picture(plane=...)",
                        got=f"point {point.tolist()}, normal {normal.tolist()}",
                        remedy="Choose a point inside the mesh.")

    def draw(aside: Path) -> None:
        frame = frame_of_plane(cut.points, origin=point, normal=normal)
        canvas = Canvas(frame, title=title or str(run.name))
        canvas.field(cut, "speed", label="speed [m/s]", limits=limits)
        canvas.lines(cut.extract_feature_edges(boundary_edges=True, feature_edges=False,
                                               non_manifold_edges=False, manifold_edges=False))
        if readings is not None:
            canvas.points(readings.point, readings.group)
        canvas.save(aside)
    return _draw_aside(target, draw)


def picture_readings(mesh: Mesh, readings: Readings, *, path: PathLike,
                     title: str = "readings in the mesh") -> Path | None:
    """Draw the readings inside the translucent mesh, before any solve.

    Parameters
    ----------
    mesh : Mesh
    readings : Readings
        One colour per group.
    path : path ending in ``.png``
    title : str

    Returns
    -------
    Path, or None with a warning where nothing can be drawn.

    Raises
    ------
    FileError
        The folder does not exist or the file cannot be written.
    MeshError
        Not a mesh.
    ReadingError
        Not a table of readings, or a reading outside the mesh: the first one is named.
    """
    expect_mesh(mesh, "picture_readings(mesh, readings, path=)")
    expect_readings(readings, "picture_readings(mesh, readings, path=)")
    target = _target(path)
    check_inside(mesh, readings)

    def draw(aside: Path) -> None:
        from .scene import draw_scene
        draw_scene(mesh, readings, path=aside, title=title)
    return _draw_aside(target, draw)


def _target(path: PathLike) -> Path:
    target = as_path(path)
    if target.suffix.lower() not in ENDINGS:
        raise FileError("A picture is written as PNG.", where=str(target),
                        got=target.suffix or "no ending", remedy="Let the name end in .png.")
    check_folder(target)
    return target


class _CannotDraw(Exception):
    """The graphics system failed."""


def _draw_aside(target: Path, draw: Callable[[Path], None]) -> Path | None:
    """Draw beside the target and rename; what the graphics system throws becomes a warning."""
    def guarded(aside: Path) -> None:
        try:
            draw(aside)
        except Exception as error:
            raise _CannotDraw(str(error) or type(error).__name__) from error
    try:
        return write_aside(target, guarded)
    except _CannotDraw as error:
        warnings.warn(f"No picture {target.name}: drawing failed ({error}). All else "
                      "goes on. Where no picture at all can be drawn, OpenGL is missing: the "
                      "system library Mesa will do.", Fv3dWarning, stacklevel=3)
        return None


def _middle(mesh: Mesh) -> tuple[np.ndarray, np.ndarray]:
    """Middle plane normal to the thinnest extent; of equal extents the last axis."""
    low, high = mesh.points.min(axis=0), mesh.points.max(axis=0)
    extent = high - low
    axis = max(np.flatnonzero(extent <= extent.min() * (1 + 1e-6)))
    point = 0.5 * (low + high)
    point[axis] += 1e-5 * extent[axis]  # off a layer of faces in the very middle
    return point, np.eye(3)[axis]


def _checked_limits(limits: Any) -> tuple[float, float] | None:
    """Two ascending finite speeds, or None."""
    if limits is None:
        return None
    pair = () if isinstance(limits, str) or not np.iterable(limits) else tuple(limits)
    numbers = [as_number(value) for value in pair]
    if len(numbers) != 2 or not -np.inf < numbers[0] < numbers[1] < np.inf:
        raise CaseError("The limits of the colours are two ascending speeds.",
                        where="picture(limits=)", got=repr(limits),
                        remedy="Give (0.0, 2.0), say [m/s], or leave them out.")
    return numbers[0], numbers[1]


def _checked(plane: Any) -> tuple[np.ndarray, np.ndarray]:
    try:
        point, normal = (np.array(part, dtype=np.float64) for part in plane)
        length = np.linalg.norm(normal)
        good = point.shape == normal.shape == (3,) and 0 < length < np.inf
    except (TypeError, ValueError):
        good = False
    if not good or not np.isfinite(point).all():
        raise CaseError("A plane is a point and a normal.", where="picture(plane=...)",
                        got=repr(plane), remedy="Give ((x, y, z), (nx, ny, nz)), the normal not "
                                                "zero.")
    return point, normal / length
