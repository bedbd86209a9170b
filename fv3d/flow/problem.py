"""Case (what is asked), Problem (the case made ready on its mesh) and State (the fields)."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np

from ..errors import BoundaryError, CaseError
from ..mesh.mesh import Mesh
from ..operators import assembly
from ..operators.gradient import BoundaryKnowledge, GradientOperator
from ..operators.limiters import LimitedOperator, unlimited
from .boundary import Boundary, BoundaryTable, boundary_table
from .fluid import Fluid
from .given_flux import balanced_flux, warn_of_suction
from .inlets import warn_of_beyond
from .numerics import Numerics
from .outlets import OutletFlow, outlet_flows
from .periodic import Periodic, joined
from .resistance import Resistance, resisting_cells
from .zones import SeamGradient, Zones, zones_of

if TYPE_CHECKING:
    from .turbulence import SubgridModel

BodyForce = Any


@dataclass(frozen=True, eq=False)
class Case:
    """What is to be computed: mesh, fluid, boundaries, body force, numerical methods.

    Parameters
    ----------
    mesh : Mesh
    fluid : Fluid
    boundaries : mapping of boundary name to condition
        Every boundary of the mesh exactly once.
    body_force : vector or function of points (n, 3) -> (n, 3), optional
        Force per mass [m/s^2].
    body_force_factor : function of time [s], optional
        What the body force is multiplied with in a run in time.
    viscosity : (n_cells,) array, optional
        Viscosity of each cell [Pa s] where it differs from the fluid's.
    numerics : Numerics
    turbulence : subgrid model such as WALE, optional
        Viscosity of the eddies that the mesh does not resolve, in runs in time.
    resistances : mapping of zone name to Resistance, optional
        Screens, honeycombs and porous blocks, in steady runs.
    periodic : mapping, made by the case
        Its periodic conditions, taken out of ``boundaries``; their pairs are joined in ``mesh``.

    Raises
    ------
    BoundaryError, CaseError, MeshError
        A boundary missing, misspelt or not a condition; a value of wrong shape or not finite.
    """

    mesh: Mesh
    fluid: Fluid
    boundaries: Mapping[str, Boundary] = field(kw_only=True)
    body_force: BodyForce = field(default=None, kw_only=True)
    body_force_factor: Callable[[float], float] | None = field(default=None, kw_only=True)
    viscosity: np.ndarray | None = field(default=None, kw_only=True)
    numerics: Numerics = field(default_factory=Numerics, kw_only=True)
    turbulence: SubgridModel | None = field(default=None, kw_only=True)
    resistances: Mapping[str, Resistance] = field(default_factory=dict, kw_only=True)
    periodic: Mapping[str, Periodic] = field(default_factory=dict, kw_only=True, repr=False)

    def __post_init__(self) -> None:
        if not isinstance(self.mesh, Mesh):
            raise CaseError("A case needs a mesh.", where="Case(mesh, fluid)",
                            got=type(self.mesh).__name__, remedy="Read one with read_mesh.")
        if not isinstance(self.fluid, Fluid):
            raise CaseError("A case needs a fluid.", where="Case(mesh, fluid)",
                            got=type(self.fluid).__name__,
                            remedy="Give Fluid(density=, viscosity=), moist_air(...) or "
                                   "water(...).")
        if not isinstance(self.numerics, Numerics):
            raise CaseError("The numerical methods of a case are one Numerics object.",
                            where="Case(numerics=)", got=repr(self.numerics),
                            remedy="Give Numerics(coupling=SIMPLE()), say.")
        if not (self.body_force_factor is None or callable(self.body_force_factor)):
            raise CaseError("The factor of the body force is a function of time.",
                            where="Case(body_force_factor=)", got=repr(self.body_force_factor),
                            remedy="Give a function of seconds that returns a number.")
        mesh, boundaries, periodic = joined(self.mesh, self.boundaries)
        for name, value in (("mesh", mesh), ("boundaries", boundaries),
                            ("periodic", {**self.periodic, **periodic})):
            object.__setattr__(self, name, value)
        if self.turbulence is not None and (isinstance(self.turbulence, type) or not hasattr(
                self.turbulence, "viscosity")):
            raise CaseError("A turbulence model is an object of its kind.",
                            where="Case(turbulence=)", got=repr(self.turbulence),
                            remedy="Give WALE(), or leave it out for laminar flow.")
        boundary_table(self.mesh, self.boundaries)
        body_force_cells(self)
        _cell_viscosity(self)
        resisting_cells(self.mesh, self.resistances)


def body_force_cells(case: Case) -> np.ndarray | None:
    """(n_cells, 3) body force [m/s^2] at the cell centres, or None."""
    if case.body_force is None:
        return None
    centre = case.mesh.cell_centre
    value = case.body_force(centre.copy()) if callable(case.body_force) else case.body_force
    try:
        value = np.asarray(value, dtype=float)
        value = np.broadcast_to(value, centre.shape) if value.ndim == 1 else value
    except (TypeError, ValueError):
        value = np.empty(0)
    if value.shape != centre.shape or not np.all(np.isfinite(value)):
        raise CaseError("The body force must be a finite vector, or a function of points giving "
                        "one finite vector per point.", where="Case(body_force=)",
                        got=f"shape {value.shape}", remedy="Return an (n, 3) array [m/s^2].")
    return np.ascontiguousarray(value)


def _cell_viscosity(case: Case) -> np.ndarray:
    if case.viscosity is None:
        return np.full(case.mesh.n_cells, case.fluid.viscosity)
    try:
        value = np.asarray(case.viscosity, dtype=float)
    except (TypeError, ValueError):
        value = np.empty(0)
    if value.shape != (case.mesh.n_cells,) or not np.all(np.isfinite(value) & (value > 0)):
        raise CaseError("The viscosity field needs one positive value per cell.",
                        where="Case(viscosity=)", got=f"shape {value.shape}",
                        remedy="Give an (n_cells,) array [Pa s] in the mesh's cell numbering.")
    return value


@dataclass(frozen=True, eq=False)
class State:
    """The fields of one iteration.

    Attributes
    ----------
    velocity : (n_cells, 3) [m/s], pressure : (n_cells,) [Pa]
    mass_flux : (n_faces,) [kg/s], left to right, out of the domain on boundaries
    boundary_velocity : (n_boundary, 3) [m/s]
    sources : tuple of the states of the case's sources
    iteration : int
    levels : tuple of float, pressures of the outlets of given flow [Pa]
    """

    velocity: np.ndarray
    pressure: np.ndarray
    mass_flux: np.ndarray
    boundary_velocity: np.ndarray
    sources: tuple[Any, ...] = ()
    iteration: int = 0
    levels: tuple[float, ...] = ()
    time: float = float("nan")
    older: Any = None


@dataclass(frozen=True, eq=False)
class Force:
    """A body force in the form the equations use, see :func:`balanced_force`.

    ``cell`` (n_cells, 3) [m/s^2]; ``drop`` (n_faces,) [m^2/s^2] the force along each face's delta.
    """

    cell: np.ndarray
    drop: np.ndarray


class Source(Protocol):
    """Something that adds force to the momentum equation and may solve for its strength."""

    def start(self, problem: Problem, state: State, earlier: Any) -> Any:
        """Own state before the first iteration; ``earlier`` that of a start run, or None."""
        ...

    def force(self, state: Any) -> Force:
        """The force it exerts now."""
        ...

    def correct(self, own: Any, problem: Problem, state: State, change: np.ndarray,
                relax: Callable[..., Any]) -> Correction:
        """What becomes of the source and of the velocity change (n_cells, 3) of an iteration.

        ``relax`` is the inexact momentum solve: right-hand side [N] to velocity change, by
        ``relax.count`` sweeps.
        """
        ...


@dataclass(frozen=True, eq=False)
class Correction:
    """A source's part in an iteration.

    Attributes
    ----------
    own : its new state
    change : (n_cells, 3) the velocity change with its correction [m/s]
    misfit : misfit of the state before the iteration, over its scale
    pressure : (n_cells,) pressure change that goes with the new force [Pa], or None
    """

    own: Any
    change: np.ndarray
    misfit: float = 0.0
    pressure: np.ndarray | None = None


@dataclass(frozen=True, eq=False)
class Problem:
    """A case made ready: operators, boundary table, coefficients that never change.

    Attributes
    ----------
    orthogonal : (n_faces,) [m] over-relaxed share of the normal difference
    foot : (n_boundary, 3) [m] cell centre to the foot of the face centre's normal
    velocity_gradient, pressure_gradient : GradientOperator, the first limited where asked
    viscosity : (n_cells,), face_viscosity : (n_faces,) [Pa s]
    force : Force of the case's body force, or None
    closed : bool, no boundary gives the pressure
    zones : the case's resistances made ready, or None
    """

    case: Case
    table: BoundaryTable
    pattern: assembly.Pattern
    orthogonal: np.ndarray
    foot: np.ndarray
    velocity_gradient: GradientOperator | LimitedOperator
    pressure_gradient: GradientOperator | SeamGradient
    viscosity: np.ndarray
    face_viscosity: np.ndarray
    full_stress: bool
    force: Force | None
    fixed_flux: np.ndarray
    closed: bool
    sources: tuple[Source, ...] = ()
    outlets: tuple[OutletFlow, ...] = ()
    zones: Zones | None = None

    @property
    def mesh(self) -> Mesh:
        """The mesh of the case."""
        return self.case.mesh


def make_problem(case: Case, sources: tuple[Source, ...] = ()) -> Problem:
    """Prepare a case for iteration.

    Raises
    ------
    BoundaryError
        In a domain without outlet the given fluxes do not balance.
    """
    if not isinstance(case, Case):
        raise CaseError("Only a case can be solved.", where="the first argument",
                        got=type(case).__name__, remedy="Give Case(mesh, fluid, boundaries=...).")
    from .driving import drives_of
    mesh, numerics = case.mesh, case.numerics
    table = boundary_table(mesh, case.boundaries)
    inside = mesh.n_internal
    normal = mesh.face_normal[inside:]
    arm = mesh.delta[inside:]
    foot = arm - np.einsum("ij,ij->i", arm, normal)[:, None] * normal
    viscosity = _cell_viscosity(case)
    n = mesh.n_internal
    w = mesh.weight
    harmonic = 1.0 / ((1 - w) / viscosity[mesh.left[:n]] + w / viscosity[mesh.right])
    face_viscosity = np.concatenate([harmonic, viscosity[mesh.left[n:]]])
    full = numerics.full_stress if numerics.full_stress is not None \
        else bool(np.ptp(viscosity) > 0)
    known = BoundaryKnowledge(table.pressure_given, table.pressure_flat)
    fixed_flux = case.fluid.density * np.einsum("ij,ij->i", table.fixed, mesh.face_area[inside:])
    closed = not bool(table.pressure_given.any())
    warn_of_suction(mesh, fixed_flux, closed)
    warn_of_beyond(mesh, case.boundaries)
    if closed:
        fixed_flux = balanced_flux(mesh, table, fixed_flux)
    cell_force = body_force_cells(case)
    _check_symmetry(case, table, cell_force)
    method = unlimited(numerics.gradient)
    pressure_gradient = method.weights(mesh, known)
    zones = zones_of(mesh, case.fluid.density, case.resistances, pressure_gradient, method=method,
                     known=known)
    return Problem(case, table, assembly.pattern(mesh), assembly.orthogonal_factor(mesh), foot,
                   numerics.gradient.weights(mesh, BoundaryKnowledge.everywhere(mesh)),
                   pressure_gradient if zones is None else zones.bending, viscosity,
                   face_viscosity, full,
                   None if cell_force is None else balanced_force(mesh, cell_force), fixed_flux,
                   closed, (*sources, *drives_of(case)),
                   outlet_flows(mesh, case.boundaries, table, fixed_flux, case.fluid.density),
                   zones)


def _check_symmetry(case: Case, table: BoundaryTable, cell_force: np.ndarray | None) -> None:
    """A body force across a plane of symmetry is no symmetry."""
    if cell_force is None:
        return
    mesh, n = case.mesh, case.mesh.n_internal
    across = np.einsum("ij,ij->i", cell_force[mesh.left[n:]], mesh.face_normal[n:])
    across = np.where(table.pressure_flat, np.abs(across), 0.0)
    if across.max(initial=0.0) > 1e-6 * np.abs(cell_force).max(initial=0.0):
        face = int(np.argmax(across))
        raise BoundaryError("The body force points across a plane of symmetry.",
                            where=f"boundary '{mesh.boundary_of_face(n + face)}'",
                            got=f"{across[face]:.3g} m/s2 normal to it",
                            remedy="Give that boundary Slip(), which carries the pressure.")


def balanced_force(mesh: Mesh, cell_force: np.ndarray) -> Force:
    """A body force by the same operators as the pressure gradient.

    The force at a face is the linear interpolation of the cells'; integrated along ``delta`` it is
    the potential difference a pressure would have to take up, and the surface integral of these
    potentials over a cell gives the cell's force.  A uniform force is reproduced exactly, so a
    fluid at rest stays at rest.

    Parameters
    ----------
    cell_force : (n_cells, 3) [m/s^2]

    Returns
    -------
    Force
    """
    cell, drop = np.zeros((mesh.n_cells, 3)), np.zeros(mesh.n_faces)
    _add_balanced(mesh, cell_force, np.arange(mesh.n_faces), cell, drop)
    return Force(cell, drop)


def balanced_force_near(mesh: Mesh, cells: np.ndarray,
                        force: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """As :func:`balanced_force` for a force in a few cells only.

    Parameters
    ----------
    cells : (k,)
    force : (k, 3) [m/s^2]

    Returns
    -------
    touched cells (p,), their force (p, 3), touched faces (q,), their drop (q,)
    """
    offsets, around, _ = mesh.cell_faces
    faces = np.unique(np.concatenate([around[offsets[c]:offsets[c + 1]] for c in cells]))
    inner = faces[faces < mesh.n_internal]
    touched = np.unique(np.concatenate([mesh.left[faces], mesh.right[inner]]))
    whole, cell = np.zeros((mesh.n_cells, 3)), np.zeros((mesh.n_cells, 3))
    drop = np.zeros(mesh.n_faces)
    whole[cells] = force
    _add_balanced(mesh, whole, faces, cell, drop)
    return touched, cell[touched], faces, drop[faces]


def _add_balanced(mesh: Mesh, cell_force: np.ndarray, faces: np.ndarray, cell: np.ndarray,
                  drop: np.ndarray) -> None:
    inner, outer = faces[faces < mesh.n_internal], faces[faces >= mesh.n_internal]
    left, right, w = mesh.left[inner], mesh.right[inner], mesh.weight[inner, None]
    owner = mesh.left[outer]
    at_face = np.concatenate([w * cell_force[left] + (1 - w) * cell_force[right],
                              cell_force[owner]])
    order = np.concatenate([inner, outer])
    drop[order] = np.einsum("ij,ij->i", at_face, mesh.delta[order])
    warped = (np.einsum("fj,fji->fi", at_face, mesh.warp[order]) if mesh.warped
              else np.zeros_like(at_face))
    arm = mesh.face_centre[order] - mesh.cell_centre[mesh.left[order]]
    for cells, rows, sign, reach in (
            (mesh.left[order], slice(None), 1.0, arm),
            (right, slice(0, len(inner)), -1.0, arm[:len(inner)] - mesh.delta[inner])):
        potential = np.einsum("ij,ij->i", at_face[rows], reach)
        push = potential[:, None] * mesh.face_area[order[rows]]
        push = sign * (push + warped[rows]) / mesh.cell_volume[cells, None]
        np.add.at(cell, cells, push)
