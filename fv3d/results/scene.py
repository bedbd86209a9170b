"""The readings inside the translucent mesh, seen at a slant."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from ..measured.readings import Readings
from ..mesh.mesh import Mesh
from .canvas import FONT, add_text, group_colours, legend, quiet, save_picture, ticks, title_width

WIDTH, LOWEST, HIGHEST, SURROUND = 1800, 700, 1300, 440  # pixels
DIRECTION = np.array([0.45, 0.4, 0.8])  # from the mesh to the eye: right, up, toward
MARGIN = 0.74  # share of the width of the window the mesh fills


def draw_scene(mesh: Mesh, readings: Readings, *, path: Path, title: str) -> None:
    """Draw mesh surface, edges, box with axes in metres, and the readings by group."""
    import pyvista as pv
    quiet()
    low, high = mesh.points.min(axis=0), mesh.points.max(axis=0)
    view = _view_of(low, high)
    plotter: Any = pv.Plotter(off_screen=True, window_size=list(view.size))
    plotter.set_background("white")
    plotter.enable_anti_aliasing("ssaa")
    surface = surface_of(mesh)
    plotter.add_mesh(surface, color="#7aa6c2", opacity=0.16, lighting=False)
    edges = surface.extract_feature_edges(feature_angle=35, boundary_edges=True)
    if edges.n_points:
        plotter.add_mesh(edges, color="#33506a", line_width=2, lighting=False)
    colours = group_colours(readings.group)
    group_of = np.array(readings.group)
    ball = pv.Sphere(radius=10 * view.scale, theta_resolution=24, phi_resolution=24)
    for group, colour in colours.items():
        balls = pv.PolyData(np.array(readings.point[group_of == group])).glyph(
            geom=ball, scale=False, orient=False)
        plotter.add_mesh(balls, color=colour, smooth_shading=True, ambient=0.45)
    _axes(plotter, low, high, view)
    top = view.size[1] - 60
    add_text(plotter, title, at=(40, top), size=FONT + 6, bold=True)

    def dot(at: tuple[float, float], colour: str, size: int) -> None:
        if colour != "black":
            plotter.add_mesh(pv.Sphere(radius=10 * view.scale, center=view.point_at(*at)),
                             color=colour, smooth_shading=True, ambient=0.45)
    legend(plotter, colours, top=top, right=WIDTH - 40, left=40 + title_width(title), dot=dot)
    _aim(plotter, view)
    save_picture(plotter, path)


def surface_of(mesh: Mesh) -> Any:
    """Boundary faces of a mesh as pyvista polygons."""
    import pyvista as pv
    faces = mesh.face_points[mesh.n_internal:]
    three = faces[:, 3] < 0
    parts = [np.insert(faces[three, :3], 0, 3, axis=1).ravel(),
             np.insert(faces[~three], 0, 4, axis=1).ravel()]
    return pv.PolyData(np.array(mesh.points), faces=np.concatenate(parts).astype(np.int64)).clean()


@dataclass(frozen=True, eq=False)
class _View:
    """Parallel view: directions of the picture in space, its middle, metres per pixel, size."""

    right: np.ndarray
    up: np.ndarray
    middle: np.ndarray
    scale: float
    size: tuple[int, int]

    @property
    def toward(self) -> np.ndarray:
        """Unit vector to the eye."""
        return np.cross(self.right, self.up)

    def pixel(self, points: np.ndarray) -> np.ndarray:
        """(n, 2) pixels of points (n, 3)."""
        arm = (points - self.middle) / self.scale
        return np.stack([arm @ self.right + self.size[0] / 2,
                         arm @ self.up + self.size[1] / 2], axis=1)

    def point_at(self, x: float, y: float) -> np.ndarray:
        """Point in space, in front of everything, that appears at a pixel."""
        return (self.middle + self.right * (x - self.size[0] / 2) * self.scale
                + self.up * (y - self.size[1] / 2) * self.scale + self.toward * self.scale * WIDTH)


def _view_of(low: np.ndarray, high: np.ndarray) -> _View:
    """Longest axis across, the corners of the box inside the margins."""
    extent = high - low
    across = int(np.argmax(extent >= extent.max() * (1 - 1e-6)))
    first, second = np.eye(3)[across], np.eye(3)[1 if across != 1 else 2]
    toward = DIRECTION @ np.array([first, second, np.cross(first, second)])
    right = np.cross(second, toward)
    right /= np.linalg.norm(right)
    up = np.cross(toward, right) / np.linalg.norm(toward)
    middle = 0.5 * (low + high)
    arm = _corners(low, high) - middle
    half = np.abs(np.stack([arm @ right, arm @ up])).max(axis=1)
    scale = float(max(2 * half[0] / (MARGIN * WIDTH), 2 * half[1] / (HIGHEST - SURROUND)))
    height = int(np.clip(2 * half[1] / scale + SURROUND, LOWEST, HIGHEST))
    return _View(right, up, middle, scale, (WIDTH, height))


def _aim(plotter: Any, view: _View) -> None:
    camera, reach = plotter.camera, view.scale * WIDTH
    camera.focal_point, camera.up = view.middle, view.up
    camera.position = view.middle + view.toward * 4 * reach
    camera.parallel_projection = True
    camera.parallel_scale = 0.5 * view.scale * view.size[1]
    camera.clipping_range = (0.1 * reach, 10 * reach)


def _corners(low: np.ndarray, high: np.ndarray) -> np.ndarray:
    return np.array([[(low, high)[(k >> axis) & 1][axis] for axis in range(3)] for k in range(8)])


def _axes(plotter: Any, low: np.ndarray, high: np.ndarray, view: _View) -> None:
    """Marks along the outermost edge of the box in each direction, the longest edges first."""
    import pyvista as pv
    ends: list[np.ndarray] = []
    taken: list[np.ndarray] = []
    edges = [(axis, *_outer_edge(low, high, axis, view)) for axis in range(3)]
    lengths = [float(np.linalg.norm(np.diff(view.pixel(np.array(edge[1:3])), axis=0)))
               for edge in edges]
    for k in np.argsort(lengths)[::-1]:
        axis, begin, stop, out = edges[k]
        ends += [begin, stop]
        for mark in ticks(low[axis], high[axis], most=max(int(lengths[k] / 150), 1)):
            at = begin.copy()
            at[axis] = mark
            outward = (view.right * out[0] + view.up * out[1]) * view.scale
            where = view.pixel(at[None])[0] + 22 * out
            if any(np.all(np.abs(where - other) < (75, 36)) for other in taken):
                continue  # labels must not touch
            taken.append(where)
            ends += [at, at + 12 * outward]
            _label(plotter, f"{mark:.6g}", where, out)
        middle = view.pixel(np.array([begin, stop])).mean(axis=0)
        _label(plotter, f"{'xyz'[axis]} [m]", middle + 100 * out, out)
    plotter.add_mesh(pv.line_segments_from_points(np.array(ends)), color="black", line_width=2,
                     lighting=False)


def _outer_edge(low: np.ndarray, high: np.ndarray, axis: int,
                view: _View) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Begin and end of the lowest outline edge along an axis, and its outward pixel direction."""
    corners = _corners(low, high)
    seen = view.pixel(corners)
    found = []
    for begin in corners[np.isclose(corners[:, axis], low[axis], rtol=0, atol=1e-9 * view.scale)]:
        stop = begin.copy()
        stop[axis] = high[axis]
        pixels = view.pixel(np.array([begin, stop]))
        along = pixels[1] - pixels[0]
        normal = np.array([along[1], -along[0]]) / max(float(np.linalg.norm(along)), 1e-12)
        side = (seen - pixels[0]) @ normal
        if side.min() > -1e-3 or side.max() < 1e-3:  # the whole box on one side: outline
            out = -normal if side.max() > 1e-3 else normal
            found.append((out[1] + 0.3 * out[0], begin, stop, out))
    _, begin, stop, out = min(found, key=lambda edge: edge[0])
    return begin, stop, out


def _label(plotter: Any, words: str, at: np.ndarray, out: np.ndarray) -> None:
    across = "left" if out[0] > 0.5 else "right" if out[0] < -0.5 else "centre"
    drop = 26 if out[1] < -0.5 else 11
    add_text(plotter, words, at=(float(at[0]), float(at[1]) - drop), across=across)
