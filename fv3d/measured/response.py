"""How flow and pressure answer the forces of readings, in a steady iteration.

A force is the gradient of a potential plus a part without divergence, and only that part moves
the fluid.  When the strength of a kernel changes, the pressure is changed by the potential at
once, so that the rest of the iteration has little left to project.  Potentials are solved for once
per run, roughly, answers of the momentum sweeps are renewed when the momentum equation near the
readings has changed, and both are kept where they matter: they speed the iteration up and do not
enter its fixed point.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.sparse as sparse

from ..flow.coupling import Sweeps
from ..flow.problem import Problem
from ..flow.projected import make_projection
from ..operators.kernels_places import add_dense, sweep_blocks
from .columns import Columns, columns
from .layout import Layout
from .potential import force_flux_near, free_gradient

POTENTIAL_TO = 1e-2     # residual reduction of the potentials
LEVELS = 32767          # of a potential, stored in 16 bits
KEPT_FROM = 0.05        # share of a net force's largest value below which it is dropped
WHOLE_FROM = 0.2        # the same for the whole force, whose answer only tells how wild a step is
CHANGED_FROM = 0.3      # change of a row of the momentum equation that makes an answer outdated
# Share of the potentials that is put into the pressure on meshes of other cells than hexahedra, for
# forces of single cells and for wide ones: more can diverge, less is slower (found by trial).
SHARE_OF_SINGLE, SHARE_OF_WIDE = 0.5, 0.7


@dataclass(frozen=True, eq=False)
class Pushes:
    """What a unit strength of each kernel does to fluid and pressure.

    Attributes
    ----------
    net, whole : tuples of (k, 9) float32 arrays, one for each place
        Force less the gradient of its potential, and the force itself, in cells [N].
    regions, kernels : tuples of (k,) int32 arrays
        These cells: where the fluid is moved noticeably, and the kernel's own.
    velocity : Columns
        Places of the velocity answers.
    pressure, unit : (3 n_places, n_cells) int16 and (3 n_places,) float32
        Density times potential, in units of each column [Pa].
    sampling : (3 n_places, 3 n_sampled) sparse, and ``sampled`` (n_sampled,) int32
        Interpolation to the readings from the cells it needs.
    """

    net: tuple[np.ndarray, ...]
    whole: tuple[np.ndarray, ...]
    regions: tuple[np.ndarray, ...]
    kernels: tuple[np.ndarray, ...]
    velocity: Columns
    pressure: np.ndarray
    unit: np.ndarray
    sampling: sparse.csr_matrix
    sampled: np.ndarray

    def pressure_change(self, strength: np.ndarray) -> np.ndarray:
        """(n_cells,) pressure that takes up forces of strengths (n_places, 3) [Pa]."""
        out = np.zeros(self.pressure.shape[1])
        add_dense(out, self.pressure, self.unit * strength.ravel().astype(np.float32))
        return out


def make_pushes(problem: Problem, layout: Layout, axes: np.ndarray, *,
                share: float = 1.0) -> Pushes:
    """Potentials and net forces of the kernels.

    Parameters
    ----------
    axes : (3 n_places,) bool
        Columns that may act; the others stay zero.
    share : float
        Share of each potential that is taken out of force and put into the pressure.
    """
    mesh = problem.mesh
    projection = make_projection(problem)
    density = problem.case.fluid.density
    mass = density * mesh.cell_volume
    parts: list[list[tuple[np.ndarray, np.ndarray]]] = [[], []]
    pressure, unit = np.zeros((len(axes), mesh.n_cells), dtype=np.int16), np.zeros(len(axes))
    for place in range(len(axes) // 3):
        push, whole = np.zeros((2, 3, mesh.n_cells, 3))
        for axis in np.flatnonzero(axes[3 * place:3 * place + 3]):
            column, strength = 3 * place + axis, np.zeros((len(axes) // 3, 3))
            strength[place, axis] = 1.0
            force = layout.force(strength)
            inflow = -(mesh.outflow @ force_flux_near(problem, force))
            potential = projection.potential(inflow, POTENTIAL_TO).solution
            whole[axis] = force.cell
            push[axis] = force.cell - share * free_gradient(problem, potential)
            pressure[column], unit[column] = _rounded(share * density * potential)
        for kept, field, least in zip(parts, (push, whole), (KEPT_FROM, WHOLE_FROM), strict=True):
            kept.append(_region(field, least))
    net, own = parts
    sampled = np.unique(layout.sampling.indices // 3).astype(np.int32)
    three = (3 * sampled[:, None].astype(np.int64) + np.arange(3)).ravel()
    regions, kernels = (tuple(cells for cells, _ in part) for part in (net, own))
    return Pushes(tuple(_weighted(block, mass[cells]) for cells, block in net),
                  tuple(_weighted(block, mass[cells]) for cells, block in own), regions, kernels,
                  columns(regions, [block for _, block in net]), pressure,
                  unit.astype(np.float32), layout.sampling[:, three].tocsr(), sampled)


def _rounded(column: np.ndarray) -> tuple[np.ndarray, float]:
    """A column in 16 bits, and its unit."""
    unit = max(float(np.abs(column).max()), 1e-300) / LEVELS
    return np.rint(column / unit).astype(np.int16), unit


def _region(field: np.ndarray, least: float) -> tuple[np.ndarray, np.ndarray]:
    """Cells where one of three columns (3, n_cells, 3) is worth keeping, and what is kept."""
    size = np.abs(field).max(axis=2)
    kept = np.any(size > least * size.max(axis=1)[:, None], axis=0)
    cells = np.flatnonzero(kept).astype(np.int32)
    return cells, field[:, cells].transpose(1, 2, 0).reshape(len(cells), 9)


def _weighted(block: np.ndarray, mass: np.ndarray) -> np.ndarray:
    return np.asarray(block * mass[:, None], dtype=np.float32)


@dataclass(frozen=True, eq=False)
class Response:
    """Answer of the momentum sweeps to a unit strength of each kernel.

    Attributes
    ----------
    velocity : Columns
        Answer to the net force [s].
    net, whole : (3 n_places, 3 n_places)
        Answers at the readings to the net force, and to the whole with its irrotational part.
    sweeps : int
    equation : (n,) see :func:`near_equation`
    """

    velocity: Columns
    net: np.ndarray
    whole: np.ndarray
    sweeps: int
    equation: np.ndarray

    def between(self, spread: sparse.csr_matrix, *, caution: float) -> np.ndarray:
        """(m, m) response of each component to the strength of each.

        Parameters
        ----------
        spread : (3 n_places, m) directions of the components
        caution : float
            Share of the whole response in it; where readings together resist the flow of a whole
            section, almost nothing of the net response is left, and steps without caution are wild.
        """
        answer = self.net + caution * (self.whole - self.net)
        return np.asarray(spread.T @ (spread.T @ answer.T).T)


def sweep_response(n_cells: int, pushes: Pushes, relax: Sweeps) -> Response:
    """Sweep every kernel's force over its own region."""
    n_places = len(pushes.regions)
    local = np.full(n_cells, -1, dtype=np.int32)
    answers = np.zeros((2, 3 * n_places, 3 * n_places))
    velocity = []
    for place in range(n_places):
        own = slice(3 * place, 3 * place + 3)
        for answer, region, force in ((answers[0], pushes.regions[place], pushes.net[place]),
                                      (answers[1], pushes.kernels[place], pushes.whole[place])):
            local[region] = np.arange(len(region), dtype=np.int32)
            x = swept(relax, region, local, force)
            at = local[pushes.sampled]
            seen = np.zeros((len(at), 9))
            seen[at >= 0] = x[at[at >= 0]]
            answer[:, own] = pushes.sampling @ seen.reshape(-1, 3)
            local[region] = -1
            if force is pushes.net[place]:
                velocity.append(x)
    return Response(pushes.velocity.filled(velocity), answers[0], answers[1], relax.count,
                    near_equation(pushes, relax))


