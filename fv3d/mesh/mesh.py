"""Points, faces, cells on both sides and named boundaries.

A :class:`Mesh` is plain read-only arrays.  Internal faces come first, then every
boundary as one slice.  The area vector of a face points from its ``left`` to its
``right`` cell, and out of the domain on boundary faces.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from types import MappingProxyType

import numpy as np
import scipy.sparse as sparse
from scipy.sparse.csgraph import reverse_cuthill_mckee

from ..errors import MeshError

# Local faces of each cell kind, outward by the right-hand rule; the point order is that
# of the VTK file format, an open standard.
LOCAL_FACES: dict[str, tuple[tuple[int, ...], ...]] = {
    "tetra": ((0, 2, 1), (0, 1, 3), (1, 2, 3), (0, 3, 2)),
    "hexahedron": ((0, 3, 2, 1), (4, 5, 6, 7), (0, 1, 5, 4), (1, 2, 6, 5), (2, 3, 7, 6),
                   (3, 0, 4, 7)),
    "wedge": ((0, 1, 2), (3, 5, 4), (0, 3, 4, 1), (1, 4, 5, 2), (2, 5, 3, 0)),
    "pyramid": ((0, 3, 2, 1), (0, 1, 4), (1, 2, 4), (2, 3, 4), (3, 0, 4)),
}
POINTS_PER_CELL = {"tetra": 4, "hexahedron": 8, "wedge": 6, "pyramid": 5}
CELL_KINDS = tuple(LOCAL_FACES)


def _read_only(array: np.ndarray) -> np.ndarray:
    array = np.ascontiguousarray(array)
    array.flags.writeable = False
    return array


@dataclass(frozen=True, eq=False)
class Mesh:
    """A finite-volume mesh.

    Attributes
    ----------
    points : (n_points, 3) float64 [m]
    cell_blocks : tuple of (kind, connectivity (n, k), cells (n,))
        Points of each cell in VTK order, one block per kind, and the index of each
        row in the mesh's own cell numbering.
    file_index : (n_cells,) int
        Index of each cell in the order the mesh was given in.
    face_points : (n_faces, 4) int32
        Points of each face, ``-1`` fills the last column of triangles.
    left : (n_faces,) int32, right : (n_internal,) int32
        Cells beside each face; ``left < right`` inside.
    face_area : (n_faces, 3) [m^2], face_centre : (n_faces, 3) [m]
    cell_volume : (n_cells,) [m^3], cell_centre : (n_cells, 3) [m]
    delta : (n_faces, 3) [m]
        Left centre to right centre; left centre to face centre on boundaries.
    weight : (n_internal,)
        Share of the left cell in linear interpolation to the face.
    boundaries : mapping of name to slice into the faces.
    """

    points: np.ndarray
    cell_blocks: tuple[tuple[str, np.ndarray, np.ndarray], ...]
    file_index: np.ndarray
    face_points: np.ndarray
    left: np.ndarray
    right: np.ndarray
    face_area: np.ndarray
    face_centre: np.ndarray
    cell_volume: np.ndarray
    cell_centre: np.ndarray
    delta: np.ndarray
    weight: np.ndarray
    boundaries: Mapping[str, slice]

    @property
    def n_cells(self) -> int:
        """Number of cells."""
        return len(self.cell_volume)

    @property
    def n_faces(self) -> int:
        """Number of faces, internal and boundary."""
        return len(self.left)

    @property
    def n_internal(self) -> int:
        """Number of internal faces."""
        return len(self.right)

    @property
    def n_boundary(self) -> int:
        """Number of boundary faces."""
        return self.n_faces - self.n_internal

    @cached_property
    def face_area_magnitude(self) -> np.ndarray:
        """(n_faces,) area of each face [m^2]."""
        return _read_only(np.linalg.norm(self.face_area, axis=1))

    @cached_property
    def face_normal(self) -> np.ndarray:
        """(n_faces, 3) unit normal of each face."""
        return _read_only(self.face_area / self.face_area_magnitude[:, None])

    @cached_property
    def cell_faces(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Faces of each cell: offsets (n_cells + 1,), faces, sign (+1 outward, -1 inward)."""
        cells = np.concatenate([self.left, self.right])
        faces = np.concatenate([np.arange(self.n_faces), np.arange(self.n_internal)])
        sign = np.concatenate([np.ones(self.n_faces), -np.ones(self.n_internal)])
        order = np.lexsort((faces, cells))
        counts = np.bincount(cells, minlength=self.n_cells)
        offsets = np.concatenate([[0], np.cumsum(counts)])
        return (_read_only(offsets.astype(np.int32)), _read_only(faces[order].astype(np.int32)),
                _read_only(sign[order]))

    @cached_property
    def outflow(self) -> sparse.csr_matrix:
        """(n_cells, n_faces) matrix that turns face fluxes into the net outflow of each cell."""
        offsets, faces, sign = self.cell_faces
        return sparse.csr_matrix((sign, faces, offsets), shape=(self.n_cells, self.n_faces))

    @cached_property
    def skew_offset(self) -> np.ndarray:
        """(n_internal, 3) face centre minus the point the interpolation weight stands for [m]."""
        inside = slice(0, self.n_internal)
        foot = self.cell_centre[self.left[inside]] + (1 - self.weight)[:, None] * self.delta[inside]
        return _read_only(self.face_centre[inside] - foot)

    def boundary_of_face(self, face: int) -> str:
        """Name of the boundary a face belongs to, or ``"inside"``."""
        for name, where in self.boundaries.items():
            if where.start <= face < where.stop:
                return name
        return "inside"

    def __repr__(self) -> str:
        kinds = ", ".join(f"{len(cells)} {kind}" for kind, _, cells in self.cell_blocks)
        return f"Mesh({kinds}; boundaries: {', '.join(self.boundaries)})"

    def __str__(self) -> str:
        from .quality import mesh_sheet
        return mesh_sheet(self)


