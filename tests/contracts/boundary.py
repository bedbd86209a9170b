"""What every boundary condition promises."""

from __future__ import annotations

from typing import Any

import numpy as np

from fv3d.flow.boundary import BoundaryTable
from fv3d.mesh.mesh import Mesh

from .tools import ROTATION, Check, skewed, turned_mesh


def filled(condition: Any, mesh: Mesh, side: str) -> tuple[BoundaryTable, slice]:
    """Boundary table with the rows of one side filled."""
    table = BoundaryTable.empty(mesh.n_boundary)
    faces = mesh.boundaries[side]
    rows = slice(faces.start - mesh.n_internal, faces.stop - mesh.n_internal)
    condition.fill(table, rows, mesh.face_centre[faces], mesh.face_normal[faces])
    return table, rows


def condition_fills_its_rows_only(condition: Any) -> None:
    mesh = skewed(3)
    table, rows = filled(condition, mesh, "y_max")
    untouched = BoundaryTable.empty(mesh.n_boundary)
    other = np.ones(mesh.n_boundary, bool)
    other[rows] = False
    for name, column in vars(table).items():
        np.testing.assert_array_equal(column[other], getattr(untouched, name)[other])
        assert np.all(np.isfinite(column))


def condition_turns_with_the_mesh(condition: Any) -> None:
    """Coefficients along and across the face do not depend on the axes."""
    mesh = skewed(3)
    here, _ = filled(condition, mesh, "y_max")
    there, _ = filled(condition, turned_mesh(mesh, ROTATION), "y_max")
    for name in ("keep_tangential", "keep_normal", "shear_tangential", "shear_normal",
                 "pressure_given", "pressure_flat", "pressure"):
        np.testing.assert_array_equal(getattr(here, name), getattr(there, name))


def condition_gives_a_velocity_or_a_pressure(condition: Any) -> None:
    """Across the face either the flux is given or the pressure, never both, never neither."""
    table, rows = filled(condition, skewed(3), "y_max")
    assert np.all(table.flux_given[rows] != table.pressure_given[rows])


def condition_is_frozen(condition: Any) -> None:
    import dataclasses
    assert dataclasses.is_dataclass(condition) and condition.__dataclass_params__.frozen


BOUNDARY: dict[str, Check] = {f.__name__: f for f in (
    condition_fills_its_rows_only, condition_turns_with_the_mesh,
    condition_gives_a_velocity_or_a_pressure, condition_is_frozen)}
