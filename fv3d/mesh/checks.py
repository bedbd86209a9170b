"""What is refused before a mesh is built from points, cells and named faces."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from ..errors import MeshError
from .geometry import signed_volumes
from .topology import CELL_KINDS, POINTS_PER_CELL

_FARTHEST = 1e50                                        # [m]; its sixth power is a number


def as_points(points: np.ndarray, source: str) -> np.ndarray:
    """Points as a new float64 array."""
    try:
        return np.array(points, dtype=np.float64, order="C")
    except (TypeError, ValueError) as reason:
        failure = str(reason)
    raise MeshError("Mesh points must be a table of numbers.", where=source, got=failure,
                    remedy="Give an (n, 3) array.")


def check_faces(n_points: int, boundaries: Mapping[str, Sequence[np.ndarray]],
                source: str) -> None:
    """Refuse names that are no text and tables that are no faces."""
    for name, arrays in boundaries.items():
        if not isinstance(name, str) or not name:
            raise MeshError("A boundary name must be text.", where=source, got=repr(name),
                            remedy="Give boundaries={'inlet': [...], ...}.")
        for faces in map(np.asarray, arrays):
            if faces.ndim != 2 or faces.shape[1] not in (3, 4) or faces.dtype.kind not in "iu":
                raise MeshError("A table of boundary faces is damaged.",
                                where=f"{source}, boundary '{name}'",
                                got=f"{faces.dtype} of shape {faces.shape}",
                                remedy="Give (n, 3) or (n, 4) point indices.")
            if faces.size and (faces.max() >= n_points or faces[:, :3].min() < 0):
                raise MeshError("A boundary face refers to a point that does not exist.",
                                where=f"{source}, boundary '{name}'",
                                got=f"points {faces.min()} to {faces.max()} of {n_points}",
                                remedy="Surface and volume must use the same points.")


def check_blocks(points: np.ndarray, cells: list[tuple[str, np.ndarray]], source: str) -> None:
    """Refuse points and cells of which no mesh can be made."""
    if points.ndim != 2 or points.shape[1] != 3:
        raise MeshError("Mesh points must be a table of three coordinates.", where=source,
                        got=f"shape {points.shape}", remedy="Give an (n, 3) array.")
    usable = np.abs(points) < _FARTHEST                  # False for NaN
    if not np.all(usable):
        bad = int(np.flatnonzero(~usable.all(axis=1))[0])
        raise MeshError("A mesh point is not finite or too far away.",
                        where=f"{source}, point {bad}", got=points[bad].tolist(),
                        remedy="Write the mesh again from the mesher.")
    if not cells:
        raise MeshError("The mesh has no volume cells.", where=source,
                        got="no tetra, hexahedron, wedge or pyramid",
                        remedy="Export the volume mesh, not only its surface.")
    for kind, conn in cells:
        if (conn.ndim != 2 or conn.shape[1] != POINTS_PER_CELL.get(kind, 0)
                or conn.dtype.kind not in "iu"):
            raise MeshError("A block of cells is not of a known kind.", where=source,
                            got=f"{kind} with {conn.dtype} of shape {conn.shape}",
                            remedy=f"Use {', '.join(CELL_KINDS)}.")
        if conn.min() < 0 or conn.max() >= len(points):
            bad = int(conn.min() if conn.min() < 0 else conn.max())
            raise MeshError("A cell refers to a point that does not exist.", where=source,
                            got=f"point {bad} of {len(points)}",
                            remedy="The file is damaged: write the mesh again.")
        _check_corners(points, kind, conn, source)
        _check_volumes(points, kind, conn, source)


def _check_corners(points: np.ndarray, kind: str, conn: np.ndarray, source: str) -> None:
    """Refuse collapsed cells, such as a hexahedron that stands for a wedge."""
    row = np.sort(conn, axis=1)
    bad = np.flatnonzero(np.any(row[:, 1:] == row[:, :-1], axis=1))
    if bad.size:
        cell = int(bad[0])
        place = np.round(points[conn[cell]].mean(axis=0), 6).tolist()
        raise MeshError(f"{bad.size} cell(s) use a point twice.",
                        where=f"{source}, {kind} {cell} at {place}", got=conn[cell].tolist(),
                        remedy="Export collapsed cells as wedges, pyramids or tetrahedra.")


def _check_volumes(points: np.ndarray, kind: str, conn: np.ndarray, source: str) -> None:
    """Refuse cells inside out and cells flat to rounding."""
    volume = signed_volumes(points, kind, conn)
    suspect = np.flatnonzero(~(volume > 1e-9 * np.max(np.abs(volume))))
    extent = np.ptp(points[conn[suspect]], axis=1).max(axis=1)
    bad = suspect[~(volume[suspect] > 1e-13 * extent ** 3)]
    if bad.size:
        cell = int(bad[0])
        place = np.round(points[conn[cell]].mean(axis=0), 6).tolist()
        raise MeshError(f"{bad.size} cell(s) have no positive volume.",
                        where=f"{source}, {kind} {cell} at {place}",
                        got=f"volume {volume[cell]:.3e} m^3",
                        remedy="Mend the mesh there; check the point order of the export.")
