"""Input that cannot be used, of results along lines and walls and of unusual boundaries."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from test_bad_input import (
    AIR,
    INF,
    MESH,
    NAN,
    Bad,
    boundaries,
    case,
    no_such_column,
    readings,
    run,
    steady,
    wrong_shape,
)

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

REFERENCE: dict[str, Any] = {"density": 1.2, "speed": 1.0, "area": 1.0, "length": 1.0}
LINE: dict[str, Any] = {"start": (0.1, 0.5, 0.5), "end": (0.9, 0.5, 0.5), "count": 5}
PROFILE: dict[str, Any] = {"fluid": AIR, "mean_speed": 1.0}
PLANE = np.array([[0.0, 0.0, 0.0], [0.0, 1.0, 0.0], [0.0, 0.0, 1.0], [0.0, 1.0, 1.0]])


NONE: Any = None
VALUES = {b: fv3d.ScalarValue(0.0) for b in MESH.boundaries}
SCALAR: dict[str, Any] = {"diffusivity": 1.0, "tolerance": 1e-8, "max_iterations": 50,
                          "boundaries": VALUES}


def scalar(**changed: Any) -> fv3d.ScalarField:
    """A scalar with these conditions in a uniform stream along (1, 1, 1)."""
    return fv3d.solve_scalar(run(), **SCALAR | {"boundaries": VALUES | changed})


def inlet(points: np.ndarray) -> fv3d.Case:
    """A case fed by a table of these points."""
    return case(boundaries=boundaries(x_min=fv3d.Inlet(fv3d.InletTable(points, points + 1.0))))


def damaged(folder: Path) -> Path:
    """The index of a series, cut off."""
    path = folder / "damaged.pvd"
    path.write_text('<?xml version="1.0"?><VTKFile type="Collection"><Coll')
    return path


TABLE: dict[str, tuple[type[Fv3dError], Bad]] = {
    # coefficients and flow rates
    "reference: zero speed": (CaseError, lambda d: fv3d.Reference(**REFERENCE | {"speed": 0.0})),
    "reference: area a text": (CaseError, lambda d: fv3d.Reference(**REFERENCE | {"area": "1 m2"})),
    "reference: density NaN": (CaseError, lambda d: fv3d.Reference(**REFERENCE | {"density": NAN})),
    "reference: infinite length":
        (CaseError, lambda d: fv3d.Reference(**REFERENCE | {"length": INF})),
    "coefficients: no reference":
        (CaseError, lambda d: fv3d.force_coefficients(run(), "x_min", reference=1.2)),
    "coefficients: no such boundary": (CaseError, lambda d: fv3d.force_coefficients(
        run(), "strut", reference=fv3d.Reference(**REFERENCE))),
    "coefficients: along nothing": (CaseError, lambda d: fv3d.force_coefficients(
        run(), "x_min", reference=fv3d.Reference(**REFERENCE)).along((0.0, 0.0, 0.0))),
    "flow rate: of a case": (CaseError, lambda d: fv3d.flow_rate(case(), "x_max")),
    "flow rate: no such boundary": (CaseError, lambda d: fv3d.flow_rate(run(), "outlet")),
    "flow split: of a case": (CaseError, lambda d: fv3d.flow_split(case())),
    # walls
    "wall shear: no such boundary": (CaseError, lambda d: fv3d.wall_shear(run(), "floor")),
    "surface: no boundary": (CaseError, lambda d: fv3d.write_surface(run(), [], path=d / "a.vtp")),
    "surface: a boundary twice": (CaseError, lambda d: fv3d.write_surface(
        run(), ["x_min", "x_min"], path=d / "a.vtp")),
    "surface: no such boundary":
        (CaseError, lambda d: fv3d.write_surface(run(), ["strut"], path=d / "a.vtp")),
    "surface: a number": (CaseError, lambda d: fv3d.write_surface(run(), 3, path=d / "a.vtp")),
    "surface: foreign ending":
        (FileError, lambda d: fv3d.write_surface(run(), ["x_min"], path=d / "a.stl")),
    "surface: of a case":
        (CaseError, lambda d: fv3d.write_surface(case(), ["x_min"], path=d / "a.vtp")),
    "reversals: no direction":
        (CaseError, lambda d: fv3d.shear_reversals(run(), "x_min", along=(0.0, 0.0, 0.0))),
    "reversals: direction of two numbers":
        (CaseError, lambda d: fv3d.shear_reversals(run(), "x_min", along=(1.0, 0.0))),
    "reversals: no such boundary":
        (CaseError, lambda d: fv3d.shear_reversals(run(), "floor", along=(1.0, 0.0, 0.0))),
    # inlet tables and developed profiles
    "inlet table: velocity of two components":
        (BoundaryError, lambda d: fv3d.InletTable(PLANE, PLANE[:, :2])),
    "inlet table: not finite": (BoundaryError, lambda d: fv3d.InletTable(PLANE * NAN, PLANE)),
    "inlet table: a text": (BoundaryError, lambda d: fv3d.InletTable("plane.csv", PLANE)),
    "inlet table: one place": (BoundaryError, lambda d: fv3d.InletTable(PLANE[:1], PLANE[:1])),
    "inlet table: two points at one place": (BoundaryError, lambda d: inlet(PLANE[[0, 1, 2, 2]])),
    "inlet table: behind each other":
        (BoundaryError, lambda d: inlet(np.array([[0.0, 0.5, 0.5], [0.1, 0.5, 0.5]]))),
    "inlet table: millimetres taken as metres": (BoundaryError, lambda d: inlet(1e3 * PLANE)),
    "inlet table: beside the inlet":
        (BoundaryError, lambda d: inlet(PLANE + np.array([0.0, 2.0, 0.0]))),
    "inlet table: in other axes":
        (BoundaryError, lambda d: inlet(PLANE + np.array([5.0, 0.0, 0.0]))),
    "inlet readings: a component not measured":
        (ReadingError, lambda d: fv3d.inlet_table(readings())),
    "inlet readings: no file": (ReadingError, lambda d: fv3d.inlet_table(d / "nothing.csv")),
    "inlet readings: unmeasured a number":
        (ReadingError, lambda d: fv3d.inlet_table(readings(), unmeasured=0.0)),
    "inlet readings: direction zero":
        (ReadingError, lambda d: fv3d.inlet_table(readings(), direction=(0.0, 0.0, 0.0))),
    "inlet readings: speed without direction": (ReadingError, lambda d: fv3d.inlet_table(readings(
        **{"u [m/s]": None, "u_std [m/s]": None, "speed [m/s]": 1.0, "speed_std [m/s]": 0.1}))),
    "inlet readings: pressure only": (ReadingError, lambda d: fv3d.inlet_table(readings(
        **{"u [m/s]": None, "u_std [m/s]": None, "p [Pa]": 1.0, "p_std [Pa]": 0.1}))),
    "developed: no such boundary":
        (BoundaryError, lambda d: fv3d.developed_profile(MESH, "inlet", **PROFILE)),
    "developed: no mesh": (MeshError, lambda d: fv3d.developed_profile("x_min", MESH, **PROFILE)),
    "developed: no flow": (BoundaryError, lambda d: fv3d.developed_profile(
        MESH, "x_min", **PROFILE | {"mean_speed": None})),
    "developed: flow rate and speed": (BoundaryError, lambda d: fv3d.developed_profile(
        MESH, "x_min", **PROFILE, flow_rate=1.0)),
    "developed: negative speed": (BoundaryError, lambda d: fv3d.developed_profile(
        MESH, "x_min", **PROFILE | {"mean_speed": -1.0})),
    "developed: no fluid": (BoundaryError, lambda d: fv3d.developed_profile(
        MESH, "x_min", **PROFILE | {"fluid": 1.8e-5})),
    "developed: free boundary that is not there": (BoundaryError, lambda d: fv3d.developed_profile(
        MESH, "x_min", **PROFILE, free=["side"])),
    "developed: no wall": (BoundaryError, lambda d: fv3d.developed_profile(
        MESH, "x_min", **PROFILE, free=["y_min", "y_max", "z_min", "z_max"])),
    # outlets of given flow
    "flow outlet: nothing given": (BoundaryError, lambda d: fv3d.FlowOutlet()),
    "flow outlet: both given":
        (BoundaryError, lambda d: fv3d.FlowOutlet(flow_rate=1.0, share=0.5)),
    "flow outlet: negative flow": (BoundaryError, lambda d: fv3d.FlowOutlet(flow_rate=-1.0)),
    "flow outlet: share of 30": (BoundaryError, lambda d: fv3d.FlowOutlet(share=30)),
    "flow outlet: share a text": (BoundaryError, lambda d: fv3d.FlowOutlet(share="half")),
    "flow outlet: no other outlet": (BoundaryError, lambda d: steady(of=case(
        boundaries=boundaries(x_max=fv3d.FlowOutlet(share=0.5))))),
    "flow outlet: more than the whole": (BoundaryError, lambda d: steady(of=case(
        boundaries=boundaries(y_min=fv3d.FlowOutlet(share=0.6),
                              y_max=fv3d.FlowOutlet(share=0.6))))),
    "flow outlet: share without inlet": (BoundaryError, lambda d: steady(of=case(
        boundaries=boundaries(x_min=fv3d.Outlet(1.0), y_max=fv3d.FlowOutlet(share=0.6))))),
    # scalars
    "scalar: value a text": (BoundaryError, lambda d: fv3d.ScalarValue("warm")),
    "scalar: value NaN": (BoundaryError, lambda d: fv3d.ScalarValue(NAN)),
    "scalar: flux a vector": (BoundaryError, lambda d: fv3d.ScalarFlux((1.0, 0.0, 0.0))),
    "scalar: of a case": (CaseError, lambda d: fv3d.solve_scalar(case(), **SCALAR)),
    "scalar: negative diffusivity":
        (CaseError, lambda d: fv3d.solve_scalar(run(), **SCALAR | {"diffusivity": -1.0})),
    "scalar: diffusivity of foreign length":
        (CaseError, lambda d: fv3d.solve_scalar(run(), **SCALAR | {"diffusivity": np.ones(5)})),
    "scalar: source a text":
        (CaseError, lambda d: fv3d.solve_scalar(run(), **SCALAR | {"source": "sun"})),
    "scalar: zero tolerance":
        (CaseError, lambda d: fv3d.solve_scalar(run(), **SCALAR | {"tolerance": 0.0})),
    "scalar: no iterations":
        (CaseError, lambda d: fv3d.solve_scalar(run(), **SCALAR | {"max_iterations": 0})),
    "scalar: scheme by name":
        (CaseError, lambda d: fv3d.solve_scalar(run(), **SCALAR | {"convection": "upwind"})),
    "scalar: boundary misspelt": (BoundaryError, lambda d: scalar(x_mim=fv3d.ScalarValue(1.0))),
    "scalar: boundary of another kind": (BoundaryError, lambda d: scalar(x_min=fv3d.Wall())),
    "scalar: not a mapping":
        (BoundaryError, lambda d: fv3d.solve_scalar(run(), **SCALAR | {"boundaries": [1.0]})),
    "scalar: inflow without value": (BoundaryError, lambda d: scalar(x_min=fv3d.ScalarFlux())),
    "scalar: function of wrong shape":
        (BoundaryError, lambda d: scalar(x_min=fv3d.ScalarValue(wrong_shape))),
    "scalar: function that raises":
        (BoundaryError, lambda d: scalar(x_min=fv3d.ScalarValue(no_such_column))),
    "scalar: flux without diffusivity": (BoundaryError, lambda d: fv3d.solve_scalar(
        run(), **SCALAR | {"diffusivity": 0.0, "boundaries": {
            "x_min": fv3d.ScalarValue(0.0), "y_min": fv3d.ScalarValue(0.0),
            "z_min": fv3d.ScalarValue(0.0), "x_max": fv3d.ScalarFlux(1.0)}})),
    # wall distance
    "wall distance: no mesh": (MeshError, lambda d: fv3d.wall_distance("y_min", MESH)),
    "wall distance: no walls": (MeshError, lambda d: fv3d.wall_distance(MESH, [])),
    "wall distance: no such wall": (MeshError, lambda d: fv3d.wall_distance(MESH, ["y_mni"])),
    "wall distance: points of two coordinates":
        (MeshError, lambda d: fv3d.wall_distance(MESH, ["y_min"], points=[[0.0, 1.0]])),
    # further fields
    "fields: foreign length":
        (CaseError, lambda d: fv3d.write_vtk(run(), d / "a.vtu", fields={"smoke": np.ones(5)})),
    "fields: a name that is taken": (CaseError, lambda d: fv3d.write_vtk(
        run(), d / "a.vtu", fields={"pressure": np.ones(27)})),
    "fields: an array": (CaseError, lambda d: fv3d.write_vtk(
        run(), d / "a.vtu", fields=np.ones(27))),
    # profiles
    "profile: of a case": (CaseError, lambda d: fv3d.profile(case(), **LINE)),
    "profile: one point": (CaseError, lambda d: fv3d.profile(run(), **LINE | {"count": 1})),
    "profile: a point and a half":
        (CaseError, lambda d: fv3d.profile(run(), **LINE | {"count": 2.5})),
    "profile: ends coincide":
        (CaseError, lambda d: fv3d.profile(run(), **LINE | {"end": LINE["start"]})),
    "profile: end not finite":
        (CaseError, lambda d: fv3d.profile(run(), **LINE | {"end": (NAN, 0.5, 0.5)})),
    "profile: leaves the mesh":
        (CaseError, lambda d: fv3d.profile(run(), **LINE | {"end": (5.0, 0.5, 0.5)})),
    "profile: misses the mesh": (CaseError, lambda d: fv3d.profile(
        run(), **LINE | {"start": (5.0, 5.0, 5.0), "end": (6.0, 5.0, 5.0), "gaps": True})),
    # verbs
    "steady: tolerance a text": (CaseError, lambda d: steady(tolerance="1e-5", progress=True)),
    "steady: limit a text": (CaseError, lambda d: steady(max_iterations="3")),
    "transient: class of step": (CaseError, lambda d: fv3d.solve_transient(
        case(), time_step=fv3d.CourantStep, end_time=1.0)),  # type: ignore[arg-type]
    "transient: no case": (CaseError, lambda d: fv3d.solve_transient(
        None, time_step=0.1, end_time=1.0)),  # type: ignore[arg-type]
    "transient: end a text": (CaseError, lambda d: fv3d.solve_transient(
        case(), time_step=0.1, end_time="1")),  # type: ignore[arg-type]
    "monitors: one name twice": (CaseError, lambda d: steady(monitors=[
        fv3d.ForceMonitor("x_min", name="a"), fv3d.FlowRateMonitor("x_min", name="a")])),
    "history: a mean": (CaseError, lambda d: fv3d.plot_history(
        replace(run(), history={"iteration": np.arange(0)}), d / "h.png")),
    "strip: damaged index": (FileError, lambda d: fv3d.frame_strip(damaged(d), d / "x.png")),
    "checkpoint: a number":
        (FileError, lambda d: fv3d.read_checkpoint(3)),  # type: ignore[arg-type]
    "strouhal: bare number": (CaseError, lambda d: fv3d.strouhal_number(
        1.0, length=1.0, speed=1.0)),  # type: ignore[arg-type]
    "mean: a text": (CaseError, lambda d: fv3d.mean_value("abc" * 9)),  # type: ignore[arg-type]
    "join: no mesh": (MeshError, lambda d: fv3d.join_periodic(NONE, {"x_min": "x_max"})),
    "join: no pairs": (MeshError, lambda d: fv3d.join_periodic(MESH, NONE)),
    "pressure drop: no run": (CaseError, lambda d: fv3d.pressure_drop(None, "x")),
    "mean run: no run": (CaseError, lambda d: fv3d.mean_run(NONE, name="m")),
    "check: no mesh": (MeshError, lambda d: fv3d.check_mesh(NONE)),
    "map: no mesh": (MeshError, lambda d: fv3d.boundary_map(NONE)),
    "skew: no mesh": (MeshError, lambda d: fv3d.skewed(NONE, 0.1)),
    "surface: list in a list": (CaseError, lambda d: fv3d.write_surface(
        run(), [["y_min"]], path=d / "a.vtp")),  # type: ignore[list-item]
    "resistance: place that raises": (CaseError, lambda d: steady(of=case(resistances={
        "q": fv3d.Resistance(linear=1.0, where=lambda x: x.q)}))),  # type: ignore[attr-defined]
    "inlet: factor that raises": (CaseError, lambda d: fv3d.solve_transient(
        case(boundaries=boundaries(x_min=fv3d.Inlet((1.0, 0, 0), factor=lambda t: 1 / 0))),
        time_step=0.1, end_time=1.0, progress=False)),
}


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


def test_the_failure_of_a_factor_is_kept_as_cause() -> None:
    with pytest.raises(CaseError, match="x_min") as caught:
        TABLE["inlet: factor that raises"][1](Path())
    assert isinstance(caught.value.__cause__, ZeroDivisionError)


def test_a_gain_of_zero_claims_no_misfit() -> None:
    law = fv3d.Feedback(readings(), radius=0.6, gain=0.0)
    sheet = str(steady(tolerance=1e-3, sources=[law]))
    assert "gain zero: nothing is fed" in sheet and "misfit at fed readings" not in sheet


def test_a_monitor_used_again_starts_afresh() -> None:
    kept = fv3d.FlowRateMonitor("x_min", name="in")
    first, second = (steady(tolerance=1e-2, monitors=[kept]) for _ in range(2))
    for one in (first, second):
        assert np.array_equal(one.series["in"].iteration, one.history["iteration"] + 1)


def test_good_input_passes(tmp_path: Path) -> None:
    """The same calls with nothing wrong: what is refused above is the one wrong thing."""
    reference = fv3d.Reference(**REFERENCE)
    assert len(fv3d.force_coefficients(run(), "x_min", reference=reference).total) == 3
    assert fv3d.write_surface(run(), ["x_min"], path=tmp_path / "a.vtp").is_file()
    assert len(fv3d.profile(run(), **LINE).pressure) == 5
    fv3d.shear_reversals(run(), "y_min", along=(1.0, 0.0, 0.0))
    fv3d.flow_split(run())
    assert inlet(PLANE).mesh is MESH
    assert scalar(x_min=fv3d.ScalarValue(1.0)).outcome.good
    assert fv3d.developed_profile(MESH, "x_min", **PROFILE).mean_speed == 1.0
    assert len(fv3d.inlet_table(readings(), unmeasured=(0.0, 0.0, 0.0)).points) == 2
