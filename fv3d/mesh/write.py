"""A mesh with its named boundaries and zones written to a file that meshio knows."""

from __future__ import annotations

import contextlib
import io
import os
import warnings
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import scipy.sparse as sparse
from scipy.sparse.csgraph import maximum_bipartite_matching

from ..errors import FileError, Fv3dWarning
from .mesh import Mesh


@dataclass(frozen=True, eq=False)
class _Block:
    """Elements of one kind and the tag of each."""

    kind: str
    connectivity: np.ndarray
    tags: np.ndarray


def write_mesh(mesh: Mesh, path: str | os.PathLike[str], *,
               file_format: str | None = None) -> dict[int, str]:
    """Write cells and boundary faces; formats with groups, families or sets keep the names.

    Parameters
    ----------
    mesh : Mesh
    path : path
        ``.msh``, ``.med`` and ``.inp`` keep the names of boundaries and zones, others
        (``.vtu, .vtk, .xdmf, .bdf, .mesh`` ...) an integer tag for each.  Zones that overlap
        survive in ``.inp`` only; elsewhere a cell keeps the first of its zones.
    file_format : str, optional
        Name meshio gives the format; by the ending of ``path`` if not given, ``.msh`` with
        physical groups.

    Returns
    -------
    dict of int to str
        Tag written on the faces of each boundary and the cells of each zone, and its name, for
        ``read_mesh(names=)`` where the format keeps tags only.

    Raises
    ------
    FileError
        The file cannot be written; boundaries of the mesh are joined.
    """
    import meshio
    if mesh.joined:
        raise FileError("Joined boundaries have no faces to be written.", where=str(path),
                        got=", ".join(mesh.joined),
                        remedy="Write the mesh as it was before its boundaries were joined.")
    ending = Path(path).suffix.lower()
    if ending == ".msh" and file_format is None:
        file_format = "gmsh"
    family = -1 if ending == ".med" else 1             # families of elements are negative
    names = {family * k: name for k, name in enumerate([*mesh.boundaries, *mesh.zones], start=1)}
    blocks = _blocks(mesh, family, rest=len(names) + 1 if ending == ".msh" else 0)
    _check_names(names, path, ending)
    if ending == ".msh":
        blocks = [part for block in blocks for part in _one_tag_each(block)]
    data: dict[str, Any] = {"cells": [(block.kind, block.connectivity) for block in blocks],
                            **_tag_data(mesh, blocks, names, ending)}
    try:
        with (contextlib.redirect_stdout(io.StringIO()), contextlib.redirect_stderr(io.StringIO()),
              warnings.catch_warnings()):
            warnings.simplefilter("ignore")
            written = meshio.Mesh(mesh.points, **data)
            if ending == ".med":
                written.cell_tags = {tag: [name] for tag, name in names.items()}
            meshio.write(path, written, file_format=file_format)
            if ending == ".inp":
                _append_sets(mesh, Path(path), blocks, names)
    except (Exception, SystemExit) as reason:
        failure = f"{type(reason).__name__}: {reason}"
    else:
        return names
    raise FileError("The mesh could not be written.", where=str(path), got=failure,
                    remedy="Check the folder, the ending of the file name and whether the format "
                           "knows all kinds of cells of the mesh.")


def _check_names(names: dict[int, str], path: str | os.PathLike[str], ending: str) -> None:
    forbidden = {".msh": '"\n', ".inp": ",=*\n"}.get(ending, "")
    bad = [name for name in names.values() if any(sign in name for sign in forbidden)]
    if bad or (ending == ".med" and any(len(name.encode()) > 80 for name in names.values())):
        raise FileError("A name does not fit the format of the file.", where=str(path),
                        got=bad or max(names.values(), key=len),
                        remedy="Use short names of letters, digits and spaces.")
    if ending in (".msh", ".inp") and len(set(names.values())) < len(names):
        raise FileError("A boundary and a zone have the same name.", where=str(path),
                        got=", ".join(names.values()), remedy="Rename one of them.")