def build_mesh(points: np.ndarray, cells: Sequence[tuple[str, np.ndarray]],
               boundaries: Mapping[str, Sequence[np.ndarray]], *, renumber: bool = True,
               source: str = "arrays") -> Mesh:
    """Build a mesh from points, cells and the faces of each named boundary.

    Parameters
    ----------
    points : (n_points, 3) [m]
    cells : sequence of (kind, connectivity)
        ``kind`` is one of ``tetra, hexahedron, wedge, pyramid``; VTK point order.
    boundaries : mapping of name to arrays of faces
        Each array is (n, 3) or (n, 4) point indices, in any order around the face.
    renumber : bool
        Number the cells by reverse Cuthill-McKee (Cuthill and McKee, 1969).
    source : str
        Named in error messages.

    Returns
    -------
    Mesh

    Raises
    ------
    MeshError
        An inverted cell, a face of more than two cells, a boundary face without a name
        or with two, a name on something that is no boundary face.
    """
    points = np.ascontiguousarray(points, dtype=np.float64)
    cells = [(kind, np.ascontiguousarray(conn, dtype=np.int64)) for kind, conn in cells if len(conn)]
    _check_blocks(points, cells, source)
    face_points, face_cell = _local_faces(cells)
    keys, first, second = _pair_faces(face_points, points, source)
    internal = second >= 0
    left, right = face_cell[first], np.where(internal, face_cell[second], -1)
    name_of = _name_faces(keys, internal, boundaries, face_points[first], points, source)
    n_cells = sum(len(conn) for _, conn in cells)
    new_number = _numbering(left[internal], right[internal], n_cells, renumber)
    old_number = np.argsort(new_number)
    left = new_number[left]
    right = np.where(internal, new_number[right], -1)
    oriented = face_points[first]
    flip = internal & (left > right)
    left[flip], right[flip] = right[flip], left[flip]
    oriented = np.where(flip[:, None], _reversed_faces(oriented), oriented)
    order = np.lexsort((np.where(internal, right, left), np.where(internal, left, 0), name_of))
    left, right, oriented = left[order], right[order], oriented[order]
    n_internal = int(internal.sum())
    slices, start = {}, n_internal
    for rank, name in enumerate(boundaries):
        stop = start + int(np.count_nonzero(name_of == rank))
        slices[name] = slice(start, stop)
        start = stop
    blocks, at = [], 0
    for kind, conn in cells:
        blocks.append((kind, _read_only(conn), _read_only(new_number[at:at + len(conn)])))
        at += len(conn)
    return _with_geometry(points, tuple(blocks), old_number, oriented, left, right[:n_internal],
                          slices)


