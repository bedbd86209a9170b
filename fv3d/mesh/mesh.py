"""Points, faces, cells on both sides and named boundaries.

A :class:`Mesh` is plain read-only arrays.  Internal faces come first, then every
boundary as one slice.  The area vector of a face points from its ``left`` to its
``right`` cell, and out of the domain on boundary faces.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from types import MappingProxyType

import numpy as np
import scipy.sparse as sparse

from ..errors import MeshError
from .checks import as_points, check_blocks, check_faces
from .geometry import face_and_cell_geometry
from .topology import local_faces, name_faces, number_cells, pair_faces, reversed_faces


def read_only(array: np.ndarray) -> np.ndarray:
    array = np.ascontiguousarray(array)
    array.flags.writeable = False
    return array


@dataclass(frozen=True, eq=False)
class Pair:
    """Two boundaries joined by a translation, see :func:`fv3d.mesh.periodic.join_periodic`.

    Attributes
    ----------
    partner : str
        Name of the other boundary.
    shift : (3,) [m]
        Translation from this boundary to the partner.
    faces : (k,) int32
        Internal faces of the mesh that join them.
    sign : (k,)
        +1 where the face's area vector points along ``shift``, else -1.
    far_points : (k, 4) int32
        Points of each face as its right cell sees it, ``-1`` fills triangles.
    point_pairs : (m, 2) int32
        Points of this boundary and those of the partner they fall upon.
    """

    partner: str
    shift: np.ndarray
    faces: np.ndarray
    sign: np.ndarray
    far_points: np.ndarray
    point_pairs: np.ndarray


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
    warp : (n_faces, 3, 3) [m^3], or (0, 3, 3) where all faces are flat
        ``[f, j, i]`` the integral of (x - face centre)_j dS_i, which vanishes on flat faces.
    boundaries : mapping of name to slice into the faces.
    zones : mapping of name to (n,) int32
        Named groups of cells, in the mesh's own numbering and rising order; may overlap.
    joined : mapping of name to Pair
        Boundaries that were joined by a translation; their faces are internal ones, with points,
        centre and area as the left cell sees them.
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
    warp: np.ndarray
    boundaries: Mapping[str, slice]
    zones: Mapping[str, np.ndarray] = field(default_factory=lambda: MappingProxyType({}))
    joined: Mapping[str, Pair] = field(default_factory=lambda: MappingProxyType({}))

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
        return read_only(np.linalg.norm(self.face_area, axis=1))

    @cached_property
    def face_normal(self) -> np.ndarray:
        """(n_faces, 3) unit normal of each face."""
        return read_only(self.face_area / self.face_area_magnitude[:, None])

    @cached_property
    def cell_faces(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Faces of each cell: offsets (n_cells + 1,), faces, sign (+1 outward, -1 inward)."""
        faces = np.concatenate([np.arange(self.n_faces), np.arange(self.n_internal)])
        sign = np.repeat(np.array([1, -1], dtype=np.int8), [self.n_faces, self.n_internal])
        table = sparse.csr_matrix((sign, (np.concatenate([self.left, self.right]), faces)),
                                  (self.n_cells, self.n_faces))
        table.sort_indices()
        return (read_only(table.indptr.astype(np.int32)), read_only(table.indices.astype(np.int32)),
                read_only(table.data))

    @cached_property
    def across(self) -> np.ndarray:
        """(k,) for each entry of ``cell_faces`` the cell behind the face, or n_cells + b."""
        _, faces, sign = self.cell_faces
        inside = faces < self.n_internal
        ahead, back = inside & (sign > 0), inside & (sign < 0)
        other = self.n_cells + faces - self.n_internal
        other[ahead] = self.right[faces[ahead]]
        other[back] = self.left[faces[back]]
        return read_only(other.astype(np.int32))

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
        return read_only(self.face_centre[inside] - foot)

    @cached_property
    def skew(self) -> np.ndarray:
        """``skew_offset``, or (0, 3) where no face centre lies off its line."""
        size = np.abs(self.skew_offset).max(initial=0.0)
        least = np.sqrt(np.einsum("ij,ij->i", self.delta, self.delta).min(initial=np.inf))
        if size > 1e-12 * least:
            return self.skew_offset
        del self.__dict__["skew_offset"]  # large, and no longer wanted
        return read_only(np.empty((0, 3)))

    @cached_property
    def straight(self) -> bool:
        """Whether all internal faces stand across the lines between their cells."""
        n = self.n_internal
        area, delta = self.face_area[:n], self.delta[:n]
        across = np.cross(area, delta)
        size = np.einsum("ij,ij->i", area, area) * np.einsum("ij,ij->i", delta, delta)
        return bool((np.einsum("ij,ij->i", across, across) <= 1e-24 * size).all())

    @property
    def warped(self) -> bool:
        """Whether some face is not flat."""
        return len(self.warp) > 0

    def polygons(self, faces: np.ndarray, sign: np.ndarray) -> np.ndarray:
        """(k, 4) points of faces as the left (sign +1) or the right cell (sign -1) sees them."""
        corners = self.face_points[faces]
        if self.joined:
            row = np.full(self.n_internal, -1)
            far = np.concatenate([pair.far_points for pair in self.joined.values()])
            row[np.concatenate([pair.faces for pair in self.joined.values()])] = np.arange(len(far))
            other = np.flatnonzero((sign < 0) & (faces < self.n_internal))
            other = other[row[faces[other]] >= 0]
            corners[other] = far[row[faces[other]]]
        return corners

    def to_faces(self, cell_values: np.ndarray) -> np.ndarray:
        """(n_faces, ...) linear interpolation of cell values; the owner's value on boundaries."""
        n = self.n_internal
        w = self.weight.reshape(-1, *[1] * (cell_values.ndim - 1))
        out = cell_values[self.left]
        out[:n] = w * out[:n] + (1 - w) * cell_values[self.right]
        return out

    def boundary_of_face(self, face: int) -> str:
        """Name of the boundary a face belongs to, or ``"inside"``."""
        for name, where in self.boundaries.items():
            if where.start <= face < where.stop:
                return name
        return "inside"

    def __repr__(self) -> str:
        kinds = ", ".join(f"{len(cells)} {kind}" for kind, _, cells in self.cell_blocks)
        zones = f"; zones: {', '.join(self.zones)}" if self.zones else ""
        pairs = [f"{name} to {pair.partner}" for name, pair in self.joined.items()]
        joined = f"; joined: {', '.join(pairs)}" if pairs else ""
        return f"Mesh({kinds}; boundaries: {', '.join(self.boundaries)}{zones}{joined})"

    def __str__(self) -> str:
        from .quality import mesh_sheet
        return mesh_sheet(self)


