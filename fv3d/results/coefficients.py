"""Force and moment coefficients: forces over stated reference values."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ..errors import CaseError, as_number
from ..flow.run import Run
from ..operators.interpolation import checked_points
from .diagnostics import force


@dataclass(frozen=True, kw_only=True)
class Reference:
    """What forces and moments are divided by.

    Parameters
    ----------
    density : float [kg/m^3]
    speed : float [m/s]
    area : float [m^2]
    length : float [m]
        Arm of the moment coefficients.

    Raises
    ------
    CaseError
        A value that is not positive and finite.
    """

    density: float
    speed: float
    area: float
    length: float

    def __post_init__(self) -> None:
        for name in ("density", "speed", "area", "length"):
            value = getattr(self, name)
            if not 0.0 < as_number(value) < np.inf:
                raise CaseError("A reference value must be positive.", where=f"Reference({name}=)",
                                got=repr(value), remedy="Give density [kg/m3], speed [m/s], area "
                                                        "[m2] and length [m] as plain numbers.")
            object.__setattr__(self, name, float(value))

    @property
    def dynamic_pressure(self) -> float:
        """Half the density times the speed squared [Pa]."""
        return 0.5 * self.density * self.speed**2


@dataclass(frozen=True, eq=False)
class ForceCoefficients:
    """Force over dynamic pressure and area, moment over these and the length; all (3,).

    ``centre`` (3,) [m] is the point the moments are taken about.
    """

    name: str
    pressure: np.ndarray
    friction: np.ndarray
    pressure_moment: np.ndarray
    friction_moment: np.ndarray
    reference: Reference
    centre: np.ndarray

    @property
    def total(self) -> np.ndarray:
        """Pressure plus friction."""
        return self.pressure + self.friction

    @property
    def moment(self) -> np.ndarray:
        """Moment coefficient of the total force."""
        return self.pressure_moment + self.friction_moment

    def along(self, direction: Sequence[float]) -> float:
        """Coefficient of the total force along a direction, such as that of the stream.

        Raises
        ------
        CaseError
            No direction.
        """
        return float(np.einsum("i,i->", self.total, unit_vector(direction, "along(direction)")))

    def __str__(self) -> str:
        def row(label: str, vector: np.ndarray) -> str:
            return f"  {label:<9}" + " ".join(f"{value:12.5g}" for value in vector)
        r = self.reference
        centre = ", ".join(f"{x:.4g}" for x in self.centre)
        return "\n".join([f"coefficients of '{self.name}'  x, y, z",
                          row("pressure", self.pressure), row("friction", self.friction),
                          row("total", self.total), row("moment", self.moment),
                          f"  reference density {r.density:.6g} kg/m3, speed {r.speed:.6g} m/s, "
                          f"area {r.area:.6g} m2, length {r.length:.6g} m",
                          f"  moments about ({centre}) m"])


def force_coefficients(run: Run, name: str, *, reference: Reference,
                       centre: Sequence[float] = (0.0, 0.0, 0.0)) -> ForceCoefficients:
    """Coefficients of the force and the moment of the fluid on a boundary.

    Parameters
    ----------
    run : Run
    name : str
        Boundary.
    reference : Reference
    centre : (3,) [m]
        Point the moments are taken about.

    Returns
    -------
    ForceCoefficients

    Raises
    ------
    CaseError
        No run, no such boundary, no Reference, or a centre that is no point.
    """
    if not isinstance(reference, Reference):
        raise CaseError("Coefficients need their reference values.", got=repr(reference),
                        where="force_coefficients(reference=)",
                        remedy="Give Reference(density=, speed=, area=, length=).")
    got = force(run, name, centre=centre)
    unit = reference.dynamic_pressure * reference.area
    arm = unit * reference.length
    return ForceCoefficients(name, got.pressure / unit, got.friction / unit,
                             got.pressure_moment / arm, got.friction_moment / arm, reference,
                             got.centre)


def unit_vector(direction: Sequence[float], where: str) -> np.ndarray:
    """(3,) unit vector along a direction.

    Raises
    ------
    CaseError
        Not three finite numbers, or all zero.
    """
    vector = checked_points(direction, where)[0]
    size = float(np.linalg.norm(vector))
    if np.ndim(direction) != 1 or not size > 0.0:
        raise CaseError("A direction is three numbers, not all zero.", where=where,
                        got=repr(direction), remedy="Give (1.0, 0.0, 0.0), say.")
    return vector / size
