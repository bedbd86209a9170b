"""Zones of cells that resist the flow: screens, honeycombs, porous blocks; how they are given."""

from __future__ import annotations

import warnings
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from ..errors import CaseError, Fv3dWarning, as_number, did_you_mean
from ..mesh.mesh import Mesh


@dataclass(frozen=True)
class Resistance:
    """Pressure loss per length ``linear u + quadratic density / 2 |u| u`` along x, y and z.

    Parameters
    ----------
    linear : float or (3,)
        Viscosity over permeability [Pa s/m^2]; three values where the axes differ.
    quadratic : float or (3,)
        Loss coefficient per length [1/m].
    where : function of points (n, 3) -> (n,) booleans, optional
        Cells whose centres are in the zone. None: the mesh has a zone of the name that the
        resistance is given under.
    thickness : float, optional
        That the coefficients were made for [m]; a zone of another thickness is warned of.

    Raises
    ------
    CaseError
        A coefficient that is negative or not finite; no resistance at all.

    Notes
    -----
    ``u`` is the velocity of the fluid over the whole cross-section, as outside the zone.
    Source: Darcy, H. (1856), Les fontaines publiques de la ville de Dijon; Forchheimer, P. (1901),
    Z. Ver. Dtsch. Ing. 45, 1782-1788.
    """

    linear: Any = field(default=0.0, kw_only=True)
    quadratic: Any = field(default=0.0, kw_only=True)
    where: Callable[[np.ndarray], np.ndarray] | None = field(default=None, kw_only=True)
    thickness: float | None = field(default=None, kw_only=True, repr=False)

    def __post_init__(self) -> None:
        for name in ("linear", "quadratic"):
            object.__setattr__(self, name, _three(getattr(self, name), f"Resistance({name}=)"))
        if not any(self.linear + self.quadratic):
            raise CaseError("A resistance needs a coefficient above zero.", where="Resistance()",
                            got="none", remedy="Give linear=200.0 or quadratic=50.0, say.")
        if not (self.where is None or callable(self.where)):
            raise CaseError("The place of a resistance is a function of points.",
                            where="Resistance(where=)", got=repr(self.where)[:60],
                            remedy="Give lambda x: x[:, 0] > 0.5, say, or name a zone.")

    @staticmethod
    def screen(*, loss: float, thickness: float,
               where: Callable[[np.ndarray], np.ndarray] | None = None) -> Resistance:
        """A screen whose pressure drop is ``loss density / 2 u^2``.

        Parameters
        ----------
        loss : float
            Loss coefficient of the whole screen.
        thickness : float
            Thickness of its zone in the mesh [m], not that of the wires.
        where : as in :class:`Resistance`

        Raises
        ------
        CaseError
            A number that is not positive.
        """
        _positive("Resistance.screen", loss=loss, thickness=thickness)
        return Resistance(quadratic=float(loss) / float(thickness), where=where,
                          thickness=float(thickness))

    @staticmethod
    def honeycomb(*, along: Any, linear: float = 0.0, quadratic: float = 0.0,
                  lateral: float = 1000.0,
                  where: Callable[[np.ndarray], np.ndarray] | None = None) -> Resistance:
        """A honeycomb: resists across its cells many times as much as along them.

        Parameters
        ----------
        along : (3,)
            Direction of its cells: one of the axes x, y, z.
        linear, quadratic : float
            Along the cells, as in :class:`Resistance`.  Laminar flow through round cells of
            diameter d loses ``linear = 32 viscosity / d^2`` (Hagen and Poiseuille).
        lateral : float
            Resistance across the cells over that along them.
        where : as in :class:`Resistance`

        Raises
        ------
        CaseError
            A direction that is no axis, a number that is not positive.
        """
        _positive("Resistance.honeycomb", lateral=lateral)
        try:
            axis = np.asarray(along, dtype=float)
        except (TypeError, ValueError):
            axis = np.empty(0)
        if axis.shape != (3,) or not np.all(np.isfinite(axis)) or np.count_nonzero(axis) != 1:
            raise CaseError("The cells of a honeycomb point along one of the axes.", got=along,
                            where="Resistance.honeycomb(along=)",
                            remedy="Give (1, 0, 0), say; turn the mesh otherwise.")
        factor = np.where(axis != 0, 1.0, float(lateral))
        where_got = "Resistance.honeycomb({}=)".format
        return Resistance(
            linear=np.array(_three(linear, where_got("linear"))) * factor,
            quadratic=np.array(_three(quadratic, where_got("quadratic"))) * factor, where=where)