def build_mesh(points: np.ndarray, cells: Sequence[tuple[str, np.ndarray]],
               boundaries: Mapping[str, Sequence[np.ndarray]], *,
               zones: Mapping[str, np.ndarray] | None = None, renumber: bool = True,
               source: str = "arrays") -> Mesh:
    """Build a mesh from points, cells and the faces of each named boundary.

    Parameters
    ----------
    points : (n_points, 3) [m]
    cells : sequence of (kind, connectivity)
        ``kind`` is one of ``tetra, hexahedron, wedge, pyramid``; VTK point order.
    boundaries : mapping of name to arrays of faces
        Each array is (n, 3) or (n, 4) point indices, in any order around the face.
    zones : mapping of name to cells, optional
        Indices of the cells of each zone, or a mask (n_cells,), in the order of ``cells``.
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
        or with two, a name on something that is no boundary face, a zone of cells that do
        not exist.
    """
    points = as_points(points, source)
    cells = [(kind, np.array(conn)) for kind, conn in cells if len(conn)]
    check_blocks(points, cells, source)
    check_faces(len(points), boundaries, source)
    cells = [(kind, conn.astype(np.int32)) for kind, conn in cells]
    faces, owner = local_faces(cells)
    keys, first, second = pair_faces(faces, points, source=source)
    name_of = name_faces(keys, second >= 0, boundaries, points, source=source)
    inside, outside = np.flatnonzero(second >= 0), np.flatnonzero(second < 0)
    n_cells, n_internal = sum(len(conn) for _, conn in cells), len(inside)
    beside, across = owner[first[inside]], owner[second[inside]]
    new_number = (number_cells(beside, across, n_cells) if renumber
                  else np.arange(n_cells, dtype=np.int32))
    beside, across = new_number[beside], new_number[across]
    low, high = np.minimum(beside, across), np.maximum(beside, across)
    order = np.argsort(low.astype(np.int64) * n_cells + high, kind="stable")
    right, flip = high[order], (beside > across)[order]
    outside = outside[np.lexsort((first[outside], new_number[owner[first[outside]]],
                                  name_of[outside]))]
    row = np.concatenate([first[inside[order]], first[outside]])
    left = np.concatenate([low[order], new_number[owner[first[outside]]]])
    face_points = faces[row]
    turned = np.flatnonzero(flip)
    face_points[turned] = reversed_faces(face_points[turned])
    counts = np.bincount(name_of[outside], minlength=len(boundaries))
    ends = n_internal + np.cumsum(np.concatenate([[0], counts]))
    slices = {name: slice(int(start), int(stop))
              for name, start, stop in zip(boundaries, ends[:-1], ends[1:])}
    splits = np.cumsum([len(conn) for _, conn in cells])[:-1]
    blocks = tuple((kind, read_only(conn), read_only(number)) for (kind, conn), number
                   in zip(cells, np.split(new_number, splits)))
    groups = MappingProxyType({name: _zone(name, chosen, new_number, source)
                               for name, chosen in (zones or {}).items()})
    return with_geometry(points, blocks, face_points, left, right, slices, groups)


