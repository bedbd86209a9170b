"""Air and water against tables of independent packages and published formulas."""

from __future__ import annotations

import warnings

import numpy as np
import pytest

from fv3d.errors import CaseError, Fv3dWarning
from fv3d.flow.fluid import Fluid, moist_air, water

# CIPM-2007 worked from the published constants by an independent script; the constants agree
# with four independent codes.  t [deg C], p [Pa], relative humidity, density [kg/m^3].
CIPM_2007 = [
    (20, 101325, 0.5, 1.199314), (20, 101325, 0.0, 1.204557), (20, 100000, 0.5, 1.183557),
    (23, 101325, 0.5, 1.186084), (25, 101325, 0.5, 1.177315), (15, 101325, 0.0, 1.225521),
    (20, 75000, 0.5, 0.886277)]

# CoolProp 8.0.0, HAPropsSI (ASHRAE RP-1485; dry air by Lemmon and Jacobsen) at 101325 Pa:
# T [K], relative humidity, density [kg/m^3], viscosity [Pa s].
COOLPROP_AIR = [
    (293.15, 0.0, 1.204603, 1.8205675e-5), (293.15, 0.5, 1.199359, 1.8143160e-5),
    (293.15, 1.0, None, 1.8080497e-5), (298.15, 0.5, 1.177360, None),
    (288.15, 0.0, None, 1.7961537e-5), (300.00, 1.0, None, 1.8334613e-5)]

# IAPWS-95 and IAPWS R12-08 by chemicals 1.5.2 at 101325 Pa: T [K], density, viscosity.
IAPWS_WATER = [
    (288.15, 999.1026214670926, 0.0011375675592527337),
    (293.15, 998.2071504679451, 0.0010015961431205814),
    (298.15, 997.0476367603438, 0.0008900224890776966),
    (313.15, 992.2163528731381, 0.0006527287265767447)]


@pytest.mark.parametrize("t, pressure, humidity, density", CIPM_2007)
def test_density_of_air_is_cipm_2007(t, pressure, humidity, density):
    air = moist_air(temperature=t + 273.15, pressure=pressure, relative_humidity=humidity)
    assert air.density == pytest.approx(density, abs=6e-7)


@pytest.mark.parametrize("temperature, humidity, density, viscosity", COOLPROP_AIR)
def test_air_against_coolprop(temperature, humidity, density, viscosity):
    air = moist_air(temperature=temperature, pressure=101325, relative_humidity=humidity)
    if density:
        assert air.density == pytest.approx(density, rel=5e-5)
    if viscosity:  # dry air: the same equation; moist air: two mixing rules
        assert air.viscosity == pytest.approx(viscosity, rel=0.007 if humidity else 1e-6)


def test_density_of_air_by_the_oiml_formula():
    """OIML R 111-1 (2004), E.3-1: stated within 2e-4 for 900-1100 hPa, 10-30 deg C."""
    for t, p, h in ((20, 101325, 50), (17, 95000, 30), (26, 105000, 70)):
        oiml = (0.34848 * p / 100 - 0.009 * h * np.exp(0.061 * t)) / (273.15 + t)
        air = moist_air(temperature=t + 273.15, pressure=p, relative_humidity=h / 100)
        assert air.density == pytest.approx(oiml, rel=2e-4)


def test_dry_viscosity_beside_the_standard_atmosphere():
    """US Standard Atmosphere 1976: 1.78938e-5 Pa s at 288.15 K, known to lie 0.4 % lower."""
    air = moist_air(temperature=288.15, pressure=101325, relative_humidity=0.0)
    assert air.viscosity == pytest.approx(1.78938e-5, rel=0.005)


def test_carbon_dioxide_makes_air_heavier():
    state = dict(temperature=293.15, pressure=101325, relative_humidity=0.5)
    change = moist_air(**state, carbon_dioxide=1400e-6).density / moist_air(**state).density
    # 12.011 g/mol times 1e-3 over 28.96546 g/mol, and the vapour's share.
    assert change - 1 == pytest.approx(12.011e-3 / 28.96546, rel=0.01)


@pytest.mark.parametrize("temperature, density, viscosity", IAPWS_WATER)
def test_water_against_iapws(temperature, density, viscosity):
    fluid = water(temperature=temperature)
    assert fluid.density == pytest.approx(density, rel=2e-6)
    assert fluid.viscosity == pytest.approx(viscosity, rel=1e-3)


def test_water_at_20_degrees_against_iso():
    """ISO/TR 3666: 1.0016 mPa s at 20 deg C; Tanaka and others (2001): 998.2067 kg/m^3."""
    fluid = water(temperature=293.15)
    assert fluid.viscosity == pytest.approx(1.0016e-3, abs=1e-7)
    assert fluid.density == pytest.approx(998.2067, abs=1e-4)


def test_outside_the_stated_range_there_is_a_warning():
    with pytest.warns(Fv3dWarning, match="288-300 K"):
        moist_air(temperature=310.0, pressure=101325, relative_humidity=0.4)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        moist_air(temperature=295.4, pressure=100_900.0, relative_humidity=0.46)


@pytest.mark.parametrize("make", [
    lambda: Fluid(density=0.0, viscosity=1.0), lambda: Fluid(density=1.0, viscosity=-1.0),
    lambda: Fluid(density=np.nan, viscosity=1.0), lambda: Fluid(density="air", viscosity=1.0),
    lambda: Fluid(density=1.0, viscosity=np.inf), lambda: Fluid(density=None, viscosity=1.0),
    lambda: moist_air(temperature=21.0, pressure=101325, relative_humidity=0.5),
    lambda: moist_air(temperature=294.0, pressure=1013.25, relative_humidity=0.5),
    lambda: moist_air(temperature=294.0, pressure=101325, relative_humidity=46),
    lambda: moist_air(temperature=np.nan, pressure=101325, relative_humidity=0.4),
    lambda: moist_air(temperature=294.0, pressure=101325, relative_humidity=0.4,
                      carbon_dioxide=400), lambda: water(temperature=20.0),
    lambda: water(temperature="warm")])
def test_bad_states_are_refused(make):
    with pytest.raises(CaseError) as caught:
        make()
    assert caught.value.where and caught.value.remedy and caught.value.got is not None


def test_a_fluid_is_frozen_and_prints():
    air = Fluid(density=1.2, viscosity=1.8e-5, name="tunnel air")
    assert air.kinematic_viscosity == pytest.approx(1.5e-5)
    assert "tunnel air" in str(air) and "kg/m^3" in str(air)
    with pytest.raises(AttributeError):
        air.density = 2.0
