"""Parametric meshes of boxes and channels, each of hexahedra or tetrahedra."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from ..errors import MeshError
from .blocks import Block, join_blocks
from .grading import Grading, line
from .mesh import Mesh

BOX_SIDES = ("x_min", "x_max", "y_min", "y_max", "z_min", "z_max")


def box(lower: Sequence[float], upper: Sequence[float], *, cells: tuple[int, int, int],
        grading: Sequence[Grading | np.ndarray | None] | None = None, tetra: bool = False,
        names: Mapping[str, str] | None = None, skew: float = 0.0, seed: int = 0) -> Mesh:
    """Box of hexahedra or tetrahedra.

    Parameters
    ----------
    lower, upper : (3,) corners [m]
    cells : (n_x, n_y, n_z)
        Hexahedra along each axis; ``tetra`` cuts each into six.
    grading : three of Grading, node coordinates [m] or None; None for cells of one size
    tetra : bool
    names : mapping of side to boundary name
        Sides are ``x_min, x_max, y_min, y_max, z_min, z_max`` and keep that name where the
        mapping is silent; sides given the same name become one boundary.
    skew : float
        Moves every point by up to this share of the smaller spacing beside it, along each
        axis; points of a side stay on it and an axis of one cell stays straight. Below 0.5.
    seed : int
        Of the random shifts.

    Returns
    -------
    Mesh

    Raises
    ------
    MeshError
        Arguments that make no mesh.
    """
    sides = dict(zip(BOX_SIDES, BOX_SIDES))
    for side, name in (names or {}).items():
        if side not in sides:
            raise MeshError("A box has no such side.", where="box, names", got=side,
                            remedy=f"Use {', '.join(BOX_SIDES)}.")
        sides[side] = name
    if not 0.0 <= skew < 0.5:
        raise MeshError("The skew is out of range.", where="box", got=skew,
                        remedy="Give a share from 0 to below 0.5.")
    lines = [line(lower[axis], upper[axis], cells=cells[axis],
                  grading=None if grading is None else grading[axis],
                  where=f"box, {'xyz'[axis]}") for axis in range(3)]
    points = np.stack(np.meshgrid(*lines, indexing="ij"), axis=-1)
    if skew > 0.0:
        points = _shaken(points, lines, skew, seed)
    block = Block(points, {"ijk"[BOX_SIDES.index(side) // 2] + side[1:]: name
                           for side, name in sides.items()})
    return join_blocks([block], tetra=tetra, source="box")


def _shaken(points: np.ndarray, lines: list[np.ndarray], skew: float, seed: int) -> np.ndarray:
    random = np.random.default_rng(seed)
    points = points.copy()
    shape = [1 if len(nodes) == 2 else len(nodes) for nodes in lines]
    for axis, nodes in enumerate(lines):
        spacing = np.diff(nodes)
        room = np.zeros(len(nodes))
        room[1:-1] = np.minimum(spacing[1:], spacing[:-1])
        along = [1, 1, 1]
        along[axis] = len(nodes)
        points[..., axis] += skew * room.reshape(along) * random.uniform(-1.0, 1.0, shape)
    return points