def _zone(name: str, chosen: np.ndarray, new_number: np.ndarray, source: str) -> np.ndarray:
    """(n,) cells of a zone in the new numbering."""
    cells, n_cells = np.asarray(chosen), len(new_number)
    if cells.dtype == bool and cells.shape == (n_cells,):
        cells = np.flatnonzero(cells)
    if (not isinstance(name, str) or not name or cells.ndim != 1 or not cells.size
            or cells.dtype.kind not in "iu" or cells.min() < 0 or cells.max() >= n_cells):
        got = f"{cells.dtype} of shape {cells.shape}"
        if cells.ndim == 1 and cells.size and cells.dtype.kind in "iu":
            got = f"cells {cells.min()} to {cells.max()} of {n_cells}"
        raise MeshError("A zone must be a name with some cells of the mesh.",
                        where=f"{source}, zone {name!r}", got=got,
                        remedy="Give cell indices, or a mask with one entry per cell.")
    return read_only(np.unique(new_number[cells]))


def with_geometry(points: np.ndarray, blocks: tuple, face_points: np.ndarray,
                   left: np.ndarray, right: np.ndarray, slices: dict[str, slice],
                   zones: Mapping[str, np.ndarray]) -> Mesh:
    n_cells, n_internal = sum(len(cells) for _, _, cells in blocks), len(right)
    apex, new_number = np.empty((n_cells, 3)), np.concatenate([cells for _, _, cells in blocks])
    for _, conn, cells in blocks:
        apex[cells] = sum(points[column] for column in conn.T) / conn.shape[1]
    area, centre, volume, cell_centre, warp = face_and_cell_geometry(points, face_points, left,
                                                                     right, apex)
    own = left[:n_internal]
    to_face = centre[:n_internal] - cell_centre[own]
    delta = centre - cell_centre[left]
    delta[:n_internal] = cell_centre[right] - cell_centre[own]
    near = np.abs(np.einsum("ij,ij->i", to_face, area[:n_internal]))
    far = np.abs(np.einsum("ij,ij->i", delta[:n_internal] - to_face, area[:n_internal]))
    return Mesh(points=read_only(points), cell_blocks=blocks,
                file_index=read_only(np.argsort(new_number).astype(np.int32)),
                face_points=read_only(face_points), left=read_only(left),
                right=read_only(right), face_area=read_only(area),
                face_centre=read_only(centre), cell_volume=read_only(volume),
                cell_centre=read_only(cell_centre), delta=read_only(delta),
                weight=read_only(far / np.maximum(near + far, 1e-300)), warp=read_only(warp),
                boundaries=MappingProxyType(slices), zones=zones)
