"""Boundary conditions: objects that fill a table of coefficients, one row per boundary face.

The table holds everything the equations need, so they never ask of what kind a boundary is:
the velocity on a face is ``keep_tangential`` and ``keep_normal`` of the cell's plus ``fixed``;
the viscous traction is ``shear_tangential`` and ``shear_normal`` times viscosity times the
difference over the normal distance.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np

from ..errors import BoundaryError, as_number
from ..mesh.mesh import Mesh

VelocityValue = Sequence[float] | np.ndarray | Callable[[np.ndarray], np.ndarray]


@dataclass(eq=False)
class BoundaryTable:
    """Coefficients of all boundary faces, arrays of length n_boundary (see module text)."""

    fixed: np.ndarray
    keep_tangential: np.ndarray
    keep_normal: np.ndarray
    shear_tangential: np.ndarray
    shear_normal: np.ndarray
    turned_stress: np.ndarray
    pressure_given: np.ndarray
    pressure_flat: np.ndarray
    pressure: np.ndarray
    sampled: np.ndarray

    @staticmethod
    def empty(n: int) -> BoundaryTable:
        """All zero: a wall at rest without traction."""
        return BoundaryTable(np.zeros((n, 3)), np.zeros(n), np.zeros(n), np.zeros(n), np.zeros(n),
                             np.zeros(n), np.zeros(n, bool), np.zeros(n, bool), np.zeros(n),
                             np.zeros(n, bool))

    @property
    def flux_given(self) -> np.ndarray:
        """(n_boundary,) whether the mass flux does not depend on the cell velocity."""
        return self.keep_normal == 0.0


class Boundary(Protocol):
    """A boundary condition: fills its rows of the table."""

    def fill(self, table: BoundaryTable, rows: slice, centre: np.ndarray,
             normal: np.ndarray) -> None:
        """Write the rows of one boundary; ``centre`` and ``normal`` are (n, 3)."""
        ...


def _evaluate(value: Any, centre: np.ndarray, what: str) -> np.ndarray:
    """A vector, or a function of points (n, 3) -> (n, 3), at the face centres."""
    if callable(value):
        try:
            given = value(centre.copy())
        except Exception as error:
            raise BoundaryError(f"The {what} function failed.", where=f"{what}, called with the "
                                f"{len(centre)} face centres of the boundary, shape "
                                f"{centre.shape} [m]",
                                got=f"{type(error).__name__}: {error}",
                                remedy="Mend the function; points[:, 0] is x, points[:, 1] y, "
                                       "points[:, 2] z.") from error
        try:
            result = np.asarray(given, dtype=float)
        except (TypeError, ValueError):
            result = np.empty(0)
        if result.shape != centre.shape:
            raise BoundaryError(f"The {what} function returned a wrong shape.", where=what,
                                got=f"shape {result.shape} for points of shape {centre.shape}",
                                remedy="Return one velocity vector per point: (n, 3).")
    else:
        result = np.broadcast_to(_vector(value, what), centre.shape).copy()
    if not np.all(np.isfinite(result)):
        bad = int(np.flatnonzero(~np.isfinite(result).all(axis=1))[0])
        raise BoundaryError(f"The {what} is not finite.", where=f"{what} at {centre[bad].tolist()}",
                            got=result[bad].tolist(), remedy="Give finite numbers [m/s].")
    return result


def _vector(value: Any, what: str) -> np.ndarray:
    try:
        vector = np.asarray(value, dtype=float)
    except (TypeError, ValueError):
        vector = np.empty(0)
    if vector.shape != (3,):
        raise BoundaryError(f"The {what} must be three numbers or a function of points.",
                            where=what, got=repr(value), remedy="Give (1.0, 0.0, 0.0), say [m/s].")
    return vector


def _check_vector(value: Any, what: str) -> None:
    if callable(value):
        return
    if not np.all(np.isfinite(_vector(value, what))):
        raise BoundaryError(f"The {what} is not finite.", where=what, got=repr(value),
                            remedy="Give three finite numbers [m/s].")


@dataclass(frozen=True)
class Inlet:
    """Given velocity [m/s]: a vector, a function of points (n, 3) -> (n, 3), an InletTable.

    Fluid may also leave through it: the velocity is simply prescribed.  ``factor``, a function of
    time [s], multiplies it in runs in time.

    Raises
    ------
    BoundaryError
        Not a vector of three finite numbers nor a function.
    """

    velocity: Any
    factor: Callable[[float], float] | None = field(default=None, kw_only=True)

    def __post_init__(self) -> None:
        _check_vector(self.velocity, "Inlet velocity")

    def fill(self, table: BoundaryTable, rows: slice, centre: np.ndarray,
             normal: np.ndarray) -> None:
        """Velocity given, full viscous traction, pressure from inside."""
        if hasattr(self.velocity, "on_faces"):
            table.fixed[rows] = self.velocity.on_faces(centre, normal)[0]
        else:
            table.fixed[rows] = _evaluate(self.velocity, centre, "Inlet velocity")
        table.shear_tangential[rows] = table.shear_normal[rows] = 1.0
        table.turned_stress[rows] = 1.0
        table.sampled[rows] = callable(self.velocity)


@dataclass(frozen=True)
class Outlet:
    """Given pressure [Pa]; the velocity has no normal derivative.

    Where fluid enters, its tangential velocity is taken as zero and ``pressure`` as the total
    pressure; the share of such flux is reported.  ``factor``, a function of time [s], multiplies
    the pressure in runs in time.

    Raises
    ------
    BoundaryError
        The pressure is not one finite number.
    """

    pressure: float = 0.0
    factor: Callable[[float], float] | None = field(default=None, kw_only=True)

    def __post_init__(self) -> None:
        if not np.ndim(self.pressure) == 0 or not np.isfinite(as_number(self.pressure)):
            raise BoundaryError("The outlet pressure must be one finite number.",
                                where="Outlet(pressure=)", got=repr(self.pressure),
                                remedy="Give a gauge pressure [Pa], 0.0 say.")

    def fill(self, table: BoundaryTable, rows: slice, centre: np.ndarray,
             normal: np.ndarray) -> None:
        """Pressure given, velocity from inside."""
        table.keep_tangential[rows] = table.keep_normal[rows] = 1.0
        table.turned_stress[rows] = 1.0
        table.pressure_given[rows] = True
        table.pressure[rows] = self.pressure


@dataclass(frozen=True)
class Wall:
    """No slip; ``velocity`` [m/s] (vector or function of points) of a wall moving in itself.

    ``factor``, a function of time [s], multiplies it in runs in time.

    Raises
    ------
    BoundaryError
        The velocity is not a vector of three finite numbers nor a function; when the case is
        made, also for a velocity that is not tangential to the wall.
    """

    velocity: Any = (0.0, 0.0, 0.0)
    factor: Callable[[float], float] | None = field(default=None, kw_only=True)

    def __post_init__(self) -> None:
        _check_vector(self.velocity, "Wall velocity")

    def fill(self, table: BoundaryTable, rows: slice, centre: np.ndarray,
             normal: np.ndarray) -> None:
        """Velocity given and tangential, tangential traction only."""
        value = _evaluate(self.velocity, centre, "Wall velocity")
        across = np.einsum("ij,ij->i", value, normal)
        if np.any(np.abs(across) > 1e-6 * np.abs(value).max(initial=0.0)):
            bad = int(np.argmax(np.abs(across)))
            raise BoundaryError("A wall cannot move through itself.",
                                where=f"Wall velocity at {np.round(centre[bad], 6).tolist()}",
                                got=f"{across[bad]:.3g} m/s normal to the wall",
                                remedy="Give a velocity in the plane of the wall, or use Inlet.")
        table.fixed[rows] = value - across[:, None] * normal
        table.shear_tangential[rows] = 1.0


@dataclass(frozen=True)
class Symmetry:
    """Plane of symmetry: no flow and no shear across it.

    For flat boundaries only; use :class:`Slip` on a curved one.
    """

    def fill(self, table: BoundaryTable, rows: slice, centre: np.ndarray,
             normal: np.ndarray) -> None:
        """Tangential velocity from inside, normal stress only, flat pressure."""
        table.keep_tangential[rows] = 1.0
        table.shear_normal[rows] = 2.0
        table.pressure_flat[rows] = True


@dataclass(frozen=True)
class Slip:
    """Wall without friction, flat or curved: no flow across it, no shear along it."""

    def fill(self, table: BoundaryTable, rows: slice, centre: np.ndarray,
             normal: np.ndarray) -> None:
        """Tangential velocity from inside, normal stress only, pressure from inside."""
        table.keep_tangential[rows] = 1.0
        table.shear_normal[rows] = 2.0


def boundary_table(mesh: Mesh, boundaries: Mapping[str, Boundary]) -> BoundaryTable:
    """Coefficients of every boundary face.

    Raises
    ------
    BoundaryError
        A boundary of the mesh without a condition, a condition for a boundary the mesh does
        not have, or something that is no boundary condition.
    """
    import difflib
    if not isinstance(boundaries, Mapping):
        raise BoundaryError("The boundaries must be a mapping of name to condition.",
                            where="Case(boundaries=)", got=type(boundaries).__name__,
                            remedy=f"Give a dict with keys {', '.join(mesh.boundaries)}.")
    unknown = [name for name in boundaries if name not in mesh.boundaries]
    missing = [name for name in mesh.boundaries if name not in boundaries]
    if unknown:
        near = difflib.get_close_matches(unknown[0], list(mesh.boundaries), 1)
        hint = f" Did you mean '{near[0]}'?" if near else ""
        raise BoundaryError("A boundary condition names a boundary the mesh does not have.",
                            where="Case(boundaries=)", got=f"'{unknown[0]}'",
                            remedy=f"The mesh has: {', '.join(mesh.boundaries)}.{hint}")
    if missing:
        raise BoundaryError("A boundary of the mesh has no condition.", where="Case(boundaries=)",
                            got=f"no entry for '{missing[0]}'",
                            remedy="Give every boundary an Inlet, Outlet, Wall, Slip or Symmetry.")
    table = BoundaryTable.empty(mesh.n_boundary)
    for name, condition in boundaries.items():
        faces = mesh.boundaries[name]
        if isinstance(condition, type) or not hasattr(condition, "fill"):
            raise BoundaryError("Not a boundary condition.", where=f"boundary '{name}'",
                                got=repr(condition), remedy="Give Inlet(...), Outlet(...), "
                                                            "Wall(...) or Symmetry().")
        rows = slice(faces.start - mesh.n_internal, faces.stop - mesh.n_internal)
        condition.fill(table, rows, mesh.face_centre[faces], mesh.face_normal[faces])
    return table
