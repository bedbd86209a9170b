"""Where the force of a reading acts: a Gaussian of physical width, or the one cell."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
import scipy.sparse as sparse
from scipy.sparse.csgraph import dijkstra
from scipy.spatial import cKDTree

from ..mesh.mesh import Mesh


class Kernel(Protocol):
    """Shape of the force around a reading, not yet scaled."""

    def shape(self, mesh: Mesh, near: Neighbourhood, point: np.ndarray,
              home: int) -> tuple[np.ndarray, np.ndarray]:
        """Cells (k,) and values (k,) of the kernel of the reading at ``point`` in cell ``home``."""
        ...


@dataclass(frozen=True, eq=False)
class Neighbourhood:
    """Search tree of cell centres and the graph of neighbouring cells with their distances."""

    tree: cKDTree
    graph: sparse.csr_matrix

    @staticmethod
    def of(mesh: Mesh) -> Neighbourhood:
        """Neighbourhood of all cells of a mesh."""
        n = mesh.n_internal
        distance = np.linalg.norm(mesh.delta[:n], axis=1)
        graph = sparse.coo_matrix((distance, (mesh.left[:n], mesh.right)),
                                  shape=(mesh.n_cells, mesh.n_cells)).tocsr()
        return Neighbourhood(cKDTree(mesh.cell_centre), (graph + graph.T).tocsr())

    def within(self, cells: np.ndarray, layers: int) -> np.ndarray:
        """(k,) cells at most this many faces away, in ascending order."""
        mask = np.zeros(self.graph.shape[0], dtype=bool)
        mask[cells] = True
        front = cells
        for _ in range(layers):
            around = self.graph[front].indices
            front = np.unique(around[~mask[around]])
            mask[front] = True
        return np.flatnonzero(mask).astype(np.int32)


@dataclass(frozen=True)
class SingleCell:
    """The cell that holds the reading."""

    def shape(self, mesh: Mesh, near: Neighbourhood, point: np.ndarray,
              home: int) -> tuple[np.ndarray, np.ndarray]:
        """One cell, value one."""
        return np.array([home]), np.ones(1)


@dataclass(frozen=True)
class Gaussian:
    """``exp(-r^2 / 2 radius^2)`` in the fluid the reading can see.

    Cut at ``reach`` radii.  A cell that is reached through the fluid only by a detour of more than
    ``detour`` times the straight distance lies behind a wall and is left out.
    """

    radius: float
    reach: float = 3.0
    detour: float = 1.8

    def shape(self, mesh: Mesh, near: Neighbourhood, point: np.ndarray,
              home: int) -> tuple[np.ndarray, np.ndarray]:
        """Cells within reach and the Gaussian at their centres, one at the nearest."""
        found = near.tree.query_ball_point(point, self.reach * self.radius)
        cells = np.union1d(np.asarray(found, dtype=np.int64), [home])
        distance = np.linalg.norm(mesh.cell_centre[cells] - point, axis=1)
        start = int(np.searchsorted(cells, home))
        path = dijkstra(near.graph[cells][:, cells], indices=start)
        slack = distance[start] + mesh.cell_volume[home] ** (1 / 3)
        seen = path <= self.detour * distance + slack
        cells, distance = cells[seen], distance[seen]
        nearest = distance.min()
        return cells, np.exp(-0.5 * (distance ** 2 - nearest ** 2) / self.radius ** 2)
