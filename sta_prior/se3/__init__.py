"""Rigid motions: Exp and Log, composition, adjoint, Jacobians and transport of covariance.

A pose is a 4×4 matrix ``lab_from_bone``; a missing pose is all NaN. A tangent
vector is ξ = (rx, ry, rz, tx, ty, tz) in rad and m, rotation first, of the full
SE(3) exponential, applied on the right: T ← T·Exp(ξ), along the bone's own axes.
Conventions: docs/conventions.md.
"""

from __future__ import annotations

from sta_prior.se3.group import (
    adjoint,
    exp,
    inverse,
    log,
    make_pose,
    position_of,
    rotation_exp,
    rotation_log,
    rotation_of,
    skew,
    transform_points,
)
from sta_prior.se3.jacobians import (
    left_jacobian,
    left_jacobian_inverse,
    right_jacobian,
    right_jacobian_inverse,
    rotation_left_jacobian,
    rotation_left_jacobian_inverse,
    rotation_right_jacobian,
    rotation_right_jacobian_inverse,
)
from sta_prior.se3.statistics import (
    HelicalAxis,
    compose_covariance,
    covariance_in_lab,
    helical_axis,
    helical_axis_direction_sd,
    inverse_covariance,
    mean_pose,
    relative_difference,
)

__all__ = [
    "HelicalAxis",
    "adjoint",
    "compose_covariance",
    "covariance_in_lab",
    "exp",
    "helical_axis",
    "helical_axis_direction_sd",
    "inverse",
    "inverse_covariance",
    "left_jacobian",
    "left_jacobian_inverse",
    "log",
    "make_pose",
    "mean_pose",
    "position_of",
    "relative_difference",
    "right_jacobian",
    "right_jacobian_inverse",
    "rotation_exp",
    "rotation_left_jacobian",
    "rotation_left_jacobian_inverse",
    "rotation_log",
    "rotation_of",
    "rotation_right_jacobian",
    "rotation_right_jacobian_inverse",
    "skew",
    "transform_points",
]
