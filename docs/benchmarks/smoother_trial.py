"""The invented leg of the smoother's benchmark."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.spatial.transform import Rotation

from sta_prior import se3
from sta_prior.angles import JointConvention, rotation_from_angles
from sta_prior.checks import FloatArray
from sta_prior.prior.artifact import FeatureArtifact
from sta_prior.prior.basis import Basis, Term, Wave
from sta_prior.prior.hierarchy import Weights
from sta_prior.prior.interface import design_of
from sta_prior.prior.time_scales import TimeScales
from sta_prior.solve.frame import bridge, first_look
from sta_prior.solve.smoother import make_problem
from sta_prior.solve.terms import JointProblem, SegmentProblem
from sta_prior.solve.trajectory import TrajectoryProblem

KNEE = JointConvention("knee", "right")
STEP, MARKER_SD, TRAVEL_SD = 0.01, 0.0005, 0.005
CENTRES = (np.array([0.0, -0.40, 0.0]), np.array([0.0, 0.395, 0.0]))
REACH = ((0.05, -0.08, -0.32), (0.04, 0.32, 0.08))
"""Markers lie on a spiral about the bone: distance from its axis, first and last height, m."""


@dataclass(frozen=True)
class Trial:
    """A problem and poses to begin from, with its segments."""

    problem: TrajectoryProblem
    start: FloatArray


def covariance(rng: np.random.Generator, size: int, sd: float, share: float) -> FloatArray:
    """A share of it in three directions."""
    factors = rng.standard_normal((size, 3))
    full = factors @ factors.T
    return np.asarray(sd**2 * (share * full * size / np.trace(full) + (1.0 - share) * np.eye(size)))


def made_artifact(rng: np.random.Generator, outputs: int) -> FeatureArtifact:
    """Constant, flexion and its square, the other angles, and five waves over flexion."""
    terms = (Term(0, 0, 1), Term(0, 0, 2), Term(0, 1, 1), Term(0, 2, 1))
    wave = Wave(0, 0, centre=0.6, limit=1.2, length=0.4, count=5)
    variance = np.array([0.1, 1.0, 0.3, 0.1, 0.1, *[0.02] * 5])
    mean = 0.02 * np.sqrt(variance)[:, None] * rng.standard_normal((10, outputs))
    mean[0] = 0.0
    return FeatureArtifact(
        basis=Basis(terms, np.eye(4), (wave,)),
        weights=Weights(mean, np.kron(np.diag(variance), covariance(rng, outputs, 0.006, 0.9))),
        residual=covariance(rng, outputs, 0.003, 0.5),
        time_scales=TimeScales.single(0.1),
        reference=np.zeros((1, 3)),
        magnitude=np.zeros((outputs, outputs)),
    )


def made_trial(frames: int, markers: int = 6) -> Trial:
    """The same motion however long, with an artifact drawn from the prior."""
    rng = np.random.default_rng(3)
    phase = 2.0 * np.pi * STEP * np.arange(frames)
    angles = np.radians(
        np.stack(
            [35.0 + 30.0 * np.sin(phase), 4.0 * np.sin(phase + 1.0), 6.0 * np.sin(2.0 * phase + 2.0)], axis=1
        )
    )
    turn = 0.3 * np.stack([np.sin(phase), np.cos(phase), np.sin(phase + 1.0)], axis=1)
    place = np.stack([0.6 * np.sin(phase), 0.9 + 0.03 * np.sin(2.0 * phase), 0.02 * np.cos(phase)], axis=1)
    thigh = se3.make_pose(Rotation.from_rotvec(turn).as_matrix(), place)
    knee = rotation_from_angles(KNEE, angles)
    travel = 0.003 * np.stack([np.sin(phase), np.cos(phase), np.sin(phase)], axis=1)
    shank = thigh @ se3.make_pose(knee, CENTRES[0] + travel - knee @ CENTRES[1])
    segments = []
    for index, pose in enumerate((thigh, shank)):
        wide, top, bottom = REACH[index]
        round_it = 2.4 * np.arange(markers)
        height = np.linspace(top, bottom, markers)
        reference = np.stack([wide * np.cos(round_it), height, wide * np.sin(round_it)], axis=1)
        artifact = made_artifact(rng, 3 * markers)
        design = design_of(artifact, angles[:, None])
        weights = np.linalg.cholesky(artifact.constant_covariance) @ rng.standard_normal(10 * 3 * markers)
        white = rng.standard_normal((frames, 3 * markers)) @ np.linalg.cholesky(artifact.residual).T
        decay = np.exp(-STEP / artifact.time_constant)
        for frame in range(1, frames):
            white[frame] = decay * white[frame - 1] + np.sqrt(1.0 - decay**2) * white[frame]
        artifacts = design.mean + design.features @ weights.reshape(10, -1) + white
        points = se3.transform_points(pose, reference + artifacts.reshape(frames, -1, 3))
        points += MARKER_SD * rng.standard_normal(points.shape)
        segments.append(SegmentProblem(index, points, reference, artifact))
    joints = [JointProblem(0, 1, KNEE, *CENTRES, TRAVEL_SD)]
    start = bridge(first_look(segments, 2)[0], joints)
    return Trial(make_problem(segments, joints, start, STEP, MARKER_SD), start)
