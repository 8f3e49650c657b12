"""Made-up trials in time, drawn from the smoother's model, for the tests of the smoother."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from made_problems import CENTRES, CLUSTERS, CONVENTIONS, made_artifact, made_joints
from scipy.spatial.transform import Rotation

from sta_prior import se3
from sta_prior.angles import rotation_from_angles
from sta_prior.checks import BoolArray, FloatArray
from sta_prior.prior.artifact import FeatureArtifact
from sta_prior.prior.hierarchy import Weights
from sta_prior.prior.interface import Artifact, Design, Moments, design_of
from sta_prior.solve.chain import Span
from sta_prior.solve.constants import ConstantModes
from sta_prior.solve.smoother import begin, make_problem
from sta_prior.solve.spans import TrajectorySystem
from sta_prior.solve.terms import JointProblem, SegmentProblem, angles_and_jacobians
from sta_prior.solve.trajectory import Trajectory, TrajectoryProblem, moved, place_hidden

STEP = 0.01
MARKER_SD = 0.0005


@dataclass(frozen=True)
class MadeTrial:
    """Segments and joints as the smoother takes them, with the true poses (F, S, 4, 4)."""

    segments: list[SegmentProblem]
    joints: list[JointProblem]
    poses: FloatArray
    marker_sd: float = MARKER_SD
    step: float = STEP

    def problem(self, order: int = 2, start: FloatArray | None = None) -> TrajectoryProblem:
        """The trajectory problem, motion priors estimated from the true poses or others."""
        look = self.poses if start is None else start
        return make_problem(self.segments, self.joints, look, self.step, self.marker_sd, order)


def made_angles_in_time(frames: int, joints: int, step: float = STEP, cycle: float = 1.0) -> FloatArray:
    """Joint angles (F, J, 3) rad that repeat after a cycle, s."""
    phase = 2.0 * np.pi * step / cycle * np.arange(frames)
    angles = np.empty((frames, joints, 3))
    for joint in range(joints):
        angles[:, joint, 0] = np.radians(30.0 + 25.0 * np.sin(phase + joint))
        angles[:, joint, 1] = np.radians(5.0 * np.sin(phase + 1.0 + joint))
        angles[:, joint, 2] = np.radians(6.0 * np.sin(2.0 * phase + 2.0 + joint))
    return angles


def made_motion(angles: FloatArray, travel: FloatArray, step: float = STEP, cycle: float = 1.0) -> FloatArray:
    """Poses (F, J + 1, 4, 4) of a chain: angles (F, J, 3) rad, travel of the joint centres (F, J, 3) m."""
    frames, count = angles.shape[0], angles.shape[1] + 1
    phase = 2.0 * np.pi * step / cycle * np.arange(frames)
    turn = 0.3 * np.stack([np.sin(phase), np.cos(phase), np.sin(phase + 1.0)], axis=1)
    place = np.stack([0.6 * np.sin(phase), 0.9 + 0.03 * np.sin(2.0 * phase), 0.02 * np.cos(phase)], axis=1)
    poses = np.empty((frames, count, 4, 4))
    poses[:, 0] = se3.make_pose(Rotation.from_rotvec(turn).as_matrix(), place)
    for index in range(count - 1):
        rotation = rotation_from_angles(CONVENTIONS[index], angles[:, index])
        proximal, distal = CENTRES[index]
        poses[:, index + 1] = poses[:, index] @ se3.make_pose(
            rotation, proximal + travel[:, index] - rotation @ distal
        )
    return poses


def correlated(rng: np.random.Generator, covariance: FloatArray, decay: float, frames: int) -> FloatArray:
    """First-order process with a given covariance and correlation from frame to frame, (F, n)."""
    white = rng.standard_normal((frames, covariance.shape[0])) @ np.linalg.cholesky(covariance).T
    for frame in range(1, frames):
        white[frame] = decay * white[frame - 1] + np.sqrt(1.0 - decay**2) * white[frame]
    return np.asarray(white)


def draw_displacement(
    rng: np.random.Generator, artifact: Artifact, angles: FloatArray, step: float
) -> FloatArray:
    """Artifact (F, n) m of one trial: one draw of the trial-constant unknowns, residual correlated."""
    design = design_of(artifact, angles)
    covariance = artifact.constant_covariance
    values, vectors = np.linalg.eigh(covariance)
    weights = vectors @ (np.sqrt(np.maximum(values, 0.0)) * rng.standard_normal(values.size))
    n = design.mean.shape[1]
    decay = float(np.exp(-step / max(artifact.time_constant, 1e-6)))
    residual = correlated(rng, artifact.residual, decay, angles.shape[0])
    drawn: FloatArray = design.mean + design.features @ weights.reshape(-1, n) + residual
    return drawn


def made_trial(
    seed: int,
    count: int,
    frames: int,
    *,
    hidden: BoolArray | None = None,
    artifacts: Sequence[Artifact] | None = None,
    travel_sd: float = 0.004,
    marker_sd: float = MARKER_SD,
    step: float = STEP,
    cycle: float = 1.0,
) -> MadeTrial:
    """A chain of count segments that moves smoothly, once around in a cycle, s; hidden: (F, all markers)."""
    rng = np.random.default_rng(seed)
    angles = made_angles_in_time(frames, count - 1, step, cycle)
    covariance = 0.5 * travel_sd**2 * np.eye(3)
    travel = np.stack(
        [
            np.sqrt(0.5) * travel_sd * rng.standard_normal(3)
            + correlated(rng, covariance, np.exp(-step / 0.3), frames)
            for _ in range(count - 1)
        ],
        axis=1,
    ).reshape(frames, count - 1, 3)
    poses = made_motion(angles, travel, step, cycle)
    segments, first = [], 0
    for index in range(count):
        cluster = CLUSTERS[index]
        adjacent = [joint for joint in (index - 1, index) if 0 <= joint < count - 1]
        artifact = artifacts[index] if artifacts else made_artifact(rng, len(cluster), adjacent)
        displacement = draw_displacement(rng, artifact, angles, step).reshape(frames, -1, 3)
        points = se3.transform_points(poses[:, index], cluster + displacement)
        points = points + marker_sd * rng.standard_normal(points.shape)
        if hidden is not None:
            points[hidden[:, first : first + len(cluster)]] = np.nan
        first += len(cluster)
        segments.append(SegmentProblem(index, points, cluster, artifact))
    return MadeTrial(segments, made_joints(count, travel_sd), poses, marker_sd, step)


@dataclass(frozen=True)
class Widened:
    """An artifact that spreads further beyond a flexion: by one and the same covariance, (n, n) m²."""

    inner: Artifact
    flexion: float
    wider: FloatArray

    @property
    def residual(self) -> FloatArray:
        return self.inner.residual

    @property
    def time_constant(self) -> float:
        return self.inner.time_constant

    @property
    def constant_covariance(self) -> FloatArray:
        return self.inner.constant_covariance

    def growth(self, angles: FloatArray) -> FloatArray:
        beyond: FloatArray = (angles[:, 0, 0] > self.flexion)[:, None, None] * self.wider
        return beyond

    def design(self, angles: FloatArray) -> Design:
        return replace(design_of(self.inner, angles), growth=self.growth(angles))

    def moments(self, angles: FloatArray) -> Moments:
        inner = self.inner.moments(angles)
        return replace(inner, covariance=inner.covariance + self.growth(angles))


def all_modes(covariance: FloatArray, outputs: int) -> ConstantModes:
    """Every direction of the trial-constant unknowns, none left out."""
    values, vectors = np.linalg.eigh(covariance)
    root = vectors * np.sqrt(np.maximum(values, 0.0))
    return ConstantModes(root.reshape(-1, outputs, values.size), np.zeros((outputs, outputs)))


def wobbled(problem: TrajectoryProblem, start: FloatArray, seed: int, size: float = 1.0) -> Trajectory:
    """A state off the optimum: about a degree, 3 mm and a tenth of every rate; hidden outputs 3 mm."""
    rng = np.random.default_rng(seed)
    hidden = place_hidden(problem)
    state = begin(problem, hidden, start)
    step = np.zeros((problem.frames, problem.moving + hidden.count))
    poses, segments = problem.poses, len(problem.segments)
    step[:, :poses] = rng.standard_normal((problem.frames, poses)) * np.tile(
        np.repeat([0.02, 0.003], 3), segments
    )
    step[:, poses : poses + hidden.count] = 0.003 * rng.standard_normal((problem.frames, hidden.count))
    rates = 0.1 * rng.standard_normal(state.rates.shape) * np.abs(state.rates).max(axis=(0, 1))
    step[:, poses + hidden.count :] = rates.reshape(problem.frames, -1)
    return moved(problem, state, size * step, size * rng.standard_normal(problem.constants))


def dense_system(system: TrajectorySystem) -> tuple[FloatArray, FloatArray]:
    """Information and gradient over all frames' unknowns and the constants, without the constants' prior."""
    frames = system.problem.frames
    return dense_from(system(0, frames), frames)


def dense_from(span: Span, frames: int) -> tuple[FloatArray, FloatArray]:
    """The same from one span of all frames."""
    size, constants = span.coupling.shape[1:]
    n = frames * size
    information = np.zeros((n + constants, n + constants))
    for frame in range(frames):
        here, after = slice(frame * size, (frame + 1) * size), slice((frame + 1) * size, (frame + 2) * size)
        information[here, here] = span.diagonal[frame]
        if frame + 1 < frames:
            information[after, here] = span.lower[frame]
            information[here, after] = span.lower[frame].T
    information[:n, n:] = span.coupling.reshape(n, constants)
    information[n:, :n] = information[:n, n:].T
    gradient = np.concatenate([span.gradient.reshape(-1), np.zeros(constants)])
    if span.constants_information is not None and span.constants_gradient is not None:
        information[n:, n:] = span.constants_information
        gradient[n:] = span.constants_gradient
    return information, gradient


def motion_only(problem: TrajectoryProblem, state: Trajectory) -> tuple[TrajectoryProblem, Trajectory]:
    """The same without a marker in view and without joints: what is left is the motion priors."""
    segments = [replace(segment, points=np.full_like(segment.points, np.nan)) for segment in problem.segments]
    joints = [replace(joint, travel_sd=np.inf) for joint in problem.joints]
    bare = replace(problem, segments=segments, joints=joints)
    nothing = np.zeros((problem.frames, 0))
    return bare, replace(state, hidden=nothing, constants=np.zeros(bare.constants))


def angles_of(joints: list[JointProblem], poses: FloatArray) -> FloatArray:
    """Joint angles (F, J, 3) rad."""
    return angles_and_jacobians(joints, poses)[0]


def chosen(artifact: FeatureArtifact, markers: Sequence[int]) -> FeatureArtifact:
    """The artifact of some markers, in the order given."""
    features, n = artifact.weights.mean.shape
    outputs = (3 * np.array(markers)[:, None] + np.arange(3)).ravel()
    both = (n * np.arange(features)[:, None] + outputs).ravel()
    square = np.ix_(outputs, outputs)
    weights = Weights(artifact.weights.mean[:, outputs], artifact.weights.covariance[np.ix_(both, both)])
    return replace(
        artifact, weights=weights, residual=artifact.residual[square], magnitude=artifact.magnitude[square]
    )


def permuted(segment: SegmentProblem, markers: Sequence[int]) -> SegmentProblem:
    """A segment with some of its markers, in the order given."""
    at = list(markers)
    assert isinstance(segment.artifact, FeatureArtifact)
    artifact = chosen(segment.artifact, markers)
    return replace(segment, points=segment.points[:, at], reference=segment.reference[at], artifact=artifact)


def only_markers(trial: MadeTrial, index: int, markers: Sequence[int]) -> MadeTrial:
    """The trial with some of one segment's markers."""
    segments = list(trial.segments)
    segments[index] = permuted(segments[index], markers)
    return replace(trial, segments=segments)


