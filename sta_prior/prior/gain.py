"""How much of a joint's flexion turns up as rotation of the marker cluster about the bone.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

If the cluster turns by g times the angle, the angle that markers show is (1 − g) times the true one; g is
the turn about z of a distal segment's cluster, or that of a proximal one with its sign changed, for a knee
whose flexion turns the distal bone about −z. No marker sees this; only the prior says it, and an error of
its g is an error of the angle.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.prior.basis import Basis
from sta_prior.prior.hierarchy import Weights
from sta_prior.rigid import marker_jacobian

FLEXION_AXIS = 2
_POINTS = 21


@dataclass(frozen=True)
class Gain:
    """Rotation of the cluster about the flexion axis (z) per unit of flexion of one joint.

    joint: position; mean, sd: over the training range, sd between subjects never imaged; reach: rad.
    """

    joint: int
    mean: float
    sd: float
    reach: float

    def words(self, name: str = "flexion") -> str:
        """One phrase with the error that one SD of the gain makes over the training range."""
        error = float(np.degrees(self.sd * self.reach))
        return (
            f"turns with {100 * self.mean:.0f} ± {100 * self.sd:.0f} % of {name}, "
            f"one SD of it being {error:.1f}° over the range seen"
        )


def flexion_gains(basis: Basis, weights: Weights, layout: FloatArray) -> list[Gain]:
    """Gain of every angle with a training range.

    Parameters
    ----------
    basis : features of the angles
    weights : belief about a new subject's weights, (K, n) m
    layout : shape (m, 3), m, reference positions of the markers
    """
    lever = marker_jacobian(layout)
    # Least-squares rotation of the cluster about z for a displacement of all markers.
    turn = np.linalg.pinv(lever)[FLEXION_AXIS]
    count, n = weights.mean.shape
    spread = weights.covariance.reshape(count, n, count, n)
    joints = 1 + max((reach.joint for reach in basis.reaches), default=0)
    gains = []
    for reach in basis.reaches:
        if reach.kind != "angle":
            continue
        angles = np.zeros((_POINTS, joints, 3))
        # Just inside the range: at its very edge the features are held.
        margin = 1e-6 * (reach.high - reach.low)
        angles[:, reach.joint, reach.dof] = np.linspace(reach.low + margin, reach.high - margin, _POINTS)
        slope = basis.derivatives(angles)[:, :, reach.joint, reach.dof].mean(axis=0)
        variance = np.einsum("k,a,kalb,l,b->", slope, turn, spread, slope, turn, optimize=True)
        gains.append(
            Gain(
                joint=reach.joint,
                mean=float(slope @ weights.mean @ turn),
                sd=float(np.sqrt(max(variance, 0.0))),
                reach=reach.high - reach.low,
            )
        )
    return gains
