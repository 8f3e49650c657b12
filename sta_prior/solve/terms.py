"""Terms of the frame-wise problem: residual, Jacobian in all poses, whitening.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. A term knows neither files nor
families of priors; the solver adds terms and knows neither markers nor joints.

Poses of S segments at F frames, shape (F, S, 4, 4), lab ← bone, are perturbed on the right:
T ← T·Exp(ξ); a Jacobian's last axis is the 6·S pose unknowns in segment order.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np

from sta_prior.angles import JointConvention, joint_angle_pose_jacobians
from sta_prior.checks import BoolArray, FloatArray, IntArray
from sta_prior.gaussian import symmetrise
from sta_prior.prior.inputs import tilt, tilt_jacobian
from sta_prior.prior.interface import Artifact
from sta_prior.rigid import marker_jacobian
from sta_prior.se3 import inverse, skew, transform_points

BALL_JOINT_SD = 1e-5
"""A joint whose centre must not travel is held to this, m: far below instrument noise."""

ANCHOR = 1e-2
"""Precision (SD 10 rad, 10 m) that gives the normal matrix of an undetermined frame an inverse."""


class Gravity(NamedTuple):
    """What a tilt is told from: the lab axis that points up, 0 … 2, and the side of the body."""

    up: int
    side: str


@dataclass(frozen=True)
class SegmentProblem:
    """One segment of a trial: its position in the tree, markers and artifact.

    index: position among the segments; points: (F, m, 3) m, lab, NaN hidden; reference: (m, 3) m,
    bone frame; artifact: prior bound to this trial, 3m outputs; gravity: where the prior takes the segment's
    tilt; changes: (F, J, 3) rad, of the joint angles in CHANGE_TIME, where it takes these.
    """

    index: int
    points: FloatArray
    reference: FloatArray
    artifact: Artifact
    gravity: Gravity | None = None
    changes: FloatArray | None = None


def segment_at(segment: SegmentProblem, frames: slice | IntArray) -> SegmentProblem:
    """The segment at some of its frames."""
    changes = None if segment.changes is None else segment.changes[frames]
    return replace(segment, points=segment.points[frames], changes=changes)


@dataclass(frozen=True)
class JointProblem:
    """One joint: the segments it joins, its angles, and how far its centre travels.

    centre_proximal, centre_distal: (3,) m, in the two bone frames, NaN where unknown;
    travel_sd: m, infinite for a joint that constrains nothing.
    """

    proximal: int
    distal: int
    convention: JointConvention
    centre_proximal: FloatArray
    centre_distal: FloatArray
    travel_sd: float

    @property
    def has_centre(self) -> bool:
        """Whether the joint centre is known in both bones."""
        return bool(np.isfinite(self.centre_proximal).all() and np.isfinite(self.centre_distal).all())

    @property
    def constrains(self) -> bool:
        """Whether the joint adds a term."""
        return self.has_centre and bool(np.isfinite(self.travel_sd))


@dataclass(frozen=True)
class Linearised:
    """The marker term of a segment at given poses.

    Attributes
    ----------
    residual : shape (F, n), m, bone frame, 0 where hidden
    jacobian : shape (F, n, 6S), its derivative in all poses, for steps; 0 where hidden
    precision : shape (F, n, n), 1/m², inverse of C + σ² over the seen outputs, 0 elsewhere
    seen : shape (F, n)
    lever : shape (F, n, 6S), derivative of T⁻¹y alone with the markers where the prior expects
        them, for the information; 0 where hidden
    through_mean : shape (F, n, 6S), derivative of the prior's mean through the angles
    slope : shape (F, n, 6S), lever − through_mean, 0 where hidden
    artifact_covariance : shape (F, n, n), m², C
    mean : shape (F, n), m
    """

    residual: FloatArray
    jacobian: FloatArray
    precision: FloatArray
    seen: BoolArray
    lever: FloatArray
    through_mean: FloatArray
    slope: FloatArray
    artifact_covariance: FloatArray
    mean: FloatArray


def angles_and_jacobians(joints: list[JointProblem], poses: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Angles of all joints, (F, J, 3) rad, and their derivative in all poses, (F, J, 3, 6S)."""
    frames, segments = poses.shape[:2]
    angles = np.zeros((frames, len(joints), 3))
    jacobian = np.zeros((frames, len(joints), 3, 6 * segments))
    for index, joint in enumerate(joints):
        angles[:, index], proximal, distal = joint_angle_pose_jacobians(
            joint.convention, poses[:, joint.proximal], poses[:, joint.distal]
        )
        jacobian[:, index, :, 6 * joint.proximal : 6 * joint.proximal + 6] += proximal
        jacobian[:, index, :, 6 * joint.distal : 6 * joint.distal + 6] += distal
    return angles, jacobian


