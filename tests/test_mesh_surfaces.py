"""Meshes without boundary names: flat regions, the printed map, faces that lie back to back."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import meshio
import numpy as np
import pytest

from fv3d.errors import Fv3dWarning, MeshError
from fv3d.mesh.generate import box, mixed_box, pyramid_box
from fv3d.mesh.generate_channel import channel_with_cylinder
from fv3d.mesh.generate_duct import backward_step, pipe
from fv3d.mesh.mesh import Mesh, build_mesh
from fv3d.mesh.read import read_mesh
from fv3d.mesh.surfaces import boundary_map, flat_regions
from fv3d.mesh.topology import LOCAL_FACES, face_keys, match_faces

PIPE = {"length": 3.0, "diameter": 2.0, "cells": 4, "core": 2}      # 16 corners, 22.5 degrees
STEP = {"step": 1.0, "height": 0.5, "inlet_length": 2.0, "outlet_length": 6.0, "depth": 0.3,
        "first_layer": 0.1}


def nameless(mesh: Mesh, path: Path, *, shuffle: bool = False) -> Path:
    """The cells of a mesh alone, in a file."""
    points, blocks = mesh.points, [(kind, conn.astype(int)) for kind, conn, _ in mesh.cell_blocks]
    if shuffle:
        random = np.random.default_rng(8)
        order = random.permutation(len(points))
        points = points[np.argsort(order)]
        blocks = [(kind, random.permutation(order[conn])) for kind, conn in blocks]
    meshio.Mesh(points, blocks).write(path)
    return path


def areas(mesh: Mesh) -> dict[str, float]:
    return {name: float(mesh.face_area_magnitude[where].sum())
            for name, where in mesh.boundaries.items()}


@pytest.mark.parametrize("make", [box, pyramid_box, mixed_box])
def test_sides_of_a_box_by_area_then_place(tmp_path: Path, make: Any, capsys: Any) -> None:
    path = nameless(make((0, 0, 0), (1, 2, 3), cells=(4, 3, 3), skew=0.2), tmp_path / "a.vtu")
    mesh = read_mesh(path)
    assert areas(mesh) == pytest.approx({f"surface {k}": area for k, area in enumerate(
        (6.0, 6.0, 3.0, 3.0, 2.0, 2.0), start=1)})
    printed = capsys.readouterr().out.splitlines()
    assert "6 boundaries without a name" in printed[0] and "'surface 1'" in printed[0]
    assert "\n".join(printed[1:]) == boundary_map(mesh)
    rows = {row.split("  ")[0]: row for row in printed[2:]}
    assert "(-1.00, 0.00, 0.00)" in rows["surface 1"] and rows["surface 1"].endswith("(0, 1, 1.5)")
    assert "(1.00, 0.00, 0.00)" in rows["surface 2"] and rows["surface 2"].endswith("(1, 1, 1.5)")
    assert "(0.00, 0.00, 1.00)" in rows["surface 6"] and rows["surface 6"].endswith("(0.5, 1, 3)")
    names = {f"surface {k}": name for k, name in enumerate(
        ("inlet", "outlet", "walls", "walls", "walls", "walls"), start=1)}
    named = read_mesh(path, names=names)
    assert areas(named) == pytest.approx({"inlet": 6.0, "outlet": 6.0, "walls": 10.0})
    assert capsys.readouterr().out == ""


def test_names_do_not_depend_on_the_numbering(tmp_path: Path) -> None:
    mesh = channel_with_cylinder(length=2.2, height=0.41, depth=0.1, centre=(0.2, 0.2),
                                 diameter=0.1, around=32, layers=2)
    one, two = (read_mesh(nameless(mesh, tmp_path / "a.vtu", shuffle=s)) for s in (False, True))
    assert areas(one) == pytest.approx(areas(two), rel=1e-12)
    for name, where in one.boundaries.items():
        there = two.boundaries[name]
        np.testing.assert_allclose(one.face_centre[where].mean(axis=0),
                                   two.face_centre[there].mean(axis=0), atol=1e-12)
    # Two sides, two walls, cylinder, inlet and outlet, each found whole.
    assert sorted(areas(one).values()) == pytest.approx(sorted(
        [areas(mesh)["sides"] / 2] * 2 + [areas(mesh)["walls"] / 2] * 2
        + [areas(mesh)[name] for name in ("cylinder", "inlet", "outlet")]))


@pytest.mark.parametrize("angle, count", [(30.0, 3), (22.0, 18), (100.0, 1)])
def test_the_feature_angle_decides(tmp_path: Path, angle: float, count: int) -> None:
    """A polygon of 16 corners turns by 22.5 degrees at each, the ends by 90."""
    path = nameless(pipe(**PIPE), tmp_path / "a.msh")
    mesh = read_mesh(path, feature_angle=angle)
    assert len(mesh.boundaries) == count
    if count == 3:
        assert areas(mesh)["surface 1"] == pytest.approx(areas(pipe(**PIPE))["wall"])
        assert "(0.00, 0.00, 0.00)" in boundary_map(mesh).splitlines()[1]     # closed around


@pytest.mark.parametrize("mesh", [
    pipe(**PIPE, tetra=True), pipe(**PIPE, wedge=True, quadrants=1), backward_step(**STEP),
    box((0, 0, 0), (1, 1, 1), cells=(3, 3, 3), tetra=True)], ids=["pipe", "sector", "step", "box"])
@pytest.mark.parametrize("angle", [15.0, 35.0])
def test_regions_equal_those_of_vtk(mesh: Mesh, angle: float) -> None:
    """Outside check: the VTK library splits the surface at its sharp edges."""
    pyvista = pytest.importorskip("pyvista")
    faces = mesh.face_points[mesh.n_internal:]
    three = faces[:, 3] < 0
    flat = [[3 if t else 4, *row[:3 if t else 4]] for t, row in zip(three, faces)]
    surface = pyvista.PolyData(mesh.points, np.concatenate(flat))
    split = surface.compute_normals(cell_normals=False, split_vertices=True, feature_angle=angle,
                                    consistent_normals=False)
    theirs = split.connectivity().cell_data["RegionId"]
    ours = flat_regions(mesh.points, faces, feature_angle=angle)
    pairs = np.unique(np.stack([ours, theirs]), axis=1)
    assert pairs.shape[1] == ours.max() + 1 == theirs.max() + 1        # one to one


def test_tags_without_names_are_mapped_too(tmp_path: Path, capsys: Any) -> None:
    mesh = box((0, 0, 0), (1, 1, 1), cells=(2, 2, 2))
    faces = mesh.face_points[mesh.n_internal:].astype(int)
    tags = np.where(mesh.face_centre[mesh.n_internal:, 0] == 0, 4, 9)
    meshio.Mesh(mesh.points, [("hexahedron", mesh.cell_blocks[0][1]), ("quad", faces)],
                cell_data={"tag": [np.zeros(8, dtype=int), tags]}).write(tmp_path / "a.vtu")
    read_mesh(tmp_path / "a.vtu", names={9: "walls"})
    printed = capsys.readouterr().out
    assert "a.vtu: 1 boundaries without a name" in printed and "tag 4" in printed
    read_mesh(tmp_path / "a.vtu", names={9: "walls", "tag 4": "inlet"})
    assert capsys.readouterr().out == ""


def test_surface_elements_without_any_tag_are_passed_over(tmp_path: Path) -> None:
    mesh = box((0, 0, 0), (1, 1, 1), cells=(2, 2, 2))
    meshio.Mesh(mesh.points, [("hexahedron", mesh.cell_blocks[0][1]),
                              ("quad", mesh.face_points[:7].astype(int))]).write(tmp_path / "a.vtu")
    assert len(read_mesh(tmp_path / "a.vtu").boundaries) == 6


def two_boxes() -> tuple[np.ndarray, np.ndarray]:
    """A U of hexahedra whose arms touch: the points between the arms are there twice."""
    grid = box((0, 0, 0), (2, 2, 1), cells=(2, 2, 1))
    hexes = grid.cell_blocks[0][1].astype(int)
    middle = grid.points[hexes].mean(axis=1)
    arm = np.flatnonzero((middle[:, 0] > 1) & (middle[:, 1] > 1))[0]
    seam = np.flatnonzero((grid.points[:, 0] == 1) & (grid.points[:, 1] > 1.5))
    points = np.vstack([grid.points, grid.points[seam]])
    for k, point in enumerate(seam):
        hexes[arm][hexes[arm] == point] = len(grid.points) + k
    return points, hexes


def test_faces_back_to_back_are_pointed_out(tmp_path: Path, capsys: Any) -> None:
    points, hexes = two_boxes()
    meshio.Mesh(points, [("hexahedron", hexes)]).write(tmp_path / "a.vtu")
    with pytest.warns(Fv3dWarning, match="1 pair.* back to back") as caught:
        mesh = read_mesh(tmp_path / "a.vtu")
    assert "[1.0, 1.5, 0.5]" in str(caught[0].message)
    assert mesh.cell_volume.sum() == pytest.approx(4.0)


def test_cells_that_touch_along_an_edge_stay_apart() -> None:
    """The edge belongs to four faces: it separates whatever the angle."""
    points = np.array([[x, y, z] for z in (0, 1) for y in (0, 1, 2) for x in (0, 1, 2)], float)
    hexes = np.array([[0, 1, 4, 3, 9, 10, 13, 12], [4, 5, 8, 7, 13, 14, 17, 16]])
    quads = np.concatenate([hexes[:, local] for local in LOCAL_FACES["hexahedron"]])
    faces = build_mesh(points, [("hexahedron", hexes)], {"all": [quads]}).face_points
    assert flat_regions(points, faces, feature_angle=30.0).max() + 1 == 12
    region = flat_regions(points, faces, feature_angle=100.0)
    assert region.max() + 1 == 2 and sorted(np.bincount(region)) == [6, 6]


def test_faces_are_found_by_their_points() -> None:
    mesh = mixed_box((0, 0, 0), (1, 1, 1), cells=(4, 2, 2))
    keys = face_keys(mesh.face_points)
    wanted = np.concatenate([keys[[7, 3, 50]], [[0, 1, 2, 999]]]).astype(keys.dtype)
    assert match_faces(keys, wanted).tolist() == [7, 3, 50, -1]


@pytest.mark.parametrize("angle", [0.0, -10.0, 180.0, float("nan"), "flat"])
def test_bad_feature_angles_are_refused(tmp_path: Path, angle: Any) -> None:
    path = nameless(box((0, 0, 0), (1, 1, 1), cells=(2, 2, 2)), tmp_path / "a.vtu")
    with pytest.raises(MeshError, match="feature angle") as caught:
        read_mesh(path, feature_angle=angle)
    assert caught.value.remedy


def test_cells_the_reader_leaves_out_are_refused(tmp_path: Path) -> None:
    """A file with a kind of cell that meshio passes over: no hole in the mesh instead."""
    pyvista = pytest.importorskip("pyvista")
    points = np.array([[x, y, z] for z in (0, 1) for y in (0, 1) for x in (0, 1, 2)], float)
    cells = [8, 0, 1, 4, 3, 6, 7, 10, 9, 8, 1, 2, 4, 5, 7, 8, 10, 11]
    grid = pyvista.UnstructuredGrid(cells, [12, 11], points)         # hexahedron, voxel
    for name in ("a.vtk", "a.vtu"):
        grid.save(tmp_path / name)
        with pytest.raises(MeshError, match="cannot be used") as caught:
            read_mesh(tmp_path / name)
        assert "meshio cannot handle" in str(caught.value.got)
