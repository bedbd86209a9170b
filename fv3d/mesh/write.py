"""A mesh with its named boundaries written to a file that meshio knows."""

from __future__ import annotations

import contextlib
import io
import os
from pathlib import Path
from typing import Any

import numpy as np
import scipy.sparse as sparse
from scipy.sparse.csgraph import maximum_bipartite_matching

from ..errors import FileError
from .mesh import Mesh


def write_mesh(mesh: Mesh, path: str | os.PathLike[str], *,
               file_format: str | None = None) -> dict[int, str]:
    """Write cells and boundary faces; formats with physical groups keep the names.

    Parameters
    ----------
    mesh : Mesh
    path : path
    file_format : str, optional
        Name meshio gives the format; by the ending of ``path`` if not given, ``.msh`` with
        physical groups.

    Returns
    -------
    dict of int to str
        Tag written on the faces of each boundary and its name, for ``read_mesh(names=)``
        where the format keeps tags only.

    Raises
    ------
    FileError
        The file cannot be written.
    """
    import meshio
    blocks = _blocks(mesh)
    names = {rank: name for rank, name in enumerate(mesh.boundaries, start=1)}
    tags = [np.full(len(conn), tag, dtype=np.int32) for _, conn, tag in blocks]
    grouped = Path(path).suffix == ".msh"
    if grouped and file_format is None:
        file_format = "gmsh"
    data: dict[str, Any] = {"cells": [(kind, conn) for kind, conn, _ in blocks]}
    if grouped:
        entity = [np.full(len(conn), k, dtype=np.int32)
                  for k, (_, conn, _) in enumerate(blocks, start=1)]
        data["cell_data"] = {"gmsh:physical": tags, "gmsh:geometrical": entity}
        data["point_data"] = {"gmsh:dim_tags": _point_entities(mesh, blocks)}
        data["field_data"] = {name: np.array([tag, 2]) for tag, name in names.items()}
        data["field_data"]["inside"] = np.array([len(names) + 1, 3])
    else:
        data["cell_data"] = {"tag": tags}
    if Path(path).suffix == ".inp":
        data["cell_sets"] = {name: [np.arange(len(conn) if own == tag else 0)
                                    for _, conn, own in blocks] for tag, name in names.items()}
    try:
        with contextlib.redirect_stdout(io.StringIO()), contextlib.redirect_stderr(io.StringIO()):
            written = meshio.Mesh(mesh.points, **data)
            meshio.write(path, written, file_format=file_format)
    except (Exception, SystemExit) as reason:
        failure = f"{type(reason).__name__}: {reason}"
    else:
        return names
    raise FileError("The mesh could not be written.", where=str(path), got=failure,
                    remedy="Check the folder and the ending of the file name.")


def _blocks(mesh: Mesh) -> list[tuple[str, np.ndarray, int]]:
    """Kind, connectivity and tag of each block of cells and boundary faces."""
    inside = len(mesh.boundaries) + 1
    blocks = []
    for kind, connectivity, _ in mesh.cell_blocks:
        order = [3, 4, 5, 0, 1, 2] if kind == "wedge" else slice(None)
        blocks.append((kind, connectivity[:, order], inside))
    for tag, where in enumerate(mesh.boundaries.values(), start=1):
        faces = mesh.face_points[where].astype(np.int64)
        three = faces[:, 3] < 0
        if np.any(three):
            blocks.append(("triangle", faces[three, :3], tag))
        if not np.all(three):
            blocks.append(("quad", faces[~three], tag))
    return blocks


def _point_entities(mesh: Mesh, blocks: list[tuple[str, np.ndarray, int]]) -> np.ndarray:
    """(n_points, 2) dimension and number of the entity of each point, none left without."""
    rows = np.concatenate([np.full(conn.size, k) for k, (_, conn, _) in enumerate(blocks)])
    columns = np.concatenate([conn.ravel() for _, conn, _ in blocks])
    member = sparse.csr_matrix((np.ones(len(rows), dtype=np.int8), (rows, columns)),
                               shape=(len(blocks), len(mesh.points)))
    own = maximum_bipartite_matching(member, perm_type="column")
    entities = np.full((len(mesh.points), 2), (3, 1))
    for k, (kind, _, _) in enumerate(blocks):
        entities[own[k]] = (2 if kind in ("triangle", "quad") else 3, k + 1)
    return entities