def _three(value: Any, where: str) -> tuple[float, float, float]:
    try:
        array = np.asarray(value, dtype=float)
    except (TypeError, ValueError):
        array = np.empty(0)
    if array.shape not in ((), (3,)) or not np.all(np.isfinite(array) & (array >= 0)):
        raise CaseError("A resistance is one number or three, not negative.", where=where,
                        got=value, remedy="Give 200.0, or (200.0, 5000.0, 5000.0), say.")
    x, y, z = np.broadcast_to(array, 3).tolist()
    return x, y, z


def _positive(call: str, **numbers: Any) -> None:
    for name, value in numbers.items():
        if not 0.0 < as_number(value) < np.inf:
            raise CaseError("This number must be positive.", where=f"{call}({name}=)", got=value,
                            remedy="Give a number above zero.")


def zone_thickness(mesh: Mesh, cells: np.ndarray) -> float:
    """Volume of a slab of cells over half of the surface it shares with other cells [m].

    Infinite where a zone touches no other cell.
    """
    n, inside = mesh.n_internal, np.zeros(mesh.n_cells, bool)
    inside[cells] = True
    rim = np.flatnonzero(inside[mesh.left[:n]] != inside[mesh.right])
    area = 0.5 * float(mesh.face_area_magnitude[rim].sum())
    return float(mesh.cell_volume[cells].sum()) / area if area > 0 else np.inf


def resisting_cells(mesh: Mesh, resistances: Any) -> dict[str, np.ndarray]:
    """Cells of each resistance, in the order given.

    Raises
    ------
    CaseError
        No mapping of names to resistances, a name that is no zone of the mesh, a zone without
        cells, two resistances in one cell.
    """
    if not isinstance(resistances, Mapping):
        raise CaseError("Resistances are given by the name of their zone.", got=repr(resistances),
                        where="Case(resistances=)",
                        remedy='Give {"screen": Resistance.screen(loss=2.0, thickness=0.01)}, say.')
    found, owner = {}, np.full(mesh.n_cells, -1)
    for k, (name, law) in enumerate(resistances.items()):
        place = f"resistance {name!r}"
        if not isinstance(law, Resistance):
            raise CaseError("This is no resistance.", where=place, got=repr(law)[:60],
                            remedy="Give Resistance(linear=..., quadratic=...).")
        cells = _cells(mesh, name, law, place)
        taken = owner[cells].max()
        if taken >= 0:
            raise CaseError("Two resistances share cells.", where=place,
                            got=f"{np.count_nonzero(owner[cells] >= 0)} cells of "
                                f"{list(resistances)[taken]!r}",
                            remedy="Give each cell one resistance; coefficients add up.")
        owner[cells] = k
        found[name] = cells
        _check_thickness(mesh, name, law, cells)
    return found


def _check_thickness(mesh: Mesh, name: str, law: Resistance, cells: np.ndarray) -> None:
    """A screen must be as thick in the mesh as its coefficient supposes."""
    if law.thickness is None:
        return
    found = zone_thickness(mesh, cells)
    if found > 1.15 * law.thickness or 2.3 * found < law.thickness:
        # a zone at the end of a domain has one side only: half of the area that is reckoned with
        warnings.warn(f"The zone of the screen '{name}' is about {found:.3g} m thick in the mesh, "
                      f"its loss was given for {law.thickness:.3g} m: the pressure lost is about "
                      f"{found / law.thickness:.3g} times what was asked for. Give the thickness "
                      "of the zone, not of the wires.", Fv3dWarning, stacklevel=2)


def _cells(mesh: Mesh, name: str, law: Resistance, place: str) -> np.ndarray:
    if law.where is None:
        if name not in mesh.zones:
            known = ", ".join(mesh.zones) or "none"
            raise CaseError("The mesh has no such zone.", where=place, got=f"zones: {known}",
                            remedy="Name a zone of the mesh, or give Resistance(where=function "
                                   f"of points).{did_you_mean(name, mesh.zones)}")
        return np.asarray(mesh.zones[name])
    try:
        inside = np.asarray(law.where(mesh.cell_centre.copy()))
    except Exception as error:
        raise CaseError("The place of a resistance failed.", where=f"{place}, where=",
                        got=f"{type(error).__name__}: {error}",
                        remedy="Mend the function; it is called with points (n, 3) [m], "
                               "x[:, 0] is x.") from error
    if inside.shape != (mesh.n_cells,) or inside.dtype != bool or not inside.any():
        raise CaseError("The place of a resistance is one boolean per point, some of them true.",
                        where=f"{place}, where=", remedy="Check units and place.",
                        got=f"{inside.dtype}, shape {inside.shape}, "
                            f"{np.count_nonzero(inside)} cells")
    return np.flatnonzero(inside).astype(np.int32)
