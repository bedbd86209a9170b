"""Meshes of wedges, pyramids and mixed cells, pipes and steps, against formulas and each other."""

from __future__ import annotations

import itertools
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from fv3d.errors import MeshError
from fv3d.mesh.cut import cut_hexes, to_wedges
from fv3d.mesh.generate import box, mixed_box, pyramid_box, skewed, wedge_box
from fv3d.mesh.generate_duct import backward_step, pipe
from fv3d.mesh.grading import OneSided, TwoSided
from fv3d.mesh.mesh import Mesh, build_mesh
from fv3d.mesh.quality import check_mesh, quality

BOXES: dict[str, Callable[..., Mesh]] = {"hexahedra": box, "wedges": wedge_box,
                                         "pyramids": pyramid_box, "mixed": mixed_box}
STEP = {"step": 1.0, "height": 0.5, "inlet_length": 2.0, "outlet_length": 6.0, "depth": 0.3,
        "first_layer": 0.1}
PIPE = {"length": 3.0, "diameter": 2.0, "cells": 4, "core": 2}


def counts(mesh: Mesh) -> dict[str, int]:
    return {kind: len(cells) for kind, _, cells in mesh.cell_blocks}


def areas(mesh: Mesh) -> dict[str, float]:
    return {name: float(mesh.face_area_magnitude[where].sum())
            for name, where in mesh.boundaries.items()}


def assert_sound(mesh: Mesh, volume: float) -> None:
    """Closed positive cells that fill the volume, and Gauss for the linear fields."""
    check_mesh(mesh)
    assert mesh.cell_volume.sum() == pytest.approx(volume, rel=1e-12)
    warp = mesh.warp if mesh.warped else np.zeros((mesh.n_faces, 3, 3))
    for i, j in itertools.product(range(3), range(3)):
        over_face = mesh.face_centre[:, j] * mesh.face_area[:, i] + warp[:, j, i]
        expected = mesh.cell_volume if i == j else 0.0
        np.testing.assert_allclose(mesh.outflow @ over_face, expected, atol=1e-13)


# ---- boxes

@pytest.mark.parametrize("options", [{}, {"skew": 0.3}, {"warp": 0.15}, {"skew": 0.2, "warp": 0.1},
                                     {"grading": (OneSided(3), TwoSided(4), None)}], ids=str)
@pytest.mark.parametrize("kind", BOXES)
def test_boxes_of_every_kind(kind: str, options: dict[str, Any]) -> None:
    mesh = BOXES[kind]((0, 0, 1), (1, 2, 2), cells=(6, 4, 5), **options)
    assert_sound(mesh, 2.0)
    assert areas(mesh) == pytest.approx({"x_min": 2.0, "x_max": 2.0, "y_min": 1.0, "y_max": 1.0,
                                         "z_min": 2.0, "z_max": 2.0})
    assert mesh.warped == ("skew" in options or "warp" in options)


def test_numbers_of_cells() -> None:
    at = {"lower": (0, 0, 0), "upper": (1, 1, 1)}
    assert counts(wedge_box(**at, cells=(3, 4, 5))) == {"wedge": 120}
    assert counts(pyramid_box(**at, cells=(3, 3, 3))) == {"hexahedron": 13, "pyramid": 6 * 14}
    # Four layers of 3 x 2: wedges, hexahedra, pyramids (one base in two), tetrahedra.
    assert counts(mixed_box(**at, cells=(4, 3, 2))) == {
        "hexahedron": 6, "wedge": 12, "pyramid": 30, "tetra": 36 + 12}
    # 3 x 4 squares of both ends are halved, the quadrilaterals of the sides are not.
    wedges = wedge_box(**at, cells=(3, 4, 5))
    assert {n: w.stop - w.start for n, w in wedges.boundaries.items()} == {
        "x_min": 20, "x_max": 20, "y_min": 15, "y_max": 15, "z_min": 24, "z_max": 24}