def signed_volumes(points: np.ndarray, kind: str, connectivity: np.ndarray) -> np.ndarray:
    """(n,) volume of each cell [m^3], negative where the cell is turned inside out.

    Quadrilateral faces are split about the mean of their points.
    """
    corners = points[connectivity]
    middle = corners.mean(axis=1)
    volume = np.zeros(len(connectivity))
    for face in LOCAL_FACES[kind]:
        ring = corners[:, list(face)] - middle[:, None]
        hub = ring.mean(axis=1)
        for k in range(len(face)):
            a, b = ring[:, k], ring[:, (k + 1) % len(face)]
            volume += np.einsum("ij,ij->i", hub, np.cross(a, b)) / 6.0
    return volume


def _check_blocks(points: np.ndarray, cells: list[tuple[str, np.ndarray]], source: str) -> None:
    if points.ndim != 2 or points.shape[1] != 3:
        raise MeshError("Mesh points must be a table of three coordinates.", where=source,
                        got=f"shape {points.shape}", remedy="Give an (n, 3) array.")
    if not np.all(np.isfinite(points)):
        bad = int(np.flatnonzero(~np.isfinite(points).all(axis=1))[0])
        raise MeshError("A mesh point is not finite.", where=f"{source}, point {bad}",
                        got=points[bad].tolist(), remedy="Write the mesh again from the mesher.")
    if not cells:
        raise MeshError("The mesh has no volume cells.", where=source,
                        got="no tetra, hexahedron, wedge or pyramid",
                        remedy="Export the volume mesh, not only its surface.")
    for kind, conn in cells:
        if kind not in LOCAL_FACES or conn.ndim != 2 or conn.shape[1] != POINTS_PER_CELL.get(kind, 0):
            raise MeshError("A block of cells is not of a known kind.", where=source,
                            got=f"{kind} with shape {conn.shape}",
                            remedy=f"Use {', '.join(CELL_KINDS)}.")
        if conn.min() < 0 or conn.max() >= len(points):
            raise MeshError("A cell refers to a point that does not exist.", where=source,
                            got=f"point {int(conn.max())} of {len(points)}",
                            remedy="The file is damaged: write the mesh again.")
        volume = signed_volumes(points, kind, conn)
        bad = np.flatnonzero(~(volume > 0))
        if bad.size:
            place = points[conn[bad[0]]].mean(axis=0)
            raise MeshError(f"{bad.size} cell(s) have no positive volume.",
                            where=f"{source}, {kind} {int(bad[0])} at {np.round(place, 6).tolist()}",
                            got=f"volume {volume[bad[0]]:.3e} m^3",
                            remedy="Mend the mesh there; check the point order of the export.")


def _local_faces(cells: list[tuple[str, np.ndarray]]) -> tuple[np.ndarray, np.ndarray]:
    faces, owner, at = [], [], 0
    for kind, conn in cells:
        numbers = np.arange(at, at + len(conn))
        for local in LOCAL_FACES[kind]:
            padded = np.full((len(conn), 4), -1, dtype=np.int64)
            padded[:, :len(local)] = conn[:, list(local)]
            faces.append(padded)
            owner.append(numbers)
        at += len(conn)
    return np.concatenate(faces), np.concatenate(owner)


def _face_keys(faces: np.ndarray) -> np.ndarray:
    return np.sort(faces, axis=1)


