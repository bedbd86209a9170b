"""Random arguments to call compiled loops, their plain references and the array path with.

What a kernel writes whole is filled with NaN before, so that a place left out is noticed.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import Any
from unittest.mock import patch

import loops_solving  # noqa: F401  (adds its references)
import numpy as np
from loops import REFERENCES as REFERENCES

from fv3d.mesh.generate import box
from fv3d.mesh.mesh import Mesh
from fv3d.operators import assembly, kernels, kernels_limiting, kernels_solving
from fv3d.operators.assembly import Pattern, orthogonal_factor

Arguments = list[Any]
LOOPS = {**vars(kernels), **vars(kernels_solving), **vars(kernels_limiting)}
SINGLE_TOO = {"product", "residual_product", "product_add", "chebyshev_start", "chebyshev_step",
              "sweep", "sweep_pieces", "invert_blocks"}
FLAGS = {"transport_faces": 4, "momentum_face_flux": 4, "pressure_fluxes": 2, "sweep_pieces": 2,
         "linear_face_values": 1, "flux_defects": 1, "momentum_residual": 1, "invert_blocks": 1,
         "fill_rows": 1, "sweep": 1, "absolute_sums": 1, "product_dot": 1, "add_to_rows": 1,
         "limit_gradient": 1}


def calls(names: Iterable[str] = tuple(REFERENCES)) -> list[tuple[str, int]]:
    """Every kernel with each combination of its flags, as the bits of a number."""
    return [(name, variant) for name in names for variant in range(2 ** FLAGS.get(name, 0))]


def small_mesh(kind: str) -> Mesh:
    """A few skewed cells: ``hex`` or ``tet``."""
    return box((0, 0, 0), (1.0, 0.7, 0.5), cells=(4, 3, 3) if kind == "hex" else (3, 2, 2),
               tetra=kind == "tet", skew=0.3, seed=3)


def cut_pattern(mesh: Mesh, *, most: int = 8) -> Pattern:
    """Pattern whose rows are cut into pieces however few they are."""
    with patch.multiple(assembly, LEAST_PIECE=1, MOST_PIECES=most):
        return assembly.pattern(mesh)


def copied(values: Arguments) -> Arguments:
    return [v.copy() if isinstance(v, np.ndarray) else v for v in values]


def unset(*shape: int, dtype: type = np.float64) -> np.ndarray:
    return np.full(shape, np.nan, dtype=dtype)


class Maker:
    """Random fields of a mesh, and the arguments of each kernel from them."""

    def __init__(self, mesh: Mesh, dtype: type, seed: int, variant: int) -> None:
        self.mesh, self.dtype, self.r = mesh, dtype, np.random.default_rng(seed)
        self.flags = [bool(variant >> bit & 1) for bit in range(4)]
        self.n, self.inside, self.edges = mesh.n_cells, mesh.n_internal, mesh.n_boundary
        self.layout = cut_pattern(mesh)
        self.ends = [mesh.left[:self.inside], mesh.right, mesh.weight]
        self.around = list(mesh.cell_faces)

    def normal(self, *shape: int) -> np.ndarray:
        return self.r.normal(size=shape)

    def vector(self) -> np.ndarray:
        return self.normal(self.n).astype(self.dtype)

    def positive(self, *shape: int) -> np.ndarray:
        return self.r.uniform(0.5, 2.0, shape)

    def gradient(self) -> np.ndarray:
        return self.normal(self.n, 3, 3)

    def others(self) -> np.ndarray:
        count = len(self.around[1])
        return self.r.integers(0, self.n + self.edges, count).astype(np.int32)

    def skew(self, absent: bool) -> np.ndarray:
        return np.empty((0, 3)) if absent else self.mesh.skew_offset

    def geometry(self, straight: bool) -> list[Any]:
        """Area, delta, orthogonal factor and flag; of straight faces they fit together."""
        factor, delta = orthogonal_factor(self.mesh), self.mesh.delta
        area = factor[:, None] * delta if straight else self.mesh.face_area
        return [area, delta, factor, straight]

    def rows(self, *, hollow: bool) -> list[np.ndarray]:
        """Compressed rows; ``hollow`` with zeros in the diagonal places."""
        data = 0.3 * self.normal(len(self.layout.indices))
        if hollow:
            data[self.layout.diagonal] = 0.0
        return [self.layout.indptr, self.layout.indices, data.astype(self.dtype)]

    def blocks(self, *, bent: bool) -> np.ndarray:
        """(n, 6) positive definite blocks; every other one, or all, diagonal."""
        block = np.hstack([2.0 + self.positive(self.n, 3), self.r.uniform(-1, 1, (self.n, 3))])
        block[::2 if bent else 1, 3:] = 0.0
        return block

    def swept(self) -> list[np.ndarray]:
        inverse = 0.2 * self.blocks(bent=True)
        return [*self.rows(hollow=True), inverse.astype(self.dtype),
                self.normal(self.n, 3).astype(self.dtype)]


MAKERS: dict[str, Callable[[Maker], Arguments]] = {}


def maker(function: Callable[[Maker], Arguments]) -> Callable:
    MAKERS[function.__name__] = function
    return function


def arguments(name: str, mesh: Mesh, *, dtype: type = np.float64, seed: int = 0,
              variant: int = 0) -> Arguments:
    """Random arguments of a kernel on a mesh; the bits of ``variant`` switch its flags."""
    return MAKERS[name](Maker(mesh, dtype, seed + variant, variant))


@maker
def weighted_gradient(m, width=2):
    return [m.around[0], m.others(), m.normal(len(m.around[1]), 3), m.normal(m.n, width),
            m.normal(m.edges, width), unset(m.n, width, 3)]


@maker
def vector_gradient(m):
    return weighted_gradient(m, width=3)


@maker
def blend_with_neighbours(m):
    return [m.around[0], m.others(), m.r.choice([0.0, 0.5, 1.0], m.n), m.normal(m.n, 3),
            unset(m.n, 3)]


@maker
def linear_face_values(m):
    return [*m.ends, m.skew(m.flags[0]), m.normal(m.n), m.normal(m.n, 3), unset(m.inside)]


@maker
def surface_sum(m):
    return [*m.around, m.normal(m.mesh.n_faces), m.mesh.face_area, m.mesh.cell_volume,
            unset(m.n, 3)]


@maker
def transport_faces(m):
    mixed, no_skew, straight, full_stress = m.flags
    shares = (0.25, 0.75) if mixed else (1.0, 0.0)
    return [*m.ends, m.skew(no_skew), *m.geometry(straight), m.normal(m.mesh.n_faces),
            m.positive(m.mesh.n_faces), m.normal(m.n, 3), m.gradient(), *shares, full_stress,
            unset(m.inside, 2), unset(m.inside, 3)]


@maker
def fill_rows(m):
    width = 1 if m.flags[0] else 3
    return [*m.around, m.layout.entry, m.layout.diagonal, m.inside, m.normal(m.inside, 2),
            m.normal(m.inside, width), unset(len(m.layout.indices)), unset(m.n), unset(m.n, width)]


@maker
def fill_symmetric(m):
    return [*m.around[:2], m.layout.entry, m.layout.diagonal, m.inside, m.normal(m.inside),
            m.normal(m.edges), unset(len(m.layout.indices))]


@maker
def face_coefficients(m):
    return [*m.ends, m.normal(m.n), m.normal(m.mesh.n_faces), 1.3, unset(m.inside)]


@maker
def momentum_face_flux(m):
    no_skew, straight, no_drop, no_memory = m.flags
    drop, memory = (m.normal(0 if absent else m.mesh.n_faces) for absent in (no_drop, no_memory))
    return [*m.ends, m.skew(no_skew), *m.geometry(straight), 1.3, m.normal(m.n, 3), m.gradient(),
            m.normal(m.n, 3), m.normal(m.n), drop, m.positive(m.n), memory,
            unset(m.mesh.n_faces)[:m.inside]]


@maker
def pressure_fluxes(m):
    straight, at_rest = m.flags[:2]
    return [*m.ends, *m.geometry(straight), 1.3, m.positive(m.inside),
            m.normal(0 if at_rest else m.n), m.normal(m.n, 3), m.normal(m.n), unset(m.inside)]


@maker
def flux_defects(m):
    return [*m.ends, m.skew(m.flags[0]), m.mesh.face_area, m.normal(m.n, 3), m.gradient(), 1.3,
            m.normal(m.mesh.n_faces), unset(m.inside)]


@maker
def memory_factors(m):
    return [*m.ends, m.positive(m.n), m.positive(m.n), unset(m.inside)]


@maker
def net_outflow(m):
    return [*m.around, m.normal(m.mesh.n_faces), unset(m.n)]


@maker
def coefficient_sums(m):
    return [*m.around[:2], m.inside, m.normal(m.inside), m.normal(m.edges), unset(m.n)]


@maker
def correct_flux(m):
    return [*m.ends[:2], m.normal(m.inside), m.normal(m.n), m.normal(m.mesh.n_faces)[:m.inside]]


@maker
def subtract_scaled(m):
    return [m.normal(m.n, 3), m.normal(m.n), m.normal(m.n, 3), unset(m.n, 3)]


@maker
def extend_vectors(m):
    return [m.mesh.left[m.inside:], m.normal(m.n, 3), m.gradient(), m.normal(m.edges, 3),
            unset(m.edges, 3)]


@maker
def extend_scalars(m):
    return [m.mesh.left[m.inside:], m.normal(m.n), m.normal(m.n, 3), m.normal(m.edges, 3),
            unset(m.edges)]


@maker
def add_to_rows(m):
    width = 6 if m.flags[0] else 3
    return [m.mesh.left[m.inside:], m.normal(m.edges, width), m.normal(m.n, width)]


@maker
def momentum_residual(m):
    gone = m.flags[0]
    return [*m.rows(hollow=True), m.normal(m.n, 6), m.normal(m.n, 3), m.normal(m.n, 3),
            m.positive(0 if gone else m.n), m.normal(0 if gone else m.n, 3), unset(m.n, 3)]


@maker
def invert_blocks(m):
    return [m.blocks(bent=m.flags[0]), m.positive(m.n), unset(m.n, 6, dtype=m.dtype)]


@maker
def sweep(m):
    some = m.r.permutation(m.n).astype(np.int32)[:m.n if m.flags[0] else m.n // 2]
    return [*m.swept(), some, m.flags[0], m.normal(m.n, 3).astype(m.dtype)]


@maker
def sweep_pieces(m):
    odd, backward = m.flags[:2]
    return [*m.swept(), m.layout.pieces, int(odd), backward, m.normal(m.n, 3).astype(m.dtype)]


@maker
def absolute_sums(m):
    return [m.normal(m.n, 3), m.normal(0 if m.flags[0] else m.n), unset(kernels_solving.CHUNKS)]


@maker
def square_sums(m):
    return [m.normal(m.n, 3), m.normal(m.n), unset(kernels_solving.CHUNKS)]


@maker
def product(m):
    return [*m.rows(hollow=False), m.vector(), unset(m.n, dtype=m.dtype)]


@maker
def residual_product(m):
    return [*m.rows(hollow=False), m.vector(), m.vector(), unset(m.n, dtype=m.dtype)]


@maker
def product_add(m):
    return [*m.rows(hollow=False), m.vector(), m.vector()]


@maker
def chebyshev_start(m):
    return [m.positive(m.n).astype(m.dtype), m.vector(), m.dtype(0.7),
            *(unset(m.n, dtype=m.dtype) for _ in range(2))]


@maker
def chebyshev_step(m):
    return [*m.rows(hollow=False), m.positive(m.n).astype(m.dtype), m.vector(), m.dtype(0.4),
            m.dtype(0.8), m.vector(), m.vector(), unset(m.n, dtype=m.dtype)]


@maker
def product_dot(m):
    parts = 7 if m.flags[0] else kernels_solving.CHUNKS
    return [*m.rows(hollow=False), m.vector(), unset(m.n), unset(parts)]


@maker
def advance_solution(m):
    return [m.vector(), m.vector(), m.vector(), m.vector(), 0.7, unset(kernels_solving.CHUNKS)]


@maker
def next_direction(m):
    return [m.vector(), 0.6, m.vector()]


def values_and_range(m: Maker) -> tuple[np.ndarray, ...]:
    """Values with a range around each, now and then of no width."""
    values = m.normal(m.n, 3)
    widths = [m.r.uniform(0.0, 0.5, (m.n, 3)) * (m.r.random((m.n, 3)) < 0.8) for _ in range(2)]
    return values, values - widths[0], values + widths[1]


@maker
def neighbour_range(m):
    return [m.around[0], m.mesh.across, m.r.random(m.edges) < 0.5, m.normal(m.n, 3),
            m.normal(m.edges, 3), unset(m.n, 3), unset(m.n, 3)]


@maker
def widened_range(m):
    return [m.around[0], m.mesh.across, *values_and_range(m)[1:], unset(m.n, 3), unset(m.n, 3)]


@maker
def limit_gradient(m):
    mesh = m.mesh
    return [*m.around, mesh.across, mesh.left, mesh.face_centre, mesh.cell_centre, mesh.delta,
            *values_and_range(m), m.flags[0], m.gradient()]


@maker
def limited_reach(m):
    mesh, (values, low, high) = m.mesh, values_and_range(m)
    return [*m.ends[:2], mesh.face_centre, mesh.cell_centre, mesh.delta, m.normal(mesh.n_faces),
            values, m.gradient(), low, high, unset(m.inside, 3)]
