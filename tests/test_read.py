"""Mesh files: round trips through formats meshio knows, and everything that can be wrong."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import meshio
import numpy as np
import pytest

from fv3d.errors import FileError, MeshError
from fv3d.mesh.generate import box
from fv3d.mesh.mesh import Mesh, build_mesh
from fv3d.mesh.read import read_mesh
from fv3d.mesh.write import write_mesh

SIDES = ["x_min", "x_max", "y_min", "y_max", "z_min", "z_max"]


def small(tetra: bool = False) -> Mesh:
    return box((0, 0, 0), (1, 2, 3), cells=(2, 3, 2), tetra=tetra, skew=0.2)


def all_kinds() -> Mesh:
    points = np.array([[0, 0, 0], [1, 0, 0], [1, 1, 0], [0, 1, 0],
                       [0, 0, 1], [1, 0, 1], [1, 1, 1], [0, 1, 1],
                       [0.5, 0.5, 1.7], [1.4, 0.4, 1.8], [1.8, 0, 0.1], [1.8, 1, 0]], dtype=float)
    cells = [("hexahedron", np.array([[0, 1, 2, 3, 4, 5, 6, 7]])),
             ("pyramid", np.array([[4, 5, 6, 7, 8]])),
             ("tetra", np.array([[5, 6, 8, 9]])),
             ("wedge", np.array([[1, 10, 5, 2, 11, 6]]))]
    names = {"low": [np.array([[0, 1, 2, 3]])],
             "rest": [np.array([[0, 3, 7, 4], [0, 1, 5, 4], [2, 3, 7, 6], [5, 6, 11, 10],
                                [1, 2, 11, 10]]),
                      np.array([[4, 5, 8], [6, 7, 8], [7, 4, 8], [5, 6, 9], [6, 8, 9],
                                [8, 5, 9], [1, 5, 10], [2, 6, 11]])]}
    return build_mesh(points, cells, names)


def assert_same(mesh: Mesh, other: Mesh) -> None:
    """Cell by cell in the order of the file, and boundary by boundary."""
    for name in ("cell_volume", "cell_centre"):
        one, two = (np.empty_like(getattr(m, name)) for m in (mesh, other))
        one[mesh.file_index] = getattr(mesh, name)
        two[other.file_index] = getattr(other, name)
        np.testing.assert_allclose(two, one, rtol=1e-12, atol=1e-14)
    assert sorted(mesh.boundaries) == sorted(other.boundaries)
    for name, where in mesh.boundaries.items():
        there = other.boundaries[name]
        assert where.stop - where.start == there.stop - there.start
        one, two = mesh.face_centre[where], other.face_centre[there]
        np.testing.assert_allclose(two[np.lexsort(two.round(9).T)],
                                   one[np.lexsort(one.round(9).T)], atol=1e-12)


# ---- round trips

@pytest.mark.parametrize("tetra", [False, True])
@pytest.mark.parametrize("name, file_format", [("a.msh", None), ("a.msh", "gmsh22"),
                                               ("a.inp", None)])
def test_names_survive_the_file(tmp_path: Path, tetra: bool, name: str,
                                file_format: str | None) -> None:
    """msh 4.1, msh 2.2 (physical groups) and a format with cell sets."""
    mesh = small(tetra)
    write_mesh(mesh, tmp_path / name, file_format=file_format)
    if name.endswith(".msh"):
        version = b"2.2" if file_format else b"4.1"
        assert version in (tmp_path / name).read_bytes()[:40]
    assert_same(mesh, read_mesh(tmp_path / name))


@pytest.mark.parametrize("tetra", [False, True])
@pytest.mark.parametrize("ending", [".vtu", ".vtk", ".mesh", ".xdmf"])
def test_tags_are_renamed(tmp_path: Path, tetra: bool, ending: str) -> None:
    mesh = small(tetra)
    tags = write_mesh(mesh, tmp_path / f"a{ending}")
    assert tags == dict(enumerate(SIDES, start=1))
    assert_same(mesh, read_mesh(tmp_path / f"a{ending}", names=tags))
    plain = read_mesh(tmp_path / f"a{ending}")
    assert sorted(plain.boundaries) == [f"tag {k}" for k in range(1, 7)]


@pytest.mark.parametrize("name", ["a.msh", "a.vtu", "a.vtk"])
def test_all_kinds_of_cells_survive_the_file(tmp_path: Path, name: str) -> None:
    mesh = all_kinds()
    tags = write_mesh(mesh, tmp_path / name)
    assert_same(mesh, read_mesh(tmp_path / name,
                                names=None if name.endswith("msh") else tags))


def test_wedges_of_either_orientation(tmp_path: Path) -> None:
    points = np.array([[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1], [1, 0, 1], [0, 1, 1.0]])
    faces = [("triangle", [[0, 1, 2], [3, 4, 5]]),
             ("quad", [[0, 1, 4, 3], [1, 2, 5, 4], [2, 0, 3, 5]])]
    for order in ([0, 1, 2, 3, 4, 5], [3, 4, 5, 0, 1, 2]):
        file = meshio.Mesh(points, [("wedge", [order]), *faces],
                           cell_data={"tag": [[9], [1, 1], [1, 1, 1]]})
        file.write(tmp_path / "wedge.vtu")
        mesh = read_mesh(tmp_path / "wedge.vtu", names={1: "wall"})
        assert mesh.cell_volume[0] == pytest.approx(0.5)


def test_scale_names_and_points_without_cells(tmp_path: Path) -> None:
    mesh = small()
    raw = meshio_of(mesh)
    raw.points = np.vstack([raw.points, [[50.0, 50.0, 50.0]]])
    raw.write(tmp_path / "a.vtu")
    merged = {1: "walls", "tag 2": "walls", 4: "lid"}
    read = read_mesh(tmp_path / "a.vtu", scale=1e-3, names=merged)
    assert read.cell_volume.sum() == pytest.approx(6e-9)
    assert len(read.points) == len(mesh.points)
    assert set(read.boundaries) == {"walls", "tag 3", "lid", "tag 5", "tag 6"}
    area = read.face_area_magnitude[read.boundaries["walls"]].sum()
    assert area == pytest.approx(2 * 6e-6)


def test_physical_groups_without_names_are_tags(tmp_path: Path) -> None:
    raw = meshio_of(small())
    raw.cell_data = {"gmsh:physical": raw.cell_data["tag"],
                     "gmsh:geometrical": raw.cell_data["tag"]}
    meshio.write(tmp_path / "a.msh", raw, file_format="gmsh22")
    assert sorted(read_mesh(tmp_path / "a.msh").boundaries) == [f"tag {k}" for k in range(1, 7)]


def test_family_names_of_tags(tmp_path: Path) -> None:
    """A format that keeps a table of group names for its tags."""
    mesh = small()
    raw = meshio_of(mesh)
    raw.cell_data = {"cell_tags": [np.zeros(mesh.n_cells, dtype=int), -raw.cell_data["tag"][1]]}
    raw.cell_tags = {-k: [name] for k, name in enumerate(SIDES, start=1)}
    meshio.write(tmp_path / "a.med", raw)
    assert_same(mesh, read_mesh(tmp_path / "a.med"))


def test_group_number_zero_is_no_name(tmp_path: Path, capsys: Any) -> None:
    raw = meshio_of(small())
    tags = raw.cell_data["tag"]
    groups = [tags[0], np.where(tags[1] == 3, 0, tags[1])]
    raw.cell_data = {"gmsh:physical": groups, "gmsh:geometrical": tags}
    meshio.write(tmp_path / "a.msh", raw, file_format="gmsh22")
    _refused(tmp_path / "a.msh", "4 boundary face.* have no name", capsys)
    raw.cell_data = {"gmsh:physical": [0 * t for t in tags], "gmsh:geometrical": tags}
    meshio.write(tmp_path / "b.msh", raw, file_format="gmsh22")
    assert sorted(read_mesh(tmp_path / "b.msh").boundaries) == [f"tag {k}" for k in range(1, 7)]


def meshio_of(mesh: Mesh) -> meshio.Mesh:
    """Cells, then one block of quadrilaterals with tags 1 to 6."""
    faces = mesh.face_points[mesh.n_internal:].astype(np.int64)
    tags = np.concatenate([np.full(w.stop - w.start, k) for k, w in
                           enumerate(mesh.boundaries.values(), start=1)])
    kind, connectivity, _ = mesh.cell_blocks[0]
    shape = ("quad", faces) if kind == "hexahedron" else ("triangle", faces[:, :3])
    return meshio.Mesh(mesh.points.copy(), [(kind, connectivity.copy()), shape],
                       cell_data={"tag": [np.full(mesh.n_cells, 99), tags]})


# ---- what can be wrong

def _refused(path: Path, words: str, capsys: Any, **options: Any) -> MeshError:
    with pytest.raises(MeshError, match=words) as caught:
        read_mesh(path, **options)
    error = caught.value
    assert error.where and error.got is not None and error.remedy
    assert path.name in error.where
    assert error.__cause__ is None and (error.__context__ is None or error.__suppress_context__)
    said = capsys.readouterr()
    assert said.out == said.err == ""
    return error


def _nan(raw: meshio.Mesh) -> None:
    raw.points[5, 1] = np.nan


def _inverted(raw: meshio.Mesh) -> None:
    raw.cells[0].data[2] = raw.cells[0].data[2][[4, 5, 6, 7, 0, 1, 2, 3]]


def _duplicate_cell(raw: meshio.Mesh) -> None:
    raw.cells[0].data = np.vstack([raw.cells[0].data, raw.cells[0].data[:1]])
    raw.cell_data["tag"][0] = np.append(raw.cell_data["tag"][0], 99)


def _missing_cell(raw: meshio.Mesh) -> None:
    raw.cells[0].data = raw.cells[0].data[1:]
    raw.cell_data["tag"][0] = raw.cell_data["tag"][0][1:]


def _far(raw: meshio.Mesh) -> None:
    raw.points[5, 1] = 1e200


def _negative(raw: meshio.Mesh) -> None:
    raw.cells[0].data[0, 0] = -1


def _folded(raw: meshio.Mesh) -> None:
    """Two neighbouring points of a side exchanged: volumes stay positive."""
    raw.points[[7, 8]] = raw.points[[8, 7]]


def _collapsed(raw: meshio.Mesh) -> None:
    raw.cells[0].data[1, 3] = raw.cells[0].data[1, 2]


def _surface_only(raw: meshio.Mesh) -> None:
    del raw.cells[0], raw.cell_data["tag"][0]


def _missing_face(raw: meshio.Mesh) -> None:
    raw.cells[1].data = raw.cells[1].data[3:]
    raw.cell_data["tag"][1] = raw.cell_data["tag"][1][3:]


def _two_names(raw: meshio.Mesh) -> None:
    raw.cells[1].data = np.vstack([raw.cells[1].data, raw.cells[1].data[:1, ::-1]])
    raw.cell_data["tag"][1] = np.append(raw.cell_data["tag"][1], 6)


def _inner_face(raw: meshio.Mesh) -> None:
    mesh = small()
    raw.cells[1].data = np.vstack([raw.cells[1].data, mesh.face_points[:1]])
    raw.cell_data["tag"][1] = np.append(raw.cell_data["tag"][1], 6)


def _foreign_face(raw: meshio.Mesh) -> None:
    raw.cells[1].data[0] = [0, 1, 2, len(raw.points) - 1]


def _missing_point(raw: meshio.Mesh) -> None:
    raw.cells[0].data[0, 0] = 10_000


def _unmerged(raw: meshio.Mesh) -> None:
    """A cell inside the domain gets a point of its own where its neighbours share another."""
    raw.points = np.vstack([raw.points, raw.points[raw.cells[0].data[3, 6]]])
    raw.cells[0].data[3, 6] = len(raw.points) - 1


def _two_parts(raw: meshio.Mesh) -> None:
    n = len(raw.points)
    raw.points = np.vstack([raw.points, raw.points + 10.0])
    for block in raw.cells:
        block.data = np.vstack([block.data, block.data + n])
    raw.cell_data["tag"] = [np.tile(tag, 2) for tag in raw.cell_data["tag"]]


def _flat(raw: meshio.Mesh) -> None:
    raw.points[:, 2] = 0.0


@pytest.mark.parametrize("damage, words", [
    (_nan, "not finite"), (_inverted, "1 cell.* no positive volume"),
    (_duplicate_cell, "more than two cells"), (_missing_cell, "have no name|no face of any"),
    (_collapsed, "use a point twice"), (_far, "too far away"), (_negative, "does not exist"),
    (_folded, "wrong sides"),
    (_surface_only, "no volume cells"), (_missing_face, "3 boundary face.* have no name"),
    (_two_names, "two names"), (_inner_face, "inside the domain"),
    (_foreign_face, "no face of any cell"), (_missing_point, "does not exist"),
    (_unmerged, "have no name|no face of any cell"), (_two_parts, "2 parts"),
    (_flat, "no positive volume")])
def test_damaged_meshes_are_refused(tmp_path: Path, capsys: Any,
                                    damage: Callable[[meshio.Mesh], None], words: str) -> None:
    raw = meshio_of(small())
    damage(raw)
    raw.write(tmp_path / "bad.vtu")
    capsys.readouterr()
    _refused(tmp_path / "bad.vtu", words, capsys)


def test_a_hanging_node_is_refused(tmp_path: Path, capsys: Any) -> None:
    """One cell beside two half as high, all outer faces named."""
    points = np.array([[x, y, z] for z in (0.0, 1.0) for y in (0, 1) for x in (0, 1)]
                      + [[x, y, z] for z in (0.0, 0.5, 1.0) for y in (0, 1) for x in (1, 2)])
    low = [8, 9, 11, 10, 12, 13, 15, 14]
    high = [12, 13, 15, 14, 16, 17, 19, 18]
    join = {8: 1, 10: 3, 16: 5, 18: 7}
    cells = [[0, 1, 3, 2, 4, 5, 7, 6]] + [[join.get(p, p) for p in row] for row in (low, high)]
    quads = [[0, 1, 3, 2], [4, 5, 7, 6], [0, 1, 5, 4], [2, 3, 7, 6], [0, 2, 6, 4]]
    for row in cells[1:]:
        quads += [[row[k] for k in face] for face in ((0, 1, 5, 4), (1, 2, 6, 5), (2, 3, 7, 6))]
    quads += [cells[1][:4], cells[2][4:]]
    meshio.Mesh(points, [("hexahedron", cells), ("quad", quads)],
                cell_data={"tag": [[0] * 3, [1] * len(quads)]}).write(tmp_path / "hang.vtu")
    error = _refused(tmp_path / "hang.vtu", "3 boundary face.* have no name", capsys)
    assert "hanging node" in error.remedy


def test_files_that_are_none(tmp_path: Path, capsys: Any) -> None:
    _refused(tmp_path / "nothing.msh", "no such mesh file", capsys)
    _refused(tmp_path, "no such mesh file", capsys)
    (tmp_path / "empty.msh").touch()
    _refused(tmp_path / "empty.msh", "is empty", capsys)
    (tmp_path / "notes.docx").write_text("no mesh")
    assert ".vtu" in _refused(tmp_path / "notes.docx", "kind of the mesh file", capsys).remedy
    for name in ("text.msh", "text.vtu", "text.vtk", "text.inp", "text.xdmf"):
        (tmp_path / name).write_text("this is no mesh\n1 2 3\n")
        _refused(tmp_path / name, "cannot be read|no table of points|no volume cells", capsys)


@pytest.mark.parametrize("name, file_format", [("a.msh", None), ("a.msh", "gmsh22"),
                                               ("a.vtu", None), ("a.vtk", None),
                                               ("a.mesh", None), ("a.inp", None)])
def test_cut_off_and_damaged_files_end_in_our_error(tmp_path: Path, name: str,
                                                    file_format: str | None) -> None:
    write_mesh(small(), tmp_path / name, file_format=file_format)
    whole = (tmp_path / name).read_bytes()
    cut = tmp_path / f"cut{Path(name).suffix}"
    for share in np.linspace(0.02, 0.9, 12):
        cut.write_bytes(whole[:int(share * len(whole))])
        try:                                # cut behind the elements of a format with sets,
            mesh = read_mesh(cut)           # all names are lost but not the mesh
        except MeshError:
            continue
        assert name.endswith(".inp") and mesh.cell_volume.sum() == pytest.approx(6.0)
        assert all(boundary.startswith("surface") for boundary in mesh.boundaries)
    random = np.random.default_rng(7)
    for _ in range(12):
        damaged = bytearray(whole)
        for at in random.integers(0, len(whole), 3):
            damaged[at] = random.integers(256)
        cut.write_bytes(bytes(damaged))
        try:
            read_mesh(cut)                  # a changed digit may leave a valid mesh
        except MeshError as error:
            assert error.where and error.remedy


def test_plane_meshes_and_other_elements_are_refused(tmp_path: Path, capsys: Any) -> None:
    points = np.array([[0, 0, 0], [2, 0, 0], [0, 2, 0], [0, 0, 2.0]])
    meshio.Mesh(points[:3, :2], [("triangle", [[0, 1, 2]])]).write(tmp_path / "plane.mesh")
    _refused(tmp_path / "plane.mesh", "is plane|no volume cells", capsys)
    meshio.Mesh(points, [("tetra", [[0, 1, 2, 3]]), ("polygon", [[0, 1, 2]])]).write(
        tmp_path / "polygon.vtu")
    error = _refused(tmp_path / "polygon.vtu", "cannot be used", capsys)
    assert "polygon" in str(error.got)


@pytest.mark.parametrize("options, words", [
    ({"scale": "mm"}, "scale"), ({"scale": np.inf}, "scale"),
    ({"scale": 0.0}, "scale"), ({"scale": np.nan}, "scale"), ({"scale": -1e-3}, "scale"),
    ({"names": {12: "inlet"}}, "no such boundary to rename"),
    ({"names": {"inflow": "inlet"}}, "no such boundary to rename"),
    ({"names": {1: ""}}, "must be text"), ({"names": {1: 5}}, "must be text"),
    ({"names": {"zone 7": "screen", "zone 8": "x"}}, "no such boundary to rename")])
def test_bad_options_are_refused(tmp_path: Path, capsys: Any, options: dict[str, Any],
                                 words: str) -> None:
    write_mesh(small(), tmp_path / "a.vtu")
    _refused(tmp_path / "a.vtu", words, capsys, **options)


def test_unwritable_files_are_our_error(tmp_path: Path) -> None:
    with pytest.raises(FileError, match="could not be written"):
        write_mesh(small(), tmp_path / "no folder" / "a.vtu")
    with pytest.raises(FileError, match="could not be written"):
        write_mesh(small(), tmp_path / "a.docx")
