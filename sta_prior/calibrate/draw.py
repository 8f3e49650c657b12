"""Trials drawn from the smoother's own model, with a truth that is known.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.
The model: solve/trajectory.py, solve/motion.py.

A thigh and a shank, invented. Motion is simulated from the motion prior, from a start that is plausible (the
model's start is flat). The artifact is the prior's mean plus features times weights, drawn once a trial, plus
a residual of full covariance that decays with its time constant.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from sta_prior import se3
from sta_prior.angles import JointConvention, rotation_from_angles
from sta_prior.calibrate.joined import join_motions
from sta_prior.checks import BoolArray, FloatArray
from sta_prior.prior.artifact import FeatureArtifact
from sta_prior.prior.basis import Basis, Term
from sta_prior.prior.hierarchy import Weights
from sta_prior.prior.interface import design_of
from sta_prior.prior.time_scales import TimeScales
from sta_prior.rigid import fit_poses
from sta_prior.solve.motion import MotionPrior
from sta_prior.solve.smoother import make_problem
from sta_prior.solve.terms import JointProblem, SegmentProblem, angles_and_jacobians
from sta_prior.solve.trajectory import TrajectoryProblem

JointForm = Literal["free", "soft"]
Noise = Literal["model", "white"]

STEP = 0.01
FRAMES = 60
MARKER_SD = 0.0005
TRAVEL_SD = 0.004
DECAY_TIME = 0.1

CLUSTERS = (
    np.array([[0.06, -0.10, 0.05], [0.07, -0.22, -0.02], [-0.01, -0.15, 0.09], [0.05, -0.30, 0.06]]),
    np.array([[0.04, 0.30, 0.04], [0.05, 0.18, -0.01], [-0.02, 0.22, 0.06], [0.04, 0.10, 0.03]]),
)
"""Markers of thigh and shank in the bone frames (x forward, y up, z right), m. Invented."""

CENTRES = (np.array([0.0, -0.40, 0.0]), np.array([0.0, 0.395, 0.0]))
REFERENCE = np.radians([[4.0, 2.0, -3.0]])

SHARES = (1.0, 0.6)
"""Artifact of the shank against the thigh's."""

SLOPE, BEND = 0.012, 0.005
"""Mean artifact, m/rad of flexion and m/rad² of its square."""

OFFSET_SD, SLOPE_SD, BEND_SD, RESIDUAL_SD = 0.003, 0.006, 0.003, 0.0025
"""Spread of a trial's constant, slope and bend; of the residual. m, m/rad, m/rad², m."""

DENSITY = np.array([0.2, 0.2, 0.6, 1.0, 1.0, 1.0])
"""Of the white noise on the acceleration, rad²/s³ and m²/s³. Of rotation less in trials longer than FRAMES:
an integral of white noise would turn the knee round."""

TURN_SD, MOVE_SD = np.array([0.2, 0.2, 0.5]), 0.5
"""Velocities at the start, rad/s (less in longer trials) and m/s."""


@dataclass(frozen=True)
class DrawnTrial:
    """A drawn trial.

    problem: as the smoother takes it, with the motion's true density; poses: (F, 2, 4, 4), the truth;
    angles: (F, 1, 3) rad, the truth; start: (F, 2, 4, 4), rigid fits, to begin from.
    """

    problem: TrajectoryProblem
    poses: FloatArray
    angles: FloatArray
    start: FloatArray


@dataclass(frozen=True)
class Recipe:
    """How trials are drawn.

    frames: F; joint: "free" constrains nothing, "soft" travels by TRAVEL_SD; noise: the instrument's, as the
    model has it or truly white; artifact: factor on all of the artifact; decay_time: of the residual that is
    drawn, s (the prior always says DECAY_TIME).
    """

    frames: int = FRAMES
    joint: JointForm = "free"
    noise: Noise = "model"
    artifact: float = 1.0
    decay_time: float = DECAY_TIME

    @property
    def slower(self) -> float:
        """Factor on angular velocities that keeps angles within the same range in longer trials."""
        return min(1.0, FRAMES / self.frames)

    @property
    def density(self) -> FloatArray:
        """Of the white noise on the acceleration, (6,) rad²/s³ and m²/s³."""
        return np.asarray(DENSITY * np.repeat([self.slower**3, 1.0], 3))


