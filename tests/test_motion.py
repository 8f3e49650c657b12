"""Motion prior: innovations, their derivatives, discretisation, and the density from a first look."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg
from differences import central_difference
from made_trajectories import made_angles_in_time, made_motion

from sta_prior import se3
from sta_prior.checks import FloatArray
from sta_prior.solve.motion import (
    HORIZONS,
    JERK_TIME,
    SMALLEST_DENSITY,
    MotionPrior,
    bracket,
    estimate_density,
    first_rates,
    make_motion,
    motion_term,
)

DENSITY = np.array([3.0, 5.0, 9.0, 2.0, 1.0, 4.0])
RATE = np.array([0.8, -1.5, 4.0, 1.2, 0.3, -0.7])
"""A helical motion, rad/s and m/s along the bone's own axes."""


def helical(frames: int, step: float, rate: FloatArray = RATE) -> FloatArray:
    """Poses (F, 4, 4) that turn and move at a constant rate."""
    start = se3.exp(np.array([0.4, -0.2, 0.9, 1.0, -2.0, 0.5]))
    moved: FloatArray = start @ se3.exp(step * np.arange(frames)[:, None] * rate)
    return moved


def some_motion(frames: int, step: float) -> FloatArray:
    """Poses of a shank that moves, with its thigh, about as in gait."""
    angles = made_angles_in_time(frames, 1, step)
    shank: FloatArray = made_motion(angles, np.zeros((frames, 1, 3)), step)[:, 1]
    return shank


# --- derivatives ------------------------------------------------------------------------------------


@pytest.mark.parametrize("step", [0.005, 0.01, 0.02])
@pytest.mark.parametrize("order", [2, 3])
def test_derivatives_are_those_of_central_differences(order: int, step: float) -> None:
    """All but the derivative of J_r(ξ)⁻¹ϖ′ in ξ are exact. Of that, 1 + ad(ξ)/2 is the least that is kept:
    then ‖ad(ξ)‖ ‖ad(ϖ′)‖/6 is what may be left out.
    """
    prior = MotionPrior(order, step, DENSITY)
    poses = some_motion(6, step)
    rates = first_rates(poses, step, order)
    rates = rates * (1.0 + 0.1 * np.random.default_rng(1).standard_normal(rates.shape))
    term = motion_term(prior, poses, rates)

    def innovation(index: int, change: FloatArray) -> FloatArray:
        change = change.reshape(2, order, 6)
        here = slice(index, index + 2)
        return motion_term(prior, poses[here] @ se3.exp(change[:, 0]), rates[here] + change[:, 1:]).residual[
            0
        ]

    def slope(index: int) -> FloatArray:
        return central_difference(lambda change: innovation(index, change), 12 * order)

    move = se3.log(se3.inverse(poses[:-1]) @ poses[1:])
    for index in range(5):
        wanted = slope(index)
        got = np.concatenate([term.before[index], term.after[index]], axis=1)
        error = np.abs(got - wanted).reshape(order, 6, 2, order, 6)
        left_out = np.zeros((order, order))
        for row in range(1, order):
            spins = [np.linalg.norm(bracket(v), 2) for v in (move[index], rates[index + 1, row - 1])]
            left_out[row, 0] = np.prod(spins) / 6.0
        assert (error.max(axis=(1, 2, 4)) <= 1e-7 + 1.1 * left_out).all()


def test_bracket_is_the_derivative_of_the_adjoint() -> None:
    rng = np.random.default_rng(2)
    first, second = rng.standard_normal((2, 6))
    turned = central_difference(lambda t: se3.adjoint(se3.exp(t * first)) @ second, 1)[:, 0]
    np.testing.assert_allclose(bracket(first) @ second, turned, atol=1e-8)
    np.testing.assert_allclose(bracket(first) @ second, -bracket(second) @ first, atol=1e-14)


# --- residuals --------------------------------------------------------------------------------------


@pytest.mark.parametrize("order", [2, 3])
def test_a_constant_rate_has_no_innovation(order: int) -> None:
    step = 0.02
    rates = np.zeros((40, order - 1, 6))
    rates[:, 0] = RATE
    term = motion_term(MotionPrior(order, step, DENSITY), helical(40, step), rates)
    assert np.abs(term.residual).max() < 1e-12