def test_kinds_equal_the_hexahedra_they_were_cut_from() -> None:
    """Volume and first moment of the parts of a straight hexahedron are its own."""
    hexes = box((0, 0, 0), (1, 1, 1), cells=(5, 3, 4))
    for make in (wedge_box, pyramid_box, mixed_box):
        parts = make((0, 0, 0), (1, 1, 1), cells=(5, 3, 4))
        place = np.floor(parts.cell_centre * [5, 3, 4]).astype(int)
        number = np.ravel_multi_index(tuple(place.T), (5, 3, 4))
        whole = np.ravel_multi_index(tuple(np.floor(hexes.cell_centre * [5, 3, 4]).astype(int).T),
                                     (5, 3, 4))
        volume = np.bincount(number, parts.cell_volume, 60)
        np.testing.assert_allclose(volume[whole], hexes.cell_volume, rtol=1e-12)
        for axis in range(3):
            moment = np.bincount(number, parts.cell_volume * parts.cell_centre[:, axis], 60)
            np.testing.assert_allclose(moment[whole] / volume[whole], hexes.cell_centre[:, axis],
                                       rtol=1e-12)


@pytest.mark.parametrize("kind", BOXES)
def test_warped_families_are_nested(kind: str) -> None:
    """Coarse points are points of the fine mesh; faces flatten faster than they shrink."""
    coarse, fine = (BOXES[kind]((0, 0, 0), (1, 2, 1), cells=(4 * r, 4 * r, 4 * r), warp=0.1)
                    for r in (1, 2))
    corners = {tuple(p) for p in fine.points.round(9).tolist()}
    assert not [p for p in coarse.points[:125].round(9).tolist() if tuple(p) not in corners]
    assert fine.n_cells == 8 * coarse.n_cells or kind == "mixed"
    size = [np.abs(m.warp).max() / m.face_area_magnitude.max() ** 1.5 for m in (coarse, fine)]
    assert size[1] < 0.7 * size[0]


def test_angles_of_a_warped_family_tend_to_those_of_the_map() -> None:
    """Between a line of constant y, z and the normal of the surface x = const through it."""
    t = np.linspace(0, 1, 41)
    u = np.stack(np.meshgrid(t, t, t, indexing="ij"))
    sine, cosine = np.sin(np.pi * u), np.cos(np.pi * u)
    matrix = np.empty((3, 3, *u.shape[1:]))            # of the map x -> x + w sin cos cos
    for i, j in itertools.product(range(3), range(3)):
        others = [k for k in range(3) if k not in (i, j)]
        rest = np.prod([cosine[k] for k in others], axis=0)
        slope = cosine[i] * rest if i == j else -sine[i] * sine[j] * rest
        matrix[i, j] = (i == j) + 0.1 * np.pi * slope
    matrix = np.moveaxis(matrix, (0, 1), (-2, -1))
    inverse = np.linalg.inv(matrix)
    length = np.linalg.norm(matrix, axis=-2) * np.linalg.norm(inverse, axis=-1)
    limit = np.degrees(np.arccos(np.minimum(1.0 / length, 1.0))).max()
    angles = [quality(box((0, 0, 0), (1, 1, 1), cells=(n, n, n), warp=0.1)).non_orthogonality.max()
              for n in (4, 8, 16)]
    assert angles[0] < angles[1] < angles[2] < limit
    assert angles[2] == pytest.approx(limit, rel=0.05)


def test_warp_slides_on_the_sides_and_leaves_single_layers_straight() -> None:
    straight, warped = (box((0, 0, 0), (1, 1, 1), cells=(4, 4, 4), warp=w) for w in (0.0, 0.2))
    for axis, value in itertools.product(range(3), (0.0, 1.0)):
        np.testing.assert_array_equal(straight.points[:, axis] == value,
                                      warped.points[:, axis] == value)
    assert 0.15 < np.abs(warped.points - straight.points).max() <= 0.2
    thin = box((0, 0, 0), (1, 1, 0.1), cells=(6, 6, 1), warp=0.2)
    assert set(np.unique(thin.points[:, 2])) == {0.0, 0.1}
    low, high = thin.points[thin.points[:, 2] == 0], thin.points[thin.points[:, 2] > 0]
    np.testing.assert_array_equal(low[:, :2], high[:, :2])


