"""Least-squares rigid fit of marker clusters: the compiled fit, with singular values where it is in doubt.

Kernel: arrays in, arrays out, batched over leading axes. A hidden marker is NaN.
Conventions: docs/conventions.md.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from sta_prior.checks import BoolArray, FloatArray
from sta_prior.rigid.singular import (
    MINIMUM_LINE_RATIO,
    Fitted,
    check_pair,
    fit_singular,
    refuse_infinite,
)

FEWEST_COMPILED = 64
"""With fewer frames singular values are done before compiled code is even loaded."""
_SPAN = 20_000
"""Frames that go through the singular values at a time, so that memory stays small."""


@dataclass(frozen=True)
class PoseFit:
    """Frame-wise rigid fit of one cluster: the poses, and how far to trust them.

    Attributes
    ----------
    pose : shape (..., 4, 4), rotation unitless, position m, lab ← bone
        NaN where not determined.
    spread : shape (...), m
        √(SSR/(3n − 6)), n markers seen: the marker SD if errors were independent and isotropic.
    determined : shape (...), bool
    line_ratio : shape (...), unitless
        Extent of the cluster across its longest line over the extent along it; 0 on a line.
    """

    pose: FloatArray
    spread: FloatArray
    determined: BoolArray
    line_ratio: FloatArray


@dataclass(frozen=True)
class RigidFit(PoseFit):
    """Frame-wise rigid fit of one cluster, with residuals and covariance.

    Attributes
    ----------
    pose, spread, determined, line_ratio : as in `PoseFit`
    residual : shape (..., m, 3), m, lab frame
        Measured minus fitted; NaN where hidden or not determined. Small residuals say
        nothing about the accuracy of the pose.
    unit_covariance : shape (..., 6, 6), blocks rad²/m², rad/m, 1, bone axes
        (JᵀJ)⁻¹: multiply by the marker variance in m². Of ξ in T ← T·Exp(ξ).
    """

    residual: FloatArray
    unit_covariance: FloatArray


def _fit(reference: ArrayLike, points: ArrayLike, minimum_line_ratio: float, full: bool) -> Fitted:
    """Fit every frame; without `full`, residuals and covariance come back without frames."""
    reference, points = check_pair(reference, points, "points")
    shape = np.broadcast_shapes(reference.shape, points.shape)
    leading, markers = shape[:-2], shape[-2]
    frames = int(np.prod(leading))
    # A reference that all frames share is not repeated.
    shared = reference.size == 3 * markers
    one = (1, markers, 3)
    many = (frames, markers, 3)
    source = np.require(
        reference.reshape(one) if shared else np.broadcast_to(reference, shape).reshape(many),
        None,
        ["C", "A"],
    )
    target = np.require(np.broadcast_to(points, shape).reshape(many), None, ["C", "A"])
    wanted = frames if full else 0
    found = Fitted(
        pose=np.empty((frames, 4, 4)),
        residual=np.empty((wanted, markers, 3)),
        unit_covariance=np.empty((wanted, 6, 6)),
        spread=np.empty(frames),
        determined=np.empty(frames, dtype=np.bool_),
        line_ratio=np.empty(frames),
    )
    doubtful = np.ones(frames, dtype=np.bool_)
    if frames < FEWEST_COMPILED:
        refuse_infinite(reference, points, "points")
    else:
        # Imported here: whoever fits a cluster or two need not wait for the compiler.
        from sta_prior.rigid.kernels import fit_frames

        if not fit_frames(
            source,
            target,
            float(minimum_line_ratio),
            found.pose,
            found.spread,
            found.determined,
            found.line_ratio,
            doubtful,
            found.residual,
            found.unit_covariance,
        ):
            refuse_infinite(reference, points, "points")
    left = np.flatnonzero(doubtful)
    for first in range(0, left.size, _SPAN):
        chosen = left[first : first + _SPAN]
        exact = fit_singular(source[0] if shared else source[chosen], target[chosen], minimum_line_ratio)
        for name, whole in found._asdict().items():
            if whole.shape[0] == frames:
                whole[chosen] = getattr(exact, name)
    return Fitted(
        pose=found.pose.reshape((*leading, 4, 4)),
        residual=found.residual.reshape(shape) if full else found.residual,
        unit_covariance=found.unit_covariance.reshape((*leading, 6, 6)) if full else found.unit_covariance,
        spread=found.spread.reshape(leading),
        determined=found.determined.reshape(leading),
        line_ratio=found.line_ratio.reshape(leading),
    )


def fit_poses(
    reference: ArrayLike, points: ArrayLike, minimum_line_ratio: float = MINIMUM_LINE_RATIO
) -> PoseFit:
    """Fit poses alone: as `fit_rigid`, to the same bits, in less time and a third of the memory.

    Parameters
    ----------
    reference, points, minimum_line_ratio : as `fit_rigid`

    Returns
    -------
    PoseFit.

    Raises
    ------
    ShapeError : as `fit_rigid`.

    Examples
    --------
    >>> square = np.array([[50, 50, 0], [-50, 50, 0], [-50, -50, 0], [50, -50, 0]]) / 1000
    >>> fit_poses(square, square + [0.1, 0.0, 0.0]).pose[:3, 3].round(6).tolist()
    [0.1, 0.0, 0.0]
    """
    found = _fit(reference, points, minimum_line_ratio, full=False)
    return PoseFit(
        pose=found.pose, spread=found.spread, determined=found.determined, line_ratio=found.line_ratio
    )


def fit_rigid(
    reference: ArrayLike, points: ArrayLike, minimum_line_ratio: float = MINIMUM_LINE_RATIO
) -> RigidFit:
    """Fit the pose that carries a reference cluster onto measured markers, frame by frame.

    Parameters
    ----------
    reference : shape (..., m, 3), m, bone frame
        Reference positions of the markers; NaN = unknown.
    points : shape (..., m, 3), m, lab frame
        Measured positions; NaN = hidden. Leading axes broadcast.
    minimum_line_ratio : unitless
        Clusters nearer to a line than this are reported as not determined.

    Returns
    -------
    RigidFit. With fewer than three markers seen, or markers near a line, `determined` is
    False and the rest NaN; this never raises.

    Raises
    ------
    ShapeError : last axes differ from those above, another number of markers, or an
        infinite value.

    Notes
    -----
    With a, b the centred reference and measurement, Σ b aᵀ = U S Vᵀ,
    R = U diag(1, 1, det(U Vᵀ)) Vᵀ: a rotation also where the cluster is mirrored. Many frames
    take a compiled closed form to the same R (`sta_prior.rigid.kernels`), and singular values
    wherever that is in doubt: near a line, near a mirror image.

    References
    ----------
    Söderkvist & Wedin (1993), J. Biomechanics 26, 1473–1477,
    doi 10.1016/0021-9290(93)90098-Y.

    Examples
    --------
    >>> square = np.array([[50, 50, 0], [-50, 50, 0], [-50, -50, 0], [50, -50, 0]]) / 1000
    >>> fit = fit_rigid(square, square + [0.1, 0.0, 0.0])
    >>> fit.pose[:3, 3].round(6).tolist()
    [0.1, 0.0, 0.0]

    Rotation SD in degrees for markers of 1 mm SD:

    >>> np.rad2deg(1e-3 * np.sqrt(np.diag(fit.unit_covariance))[:3]).round(5).tolist()
    [0.57296, 0.57296, 0.40514]
    """
    found = _fit(reference, points, minimum_line_ratio, full=True)
    return RigidFit(**found._asdict())
