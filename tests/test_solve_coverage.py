"""Do the intervals tell the truth? Artifact and travel drawn from a learned, bound prior, at fixed angles.

The poses keep a flat prior, so that coverage over frames is coverage over repeated data. A rate over F
independent frames lies within 4·√(0.9·0.1/F) of 0.9 but for one case in 16 000.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from made_problems import draw_artifact, made_angles
from scipy.spatial.transform import Rotation
from scipy.stats import chi2, kstest

from sta_prior import se3
from sta_prior.angles import rotation_from_angles
from sta_prior.checks import BoolArray, FloatArray
from sta_prior.errors import StaPriorWarning
from sta_prior.pairs import pair
from sta_prior.prior import learn
from sta_prior.prior.base import Binding
from sta_prior.simulate import write_study
from sta_prior.solve.frame import MARKER_SD, bridge, first_look, solve_frames
from sta_prior.solve.posterior import FrameSolution
from sta_prior.solve.terms import JointProblem, SegmentProblem
from sta_prior.study import Trial, read_study

NORMAL_90 = 1.6448536269514722
FRAMES = 2500
BOUND = 4.0 * np.sqrt(0.9 * 0.1 / FRAMES)
HIDDEN = 2  # marker of the thigh


@dataclass(frozen=True)
class Drawn:
    """Truth of every frame, and what the solver made of it."""

    poses: FloatArray
    angles: FloatArray
    displacement: list[FloatArray]
    rigid: FloatArray
    result: FrameSolution


@pytest.fixture(scope="module")
def bound(tmp_path_factory: pytest.TempPathFactory) -> tuple[Trial, Binding]:
    """An archived courier's trial and the prior learned from four others, bound to it."""
    folder: Path = tmp_path_factory.mktemp("couriers") / "study"
    write_study(folder, 5, "small")
    study = read_study(folder / "study.toml")
    trial = study.trial("K10", "stair-up_01")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", StaPriorWarning)
        return trial, learn(pair(study)).bind(trial)


@pytest.fixture(scope="module", params=["all seen", "a marker hidden"])
def drawn(request: pytest.FixtureRequest, bound: tuple[Trial, Binding]) -> Drawn:
    trial, binding = bound
    reference = trial.subject.reference()
    lab = trial.subject.lab
    joint = lab.joints[0]
    rng = np.random.default_rng(90)
    angles = made_angles(rng, FRAMES, 1)
    root = Rotation.from_rotvec(0.5 * rng.standard_normal((FRAMES, 3))).as_matrix()
    thigh = se3.make_pose(root, rng.uniform(-1, 1, (FRAMES, 3)))
    proximal, distal = reference.joint_centres[0]
    knee = rotation_from_angles(joint.convention, angles[:, 0])
    travel = joint.travel_sd * rng.standard_normal((FRAMES, 3))
    poses = np.stack([thigh, thigh @ se3.make_pose(knee, proximal + travel - knee @ distal)], axis=1)
    segments, displacement = [], []
    for index, segment in enumerate(lab.segments):
        own = reference.markers[lab.marker_segment == index]
        artifact = binding.artifacts[segment.name]
        moved = draw_artifact(rng, artifact, angles)
        points = se3.transform_points(poses[:, index], own + moved.reshape(FRAMES, -1, 3))
        points += MARKER_SD * rng.standard_normal(points.shape)
        if request.param == "a marker hidden" and index == 0:
            points[:, HIDDEN] = np.nan
        segments.append(SegmentProblem(index, points, own, artifact))
        displacement.append(moved)
    joints = [JointProblem(0, 1, joint.convention, proximal, distal, joint.travel_sd)]
    rigid = first_look(segments, 2)[0]
    return Drawn(poses, angles, displacement, rigid, solve_frames(segments, joints, bridge(rigid, joints)))


def coverage(error: FloatArray, sd: FloatArray) -> FloatArray:
    inside: BoolArray = np.abs(error) < NORMAL_90 * sd
    rate: FloatArray = inside.mean(axis=0)
    return rate


def pose_errors(drawn: Drawn, estimate: FloatArray | None = None) -> FloatArray:
    estimate = drawn.result.poses if estimate is None else estimate
    return se3.log(se3.inverse(estimate) @ drawn.poses).reshape(FRAMES, 12)


def test_every_frame_settles(drawn: Drawn) -> None:
    assert drawn.result.determined.all()
    assert drawn.result.iterations < 20


def test_pose_intervals_cover(drawn: Drawn) -> None:
    sd = np.sqrt(np.einsum("fxx->fx", drawn.result.covariance))
    assert np.abs(coverage(pose_errors(drawn), sd) - 0.9).max() < BOUND
    # The intervals speak of degrees: errors far above what linearisation could hide.
    assert np.degrees(sd[:, 1]).mean() > 2.0


def test_whole_pose_covariance_is_that_of_the_errors(drawn: Drawn) -> None:
    """Normalised squared error of both bones together has mean 12, SD √(24/F); 2 % for curvature."""
    error = pose_errors(drawn)
    squared = np.einsum("fx,fx->f", error, np.linalg.solve(drawn.result.covariance, error[..., None])[..., 0])
    assert abs(squared.mean() / 12 - 1.0) < 4 * np.sqrt(2 / (12 * FRAMES)) + 0.02


def test_angle_and_travel_intervals_cover(drawn: Drawn) -> None:
    rate = coverage(drawn.result.angles - drawn.angles, drawn.result.angle_sd)
    assert np.abs(rate - 0.9).max() < BOUND
    assert np.all(drawn.result.travel_sd < 0.0051)


def test_artifact_intervals_cover_hidden_markers_too(drawn: Drawn) -> None:
    for index in range(2):
        error = drawn.displacement[index] - drawn.result.artifact[index]
        rate = coverage(error, drawn.result.artifact_sd[index])
        assert np.abs(rate - 0.9).max() < BOUND


def test_conflict_follows_its_law_in_linked_bones(drawn: Drawn) -> None:
    """χ² with 3m − 6 degrees for m seen markers; Kolmogorov–Smirnov at 1 %: gap below 1.63/√F."""
    for index in range(2):
        freedom = drawn.result.conflict_freedom[:, index]
        assert np.unique(freedom).tolist() in ([9.0], [6.0])
        gap = kstest(drawn.result.conflict[:, index], chi2(freedom[0]).cdf).statistic
        assert gap < 1.63 / np.sqrt(FRAMES)


def test_the_prior_beats_the_rigid_fit_on_its_own_draws(drawn: Drawn) -> None:
    """Least that a right prior must do; says nothing of a wrong one."""
    error = np.sqrt((pose_errors(drawn) ** 2).mean(axis=0))
    rigid = np.sqrt((pose_errors(drawn, drawn.rigid) ** 2).mean(axis=0))
    assert np.all(error < rigid)
    assert (error / rigid).mean() < 0.8
