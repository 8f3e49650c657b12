"""Motion prior: its cost, derivatives and discretisation, and the density from a first look."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg
from differences import central_difference
from made_problems import CLUSTERS, made_artifact
from made_trajectories import dense_from, made_angles_in_time, made_motion

from sta_prior import se3
from sta_prior.checks import FloatArray
from sta_prior.solve.constants import reduce_constants
from sta_prior.solve.motion import (
    HORIZONS,
    JERK_TIME,
    SMALLEST_DENSITY,
    MotionPrior,
    estimate_density,
    first_rates,
    make_motion,
)
from sta_prior.solve.spans import ANCHOR, WHOLE_ANCHOR, TrajectorySystem
from sta_prior.solve.terms import SegmentProblem
from sta_prior.solve.trajectory import RATE_SD, Trajectory, TrajectoryProblem, place_hidden

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


# --- the definition, written once more --------------------------------------------------------------


def discretised(order: int, step: float) -> tuple[FloatArray, FloatArray]:
    """Φ and Q of a chain of integrators, by the matrix exponential: Van Loan (1978), IEEE Trans Autom
    Control 23, 395–404 (from memory).
    """
    drift, noise = np.eye(order, k=1), np.zeros((order, order))
    noise[-1, -1] = 1.0
    doubled = scipy.linalg.expm(step * np.block([[-drift, noise], [np.zeros((order, order)), drift.T]]))
    transition = doubled[order:, order:].T
    return transition, transition @ doubled[:order, order:]


def innovations(order: int, step: float, poses: FloatArray, rates: FloatArray) -> FloatArray:
    """(ξ, J_r(ξ)⁻¹ϖ′, …) − Φ(0, ϖ, …) of every step, (F − 1, 6·order)."""
    move = se3.log(se3.inverse(poses[:-1]) @ poses[1:])
    turned = np.linalg.solve(se3.right_jacobian(move)[:, None], rates[1:, ..., None])[..., 0]
    start = np.concatenate([np.zeros((len(move), 1, 6)), rates[:-1]], axis=1)
    local = np.concatenate([move[:, None], turned], axis=1)
    transition, _ = discretised(order, step)
    return np.asarray((local - np.einsum("ij,fja->fia", transition, start)).reshape(len(move), -1))


def begin(rates: FloatArray) -> FloatArray:
    """Rates of the first frame over their SD, which says next to nothing."""
    scale = np.array([1.0, 50.0])[: len(rates), None] * RATE_SD
    return np.asarray((rates / scale).ravel())


def system_of(
    order: int,
    step: float,
    poses: FloatArray,
    rates: FloatArray,
    density: FloatArray = DENSITY,
    expected: bool = False,
) -> TrajectorySystem:
    """A trial of one segment without a marker in view: its motion prior, and nothing else."""
    artifact = made_artifact(np.random.default_rng(1), 4, [])
    points = np.full((len(poses), 4, 3), np.nan)
    segment = SegmentProblem(0, points, CLUSTERS[0], artifact)
    modes = reduce_constants(artifact.constant_covariance, np.ones((len(poses), 1)), 12)
    problem = TrajectoryProblem([segment], [], [MotionPrior(order, step, density)], [modes], step, 5e-4)
    constants = np.zeros(problem.constants)
    state = Trajectory(poses[:, None], rates[:, None], np.zeros((len(poses), 0)), constants)
    return TrajectorySystem(problem, state, place_hidden(problem), expected)


def cost_of(order: int, step: float, poses: FloatArray, rates: FloatArray) -> float:
    system = system_of(order, step, poses, rates)
    system(0, len(poses))
    return system.cost


def some_state(order: int, step: float) -> tuple[FloatArray, FloatArray]:
    """Poses and rates of gait, the rates off by a tenth."""
    poses = some_motion(6, step)
    rates = first_rates(poses, step, order)
    return poses, rates * (1.0 + 0.1 * np.random.default_rng(1).standard_normal(rates.shape))


@pytest.mark.parametrize("step", [0.005, 0.02])
@pytest.mark.parametrize("order", [2, 3])
def test_cost_is_that_of_the_definition(order: int, step: float) -> None:
    poses, rates = some_state(order, step)
    left = innovations(order, step, poses, rates).reshape(-1, order, 6)
    _, noise = discretised(order, step)
    weighed = np.linalg.solve(noise, left) / DENSITY
    wanted = 0.5 * float((weighed * left).sum() + (begin(rates[0]) ** 2).sum())
    assert cost_of(order, step, poses, rates) == pytest.approx(wanted, rel=1e-9)


@pytest.mark.parametrize("step", [0.005, 0.02])
@pytest.mark.parametrize("order", [2, 3])
def test_gradient_and_information_are_those_of_central_differences(order: int, step: float) -> None:
    """All but the derivative of J_r(ξ)⁻¹ϖ′ in ξ is exact. Of that, 1 + ad(ξ)/2 is the least that is kept:
    then ‖ad(ξ)‖ ‖ad(ϖ′)‖/6 is what may be left out of the derivatives of the innovations.
    """
    poses, rates = some_state(order, step)
    frames, size = len(poses), 6 * order
    _, noise = discretised(order, step)
    whitener = np.kron(np.linalg.inv(np.linalg.cholesky(noise)), np.diag(DENSITY**-0.5))
    move = se3.log(se3.inverse(poses[:-1]) @ poses[1:])
    information, gradient = np.zeros((frames * size, frames * size)), np.zeros(frames * size)
    slack = 0.0
    for frame in range(frames - 1):
        here = slice(frame, frame + 2)

        def whitened(change: FloatArray, here: slice = here) -> FloatArray:
            change = change.reshape(2, order, 6)
            moved = poses[here] @ se3.exp(change[:, 0])
            return np.asarray(whitener @ innovations(order, step, moved, rates[here] + change[:, 1:])[0])

        slope = central_difference(whitened, 2 * size)
        at = slice(frame * size, (frame + 2) * size)
        information[at, at] += slope.T @ slope
        gradient[at] += slope.T @ whitened(np.zeros(2 * size))
        spins = [np.linalg.norm(ad(v), 2) for v in (move[frame], *rates[frame + 1])]
        left_out = np.repeat([0.0, *(spins[0] * spin / 6.0 for spin in spins[1:])], 6)
        slack = max(slack, float(np.linalg.norm(np.abs(whitener) @ left_out)))
    first = np.repeat([1.0, 50.0], 6)[: size - 6] * np.tile(RATE_SD, order - 1)
    at_rates = np.arange(6, size)
    information[at_rates, at_rates] += first**-2.0
    gradient[6:size] += rates[0].ravel() / first**2
    poses_at = (size * np.arange(frames)[:, None] + np.arange(6)).ravel()
    information[poses_at, poses_at] += min(ANCHOR, WHOLE_ANCHOR / frames)
    span = system_of(order, step, poses, rates)(0, frames)
    got, got_gradient = dense_from(span, frames)
    n = frames * size
    # Of the same size as their own diagonal: J J-like products, off by twice what is left out of a row.
    scale = np.sqrt(np.diag(information))
    off = np.abs(got[:n, :n] - information) / (scale[:, None] * scale)
    within = np.ones(n, dtype=bool)
    within[poses_at] = False
    assert off[np.ix_(within, within)].max() < 1e-6
    assert off.max() < 1e-6 + 5.0 * slack / scale[poses_at].min()
    both = (got_gradient[:n] - gradient) / scale
    largest = np.abs(gradient / scale).max()
    assert np.abs(both[within]).max() < 1e-6 * largest
    assert np.abs(both).max() < (1e-6 + 5.0 * slack / scale[poses_at].min()) * largest
    assert slack / scale[poses_at].min() < 0.02


def ad(tangent: FloatArray) -> FloatArray:
    """Matrix of the Lie bracket with a tangent, (6, 6)."""
    turn, move = se3.skew(tangent[:3]), se3.skew(tangent[3:])
    return np.block([[turn, np.zeros((3, 3))], [move, turn]])


# --- residuals --------------------------------------------------------------------------------------


@pytest.mark.parametrize("order", [2, 3])
def test_a_constant_rate_has_no_innovation(order: int) -> None:
    rates = np.zeros((40, order - 1, 6))
    rates[:, 0] = RATE
    cost = cost_of(order, 0.02, helical(40, 0.02), rates) - 0.5 * float((begin(rates[0]) ** 2).sum())
    # Nothing but rounding, weighed by 12/Δ³ for noise on acceleration and 720/Δ⁵ for noise on jerk.
    assert abs(cost) < 1e-13 * (12.0 / 0.02**3 if order == 2 else 720.0 / 0.02**5)


def test_a_constant_angular_acceleration_has_none_for_noise_on_jerk() -> None:
    times = 0.02 * np.arange(30)[:, None]
    poses = se3.exp((0.5 * times**2 + times) * RATE)
    rates = np.stack([(1.0 + times) * RATE, np.broadcast_to(RATE, (30, 6))], axis=1)
    left = cost_of(3, 0.02, poses, rates) - 0.5 * float((begin(rates[0]) ** 2).sum())
    assert abs(left) < 1e-13 * 720.0 / 0.02**5
    # Noise on acceleration pays for it at every step: its covariance grows as the step, the change squared.
    cost = cost_of(2, 0.02, poses, rates[:, :1]) - 0.5 * float((begin(rates[0, :1]) ** 2).sum())
    assert cost == pytest.approx(0.5 * 29 * 0.02 * float((RATE**2 / DENSITY).sum()), rel=1e-6)


@pytest.mark.parametrize("order", [2, 3])
def test_cost_does_not_depend_on_the_laboratory(order: int) -> None:
    poses, rates = some_state(order, 0.01)
    elsewhere = se3.exp(np.array([1.0, -2.0, 0.5, 3.0, 4.0, -1.0])) @ poses
    here, there = (cost_of(order, 0.01, at, rates) for at in (poses, elsewhere))
    assert there == pytest.approx(here, rel=1e-8)


@pytest.mark.parametrize("order", [2, 3])
def test_a_turn_of_the_bones_axes_is_not_told_by_its_motion(order: int) -> None:
    """T·Exp(δ), with one and the same δ in every frame and rates told in the new axes, moves as before: with
    one density for all turns the cost stays the same, and the expected information about δ is none. The sum
    of squared derivatives would make it grow with every innovation, without end over the frames.
    """
    frames, step, size = 100, 0.01, 6 * order
    poses = some_motion(frames, step)
    rates = first_rates(poses, step, order)
    turn = np.array([0.0, 0.05, 0.0, 0.0, 0.0, 0.0])
    alike = np.repeat([40.0, 10.0], 3) * (1.0 if order == 2 else 100.0)
    turned = rates @ se3.adjoint(se3.exp(-turn)).T
    before, after = (
        system_of(order, step, *state, density=alike, expected=True)
        for state in ((poses, rates), (poses @ se3.exp(turn), turned))
    )
    span = before(0, frames)
    after(0, frames)
    assert after.cost == pytest.approx(before.cost, rel=1e-6)
    information = dense_from(span, frames)[0][: frames * size, : frames * size]
    at_poses = (size * np.arange(frames)[:, None] + np.arange(6)).ravel()
    at_rates = np.setdiff1d(np.arange(frames * size), at_poses)
    link = information[np.ix_(at_poses, at_rates)]
    left = information[np.ix_(at_poses, at_poses)] - link @ np.linalg.solve(
        information[np.ix_(at_rates, at_rates)], link.T
    )
    about = np.tile(np.eye(6)[:, :3], (frames, 1))
    told = np.diag(about.T @ left @ about) - frames * min(ANCHOR, WHOLE_ANCHOR / frames)
    assert told.max() < 1.0


# --- discretisation ---------------------------------------------------------------------------------


def test_noise_on_acceleration_is_the_published_one() -> None:
    """Constant velocity, step 0.01 s, unit density: row 43 of the table of outside checks, 1e-10."""
    transition, noise = discretised(2, 0.01)
    np.testing.assert_allclose(noise, [[1e-6 / 3.0, 5e-5], [5e-5, 1e-2]], rtol=0, atol=1e-10)
    np.testing.assert_allclose(transition, [[1.0, 0.01], [0.0, 1.0]], atol=1e-15)


@pytest.mark.parametrize("order", [2, 3])
def test_transition_is_the_matrix_exponential(order: int) -> None:
    transition = MotionPrior(order, 0.03, DENSITY).transition
    np.testing.assert_allclose(transition, discretised(order, 0.03)[0], atol=1e-15)
    double = MotionPrior(order, 0.06, DENSITY).transition
    np.testing.assert_allclose(transition @ transition, double, atol=1e-15)


# --- density from a first look ----------------------------------------------------------------------


def drawn_pieces(density: FloatArray, step: float, frames: int, pieces: int, seed: int) -> FloatArray:
    """Motion drawn from the prior in pieces, (2 · pieces · frames, 4, 4), as many frames missing between."""
    rng = np.random.default_rng(seed)
    factor = np.linalg.cholesky(discretised(2, step)[1])
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
