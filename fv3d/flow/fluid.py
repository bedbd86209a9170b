"""Density and viscosity of the fluid; moist air and water as functions of their state."""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import Any

import numpy as np

from ..errors import CaseError, Fv3dWarning

ZERO_CELSIUS = 273.15  # K
GAS_CONSTANT = 8.314472  # J/(mol K), the CODATA 2006 value CIPM-2007 is stated with
VAPOUR_MOLAR_MASS = 18.01528e-3  # kg/mol


@dataclass(frozen=True, kw_only=True)
class Fluid:
    """A fluid of constant density and viscosity.

    Parameters
    ----------
    density : float [kg/m^3]
    viscosity : float [Pa s]
        Dynamic viscosity.
    name : str
        For the sheet.

    Raises
    ------
    CaseError
        A property that is not a positive finite number.

    Examples
    --------
    >>> Fluid(density=1000.0, viscosity=0.001).kinematic_viscosity
    1e-06
    """

    density: float
    viscosity: float
    name: str = ""

    def __post_init__(self) -> None:
        for key in ("density", "viscosity"):
            object.__setattr__(self, key, _positive(getattr(self, key), f"Fluid({key}=...)"))

    @property
    def kinematic_viscosity(self) -> float:
        """Viscosity over density [m^2/s]."""
        return self.viscosity / self.density

    def __str__(self) -> str:
        return (f"{self.name or 'fluid'}: density {self.density:.6g} kg/m^3, "
                f"viscosity {self.viscosity:.5g} Pa s")


def moist_air(*, temperature: float, pressure: float, relative_humidity: float,
              carbon_dioxide: float = 400e-6) -> Fluid:
    """Moist air.

    Density by CIPM-2007 (Picard, Davis, Glaeser and Fujii, 2008, Metrologia 45, 149), relative
    standard uncertainty of the formula 2.2e-5 within 288-300 K and 600-1100 hPa; outside a
    warning is given.  Viscosity of dry air by Lemmon and Jacobsen (2004, Int. J.
    Thermophys. 25, 21), uncertainty about 1 %; water vapour (dilute limit of IAPWS
    R12-08) mixed in by the rule of Wilke (1950, J. Chem. Phys. 18, 517), which lowers it
    by 0.6 % at 293 K and half saturation.  Mixing rules differ by up to 0.7 % for saturated
    air at 300 K, so take 1.2 % for the viscosity of moist air.

    Parameters
    ----------
    temperature : float [K]
    pressure : float [Pa]
        Absolute pressure.
    relative_humidity : float
        0 to 1.
    carbon_dioxide : float
        Mole fraction.

    Returns
    -------
    Fluid

    Raises
    ------
    CaseError
        A state no air can be in, or a temperature that looks like degrees Celsius, a
        humidity in percent, a pressure in hPa.
    """
    temperature = _within(temperature, 200.0, 400.0, "temperature", "K",
                          "Give kelvin: 20 degrees Celsius are 293.15 K.")
    pressure = _within(pressure, 1e4, 5e5, "pressure", "Pa",
                       "Give the absolute pressure in pascal: 1013.25 hPa are 101325 Pa.")
    humidity = _within(relative_humidity, 0.0, 1.0, "relative_humidity", "",
                       "Give a share from 0 to 1: 46 % are 0.46.")
    carbon = _within(carbon_dioxide, 0.0, 0.02, "carbon_dioxide", "",
                     "Give a mole fraction: 400 ppm are 400e-6.")
    if not (288.0 <= temperature <= 300.2 and 6e4 <= pressure <= 1.1e5):
        warnings.warn(f"Moist air at {temperature:g} K and {pressure / 100:g} hPa lies outside "
                      "288-300 K and 600-1100 hPa, the range CIPM-2007 is stated for; the "
                      "density may be off by more than 0.01 %.", Fv3dWarning, stacklevel=2)
    vapour = _vapour_fraction(temperature, pressure, humidity)
    if vapour >= 1.0:
        raise CaseError("Water vapour alone would exceed the pressure.", where="moist_air",
                        got=f"mole fraction {vapour:.3g}",
                        remedy="Check temperature, pressure and humidity.")
    density = _moist_density(temperature, pressure, vapour, carbon)
    viscosity = _wilke(_dry_air_viscosity(temperature, density), _vapour_viscosity(temperature),
                       vapour)
    return Fluid(density=density, viscosity=viscosity,
                 name=f"moist air, {temperature:.2f} K, {pressure:.0f} Pa, "
                      f"relative humidity {humidity:.2f}")


