"""What an instrument reads: a velocity component, the speed, a pressure."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np

COMPONENT, SPEED, PRESSURE = 0, 1, 2


class Quantity(Protocol):
    """A measured quantity, for k readings at once."""

    @property
    def unit(self) -> str:
        """SI unit of the value."""

    def value(self, velocity: np.ndarray, pressure: np.ndarray) -> np.ndarray:
        """(k,) what the instrument reads in a velocity (k, 3) and pressure (k,)."""

    def direction(self, velocity: np.ndarray) -> np.ndarray:
        """(k, 3) derivative of the value with respect to the velocity."""


@dataclass(frozen=True, eq=False)
class Component:
    """Velocity component along given unit vectors (k, 3)."""

    along: np.ndarray
    unit: str = "m/s"

    def value(self, velocity: np.ndarray, pressure: np.ndarray) -> np.ndarray:
        """(k,) velocity along the direction [m/s]."""
        return np.einsum("ij,ij->i", self.along, velocity)

    def direction(self, velocity: np.ndarray) -> np.ndarray:
        """(k, 3) the direction itself."""
        return self.along


@dataclass(frozen=True)
class Speed:
    """Magnitude of the velocity."""

    unit: str = "m/s"

    def value(self, velocity: np.ndarray, pressure: np.ndarray) -> np.ndarray:
        """(k,) speed [m/s]."""
        return np.linalg.norm(velocity, axis=1)

    def direction(self, velocity: np.ndarray) -> np.ndarray:
        """(k, 3) unit vector along the velocity, zero where the fluid rests."""
        speed = np.linalg.norm(velocity, axis=1)[:, None]
        return np.divide(velocity, speed, out=np.zeros_like(velocity), where=speed > 0)


@dataclass(frozen=True)
class Pressure:
    """Static pressure."""

    unit: str = "Pa"

    def value(self, velocity: np.ndarray, pressure: np.ndarray) -> np.ndarray:
        """(k,) pressure [Pa]."""
        return np.asarray(pressure)

    def direction(self, velocity: np.ndarray) -> np.ndarray:
        """(k, 3) zeros: a pressure does not depend on the velocity at its own place."""
        return np.zeros_like(velocity)
