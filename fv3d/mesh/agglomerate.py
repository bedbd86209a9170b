"""A coarser mesh of any mesh by joining neighbouring cells, about eight into one.

Cells are matched in pairs three times over, each with the neighbour it shares most surface with
for their distance, where both choose each other; what is left over joins a neighbour.  The faces
between two groups become one, with the sum of their areas; its departure from a plane is kept as
``warp``, so that surface integrals of linear fields stay exact.  Boundary faces stay as they are.

Source: agglomeration for multigrid on unstructured meshes, Lallemand, M. H., Steve, H. and
Dervieux, A. (1992), Comput. Fluids 21, 397-433 (cited from memory); the pairing is our own.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from types import MappingProxyType

import numpy as np

from ..errors import MeshError
from .mesh import Mesh, read_only

ROUNDS = 3       # pairings: two to the third cells in a group
ATTEMPTS = 8     # mutual choices in a pairing
SMALL = 3        # groups of no more cells join a neighbour
FEWEST_FACES = 4
FOLDED = 0.2     # area of a joined face over the sum of its parts below which it counts as none


@dataclass(frozen=True, eq=False)
class AgglomeratedMesh(Mesh):
    """A mesh of groups of cells: geometry only, for the solver; points and faces have no shape.

    ``parent`` is the mesh it was made from, ``group`` (parent.n_cells,) the cell of this mesh each
    of its cells went into.
    """

    parent: Mesh = field(kw_only=True)
    group: np.ndarray = field(kw_only=True)

    def __repr__(self) -> str:
        return f"AgglomeratedMesh({self.n_cells} groups of {self.parent.n_cells} cells)"

    __str__ = __repr__


@dataclass(frozen=True, eq=False)
class _Links:
    """Neighbouring groups ``one < other`` (k,), face by face ``row`` of those in ``faces``.

    ``size`` (k,) [m^2] sums areas, ``net`` (k, 3) [m^2] area vectors from ``one`` to ``other``.
    """

    one: np.ndarray
    other: np.ndarray
    faces: np.ndarray
    row: np.ndarray
    sign: np.ndarray
    size: np.ndarray
    net: np.ndarray


def agglomerate(mesh: Mesh, *, apart: np.ndarray | None = None) -> AgglomeratedMesh:
    """Join the cells of a mesh to about an eighth as many.

    Parameters
    ----------
    mesh : Mesh
    apart : (n_cells,) int, optional
        Cells with different numbers are not joined.  Zones are kept apart in any case.

    Raises
    ------
    MeshError
        Boundaries of the mesh are joined.
    """
    if mesh.joined:
        raise MeshError("A mesh with joined boundaries cannot be agglomerated.",
                        where="agglomerate(mesh)", got=", ".join(mesh.joined),
                        remedy="Agglomerate a mesh without them.")
    kinds = _kinds(mesh, apart)
    group = np.arange(mesh.n_cells)
    for _ in range(ROUNDS):
        group = _paired(mesh, group, kinds)[group]
    return _with_geometry(mesh, _absorbed(mesh, group, kinds))


def _kinds(mesh: Mesh, apart: np.ndarray | None) -> np.ndarray:
    """(n_cells,) one number for all cells that may be joined."""
    columns = [np.zeros(mesh.n_cells, dtype=np.int64) if apart is None else np.asarray(apart)]
    for cells in mesh.zones.values():
        inside = np.zeros(mesh.n_cells, dtype=np.int64)
        inside[cells] = 1
        columns.append(inside)
    kinds = np.unique(np.stack(columns, axis=1), axis=0, return_inverse=True)[1]
    return np.asarray(kinds).ravel()


def _links(mesh: Mesh, group: np.ndarray) -> _Links:
    n, count = mesh.n_internal, int(group.max()) + 1
    a, b = group[mesh.left[:n]], group[mesh.right]
    faces = np.flatnonzero(a != b)
    a, b = a[faces], b[faces]
    pairs, row = np.unique(np.minimum(a, b).astype(np.int64) * count + np.maximum(a, b),
                           return_inverse=True)
    sign = np.where(a < b, 1.0, -1.0)
    size = np.bincount(row, mesh.face_area_magnitude[faces], len(pairs))
    net = _summed(sign[:, None] * mesh.face_area[faces], row, len(pairs))
    return _Links(pairs // count, pairs % count, faces, row, sign, size, net)


def _summed(values: np.ndarray, row: np.ndarray, count: int) -> np.ndarray:
    return np.stack([np.bincount(row, column, count) for column in values.T], axis=1)


def _centres(mesh: Mesh, group: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Volumes and centroids of the groups."""
    volume = np.bincount(group, mesh.cell_volume)
    moment = _summed(mesh.cell_volume[:, None] * mesh.cell_centre, group, len(volume))
    return volume, moment / volume[:, None]


def _best(one: np.ndarray, other: np.ndarray, worth: np.ndarray, count: int) -> np.ndarray:
    """(count,) neighbour of greatest worth of each group, itself where it has none."""
    best, order = np.arange(count), np.lexsort((worth, one))
    best[one[order]] = other[order]  # the last of equals is the greatest
    return best


