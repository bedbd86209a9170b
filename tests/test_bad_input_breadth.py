"""Input that cannot be used, of results along lines and walls and of unusual boundaries."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
from test_bad_input import INF, NAN, Bad, case, run

import fv3d
import fv3d.flow.coupling
from fv3d.errors import CaseError, FileError, Fv3dError

REFERENCE: dict[str, Any] = {"density": 1.2, "speed": 1.0, "area": 1.0, "length": 1.0}
LINE: dict[str, Any] = {"start": (0.1, 0.5, 0.5), "end": (0.9, 0.5, 0.5), "count": 5}

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


def test_good_input_passes(tmp_path: Path) -> None:
    """The same calls with nothing wrong: what is refused above is the one wrong thing."""
    reference = fv3d.Reference(**REFERENCE)
    assert len(fv3d.force_coefficients(run(), "x_min", reference=reference).total) == 3
    assert fv3d.write_surface(run(), ["x_min"], path=tmp_path / "a.vtp").is_file()
    assert len(fv3d.profile(run(), **LINE).pressure) == 5
    fv3d.shear_reversals(run(), "y_min", along=(1.0, 0.0, 0.0))
    fv3d.flow_split(run())