def _blocks(mesh: Mesh, family: int, *, rest: int) -> list[_Block]:
    """One block for each kind of cell, then one of triangles and one of quadrilaterals.

    Cells in no zone have the tag ``rest``.  Wedges are turned over: meshio has the normal of
    their first triangle inward.
    """
    tag_of = np.full(mesh.n_cells, rest)
    for k, cells in reversed(list(enumerate(mesh.zones.values(), len(mesh.boundaries) + 1))):
        tag_of[cells] = family * k
    blocks = []
    for kind in dict.fromkeys(kind for kind, _, _ in mesh.cell_blocks):
        same = [(conn, cells) for other, conn, cells in mesh.cell_blocks if other == kind]
        order = [3, 4, 5, 0, 1, 2] if kind == "wedge" else slice(None)
        blocks.append(_Block(kind, np.concatenate([conn for conn, _ in same])[:, order],
                             tag_of[np.concatenate([cells for _, cells in same])]))
    faces = mesh.face_points[mesh.n_internal:].astype(np.int64)
    tags = family * np.repeat(np.arange(1, len(mesh.boundaries) + 1),
                              [where.stop - where.start for where in mesh.boundaries.values()])
    three = faces[:, 3] < 0
    for kind, chosen, width in (("triangle", three, 3), ("quad", ~three, 4)):
        if np.any(chosen):
            blocks.append(_Block(kind, faces[chosen, :width], tags[chosen]))
    return blocks


def _one_tag_each(block: _Block) -> list[_Block]:
    return [_Block(block.kind, block.connectivity[block.tags == tag], block.tags[block.tags == tag])
            for tag in np.unique(block.tags)]


def _tag_data(mesh: Mesh, blocks: list[_Block], names: dict[int, str],
              ending: str) -> dict[str, Any]:
    """How the format keeps tags and names, as arguments of a meshio mesh."""
    tags = [block.tags.astype(np.int32) for block in blocks]
    overlap = len(mesh.zones) > 1 and len(np.unique(np.concatenate([*mesh.zones.values()]))) < sum(
        len(cells) for cells in mesh.zones.values())
    if overlap and ending != ".inp":
        warnings.warn("Zones overlap: each cell keeps the first of its zones in the file.",
                      Fv3dWarning, stacklevel=3)
    if ending == ".inp":
        return {}
    if ending == ".med":
        return {"cell_data": {"cell_tags": tags}}
    if ending in (".bdf", ".nas", ".fem"):
        return {"cell_data": {"nastran:ref": tags}}
    if ending != ".msh":
        return {"cell_data": {"tag": tags}}
    entity = [np.full(len(tag), k, dtype=np.int32) for k, tag in enumerate(tags, start=1)]
    dimension = {tag: 2 if k <= len(mesh.boundaries) else 3 for k, tag in enumerate(names, 1)}
    return {"cell_data": {"gmsh:physical": tags, "gmsh:geometrical": entity},
            "point_data": {"gmsh:dim_tags": _point_entities(mesh, blocks)},
            "field_data": {name: np.array([tag, dimension[tag]]) for tag, name in names.items()}}


def _append_sets(mesh: Mesh, path: Path, blocks: list[_Block], names: dict[int, str]) -> None:
    """One set of element numbers (all blocks counted through from 1) for each name."""
    cells = np.concatenate([cells for kind in dict.fromkeys(k for k, _, _ in mesh.cell_blocks)
                            for other, _, cells in mesh.cell_blocks if other == kind])
    tags = np.concatenate([block.tags for block in blocks])
    with path.open("a", encoding="utf-8") as file:
        for k, (tag, name) in enumerate(names.items()):
            if k < len(mesh.boundaries):
                members = mesh.n_cells + np.flatnonzero(tags[mesh.n_cells:] == tag)
            else:
                members = np.flatnonzero(np.isin(cells, mesh.zones[name]))
            file.write(f"*ELSET, ELSET={name}\n")
            for at in range(0, len(members), 8):
                file.write(",".join(str(m + 1) for m in members[at:at + 8]) + "\n")


def _point_entities(mesh: Mesh, blocks: list[_Block]) -> np.ndarray:
    """(n_points, 2) dimension and number of the entity of each point, none left without."""
    tables = [block.connectivity for block in blocks]
    rows = np.concatenate([np.full(conn.size, k) for k, conn in enumerate(tables)])
    columns = np.concatenate([conn.ravel() for conn in tables])
    member = sparse.csr_matrix((np.ones(len(rows), dtype=np.int8), (rows, columns)),
                               shape=(len(blocks), len(mesh.points)))
    own = maximum_bipartite_matching(member, perm_type="column")
    entities = np.full((len(mesh.points), 2), (3, 1))
    for k, block in enumerate(blocks):
        entities[own[k]] = (2 if block.kind in ("triangle", "quad") else 3, k + 1)
    return entities
