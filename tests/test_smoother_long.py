"""Long trials: what a trial says of its constants is bounded, and repeating it makes no interval shorter."""

from __future__ import annotations

import functools
import importlib
from dataclasses import dataclass, replace

import numpy as np
import pytest
from made_problems import made_artifact
from made_trajectories import MadeTrial, made_trial

from sta_prior.checks import FloatArray
from sta_prior.solve.chain import factor
from sta_prior.solve.posterior import FrameSolution
from sta_prior.solve.smoother import CONSTANT_TIME, Smoothed, smooth
from sta_prior.solve.spans import TrajectorySystem
from sta_prior.solve.trajectory_posterior import describe_trajectory

# By name: the package's own `solve` is the function.
SMOOTHER_MODULE = importlib.import_module("sta_prior.solve.smoother")

STEP = 0.04
CYCLE = 25
"""Frames of one cycle, 1 s."""


def repeated(times: int) -> MadeTrial:
    """One and the same cycle, over and over, artifact and noise as well."""
    rng = np.random.default_rng(91)
    artifacts = [made_artifact(rng, 4, [0], subject_sd=0.012, residual_sd=0.002) for _ in range(2)]
    trial = made_trial(92, 2, CYCLE, artifacts=artifacts, step=STEP)
    segments = [replace(s, points=np.tile(s.points, (times, 1, 1))) for s in trial.segments]
    return replace(trial, segments=segments, poses=np.tile(trial.poses, (times, 1, 1, 1)))


@dataclass(frozen=True)
class Solved:
    smoothed: Smoothed
    reported: FrameSolution

    def angle_sd(self) -> FloatArray:
        """SD (3,) of the knee's angles, mean over the middle cycle's inner part."""
        cycles = len(self.reported.angles) // CYCLE
        first = CYCLE * (cycles // 2)
        inner = slice(first + 5, first + CYCLE - 5)
        return np.asarray(self.reported.angle_sd[inner, 0].mean(axis=0))


@functools.cache
def solve(times: int, constant_time: float = CONSTANT_TIME) -> Solved:
    trial = repeated(times)
    # One motion prior for all lengths.
    problem = replace(trial.problem(), motions=repeated(3).problem().motions)
    with pytest.MonkeyPatch.context() as patch:
        # Near enough for the length of intervals.
        patch.setattr(SMOOTHER_MODULE, "MAXIMUM_ITERATIONS", 10)
        smoothed = smooth(problem, trial.poses, constant_time)
    return Solved(smoothed, describe_trajectory(smoothed))


@pytest.mark.parametrize(
    ("frames", "constant_time", "bound"),
    [(10, 1.0, 1.0), (25, 1.0, 1.0), (26, 1.0, 1.04), (75, 1.0, 3.0), (75, 0.75, 4.0), (75, 1e9, 1.0)],
)
def test_the_bound_is_the_duration_over_the_constant_time(
    frames: int, constant_time: float, bound: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(SMOOTHER_MODULE, "MAXIMUM_ITERATIONS", 1)
    trial = repeated(3)
    segments = [replace(s, points=s.points[:frames]) for s in trial.segments]
    part = replace(trial, segments=segments, poses=trial.poses[:frames])
    assert smooth(part.problem(), part.poses, constant_time).constants.bound == pytest.approx(bound)


def test_the_default_bounds_what_more_than_a_second_says() -> None:
    assert CONSTANT_TIME == 1.0
    assert solve(3).smoothed.constants.bound == pytest.approx(3.0)


def test_up_to_the_constant_time_the_answer_is_the_exact_posterior() -> None:
    bounded, exact = solve(1, 1.0), solve(1, 1e9)
    np.testing.assert_array_equal(bounded.reported.poses, exact.reported.poses)
    np.testing.assert_array_equal(bounded.reported.covariance, exact.reported.covariance)


def test_covariance_of_the_constants_is_that_of_the_bounded_information() -> None:
    """S = 1 + H/κ with H = C − BᵀA⁻¹B, whatever the length."""
    for times in (1, 3, 10):
        smoothed = solve(times).smoothed
        kappa = max(1.0, float(times))
        precision = np.eye(smoothed.problem.constants) + smoothed.factor.information / kappa
        np.testing.assert_allclose(
            smoothed.constants.covariance @ precision, np.eye(len(precision)), atol=1e-9
        )


def test_the_optimum_balances_the_prior_against_the_bounded_cost() -> None:
    """At the optimum u + (1/κ) ∂cost/∂u = 0 with the poses at their best."""
    smoothed = solve(3).smoothed
    state, bound = smoothed.state, smoothed.constants.bound
    system = factor(TrajectorySystem(smoothed.problem, state, smoothed.hidden), smoothed.problem.frames)
    pull = state.constants + system.gradient / bound
    spread = np.sqrt(np.diag(smoothed.constants.covariance))
    assert np.abs(pull * spread).max() < 1e-3 * np.abs(state.constants).max()


def test_a_cycle_repeated_ten_times_has_intervals_as_long_as_one_of_three() -> None:
    """With the information bounded an SD stays; unbounded it would shrink with every repetition."""
    three, ten = solve(3).angle_sd(), solve(10).angle_sd()
    np.testing.assert_allclose(ten / three, 1.0, atol=0.03)
    unbounded = solve(10, 1e9).angle_sd() / solve(3, 1e9).angle_sd()
    assert (unbounded < 0.97).any()
    assert (solve(10, 1e9).angle_sd() < ten).all()


def test_against_a_single_cycle_only_the_neighbouring_frames_help() -> None:
    """A lone cycle has no neighbours: ten of them may do a little better by motion, never by counting."""
    ratio = solve(10).angle_sd() / solve(1).angle_sd()
    assert (ratio > 0.9).all()
    assert (ratio < 1.1).all()