def test_a_constant_angular_acceleration_has_none_for_noise_on_jerk() -> None:
    step, times = 0.02, 0.02 * np.arange(30)[:, None]
    poses = se3.exp((0.5 * times**2 + times) * RATE)
    rates = np.stack([(1.0 + times) * RATE, np.broadcast_to(RATE, (30, 6))], axis=1)
    assert np.abs(motion_term(MotionPrior(3, step, DENSITY), poses, rates).residual).max() < 1e-12
    with_acceleration_noise = motion_term(MotionPrior(2, step, DENSITY), poses, rates[:, :1]).residual
    np.testing.assert_allclose(
        with_acceleration_noise[:, 6:], np.broadcast_to(step * RATE, (29, 6)), atol=1e-12
    )


@pytest.mark.parametrize("order", [2, 3])
def test_innovations_do_not_depend_on_the_laboratory(order: int) -> None:
    prior, poses = MotionPrior(order, 0.01, DENSITY), some_motion(20, 0.01)
    rates = first_rates(poses, 0.01, order)
    elsewhere = se3.exp(np.array([1.0, -2.0, 0.5, 3.0, 4.0, -1.0])) @ poses
    before, after = motion_term(prior, poses, rates), motion_term(prior, elsewhere, rates)
    np.testing.assert_allclose(after.residual, before.residual, atol=1e-11)


# --- discretisation ---------------------------------------------------------------------------------


def test_noise_on_acceleration_is_the_published_one() -> None:
    """Constant velocity, step 0.01 s, unit density: row 43 of the table of outside checks, 1e-10."""
    prior = MotionPrior(2, 0.01, np.ones(6))
    np.testing.assert_allclose(prior.noise, [[1e-6 / 3.0, 5e-5], [5e-5, 1e-2]], rtol=0, atol=1e-10)
    np.testing.assert_array_equal(prior.transition, [[1.0, 0.01], [0.0, 1.0]])


@pytest.mark.parametrize("order", [2, 3])
def test_discretisation_is_that_of_the_matrix_exponential(order: int) -> None:
    """Van Loan (1978), IEEE Trans Autom Control 23, 395–404 (from memory)."""
    step, drift = 0.03, np.eye(order, k=1)
    noise = np.zeros((order, order))
    noise[-1, -1] = 1.0
    doubled = scipy.linalg.expm(step * np.block([[-drift, noise], [np.zeros((order, order)), drift.T]]))
    transition = doubled[order:, order:].T
    prior = MotionPrior(order, step, DENSITY)
    np.testing.assert_allclose(prior.transition, transition, atol=1e-15)
    np.testing.assert_allclose(prior.noise, transition @ doubled[:order, order:], rtol=1e-11)


@pytest.mark.parametrize("order", [2, 3])
def test_two_steps_are_one_of_twice_the_length(order: int) -> None:
    single, double = MotionPrior(order, 0.01, DENSITY), MotionPrior(order, 0.02, DENSITY)
    np.testing.assert_allclose(single.transition @ single.transition, double.transition, atol=1e-15)
    both = single.transition @ single.noise @ single.transition.T + single.noise
    np.testing.assert_allclose(both, double.noise, rtol=1e-12)


@pytest.mark.parametrize("order", [2, 3])
def test_precision_is_the_inverse_of_noise_times_density(order: int) -> None:
    prior = MotionPrior(order, 0.01, DENSITY)
    covariance = np.kron(prior.noise, np.diag(DENSITY))
    size = np.sqrt(np.diag(covariance))
    whole = prior.precision @ covariance * (size[:, None] / size)
    np.testing.assert_allclose(whole, np.eye(6 * order), atol=1e-8)


# --- density from a first look ----------------------------------------------------------------------


def drawn_pieces(density: FloatArray, step: float, frames: int, pieces: int, seed: int) -> FloatArray:
    """Motion drawn from the prior in pieces (2 · pieces · frames, 4, 4), as many frames missing after each."""
    rng = np.random.default_rng(seed)
    factor = np.linalg.cholesky(MotionPrior(2, step, density).noise)
    pose = se3.exp(rng.standard_normal((pieces, 6)))
    rate = rng.standard_normal((pieces, 6))
    drawn = np.full((pieces, 2 * frames, 4, 4), np.nan)
    for frame in range(frames):
        drawn[:, frame] = pose
        noise = factor @ rng.standard_normal((pieces, 2, 6)) * np.sqrt(density)
        move = step * rate + noise[:, 0]
        pose = pose @ se3.exp(move)
        rate = np.einsum("pab,pb->pa", se3.right_jacobian(move), rate + noise[:, 1])
    return drawn.reshape(-1, 4, 4)


