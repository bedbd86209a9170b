"""A flat picture in true scale: a cut through the field, axes in metres, colour bar, readings.

Everything is placed in pixels first; the parallel camera is then set so that one metre has the
same number of pixels in both directions.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

WIDTH, LEFT, RIGHT, TOP, BOTTOM = 1800, 200, 70, 110, 250
LOWEST, HIGHEST = 120, 950  # of the field [pixels]
FONT = 30
# Colours told apart by readers of every colour vision (Okabe and Ito, 2008).
PALETTE = ("#E69F00", "#CC79A7", "#D55E00", "#56B4E9", "#009E73", "#F0E442", "#0072B2")
OTHERS = "#999999"


@dataclass(frozen=True)
class Frame:
    """A plane as seen: the corner, the directions to the right and up, and the size [m]."""

    corner: np.ndarray
    right: np.ndarray
    up: np.ndarray
    width: float
    height: float
    labels: tuple[str, str]
    start: tuple[float, float]

    @property
    def toward(self) -> np.ndarray:
        """Unit vector from the plane to the eye."""
        return np.cross(self.right, self.up)


def frame_of_plane(points: np.ndarray, *, origin: np.ndarray, normal: np.ndarray) -> Frame:
    """Look along the normal, the longest extent of the points (n, 3) across the picture."""
    axes = np.delete(np.eye(3), np.argmax(np.abs(normal)), axis=0)
    extent = np.ptp(points @ axes.T, axis=0)
    order = (0, 1) if extent[0] >= extent[1] * (1 - 1e-6) else (1, 0)
    right = axes[order[0]] - normal * (normal @ axes[order[0]])
    right /= np.linalg.norm(right)
    up = np.cross(normal, right)
    up *= np.sign(up @ axes[order[1]]) or 1.0
    names = tuple(_axis_name(direction) for direction in (right, up))
    across, along = points @ right, points @ up
    # Slanted axes count from the origin of the plane, named axes in mesh coordinates.
    zero = [0.0 if name in "xyz" else float(origin @ direction)
            for name, direction in zip(names, (right, up), strict=True)]
    corner = right * across.min() + up * along.min() + normal * (normal @ origin)
    return Frame(corner, right, up, float(np.ptp(across)), float(np.ptp(along)),
                 (f"{names[0]} [m]", f"{names[1]} [m]"),
                 (float(across.min()) - zero[0], float(along.min()) - zero[1]))


def _axis_name(direction: np.ndarray) -> str:
    axis = int(np.argmax(np.abs(direction)))
    return "xyz"[axis] if direction[axis] > 1 - 1e-9 else "distance in the plane"


def group_colours(groups: Sequence[str]) -> dict[str, str]:
    """A colour for each group in the order they appear; grey from the eighth on."""
    return {group: PALETTE[k] if k < len(PALETTE) else OTHERS
            for k, group in enumerate(dict.fromkeys(groups))}


def ticks(start: float, stop: float, *, most: int) -> np.ndarray:
    """Round numbers (1, 2, 5 times a power of ten) between two ends: about ``most``, at least two.

    Examples
    --------
    >>> ticks(0.0, 0.41, most=4).round(3).tolist()
    [0.0, 0.1, 0.2, 0.3, 0.4]
    """
    power = 10.0 ** np.floor(np.log10((stop - start) / max(most, 1)))
    marks = np.empty(0)
    for factor in (10.0, 5.0, 2.0, 1.0, 0.5, 0.2):
        step = factor * power
        first, last = np.ceil(start / step - 1e-3), np.floor(stop / step + 1e-3)
        if len(marks) >= 2 and last - first > most:
            break
        marks = np.arange(first, last + 1) * step + 0.0  # no minus zero
    return marks


class Canvas:
    """A picture under construction; :meth:`save` writes it."""

    def __init__(self, frame: Frame, *, title: str) -> None:
        import pyvista as pv
        self.frame = frame
        room = WIDTH - LEFT - RIGHT
        height = float(np.clip(room * frame.height / frame.width, LOWEST, HIGHEST))
        self.scale = max(frame.width / room, frame.height / height)  # metres per pixel
        self.size = (WIDTH, round(height) + TOP + BOTTOM)
        self.field_pixels = (frame.width / self.scale, frame.height / self.scale)
        self.origin = (LEFT + 0.5 * (room - self.field_pixels[0]),
                       BOTTOM + 0.5 * (height - self.field_pixels[1]))
        quiet()
        plotter: Any = pv.Plotter(off_screen=True, window_size=list(self.size))
        plotter.set_background("white")
        plotter.enable_anti_aliasing("ssaa")
        self.plotter = plotter
        self.text(title, (LEFT, self.size[1] - 56), size=FONT + 6, bold=True)
        self.free = LEFT + title_width(title)  # pixel where the title ends
        self._axes()

    def place(self, x: float, y: float, *, lift: float = 0.0) -> np.ndarray:
        """Point [m] that appears at pixel (x, y), lifted toward the eye by so many pixels."""
        frame = self.frame
        return (frame.corner + frame.right * (x - self.origin[0]) * self.scale
                + frame.up * (y - self.origin[1]) * self.scale
                + frame.toward * lift * self.scale)

    def text(self, words: str, at: tuple[float, float], *, size: int = FONT, bold: bool = False,
             across: str = "left", turned: bool = False) -> None:
        """Write words at a pixel; ``across`` is left, centre or right."""
        add_text(self.plotter, words, at=at, size=size, bold=bold, across=across, turned=turned)

    def lines(self, edges: Any) -> None:
        """Draw thin black lines."""
        if edges.n_points:
            edges.points += self.frame.toward * self.scale
            self.plotter.add_mesh(edges, color="black", line_width=3, lighting=False)

    def field(self, cut: Any, name: str, *, label: str,
              limits: tuple[float, float] | None = None) -> None:
        """Colour a cut by one of its arrays, with a colour bar below."""
        values = cut[name]
        low, high = limits if limits else (float(values.min()), float(values.max()))
        if not high > low:
            low, high = low - 0.5, high + 0.5
        self.plotter.add_mesh(cut, scalars=name, cmap="viridis", clim=(low, high),
                              lighting=False, show_scalar_bar=False)
        self._colour_bar(low, high, label)

    def points(self, points: np.ndarray, groups: Sequence[str]) -> None:
        """Mark readings on the plane and list their groups beside the title."""
        frame = self.frame
        flat = points - np.outer((points - frame.corner) @ frame.toward, frame.toward)
        colours = group_colours(groups)
        group_of = np.array(groups)
        self._dots(flat + frame.toward * 3 * self.scale, "black", 22)
        for group, colour in colours.items():
            self._dots(flat[group_of == group] + frame.toward * 6 * self.scale, colour, 15)
        legend(self.plotter, colours, top=self.size[1] - 56, right=WIDTH - RIGHT, left=self.free,
               dot=lambda at, colour, size: self._dots(
                   self.place(*at, lift=3 if colour == "black" else 6)[None], colour, size))

    def save(self, path: Path) -> None:
        """Write the picture as PNG."""
        frame, (width, height) = self.frame, self.size
        middle = self.place(0.5 * width, 0.5 * height)
        distance = 10 * max(frame.width, frame.height)
        camera = self.plotter.camera
        camera.focal_point, camera.position = middle, middle + frame.toward * distance
        camera.up = frame.up
        camera.parallel_projection = True
        camera.parallel_scale = 0.5 * height * self.scale
        camera.clipping_range = (0.1 * distance, 2 * distance)
        save_picture(self.plotter, path)

    def _dots(self, points: np.ndarray, colour: str, size: int) -> None:
        """Round marks of so many pixels across, facing the eye."""
        import pyvista as pv
        disc = pv.Disc(inner=0.0, outer=0.5 * size * self.scale, normal=self.frame.toward, c_res=32)
        marks = pv.PolyData(np.array(points)).glyph(geom=disc, scale=False, orient=False)
        self.plotter.add_mesh(marks, color=colour, lighting=False)

    def _strokes(self, ends: list[tuple[np.ndarray, np.ndarray]]) -> None:
        import pyvista as pv
        self.plotter.add_mesh(pv.line_segments_from_points(np.concatenate(ends)), color="black",
                              line_width=3, lighting=False)

    def _axes(self) -> None:
        frame, (x, y), (wide, high) = self.frame, self.origin, self.field_pixels
        strokes = [(self.place(x, y - 14), self.place(x + wide, y - 14)),
                   (self.place(x - 14, y), self.place(x - 14, y + high))]
        longest = 1
        for k, (size, most) in enumerate(((frame.width, int(wide / 170)),
                                          (frame.height, int(high / 120)))):
            begin = frame.start[k]
            for mark in ticks(begin, begin + size, most=max(most, 1)):
                along = (mark - begin) / self.scale
                at = (x + along, y - 14) if k == 0 else (x - 14, y + along)
                out = (at[0], at[1] - 10) if k == 0 else (at[0] - 10, at[1])
                strokes.append((self.place(*at), self.place(*out)))
                if k == 0:
                    self.text(f"{mark:.6g}", (at[0], at[1] - 44), across="centre")
                else:
                    self.text(f"{mark:.6g}", (at[0] - 18, at[1] - 11), across="right")
                    longest = max(longest, len(f"{mark:.6g}"))
        self._strokes(strokes)
        self.text(frame.labels[0], (x + 0.5 * wide, y - 94), across="centre")
        self.text(frame.labels[1], (x - 50 - 18 * longest, y + 0.5 * high), across="centre",
                  turned=True)

    def _colour_bar(self, low: float, high: float, label: str) -> None:
        import pyvista as pv
        wide, at, thick = 900.0, (0.5 * (WIDTH - 900.0), 92.0), 26.0
        steps = np.linspace(0.0, 1.0, 257)
        lower = [self.place(at[0] + share * wide, at[1]) for share in steps]
        upper = [self.place(at[0] + share * wide, at[1] + thick) for share in steps]
        bar = pv.StructuredGrid()
        bar.points = np.array(lower + upper)
        bar.dimensions = (257, 2, 1)
        bar["share"] = np.tile(steps, 2)
        self.plotter.add_mesh(bar, scalars="share", cmap="viridis", lighting=False,
                              show_scalar_bar=False)
        for mark in ticks(low, high, most=6):
            x = at[0] + wide * (mark - low) / (high - low)
            self._strokes([(self.place(x, at[1]), self.place(x, at[1] - 10))])
            self.text(f"{mark:.6g}", (x, at[1] - 40), across="centre")
        self.text(label, (0.5 * WIDTH, at[1] - 80), across="centre")


def title_width(title: str) -> float:
    """Pixels a bold title takes at most, with a gap behind it."""
    return 0.66 * (FONT + 6) * len(title) + 40


def quiet() -> None:
    """Keep VTK's remarks on a missing display off the console."""
    from vtkmodules.vtkCommonCore import vtkLogger
    vtkLogger.SetStderrVerbosity(vtkLogger.VERBOSITY_OFF)


