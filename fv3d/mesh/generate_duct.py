"""Straight pipes and channels with a backward-facing step."""

from __future__ import annotations

import numpy as np

from ..errors import MeshError, as_number
from .blocks import Block, extrude, join_blocks
from .generate_nozzle import nozzle
from .grading import Grading, from_ends, line
from .mesh import Mesh


def pipe(*, length: float, diameter: float, cells: int, core: int = 4,
         grading: Grading | np.ndarray | None = None, wall_share: float = 0.4,
         quadrants: int = 4, equal_area: bool = False, refinement: int = 1,
         tetra: bool = False, wedge: bool = False) -> Mesh:
    """Straight circular pipe along z from zero to ``length``.

    The cross-section is a square with bulged sides inside a ring.  Boundaries are ``inlet``,
    ``outlet``, ``wall`` and, for a sector, ``symmetry``.

    Parameters
    ----------
    length, diameter : float [m]
    cells : int
        Along the axis.
    core : int
        Cells from the axis to the side of the square; eight times as many lie around.
    grading : Grading, node coordinates [m] or None
        Along the axis.
    wall_share : float
        Thickness of the cells on the wall over that of the cells of the square.
    quadrants : int
        4 for the full circle, 2 for ``y >= 0``, 1 for ``x, y >= 0``.
    equal_area : bool
        Move the corners of the polygon outwards until its area is that of the circle.
    refinement : int
        Multiplies all cell counts.
    tetra, wedge : bool
        Cut every hexahedron into six tetrahedra, or into two wedges with their triangles
        across the axis.

    Returns
    -------
    Mesh

    Raises
    ------
    MeshError
        Sizes or counts that make no mesh.
    """
    sizes = {"length": length, "diameter": diameter, "cells": cells}
    if not all(as_number(value) > 0 for value in sizes.values()):
        raise MeshError("A pipe needs positive sizes and counts.", where="pipe",
                        got=", ".join(f"{name}={value}" for name, value in sizes.items()),
                        remedy="Correct them.")
    return nozzle([(0.0, 0.5 * diameter), (length, 0.5 * diameter)], core=core,
                  axial=[(cells, grading)], wall_share=wall_share, quadrants=quadrants,
                  equal_area=equal_area, refinement=refinement, tetra=tetra, wedge=wedge)


def backward_step(*, step: float, height: float, inlet_length: float, outlet_length: float,
                  depth: float, first_layer: float, growth: float = 1.1,
                  coarsest: float | None = None, layers: int = 1,
                  depth_grading: Grading | np.ndarray | None = None, refinement: int = 1,
                  tetra: bool = False, wedge: bool = False) -> Mesh:
    """Channel that widens suddenly on one side.

    The stream goes along x.  The foot of the step is the origin, its edge at ``y = step``;
    the channel in front of it reaches from there to ``y = step + height``.  Boundaries are
    ``inlet, outlet, step`` (its face and the wall in front of its edge), ``floor`` (the wall
    behind the step), ``roof`` and ``sides`` (z).

    Parameters
    ----------
    step, height : float
        Of the step and of the channel in front of it [m].
    inlet_length, outlet_length : float
        In front of and behind the step [m]; without an inlet length the stream enters
        right at the edge.
    depth : float
        Along z [m].
    first_layer : float
        Thickness of the cells on all walls, at the step and its edge [m].
    growth : float
        Ratio of neighbouring cells away from them.
    coarsest : float, optional
        Largest cell size along x and y [m]; a sixth of the step if not given.
    layers : int
        Cells along z; one for a plane flow (sides as symmetry).
    depth_grading : Grading, node coordinates [m] or None
        Along z.
    refinement : int
        Multiplies all cell counts (one layer stays one).
    tetra, wedge : bool
        Cut every hexahedron into six tetrahedra, or into two wedges with their triangles
        across z.

    Returns
    -------
    Mesh

    Raises
    ------
    MeshError
        Sizes or counts that make no mesh.
    """
    where = "backward_step"
    coarsest = step / 6.0 if coarsest is None else coarsest
    sizes = {"step": step, "height": height, "outlet_length": outlet_length, "depth": depth,
             "first_layer": first_layer, "coarsest": coarsest, "growth - 1": growth - 1.0,
             "layers": layers, "refinement": refinement}
    bad = [f"{name}={value}" for name, value in sizes.items() if not as_number(value) > 0]
    if bad or not as_number(inlet_length) >= 0:
        raise MeshError("A backward step needs positive sizes and counts.", where=where,
                        got=", ".join(bad) or f"inlet_length={inlet_length}",
                        remedy="Correct them; only inlet_length may be zero.")

    def nodes(start: float, stop: float, ends: tuple[float | None, float | None]) -> np.ndarray:
        wish = from_ends(start, stop, ends=ends, coarsest=coarsest, slope=growth - 1.0)
        return wish.nodes(start, stop, wish.wanted_cells(start, stop) * refinement)

    levels = line(0.0, depth, cells=layers * refinement if layers > 1 else 1,
                  grading=depth_grading, where=f"{where}, depth")
    wall = (first_layer, first_layer)
    low, high = nodes(0.0, step, wall), nodes(step, step + height, wall)
    behind = nodes(0.0, outlet_length, (first_layer, None))
    parts = [(behind, low, {"i_min": "step", "j_min": "floor", "i_max": "outlet"}),
             (behind, high, {"j_max": "roof", "i_max": "outlet"})]
    if inlet_length > 0:
        before = nodes(-inlet_length, 0.0, (None, first_layer))
        parts.append((before, high, {"i_min": "inlet", "j_min": "step", "j_max": "roof"}))
    else:
        parts[1][2]["i_min"] = "inlet"
    blocks = [Block(extrude(np.stack(np.meshgrid(x, y, indexing="ij"), axis=-1), levels),
                    {**names, "k_min": "sides", "k_max": "sides"}) for x, y, names in parts]
    return join_blocks(blocks, tetra=tetra, wedge=wedge, source=where)