def scaled(
    problem: TrajectoryProblem, state: Trajectory, factor: float
) -> tuple[TrajectoryProblem, Trajectory]:
    """Every length times a factor, in problem and state."""
    lengths = np.repeat([1.0, factor], 3)
    segments = []
    for segment in problem.segments:
        artifact = segment.artifact
        assert isinstance(artifact, FeatureArtifact)
        weights = Weights(factor * artifact.weights.mean, factor**2 * artifact.weights.covariance)
        larger = replace(
            artifact,
            weights=weights,
            residual=factor**2 * artifact.residual,
            magnitude=factor**2 * artifact.magnitude,
        )
        points, reference = factor * segment.points, factor * segment.reference
        segments.append(replace(segment, points=points, reference=reference, artifact=larger))
    joints = [
        replace(
            joint,
            centre_proximal=factor * joint.centre_proximal,
            centre_distal=factor * joint.centre_distal,
            travel_sd=factor * joint.travel_sd,
        )
        for joint in problem.joints
    ]
    motions = [replace(motion, density=motion.density * lengths**2) for motion in problem.motions]
    modes = [ConstantModes(factor * own.modes, factor**2 * own.rest) for own in problem.modes]
    larger_problem = replace(
        problem,
        segments=segments,
        joints=joints,
        motions=motions,
        modes=modes,
        marker_sd=factor * problem.marker_sd,
    )
    poses = state.poses.copy()
    poses[..., :3, 3] *= factor
    return larger_problem, replace(
        state, poses=poses, rates=state.rates * lengths, hidden=factor * state.hidden
    )
