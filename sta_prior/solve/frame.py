"""Frame-wise estimators: every frame on its own, all frames at once.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

The maximum a posteriori poses of one frame minimise, over all segments and joints,

    Σ_s ‖T_s⁻¹y_s − a_s − μ_s(q)‖²_{C_s(q) + σ²}  +  Σ_j ‖travel_j‖²_{travel_sd²},   q = q(T)

by Gauss-Newton with the exact derivative of μ through the angles; C follows the angles from one
iteration to the next and is not differentiated. Unknown artifact is integrated out, so its
uncertainty is in the poses' covariance. Nothing ties one frame to the next.

References
----------
Lu & O'Connor (1999), J Biomech 32, 129–134 (poses of linked segments by least squares).
"""

from __future__ import annotations

import numpy as np

from sta_prior import se3
from sta_prior.checks import BoolArray, FloatArray
from sta_prior.rigid import RigidFit, fit_rigid
from sta_prior.solve.posterior import FrameSolution, describe_posterior, join
from sta_prior.solve.relaxation import relaxation
from sta_prior.solve.terms import JointProblem, SegmentProblem, System, assemble, segment_at

MARKER_SD = 0.0005
"""Instrument noise of a marker, m (common practice for optical systems, no source)."""

TOLERANCE = 1e-8
MAXIMUM_ITERATIONS = 60
_CHUNK = 1000
_LARGEST_STEP = np.array([0.2, 0.2, 0.2, 0.05, 0.05, 0.05])
# Levenberg's term of the iteration, 1/rad² and 1/m²: a tenth of the least information with which a
# pose counts as determined. It keeps a direction that is all but open from wandering, and with it
# the frame's other segments from being called unsettled.
_HOLD = np.repeat([0.3, 1.0], 3)


def first_look(segments: list[SegmentProblem], count: int) -> tuple[FloatArray, list[RigidFit]]:
    """Rigid fit of every segment: poses (F, S, 4, 4), NaN where not determined, and the fits."""
    frames = segments[0].points.shape[0]
    poses = np.full((frames, count, 4, 4), np.nan)
    fits = []
    for segment in segments:
        fit = fit_rigid(segment.reference, segment.points)
        poses[:, segment.index] = fit.pose
        fits.append(fit)
    return poses, fits


def bridge(poses: FloatArray, joints: list[JointProblem]) -> FloatArray:
    """Fill missing poses: a start for the iteration only, on which the optimum does not depend.

    Parameters
    ----------
    poses : shape (F, S, 4, 4), lab ← bone, NaN where missing
    joints : all joints

    Returns
    -------
    shape (F, S, 4, 4), finite. A bone beside a known one takes its pose relative to it from the
    nearest frame that shows both; where none does, the joint centres meet in the zero posture.
    Any other takes its lab pose from the nearest frame.
    """
    filled = poses.copy()
    # From a known bone outwards: every round reaches at least one joint further.
    for _ in joints:
        for joint in joints:
            zero_posture = np.eye(4)
            if joint.has_centre:
                zero_posture[:3, 3] = joint.centre_proximal - joint.centre_distal
            both = se3.inverse(poses[:, joint.proximal]) @ poses[:, joint.distal]
            relative = _from_nearest_frame(both, zero_posture)
            for known, missing, across in (
                (joint.proximal, joint.distal, relative),
                (joint.distal, joint.proximal, se3.inverse(relative)),
            ):
                gap = np.isfinite(filled[:, known, 0, 0]) & np.isnan(filled[:, missing, 0, 0])
                filled[gap, missing] = filled[gap, known] @ across[gap]
    return np.stack(
        [_from_nearest_frame(filled[:, index], np.eye(4)) for index in range(poses.shape[1])], axis=1
    )


def _from_nearest_frame(poses: FloatArray, nothing: FloatArray) -> FloatArray:
    """Fill missing poses, (F, 4, 4), from the nearest frame that has one; nothing where none has."""
    known = np.flatnonzero(np.isfinite(poses[:, 0, 0]))
    if known.size == 0:
        return np.broadcast_to(nothing, poses.shape).copy()
    frames = np.arange(poses.shape[0])
    right = np.clip(np.searchsorted(known, frames), 0, known.size - 1)
    left = np.clip(right - 1, 0, known.size - 1)
    nearer_left = np.abs(frames - known[left]) <= np.abs(known[right] - frames)
    filled: FloatArray = poses[known[np.where(nearer_left, left, right)]]
    return filled


def _iterate(
    segments: list[SegmentProblem], joints: list[JointProblem], poses: FloatArray, marker_sd: float
) -> tuple[FloatArray, System, int, BoolArray]:
    """Gauss-Newton on all frames at once; returns poses, last system, iterations, converged frames.

    Three guards, each frame by itself; none moves the optimum. A step is cut to _LARGEST_STEP. Weakly
    known directions are held (_HOLD). And since the covariance follows the angles, steps can swing or
    crawl: relaxation lengthens or shortens them.
    """
    frames, count = poses.shape[:2]
    hold = np.diag(np.tile(_HOLD, count))
    limit = np.tile(_LARGEST_STEP, count)
    moving = np.ones(frames, dtype=bool)
    before = np.full((frames, 6 * count), np.nan)
    made = np.full((frames, 6 * count), np.nan)
    iterations = 0
    while iterations < MAXIMUM_ITERATIONS:
        iterations += 1
        active = np.flatnonzero(moving)
        part = [segment_at(segment, active) for segment in segments]
        system = assemble(part, joints, poses[active], marker_sd)
        step = -np.linalg.solve(system.normal + hold, system.gradient[..., None])[..., 0] / limit
        longest = np.maximum(np.abs(step).max(axis=1), 1e-300)
        factor = np.minimum(relaxation(made[active], before[active] - step), 1.0 / longest)
        before[active], made[active] = step, factor[:, None] * step
        poses[active] = poses[active] @ se3.exp((made[active] * limit).reshape(active.size, count, 6))
        moving[active] = ~(np.abs(step * limit).max(axis=1) <= TOLERANCE)
        if not moving.any():
            break
    return poses, assemble(segments, joints, poses, marker_sd), iterations, ~moving


def solve_frames(
    segments: list[SegmentProblem],
    joints: list[JointProblem],
    start: FloatArray,
    marker_sd: float = MARKER_SD,
) -> FrameSolution:
    """Solve every frame by maximum a posteriori, with posterior covariance.

    Parameters
    ----------
    segments : all segments, in tree order
    joints : all joints
    start : shape (F, S, 4, 4), lab ← bone, finite (see bridge)
    marker_sd : instrument noise of a marker, m

    Returns
    -------
    FrameSolution. A segment whose pose the markers and joints do not fix is NaN there.
    """
    pieces = []
    for first in range(0, start.shape[0], _CHUNK):
        frames = np.arange(first, min(first + _CHUNK, start.shape[0]))
        part = [segment_at(segment, frames) for segment in segments]
        poses, system, iterations, converged = _iterate(part, joints, start[frames].copy(), marker_sd)
        reason = (
            f"step below {TOLERANCE:g} rad and m in every frame"
            if converged.all()
            else f"{int((~converged).sum())} frames not converged in {MAXIMUM_ITERATIONS} iterations"
        )
        pieces.append(describe_posterior(part, joints, poses, system, converged, iterations, reason))
    return join(pieces)
