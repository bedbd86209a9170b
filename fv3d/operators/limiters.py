"""Limiters: gradients and face values that keep to the range of the cells around.

Vectors are limited component by component.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np

from ..errors import CaseError
from ..mesh.mesh import Mesh
from . import kernels_limiting as kernels
from .gradient import BoundaryKnowledge, GradientMethod, GradientOperator, LeastSquares


@dataclass(frozen=True, eq=False)
class LimitedOperator:
    """Gradient operator whose result is scaled down cell by cell; called as its inner one is.

    ``inner`` the operator it wraps; ``used`` (n_boundary,) the boundary faces whose values count.
    """

    inner: GradientOperator | LimitedOperator
    mesh: Mesh
    used: np.ndarray
    smooth: bool

    def __call__(self, cell_values: np.ndarray, boundary_values: np.ndarray) -> np.ndarray:
        """Limited gradient (n_cells, 3) of a scalar, (n_cells, k, 3) of a vector (n_cells, k)."""
        gradient, mesh = self.inner(cell_values, boundary_values), self.mesh
        cells = np.ascontiguousarray(cell_values.reshape(mesh.n_cells, -1))
        edge = np.ascontiguousarray(boundary_values.reshape(mesh.n_boundary, -1))
        low, high = value_range(mesh, cells, edge, self.used, rings=2 if self.smooth else 1)
        kernels.limit_gradient(*mesh.cell_faces, mesh.across, mesh.left,
                               mesh.face_centre, mesh.cell_centre, mesh.delta, cells, low, high,
                               self.smooth, gradient.reshape(mesh.n_cells, -1, 3))
        return np.asarray(gradient)


@dataclass(frozen=True)
class BarthJespersen:
    """A gradient scaled so that inner face centres keep to the range of a cell and its neighbours.

    The sharpest limiter of this kind.  Where it switches back and forth a steady iteration ends
    oscillating: relax it more, ``SIMPLEC(velocity_relaxation=0.4)``.  Pressure keeps the gradient
    that is wrapped.

    Source: Barth, T. J. and Jespersen, D. C. (1989), AIAA Paper 89-0366.

    Parameters
    ----------
    gradient : gradient method

    Raises
    ------
    CaseError
        What is wrapped is no gradient method.
    """

    gradient: GradientMethod = field(default_factory=LeastSquares)
    bounded: bool = field(default=True, init=False, repr=False)
    linear_exact: bool = field(default=False, init=False, repr=False)

    def __post_init__(self) -> None:
        _check_method(self.gradient, "BarthJespersen")

    @property
    def order(self) -> float:
        """Declared order of accuracy."""
        return self.gradient.order

    def weights(self, mesh: Mesh, known: BoundaryKnowledge) -> LimitedOperator:
        """Operator on this mesh, see :class:`LimitedOperator`."""
        return LimitedOperator(self.gradient.weights(mesh, known), mesh, known.valued, False)


@dataclass(frozen=True)
class MichalakOllivierGooch:
    """As :class:`BarthJespersen` with a smooth function, which lets more iterations converge.

    Changes up to two thirds of the room around a cell, over two rings of neighbours, are left as
    they are: with four neighbours alone a tetrahedron would be limited everywhere.

    Source: Michalak, C. and Ollivier-Gooch, C. (2009), J. Comput. Phys. 228, 8693-8711.

    Parameters
    ----------
    gradient : gradient method

    Raises
    ------
    CaseError
        What is wrapped is no gradient method.
    """

    gradient: GradientMethod = field(default_factory=LeastSquares)
    bounded: bool = field(default=True, init=False, repr=False)
    linear_exact: bool = field(default=False, init=False, repr=False)

    def __post_init__(self) -> None:
        _check_method(self.gradient, "MichalakOllivierGooch")

    @property
    def order(self) -> float:
        """Declared order of accuracy."""
        return self.gradient.order

    def weights(self, mesh: Mesh, known: BoundaryKnowledge) -> LimitedOperator:
        """Operator on this mesh, see :class:`LimitedOperator`."""
        return LimitedOperator(self.gradient.weights(mesh, known), mesh, known.valued, True)


def _check_method(method: Any, name: str) -> None:
    if isinstance(method, type) or not hasattr(method, "weights"):
        raise CaseError("A limiter wraps a gradient method.", where=f"{name}(gradient=)",
                        got=repr(method), remedy="Give LeastSquares(), say.")


def unlimited(method: GradientMethod) -> GradientMethod:
    """The method itself, or what a limiter wraps."""
    inner = getattr(method, "gradient", None)
    return method if inner is None else unlimited(inner)


def linear_operator(operator: GradientOperator | LimitedOperator) -> GradientOperator:
    """The operator itself, or what its limiters wrap."""
    while isinstance(operator, LimitedOperator):
        operator = operator.inner
    return operator


def value_range(mesh: Mesh, cells: np.ndarray, edge: np.ndarray,
                used: np.ndarray, *, rings: int) -> tuple[np.ndarray, np.ndarray]:
    """Least and greatest value around each cell, over one or two rings of neighbours.

    Parameters
    ----------
    cells : (n_cells, k), edge : (n_boundary, k)
    used : (n_boundary,) bool
        Boundary faces whose values count.

    Returns
    -------
    low, high : (n_cells, k)
    """
    low, high = np.empty_like(cells), np.empty_like(cells)
    kernels.neighbour_range(mesh.cell_faces[0], mesh.across, used, cells, edge, low, high)
    for _ in range(rings - 1):
        narrow, low, high = (low, high), np.empty_like(cells), np.empty_like(cells)
        kernels.widened_range(mesh.cell_faces[0], mesh.across, *narrow, low, high)
    return low, high


def limited_extension(mesh: Mesh, cells: np.ndarray, edge: np.ndarray, gradient: np.ndarray,
                      mass_flux: np.ndarray) -> np.ndarray:
    """Change from the upwind cell to each internal face that stays inside the range around it.

    The linear change is kept up to two thirds of the room, and bent smoothly to stay below it
    beyond.  Room is 0.7 of the distance to the greatest or least value ahead, or three times that
    behind where this is less; both among the cell, two rings of neighbours and their boundary
    faces.  In an extreme cell the change is zero and elsewhere it ends before the value ahead, so
    that convection makes no new extremes; the two numbers make deferred correction converge.

    Source: range and upwind gradient Barth, T. J. and Jespersen, D. C. (1989), AIAA Paper
    89-0366; the cubic Michalak, C. and Ollivier-Gooch, C. (2009), J. Comput. Phys. 228,
    8693-8711; a multiple of the room behind Sweby, P. K. (1984), SIAM J. Numer. Anal. 21,
    995-1011.

    Parameters
    ----------
    cells : (n_cells, k), edge : (n_boundary, k), gradient : (n_cells, k, 3)
    mass_flux : (n_faces,) [kg/s]

    Returns
    -------
    (n_internal, k)
    """
    low, high = value_range(mesh, cells, edge, np.ones(mesh.n_boundary, bool), rings=2)
    out = np.empty((mesh.n_internal, cells.shape[1]))
    kernels.limited_reach(mesh.left[:mesh.n_internal], mesh.right, mesh.face_centre,
                          mesh.cell_centre, mesh.delta, mass_flux, cells, gradient, low, high, out)
    return out


def limited_outflow(mesh: Mesh, cells: np.ndarray, edge: np.ndarray,
                    gradient: np.ndarray) -> np.ndarray:
    """As :func:`limited_extension`, from the owner to each boundary face.

    Parameters
    ----------
    cells : (n_cells, k), edge : (n_boundary, k), gradient : (n_cells, k, 3)

    Returns
    -------
    (n_boundary, k)
    """
    n = mesh.n_internal
    low, high = value_range(mesh, cells, edge, np.ones(mesh.n_boundary, bool), rings=2)
    out = np.empty((mesh.n_boundary, cells.shape[1]))
    owner = mesh.left[n:]
    kernels.limited_reach(owner, owner, mesh.face_centre[n:], mesh.cell_centre, mesh.delta[n:],
                          np.ones(mesh.n_boundary), cells, gradient, low, high, out)
    return out
