"""Fully developed laminar velocity over an inlet of any shape.

Far down a straight duct the axial velocity solves ``viscosity * laplacian(w) = dp/ds`` in the
cross-section with ``w = 0`` on its walls.  It is solved by linear finite elements on the faces of
the inlet, each cut into triangles about its centre (Zienkiewicz, O. C. and Taylor, R. L. (2000),
The Finite Element Method, vol. 1); second order in the size of the faces.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import scipy.sparse as sparse
from scipy.sparse.linalg import spsolve

from ..errors import BoundaryError, as_number, did_you_mean, expect_mesh
from ..mesh.mesh import Mesh
from ..mesh.surfaces import rim_edges
from .fluid import Fluid
from .inlets import InletTable


@dataclass(frozen=True, eq=False)
class DevelopedProfile(InletTable):
    """Developed velocity at the centres of an inlet's faces and on its rim, see the verb.

    ``flow_rate`` [m^3/s], ``mean_speed`` [m/s], ``peak_speed`` [m/s] (largest of the values),
    ``pressure_gradient`` [Pa/m] along the stream (negative), ``area`` [m^2].
    """

    flow_rate: float = 0.0
    peak_speed: float = 0.0
    pressure_gradient: float = 0.0
    area: float = 0.0

    @property
    def mean_speed(self) -> float:
        """Flow rate over area [m/s]."""
        return self.flow_rate / self.area

    def __str__(self) -> str:
        return (f"developed profile: flow rate {self.flow_rate:.6g} m3/s, mean "
                f"{self.mean_speed:.6g} m/s, peak {self.peak_speed:.6g} m/s, pressure gradient "
                f"{self.pressure_gradient:.6g} Pa/m")


def developed_profile(mesh: Mesh, name: str, *, fluid: Fluid, flow_rate: float | None = None,
                      mean_speed: float | None = None,
                      free: Sequence[str] = ()) -> DevelopedProfile:
    """Fully developed laminar velocity over a flat inlet, into the domain.

    Parameters
    ----------
    mesh : Mesh
    name : str
        Boundary.
    fluid : Fluid
    flow_rate : float [m^3/s], or mean_speed : float [m/s]
        One of the two; met exactly by the values at the face centres.
    free : sequence of str
        Boundaries beside the inlet without friction: planes of symmetry and slip walls.  All
        others are walls at rest.

    Returns
    -------
    DevelopedProfile
        For ``Inlet(velocity=...)``.

    Raises
    ------
    MeshError, BoundaryError
        No mesh; no such boundary, a boundary that is not flat or has no wall beside it, neither
        or both of flow rate and mean speed, or one that is not positive.
    """
    expect_mesh(mesh, "developed_profile(mesh, name)")
    faces = _flat_faces(mesh, name)
    area = float(mesh.face_area_magnitude[faces].sum())
    wanted = _wanted_flow(flow_rate, mean_speed, area)
    if not isinstance(fluid, Fluid):
        raise BoundaryError("The pressure gradient needs a fluid.", got=type(fluid).__name__,
                            where="developed_profile(fluid=)",
                            remedy="Give Fluid(density=, viscosity=), moist_air(...) or "
                                   "water(...).")
    rim, beside = rim_edges(mesh, name)
    known = list(mesh.boundaries)
    for one in free:
        if one not in known:
            raise BoundaryError("No such boundary.", where="developed_profile(free=)",
                                got=repr(one), remedy=f"The mesh has: {', '.join(known)}."
                                                      f"{did_you_mean(one, known)}")
    wall = rim[~np.isin(beside, list(free))]
    if not len(wall):
        raise BoundaryError("No wall lies beside the inlet.", where=f"boundary '{name}'",
                            got=f"free beside it: {', '.join(dict.fromkeys(beside))}",
                            remedy="A stream without walls is uniform: give Inlet(vector).")
    inward = -mesh.face_area[faces].sum(axis=0) / area
    shape, corner_shape = _solve(mesh, faces, inward, np.unique(wall))
    gradient = wanted / float(shape @ mesh.face_area_magnitude[faces])
    rim_points = np.unique(rim)
    points = np.concatenate([mesh.face_centre[faces], mesh.points[rim_points]])
    speed = gradient * np.concatenate([shape, corner_shape[rim_points]])
    return DevelopedProfile(points, speed[:, None] * inward,
                            name=f"developed profile of '{name}'", flow_rate=wanted,
                            peak_speed=float(speed.max()), area=area,
                            pressure_gradient=-gradient * fluid.viscosity)


def _flat_faces(mesh: Mesh, name: str) -> slice:
    known = list(mesh.boundaries)
    if name not in known:
        raise BoundaryError("No such boundary.", where="developed_profile(mesh, name)",
                            got=repr(name), remedy=f"The mesh has: {', '.join(known)}."
                                                   f"{did_you_mean(name, known)}")
    faces = mesh.boundaries[name]
    whole = float(np.linalg.norm(mesh.face_area[faces].sum(axis=0)))
    parts = float(mesh.face_area_magnitude[faces].sum())
    if whole < (1.0 - 1e-6) * parts:
        raise BoundaryError("A developed profile needs a flat inlet.", where=f"boundary '{name}'",
                            got=f"its faces add up to {whole / parts:.4%} of their areas",
                            remedy="Give a function of points or a table instead.")
    return faces


def _wanted_flow(flow_rate: float | None, mean_speed: float | None, area: float) -> float:
    given = [value for value in (flow_rate, mean_speed) if value is not None]
    if len(given) != 1 or not 0.0 < as_number(given[0]) < np.inf:
        raise BoundaryError("A developed profile needs its flow rate or its mean speed.",
                            where="developed_profile(flow_rate=, mean_speed=)",
                            got=f"flow_rate={flow_rate}, mean_speed={mean_speed}",
                            remedy="Give one of them, positive [m3/s] or [m/s].")
    return float(given[0]) * (area if flow_rate is None else 1.0)


def _solve(mesh: Mesh, faces: slice, normal: np.ndarray,
           wall: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Solution of ``-laplacian(w) = 1`` [m^2] at the face centres and at all points of the mesh."""
    count, n_points = faces.stop - faces.start, len(mesh.points)
    corners = mesh.face_points[faces].astype(np.int64)
    ring = np.where(corners < 0, corners[:, :1], corners)
    start, stop = ring.ravel(), np.roll(ring, -1, axis=1).ravel()
    centre = np.repeat(n_points + np.arange(count), 4)
    triangles = np.stack([start, stop, centre], axis=1)[start != stop]
    frame = np.linalg.svd(normal[None])[2][1:]
    place = np.concatenate([mesh.points, mesh.face_centre[faces]]) @ frame.T
    matrix, load = _assembled(place, triangles)
    solved = np.unique(triangles)
    solved = solved[~np.isin(solved, wall)]
    value = np.zeros(len(place))
    value[solved] = spsolve(matrix[solved][:, solved].tocsc(), load[solved])
    return value[n_points:], value[:n_points]


def _assembled(place: np.ndarray, triangles: np.ndarray) -> tuple[sparse.csr_matrix, np.ndarray]:
    """Stiffness matrix and unit load of linear elements on triangles in the plane."""
    a, b, c = (place[triangles[:, k]] for k in range(3))
    opposite = np.stack([c - b, a - c, b - a], axis=1)
    edge, other = b - a, c - a
    area = 0.5 * np.abs(edge[:, 0] * other[:, 1] - edge[:, 1] * other[:, 0])
    stiffness = np.einsum("tid,tjd->tij", opposite, opposite) / (4.0 * area)[:, None, None]
    rows, columns = np.repeat(triangles, 3, axis=1).ravel(), np.tile(triangles, 3).ravel()
    shape = (len(place), len(place))
    matrix = sparse.csr_matrix((stiffness.ravel(), (rows, columns)), shape=shape)
    return matrix, np.bincount(triangles.ravel(), np.repeat(area / 3.0, 3), len(place))
