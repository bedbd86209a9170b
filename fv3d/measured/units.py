"""Units a table of readings may carry in its header.

The factors turn a value into SI.  They are exact by definition: the inch, the foot and
the pound in metres and kilograms (international yard and pound agreement, 1959), the
conventional columns of water and mercury with standard gravity 9.80665 m/s^2 and densities
of 1000 and 13595.1 kg/m^3 (ISO 80000-4; BS 350).
"""

from __future__ import annotations

from dataclasses import dataclass

from ..errors import ReadingError

SPELLINGS = (("sec", "s"), ("meters", "m"), ("metres", "m"), ("meter", "m"), ("metre", "m"),
             ("milli", "m"), ("centi", "c"), ("pascal", "pa"), ("inch", "in"), ("feet", "ft"),
             ("hr", "h"), ("\N{MICRO SIGN}", "u"), ("\N{GREEK SMALL LETTER MU}", "u"),
             (" ", ""), ("s^-1", "/s"), ("s-1", "/s"), ("*/", "/"))


def _plain(unit: str) -> str:
    """A unit without what differs between spellings of the same unit."""
    unit = unit.lower()
    for spelling, short in SPELLINGS:
        unit = unit.replace(spelling, short)
    return unit


@dataclass(frozen=True)
class Dimension:
    """A kind of quantity with the units it may be given in.

    Attributes
    ----------
    name : str
        What is measured.
    unit : str
        Its SI unit.
    factors : tuple of (unit, factor)
        SI value = factor * value.
    """

    name: str
    unit: str
    factors: tuple[tuple[str, float], ...]

    def factor(self, unit: str | None, *, where: str) -> float:
        """Factor that turns a value in ``unit`` into SI.

        Raises
        ------
        ReadingError
            The unit is missing or unknown; ``where`` names the column.
        """
        known = dict(self.factors)
        if unit in known:
            return known[unit]
        units = ", ".join(known)
        same = [name for name in known if _plain(name) == _plain(unit or "")]
        hint = f"Did you mean [{same[0]}]? " if same else ""
        if unit is None:
            raise ReadingError(f"A column of {self.name} has no unit.", where=where,
                               got="no unit in the header",
                               remedy=f"Write the unit in square brackets, one of: {units}.")
        raise ReadingError(f"A column of {self.name} has an unknown unit.", where=where,
                           got=f"[{unit}]",
                           remedy=f"{hint}Accepted: {units}. Convert the values to one of "
                                  "these.")


LENGTH = Dimension("length", "m", (
    ("m", 1.0), ("cm", 1e-2), ("mm", 1e-3), ("um", 1e-6), ("in", 0.0254), ("ft", 0.3048)))
VELOCITY = Dimension("velocity", "m/s", (
    ("m/s", 1.0), ("cm/s", 1e-2), ("mm/s", 1e-3), ("km/h", 1.0 / 3.6), ("ft/s", 0.3048),
    ("in/s", 0.0254)))
PRESSURE = Dimension("pressure", "Pa", (
    ("Pa", 1.0), ("hPa", 100.0), ("kPa", 1e3), ("mbar", 100.0), ("bar", 1e5),
    ("mmH2O", 9.80665), ("inH2O", 249.08891), ("mmHg", 133.322387415),
    ("psi", 4.4482216152605 / 0.0254**2)))
TIME = Dimension("time", "s", (("s", 1.0), ("ms", 1e-3), ("us", 1e-6), ("min", 60.0)))
NUMBER = Dimension("direction", "", (("", 1.0), ("-", 1.0), ("1", 1.0)))
