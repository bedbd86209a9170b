"""Axes: directions that fall on one, and the turn and shift from rig axes to mesh axes."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..errors import ReadingError
from .table import AXIS_DIRECTION


def named_axes(direction: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Directions (m, 3) within rounding of plus or minus an axis become that axis; and the sign."""
    direction = direction.copy()
    sign = np.ones(len(direction))
    for unit_vector in AXIS_DIRECTION.values():
        share = direction @ np.array(unit_vector)
        across = np.linalg.norm(direction - share[:, None] * np.array(unit_vector), axis=1)
        near = across < 1e-12
        direction[near] = unit_vector
        sign[near & (share < 0)] = -1.0
    return direction, sign


def placing(rotation: Any, shift: Any, scale: Any) -> tuple[np.ndarray, np.ndarray]:
    """Checked rotation matrix (3, 3) and shift (3,) [m].

    Raises
    ------
    ReadingError
        A rotation that is none, a shift or scale that cannot be used.
    """
    if rotation is None:
        rotation = np.eye(3)
    matrix = rotation.as_matrix() if hasattr(rotation, "as_matrix") else rotation
    try:
        matrix = np.array(matrix, dtype=np.float64)
        offset = np.array(shift, dtype=np.float64)
        factor = float(scale)
    except (TypeError, ValueError):
        raise ReadingError("Rotation, shift and scale must be numbers.", where="placed",
                           got=f"{rotation!r}, {shift!r}, {scale!r}",
                           remedy="Give a 3 x 3 matrix, three lengths and a factor.") from None
    if matrix.shape != (3, 3) or not np.allclose(matrix @ matrix.T, np.eye(3), atol=1e-6) \
            or not np.linalg.det(matrix) > 0:
        raise ReadingError("The rotation is no rotation.", where="placed(rotation=...)",
                           got=np.round(matrix, 6).tolist(),
                           remedy="Give an orthonormal right-handed 3 x 3 matrix; a mirrored axis "
                                  "is turned round in the table.")
    if offset.shape != (3,) or not np.isfinite(offset).all() or not 0 < factor < np.inf:
        raise ReadingError("Shift or scale cannot be used.", where="placed",
                           got=f"shift {np.asarray(shift).tolist()}, scale {factor:g}",
                           remedy="Give three finite lengths [m] and a positive factor.")
    return matrix, offset