def test_density_of_motion_drawn_from_the_prior_is_found() -> None:
    """300 pieces of 0.6 s: one independent value each over the longest horizon, so an SD of √(2/300) of
    the density there; the largest of five horizons may lie higher by as much, and none falls below.
    """
    density = np.array([3.0, 1.0, 2.0, 0.5, 2.0, 1.0])
    poses = drawn_pieces(density, 0.02, 31, 300, seed=3)
    spread = np.sqrt(2.0 / 300)
    ratio = estimate_density(poses, 0.02) / density
    assert (ratio > 1.0 - 3.0 * spread).all()
    assert (ratio < 1.0 + 5.0 * spread).all()


def one_step_density(poses: FloatArray, step: float) -> FloatArray:
    """The density matched to differences over single frames."""
    move = se3.log(se3.inverse(poses[:-1]) @ poses[1:])
    matched: FloatArray = (np.diff(move, axis=0) ** 2).mean(axis=0) / (2.0 / 3.0 * step**3)
    return matched


def test_single_steps_would_take_smooth_motion_for_known_beforehand() -> None:
    """Over a step Δ a sine of frequency ω gives a density in proportion to Δ: 0.3 s against 0.01 s."""
    poses = some_motion(300, 0.01)
    ratio = estimate_density(poses, 0.01) / one_step_density(poses, 0.01)
    assert (ratio > 8.0).all()
    assert (ratio < 31.0).all()
    # Where the motion is what the prior says, single steps do tell the density.
    density = np.full(6, 2.0)
    drawn = drawn_pieces(density, 0.01, 200, 1, seed=4)[:200]
    np.testing.assert_allclose(one_step_density(drawn, 0.01), density, rtol=5.0 * np.sqrt(2.0 / 198))


def test_a_faster_camera_finds_the_same_density() -> None:
    slow, fast = (estimate_density(some_motion(round(3.0 / step), step), step) for step in (0.01, 0.0025))
    np.testing.assert_allclose(fast, slow, rtol=0.02)


def test_whoever_stands_still_has_the_smallest_density() -> None:
    poses = np.broadcast_to(some_motion(1, 0.01), (300, 4, 4))
    np.testing.assert_array_equal(estimate_density(poses, 0.01), SMALLEST_DENSITY)


def test_missing_poses_are_left_out_of_the_first_look() -> None:
    poses = some_motion(300, 0.01)
    whole = estimate_density(poses, 0.01)
    poses[120:140] = np.nan
    np.testing.assert_allclose(estimate_density(poses, 0.01), whole, rtol=0.25)
    assert max(HORIZONS) == 0.3


def test_noise_on_jerk_takes_its_density_from_that_on_acceleration() -> None:
    poses = some_motion(200, 0.01)
    second, third = make_motion(poses, 0.01), make_motion(poses, 0.01, order=3)
    assert (second.order, third.order) == (2, 3)
    np.testing.assert_array_equal(second.density, estimate_density(poses, 0.01))
    np.testing.assert_allclose(third.density, second.density / JERK_TIME**2, rtol=1e-15)


# --- rates to begin from ----------------------------------------------------------------------------


@pytest.mark.parametrize("order", [2, 3])
@pytest.mark.parametrize("frames", [2, 3, 25])
def test_first_rates_of_a_constant_rate_are_that_rate(frames: int, order: int) -> None:
    rates = first_rates(helical(frames, 0.01), 0.01, order)
    assert rates.shape == (frames, order - 1, 6)
    np.testing.assert_allclose(rates[:, 0], np.broadcast_to(RATE, (frames, 6)), atol=1e-11)
    np.testing.assert_allclose(rates[:, 1:], 0.0, atol=1e-8)


def test_first_rates_of_an_accelerated_turn_are_central_differences() -> None:
    times = 0.01 * np.arange(30)[:, None]
    rates = first_rates(se3.exp(0.5 * times**2 * RATE), 0.01, 3)
    np.testing.assert_allclose(rates[1:-1, 0], times[1:-1] * RATE, atol=1e-11)
    np.testing.assert_allclose(rates[3:-3, 1], np.broadcast_to(RATE, (24, 6)), atol=1e-9)


@pytest.mark.parametrize("order", [2, 3])
def test_a_single_frame_has_no_rates(order: int) -> None:
    np.testing.assert_array_equal(first_rates(helical(1, 0.01), 0.01, order), np.zeros((1, order - 1, 6)))
