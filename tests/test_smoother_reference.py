"""A linear case against one dense Gaussian, written from the model's definition and nothing of the solver.

Two segments about one posture, with displacements so small that all is linear. The residual artifact's
whole covariance, ρ^|t−s| R, and the joint centre's are dense; trial-constant unknowns are integrated out
beforehand; what is hidden is deleted from the rows. Nothing is prewhitened, and there are no hidden unknowns.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from made_problems import CENTRES, CLUSTERS, CONVENTIONS, random_covariance
from made_trajectories import all_modes

from sta_prior import se3
from sta_prior.checks import BoolArray, FloatArray
from sta_prior.prior.artifact import FeatureArtifact
from sta_prior.prior.basis import Basis, Term
from sta_prior.prior.hierarchy import Weights
from sta_prior.prior.time_scales import TimeScales
from sta_prior.solve.motion import MotionPrior
from sta_prior.solve.smoother import smooth
from sta_prior.solve.terms import JointProblem, SegmentProblem
from sta_prior.solve.trajectory import RATE_SD, TrajectoryProblem
from sta_prior.solve.trajectory_posterior import describe_trajectory

STEP = 0.01
TINY = 1e-6
"""Size of the made-up displacements, in parts of themselves."""

REFERENCE_ANGLES = np.radians([[10.0, -6.0, 4.0]])
DENSITY = (np.array([30.0, 20.0, 40.0, 8.0, 5.0, 9.0]), np.array([50.0, 10.0, 15.0, 20.0, 6.0, 3.0]))
TRAVEL_SD = 0.004


@dataclass(frozen=True)
class LinearCase:
    """Displacements (F, 2, 12) m seen in the bone frames at the posture, NaN where hidden."""

    artifacts: list[FeatureArtifact]
    displacement: FloatArray
    marker_sd: float

    @property
    def frames(self) -> int:
        return int(self.displacement.shape[0])


def made_case(seed: int, hidden: BoolArray, marker_sd: float, times: tuple[float, float]) -> LinearCase:
    """Artifact linear in flexion and adduction about another posture; hidden: (F, 8); times: decay, s."""
    rng = np.random.default_rng(seed)
    artifacts = []
    for time in times:
        mean = 0.03 * rng.standard_normal((3, 12))
        mean[0] = 0.0
        features = random_covariance(rng, 3, 1.0)
        artifacts.append(
            FeatureArtifact(
                basis=Basis((Term(0, 0, 1), Term(0, 1, 1)), np.eye(2)),
                weights=Weights(mean, np.asarray(np.kron(features, random_covariance(rng, 12, 0.006)))),
                residual=random_covariance(rng, 12, 0.003),
                time_scales=TimeScales.single(time),
                reference=REFERENCE_ANGLES,
                magnitude=np.zeros((12, 12)),
            )
        )
    displacement = TINY * 0.01 * rng.standard_normal((len(hidden), 2, 12))
    displacement[np.repeat(hidden.reshape(len(hidden), 2, 4), 3, axis=2)] = np.nan
    return LinearCase(artifacts, displacement, marker_sd)


FEATURES = np.array([1.0, -REFERENCE_ANGLES[0, 0], -REFERENCE_ANGLES[0, 1]])
"""Features (1, differences to the reference) at the posture, all angles zero."""


def posture() -> FloatArray:
    """Poses (2, 4, 4): the thigh somewhere, the shank straight below."""
    thigh = se3.exp(np.array([0.3, -0.2, 0.5, 1.0, 0.9, -0.4]))
    below = np.eye(4)
    below[:3, 3] = CENTRES[0][0] - CENTRES[0][1]
    return np.stack([thigh, thigh @ below])


def expected_places(case: LinearCase, index: int) -> FloatArray:
    """Markers where the prior expects them at the posture, (4, 3) m, bone frame."""
    return CLUSTERS[index] + (FEATURES @ case.artifacts[index].weights.mean).reshape(4, 3)


# --- the reference ----------------------------------------------------------------------------------


def cross_matrix(vector: FloatArray) -> FloatArray:
    x, y, z = vector
    return np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])


def linear_rows(case: LinearCase) -> tuple[list[FloatArray], FloatArray]:
    """Derivatives of one frame's displacements (12) by segment, and of the joint centre's travel (3), in the
    frame's twelve small turns and shifts (thigh's ω, t; shank's ω, t).
    """
    # Right knee at zero: flexion −z, adduction x, of the shank's turn less the thigh's.
    angles = np.zeros((2, 12))
    angles[0, [2, 8]] = 1.0, -1.0
    angles[1, [0, 6]] = -1.0, 1.0
    rows = []
    for index in range(2):
        own = np.zeros((12, 12))
        for marker, place in enumerate(expected_places(case, index)):
            here = slice(3 * marker, 3 * marker + 3)
            own[here, 6 * index : 6 * index + 3] = -cross_matrix(place)
            own[here, 6 * index + 3 : 6 * index + 6] = np.eye(3)
        rows.append(own + case.artifacts[index].weights.mean[1:].T @ angles)
    proximal, distal = CENTRES[0]
    travel = np.zeros((3, 12))
    travel[:, :3], travel[:, 3:6] = cross_matrix(proximal), -np.eye(3)
    travel[:, 6:9], travel[:, 9:] = -cross_matrix(distal), np.eye(3)
    return rows, travel


def memory(frames: int, time: float) -> FloatArray:
    """Correlation of a first-order process over the frames."""
    times = STEP * np.arange(frames)
    return np.asarray(np.exp(-np.abs(times[:, None] - times) / time))


def dense_answer(case: LinearCase) -> tuple[FloatArray, FloatArray]:
    """Turns and shifts (F, 12) and their covariance (F, 12, 12)."""
    frames = case.frames
    size = 24 * frames
    information, pull = np.zeros((size, size)), np.zeros(size)
    place = np.arange(size).reshape(frames, 2, 12)  # Frame; pose or rate; component.
    rows, travel = linear_rows(case)
    for index, artifact in enumerate(case.artifacts):
        design = np.kron(np.eye(frames), rows[index])
        weights = np.kron(FEATURES, np.eye(12))
        constant = weights @ artifact.weights.covariance @ weights.T
        covariance = np.kron(memory(frames, artifact.time_constant), artifact.residual)
        covariance += np.kron(np.ones((frames, frames)), constant)
        covariance += case.marker_sd**2 * np.eye(12 * frames)
        seen = np.isfinite(case.displacement[:, index].ravel())
        weighed = np.linalg.solve(covariance[np.ix_(seen, seen)], design[seen])
        at = place[:, 0].ravel()
        information[np.ix_(at, at)] += design[seen].T @ weighed
        pull[at] += weighed.T @ case.displacement[:, index].ravel()[seen]
    design = np.kron(np.eye(frames), travel)
    covariance = np.kron(0.5 * TRAVEL_SD**2 * (1.0 + memory(frames, 0.3)), np.eye(3))
    at = place[:, 0].ravel()
    information[np.ix_(at, at)] += design.T @ np.linalg.solve(covariance, design)
    noise = np.array([[STEP**3 / 3.0, STEP**2 / 2.0], [STEP**2 / 2.0, STEP]])
    precision = np.kron(np.linalg.inv(noise), np.diag(1.0 / np.concatenate(DENSITY)))
    ahead = np.kron(np.array([[1.0, STEP], [0.0, 1.0]]), np.eye(12))
    both = np.concatenate([-ahead, np.eye(24)], axis=1)
    for frame in range(frames - 1):
        at = place[frame : frame + 2].ravel()
        information[np.ix_(at, at)] += both.T @ precision @ both
    first = place[0, 1]
    information[first, first] += 1.0 / np.tile(RATE_SD, 2) ** 2
    covariance = np.linalg.inv(information)
    poses = place[:, 0]
    return (covariance @ pull)[poses], np.stack([covariance[np.ix_(at, at)] for at in poses])


# --- the smoother -----------------------------------------------------------------------------------


def smoothed_answer(case: LinearCase) -> tuple[FloatArray, FloatArray]:
    """The same by the smoother, the information of the constants in full."""
    poses, segments = posture(), []
    for index, artifact in enumerate(case.artifacts):
        bone = expected_places(case, index) + case.displacement[:, index].reshape(-1, 4, 3)
        points = se3.transform_points(poses[index], bone)
        segments.append(SegmentProblem(index, points, CLUSTERS[index], artifact))
    problem = TrajectoryProblem(
        segments,
        [JointProblem(0, 1, CONVENTIONS[0], *CENTRES[0], TRAVEL_SD)],
        [MotionPrior(2, STEP, density) for density in DENSITY],
        [all_modes(artifact.constant_covariance, 12) for artifact in case.artifacts],
        STEP,
        case.marker_sd,
    )
    start = np.broadcast_to(poses, (case.frames, 2, 4, 4))
    smoothed = smooth(problem, start, constant_time=1e9)
    assert smoothed.stop_reason.startswith("step below")
    reported = describe_trajectory(smoothed)
    assert reported.determined.all()
    moved = se3.log(se3.inverse(poses) @ reported.poses).reshape(case.frames, 12)
    return moved, reported.covariance


def sizes(covariance: FloatArray) -> FloatArray:
    return np.asarray(np.sqrt(np.einsum("fxx->fx", covariance)))


def check(case: LinearCase, tolerance: float, covariance_tolerance: float) -> None:
    mean, covariance = smoothed_answer(case)
    wanted_mean, wanted = dense_answer(case)
    size = sizes(wanted)
    np.testing.assert_allclose(mean, wanted_mean, rtol=0, atol=tolerance * np.abs(wanted_mean).max())
    correlated = size[:, :, None] * size[:, None, :]
    np.testing.assert_allclose(
        covariance / correlated, wanted / correlated, rtol=0, atol=covariance_tolerance
    )


def hidden_frames(frames: int, kind: str, lost: int = 4) -> BoolArray:
    hidden = np.zeros((frames, 8), dtype=bool)
    if kind in ("markers", "both"):
        hidden[0, 1] = hidden[2:5, 0] = hidden[4:7, 2] = hidden[-3:, 6] = hidden[5, 4:7] = True
    if kind in ("segment", "both"):
        hidden[8 : 8 + lost, 4:] = True
    return hidden


@pytest.mark.parametrize("kind", ["nothing", "markers", "segment", "both"])
def test_without_instrument_noise_the_smoother_is_the_dense_gaussian(kind: str) -> None:
    """Hidden markers and frames without any: what was not measured is dropped, exactly."""
    check(made_case(41, hidden_frames(20, kind), 1e-7, (0.1, 0.05)), 2e-5, 2e-5)


def test_a_segment_out_of_view_at_the_beginning_and_the_end() -> None:
    hidden = hidden_frames(20, "markers")
    hidden[:3, :4] = hidden[-4:, 4:] = True
    check(made_case(42, hidden, 1e-7, (0.1, 0.1)), 2e-5, 2e-5)


def test_a_segment_out_of_view_for_long_loses_a_hundredth_of_its_memory() -> None:
    """A residual correlated by less than 0.01 across the gap is taken for a new one: 0.2 % of an SD."""
    case = made_case(44, hidden_frames(26, "both", lost=12), 1e-7, (0.1, 0.02))
    wanted_mean, wanted = dense_answer(case)
    mean, covariance = smoothed_answer(case)
    np.testing.assert_allclose(sizes(covariance) / sizes(wanted), 1.0, atol=2e-3)
    # Displacements are no draw from the model: measured against the SD that they would have at its size.
    assert np.abs((mean - wanted_mean) / (TINY * sizes(wanted))).max() < 0.05


@pytest.mark.parametrize("time", [1e-9, 0.02, 0.1])
def test_instrument_noise_as_innovations_widens_the_intervals_a_little(time: float) -> None:
    """Innovations of the noise are taken as independent, (1 + ρ²)σ²: they are a moving average, of which the
    slow part is smaller. At σ = 0.5 mm and 3 mm of residual this costs at most 5 % of an SD at 0.1 s
    and 1 % at 0.02 s, and nothing where the residual has no memory.
    """
    case = made_case(45, hidden_frames(40, "both"), 0.0005, (time, time))
    ratio = sizes(smoothed_answer(case)[1]) / sizes(dense_answer(case)[1])
    if time < 1e-3:
        np.testing.assert_allclose(ratio, 1.0, atol=2e-5)
    assert ratio.min() > 1.0 - 2e-5
    assert ratio.max() < (1.05 if time > 0.05 else 1.01)