def test_volumes_equal_those_of_vtk() -> None:
    """Outside check: cell volumes and centres of the VTK library on all four kinds."""
    pyvista = pytest.importorskip("pyvista")
    codes = {"tetra": 10, "hexahedron": 12, "wedge": 13, "pyramid": 14}
    mesh = mixed_box((0, 0, 0), (1, 2, 1), cells=(5, 3, 3))
    assert set(counts(mesh)) == set(codes)
    for kind, connectivity, cells in mesh.cell_blocks:
        grid = pyvista.UnstructuredGrid({codes[kind]: connectivity}, mesh.points)
        sizes = grid.compute_cell_sizes(length=False, area=False)["Volume"]
        np.testing.assert_allclose(mesh.cell_volume[cells], np.abs(sizes), rtol=1e-12)


@pytest.mark.parametrize("bad", [
    {"cells": (3, 2, 2)}, {"cells": (4, 0, 2)}, {"cells": (4, 2, 2), "warp": 0.3},
    {"cells": (4, 2, 2), "warp": -0.1}, {"cells": (4, 2, 2), "skew": 0.6},
    {"cells": (4, 2, 2), "warp": float("nan")}, {"cells": (4, 2, 2), "names": {"lid": "a"}}],
    ids=str)
def test_bad_boxes_are_refused(bad: dict[str, Any]) -> None:
    with pytest.raises(MeshError) as caught:
        mixed_box((0, 0, 0), (1, 1, 1), **bad)
    assert caught.value.where.startswith("mixed_box") and caught.value.remedy


def test_faces_cut_on_one_side_are_refused() -> None:
    mesh = box((0, 0, 0), (2, 1, 1), cells=(2, 1, 1))
    hexes = mesh.cell_blocks[0][1].astype(np.int64)
    one = np.array([True, False])
    with pytest.raises(MeshError, match="cut on one side"):
        cut_hexes(mesh.points, hexes, {}, tetra=one)
    points, cells, _ = cut_hexes(mesh.points, hexes, {}, tetra=one, centre=~one)
    assert {kind: len(conn) for kind, conn in cells} == {"pyramid": 5, "tetra": 8}
    assert len(points) == 13
    with pytest.raises(MeshError, match="not cut alike"):
        to_wedges(np.array([[0, 1, 2, 3, 5, 4, 6, 7]]))


# ---- pipe

@pytest.mark.parametrize("cut", [{}, {"wedge": True}, {"tetra": True}], ids=str)
@pytest.mark.parametrize("quadrants", [1, 2, 4])
def test_pipe_volume_and_areas(quadrants: int, cut: dict[str, bool]) -> None:
    mesh = pipe(**PIPE, quadrants=quadrants, **cut)
    section = quadrants / 4 * 8 * np.sin(2 * np.pi / 16)             # polygon of 16 corners
    assert_sound(mesh, 3.0 * section)
    found = areas(mesh)
    assert found["inlet"] == found["outlet"] == pytest.approx(section)
    assert found["wall"] == pytest.approx(quadrants * 4 * 2 * np.sin(np.pi / 16) * 3.0)
    if quadrants < 4:
        assert found["symmetry"] == pytest.approx(2 * 3.0)
    assert counts(mesh).keys() == ({"wedge"} if "wedge" in cut else {"tetra"} if "tetra" in cut
                                   else {"hexahedron"})


def test_pipe_is_a_family_of_the_circle() -> None:
    errors = [np.pi * 3.0 - pipe(**PIPE, refinement=r).cell_volume.sum() for r in (1, 2, 4)]
    assert errors[0] / errors[1] == pytest.approx(4.0, rel=0.03)
    assert errors[1] / errors[2] == pytest.approx(4.0, rel=0.01)
    assert pipe(**PIPE, refinement=2).n_cells == 8 * pipe(**PIPE).n_cells
    exact = pipe(**PIPE, equal_area=True, wedge=True, grading=TwoSided(3))
    assert exact.cell_volume.sum() == pytest.approx(np.pi * 3.0, rel=1e-12)
    np.testing.assert_allclose(np.unique(exact.points[:, 2].round(9)),
                               TwoSided(3).nodes(0, 3, 4), atol=1e-8)


# ---- step

@pytest.mark.parametrize("cut", [{}, {"wedge": True}, {"tetra": True, "layers": 2}], ids=str)
def test_step_volume_and_areas(cut: dict[str, Any]) -> None:
    mesh = backward_step(**STEP, **cut)
    assert_sound(mesh, (2.0 * 0.5 + 6.0 * 1.5) * 0.3)
    assert areas(mesh) == pytest.approx({
        "inlet": 0.15, "outlet": 0.45, "step": (2.0 + 1.0) * 0.3, "floor": 1.8, "roof": 2.4,
        "sides": 2 * 10.0})
    floor = mesh.boundaries["floor"]
    assert np.all(mesh.face_centre[floor, 1] == 0) and np.all(mesh.face_centre[floor, 0] > 0)
    np.testing.assert_allclose(mesh.face_centre[mesh.boundaries["inlet"], 0], -2.0)