def drive(
    segment: SegmentProblem, poses: FloatArray, angles: FloatArray, angle_jacobian: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """All inputs of a segment's artifact, (F, rows, 3) rad, and their derivative in all poses.

    Changes of the angles are taken as they are: their derivative would reach into other frames.
    """
    rows, slopes = [angles], [angle_jacobian]
    if segment.gravity is not None:
        rotation = poses[:, segment.index, :3, :3]
        slope = np.zeros((poses.shape[0], 1, 3, angle_jacobian.shape[-1]))
        first = 6 * segment.index
        slope[:, 0, :, first : first + 3] = tilt_jacobian(rotation, *segment.gravity)
        rows.append(tilt(rotation, *segment.gravity)[:, None])
        slopes.append(slope)
    if segment.changes is not None:
        rows.append(segment.changes)
        slopes.append(np.zeros(angle_jacobian.shape))
    if len(rows) == 1:
        return angles, angle_jacobian
    return np.concatenate(rows, axis=1), np.concatenate(slopes, axis=1)


def marker_term(
    segment: SegmentProblem,
    poses: FloatArray,
    angles: FloatArray,
    angle_jacobian: FloatArray,
    marker_sd: float,
) -> Linearised:
    """Markers of a segment, restated in the bone frame, against reference plus artifact.

    ``r = T⁻¹y − a − μ(q)`` with covariance C(q) + σ²; the instrument noise is isotropic, so
    rotating it into the bone frame changes nothing.

    Parameters
    ----------
    segment : the segment
    poses : shape (F, S, 4, 4)
    angles : shape (F, J, 3), rad, from angles_and_jacobians
    angle_jacobian : shape (F, J, 3, 6S), from angles_and_jacobians
    marker_sd : instrument noise, m

    Notes
    -----
    The derivative of T⁻¹y sees the markers where they are, artifact and all. Taken for the
    information it would count the artifact's own size as width of the cluster: markers on a line
    would seem to fix the rotation about it. The expected information has them at a + μ.
    """
    angles, angle_jacobian = drive(segment, poses, angles, angle_jacobian)
    moments = segment.artifact.moments(angles)
    pose = poses[:, segment.index]
    frames, markers = segment.points.shape[:2]
    points_bone = transform_points(inverse(pose), segment.points)
    residual = (points_bone - segment.reference).reshape(frames, -1) - moments.mean
    seen = np.isfinite(residual)
    through_mean = np.einsum("fnjd,fjdx->fnx", moments.mean_derivative, angle_jacobian)
    own = slice(6 * segment.index, 6 * segment.index + 6)
    actual = np.zeros((frames, 3 * markers, angle_jacobian.shape[-1]))
    actual[..., own] = -marker_jacobian(points_bone)
    lever = np.zeros_like(actual)
    lever[..., own] = -marker_jacobian(segment.reference + moments.mean.reshape(frames, markers, 3))
    shown = seen[..., None]
    lever = np.where(shown, lever, 0.0)
    return Linearised(
        residual=np.where(seen, residual, 0.0),
        jacobian=np.where(shown, actual - through_mean, 0.0),
        precision=precision_of_seen(moments.covariance + marker_sd**2 * np.eye(3 * markers), seen),
        seen=seen,
        lever=lever,
        through_mean=through_mean,
        slope=np.where(shown, lever - through_mean, 0.0),
        artifact_covariance=moments.covariance,
        mean=moments.mean,
    )


def joint_travel(joint: JointProblem, poses: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Distal minus proximal joint centre in the proximal bone, (F, 3) m, and its Jacobian (F, 3, 6S)."""
    proximal_from_distal = inverse(poses[:, joint.proximal]) @ poses[:, joint.distal]
    seen_from_proximal = transform_points(proximal_from_distal, joint.centre_distal[None, :])[:, 0]
    jacobian = np.zeros((poses.shape[0], 3, 6 * poses.shape[1]))
    rotation = proximal_from_distal[:, :3, :3]
    at_proximal, at_distal = 6 * joint.proximal, 6 * joint.distal
    jacobian[:, :, at_proximal : at_proximal + 3] = skew(seen_from_proximal)
    jacobian[:, :, at_proximal + 3 : at_proximal + 6] = -np.eye(3)
    jacobian[:, :, at_distal : at_distal + 3] = -rotation @ skew(joint.centre_distal)
    jacobian[:, :, at_distal + 3 : at_distal + 6] = rotation
    return seen_from_proximal - joint.centre_proximal, jacobian


def precision_of_seen(covariance: FloatArray, seen: BoolArray) -> FloatArray:
    """Inverse of the covariance of the seen outputs, zero rows and columns for the hidden ones.

    Parameters
    ----------
    covariance : shape (F, n, n)
    seen : shape (F, n)

    Notes
    -----
    Hidden outputs are replaced by unit ones that are uncorrelated with the rest, at the size of
    the covariance itself, then dropped: exact, and one batched factorisation serves all frames.
    """
    both = seen[:, :, None] & seen[:, None, :]
    scale = np.einsum("fnn->fn", covariance).mean(axis=1)
    filled = np.where(both, covariance, scale[:, None, None] * np.eye(covariance.shape[-1]))
    identity = np.broadcast_to(np.eye(filled.shape[-1]), filled.shape)
    return np.where(both, symmetrise(np.linalg.solve(filled, identity)), 0.0)


@dataclass(frozen=True)
class System:
    """All terms at the current poses.

    normal: (F, 6S, 6S) Gauss-Newton matrix, for steps; gradient: (F, 6S); joint_normal: the joints'
    part of normal; markers: a term per segment; angles, angle_jacobian: as in angles_and_jacobians.
    """

    normal: FloatArray
    gradient: FloatArray
    joint_normal: FloatArray
    markers: list[Linearised]
    angles: FloatArray
    angle_jacobian: FloatArray

    @property
    def information(self) -> FloatArray:
        """Expected information about the poses, shape (F, 6S, 6S): the posterior's precision."""
        total = self.joint_normal.copy()
        for term in self.markers:
            total += np.swapaxes(term.slope, 1, 2) @ term.precision @ term.slope
        return total


def assemble(
    segments: list[SegmentProblem], joints: list[JointProblem], poses: FloatArray, marker_sd: float
) -> System:
    """Add all marker and joint terms at poses of shape (F, S, 4, 4)."""
    frames, count = poses.shape[:2]
    angles, angle_jacobian = angles_and_jacobians(joints, poses)
    normal = np.zeros((frames, 6 * count, 6 * count))
    gradient = np.zeros((frames, 6 * count))
    markers = []
    for segment in segments:
        term = marker_term(segment, poses, angles, angle_jacobian, marker_sd)
        weighted = term.precision @ term.jacobian
        normal += np.swapaxes(term.jacobian, 1, 2) @ weighted
        gradient += np.einsum("fnx,fn->fx", weighted, term.residual)
        markers.append(term)
    joint_normal = np.zeros_like(normal)
    for joint in joints:
        if joint.constrains:
            residual, jacobian = joint_travel(joint, poses)
            weight = 1.0 / max(joint.travel_sd, BALL_JOINT_SD) ** 2
            joint_normal += weight * np.swapaxes(jacobian, 1, 2) @ jacobian
            gradient += weight * np.einsum("fnx,fn->fx", jacobian, residual)
    return System(normal + joint_normal, gradient, joint_normal, markers, angles, angle_jacobian)