def add_text(plotter: Any, words: str, *, at: tuple[float, float], size: int = FONT,
             bold: bool = False, across: str = "left", turned: bool = False) -> None:
    """Write words at a pixel of the window; ``across`` is left, centre or right."""
    from vtkmodules.vtkRenderingCore import vtkTextActor
    actor = vtkTextActor()
    actor.SetInput(words)
    actor.SetPosition(*at)
    style = actor.GetTextProperty()
    style.SetFontSize(size)
    style.SetColor(0.0, 0.0, 0.0)
    style.SetBold(bold)
    style.SetJustification({"left": 0, "centre": 1, "right": 2}[across])
    if turned:
        style.SetOrientation(90.0)
    plotter.add_actor(actor, name=f"text {len(plotter.actors)}", reset_camera=False)


def legend(plotter: Any, colours: dict[str, str], *, top: float, right: float, left: float,
           dot: Any) -> None:
    """List the groups in one row between two pixels, as many as fit.

    ``dot(at, colour, size)`` draws a mark.
    """
    size = FONT - 4
    entries = [(name if len(name) <= 22 else name[:20] + "...", colour)
               for name, colour in colours.items() if colour != OTHERS]
    if len(entries) < len(colours):
        entries.append(("others", OTHERS))
    wide = [62 + 0.56 * size * len(words) for words, _ in entries]
    while len(entries) > 1 and sum(wide) > right - left:
        entries, wide = [*entries[:-2], ("...", "")], [*wide[:-2], 62 + 0.56 * size * 3]
    for (words, colour), width in zip(reversed(entries), reversed(wide), strict=True):
        add_text(plotter, words, at=(right, top), across="right", size=size)
        if colour:
            at = (right - width + 38, top + 10)
            dot(at, "black", 22)
            dot(at, colour, 15)
        right -= width


def save_picture(plotter: Any, path: Path) -> None:
    """Render and write; the window is closed in any case."""
    try:
        plotter.screenshot(str(path), return_img=False)
    finally:
        plotter.close()
