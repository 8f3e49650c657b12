"""Least-squares rigid fit of marker clusters, and the split of displacement into rigid part and deformation.

Everything is batched over leading axes: frames, subjects. A hidden marker is NaN.
Conventions: docs/conventions.md.
"""

from __future__ import annotations

from sta_prior.rigid.deformation import (
    DeformationModes,
    deformation_modes,
    deformation_part,
    marker_jacobian,
    rigid_part,
    rigid_subspace,
)
from sta_prior.rigid.fit import PoseFit, RigidFit, fit_poses, fit_rigid
from sta_prior.rigid.singular import MINIMUM_LINE_RATIO

__all__ = [
    "MINIMUM_LINE_RATIO",
    "DeformationModes",
    "PoseFit",
    "RigidFit",
    "deformation_modes",
    "deformation_part",
    "fit_poses",
    "fit_rigid",
    "marker_jacobian",
    "rigid_part",
    "rigid_subspace",
]