def test_step_without_a_channel_in_front_and_its_family() -> None:
    coarse, fine = (backward_step(**{**STEP, "inlet_length": 0.0}, refinement=r) for r in (1, 2))
    assert areas(coarse)["step"] == pytest.approx(0.3)
    assert areas(coarse)["inlet"] == pytest.approx(0.15)
    assert np.all(coarse.face_centre[coarse.boundaries["inlet"], 0] == 0)
    assert fine.n_cells == 4 * coarse.n_cells
    layer = 2 * np.linalg.norm(coarse.delta[coarse.boundaries["floor"]], axis=1)
    np.testing.assert_allclose(layer, 0.1, rtol=0.15)
    assert quality(coarse).non_orthogonality.max() < 1e-6


@pytest.mark.parametrize("bad", [
    lambda: pipe(**{**PIPE, "length": 0.0}), lambda: pipe(**{**PIPE, "diameter": -1.0}),
    lambda: pipe(**{**PIPE, "cells": 0}), lambda: pipe(**PIPE, wedge=True, tetra=True),
    lambda: pipe(**PIPE, quadrants=3), lambda: pipe(**{**PIPE, "length": "long"}),
    lambda: backward_step(**{**STEP, "step": 0.0}),
    lambda: backward_step(**{**STEP, "inlet_length": -1.0}),
    lambda: backward_step(**{**STEP, "first_layer": float("nan")}),
    lambda: backward_step(**STEP, growth=1.0), lambda: backward_step(**STEP, layers=0),
    lambda: backward_step(**STEP, coarsest=0.0)])
def test_bad_ducts_are_refused(bad: Callable[[], Mesh]) -> None:
    with pytest.raises(MeshError) as caught:
        bad()
    assert caught.value.where and caught.value.remedy


# ---- skew of any mesh

@pytest.mark.parametrize("mesh", [pipe(**PIPE, wedge=True), backward_step(**STEP, layers=3),
                                  mixed_box((0, 0, 0), (1, 1, 1), cells=(5, 4, 4))],
                         ids=["pipe", "step", "mixed"])
def test_skew_moves_inner_points_only(mesh: Mesh) -> None:
    mesh = build_mesh(mesh.points, [(kind, conn) for kind, conn, _ in mesh.cell_blocks],
                      {"all": [part for part in (
                          mesh.face_points[mesh.n_internal:][:, :width][chosen] for width, chosen in
                          ((3, mesh.face_points[mesh.n_internal:, 3] < 0),
                           (4, mesh.face_points[mesh.n_internal:, 3] >= 0)))]},
                      zones={"half": np.arange(mesh.n_cells // 2)})
    other, same = skewed(mesh, 0.15, seed=3), skewed(mesh, 0.15, seed=3)
    np.testing.assert_array_equal(other.points, same.points)
    assert_sound(other, mesh.cell_volume.sum())
    outer = mesh.face_points[mesh.n_internal:]
    fixed = np.zeros(len(mesh.points), dtype=bool)
    fixed[outer[outer >= 0]] = True
    moved = np.any(other.points != mesh.points, axis=1)
    np.testing.assert_array_equal(moved, ~fixed)
    np.testing.assert_array_equal(other.left, mesh.left)
    np.testing.assert_array_equal(other.zones["half"], mesh.zones["half"])
    assert quality(other).non_orthogonality.mean() > quality(mesh).non_orthogonality.mean() + 1
    assert np.abs(other.points - mesh.points).max() <= 0.15 * 0.25
    np.testing.assert_array_equal(skewed(mesh, 0.0).cell_volume, mesh.cell_volume)


@pytest.mark.parametrize("share", [-0.1, 0.5, float("nan")])
def test_bad_shares_are_refused(share: float) -> None:
    with pytest.raises(MeshError, match="out of range"):
        skewed(box((0, 0, 0), (1, 1, 1), cells=(3, 3, 3)), share)