def _covariance(rng: np.random.Generator, size: int, sd: float) -> FloatArray:
    """Full covariance with strong correlation: half in three random directions, half independent."""
    factor = rng.standard_normal((size, 3))
    full = factor @ factor.T
    return np.asarray(sd**2 * (0.5 * full * size / np.trace(full) + 0.5 * np.eye(size)))


def draw_artifact(rng: np.random.Generator, markers: int, size: float) -> FeatureArtifact:
    """An artifact prior of some markers that follows knee flexion and its square; size: a factor."""
    n = 3 * markers
    mean = size * np.array([0.0, SLOPE, BEND])[:, None] * rng.standard_normal((3, n))
    features = np.diag(np.array([OFFSET_SD, SLOPE_SD, BEND_SD])) @ _correlation(rng, 3)
    features = features @ features.T
    return FeatureArtifact(
        basis=Basis((Term(0, 0, 1), Term(0, 0, 2)), np.eye(2)),
        weights=Weights(mean, np.asarray(np.kron(features, _covariance(rng, n, size)))),
        residual=_covariance(rng, n, size * RESIDUAL_SD),
        time_scales=TimeScales.single(DECAY_TIME),
        reference=REFERENCE,
        magnitude=np.zeros((n, n)),
    )


def _correlation(rng: np.random.Generator, size: int) -> FloatArray:
    """Factor of a random correlation matrix: rows of unit length."""
    rows = np.eye(size) + 0.3 * np.tril(rng.standard_normal((size, size)), -1)
    return np.asarray(rows / np.linalg.norm(rows, axis=1, keepdims=True))


def draw_start(rng: np.random.Generator, slower: float) -> tuple[FloatArray, FloatArray]:
    """Poses (2, 4, 4) and velocities (2, 6) of thigh and shank in the first frame; slower: on turning."""
    angles = np.radians([30.0, 2.0, 0.0]) + np.radians([12.0, 3.0, 4.0]) * rng.standard_normal(3)
    thigh = se3.make_pose(se3.rotation_exp(0.3 * rng.standard_normal(3)), rng.standard_normal(3))
    rotation = rotation_from_angles(JointConvention("knee", "right"), angles)
    shank = thigh @ se3.make_pose(rotation, CENTRES[0] - rotation @ CENTRES[1])
    velocity = np.zeros((2, 6))
    velocity[:, :3] = slower * TURN_SD * rng.standard_normal((2, 3))
    velocity[0, 3:] = MOVE_SD * rng.standard_normal(3)
    # The shank starts with the knee's velocity: in its own axes, v = v_knee − ω × centre.
    knee = rotation.T @ (velocity[0, 3:] + np.cross(velocity[0, :3], CENTRES[0]))
    velocity[1, 3:] = knee - np.cross(velocity[1, :3], CENTRES[1])
    return np.stack([thigh, shank]), velocity


def draw_motion(
    rng: np.random.Generator, motion: MotionPrior, pose: FloatArray, velocity: FloatArray, frames: int
) -> tuple[FloatArray, FloatArray]:
    """Motion of one segment from the prior: poses (F, 4, 4) and velocities (F, 6).

    The innovations (ξ, J_r(ξ)⁻¹ϖ′) of every step are drawn, which gives the model's density but for the
    determinant of J_r(ξ), 1 − |rotation|²/6 or so of one step.
    """
    root = np.linalg.cholesky(np.linalg.inv(motion.precision))
    noise = rng.standard_normal((frames - 1, 2, 6)) * np.sqrt(motion.density)
    noise = np.einsum("ij,fja->fia", root, noise)
    poses, velocities = np.empty((frames, 4, 4)), np.empty((frames, 6))
    poses[0], velocities[0] = pose, velocity
    for frame in range(frames - 1):
        tangent = motion.step * velocities[frame] + noise[frame, 0]
        poses[frame + 1] = poses[frame] @ se3.exp(tangent)
        velocities[frame + 1] = se3.right_jacobian(tangent) @ (velocities[frame] + noise[frame, 1])
    return poses, velocities