def _paired(mesh: Mesh, group: np.ndarray, kinds: np.ndarray) -> np.ndarray:
    """(groups,) number of the pair each group went into."""
    links = _links(mesh, group)
    volume, centre = _centres(mesh, group)
    count = len(volume)
    kind = np.empty(count, dtype=np.int64)
    kind[group] = kinds
    apart = centre[links.one] - centre[links.other]
    length = np.linalg.norm(apart, axis=1)
    worth = links.size / (length * np.cbrt(volume[links.one] + volume[links.other]))
    worth *= 1.0 + (np.abs(apart) / length[:, None]) @ np.array([0.2, 0.1, 0.0])  # settles ties
    worth *= 1.0 + 1e-6 * np.random.default_rng(0).random(len(worth))
    may = kind[links.one] == kind[links.other]
    one = np.concatenate([links.one[may], links.other[may]])
    other = np.concatenate([links.other[may], links.one[may]])
    worth = np.tile(worth[may], 2)
    into, free = np.arange(count), np.ones(count, bool)
    for _ in range(ATTEMPTS):
        left = free[one] & free[other]
        one, other, worth = one[left], other[left], worth[left]
        best = _best(one, other, worth, count)
        first = np.flatnonzero((best[best] == np.arange(count)) & (best > np.arange(count)))
        if not first.size:
            break
        into[best[first]] = first
        free[first] = free[best[first]] = False
    return np.asarray(np.unique(into, return_inverse=True)[1]).ravel()


def _absorbed(mesh: Mesh, group: np.ndarray, kinds: np.ndarray) -> np.ndarray:
    """Groups that are small, or shut in by few others, joined to a neighbour."""
    n = mesh.n_internal
    for _ in range(6):
        links, count = _links(mesh, group), int(group.max()) + 1
        kind, cells = np.empty(count, dtype=np.int64), np.bincount(group)
        kind[group] = kinds
        one = np.concatenate([links.one, links.other])
        other = np.concatenate([links.other, links.one])
        open_ = np.linalg.norm(links.net, axis=1) > FOLDED * links.size
        faces = np.bincount(one[np.tile(open_, 2)], minlength=count)
        faces += 2 * (np.bincount(group[mesh.left[n:]], minlength=count) > 0)
        poor = (cells <= SMALL) | (faces < FEWEST_FACES)
        may = kind[one] == kind[other]
        worth = np.tile(links.size, 2) / np.sqrt(cells[other])
        best = _best(one[may], other[may], worth[may], count)
        moved = np.flatnonzero(poor & ~poor[best])
        if not moved.size:
            break
        into = np.arange(count)
        into[moved] = best[moved]
        group = np.asarray(np.unique(into[group], return_inverse=True)[1]).ravel()
    return group


def _with_geometry(mesh: Mesh, group: np.ndarray) -> AgglomeratedMesh:
    n, links = mesh.n_internal, _links(mesh, group)
    volume, cell_centre = _centres(mesh, group)
    inner, outer = len(links.one), mesh.n_boundary
    faces = np.concatenate([links.faces, np.arange(n, mesh.n_faces)])
    row = np.concatenate([links.row, inner + np.arange(outer)])
    sign = np.concatenate([links.sign, np.ones(outer)])
    size = mesh.face_area_magnitude[faces]
    area = np.concatenate([links.net, mesh.face_area[n:]])
    centre = _summed(size[:, None] * mesh.face_centre[faces], row, inner + outer)
    centre /= np.bincount(row, size)[:, None]
    centre[inner:] = mesh.face_centre[n:]
    left = np.concatenate([links.one, group[mesh.left[n:]]]).astype(np.int32)
    right = links.other.astype(np.int32)
    delta = centre - cell_centre[left]
    near = np.abs(np.einsum("ij,ij->i", delta[:inner], area[:inner]))
    delta[:inner] = cell_centre[right] - cell_centre[left[:inner]]
    far = np.abs(np.einsum("ij,ij->i", cell_centre[right] - centre[:inner], area[:inner]))
    slices = {name: slice(where.start - n + inner, where.stop - n + inner)
              for name, where in mesh.boundaries.items()}
    zones = {name: read_only(np.unique(group[cells]).astype(np.int32))
             for name, cells in mesh.zones.items()}
    return AgglomeratedMesh(
        parent=mesh, group=read_only(group.astype(np.int32)), points=mesh.points, cell_blocks=(),
        file_index=read_only(np.arange(len(volume), dtype=np.int32)),
        face_points=read_only(np.full((inner + outer, 4), -1, dtype=np.int32)),
        left=read_only(left), right=read_only(right), face_area=read_only(area),
        face_centre=read_only(centre), cell_volume=read_only(volume),
        cell_centre=read_only(cell_centre), delta=read_only(delta),
        weight=read_only(far / np.maximum(near + far, 1e-300)),
        warp=read_only(_warp(mesh, faces, row, sign, area, centre)),
        boundaries=MappingProxyType(slices), zones=MappingProxyType(zones))


def _warp(mesh: Mesh, faces: np.ndarray, row: np.ndarray, sign: np.ndarray, area: np.ndarray,
          centre: np.ndarray) -> np.ndarray:
    """First moments of the joined faces about their centres, see :class:`Mesh`."""
    arm = mesh.face_centre[faces] - centre[row]
    moment = arm[:, :, None] * (sign[:, None] * mesh.face_area[faces])[:, None, :]
    if mesh.warped:
        moment += sign[:, None, None] * mesh.warp[faces]
    warp = _summed(moment.reshape(-1, 9), row, len(area)).reshape(-1, 3, 3)
    return warp if np.any(np.abs(warp) > 1e-12 * mesh.cell_volume.max()) else warp[:0]
