"""Convection schemes: what the deferred correction adds to the implicit upwind part.

Every scheme is a frozen object with three numbers: with ``U`` the upwind cell, the face value is

    value(U) + upwind_share * gradient(U) . (face - U) + central_share * (linear - value(U))
             + limited_share * limited,

``limited`` the extrapolation that keeps to the range around ``U``, see
:func:`fv3d.operators.limiters.limited_extension`.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

from ..errors import CaseError


class ConvectionScheme(Protocol):
    """Shares of the second-order corrections; declared order and boundedness."""

    @property
    def upwind_share(self) -> float:
        """Share of the extrapolation from the upwind cell."""
        ...

    @property
    def central_share(self) -> float:
        """Share of the linear interpolation between both cells."""
        ...

    @property
    def limited_share(self) -> float:
        """Share of the limited extrapolation from the upwind cell."""
        ...

    @property
    def order(self) -> int:
        """Declared order of accuracy."""
        ...

    @property
    def bounded(self) -> bool:
        """Whether the scheme makes no new extrema."""
        ...


@dataclass(frozen=True)
class SecondOrderUpwind:
    """Linear extrapolation from the upwind cell.

    Source: Warming, R. F. and Beam, R. M. (1976), AIAA J. 14, 1241-1249; on unstructured meshes
    Barth, T. J. and Jespersen, D. C. (1989), AIAA Paper 89-0366.
    """

    upwind_share: float = 1.0
    central_share: float = 0.0
    limited_share: float = 0.0
    order: int = 2
    bounded: bool = False


@dataclass(frozen=True)
class Central:
    """Linear interpolation between the two cells, carried to the face centre."""

    upwind_share: float = 0.0
    central_share: float = 1.0
    limited_share: float = 0.0
    order: int = 2
    bounded: bool = False


@dataclass(frozen=True)
class Upwind:
    """The upwind cell's value: bounded, first order, very diffusive."""

    upwind_share: float = 0.0
    central_share: float = 0.0
    limited_share: float = 0.0
    order: int = 1
    bounded: bool = True


@dataclass(frozen=True)
class LimitedUpwind:
    """Extrapolation from the upwind cell that makes no new extremes: bounded, second order.

    The face value stays below the greatest and above the least value among the upwind cell, two
    rings of neighbours and their boundary faces, and is the cell's own value in an extreme.  Where
    the velocity given on a boundary points out of the domain the extension is not limited.  Where
    the iteration ends oscillating, relax it more: ``SIMPLEC(velocity_relaxation=0.4)``.

    Source: range and upwind gradient Barth, T. J. and Jespersen, D. C. (1989), AIAA Paper
    89-0366; limiting function Michalak, C. and Ollivier-Gooch, C. (2009), J. Comput. Phys. 228,
    8693-8711.
    """

    upwind_share: float = 0.0
    central_share: float = 0.0
    limited_share: float = 1.0
    order: int = 2
    bounded: bool = True


@dataclass(frozen=True)
class Blended:
    """``share`` of central interpolation, the rest second-order upwind.

    Raises
    ------
    CaseError
        ``share`` outside 0 ... 1.
    """

    share: float = 0.75
    limited_share: float = 0.0
    order: int = 2
    bounded: bool = False

    def __post_init__(self) -> None:
        if not 0.0 <= self.share <= 1.0:
            raise CaseError("The central share of a blended scheme lies between 0 and 1.",
                            where="Blended(share=)", got=self.share, remedy="Give 0.75, say.")

    @property
    def upwind_share(self) -> float:
        """Share of the extrapolation from the upwind cell."""
        return 1.0 - self.share

    @property
    def central_share(self) -> float:
        """Share of the linear interpolation."""
        return self.share