def draw_residual(rng: np.random.Generator, covariance: FloatArray, recipe: Recipe) -> FloatArray:
    """Residual artifact plus instrument noise, (F, n) m.

    The model whitens their sum: first R + σ², then innovations of (1 − ρ²)R + (1 + ρ²)σ². Noise that is
    truly white adds σ² to every frame and correlates neighbouring innovations by −ρσ².
    """
    n, decay = covariance.shape[0], float(np.exp(-STEP / recipe.decay_time))
    white = rng.standard_normal((recipe.frames, n))
    modelled = MARKER_SD**2 * np.eye(n) * (recipe.noise == "model")
    first = np.linalg.cholesky(covariance + modelled)
    later = np.linalg.cholesky((1.0 - decay**2) * covariance + (1.0 + decay**2) * modelled)
    result = np.empty_like(white)
    result[0] = first @ white[0]
    for frame in range(1, recipe.frames):
        result[frame] = decay * result[frame - 1] + later @ white[frame]
    if recipe.noise == "white":
        result += MARKER_SD * rng.standard_normal(result.shape)
    return result


def draw_hidden(rng: np.random.Generator, frames: int, markers: int) -> BoolArray:
    """One marker hidden for a third of the trial, (F, m)."""
    hidden = np.zeros((frames, markers), dtype=bool)
    first = int(rng.integers(0, frames - frames // 3))
    hidden[first : first + frames // 3, int(rng.integers(markers))] = True
    return hidden


def draw_trial(rng: np.random.Generator, recipe: Recipe) -> DrawnTrial:
    """Draw priors, motion, artifact and markers of one trial."""
    motions = [MotionPrior(2, STEP, recipe.density) for _ in CLUSTERS]
    travel_sd = TRAVEL_SD if recipe.joint == "soft" else np.inf
    joint = JointProblem(0, 1, JointConvention("knee", "right"), *CENTRES, travel_sd)
    first, velocity = draw_start(rng, recipe.slower)
    drawn = [draw_motion(rng, *own, recipe.frames) for own in zip(motions, first, velocity, strict=True)]
    poses = np.stack([own for own, _ in drawn], axis=1)
    velocities = np.stack([own for _, own in drawn], axis=1)
    if joint.constrains:
        poses = join_motions(rng, motions, joint, poses, velocities)
    angles, _ = angles_and_jacobians([joint], poses)
    segments = []
    for index, (cluster, share) in enumerate(zip(CLUSTERS, SHARES, strict=True)):
        artifact = draw_artifact(rng, cluster.shape[0], share * recipe.artifact)
        design = design_of(artifact, angles)
        n = design.mean.shape[1]
        values, vectors = np.linalg.eigh(artifact.constant_covariance)
        weights = vectors @ (np.sqrt(np.maximum(values, 0.0)) * rng.standard_normal(values.size))
        moved = design.mean + design.features @ weights.reshape(-1, n)
        moved = moved + draw_residual(rng, artifact.residual, recipe)
        points = se3.transform_points(poses[:, index], cluster + moved.reshape(recipe.frames, -1, 3))
        points[draw_hidden(rng, recipe.frames, cluster.shape[0])] = np.nan
        segments.append(SegmentProblem(index, points, cluster, artifact))
    start = np.stack([fit_poses(own.reference, own.points).pose for own in segments], axis=1)
    problem = make_problem(segments, [joint], start, STEP, MARKER_SD)
    return DrawnTrial(replace(problem, motions=motions), poses, angles, start)
