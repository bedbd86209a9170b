"""Boundary conditions of a passive scalar."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from ..errors import BoundaryError, did_you_mean
from ..mesh.mesh import Mesh


@dataclass(frozen=True)
class ScalarValue:
    """Given value: a number, or a function of points (n, 3) -> (n,).

    Raises
    ------
    BoundaryError
        Neither a finite number nor a function.
    """

    value: Any

    def __post_init__(self) -> None:
        _check(self.value, "ScalarValue(value)")


@dataclass(frozen=True)
class ScalarFlux:
    """Given diffusive flux into the fluid [scalar kg/(m^2 s)]: a number or a function of points.

    Raises
    ------
    BoundaryError
        Neither a finite number nor a function.
    """

    flux: Any = 0.0

    def __post_init__(self) -> None:
        _check(self.flux, "ScalarFlux(flux)")


@dataclass(frozen=True, eq=False)
class ScalarTable:
    """Boundary faces of a scalar, arrays of length n_boundary.

    ``valued`` where the value is given, ``value`` there, ``flux`` elsewhere; ``level`` the mean
    of the given values and ``spread`` their range.
    """

    valued: np.ndarray
    value: np.ndarray
    flux: np.ndarray

    @property
    def spread(self) -> np.ndarray:
        """Smallest and largest of the given values, or nothing."""
        given = self.value[self.valued]
        return np.array([given.min(), given.max()]) if given.size else np.empty(0)

    @property
    def level(self) -> float:
        """Mean of the given values."""
        return float(self.value[self.valued].mean())


def scalar_table(mesh: Mesh, boundaries: Any, mass_flux: np.ndarray) -> ScalarTable:
    """Rows of all boundary faces.

    Raises
    ------
    BoundaryError
        A name the mesh does not have, another kind of object, an inflow without value, no value
        anywhere.
    """
    if not isinstance(boundaries, Mapping):
        raise BoundaryError("The boundaries must be a mapping of name to condition.",
                            where="solve_scalar(boundaries=)", got=type(boundaries).__name__,
                            remedy="Give {'inlet': ScalarValue(1.0)}, say.")
    n, count = mesh.n_internal, mesh.n_boundary
    table = ScalarTable(np.zeros(count, bool), np.zeros(count), np.zeros(count))
    for name, condition in boundaries.items():
        _fill(table, mesh, name, condition)
    for name, faces in mesh.boundaries.items():
        flux, rows = mass_flux[faces], slice(faces.start - n, faces.stop - n)
        if not table.valued[rows].any() and flux.sum() < -1e-6 * np.abs(mass_flux[n:]).sum():
            raise BoundaryError("Fluid enters without a value of the scalar.",
                                where=f"boundary '{name}'", got=f"{-flux.sum():.4g} kg/s enter",
                                remedy="Give it a ScalarValue.")
    if not table.valued.any():
        raise BoundaryError("The scalar has no value on any boundary.", got="fluxes only",
                            where="solve_scalar(boundaries=)",
                            remedy="Give one boundary a ScalarValue; else the level is open.")
    return table


def _fill(table: ScalarTable, mesh: Mesh, name: Any, condition: Any) -> None:
    known = list(mesh.boundaries)
    if name not in known:
        raise BoundaryError("No such boundary.", where="solve_scalar(boundaries=)",
                            got=repr(name), remedy=f"The mesh has: {', '.join(known)}."
                                                   f"{did_you_mean(name, known)}")
    faces = mesh.boundaries[name]
    rows = slice(faces.start - mesh.n_internal, faces.stop - mesh.n_internal)
    centre, where = mesh.face_centre[faces], f"boundary '{name}'"
    if isinstance(condition, ScalarValue):
        table.valued[rows] = True
        table.value[rows] = _evaluated(condition.value, centre, where)
    elif isinstance(condition, ScalarFlux):
        table.flux[rows] = _evaluated(condition.flux, centre, where)
    else:
        raise BoundaryError("Not a condition of a scalar.", where=where, got=repr(condition),
                            remedy="Give ScalarValue(...) or ScalarFlux(...).")


def _check(value: Any, where: str) -> None:
    if callable(value) and not isinstance(value, type):
        return
    try:
        good = np.ndim(value) == 0 and bool(np.isfinite(float(value)))
    except (TypeError, ValueError):
        good = False
    if not good:
        raise BoundaryError("A scalar's condition takes one finite number or a function.",
                            where=where, got=repr(value), remedy="Give 1.0, say.")


def _evaluated(value: Any, centre: np.ndarray, where: str) -> np.ndarray:
    try:
        result = np.asarray(value(centre.copy()) if callable(value) else value, dtype=float)
    except Exception as error:
        raise BoundaryError("The function of a scalar's condition failed.", where=where,
                            got=f"{type(error).__name__}: {error}",
                            remedy="Mend the function of points (n, 3).") from error
    result = np.broadcast_to(result, len(centre)) if result.ndim == 0 else result
    if result.shape != (len(centre),) or not np.all(np.isfinite(result)):
        raise BoundaryError("The function of a scalar's condition gives no finite numbers.",
                            where=where, got=f"shape {result.shape} for {len(centre)} faces",
                            remedy="Return one finite number per point: (n,).")
    return result
