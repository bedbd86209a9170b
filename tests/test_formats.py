"""The same mesh through every format: geometry, boundary names and cell zones."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import meshio
import numpy as np
import pytest

from fv3d.errors import FileError, Fv3dWarning, MeshError
from fv3d.mesh.generate import box, mixed_box, pyramid_box, wedge_box
from fv3d.mesh.generate_duct import pipe
from fv3d.mesh.mesh import Mesh, build_mesh
from fv3d.mesh.read import meshio_with_all_kinds, read_mesh
from fv3d.mesh.write import write_mesh

AT = {"lower": (0.0, 0.0, 0.0), "upper": (1.0, 2.0, 1.5)}
NAMES = {"x_min": "inlet", "x_max": "outlet", "z_min": "walls", "z_max": "walls"}
# File name, name meshio gives the format, whether names survive.
FORMATS = {"msh 4.1": ("a.msh", None, True), "msh 2.2": ("a.msh", "gmsh22", True),
           "med": ("a.med", None, True), "inp": ("a.inp", None, True),
           "vtu": ("a.vtu", None, False), "vtk": ("a.vtk", None, False),
           "xdmf": ("a.xdmf", None, False), "bdf": ("a.bdf", None, False),
           "mesh": ("a.mesh", None, False)}
KINDS = {"hexahedra": box, "wedges": wedge_box, "pyramids": pyramid_box, "mixed": mixed_box}
CASES = [(kind, form) for kind in [*KINDS, "tetrahedra"] for form in FORMATS
         if form != "inp" or kind not in ("pyramids", "mixed")]       # inp knows no pyramids


def zoned(kind: str) -> Mesh:
    """A skewed mesh of one kind with two zones and cells that belong to none."""
    options: dict[str, Any] = {"cells": (4, 3, 3), "skew": 0.2, "names": NAMES}
    mesh = box(**AT, tetra=True, **options) if kind == "tetrahedra" else KINDS[kind](**AT,
                                                                                    **options)
    x, y, _ = mesh.cell_centre.T
    zones = {"screen": x > 0.7, "low corner": (x < 0.6) & (y < 0.8)}
    return with_zones(mesh, {name: np.flatnonzero(m) for name, m in zones.items()})


def with_zones(mesh: Mesh, zones: dict[str, np.ndarray]) -> Mesh:
    """The same cells with zones, given in the numbering of ``mesh``."""
    row = np.argsort(mesh.file_index)
    assert np.array_equal(mesh.file_index[row], np.arange(mesh.n_cells))
    place = np.empty(mesh.n_cells, dtype=int)
    place[np.concatenate([cells for _, _, cells in mesh.cell_blocks])] = np.arange(mesh.n_cells)
    return build_mesh(mesh.points, [(kind, conn) for kind, conn, _ in mesh.cell_blocks],
                      faces_of(mesh), zones={name: place[cells] for name, cells in zones.items()})


def faces_of(mesh: Mesh) -> dict[str, list[np.ndarray]]:
    found = {}
    for name, where in mesh.boundaries.items():
        faces = mesh.face_points[where]
        three = faces[:, 3] < 0
        found[name] = [part for part in (faces[three, :3], faces[~three]) if len(part)]
    return found


def by_place(places: np.ndarray) -> np.ndarray:
    """Order of places that does not depend on rounding."""
    return np.lexsort(np.round(places, 6).T)


def assert_same(mesh: Mesh, other: Mesh) -> None:
    """Equal to 1e-10 cell by cell and face by face, whatever the numbering."""
    limit = {"rtol": 0.0, "atol": 1e-10}
    one, two = by_place(mesh.cell_centre), by_place(other.cell_centre)
    np.testing.assert_allclose(other.cell_centre[two], mesh.cell_centre[one], **limit)
    np.testing.assert_allclose(other.cell_volume[two], mesh.cell_volume[one], **limit)
    for name in mesh.zones:
        np.testing.assert_array_equal(np.isin(two, other.zones[name]),
                                      np.isin(one, mesh.zones[name]))
    assert mesh.zones.keys() == other.zones.keys()
    assert mesh.boundaries.keys() == other.boundaries.keys()
    inside = slice(0, mesh.n_internal)
    for where, there in [(inside, slice(0, other.n_internal)),
                         *((mesh.boundaries[name], other.boundaries[name])
                           for name in mesh.boundaries)]:
        one, two = by_place(mesh.face_centre[where]), by_place(other.face_centre[there])
        np.testing.assert_allclose(other.face_centre[there][two], mesh.face_centre[where][one],
                                   **limit)
        areas = mesh.face_area[where][one], other.face_area[there][two]
        sign = np.sign(np.einsum("ij,ij->i", *areas))[:, None]       # sides may be exchanged
        np.testing.assert_allclose(sign * areas[1], areas[0], **limit)
        assert where == inside or np.all(sign > 0)


@pytest.mark.parametrize("kind, form", CASES)
def test_the_same_mesh_through_every_format(tmp_path: Path, kind: str, form: str,
                                            capsys: Any) -> None:
    mesh = zoned(kind)
    name, file_format, keeps_names = FORMATS[form]
    tags = write_mesh(mesh, tmp_path / name, file_format=file_format)
    assert sorted(tags.values()) == sorted([*mesh.boundaries, *mesh.zones])
    assert_same(mesh, read_mesh(tmp_path / name, names=None if keeps_names else tags))
    assert capsys.readouterr().out == ""


# ---- files not written by fv3d

def raw_of(mesh: Mesh) -> tuple[list[tuple[str, np.ndarray]], list[np.ndarray]]:
    """One block per kind with tags: boundaries from 1, zones after them, others 99."""
    tag_of = np.full(mesh.n_cells, 99)
    for k, cells in enumerate(mesh.zones.values(), len(mesh.boundaries) + 1):
        tag_of[cells] = k
    blocks = [(kind, conn.astype(int)) for kind, conn, _ in mesh.cell_blocks]
    tags = [tag_of[cells] for _, _, cells in mesh.cell_blocks]
    for kind in ("triangle", "quad"):
        parts = [(k, part) for k, arrays in enumerate(faces_of(mesh).values(), 1)
                 for part in arrays if part.shape[1] == {"triangle": 3, "quad": 4}[kind]]
        if parts:
            blocks.append((kind, np.concatenate([part for _, part in parts])))
            tags.append(np.concatenate([np.full(len(part), k) for k, part in parts]))
    return blocks, tags


@pytest.mark.parametrize("kind", ["tetrahedra", "mixed"])
@pytest.mark.parametrize("ending, key", [
    (".vtu", "group"), (".vtk", "group"), (".xdmf", "group"), (".bdf", "nastran:ref"),
    (".mesh", "medit:ref"), (".med", "cell_tags")])
def test_files_with_one_tag_per_element(tmp_path: Path, kind: str, ending: str, key: str) -> None:
    mesh = zoned(kind)
    blocks, tags = raw_of(mesh)
    raw = meshio.Mesh(mesh.points, blocks, cell_data={key: tags})
    names = dict(enumerate([*mesh.boundaries, *mesh.zones], start=1))
    if ending == ".med":
        raw.cell_tags = {}
    raw.write(tmp_path / f"a{ending}")
    read = read_mesh(tmp_path / f"a{ending}", names={**names, 99: "rest"})
    assert len(read.zones["rest"]) + sum(len(z) for z in mesh.zones.values()) == mesh.n_cells
    assert_same(with_zones(mesh, {**mesh.zones, "rest": np.setdiff1d(
        np.arange(mesh.n_cells), np.concatenate(list(mesh.zones.values())))}), read)


def test_a_med_file_with_cells_in_two_groups_of_a_family(tmp_path: Path) -> None:
    mesh = zoned("tetrahedra")
    blocks, tags = raw_of(mesh)
    n = len(mesh.boundaries)
    raw = meshio.Mesh(mesh.points, blocks, cell_data={
        "cell_tags": [np.where(tag == 99, 0, -tag) for tag in tags]})
    raw.cell_tags = {-k: [name] for k, name in enumerate(mesh.boundaries, 1)}
    raw.cell_tags |= {-n - 1: ["screen", "both"], -n - 2: ["low corner", "both"]}
    raw.write(tmp_path / "a.med")
    read = read_mesh(tmp_path / "a.med")
    assert sorted(read.zones) == ["both", "low corner", "screen"]
    np.testing.assert_array_equal(read.zones["both"], np.union1d(read.zones["screen"],
                                                                 read.zones["low corner"]))


def test_sets_of_an_inp_file(tmp_path: Path) -> None:
    """Groups given with the elements, as most meshers write them."""
    mesh = with_zones(box(**AT, cells=(2, 1, 1)), {"front": np.array([0]), "back": np.array([1])})
    lines = ["*NODE"] + [f"{k}, {x}, {y}, {z}" for k, (x, y, z) in enumerate(mesh.points, 1)]
    number = 0
    hexes = mesh.cell_blocks[0][1][np.argsort(mesh.cell_blocks[0][2])]
    for kind, name, rows in [("C3D8", "front", hexes[:1]), ("C3D8", "back", hexes[1:]),
                             *(("S4", name, faces[0]) for name, faces in faces_of(mesh).items())]:
        lines.append(f"*ELEMENT, TYPE={kind}, ELSET={name}")
        for row in rows:
            number += 1
            lines.append(", ".join(str(v) for v in [number, *(row + 1).tolist()]))
    (tmp_path / "a.inp").write_text("\n".join(lines) + "\n")
    assert_same(mesh, read_mesh(tmp_path / "a.inp"))


def test_vtk_reads_what_was_written(tmp_path: Path) -> None:
    """Outside check: the VTK library finds the same volumes in the file."""
    pyvista = pytest.importorskip("pyvista")
    mesh = mixed_box(**AT, cells=(4, 3, 3))
    for ending in (".vtu", ".vtk"):
        write_mesh(mesh, tmp_path / f"a{ending}")
        grid = pyvista.read(tmp_path / f"a{ending}")
        sizes = np.abs(grid.compute_cell_sizes(length=False, area=False)["Volume"])
        given = np.concatenate([mesh.cell_volume[cells] for _, _, cells in mesh.cell_blocks])
        np.testing.assert_allclose(sizes[:mesh.n_cells], given, rtol=1e-12)
        np.testing.assert_allclose(sizes[mesh.n_cells:], 0.0, atol=1e-15)


# ---- cells of higher order, other orders of points

SECOND = [("tetra", "tetra10", ".vtu"), ("tetra", "tetra10", ".msh"), ("tetra", "tetra10", ".med"),
          ("hexahedron", "hexahedron20", ".vtu"), ("hexahedron", "hexahedron20", ".med"),
          ("hexahedron", "hexahedron20", ".bdf"), ("hexahedron", "hexahedron27", ".vtu"),
          ("hexahedron", "hexahedron27", ".msh"), ("wedge", "wedge15", ".vtu"),
          ("wedge", "wedge15", ".med"), ("wedge", "wedge18", ".msh"),
          ("pyramid", "pyramid13", ".vtu"), ("pyramid", "pyramid13", ".med"),
          ("pyramid", "pyramid14", ".msh")]


@pytest.mark.parametrize("kind, second, ending", SECOND)
def test_second_order_cells_are_reduced_to_their_corners(tmp_path: Path, kind: str, second: str,
                                                         ending: str) -> None:
    """Points between the corners, displaced to make curved edges, are left out."""
    mesh = {"tetra": lambda: box(**AT, cells=(2, 2, 2), tetra=True),
            "hexahedron": lambda: box(**AT, cells=(2, 2, 2), skew=0.2),
            "wedge": lambda: wedge_box(**AT, cells=(2, 2, 2), skew=0.2),
            "pyramid": lambda: pyramid_box(**AT, cells=(1, 1, 1))}[kind]()
    blocks, tags = raw_of(mesh)
    points, raised = [*mesh.points], []
    curved = {kind: int(second.removeprefix(kind)), "triangle": 6, "quad": 8}
    for block, conn in blocks:
        extra = np.empty((len(conn), curved[block] - conn.shape[1]), dtype=int)
        for row in np.ndindex(extra.shape):
            ends = conn[row[0], [row[1] % conn.shape[1], (row[1] + 1) % conn.shape[1]]]
            extra[row] = len(points)
            points.append(mesh.points[ends].mean(axis=0) + 0.01)
        raised.append((f"{block}{curved[block]}", np.hstack([conn, extra])))
    key = {".vtu": "tag", ".msh": "gmsh:physical", ".med": "cell_tags",
           ".bdf": "nastran:ref"}[ending]
    data = {key: tags} | ({"gmsh:geometrical": tags} if ending == ".msh" else {})
    raw = meshio_with_all_kinds().Mesh(np.array(points), raised, cell_data=data)
    meshio.write(tmp_path / f"a{ending}", raw, file_format="gmsh22" if ending == ".msh" else None)
    with pytest.warns(Fv3dWarning, match=f"reduced to their corners .*{mesh.n_cells} {second}"):
        read = read_mesh(tmp_path / f"a{ending}", names=dict(enumerate(mesh.boundaries, 1)))
    assert len(read.points) == len(mesh.points)
    assert_same(mesh, read)


@pytest.mark.parametrize("kind", KINDS)
def test_cells_of_the_other_orientation(tmp_path: Path, kind: str) -> None:
    """All cells mirrored in their point order, as some formats have it."""
    mesh = zoned(kind)
    blocks, tags = raw_of(mesh)
    turned = {"hexahedron": [0, 3, 2, 1, 4, 7, 6, 5], "wedge": [0, 2, 1, 3, 5, 4],
              "pyramid": [0, 3, 2, 1, 4], "tetra": [1, 0, 2, 3]}
    other = [(name, conn[:, turned[name]] if name in turned else conn) for name, conn in blocks]
    meshio.Mesh(mesh.points, other, cell_data={"tag": tags}).write(tmp_path / "a.vtu")
    names = dict(enumerate([*mesh.boundaries, *mesh.zones], start=1))
    read = read_mesh(tmp_path / "a.vtu", names=names)
    assert_same(mesh, with_zones(read, {name: read.zones[name] for name in mesh.zones}))


# ---- zones

def test_one_tag_for_all_cells_is_no_zone_unless_it_is_named(tmp_path: Path) -> None:
    mesh = box(**AT, cells=(2, 2, 2))
    blocks, tags = raw_of(mesh)
    meshio.Mesh(mesh.points, blocks, cell_data={"tag": tags}).write(tmp_path / "a.vtu")
    assert not read_mesh(tmp_path / "a.vtu").zones
    tags[0][:] = 1                                      # as one of the boundaries
    meshio.Mesh(mesh.points, blocks, cell_data={"tag": tags}).write(tmp_path / "b.vtu")
    assert not read_mesh(tmp_path / "b.vtu", names={1: "inlet"}).zones
    assert set(read_mesh(tmp_path / "b.vtu", names={1: "inlet", "zone 1": "air"}).zones) == {"air"}
    for key in (99, "zone 99"):
        read = read_mesh(tmp_path / "a.vtu", names={key: "air"})
        np.testing.assert_array_equal(read.zones["air"], np.arange(8))


def test_several_tags_make_zones_and_cell_numbers_do_not(tmp_path: Path) -> None:
    mesh = box(**AT, cells=(2, 2, 2))
    blocks, tags = raw_of(mesh)
    for cells, zones in (([5, 5, 7, 7, 7, 7, 7, 0], {"zone 5", "zone 7"}), (range(8), set())):
        tags[0] = np.array(cells)
        meshio.Mesh(mesh.points, blocks, cell_data={"tag": tags}).write(tmp_path / "a.vtu")
        assert set(read_mesh(tmp_path / "a.vtu").zones) == zones


def test_named_faces_between_zones_are_left_out(tmp_path: Path) -> None:
    mesh = zoned("mixed")
    blocks, tags = raw_of(mesh)
    screen = np.isin(np.arange(mesh.n_cells), mesh.zones["screen"])
    corner = np.isin(np.arange(mesh.n_cells), mesh.zones["low corner"])
    one, two = mesh.left[:mesh.n_internal], mesh.right
    differ = (screen[one] != screen[two]) | (corner[one] != corner[two])
    faces = mesh.face_points[:mesh.n_internal]
    for chosen, words in ((differ, "lies between cell zones"), (~differ, "inside the domain")):
        kind, rows = next((kind, rows[:, :width]) for kind, rows, width in (
            ("triangle", faces[chosen & (faces[:, 3] < 0)], 3),
            ("quad", faces[chosen & (faces[:, 3] >= 0)], 4)) if len(rows))
        more, marks = [*blocks, (kind, rows)], [*tags, np.full(len(rows), 50)]
        meshio.Mesh(mesh.points, more, cell_data={"tag": marks}).write(tmp_path / "a.vtu")
        names = {**dict(enumerate([*mesh.boundaries, *mesh.zones], 1)), 50: "between"}
        if chosen is differ:
            with pytest.warns(Fv3dWarning, match=words):
                read = read_mesh(tmp_path / "a.vtu", names=names)
            assert read.boundaries.keys() == mesh.boundaries.keys()
        else:
            with pytest.raises(MeshError, match=words):
                read_mesh(tmp_path / "a.vtu", names=names)


def test_overlapping_zones_survive_as_sets_only(tmp_path: Path) -> None:
    plain = pipe(length=1.0, diameter=1.0, cells=3, core=2)
    mesh = with_zones(plain, {"a": np.arange(0, 40), "b": np.arange(30, 60)})
    write_mesh(mesh, tmp_path / "a.inp")
    assert_same(mesh, read_mesh(tmp_path / "a.inp"))
    with pytest.warns(Fv3dWarning, match="overlap"):
        write_mesh(mesh, tmp_path / "a.msh")
    read = read_mesh(tmp_path / "a.msh")
    assert len(read.zones["a"]) == 40 and len(read.zones["b"]) == 20


@pytest.mark.parametrize("name, ending, words", [
    ('say "a"', ".msh", "does not fit"), ("a, b", ".inp", "does not fit"),
    ("n" * 81, ".med", "does not fit"), ("x_max", ".msh", "same name"),
    ("x_max", ".inp", "same name")])
def test_names_that_do_not_fit_the_format(tmp_path: Path, name: str, ending: str,
                                          words: str) -> None:
    mesh = with_zones(box(**AT, cells=(2, 1, 1)), {name: np.array([0])})
    with pytest.raises(FileError, match=words) as caught:
        write_mesh(mesh, tmp_path / f"a{ending}")
    assert caught.value.got and caught.value.remedy
    with pytest.raises(FileError, match="could not be written"):
        write_mesh(pyramid_box(**AT, cells=(2, 1, 1)), tmp_path / "b.inp")
