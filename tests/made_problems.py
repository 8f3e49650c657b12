"""Made-up legs as the solver sees them, with known poses and artifact, for the tests of the estimators."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.spatial.transform import Rotation

from sta_prior import se3
from sta_prior.angles import JointConvention, rotation_from_angles
from sta_prior.checks import BoolArray, FloatArray
from sta_prior.prior.artifact import FeatureArtifact
from sta_prior.prior.basis import Basis, Term
from sta_prior.prior.hierarchy import Weights
from sta_prior.prior.interface import Artifact
from sta_prior.prior.time_scales import TimeScales
from sta_prior.solve.terms import JointProblem, SegmentProblem

# Bone frames: x forward, y up, z right; m. Joint centres: below the thigh's origin, and so on.
CLUSTERS = (
    np.array([[0.06, -0.10, 0.05], [0.07, -0.22, -0.02], [-0.01, -0.15, 0.09], [0.05, -0.30, 0.06]]),
    np.array([[0.04, 0.30, 0.04], [0.05, 0.18, -0.01], [-0.02, 0.22, 0.06], [0.04, 0.10, 0.03]]),
    np.array([[0.12, 0.02, 0.03], [0.05, 0.05, 0.02], [0.10, 0.03, -0.03]]),
)
CENTRES = (
    (np.array([0.0, -0.40, 0.0]), np.array([0.0, 0.395, 0.0])),
    (np.array([0.0, -0.01, 0.0]), np.array([0.01, 0.06, 0.0])),
)
CONVENTIONS = (JointConvention("knee", "right"), JointConvention("ankle", "right"))
REFERENCE_ANGLES = np.radians([[4.0, 2.0, -3.0], [-2.0, 1.0, 5.0]])


@dataclass(frozen=True)
class Problem:
    """A tree of segments with its true poses (F, S, 4, 4) and artifact, a list of (F, m, 3), m."""

    segments: list[SegmentProblem]
    joints: list[JointProblem]
    poses: FloatArray
    displacement: list[FloatArray]


def random_covariance(rng: np.random.Generator, size: int, sd: float, share: float = 0.5) -> FloatArray:
    """Full-rank covariance with strong correlation: a share in random directions, the rest independent."""
    factor = rng.standard_normal((size, 3))
    full = factor @ factor.T
    full *= size / np.trace(full)
    return np.asarray(sd**2 * (share * full + (1 - share) * np.eye(size)), dtype=np.float64)


def made_artifact(
    rng: np.random.Generator,
    markers: int,
    joints: Sequence[int],
    slope: float = 0.02,
    subject_sd: float = 0.008,
    residual_sd: float = 0.004,
) -> FeatureArtifact:
    """Artifact that follows flexion and its square at some joints; slope and subject_sd in m/rad."""
    n = 3 * markers
    terms = tuple(Term(joint, 0, power) for joint in joints for power in (1, 2))
    mixing = np.eye(len(terms)) + 0.2 * np.tril(rng.standard_normal((len(terms), len(terms))), -1)
    mean = slope * rng.standard_normal((len(terms) + 1, n))
    mean[0] = 0.0
    features = random_covariance(rng, len(terms) + 1, 1.0)
    features[0, 0] += 1.0
    outputs = random_covariance(rng, n, subject_sd)
    return FeatureArtifact(
        basis=Basis(terms, mixing),
        weights=Weights(mean, np.asarray(np.kron(features, outputs))),
        residual=random_covariance(rng, n, residual_sd),
        time_scales=TimeScales.single(0.1),
        reference=REFERENCE_ANGLES,
        magnitude=np.zeros((n, n)),
    )


def made_joints(count: int, travel_sd: float = 0.005) -> list[JointProblem]:
    """The joints of a chain of count segments."""
    return [
        JointProblem(index, index + 1, CONVENTIONS[index], *CENTRES[index], travel_sd)
        for index in range(count - 1)
    ]


def made_angles(rng: np.random.Generator, frames: int, joints: int) -> FloatArray:
    """Joint angles (F, J, 3) rad: flexion 0–60°, the others within 8°."""
    angles: FloatArray = np.radians(8.0) * rng.uniform(-1, 1, (frames, joints, 3))
    angles[..., 0] = np.radians(rng.uniform(0, 60, (frames, joints)))
    return angles


def chain_poses(
    rng: np.random.Generator, angles: FloatArray, travel_sd: float = 0.005, count: int | None = None
) -> FloatArray:
    """Poses (F, S, 4, 4) of a chain with these joint angles; the joint centres travel."""
    frames = angles.shape[0]
    count = angles.shape[1] + 1 if count is None else count
    root = Rotation.from_rotvec(0.4 * rng.standard_normal((frames, 3))).as_matrix()
    poses = np.empty((frames, count, 4, 4))
    poses[:, 0] = se3.make_pose(root, rng.uniform(-1, 1, (frames, 3)))
    for index in range(count - 1):
        rotation = rotation_from_angles(CONVENTIONS[index], angles[:, index])
        proximal, distal = CENTRES[index]
        travel = travel_sd * rng.standard_normal((frames, 3))
        poses[:, index + 1] = poses[:, index] @ se3.make_pose(rotation, proximal + travel - rotation @ distal)
    return poses


def draw_artifact(rng: np.random.Generator, artifact: Artifact, angles: FloatArray) -> FloatArray:
    """Artifact (F, n) m from the prior itself at fixed angles, every frame on its own."""
    moments = artifact.moments(angles)
    factor = np.linalg.cholesky(moments.covariance)
    noise = rng.standard_normal(moments.mean.shape)
    drawn: FloatArray = moments.mean + np.einsum("fab,fb->fa", factor, noise)
    return drawn


def draw_trial_artifact(
    rng: np.random.Generator, artifact: Artifact, angles: FloatArray, step: float
) -> FloatArray:
    """Artifact (F, n) m of one trial from the prior itself: weights once, the residual decaying in time."""
    moments = artifact.moments(angles)
    frames, n = moments.mean.shape
    size = moments.features.shape[1]
    factor = np.linalg.cholesky(artifact.constant_covariance)
    weights = (factor @ rng.standard_normal(size * n)).reshape(size, n)
    decay = np.exp(-step / artifact.time_constant)
    root = np.linalg.cholesky(artifact.residual)
    residual = np.zeros((frames, n))
    residual[0] = root @ rng.standard_normal(n)
    for frame in range(1, frames):
        residual[frame] = decay * residual[frame - 1] + np.sqrt(1.0 - decay**2) * root @ rng.standard_normal(
            n
        )
    drawn: FloatArray = moments.mean + moments.features @ weights + residual
    return drawn


def made_problem(
    seed: int,
    count: int,
    frames: int,
    *,
    travel_sd: float = 0.005,
    marker_sd: float = 0.0005,
    hidden: BoolArray | None = None,
    artifacts: Sequence[Artifact] | None = None,
) -> Problem:
    """Poses and artifact drawn from the model, a chain of count segments at F frames.

    hidden: shape (F, markers of all segments), in segment order.
    """
    rng = np.random.default_rng(seed)
    joints = made_joints(count, travel_sd)
    angles = made_angles(rng, frames, count - 1)
    poses = chain_poses(rng, angles, travel_sd if np.isfinite(travel_sd) else 0.02, count)
    segments, displacement = [], []
    first = 0
    for index in range(count):
        cluster = CLUSTERS[index]
        adjacent = [joint for joint in (index - 1, index) if 0 <= joint < count - 1]
        artifact = artifacts[index] if artifacts else made_artifact(rng, len(cluster), adjacent)
        moved = draw_artifact(rng, artifact, angles).reshape(frames, -1, 3)
        points = se3.transform_points(poses[:, index], cluster + moved)
        points = points + marker_sd * rng.standard_normal(points.shape)
        if hidden is not None:
            points[hidden[:, first : first + len(cluster)]] = np.nan
        first += len(cluster)
        segments.append(SegmentProblem(index, points, cluster, artifact))
        displacement.append(moved)
    return Problem(segments, joints, poses, displacement)


def away(rng: np.random.Generator, poses: FloatArray, degrees: float, shift: float) -> FloatArray:
    """Poses turned by about so many degrees and moved by about so many metres from the given ones."""
    step = rng.standard_normal((*poses.shape[:-2], 6))
    step[..., :3] *= np.radians(degrees) / np.linalg.norm(step[..., :3], axis=-1, keepdims=True)
    step[..., 3:] *= shift / np.linalg.norm(step[..., 3:], axis=-1, keepdims=True)
    return poses @ se3.exp(step)