def water(*, temperature: float) -> Fluid:
    """Air-free water at atmospheric pressure.

    Density by the CIPM formula (Tanaka, Girard, Davis, Peuto and Bignell, 2001, Metrologia
    38, 301), 0 to 40 degrees Celsius, uncertainty below 1e-6; at other pressures it rises by
    4.6e-5 per bar.  Viscosity by the correlation for 0.1 MPa of IAPWS SR6-08 (2011; Patek
    and others, 2009, J. Phys. Chem. Ref. Data 38, 21), uncertainty 1 %.

    Parameters
    ----------
    temperature : float [K]
        273.15 to 313.15.

    Returns
    -------
    Fluid

    Raises
    ------
    CaseError
        A temperature outside the range.
    """
    temperature = _within(temperature, ZERO_CELSIUS, 313.15, "temperature", "K",
                          "Give kelvin, 273.15 to 313.15; beyond that use "
                          "Fluid(density=, viscosity=).")
    t = temperature - ZERO_CELSIUS
    density = 999.974950 * (1.0 - (t - 3.983035)**2 * (t + 301.797)
                            / (522528.9 * (t + 69.34881)))
    share = temperature / 300.0
    viscosity = 1e-6 * (280.68 * share**-1.9 + 511.45 * share**-7.7 + 61.131 * share**-19.6
                        + 0.45903 * share**-40.0)
    return Fluid(density=density, viscosity=viscosity, name=f"water, {temperature:.2f} K")


def _vapour_fraction(temperature: float, pressure: float, humidity: float) -> float:
    """Mole fraction of water vapour, CIPM-2007."""
    t = temperature - ZERO_CELSIUS
    saturation = np.exp(1.2378847e-5 * temperature**2 - 1.9121316e-2 * temperature
                        + 33.93711047 - 6.3431645e3 / temperature)
    enhancement = 1.00062 + 3.14e-8 * pressure + 5.6e-7 * t**2
    return float(humidity * enhancement * saturation / pressure)


def _moist_density(temperature: float, pressure: float, vapour: float, carbon: float) -> float:
    """Density of moist air [kg/m^3], CIPM-2007."""
    t = temperature - ZERO_CELSIUS
    ratio = pressure / temperature
    compressibility = 1.0 - ratio * (
        1.58123e-6 - 2.9331e-8 * t + 1.1043e-10 * t**2
        + (5.707e-6 - 2.051e-8 * t) * vapour + (1.9898e-4 - 2.376e-6 * t) * vapour**2
    ) + ratio**2 * (1.83e-11 - 0.765e-8 * vapour**2)
    molar_mass = (28.96546 + 12.011 * (carbon - 0.0004)) * 1e-3
    return (pressure * molar_mass / (compressibility * GAS_CONSTANT * temperature)
            * (1.0 - vapour * (1.0 - VAPOUR_MOLAR_MASS / molar_mass)))


def _dry_air_viscosity(temperature: float, density: float) -> float:
    """Viscosity of dry air [Pa s], Lemmon and Jacobsen (2004)."""
    molar_mass = 28.9586  # g/mol
    logarithm = np.log(temperature / 103.3)
    collision = np.exp(np.polyval([-0.00331, 0.005341, 0.08406, -0.4623, 0.431], logarithm))
    dilute = 0.0266958 * np.sqrt(molar_mass * temperature) / (0.360**2 * collision)
    tau = 132.6312 / temperature
    delta = density / molar_mass / 10.4477
    dense = (10.72 * tau**0.2 * delta + 1.122 * tau**0.05 * delta**4
             + 0.002019 * tau**2.4 * delta**9
             - (8.876 * tau**0.6 * delta + 0.02916 * tau**3.6 * delta**8) * np.exp(-delta))
    return float(1e-6 * (dilute + dense))


def _vapour_viscosity(temperature: float) -> float:
    """Viscosity of water vapour in the dilute limit [Pa s], IAPWS R12-08."""
    share = temperature / 647.096
    return float(1e-4 * np.sqrt(share) / (1.67752 + 2.20462 / share + 0.6366564 / share**2
                                          - 0.241605 / share**3))


def _wilke(air: float, vapour: float, fraction: float) -> float:
    """Viscosity of a mixture of air and a mole fraction of vapour [Pa s], Wilke (1950)."""
    mass = 28.96546e-3 / VAPOUR_MOLAR_MASS
    air_by_vapour = (1.0 + np.sqrt(air / vapour) * mass**-0.25)**2 / np.sqrt(8.0 * (1.0 + mass))
    vapour_by_air = air_by_vapour * vapour / air * mass
    dry = 1.0 - fraction
    return float(dry * air / (dry + fraction * air_by_vapour)
                 + fraction * vapour / (fraction + dry * vapour_by_air))


def _positive(value: Any, where: str) -> float:
    try:
        number = float(value)
    except (TypeError, ValueError):
        number = np.nan
    if not 0.0 < number < np.inf:
        raise CaseError("A fluid property must be a positive number.", where=where,
                        got=repr(value), remedy="Give SI units: kg/m^3 and Pa s.")
    return number


def _within(value: Any, low: float, high: float, key: str, unit: str, remedy: str) -> float:
    try:
        number = float(value)
    except (TypeError, ValueError):
        number = np.nan
    if not low <= number <= high:
        raise CaseError(f"The {key.replace('_', ' ')} is outside {low:g} to {high:g} {unit}."
                        .replace(" .", "."), where=f"{key}=", got=repr(value), remedy=remedy)
    return number