def swept(relax: Sweeps, region: np.ndarray, local: np.ndarray, force: np.ndarray) -> np.ndarray:
    """(k, 9) answer of the sweeps, over a region (k,) only, to three forces there (k, 9) [N].

    ``local`` (n_cells,) is the place of each cell in the region, -1 elsewhere.
    """
    x, layout = np.zeros(force.shape, dtype=np.float32), relax.pattern
    for k in range(relax.count):
        sweep_blocks(layout.indptr, layout.indices, relax.data, relax.inverse, region, local, force,
                     k % 2 == 1, x)
    return x


def near_equation(pushes: Pushes, relax: Sweeps) -> np.ndarray:
    """(n,) momentum equation of the cells that the readings are interpolated from.

    Inverted diagonal over a neighbour's coefficient, row after row, and the diagonals [s/kg].
    """
    layout, cells = relax.pattern, pushes.sampled
    count = layout.indptr[cells + 1] - layout.indptr[cells]
    first = np.repeat(layout.indptr[cells] - np.concatenate([[0], np.cumsum(count)[:-1]]), count)
    inverse = relax.inverse[cells, 0]
    shares = relax.data[first + np.arange(count.sum())] * np.repeat(inverse, count)
    return np.concatenate([shares, inverse])


def has_changed(response: Response, equation: np.ndarray, n_cells: int) -> bool:
    """Whether the momentum equation near the readings is no longer that of a response."""
    then = response.equation
    shares = np.abs(equation[:-n_cells] - then[:-n_cells]).max(initial=0.0)
    scale = np.abs(equation[-n_cells:] / then[-n_cells:] - 1.0).max(initial=0.0)
    return bool(max(shares, scale) > CHANGED_FROM)
