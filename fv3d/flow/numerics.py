"""The numerical methods of a case, collected in one frozen object."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

from ..errors import CaseError, as_number
from ..operators.fluxes import ConvectionScheme, SecondOrderUpwind
from ..operators.gradient import GradientMethod, LeastSquares
from ..operators.linear import ByAnisotropy


def _share(value: float, where: str) -> None:
    if not 0.0 < as_number(value) < 1.0:
        raise CaseError("A relaxation factor lies between 0 and 1.", where=where, got=value,
                        remedy="Give 0.7, say.")


@dataclass(frozen=True)
class SIMPLE:
    """Semi-implicit coupling with a relaxed pressure correction.

    Without ``pressure_relaxation`` the rest of the velocity's factor is used, ``1 - 0.7 = 0.3``:
    with more, accurately solved momentum equations make the iteration diverge.

    Source: Patankar, S. V. and Spalding, D. B. (1972), Int. J. Heat Mass Transfer 15, 1787-1806;
    the sum of one: Raithby, G. D. and Schneider, G. E. (1979), Numer. Heat Transfer 2, 417-440
    (cited from memory).
    """

    velocity_relaxation: float = 0.7
    pressure_relaxation: float | None = None

    def __post_init__(self) -> None:
        _share(self.velocity_relaxation, "SIMPLE(velocity_relaxation=)")
        if self.pressure_relaxation is not None \
                and not 0.0 < as_number(self.pressure_relaxation) <= 1.0:
            raise CaseError("The pressure relaxation lies between 0 and 1.",
                            where="SIMPLE(pressure_relaxation=)", got=self.pressure_relaxation,
                            remedy="Give 0.3, say.")

    def correction_diagonal(self, diagonal: Any, neighbours: Any, inertia: Any) -> Any:
        """Diagonal [kg/s] that turns a pressure correction into a velocity correction."""
        return diagonal + inertia

    @property
    def pressure_share(self) -> float:
        """Share of the pressure correction that is added."""
        return 1.0 - self.velocity_relaxation if self.pressure_relaxation is None \
            else self.pressure_relaxation

    @property
    def most_sweeps(self) -> int:
        """Sweeps of the momentum equations that may be taken where their number is left open."""
        return 16 if self.pressure_share <= 1.001 - self.velocity_relaxation else 4


@dataclass(frozen=True)
class SIMPLEC:
    """Consistent form of the coupling: the neighbours' corrections are not dropped.

    Source: Van Doormaal, J. P. and Raithby, G. D. (1984), Numer. Heat Transfer 7, 147-163.
    """

    velocity_relaxation: float = 0.9

    def __post_init__(self) -> None:
        _share(self.velocity_relaxation, "SIMPLEC(velocity_relaxation=)")

    def correction_diagonal(self, diagonal: Any, neighbours: Any, inertia: Any) -> Any:
        """Diagonal [kg/s] that turns a pressure correction into a velocity correction."""
        return diagonal - neighbours + inertia

    @property
    def pressure_share(self) -> float:
        """The whole pressure correction is added."""
        return 1.0

    @property
    def most_sweeps(self) -> int:
        """Sweeps of the momentum equations that may be taken where their number is left open."""
        return 16


_METHODS = {  # what a method of each kind must have, and an example
    "coupling": ("correction_diagonal", "SIMPLEC()"),
    "convection": ("limited_share", "SecondOrderUpwind()"),
    "gradient": ("weights", "LeastSquares()"),
    "multigrid": ("prolongations", "ByAnisotropy()"),
}


@dataclass(frozen=True)
class LocalStep:
    """Pseudo-time step of every cell from a Courant number: ``courant`` times mass over diagonal.

    The same as a relaxation factor ``courant / (1 + courant)`` (Van Doormaal and Raithby, 1984).
    ``ramp`` lets the step grow as the residual falls, to this power of their ratio (switched
    evolution relaxation: Mulder, W. A. and Van Leer, B. 1985, J. Comput. Phys. 59, 232-246), up to
    ``largest`` times the first step.

    Raises
    ------
    CaseError
        A number that is not positive, a negative ramp.
    """

    courant: float = 9.0
    ramp: float = 0.0
    largest: float = 10.0

    def __post_init__(self) -> None:
        _positive(self.courant, "LocalStep(courant=)")
        _ramp(self.ramp, self.largest, "LocalStep")

    def inertia(self, diagonal: Any, mass: Any, ratio: float) -> Any:
        """Mass over pseudo-time step [kg/s]; ``ratio`` is first over present residual."""
        return diagonal / (self.courant * _growth(self.ramp, self.largest, ratio))


@dataclass(frozen=True)
class GlobalStep:
    """One pseudo-time step for all cells; ``size`` has the unit of a time but is none.

    ``ramp`` and ``largest`` as in :class:`LocalStep`.

    Raises
    ------
    CaseError
        A number that is not positive, a negative ramp.
    """

    size: float
    ramp: float = 0.0
    largest: float = 10.0

    def __post_init__(self) -> None:
        _positive(self.size, "GlobalStep(size=)")
        _ramp(self.ramp, self.largest, "GlobalStep")

    def inertia(self, diagonal: Any, mass: Any, ratio: float) -> Any:
        """Mass over pseudo-time step [kg/s]; ``ratio`` is first over present residual."""
        return mass / (self.size * _growth(self.ramp, self.largest, ratio))


def _positive(value: Any, where: str) -> None:
    if not 0.0 < as_number(value) < float("inf"):
        raise CaseError("A pseudo-time step must be positive.", where=where, got=value,
                        remedy="Give 9.0 for a Courant number, say.")


def _ramp(ramp: Any, largest: Any, where: str) -> None:
    if not (as_number(ramp) >= 0.0 and as_number(largest) >= 1.0):
        raise CaseError("A ramp is a power from 0, its limit a factor from 1.",
                        where=f"{where}(ramp=, largest=)", got=(ramp, largest),
                        remedy="Give ramp=1.0, largest=10.0, say.")


def _growth(ramp: float, largest: float, ratio: float) -> float:
    return float(min(max(ratio, 1.0) ** ramp, largest))


@dataclass(frozen=True)
class Numerics:
    """Numerical methods of a case.

    Attributes
    ----------
    coupling : SIMPLE or SIMPLEC
    convection : convection scheme
    gradient : gradient method
    sweeps : int or None
        Gauss-Seidel sweeps of the momentum equations per iteration. None: as many, from 4 to 16,
        as bring their residual to a twentieth, measured now and then during the run. (Fewer make
        thin cells answer a pressure correction more weakly than it assumes.)
    pressure_tolerance : float
        Residual reduction of the pressure correction per iteration.
    multigrid : how the hierarchy is built
    full_stress : bool or None
        Keep the transposed velocity gradient in the viscous stress. None: only where the
        viscosity varies, since its divergence is zero otherwise.
    """

    coupling: SIMPLE | SIMPLEC = field(default_factory=SIMPLEC)
    convection: ConvectionScheme = field(default_factory=SecondOrderUpwind)
    gradient: GradientMethod = field(default_factory=LeastSquares)
    sweeps: int | None = None
    pressure_tolerance: float = 0.1
    multigrid: Any = field(default_factory=ByAnisotropy)
    full_stress: bool | None = None

    def __post_init__(self) -> None:
        for name, (needs, example) in _METHODS.items():
            method = getattr(self, name)
            if isinstance(method, type) or not hasattr(method, needs):
                raise CaseError("A numerical method is an object of its kind.",
                                where=f"Numerics({name}=)", got=repr(method),
                                remedy=f"Give {example}, say.")
        if self.sweeps is not None and not as_number(self.sweeps) >= 1:
            raise CaseError("At least one sweep of the momentum equations is needed.",
                            where="Numerics(sweeps=)", got=self.sweeps,
                            remedy="Leave it out, or give 4, say.")
        if not 0.0 < as_number(self.pressure_tolerance) < 1.0:
            raise CaseError("The pressure tolerance lies between 0 and 1.",
                            where="Numerics(pressure_tolerance=)", got=self.pressure_tolerance,
                            remedy="Give 0.1, say.")
