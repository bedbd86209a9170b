"""Input that cannot be used ends in our own exception, before anything is solved."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from made import duct, made_run

import fv3d
import fv3d.flow.coupling
from fv3d.errors import (
    BoundaryError,
    CaseError,
    FileError,
    Fv3dError,
    MeshError,
    ReadingError,
)
from fv3d.mesh.generate import box

NAN, INF = float("nan"), float("inf")
MESH = box((0, 0, 0), (1, 1, 1), cells=(3, 3, 3))
AIR = fv3d.Fluid(density=1.2, viscosity=1.8e-2)
PLACE = {"x [mm]": [500.0, 400.0], "y [mm]": [500.0, 400.0], "z [mm]": [500.0, 400.0]}
GOOD = {**PLACE, "u [m/s]": [1.0, 2.0], "u_std [m/s]": [0.1, 0.1], "group": ["a", "b"]}


def boundaries(**changed: Any) -> dict[str, Any]:
    """Conditions for every side; ``name=None`` leaves one out."""
    all_ = {b: fv3d.Wall() for b in MESH.boundaries} | {
        "x_min": fv3d.Inlet((1.0, 0.0, 0.0)), "x_max": fv3d.Outlet()} | changed
    return {name: condition for name, condition in all_.items() if condition is not None}


def case(**options: Any) -> fv3d.Case:
    return fv3d.Case(MESH, AIR, **({"boundaries": boundaries()} | options))


def steady(**options: Any) -> Any:
    given: dict[str, Any] = {"tolerance": 1e-6, "max_iterations": 50, "progress": False}
    return fv3d.solve_steady(options.pop("of", None) or case(), **(given | options))


def run(spoilt: bool = False) -> fv3d.Run:
    good = made_run(MESH, lambda x: 0 * x + 1.0, lambda x: x[:, 0])
    if not spoilt:
        return good
    velocity = good.velocity.copy()
    velocity[3, 1] = NAN
    return replace(good, state=replace(good.state, velocity=velocity))


def wrong_shape(x: np.ndarray) -> np.ndarray:
    return x[:, :2]


def no_such_column(x: np.ndarray) -> np.ndarray:
    return x[:, 7:8] + x[:, 7]


def nan_somewhere(x: np.ndarray) -> np.ndarray:
    out = np.ones_like(x)
    out[-1, 0] = NAN
    return out


def readings(**changed: Any) -> fv3d.Readings:
    table = GOOD | changed
    return fv3d.Readings(pd.DataFrame({k: v for k, v in table.items() if v is not None}))


def file_with(text: str) -> Callable[[Path], Any]:
    def read(folder: Path) -> Any:
        path = folder / "bad.msh"
        path.write_text(text)
        return fv3d.read_mesh(path)
    return read


TETRA = np.array([[0, 1, 2, 3]])
CORNERS = np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1]])
SIDES = {"all": [np.array([[0, 1, 2], [0, 1, 3], [0, 2, 3], [1, 2, 3]])]}

Bad = Callable[[Path], Any]
TABLE: dict[str, tuple[type[Fv3dError], Bad]] = {
    # mesh
    "mesh: no such file": (MeshError, lambda d: fv3d.read_mesh(d / "nothing.msh")),
    "mesh: not a mesh file": (MeshError, file_with("Dear Sir,\nplease find enclosed\n")),
    "mesh: cut off": (MeshError, file_with("$MeshFormat\n4.1 0 8\n$EndMeshFormat\n$Nodes\n1 9")),
    "mesh: zero scale": (MeshError, lambda d: fv3d.read_mesh(_written(d), scale=0.0)),
    "mesh: points of two coordinates":
        (MeshError, lambda d: fv3d.build_mesh(CORNERS[:, :2], [("tetra", TETRA)], SIDES)),
    "mesh: point not finite":
        (MeshError, lambda d: fv3d.build_mesh(CORNERS * [[1, NAN, 1]], [("tetra", TETRA)], SIDES)),
    "mesh: inverted cell":
        (MeshError, lambda d: fv3d.build_mesh(CORNERS, [("tetra", TETRA[:, [1, 0, 2, 3]])], SIDES)),
    "mesh: cell of unknown kind":
        (MeshError, lambda d: fv3d.build_mesh(CORNERS, [("blob", TETRA)], SIDES)),
    "mesh: cell refers to a missing point":
        (MeshError, lambda d: fv3d.build_mesh(CORNERS, [("tetra", TETRA + 1)], SIDES)),
    "mesh: boundary face without a name":
        (MeshError, lambda d: fv3d.build_mesh(CORNERS, [("tetra", TETRA)],
                                              {"all": [SIDES["all"][0][:3]]})),
    "mesh: boundary face with two names":
        (MeshError, lambda d: fv3d.build_mesh(CORNERS, [("tetra", TETRA)],
                                              {**SIDES, "more": [SIDES["all"][0][:1]]})),
    "mesh: no cells": (MeshError, lambda d: fv3d.build_mesh(CORNERS, [], SIDES)),
    "mesh: box of no cells":
        (MeshError, lambda d: box((0, 0, 0), (1, 1, 1), cells=(0, 3, 3))),
    "mesh: box inside out":
        (MeshError, lambda d: box((0, 0, 0), (1, -1, 1), cells=(3, 3, 3))),
    "mesh: box corner not finite":
        (MeshError, lambda d: box((0, 0, 0), (1, NAN, 1), cells=(3, 3, 3))),
    # boundaries
    "boundary: misspelt": (BoundaryError, lambda d: case(boundaries=boundaries(x_mim=fv3d.Wall()))),
    "boundary: missing": (BoundaryError, lambda d: case(boundaries=boundaries(y_min=None))),
    "boundary: not a condition":
        (BoundaryError, lambda d: case(boundaries=boundaries(y_min="wall"))),
    "boundary: class instead of object":
        (BoundaryError, lambda d: case(boundaries=boundaries(y_min=fv3d.Wall))),
    "boundary: not a mapping": (BoundaryError, lambda d: case(boundaries=[fv3d.Wall()] * 6)),
    "boundary: velocity NaN": (BoundaryError, lambda d: fv3d.Inlet((NAN, 0.0, 0.0))),
    "boundary: velocity of two components": (BoundaryError, lambda d: fv3d.Inlet((1.0, 0.0))),
    "boundary: velocity a number": (BoundaryError, lambda d: fv3d.Inlet(1.0)),
    "boundary: velocity a text": (BoundaryError, lambda d: fv3d.Inlet("fast")),
    "boundary: function of wrong shape":
        (BoundaryError, lambda d: case(boundaries=boundaries(x_min=fv3d.Inlet(wrong_shape)))),
    "boundary: function not finite":
        (BoundaryError, lambda d: case(boundaries=boundaries(x_min=fv3d.Inlet(nan_somewhere)))),
    "boundary: function that returns text":
        (BoundaryError, lambda d: case(boundaries=boundaries(x_min=fv3d.Inlet(lambda x: "one")))),
    "boundary: outlet pressure a list": (BoundaryError, lambda d: fv3d.Outlet([1.0, 2.0])),
    "boundary: outlet pressure a text": (BoundaryError, lambda d: fv3d.Outlet("high")),
    "boundary: outlet pressure infinite": (BoundaryError, lambda d: fv3d.Outlet(INF)),
    "boundary: wall moves through itself":
        (BoundaryError, lambda d: case(boundaries=boundaries(y_min=fv3d.Wall((0.0, 1.0, 0.0))))),
    "boundary: closed domain out of balance":
        (BoundaryError, lambda d: steady(of=case(boundaries=boundaries(x_max=fv3d.Wall())))),
    # fluid and case
    "fluid: zero viscosity": (CaseError, lambda d: fv3d.Fluid(density=1.0, viscosity=0.0)),
    "fluid: negative viscosity": (CaseError, lambda d: fv3d.Fluid(density=1.0, viscosity=-1e-5)),
    "fluid: density NaN": (CaseError, lambda d: fv3d.Fluid(density=NAN, viscosity=1e-5)),
    "fluid: viscosity a text": (CaseError, lambda d: fv3d.Fluid(density=1.0, viscosity="thin")),
    "fluid: temperature in Celsius":
        (CaseError, lambda d: fv3d.moist_air(temperature=-21.0, pressure=1e5,
                                             relative_humidity=0.4)),
    "case: no mesh": (CaseError, lambda d: fv3d.Case("mesh.msh", AIR, boundaries={})),
    "case: no fluid": (CaseError, lambda d: fv3d.Case(MESH, 1.2, boundaries=boundaries())),
    "case: body force of wrong shape": (CaseError, lambda d: case(body_force=(0.0, -9.81))),
    "case: body force not finite": (CaseError, lambda d: case(body_force=nan_somewhere)),
    "case: body force a text": (CaseError, lambda d: case(body_force="gravity")),
    "case: viscosity field of foreign length": (CaseError, lambda d: case(viscosity=np.ones(5))),
    "case: viscosity field not positive": (CaseError, lambda d: case(viscosity=np.zeros(27))),
    "case: viscosity field a text": (CaseError, lambda d: case(viscosity="thin")),
    "case: numerics of another kind": (CaseError, lambda d: case(numerics=fv3d.SIMPLE())),
    # numerical options
    "option: relaxation 1.5": (CaseError, lambda d: fv3d.SIMPLEC(velocity_relaxation=1.5)),
    "option: relaxation 0": (CaseError, lambda d: fv3d.SIMPLE(velocity_relaxation=0.0)),
    "option: relaxation NaN": (CaseError, lambda d: fv3d.SIMPLEC(velocity_relaxation=NAN)),
    "option: relaxation a text": (CaseError, lambda d: fv3d.SIMPLEC(velocity_relaxation="low")),
    "option: pressure relaxation -1": (CaseError, lambda d: fv3d.SIMPLE(pressure_relaxation=-1.0)),
    "option: blend share 2": (CaseError, lambda d: fv3d.Blended(share=2.0)),
    "option: no sweeps": (CaseError, lambda d: fv3d.Numerics(sweeps=0)),
    "option: pressure tolerance 1": (CaseError, lambda d: fv3d.Numerics(pressure_tolerance=1.0)),
    "option: convection by name": (CaseError, lambda d: fv3d.Numerics(convection="upwind")),
    "option: coupling by name": (CaseError, lambda d: fv3d.Numerics(coupling="SIMPLE")),
    "option: gradient by name": (CaseError, lambda d: fv3d.Numerics(gradient="least squares")),
    "solve: tolerance 0": (CaseError, lambda d: steady(tolerance=0.0)),
    "solve: tolerance NaN": (CaseError, lambda d: steady(tolerance=NAN)),
    "solve: tolerance a text": (CaseError, lambda d: steady(tolerance="tight")),
    "solve: max_iterations 0": (CaseError, lambda d: steady(max_iterations=0)),
    "solve: max_iterations a fraction": (CaseError, lambda d: steady(max_iterations=2.5)),
    "solve: max_iterations a text": (CaseError, lambda d: steady(max_iterations="many")),
    "solve: not a case": (CaseError, lambda d: steady(of=MESH)),
    "solve: source of another kind": (CaseError, lambda d: steady(sources=[3.0])),
    "solve: source without a list": (CaseError, lambda d: steady(sources=3.0)),
    "solve: monitor of another kind": (CaseError, lambda d: steady(monitors=["wake"])),
    # start
    "start: vector of two components": (CaseError, lambda d: steady(start=(1.0, 0.0))),
    "start: array of foreign length": (CaseError, lambda d: steady(start=np.ones((5, 3)))),
    "start: not finite": (CaseError, lambda d: steady(start=(NAN, 0.0, 0.0))),
    "start: function of wrong shape": (CaseError, lambda d: steady(start=wrong_shape)),
    "start: a text": (CaseError, lambda d: steady(start="cold")),
    "start: run that is not finite": (CaseError, lambda d: steady(start=run(spoilt=True))),
    # results
    "sample: point outside": (CaseError, lambda d: run().sample([[2.0, 0.5, 0.5]])),
    "sample: point not finite": (CaseError, lambda d: run().sample([[NAN, 0.5, 0.5]])),
    "sample: points of two coordinates": (CaseError, lambda d: run().sample([[0.5, 0.5]])),
    "sample: a text": (CaseError, lambda d: run().sample("centre")),
    "force: no such boundary": (CaseError, lambda d: fv3d.force(run(), "x_middle")),
    "force: centre of two coordinates":
        (CaseError, lambda d: fv3d.force(run(), "x_min", centre=(0.0, 0.0))),
    "write: no such folder": (FileError, lambda d: fv3d.write_vtk(run(), d / "no" / "a.vtu")),
    "write: foreign ending": (FileError, lambda d: fv3d.write_vtk(run(), d / "a.doc")),
    # readings
    "readings: no such file": (ReadingError, lambda d: fv3d.read_readings(d / "nothing.csv")),
    "readings: no unit": (ReadingError, lambda d: readings(**{"v": [1.0, 2.0]})),
    "readings: unknown unit":
        (ReadingError, lambda d: readings(**{"v [knots per hour]": [1.0, 2.0]})),
    "readings: no place": (ReadingError, lambda d: readings(**{"x [mm]": None})),
    "readings: place not finite": (ReadingError, lambda d: readings(**{"x [mm]": [NAN, 1.0]})),
    "readings: zero std": (ReadingError, lambda d: readings(**{"u_std [m/s]": [0.0, 0.1]})),
    "readings: std without value": (ReadingError, lambda d: readings(**{"u [m/s]": None})),
    "readings: text for a number": (ReadingError, lambda d: readings(**{"u [m/s]": ["fast", 1.0]})),
    "readings: duplicate name": (ReadingError, lambda d: readings(name=["a", "a"])),
    "readings: no values":
        (ReadingError, lambda d: readings(**{"u [m/s]": None, "u_std [m/s]": None})),
    "readings: withheld group that is not there":
        (ReadingError, lambda d: readings().split(withheld=["c"])),
    "readings: nothing left to feed":
        (ReadingError, lambda d: readings().split(withheld=["a", "b"])),
    "readings: outside the mesh": (Fv3dError, lambda d: fv3d.observe(
        run(), readings(**{"x [mm]": [5000.0, 500.0]}))),
    # arguments of another kind, or swapped
    "kind: read_mesh of nothing": (MeshError, lambda d: fv3d.read_mesh(None)),
    "kind: read_mesh scale a text": (MeshError, lambda d: fv3d.read_mesh(_written(d), scale="mm")),
    "kind: quality of a case": (MeshError, lambda d: fv3d.quality(case())),
    "kind: inlet function that raises":
        (BoundaryError, lambda d: case(boundaries=boundaries(x_min=fv3d.Inlet(no_such_column)))),
    "kind: force swapped": (CaseError, lambda d: fv3d.force("x_min", run())),
    "kind: force of a case": (CaseError, lambda d: fv3d.force(case(), "x_min")),
    "kind: force on a list": (CaseError, lambda d: fv3d.force(run(), ["x_min"])),
    "kind: momentum budget of a case": (CaseError, lambda d: fv3d.momentum_budget(case())),
    "kind: write_vtk swapped": (CaseError, lambda d: fv3d.write_vtk(d / "a.vtu", run())),
    "kind: write_vtk of a case": (CaseError, lambda d: fv3d.write_vtk(case(), d / "a.vtu")),
    "kind: write_vtk to nowhere": (FileError, lambda d: fv3d.write_vtk(run(), None)),
    "kind: write_history of a case":
        (CaseError, lambda d: fv3d.write_history(case(), d / "a.csv")),
    "kind: write_readings swapped":
        (ReadingError, lambda d: fv3d.write_readings(d / "a.vtp", readings())),
    "kind: write_readings with a case":
        (CaseError, lambda d: fv3d.write_readings(readings(), d / "a.vtp", run=case())),
    "kind: picture swapped": (CaseError, lambda d: fv3d.picture(d / "a.png", run())),
    "kind: picture of a case": (CaseError, lambda d: fv3d.picture(case(), d / "a.png")),
    "kind: picture with a path for readings": (ReadingError, lambda d: fv3d.picture(
        run(), d / "a.png", readings="readings.csv")),
    "kind: picture_readings swapped": (MeshError, lambda d: fv3d.picture_readings(
        readings(), MESH, path=d / "a.png")),
    "kind: picture_readings of no readings": (ReadingError, lambda d: fv3d.picture_readings(
        MESH, "readings.csv", path=d / "a.png")),
    "kind: compare swapped": (CaseError, lambda d: fv3d.compare(readings(), [run()])),
    "kind: compare with a path": (ReadingError, lambda d: fv3d.compare([run()], "readings.csv")),
    "kind: compare fed a path":
        (ReadingError, lambda d: fv3d.compare([run()], readings(), fed="readings.csv")),
    "kind: compare a case": (CaseError, lambda d: fv3d.compare([case()], readings())),
    "kind: compare no runs": (ReadingError, lambda d: fv3d.compare([], readings())),
    "kind: observe swapped": (CaseError, lambda d: fv3d.observe(readings(), run())),
    "kind: split by number": (ReadingError, lambda d: readings().split(withheld=3)),
    "kind: no threads": (CaseError, lambda d: fv3d.set_threads(0)),
    "kind: too many threads": (CaseError, lambda d: fv3d.set_threads(10_000)),
    "kind: threads a text": (CaseError, lambda d: fv3d.set_threads("2")),
    # pictures
    "picture: limits swapped":
        (CaseError, lambda d: fv3d.picture(run(), d / "a.png", limits=(2.0, 1.0))),
    "picture: limits a text":
        (CaseError, lambda d: fv3d.picture(run(), d / "a.png", limits="auto")),
    "picture: limits not finite":
        (CaseError, lambda d: fv3d.picture(run(), d / "a.png", limits=(0.0, INF))),
    "picture: reading outside": (ReadingError, lambda d: fv3d.picture(
        run(), d / "a.png", readings=readings(**{"x [mm]": [500.0, 5000.0]}))),
    "picture_readings: reading outside": (ReadingError, lambda d: fv3d.picture_readings(
        MESH, readings(**{"x [mm]": [500.0, 5000.0]}), path=d / "a.png")),
}


def _written(folder: Path) -> Path:
    fv3d.write_mesh(MESH, folder / "box.msh")
    return folder / "box.msh"


def test_the_table_is_long_enough() -> None:
    assert len(TABLE) >= 20


@pytest.mark.parametrize("kind", TABLE)
def test_bad_input_ends_in_our_own_words(kind: str, tmp_path: Path,
                                         monkeypatch: pytest.MonkeyPatch) -> None:
    def no_step(*_: Any) -> None:
        raise AssertionError("solving has begun")
    monkeypatch.setattr(fv3d.flow.coupling, "step", no_step)
    wanted, bad = TABLE[kind]
    with pytest.raises(wanted) as caught:
        bad(tmp_path)
    error = caught.value
    assert error.what.strip() and error.where.strip() and error.remedy.strip()
    assert error.what in str(error) and error.remedy in str(error)


WORDS: dict[str, tuple[str, Bad]] = {
    "boundary": ("Did you mean 'x_min'?", lambda d: fv3d.force(run(), "x_mim")),
    "group": ("Did you mean 'rake C'?", lambda d: readings(group=["rake C", "rake D"]).split(
        withheld=["rake c"])),
    "competitor": ("Did you mean 'made'?", lambda d: fv3d.compare(
        [replace(run(), name="made")], readings()).rms("maed")),
    "reading outside, observed": ("'far'", lambda d: fv3d.observe(run(), far())),
    "reading outside, compared": ("'far'", lambda d: fv3d.compare([run()], far())),
    "reading outside, written":
        ("'far'", lambda d: fv3d.write_readings(far(), d / "a.vtp", run=run())),
    "reading outside, drawn":
        ("'far'", lambda d: fv3d.picture_readings(MESH, far(), path=d / "a.png")),
    "inlet function": ("IndexError", lambda d: case(boundaries=boundaries(
        x_min=fv3d.Inlet(no_such_column)))),
    "round brackets": ("square brackets", lambda d: readings(**{"v (m/s)": [1.0, 2.0]})),
    "unit": ("Convert", lambda d: readings(**{"v [mph]": [1.0, 2.0]})),
}


def far() -> fv3d.Readings:
    return readings(**{"x [mm]": [500.0, 5000.0], "name": ["near", "far"]})


@pytest.mark.parametrize("kind", WORDS)
def test_the_message_names_the_thing(kind: str, tmp_path: Path) -> None:
    word, bad = WORDS[kind]
    with pytest.raises(Fv3dError) as caught:
        bad(tmp_path)
    assert word in str(caught.value)


def test_no_unit_is_offered_in_place_of_another() -> None:
    """An mph is no km/h and a millimetre no mm/s: nothing to be guessed there."""
    for unit in ("mph", "mm"):
        with pytest.raises(ReadingError) as caught:
            readings(**{f"v [{unit}]": [1.0, 2.0]})
        assert "Did you mean" not in str(caught.value)
        assert "km/h" in caught.value.remedy


@pytest.mark.parametrize("ending", ["msh", "vtu", "mesh", "vtk", "bdf"])
def test_a_damaged_mesh_file_is_told_in_our_own_words(ending: str, tmp_path: Path) -> None:
    path = tmp_path / f"bad.{ending}"
    path.write_text("hello\n")
    with pytest.raises(MeshError) as caught:
        fv3d.read_mesh(path)
    assert caught.value.got == f"6 bytes that are no whole '.{ending}' file"
    assert "Exit" not in str(caught.value) and caught.value.__cause__ is None


def test_the_failure_of_an_inlet_function_is_kept_as_cause() -> None:
    with pytest.raises(BoundaryError) as caught:
        case(boundaries=boundaries(x_min=fv3d.Inlet(no_such_column)))
    assert isinstance(caught.value.__cause__, IndexError)


def test_good_input_passes(tmp_path: Path) -> None:
    """The same calls with nothing wrong: what is refused above is the one wrong thing."""
    assert fv3d.read_mesh(_written(tmp_path)).n_cells == 27
    assert fv3d.build_mesh(CORNERS, [("tetra", TETRA)], SIDES).n_cells == 1
    assert len(readings()) == 2
    assert steady(of=duct(MESH), max_iterations=200).outcome.good
    assert len(fv3d.observe(run(), readings())) == 2
