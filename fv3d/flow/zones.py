"""What zones that resist the flow do to the equations.

In a zone the momentum equation carries ``r u`` [Pa/m], ``r = linear + quadratic density/2 |u|``.
The pressure is continuous, but its slope bends sharply at a *seam*, a face where the resistance
begins or ends: a straight line between the cells beside it would drive the fluid next to a dense
zone wildly.  So

* the pressure on a seam is extended from the side of less resistance alone, as on a wall; for the
  other side it is a given value, as on an outlet.  Where the resistance is weak against the
  inertia of a cell it is interpolated, and raised by ``weight (1 - weight) (delta . n) jump``,
  where ``jump`` is what the resistance on the right takes more than that on the left [Pa/m];
* gradients of the pressure, and of its correction, never mix both sides of a seam;
* the flux through a seam follows both slopes along the path from cell centre to face to cell
  centre, and yields as the mean resistance of that path.

A straight flow through a zone is then met exactly, whatever its resistance, and the fluid beside
sees of a dense zone the flux only.  Own work; the mean of the reciprocals on both sides of a face:
Patankar, S. V. (1980), Numerical Heat Transfer and Fluid Flow, section 4.2-3.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
import scipy.sparse as sparse

from ..errors import CaseError
from ..mesh.mesh import Mesh
from ..operators.gradient import BoundaryKnowledge, GradientMethod, GradientOperator
from .resistance import Resistance, resisting_cells

if TYPE_CHECKING:
    from .equations import PressureFields
    from .problem import Problem, State

WEAK, DENSE = 0.1, 0.5  # resistance over inertia of a cell between which seams change treatment
ALIKE = 10.0  # ratio of both sides above which the yielding one counts still less in a flux
MOST_PARTS = 100  # parts of the domain whose pressure levels are solved for apart


@dataclass(frozen=True, eq=False)
class Drag:
    """Resistance at one velocity, (n_cells, 3) [kg/(m^3 s)].

    ``secant`` times velocity is the pressure lost per length; ``tangent`` is how that grows with
    each component of the velocity.
    """

    secant: np.ndarray
    tangent: np.ndarray


@dataclass(frozen=True, eq=False)
class Ease:
    """Velocity per pressure slope, volume over diagonal and resistance [m^3 s/kg].

    ``cell`` (n_cells, 3); along the normal of each face of the zones: ``left``, ``right`` and
    their mean along the path ``face`` (t,), on boundary faces ``edge`` (b,).  ``fluid`` (n_cells,)
    is the share of the fluid in the diagonal.
    """

    cell: np.ndarray
    left: np.ndarray
    right: np.ndarray
    face: np.ndarray
    edge: np.ndarray
    fluid: np.ndarray


@dataclass(frozen=True, eq=False)
class SeamGradient:
    """Gradient of a pressure that bends at seams; called as a GradientOperator is.

    Attributes
    ----------
    operator : gradient on the mesh cut open along the seams
    yielding : (s,) cell of less resistance beside each seam
    reach : (s, 3) from its centre to the seam's [m]
    passes : int
        Resistances that stand one behind the other, from the least to the largest.
    resisting, offset, weight : (s,), (s, 3) [m], (s,)
        The other cell; seam's centre from the line between both; linear weight of the yielding one.
    dense : (s,) share of the value extended from one side, None for 1
    lift : (s,) [Pa] what the bend adds to the interpolated value
    """

    operator: GradientOperator
    yielding: np.ndarray
    reach: np.ndarray
    passes: int
    resisting: np.ndarray
    offset: np.ndarray
    weight: np.ndarray
    dense: np.ndarray | None = None
    lift: np.ndarray | float = 0.0

    def __call__(self, cell_values: np.ndarray, boundary_values: np.ndarray) -> np.ndarray:
        """Gradient (n_cells, 3) of a scalar (n_cells,)."""
        count, at_seams = len(boundary_values), len(self.yielding)
        known = np.concatenate([boundary_values, np.zeros(2 * at_seams)])
        gradient = self.operator(cell_values, known)
        for _ in range(self.passes):
            known[count + at_seams:] = self.values(cell_values, gradient)
            gradient = self.operator(cell_values, known)
        return gradient

    def values(self, cell_values: np.ndarray, gradient: np.ndarray) -> np.ndarray:
        """(s,) values on the seams."""
        cell, w = self.yielding, self.weight
        extended = cell_values[cell] + np.einsum("fi,fi->f", gradient[cell], self.reach)
        if self.dense is None:
            return np.asarray(extended)
        between = w * cell_values[cell] + (1.0 - w) * cell_values[self.resisting] + self.lift
        between += np.einsum("fi,fi->f", gradient[cell], self.offset)
        return np.asarray(self.dense * extended + (1.0 - self.dense) * between)


@dataclass(frozen=True, eq=False)
class Zones:
    """Resistances of a case made ready on its mesh.

    Attributes
    ----------
    cells : mapping of name to the cells of the zone
    linear : (n_cells, 3) [Pa s/m^2], quadratic : (n_cells, 3) [kg/m^4], density / 2 included
    faces : (t,) internal faces beside cells of the zones
    bent : (t,) bool, those that are seams
    edges : (b,) boundary faces of such cells, counted from the first boundary face
    parts : (n_cells,) part of the domain between seams each cell belongs to; -1 in small ones
    plain, bending : gradient of the pressure without and with seams
    """

    mesh: Mesh
    density: float
    cells: dict[str, np.ndarray]
    linear: np.ndarray
    quadratic: np.ndarray
    faces: np.ndarray
    bent: np.ndarray
    edges: np.ndarray
    parts: np.ndarray
    plain: GradientOperator
    bending: SeamGradient

    @property
    def seams(self) -> np.ndarray:
        """(s,) faces where a resistance begins or ends."""
        return self.faces[self.bent]

    def drag(self, velocity: np.ndarray) -> Drag:
        """Resistance at a velocity (n_cells, 3) [m/s]."""
        speed = np.sqrt(np.einsum("ij,ij->i", velocity, velocity))[:, None]
        secant = self.linear + self.quadratic * speed
        steeper = velocity ** 2 / np.maximum(speed, 1e-300)
        return Drag(secant, secant + self.quadratic * steeper)

    def ease(self, diagonal: np.ndarray, drag: Drag) -> Ease:
        """Velocity per pressure slope for a diagonal (n_cells,) [kg/s] without resistance."""
        mesh, f, b = self.mesh, self.faces, self.edges + self.mesh.n_internal
        volume = mesh.cell_volume[:, None]
        cell = volume / (diagonal[:, None] + volume * drag.tangent)
        square = mesh.face_normal[f] ** 2
        left = np.einsum("fi,fi->f", square, cell[mesh.left[f]])
        right = np.einsum("fi,fi->f", square, cell[mesh.right[f]])
        face = 1.0 / ((1.0 - mesh.weight[f]) / left + mesh.weight[f] / right)
        edge = np.einsum("fi,fi->f", mesh.face_normal[b] ** 2, cell[mesh.left[b]])
        return Ease(cell, left, right, face, edge, cell.min(axis=1) * diagonal / mesh.cell_volume)

    def flux(self, velocity: np.ndarray, gradient: np.ndarray, fields: PressureFields,
             net: np.ndarray, drop: np.ndarray, ease: Ease, orthogonal: np.ndarray) -> np.ndarray:
        """(t,) mass flux through ``faces`` by momentum interpolation [kg/s].

        At seams the velocity is that of the less yielding side, the more so the more they differ,
        and slopes are followed along the path.  The slope of the velocity in dense cells, which
        the fluid beside them would spoil, counts by the share of the fluid.  ``net`` (n_cells, 3)
        is the pressure slope without force, ``drop`` (n_faces,) the force along ``delta`` [Pa].
        """
        mesh, f = self.mesh, self.faces
        left, right, w, delta = mesh.left[f], mesh.right[f], mesh.weight[f], mesh.delta[f]
        ratio = ease.right / ease.left
        one = w * np.clip(ALIKE * ratio, 0.0, 1.0) * ratio  # small where the left side yields more
        other = (1.0 - w) * np.clip(ALIKE / ratio, 0.0, 1.0)
        share = np.where(self.bent, one / (one + other), w)
        path = np.where(self.bent, 1.0 - w, w)
        offset = mesh.skew_offset[f]
        through = np.zeros(len(f))
        smooth = np.zeros(len(f))
        for part, way, cell in ((share, path, left), (1.0 - share, 1.0 - path, right)):
            carried = velocity[cell] + ease.fluid[cell, None] * np.einsum(
                "fij,fj->fi", gradient[cell], offset)
            through += part * np.einsum("fi,fi->f", carried, mesh.face_area[f])
            smooth += way * np.einsum("fi,fi->f", net[cell], delta)
        jump = fields.cell[right] - fields.cell[left] - drop[f]
        return self.density * (through + ease.face * orthogonal[f] * (smooth - jump))

    def bend(self, velocity: np.ndarray, mass_flux: np.ndarray, viscosity: float) -> SeamGradient:
        """Gradient of the pressure at a velocity (n_cells, 3) and mass flux (n_faces,)."""
        mesh, f = self.mesh, self.faces[self.bent]
        normal, w = mesh.face_normal[f], mesh.weight[f]
        through = mass_flux[f] / (self.density * mesh.face_area_magnitude[f])
        apart = np.einsum("fi,fi->f", mesh.delta[f], normal)
        jump, ratio = np.zeros(len(f)), np.zeros(len(f))
        for sign, side in ((-1.0, mesh.left), (1.0, mesh.right)):
            cell = side[f]
            u = velocity[cell]
            u = u + (through - np.einsum("fi,fi->f", u, normal))[:, None] * normal
            speed = np.sqrt(np.einsum("fi,fi->f", u, u))
            loss = self.linear[cell] + self.quadratic[cell] * speed[:, None]
            jump += sign * np.einsum("fi,fi,fi->f", normal, loss, u)
            ratio = np.maximum(ratio, np.einsum("fi,fi->f", normal ** 2, loss) * apart
                               / (self.density * speed + 2.0 * viscosity / apart))
        dense = np.clip((ratio - WEAK) / (DENSE - WEAK), 0.0, 1.0)
        return replace(self.bending, dense=dense, lift=w * (1.0 - w) * apart * jump)

    def force(self, velocity: np.ndarray) -> dict[str, np.ndarray]:
        """(3,) force of each zone on the fluid [N]."""
        lost = self.drag(velocity).secant * velocity * self.mesh.cell_volume[:, None]
        return {name: -lost[cells].sum(axis=0) for name, cells in self.cells.items()}


def zones_of(mesh: Mesh, density: float, resistances: Mapping[str, Resistance],
             plain: GradientOperator, *, method: GradientMethod,
             known: BoundaryKnowledge) -> Zones | None:
    """Resistances made ready; None where there are none.

    ``plain`` is the gradient of the pressure without seams, by ``method`` with what is ``known``.
    """
    cells = resisting_cells(mesh, resistances)
    if not cells:
        return None
    linear, quadratic = np.zeros((mesh.n_cells, 3)), np.zeros((mesh.n_cells, 3))
    inside = np.zeros(mesh.n_cells, bool)
    for name, law in resistances.items():
        linear[cells[name]] = law.linear
        quadratic[cells[name]] = 0.5 * density * np.array(law.quadratic)
        inside[cells[name]] = True
    n = mesh.n_internal
    faces = np.flatnonzero(inside[mesh.left[:n]] | inside[mesh.right])
    both = np.concatenate([linear, quadratic], axis=1)
    bent = np.any(both[mesh.left[faces]] != both[mesh.right[faces]], axis=1)
    bending = _bending(mesh, faces[bent], linear + quadratic, method, known)
    return Zones(mesh, density, cells, linear, quadratic, faces, bent,
                 np.flatnonzero(inside[mesh.left[n:]]), _parts(mesh, faces[bent]), plain, bending)


def _parts(mesh: Mesh, seams: np.ndarray) -> np.ndarray:
    """Connected cells between seams, numbered from the largest group."""
    from scipy.sparse.csgraph import connected_components
    links = np.delete(np.arange(mesh.n_internal), seams)
    graph = sparse.csr_matrix((np.ones(len(links)), (mesh.left[links], mesh.right[links])),
                              shape=(mesh.n_cells, mesh.n_cells))
    count, label = connected_components(graph, directed=False)
    order = np.argsort(-np.bincount(label, minlength=count), kind="stable")
    rank = np.empty(count, dtype=np.int64)
    rank[order] = np.arange(count)
    return np.where(rank[label] < MOST_PARTS, rank[label], -1)


def _bending(mesh: Mesh, seams: np.ndarray, size: np.ndarray, method: GradientMethod,
             known: BoundaryKnowledge) -> SeamGradient:
    """``size`` (n_cells, 3) tells which side of a seam resists less."""
    normal = mesh.face_normal[seams]
    across = [np.einsum("fi,fi->f", normal ** 2, size[cell[seams]])
              for cell in (mesh.left, mesh.right)]
    leftward = across[0] <= across[1]
    yielding = np.where(leftward, mesh.left[seams], mesh.right[seams]).astype(np.int32)
    resisting = np.where(leftward, mesh.right[seams], mesh.left[seams]).astype(np.int32)
    outward = np.where(leftward, 1.0, -1.0)[:, None] * mesh.face_area[seams]
    still = np.zeros(len(seams), bool)
    whole = BoundaryKnowledge(np.concatenate([known.valued, still, ~still]),
                              np.concatenate([known.flat, still, still]))
    levels = len(np.unique(size[np.concatenate([yielding, resisting])], axis=0))
    opened = _cut_open(mesh, seams, yielding, resisting, outward)
    return SeamGradient(method.weights(opened, whole),
                        yielding, _reach(mesh, seams, yielding),
                        max(levels - 1, 0), resisting, mesh.skew_offset[seams],
                        np.where(leftward, mesh.weight[seams], 1.0 - mesh.weight[seams]))


def _reach(mesh: Mesh, faces: np.ndarray, cells: np.ndarray) -> np.ndarray:
    """(f, 3) from one cell of each face to its centre; joined faces lie at their left cells."""
    arm = mesh.face_centre[faces] - mesh.cell_centre[mesh.left[faces]]
    return np.where((cells == mesh.left[faces])[:, None], arm, arm - mesh.delta[faces])


def _cut_open(mesh: Mesh, seams: np.ndarray, yielding: np.ndarray, resisting: np.ndarray,
              outward: np.ndarray) -> Mesh:
    """The mesh with two boundary faces in place of each seam, after all others.

    ``outward`` (s, 3) is the area of the first, that of the yielding side.
    """
    n = mesh.n_internal
    kept = np.delete(np.arange(mesh.n_faces), seams)
    twice = np.concatenate([seams, seams])
    owners = np.concatenate([yielding, resisting])
    reach, warp = _reach(mesh, twice, owners), mesh.warp
    if mesh.warped:
        warp = np.concatenate([warp[kept], warp[twice]])
    return replace(
        mesh, face_points=np.concatenate([mesh.face_points[kept], mesh.face_points[twice]]),
        left=np.concatenate([mesh.left[kept], owners]), right=np.delete(mesh.right, seams),
        face_area=np.concatenate([mesh.face_area[kept], outward, -outward]),
        face_centre=np.concatenate([mesh.face_centre[kept], mesh.cell_centre[owners] + reach]),
        delta=np.concatenate([mesh.delta[kept], reach]),
        weight=np.delete(mesh.weight, seams), warp=warp,
        boundaries={"all": slice(n - len(seams), len(kept) + len(twice))}, joined={})


def bent(problem: Problem, state: State) -> Problem:
    """The problem with the bends of the pressure as the state has them."""
    zones = problem.zones
    if zones is None:
        return problem
    bending = zones.bend(state.velocity, state.mass_flux, problem.case.fluid.viscosity)
    return replace(problem, zones=replace(zones, bending=bending),
                   pressure_gradient=replace(bending, lift=0.0))


def without_zones(problem: Problem) -> Problem:
    """The problem without its resistances."""
    zones = problem.zones
    return problem if zones is None else replace(problem, zones=None,
                                                 pressure_gradient=zones.plain)


def refuse_resistances(resistances: Any) -> None:
    """Resistances are for steady runs.

    Raises
    ------
    CaseError
    """
    if resistances:
        raise CaseError("A run in time takes no resistances.", where="solve_transient(case)",
                        got=", ".join(map(repr, resistances)),
                        remedy="Use solve_steady, or a case without resistances=.")
