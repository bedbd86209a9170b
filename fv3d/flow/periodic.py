"""Periodic boundaries: joined by a translation, driven by a pressure drop or to a given flow."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from ..errors import BoundaryError, as_number
from ..mesh.mesh import Mesh
from ..mesh.periodic import join_periodic

_DRIVES = ("drop_per_length", "mean_speed", "volume_flow")


@dataclass(frozen=True)
class Periodic:
    """What leaves through this boundary enters through its partner, a translation apart.

    Give it to one of the two.  The pressure of the run is the periodic part; what drives the flow
    acts as a uniform force along the translation.  All three drives are positive for flow from
    this boundary through the domain to its partner.

    Parameters
    ----------
    partner : str
        Name of the other boundary.
    drop_per_length : float, optional
        Fall of the mean pressure [Pa/m].
    mean_speed : float, optional
        Volume flow over the area of the boundary [m/s]; the pressure drop is found.
    volume_flow : float, optional
        Volume flow [m^3/s]; the pressure drop is found.

    Raises
    ------
    BoundaryError
        No name, more than one drive, a drive that is no finite number or a given flow of zero;
        when the case is made, also boundaries that do not fall upon each other.
    """

    partner: str
    drop_per_length: float | None = None
    mean_speed: float | None = None
    volume_flow: float | None = None

    def __post_init__(self) -> None:
        if not isinstance(self.partner, str) or not self.partner:
            raise BoundaryError("A periodic boundary needs the name of its partner.",
                                where="Periodic(partner)", got=repr(self.partner),
                                remedy="Give Periodic('outlet'), say.")
        given = {name: getattr(self, name) for name in _DRIVES if getattr(self, name) is not None}
        if len(given) > 1:
            raise BoundaryError("A periodic boundary has one drive.",
                                where="Periodic(" + "=, ".join(given) + "=)", got=given,
                                remedy="Give the pressure drop or the flow, not both.")
        for name, value in given.items():
            if not np.isfinite(as_number(value)) or (value == 0 and name != "drop_per_length"):
                raise BoundaryError("The drive of a periodic boundary is a finite number, a given "
                                    "flow not zero.", where=f"Periodic({name}=)", got=repr(value),
                                    remedy="Leave it out where nothing drives the flow.")

    @property
    def driven(self) -> bool:
        """Whether something drives the flow."""
        return any(getattr(self, name) is not None for name in _DRIVES)


def joined(mesh: Mesh, boundaries: Any) -> tuple[Mesh, Any, dict[str, Periodic]]:
    """Take the periodic boundaries out of a mesh and its conditions.

    Returns
    -------
    mesh : Mesh with the pairs joined (as it is where they are already)
    boundaries : the other conditions
    periodic : condition of each pair by the name of the first boundary

    Raises
    ------
    BoundaryError
        A partner with a condition of its own, or drives on both.
    MeshError
        Boundaries that do not fall upon each other.
    """
    if not isinstance(boundaries, Mapping):
        return mesh, boundaries, {}
    pairs = {name: one for name, one in boundaries.items() if isinstance(one, Periodic)}
    pairs = {name: one for name, one in pairs.items() if not _mirrored(name, one, pairs)}
    for name, one in pairs.items():
        other = boundaries.get(one.partner)
        if other is not None and not (isinstance(other, Periodic) and other.partner == name):
            raise BoundaryError("The partner of a periodic boundary has another condition.",
                                where=f"boundary '{one.partner}'", got=repr(other),
                                remedy=f"Leave it out; '{name}' stands for both.")
    new = {name: one.partner for name, one in pairs.items()
           if name not in mesh.joined or mesh.joined[name].partner != one.partner}
    rest = {name: one for name, one in boundaries.items() if not isinstance(one, Periodic)}
    return (join_periodic(mesh, new) if new else mesh), rest, pairs


def _mirrored(name: str, one: Periodic, pairs: Mapping[str, Periodic]) -> bool:
    """Whether the pair is already given from the other side, or undriven from this one."""
    other = pairs.get(one.partner)
    if other is None or other.partner != name:
        return False
    if one.driven and other.driven:
        raise BoundaryError("Both boundaries of a periodic pair drive the flow.",
                            where=f"boundaries '{name}' and '{one.partner}'",
                            got=f"{one} and {other}", remedy="Give one of them only.")
    if one.driven != other.driven:
        return other.driven
    return list(pairs).index(one.partner) < list(pairs).index(name)
