"""Fluxes given at inlets: which way they go, and whether they balance."""

from __future__ import annotations

import warnings

import numpy as np

from ..errors import BoundaryError, Fv3dWarning
from ..mesh.mesh import Mesh
from .boundary import BoundaryTable


def warn_of_suction(mesh: Mesh, flux: np.ndarray, closed: bool) -> None:
    """Say it where fluid leaves through an inlet though there is an outlet: often a wrong sign."""
    for name, faces in mesh.boundaries.items():
        part = flux[faces.start - mesh.n_internal:faces.stop - mesh.n_internal]
        if not closed and part.sum() > 0.5 * np.abs(part).sum() > 0.0:
            warnings.warn(f"The velocity given on '{name}' points out of the domain: "
                          f"{part.sum():.3g} kg/s leave there. Check its sign, unless suction is "
                          "meant.", Fv3dWarning, stacklevel=2)


def balanced_flux(mesh: Mesh, table: BoundaryTable, flux: np.ndarray) -> np.ndarray:
    """Given fluxes of a domain without outlet, made to cancel to rounding.

    A velocity *function* carries its own flux only to the order of the mesh: an imbalance below
    1 % is spread over these faces; anything else is an error.
    """
    net, gross = float(flux.sum()), float(np.abs(flux).sum())
    if gross == 0.0 or abs(net) <= 1e-10 * gross:
        return flux
    names = [name for name, faces in mesh.boundaries.items()
             if np.any(flux[faces.start - mesh.n_internal:faces.stop - mesh.n_internal] != 0)]
    sampled = np.where(table.sampled, np.abs(flux), 0.0)
    if abs(net) > 0.01 * gross or sampled.sum() < 0.1 * gross:
        raise BoundaryError("Without an outlet the given inflow and outflow must balance.",
                            where=f"boundaries {', '.join(names)}",
                            got=f"net outflow {net:.6g} kg/s of {gross / 2:.6g} kg/s",
                            remedy="Correct the velocities, or make one boundary an Outlet.")
    if abs(net) > 1e-3 * gross:
        warnings.warn(f"The velocity functions on {', '.join(names)} do not balance on this mesh: "
                      f"{abs(net) / gross:.2%} of the flux is spread over their faces.",
                      Fv3dWarning, stacklevel=2)
    return flux - net * sampled / sampled.sum()
