"""Complete 3D flow fields from a mesh, a few readings and a coarse simulation.

The names below are in the order a script uses them.
"""

from .errors import (
    BoundaryError,
    CaseError,
    DivergenceError,
    FileError,
    Fv3dError,
    Fv3dWarning,
    MeshError,
    Outcome,
    ReadingError,
)
from .flow.boundary import Inlet, Outlet, Slip, Symmetry, Wall
from .flow.checkpoint import Checkpoint, read_checkpoint
from .flow.coarser import Agglomerated, CoarserMeshes
from .flow.developed import DevelopedProfile, developed_profile
from .flow.driving import pressure_drop
from .flow.fluid import Fluid, moist_air, water
from .flow.inlets import InletTable
from .flow.monitors import FlowRateMonitor, ForceMonitor, PointMonitor
from .flow.numerics import SIMPLE, SIMPLEC, GlobalStep, LocalStep, Numerics
from .flow.outlets import FlowOutlet
from .flow.periodic import Periodic
from .flow.problem import Case
from .flow.resistance import Resistance
from .flow.run import Run
from .flow.scalar import ScalarField, solve_scalar
from .flow.scalar_boundary import ScalarFlux, ScalarValue
from .flow.statistics import FieldStatistics, MeanMonitor, PhaseAverage, PhaseMonitor, mean_run
from .flow.steady import iterate, solve_pseudo_transient, solve_steady
from .flow.step_size import CourantStep
from .flow.transient import solve_transient
from .flow.turbulence import WALE
from .measured.compare import Comparison, compare
from .measured.compare_time import TimedComparison, compare_in_time
from .measured.feedback import Feedback
from .measured.inlet import inlet_table
from .measured.readings import Readings, observe, read_readings
from .measured.watched import ReadingMonitor
from .mesh.generate import box, mixed_box, pyramid_box, skewed, wedge_box
from .mesh.generate_channel import channel_with_block, channel_with_cylinder
from .mesh.generate_duct import backward_step, pipe
from .mesh.generate_nozzle import nozzle
from .mesh.grading import OneSided, Spacing, TwoSided, Uniform
from .mesh.mesh import Mesh, build_mesh
from .mesh.periodic import join_periodic
from .mesh.quality import check_mesh, quality
from .mesh.read import read_mesh
from .mesh.surfaces import boundary_map
from .mesh.wall_distance import wall_distance
from .mesh.write import write_mesh
from .operators.compiling import get_threads, set_threads
from .operators.fluxes import Blended, Central, LimitedUpwind, SecondOrderUpwind, Upwind
from .operators.gradient import GreenGauss, LeastSquares
from .operators.limiters import BarthJespersen, MichalakOllivierGooch
from .operators.linear import ByAnisotropy, Classical, SmoothedAggregation
from .results.coefficients import ForceCoefficients, Reference, force_coefficients
from .results.diagnostics import BoundaryForce, MomentumBudget, force, momentum_budget
from .results.files import write_history, write_readings, write_vtk
from .results.flow_rates import FlowSplit, flow_rate, flow_split
from .results.force_budget import ForceBudget, force_budget
from .results.lines import plot_history, plot_series
from .results.pictures import picture, picture_readings
from .results.profiles import Profile, profile
from .results.series import VtkSeries, frame_strip
from .results.walls import Reversals, shear_reversals, wall_shear, write_surface
from .signals import (
    Estimate,
    dominant_frequency,
    lag,
    mean_value,
    phase,
    settling_time,
    strouhal_number,
)

__all__ = [
    "SIMPLE", "SIMPLEC", "WALE", "Agglomerated", "BarthJespersen", "Blended", "BoundaryError",
    "BoundaryForce", "ByAnisotropy", "Case", "CaseError", "Central", "Checkpoint", "Classical",
    "CoarserMeshes", "Comparison", "CourantStep", "DevelopedProfile", "DivergenceError", "Estimate",
    "Feedback", "FieldStatistics", "FileError", "FlowOutlet", "FlowRateMonitor", "FlowSplit",
    "Fluid", "ForceBudget", "ForceCoefficients", "ForceMonitor", "Fv3dError", "Fv3dWarning",
    "GlobalStep", "GreenGauss", "Inlet", "InletTable", "LeastSquares", "LimitedUpwind", "LocalStep",
    "MeanMonitor", "Mesh", "MeshError", "MichalakOllivierGooch", "MomentumBudget", "Numerics",
    "OneSided", "Outcome", "Outlet", "Periodic", "PhaseAverage", "PhaseMonitor", "PointMonitor",
    "Profile", "ReadingError", "ReadingMonitor", "Readings", "Reference", "Resistance", "Reversals",
    "Run", "ScalarField", "ScalarFlux", "ScalarValue", "SecondOrderUpwind", "Slip",
    "SmoothedAggregation", "Spacing", "Symmetry", "TimedComparison", "TwoSided", "Uniform",
    "Upwind", "VtkSeries", "Wall", "backward_step", "boundary_map", "box", "build_mesh",
    "channel_with_block", "channel_with_cylinder", "check_mesh", "compare", "compare_in_time",
    "developed_profile", "dominant_frequency", "flow_rate", "flow_split", "force", "force_budget",
    "force_coefficients", "frame_strip", "get_threads", "inlet_table", "iterate", "join_periodic",
    "lag", "mean_run", "mean_value", "mixed_box", "moist_air", "momentum_budget", "nozzle",
    "observe", "phase", "picture", "picture_readings", "pipe", "plot_history", "plot_series",
    "pressure_drop", "profile", "pyramid_box", "quality", "read_checkpoint", "read_mesh",
    "read_readings", "set_threads", "settling_time", "shear_reversals", "skewed",
    "solve_pseudo_transient", "solve_scalar", "solve_steady", "solve_transient", "strouhal_number",
    "wall_distance", "wall_shear", "water", "wedge_box", "write_history", "write_mesh",
    "write_readings", "write_surface", "write_vtk",
]
