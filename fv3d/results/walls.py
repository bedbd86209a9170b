"""Pressure and shear on boundaries: as a file, and where the shear turns round."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from ..errors import CaseError
from ..flow.run import Run
from ..mesh.surfaces import edge_pairs
from .coefficients import unit_vector
from .diagnostics import boundary_faces, friction_force
from .files import PathLike, target_path, write_aside, write_xml


def wall_shear(run: Run, name: str) -> np.ndarray:
    """(n, 3) viscous force per area of the fluid on each face of a boundary [Pa].

    Times the areas it sums to ``force(run, name).friction``.

    Raises
    ------
    CaseError
        No run, or no such boundary.
    """
    faces = boundary_faces(run, name, where="wall_shear(run, name)")
    n = run.mesh.n_internal
    drag = friction_force(run)[faces.start - n:faces.stop - n]
    return drag / run.mesh.face_area_magnitude[faces, None]


def write_surface(run: Run, names: Sequence[str], *, path: PathLike) -> Path:
    """Write boundaries with pressure and shear, one VTK polygon per face.

    Cell data: ``pressure`` [Pa], ``wall_shear`` (viscous force per area of the fluid on the
    boundary) [Pa], ``area`` (vector out of the fluid) [m^2], ``velocity`` [m/s] and ``boundary``,
    the place of the face's boundary in ``names``.  Shear times area sums to the friction of
    :func:`force`, pressure times area to its pressure force where the faces are flat.

    Parameters
    ----------
    run : Run
    names : sequence of str
        Boundaries.
    path : path ending in ``.vtp`` or ``.vtu``

    Returns
    -------
    Path

    Raises
    ------
    CaseError
        No run, no such boundary, or no boundary at all.
    FileError
        The folder does not exist, the file cannot be written, or another ending.
    """
    where = "write_surface(run, names)"
    names = [names] if isinstance(names, str) else names
    slices = [boundary_faces(run, name, where=where) for name in _listed(names, where)]
    target = target_path(path, (".vtp", ".vtu"))
    mesh, n = run.mesh, run.mesh.n_internal
    faces = np.concatenate([np.arange(s.start, s.stop) for s in slices])
    surface = _polygons(run.mesh.points, mesh.face_points[faces])
    size = mesh.face_area_magnitude[faces, None]
    surface.cell_data["pressure"] = run.face_pressure[faces]
    surface.cell_data["wall_shear"] = friction_force(run)[faces - n] / size
    surface.cell_data["area"] = np.array(mesh.face_area[faces])
    surface.cell_data["velocity"] = run.state.boundary_velocity[faces - n]
    surface.cell_data["boundary"] = np.repeat(np.arange(len(slices), dtype=np.int32),
                                              [s.stop - s.start for s in slices])
    whole = surface.cast_to_unstructured_grid() if target.suffix == ".vtu" else surface
    return write_aside(target, lambda aside: write_xml(whole, aside))


def _listed(names: Any, where: str) -> Sequence[str]:
    whole = isinstance(names, Sequence) and all(isinstance(name, str) for name in names)
    if not whole or not len(names) or len(set(names)) < len(names):
        raise CaseError("The boundaries must be a list of different names.", where=where,
                        got=repr(names), remedy="Give ['strut', 'floor'], say.")
    return list(names)


def _polygons(points: np.ndarray, corners: np.ndarray) -> Any:
    """Surface of the faces (k, 4), -1 filling triangles, in their order."""
    import pyvista as pv
    used = np.unique(corners[corners >= 0])
    number = np.full(len(points), -1)
    number[used] = np.arange(len(used))
    cells = np.column_stack([np.where(corners[:, 3] < 0, 3, 4), number[corners]])
    keep = np.column_stack([np.ones(len(corners), bool), corners >= 0])
    return pv.PolyData(np.array(points[used]), faces=cells[keep])


@dataclass(frozen=True, eq=False)
class Reversals:
    """Places on a boundary where the shear along a direction changes its sign.

    Attributes
    ----------
    points : (n, 3) [m]
        In the order of their distance along the direction.
    reattaching : (n,) bool
        Whether the near-wall flow runs backwards in front of the point and forwards behind it;
        separating where not.
    direction : (3,)
    name : str
        Boundary.
    """

    points: np.ndarray
    reattaching: np.ndarray
    direction: np.ndarray
    name: str

    def __str__(self) -> str:
        if not len(self.points):
            return f"the shear on '{self.name}' keeps its sign along {self.direction.tolist()}"
        lines = [f"the shear on '{self.name}' turns round along {self.direction.tolist()} at "
                 "x, y, z [m]"]
        for point, joins in zip(self.points, self.reattaching, strict=True):
            kind = "reattaching" if joins else "separating"
            lines.append(f"  {kind:<12}" + " ".join(f"{x:12.5g}" for x in point))
        return "\n".join(lines)


def shear_reversals(run: Run, name: str, *, along: Sequence[float]) -> Reversals:
    """Separation and reattachment points on a boundary.

    Between neighbouring faces whose shear along the direction has opposite signs the place of
    zero shear is interpolated linearly; neighbours that lie beside each other (less than a tenth
    of their distance along the direction) are left out.

    Parameters
    ----------
    run : Run
    name : str
        Boundary.
    along : (3,)
        Direction of the main stream over the wall.

    Returns
    -------
    Reversals

    Raises
    ------
    CaseError
        No run, no such boundary, or no direction.
    """
    faces = boundary_faces(run, name, where="shear_reversals(run, name)")
    direction = unit_vector(along, "shear_reversals(along=)")
    shear = np.einsum("ij,j->i", wall_shear(run, name), direction)
    centre = run.mesh.face_centre[faces]
    one, other = edge_pairs(run.mesh.face_points[faces])
    step = centre[other] - centre[one]
    forward = np.einsum("ij,j->i", step, direction)
    swap = forward < 0
    one, other = np.where(swap, other, one), np.where(swap, one, other)
    behind = np.abs(forward) > 0.1 * np.linalg.norm(step, axis=1)
    turns = behind & ((shear[one] < 0) != (shear[other] < 0))
    one, other = one[turns], other[turns]
    share = (shear[one] / (shear[one] - shear[other]))[:, None]
    points = (1.0 - share) * centre[one] + share * centre[other]
    order = np.lexsort([*points.T, np.einsum("ij,j->i", points, direction)])
    return Reversals(points[order], shear[one[order]] < 0, direction, name)