def _pair_faces(faces: np.ndarray, points: np.ndarray,
                source: str) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    keys = _face_keys(faces)
    order = np.lexsort(keys.T[::-1])
    ordered = keys[order]
    new = np.concatenate([[True], np.any(ordered[1:] != ordered[:-1], axis=1)])
    start = np.flatnonzero(new)
    count = np.diff(np.concatenate([start, [len(order)]]))
    if count.max() > 2:
        bad = ordered[start[np.argmax(count)]]
        place = points[bad[bad >= 0]].mean(axis=0)
        raise MeshError("A face belongs to more than two cells.",
                        where=f"{source}, near {np.round(place, 6).tolist()}",
                        got=f"{int(count.max())} cells",
                        remedy="Remove duplicate cells from the mesh.")
    first = order[start]
    second = np.where(count == 2, order[np.minimum(start + 1, len(order) - 1)], -1)
    swap = (second >= 0) & (second < first)
    first, second = np.where(swap, second, first), np.where(swap, first, second)
    return ordered[start], first, second


def _name_faces(keys: np.ndarray, internal: np.ndarray,
                boundaries: Mapping[str, Sequence[np.ndarray]], faces: np.ndarray,
                points: np.ndarray, source: str) -> np.ndarray:
    """Rank of the boundary of each unique face, -1 inside."""
    rank_of = np.full(len(keys), -1)
    outer = np.flatnonzero(~internal)
    lookup = {keys[i].tobytes(): i for i in outer}
    for rank, (name, arrays) in enumerate(boundaries.items()):
        for array in arrays:
            array = np.asarray(array, dtype=np.int64)
            padded = np.full((len(array), 4), -1, dtype=np.int64)
            padded[:, :array.shape[1]] = array
            for key, row in zip(_face_keys(padded), array, strict=True):
                i = lookup.get(key.tobytes(), -1)
                if i < 0:
                    _refuse_named_face(key, keys, name, points[row].mean(axis=0), row, source)
                if rank_of[i] not in (-1, rank):
                    place = np.round(points[row].mean(axis=0), 6).tolist()
                    raise MeshError("A boundary face has two names.",
                                    where=f"{source}, boundary '{name}' near {place}",
                                    got=f"'{list(boundaries)[rank_of[i]]}' and '{name}'",
                                    remedy="Put every boundary face into one named group only.")
                rank_of[i] = rank
    nameless = np.flatnonzero(~internal & (rank_of < 0))
    if nameless.size:
        face = faces[nameless[0]]
        place = np.round(points[face[face >= 0]].mean(axis=0), 6).tolist()
        raise MeshError(f"{nameless.size} boundary face(s) have no name.",
                        where=f"{source}, near {place}",
                        got=f"names: {', '.join(boundaries) or 'none'}",
                        remedy="Give every boundary surface a named group in the mesher (a face "
                               "inside the domain listed here points to a hanging node).")
    return rank_of


def _refuse_named_face(key: np.ndarray, keys: np.ndarray, name: str, place: np.ndarray,
                       row: np.ndarray, source: str) -> None:
    where = f"{source}, boundary '{name}' near {np.round(place, 6).tolist()}"
    if np.any(np.all(keys == key, axis=1)):
        raise MeshError("A named face lies inside the domain.", where=where,
                        got="cells on both sides",
                        remedy="Leave internal surfaces out of the named groups.")
    raise MeshError("A named face is no face of any cell.", where=where,
                    got=f"points {row.tolist()}",
                    remedy="Surface and volume mesh do not match: export both from the same mesh.")


def _numbering(left: np.ndarray, right: np.ndarray, n_cells: int, renumber: bool) -> np.ndarray:
    if not renumber:
        return np.arange(n_cells)
    ones = np.ones(len(left), dtype=np.int8)
    graph = sparse.coo_matrix((ones, (left, right)), shape=(n_cells, n_cells)).tocsr()
    graph = (graph + graph.T).tocsr()
    new_number = np.empty(n_cells, dtype=np.int64)
    new_number[reverse_cuthill_mckee(graph, symmetric_mode=True)] = np.arange(n_cells)
    return new_number


