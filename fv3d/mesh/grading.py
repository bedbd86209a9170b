"""Where the nodes of a line go: smooth cell-size distributions for the mesh generators.

Every grading is a smooth map of the unit interval, so a family with twice, three times ...
the cells contains the nodes of its coarsest member.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from ..errors import MeshError


class Grading(Protocol):
    """What a generator needs to know of a grading."""

    def nodes(self, lower: float, upper: float, cells: int) -> np.ndarray:
        """(cells + 1,) node coordinates from ``lower`` to ``upper`` [m]."""
        ...


@dataclass(frozen=True)
class Uniform:
    """Cells of one size."""

    def nodes(self, lower: float, upper: float, cells: int) -> np.ndarray:
        """(cells + 1,) node coordinates from ``lower`` to ``upper`` [m]."""
        return np.linspace(lower, upper, cells + 1)


@dataclass(frozen=True)
class TwoSided:
    """Cells clustered smoothly towards both ends (tanh; Vinokur, 1983).

    Attributes
    ----------
    ratio : float
        Size of the middle cells over that of the end cells, in the limit of many cells.
    """

    ratio: float

    def nodes(self, lower: float, upper: float, cells: int) -> np.ndarray:
        """(cells + 1,) node coordinates from ``lower`` to ``upper`` [m]."""
        share = np.linspace(0.0, 1.0, cells + 1)
        if _ratio(self.ratio, "TwoSided", least=1.0) > 1.0 + 1e-9:
            stretch = np.arccosh(np.sqrt(self.ratio))
            share = 0.5 + 0.5 * np.tanh(stretch * (2.0 * share - 1.0)) / np.tanh(stretch)
        return _between(lower, upper, share)


@dataclass(frozen=True)
class OneSided:
    """Cell sizes in geometric progression from one end to the other.

    Attributes
    ----------
    ratio : float
        Size of the last cell over that of the first, in the limit of many cells; below one
        the cells cluster at the upper end.
    """

    ratio: float

    def nodes(self, lower: float, upper: float, cells: int) -> np.ndarray:
        """(cells + 1,) node coordinates from ``lower`` to ``upper`` [m]."""
        share = np.linspace(0.0, 1.0, cells + 1)
        ratio = _ratio(self.ratio, "OneSided")
        if abs(ratio - 1.0) > 1e-9:
            share = np.expm1(np.log(ratio) * share) / (ratio - 1.0)
        return _between(lower, upper, share)


@dataclass(frozen=True)
class Spacing:
    """Wanted cell size at given places, linear between them and constant beyond.

    A size that grows by a share ``g`` of the distance gives cells that grow by ``1 + g``.

    Attributes
    ----------
    at : tuple of float
        Increasing coordinates [m].
    size : tuple of float
        Wanted cell size there [m].
    """

    at: tuple[float, ...]
    size: tuple[float, ...]

    def __post_init__(self) -> None:
        if len(self.at) != len(self.size) or not self.at:
            raise MeshError("A spacing needs one cell size per place.", where="Spacing",
                            got=f"{len(self.at)} places, {len(self.size)} sizes",
                            remedy="Give two tuples of the same length.")
        if np.any(np.diff(self.at) <= 0) or not np.all(np.array(self.size) > 0):
            raise MeshError("Places must increase and cell sizes be positive.", where="Spacing",
                            got=f"at={self.at}, size={self.size}",
                            remedy="Sort the places and check the sizes.")

    def wanted_cells(self, lower: float, upper: float) -> int:
        """Number of cells of the wanted sizes that fit between two coordinates."""
        return max(1, round(float(self._count(lower, upper)[1][-1])))

    def nodes(self, lower: float, upper: float, cells: int) -> np.ndarray:
        """(cells + 1,) node coordinates from ``lower`` to ``upper`` [m], sizes scaled to fit."""
        place, count = self._count(lower, upper)
        share = np.interp(np.linspace(0.0, count[-1], cells + 1), count, place)
        return _between(lower, upper, (share - lower) / (upper - lower))

    def _count(self, lower: float, upper: float) -> tuple[np.ndarray, np.ndarray]:
        """Places and the running number of cells, integral of one over size."""
        inside = [x for x in self.at if lower < x < upper]
        place = np.unique(np.concatenate([np.linspace(lower, upper, 20001), inside]))
        size = np.interp(place, self.at, self.size)
        step = np.diff(place) * (1 / size[1:] + 4 / (0.5 * (size[1:] + size[:-1]))
                                 + 1 / size[:-1]) / 6.0
        return place, np.concatenate([[0.0], np.cumsum(step)])


def from_ends(start: float, stop: float, *, ends: tuple[float | None, float | None],
              coarsest: float, slope: float) -> Spacing:
    """Sizes that grow by ``slope`` of the distance from both ends up to the coarsest [m].

    An end of None has no wish of its own.
    """
    place = np.linspace(start, stop, 1001)
    size = np.full(len(place), coarsest)
    for end, distance in zip(ends, (place - start, stop - place)):
        if end is not None:
            size = np.minimum(size, end + slope * distance)
    return Spacing(tuple(place.tolist()), tuple(size.tolist()))


def line(lower: float, upper: float, *, cells: int,
         grading: Grading | np.ndarray | None = None, where: str = "line") -> np.ndarray:
    """Nodes of one line of a mesh.

    Parameters
    ----------
    lower, upper : float
        Ends [m].
    cells : int
        Number of cells.
    grading : Grading, (cells + 1,) node coordinates [m], or None for cells of one size
    where : str
        Named in error messages.

    Returns
    -------
    (cells + 1,) increasing coordinates [m].

    Raises
    ------
    MeshError
        No cells, no length, or explicit nodes that do not fit.
    """
    if not isinstance(cells, int | np.integer) or cells < 1:
        raise MeshError("A line needs at least one cell.", where=where, got=cells,
                        remedy="Give a positive integer.")
    if not (np.isfinite(lower) and np.isfinite(upper) and upper > lower):
        raise MeshError("A line has no length.", where=where, got=f"{lower} to {upper}",
                        remedy="The upper end must lie above the lower.")
    if grading is None:
        grading = Uniform()
    if not isinstance(grading, np.ndarray | list | tuple):
        return grading.nodes(float(lower), float(upper), int(cells))
    nodes = np.array(grading, dtype=np.float64)
    tolerance = 1e-9 * (upper - lower)
    if (nodes.shape != (cells + 1,) or not np.all(np.diff(nodes) > 0)
            or abs(nodes[0] - lower) > tolerance or abs(nodes[-1] - upper) > tolerance):
        raise MeshError("Explicit nodes do not fit the line.", where=where,
                        got=f"{nodes.size} nodes from {nodes.flat[0]} to {nodes.flat[-1]}",
                        remedy=f"Give {cells + 1} increasing coordinates from {lower} to {upper}.")
    nodes[0], nodes[-1] = lower, upper
    return nodes


def _between(lower: float, upper: float, share: np.ndarray) -> np.ndarray:
    nodes = lower + (upper - lower) * share
    nodes[0], nodes[-1] = lower, upper
    return nodes


def _ratio(ratio: float, where: str, least: float = 0.0) -> float:
    if not np.isfinite(ratio) or ratio <= 0 or ratio < least:
        raise MeshError("A grading ratio is out of range.", where=where, got=ratio,
                        remedy=f"Give a finite ratio above {least:g}.")
    return float(ratio)
