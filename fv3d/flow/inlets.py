"""Velocity over an inlet from a table of measured points."""

from __future__ import annotations

import warnings
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from ..errors import BoundaryError, Fv3dWarning
from ..mesh.mesh import Mesh

INSIDE = 1e-9  # how far outside the hull of the points still counts as inside, of its size


@dataclass(frozen=True, eq=False)
class InletTable:
    """Velocities at points of a plane, to be given to an :class:`Inlet`.

    Points and faces are projected along the normal of the inlet.  In between the velocity is
    linear in the triangles of the points (Delaunay), or along the line of points that lie on one;
    beyond them it is that of the nearest point, and the share of the inlet concerned is reported.

    Parameters
    ----------
    points : (n, 3) [m]
    velocity : (n, 3) [m/s]

    Raises
    ------
    BoundaryError
        Wrong shapes, numbers that are not finite, fewer than two points, two at one place.
    """

    points: np.ndarray
    velocity: np.ndarray
    name: str = field(default="table of points", kw_only=True)

    def __post_init__(self) -> None:
        try:
            points = np.array(self.points, dtype=float)
            velocity = np.array(self.velocity, dtype=float)
        except (TypeError, ValueError):
            points = velocity = np.empty(0)
        if points.ndim != 2 or points.shape[1] != 3 or velocity.shape != points.shape \
                or not (np.all(np.isfinite(points)) and np.all(np.isfinite(velocity))):
            raise BoundaryError("An inlet table needs finite points and velocities, three numbers "
                                "each.", where="InletTable(points, velocity)",
                                got=f"shapes {points.shape} and {velocity.shape}",
                                remedy="Give two (n, 3) arrays [m] and [m/s].")
        if len(points) < 2 or not np.ptp(points, axis=0).max() > 0:
            raise BoundaryError("An inlet table needs at least two places.", got=len(points),
                                where="InletTable(points, velocity)",
                                remedy="Give Inlet(velocity=(...)) for a uniform stream.")
        for array in (points, velocity):
            array.flags.writeable = False
        object.__setattr__(self, "points", points)
        object.__setattr__(self, "velocity", velocity)

    def __call__(self, points: np.ndarray) -> np.ndarray:
        """(n, 3) velocity [m/s] at points (n, 3) [m], projected onto the table's own plane."""
        arm = self.points - self.points.mean(axis=0)
        normal = np.linalg.eigh(np.einsum("ni,nj->ij", arm, arm))[1][:, 0]
        return self._interpolated(np.asarray(points, dtype=float), normal)[0]

    def on_faces(self, centre: np.ndarray, normal: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Velocity on the faces of an inlet, and which of them lie beyond the points.

        Parameters
        ----------
        centre, normal : (n, 3)

        Returns
        -------
        velocity : (n, 3) [m/s], beyond : (n,) bool

        Raises
        ------
        BoundaryError
            The points lie elsewhere, are far wider than the inlet or cover none of its faces.
        """
        mean = normal.mean(axis=0)
        self._check_place(centre, mean / np.linalg.norm(mean))
        velocity, beyond = self._interpolated(centre, mean / np.linalg.norm(mean))
        if beyond.all():
            self._refuse("The points of an inlet table cover no face of the inlet.", centre)
        return velocity, beyond

    def _check_place(self, centre: np.ndarray, normal: np.ndarray) -> None:
        """Refuse tables in other units or axes."""
        size = max(float(np.ptp(centre, axis=0).max()), float(np.ptp(self.points, axis=0).max()))
        off = np.abs((self.points - centre.mean(axis=0)) @ normal)
        if off.max() > size:
            self._refuse(f"The points of an inlet table lie up to {off.max():.4g} m off the plane "
                         "of the inlet.", centre)
        if len(centre) > 1 and size > 100.0 * float(np.ptp(centre, axis=0).max()):
            self._refuse("The points of an inlet table are far wider than the inlet.", centre)

    def _refuse(self, what: str, centre: np.ndarray) -> None:
        def box(points: np.ndarray) -> str:
            return " x ".join(f"[{a:.4g}, {b:.4g}]" for a, b in
                              zip(points.min(axis=0), points.max(axis=0), strict=True))
        raise BoundaryError(what, where=self.name, got=f"points in {box(self.points)} m, faces in "
                                                       f"{box(centre)} m",
                            remedy="Check units and axes of the table.")

    def _interpolated(self, places: np.ndarray,
                      normal: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Values (n, 3) at places projected along ``normal``, and which lie beyond the points."""
        frame = np.linalg.svd(normal[None])[2][1:]
        origin = self.points.mean(axis=0)
        known, asked = (self.points - origin) @ frame.T, (places - origin) @ frame.T
        _, spread, axes = np.linalg.svd(known, full_matrices=False)
        size = float(np.ptp(known, axis=0).max())
        if not size > 0.0:
            self._refuse("The points of an inlet table lie behind each other.", places)
        self._check_distinct(known, size)
        if len(known) < 3 or spread[1] <= 1e-9 * spread[0]:
            return self._along_line(known @ axes[0], asked @ axes[0], size)
        return self._in_triangles(known / size, asked / size)

    def _check_distinct(self, known: np.ndarray, size: float) -> None:
        from scipy.spatial import cKDTree
        pairs = cKDTree(known).query_pairs(1e-9 * size, output_type="ndarray")
        if len(pairs):
            one, other = pairs[0]
            raise BoundaryError("Two points of an inlet table lie at one place of the inlet.",
                                where=f"{self.name}, points {one + 1} and {other + 1}",
                                got=f"{self.points[one].tolist()} and "
                                    f"{self.points[other].tolist()} m",
                                remedy="Keep one of them, or their mean.")

    def _along_line(self, known: np.ndarray, asked: np.ndarray,
                    size: float) -> tuple[np.ndarray, np.ndarray]:
        order = np.argsort(known)
        low, high = known[order[0]], known[order[-1]]
        value = np.stack([np.interp(asked, known[order], self.velocity[order, k])
                          for k in range(3)], axis=1)
        return value, (asked < low - INSIDE * size) | (asked > high + INSIDE * size)

    def _in_triangles(self, known: np.ndarray,
                      asked: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        from scipy.interpolate import LinearNDInterpolator
        from scipy.spatial import Delaunay, cKDTree
        linear = LinearNDInterpolator(Delaunay(known), self.velocity)
        value = linear(asked)
        missed = np.flatnonzero(np.isnan(value[:, 0]))
        if missed.size:  # points on the hull: once more a hair further in
            value[missed] = linear(asked[missed] * (1.0 - 2.0 * INSIDE))
        beyond = np.isnan(value[:, 0])
        value[beyond] = self.velocity[cKDTree(known).query(asked[beyond])[1]]
        return value, beyond


def beyond_shares(mesh: Mesh, boundaries: Mapping[str, Any]) -> dict[str, float]:
    """Share of the area of each inlet with a table that lies beyond the table's points."""
    shares = {}
    for name, condition in boundaries.items():
        table: Any = getattr(condition, "velocity", None)
        if hasattr(table, "on_faces"):
            faces = mesh.boundaries[name]
            beyond = table.on_faces(mesh.face_centre[faces], mesh.face_normal[faces])[1]
            size = mesh.face_area_magnitude[faces]
            shares[name] = float(size[beyond].sum() / size.sum())
    return shares


def warn_of_beyond(mesh: Mesh, boundaries: Mapping[str, Any]) -> None:
    """Say it where an inlet reaches beyond the points of its table."""
    for name, share in beyond_shares(mesh, boundaries).items():
        if share > 0.0:
            warnings.warn(f"{share:.1%} of the inlet '{name}' lie beyond the points of its table "
                          "and take the velocity of the nearest one. Add points up to the rim, "
                          "at rest on walls.", Fv3dWarning, stacklevel=3)
