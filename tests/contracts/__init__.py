"""One list of promises per kind of method; every new member of a kind must pass its list.

A list is a dictionary of checks, ``name -> check(method)``; a test file parametrises over the
members and the list, for example ``GRADIENT`` and ``fv3d.LeastSquares()``.
"""

from .boundary import BOUNDARY, filled
from .convection import CONVECTION, face_values, momentum_imbalance, uniform_flux
from .coupling import COUPLING, MESHES
from .gradient import GRADIENT
from .solver import LINEAR, poisson, true_residual
from .tools import (
    ROTATION,
    SLOPE,
    Check,
    edge_centres,
    linear,
    observed_order,
    skewed,
    turned_mesh,
)

__all__ = [
    "BOUNDARY", "CONVECTION", "COUPLING", "GRADIENT", "LINEAR", "MESHES", "ROTATION", "SLOPE",
    "Check", "edge_centres", "face_values", "filled", "linear", "momentum_imbalance",
    "observed_order", "poisson", "skewed", "true_residual", "turned_mesh", "uniform_flux",
]