def _reversed_faces(faces: np.ndarray) -> np.ndarray:
    triangle = faces[:, 3] < 0
    turned = faces[:, ::-1].copy()
    turned[triangle, :3] = faces[triangle, 2::-1]
    turned[triangle, 3] = -1
    return turned


def face_geometry(points: np.ndarray, face_points: np.ndarray) -> tuple[np.ndarray, ...]:
    """Area vectors, centroids and the triangles of each face about the mean of its points.

    Returns
    -------
    area : (n, 3) [m^2], centre : (n, 3) [m]
    triangle_area : (n, 4, 3) [m^2], triangle_centre : (n, 4, 3) [m]
    """
    count = np.where(face_points[:, 3] < 0, 3, 4)
    ring = points[face_points]
    ring[count == 3, 3] = 0.0
    hub = ring.sum(axis=1) / count[:, None]
    ring[count == 3, 3] = hub[count == 3]
    nxt = np.roll(ring, -1, axis=1)
    three = count == 3
    nxt[three, 2] = ring[three, 0]
    ring[three, 3] = nxt[three, 3] = hub[three]
    triangle_area = 0.5 * np.cross(ring - hub[:, None], nxt - hub[:, None])
    triangle_centre = (ring + nxt + hub[:, None]) / 3.0
    area = triangle_area.sum(axis=1)
    normal = area / np.maximum(np.linalg.norm(area, axis=1), 1e-300)[:, None]
    share = np.einsum("ijk,ik->ij", triangle_area, normal)
    total = np.maximum(share.sum(axis=1), 1e-300)
    centre = np.einsum("ij,ijk->ik", share, triangle_centre) / total[:, None]
    return area, centre, triangle_area, triangle_centre


def _with_geometry(points: np.ndarray, blocks: tuple, old_number: np.ndarray,
                   face_points: np.ndarray, left: np.ndarray, right: np.ndarray,
                   slices: dict[str, slice]) -> Mesh:
    n_cells, n_internal = len(old_number), len(right)
    area, centre, triangle_area, triangle_centre = face_geometry(points, face_points)
    apex = _mean_over_cells(centre, left, right, n_cells)
    volume, moment = np.zeros(n_cells), np.zeros((n_cells, 3))
    for cells, part, sign in ((left, slice(None), 1.0), (right, slice(0, n_internal), -1.0)):
        for k in range(4):
            arm = triangle_centre[part, k] - apex[cells]
            piece = sign * np.einsum("ij,ij->i", arm, triangle_area[part, k]) / 3.0
            volume += np.bincount(cells, piece, n_cells)
            for axis in range(3):
                moment[:, axis] += np.bincount(cells, piece * 0.75 * arm[:, axis], n_cells)
    cell_centre = apex + moment / volume[:, None]
    delta = centre - cell_centre[left]
    to_face = np.abs(np.einsum("ij,ij->i", delta[:n_internal], area[:n_internal]))
    from_face = np.abs(np.einsum("ij,ij->i", cell_centre[right] - centre[:n_internal],
                                 area[:n_internal]))
    weight = from_face / np.maximum(to_face + from_face, 1e-300)
    delta[:n_internal] = cell_centre[right] - cell_centre[left[:n_internal]]
    return Mesh(points=_read_only(points), cell_blocks=blocks,
                file_index=_read_only(old_number.astype(np.int32)),
                face_points=_read_only(face_points.astype(np.int32)),
                left=_read_only(left.astype(np.int32)), right=_read_only(right.astype(np.int32)),
                face_area=_read_only(area), face_centre=_read_only(centre),
                cell_volume=_read_only(volume), cell_centre=_read_only(cell_centre),
                delta=_read_only(delta), weight=_read_only(weight),
                boundaries=MappingProxyType(slices))


def _mean_over_cells(face_values: np.ndarray, left: np.ndarray, right: np.ndarray,
                     n_cells: int) -> np.ndarray:
    cells = np.concatenate([left, right])
    values = np.concatenate([face_values, face_values[:len(right)]])
    count = np.bincount(cells, minlength=n_cells)
    return np.stack([np.bincount(cells, values[:, axis], n_cells) / count for axis in range(3)],
                    axis=1)
