"""Chain algebra and smoother against published smoothers: Nile, Matérn, Rauch-Tung-Striebel, Gauss-Newton."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import scipy.linalg
from filterpy.common import Q_continuous_white_noise
from filterpy.kalman import KalmanFilter
from published_tables import rows_of
from scipy.optimize import least_squares, minimize
from scipy.spatial.transform import Rotation

from sta_prior.checks import FloatArray
from sta_prior.prior.artifact import FeatureArtifact
from sta_prior.prior.basis import Basis
from sta_prior.prior.hierarchy import Weights
from sta_prior.prior.time_scales import TimeScales
from sta_prior.solve.chain import ChainFactor, bounded_constants, factor, from_arrays, step
from sta_prior.solve.chain_marginals import marginals
from sta_prior.solve.constants import reduce_constants
from sta_prior.solve.motion import MotionPrior
from sta_prior.solve.smoother import smooth
from sta_prior.solve.terms import SegmentProblem
from sta_prior.solve.trajectory import RATE_SD, TrajectoryProblem
from sta_prior.solve.trajectory_posterior import describe_trajectory


class Linear:
    """A linear chain: x_1 ~ N(0, first), x_{t+1} = A x_t + w, y_t = h x_t + v; w and v white.

    noise, variance: of w and v; first: covariance, or None for a flat prior; measured: y, NaN where missing.
    """

    def __init__(
        self,
        measured: FloatArray,
        transition: FloatArray,
        noise: FloatArray,
        row: FloatArray,
        variance: float,
        first: FloatArray | None = None,
    ) -> None:
        frames, states = len(measured), len(transition)
        seen = np.isfinite(measured)
        inverse = np.linalg.inv(noise)
        diagonal = seen[:, None, None] * np.outer(row, row) / variance
        diagonal[1:] += inverse
        diagonal[:-1] += transition.T @ inverse @ transition
        logs = np.log(variance) * seen.sum() + np.linalg.slogdet(noise)[1] * (frames - 1)
        flat = 0.0
        if first is not None:
            diagonal[0] += np.linalg.inv(first)
            logs += np.linalg.slogdet(first)[1]
        else:
            flat = states * np.log(2.0 * np.pi)
        lower = np.broadcast_to(-inverse @ transition, (frames - 1, states, states))
        gradient = -np.where(seen, measured, 0.0)[:, None] * row / variance
        spans = from_arrays(diagonal, lower, np.zeros((frames, states, 0)), gradient)
        self.system: ChainFactor = factor(spans, frames, span=37)
        squares = float(np.nansum(measured**2)) / variance - self.system.decrement
        # States and their densities bring as many 2π as integrating them takes away, but for a flat start.
        constants = seen.sum() * np.log(2.0 * np.pi) - flat
        self.log_likelihood = -0.5 * (squares + logs + self.system.log_determinant + constants)

    def smoothed(self) -> tuple[FloatArray, FloatArray]:
        """Means (T, p) and covariances (T, p, p)."""
        posterior = bounded_constants(self.system)
        return step(self.system, posterior).states, marginals(self.system, posterior).covariance


# --- Nile -------------------------------------------------------------------------------------------
# Durbin & Koopman (2012), Time Series Analysis by State Space Methods, ch. 2; log-likelihoods and smoothed
# levels recomputed independently from the data, rows 12 to 15 of the table of outside checks.

DIFFUSE_CONSTANT = 0.5 * np.log(2.0 * np.pi)


@pytest.fixture(scope="module")
def nile() -> FloatArray:
    rows = rows_of("datasets_Nile.csv")
    assert [float(rows[0]["time"]), float(rows[-1]["time"])] == [1871.0, 1970.0]
    return np.array([float(row["value"]) for row in rows])


def local_level(flow: FloatArray, variance: float, noise: float, first: float | None = None) -> Linear:
    one = np.ones((1, 1))
    return Linear(flow, one, noise * one, np.ones(1), variance, None if first is None else first * one)


def test_nile_likelihood_and_its_maximum(nile: FloatArray) -> None:
    """Row 12: variances 15098.52 and 1469.18, exact diffuse log-likelihood −632.5456 (−633.4646 where one
    more ½log 2π is counted); 1e-4.
    """
    found = minimize(
        lambda logs: -local_level(nile, *np.exp(logs)).log_likelihood,
        np.log([1e4, 1e3]),
        method="Nelder-Mead",
        options={"xatol": 1e-7, "fatol": 1e-9},
    )
    np.testing.assert_allclose(np.exp(found.x), [15098.52, 1469.18], rtol=1e-4)
    assert -found.fun == pytest.approx(-632.5456, abs=1e-4)
    assert -found.fun - DIFFUSE_CONSTANT == pytest.approx(-633.4646, abs=1e-4)


def test_nile_with_a_wide_start(nile: FloatArray) -> None:
    """Row 13: P₁ = 10⁷, mean 0, at the maximum of row 12."""
    found = local_level(nile, 15098.52, 1469.18, 1e7).log_likelihood
    assert found == pytest.approx(-641.5856, rel=1e-6)


def test_nile_smoothed_level(nile: FloatArray) -> None:
    """Row 14, 1e-5, at variances 15099 and 1469.1."""
    means, _ = local_level(nile, 15099.0, 1469.1).smoothed()
    years = np.array([1871, 1898, 1899, 1913, 1970]) - 1871
    np.testing.assert_allclose(means[years, 0], [1111.668, 999.585, 950.930, 799.453, 798.370], rtol=1e-5)


def test_nile_steady_variances(nile: FloatArray) -> None:
    """Row 15: predicted 5501.258, filtered 4032.158, smoothed in the middle 2326.757; 1e-6."""
    _, covariances = local_level(nile, 15099.0, 1469.1).smoothed()
    assert covariances[-1, 0, 0] == pytest.approx(4032.158, rel=1e-6)
    assert covariances[50, 0, 0] == pytest.approx(2326.757, rel=1e-6)
    # A hundred and first year without a measurement: the prediction.
    _, ahead = local_level(np.append(nile, np.nan), 15099.0, 1469.1).smoothed()
    assert ahead[-1, 0, 0] == pytest.approx(5501.258, rel=1e-6)


def test_the_chain_is_the_dense_batch_solution(nile: FloatArray) -> None:
    """Row 16, 1e-10: conditioning of one Gaussian over all years at once."""
    first = 1e5
    model = local_level(nile - 900.0, 15099.0, 1469.1, first)
    years = np.arange(100)
    prior = first + 1469.1 * np.minimum(years[:, None], years)
    gain = np.linalg.solve(prior + 15099.0 * np.eye(100), prior).T
    means, covariances = model.smoothed()
    np.testing.assert_allclose(means[:, 0], gain @ (nile - 900.0), rtol=0, atol=1e-10 * 1000.0)
    np.testing.assert_allclose(covariances[:, 0, 0], np.diag(prior - gain @ prior), rtol=1e-10)


# --- Matérn 3/2 -------------------------------------------------------------------------------------
# Hartikainen & Särkkä (2010), doi 10.1109/MLSP.2010.5589113.

VARIANCE, LENGTH = 4.0, 0.5


def matern_chain(gap: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Transition, noise and stationary covariance of the state (value, slope) over a gap, s."""
    rate = np.sqrt(3.0) / LENGTH
    drift = np.array([[0.0, 1.0], [-(rate**2), -2.0 * rate]])
    transition = scipy.linalg.expm(gap * drift)
    stationary = VARIANCE * np.diag([1.0, rate**2])
    return transition, stationary - transition @ stationary @ transition.T, stationary


def test_matern_in_state_space_has_the_published_values() -> None:
    """Row 19: σ² = 4, ℓ = 0.5, Δ = 0.1; 1e-7."""
    transition, noise, stationary = matern_chain(0.1)
    np.testing.assert_allclose(
        transition, [[0.95221136, 0.07072224], [-0.84866682, 0.46223334]], rtol=0, atol=1e-8
    )
    np.testing.assert_allclose(
        noise, [[0.13309563, 1.66331235], [1.66331235, 34.86339466]], rtol=0, atol=1e-7
    )
    rate = np.sqrt(3.0) / LENGTH
    assert 4.0 * rate**3 * VARIANCE == pytest.approx(665.10751, rel=1e-7)
    assert (transition @ stationary)[0, 0] == pytest.approx(3.80884545, rel=1e-7)


def test_matern_in_state_space_is_the_dense_gaussian_process() -> None:
    """Row 20: mean, variance and log marginal likelihood, 1e-8, with values missing."""
    rng = np.random.default_rng(61)
    measured = rng.standard_normal(60)
    measured[[3, 4, 20, 41, 59]] = np.nan
    transition, noise, stationary = matern_chain(0.1)
    model = Linear(measured, transition, noise, np.array([1.0, 0.0]), 0.3, stationary)
    gaps = 0.1 * np.abs(np.arange(60)[:, None] - np.arange(60)) * np.sqrt(3.0) / LENGTH
    kernel = VARIANCE * (1.0 + gaps) * np.exp(-gaps)
    seen = np.isfinite(measured)
    inner = kernel[np.ix_(seen, seen)] + 0.3 * np.eye(seen.sum())
    gain = np.linalg.solve(inner, kernel[seen]).T
    means, covariances = model.smoothed()
    np.testing.assert_allclose(means[:, 0], gain @ measured[seen], rtol=0, atol=1e-8)
    variances = np.diag(kernel) - np.einsum("ab,ba->a", gain, kernel[seen])
    np.testing.assert_allclose(covariances[:, 0, 0], variances, rtol=0, atol=1e-8)
    likelihood = -0.5 * (
        measured[seen] @ np.linalg.solve(inner, measured[seen])
        + np.linalg.slogdet(inner)[1]
        + seen.sum() * np.log(2.0 * np.pi)
    )
    assert model.log_likelihood == pytest.approx(likelihood, abs=1e-8)


# --- Rauch, Tung & Striebel -------------------------------------------------------------------------


def filtered_and_smoothed(
    prior: MotionPrior, density: float, measured: FloatArray, variance: float, first: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """By filterpy, one component: the first frame is updated, every later one predicted first."""
    order = prior.order
    known = KalmanFilter(dim_x=order, dim_z=1)
    known.x, known.P = np.zeros(order), first
    known.F, known.Q = prior.transition, density * Q_continuous_white_noise(order, prior.step)
    known.H, known.R = np.eye(1, order), np.array([[variance]])
    means, covariances = [], []
    for frame, value in enumerate(measured):
        if frame:
            known.predict()
        if np.isfinite(value):
            known.update(np.array([value]))
        means.append(known.x.copy())
        covariances.append(known.P.copy())
    smoothed: tuple[Any, ...] = known.rts_smoother(np.array(means), np.array(covariances))
    return np.asarray(smoothed[0]), np.asarray(smoothed[1])


@pytest.mark.parametrize("order", [2, 3])
def test_a_shifted_cluster_is_smoothed_as_by_rauch_tung_and_striebel(order: int) -> None:
    """One segment whose markers all shift alike and never turn, with frames lost: three independent
    integrator chains, smoothed by filterpy (Rauch, Tung & Striebel 1965, doi 10.2514/3.3166).
    """
    rng = np.random.default_rng(62)
    frames, sd, noise, tiny = 40, 0.004, 0.0005, 1e-6
    cluster = 0.1 * np.array([[1.0, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1]])
    path = tiny * np.cumsum(rng.standard_normal((frames, 3)), axis=0)
    path[[7, 8, 25]] = np.nan
    points = cluster + path[:, None]
    density = np.array([10.0, 20.0, 30.0, 4.0, 1.0, 9.0]) * (1.0 if order == 2 else 100.0)
    motion = MotionPrior(order, 0.01, density)
    artifact = FeatureArtifact(
        basis=Basis((), np.zeros((0, 0))),
        weights=Weights(np.zeros((1, 12)), np.zeros((12, 12))),
        residual=sd**2 * np.eye(12),
        time_scales=TimeScales.single(0.0),
        reference=np.zeros((0, 3)),
        magnitude=np.zeros((12, 12)),
    )
    modes = reduce_constants(artifact.constant_covariance, np.ones((frames, 1)), 12)
    problem = TrajectoryProblem(
        [SegmentProblem(0, points, cluster, artifact)], [], [motion], [modes], 0.01, noise
    )
    start = np.broadcast_to(np.eye(4), (frames, 1, 4, 4))
    smoothed = smooth(problem, start)
    reported = describe_trajectory(smoothed)
    variance = (sd**2 + noise**2) / 4.0
    for axis in range(3):
        rate = [RATE_SD[3 + axis], 50.0 * RATE_SD[3 + axis]][: order - 1]
        # The anchor, as wide as it is, stands for the filter's start.
        first = np.diag([1e6, *np.square(rate)])
        means, covariances = filtered_and_smoothed(motion, density[3 + axis], path[:, axis], variance, first)
        size = np.abs(means[:, 0]).max()
        np.testing.assert_allclose(reported.poses[:, 0, axis, 3], means[:, 0], rtol=0, atol=2e-6 * size)
        rates = smoothed.state.rates[:, 0, 0, 3 + axis]
        np.testing.assert_allclose(rates, means[:, 1], rtol=0, atol=1e-5 * np.abs(means[:, 1]).max())
        np.testing.assert_allclose(
            reported.covariance[:, 3 + axis, 3 + axis], covariances[:, 0, 0], rtol=1e-6
        )
    np.testing.assert_allclose(reported.poses[:, 0, :3, :3], Rotation.identity(frames).as_matrix(), atol=1e-9)


# --- iterated smoother ------------------------------------------------------------------------------

GRAVITY, GAP, SWING_NOISE, SINE_SD = 9.81, 0.05, np.diag([1e-5, 4e-3]), 0.1


def swing(state: FloatArray) -> FloatArray:
    """A pendulum's angle and rate one step later."""
    return np.array([state[0] + GAP * state[1], state[1] - GAP * GRAVITY * np.sin(state[0])])


def swing_slope(state: FloatArray) -> FloatArray:
    return np.array([[1.0, GAP], [-GAP * GRAVITY * np.cos(state[0]), 1.0]])


FIRST_MEAN, FIRST_COVARIANCE = np.array([1.2, 0.0]), np.diag([0.05, 0.2])


def iterated_kalman_smoother(measured: FloatArray, start: FloatArray) -> tuple[FloatArray, FloatArray]:
    """One Kalman filter and one backward pass about the last smoothed path, forward and backward, again and
    again: Bell (1994), SIAM J Optim 4, 626–636, doi 10.1137/0804035.
    """
    path = start
    for _ in range(30):
        means, covariances, predicted, spreads = [], [], [], []
        mean, covariance = FIRST_MEAN, FIRST_COVARIANCE
        for frame, value in enumerate(measured):
            if frame:
                slope = swing_slope(path[frame - 1])
                mean = swing(path[frame - 1]) + slope @ (mean - path[frame - 1])
                covariance = slope @ covariance @ slope.T + SWING_NOISE
            predicted.append(mean)
            spreads.append(covariance)
            row = np.array([np.cos(path[frame, 0]), 0.0])
            innovation = value - np.sin(path[frame, 0]) - row @ (mean - path[frame])
            gain = covariance @ row / (row @ covariance @ row + SINE_SD**2)
            mean, covariance = mean + gain * innovation, covariance - np.outer(gain, row @ covariance)
            means.append(mean)
            covariances.append(covariance)
        smooth_mean, smooth_covariance = np.array(means), np.array(covariances)
        for frame in range(len(measured) - 2, -1, -1):
            slope = swing_slope(path[frame])
            gain = np.linalg.solve(spreads[frame + 1], slope @ covariances[frame]).T
            smooth_mean[frame] += gain @ (smooth_mean[frame + 1] - predicted[frame + 1])
            smooth_covariance[frame] += gain @ (smooth_covariance[frame + 1] - spreads[frame + 1]) @ gain.T
        path = smooth_mean
    return path, smooth_covariance


def whitened_rows(measured: FloatArray, path: FloatArray) -> FloatArray:
    """Residuals of first state, transitions and measurements over their SD."""
    first = (path[0] - FIRST_MEAN) / np.sqrt(np.diag(FIRST_COVARIANCE))
    moves = (path[1:] - np.array([swing(state) for state in path[:-1]])) / np.sqrt(np.diag(SWING_NOISE))
    return np.concatenate([first, moves.ravel(), (measured - np.sin(path[:, 0])) / SINE_SD])


def chain_gauss_newton(measured: FloatArray, start: FloatArray) -> tuple[FloatArray, FloatArray]:
    """The same optimum by the chain's steps."""
    path, frames = start.copy(), len(measured)
    inverse = np.linalg.inv(SWING_NOISE)
    system: ChainFactor | None = None
    for _ in range(30):
        slopes = np.array([swing_slope(state) for state in path[:-1]])
        left = path[1:] - np.array([swing(state) for state in path[:-1]])
        rows = np.stack([np.cos(path[:, 0]), np.zeros(frames)], axis=1)
        diagonal = rows[:, :, None] * rows[:, None, :] / SINE_SD**2
        diagonal[0] += np.linalg.inv(FIRST_COVARIANCE)
        diagonal[1:] += inverse
        diagonal[:-1] += slopes.swapaxes(1, 2) @ inverse @ slopes
        gradient = rows * (np.sin(path[:, 0]) - measured)[:, None] / SINE_SD**2
        gradient[0] += np.linalg.solve(FIRST_COVARIANCE, path[0] - FIRST_MEAN)
        gradient[1:] += left @ inverse
        gradient[:-1] -= np.einsum("fab,fa->fb", slopes, left @ inverse)
        spans = from_arrays(diagonal, -inverse @ slopes, np.zeros((frames, 2, 0)), gradient)
        system = factor(spans, frames, span=13)
        path = path + step(system, bounded_constants(system)).states
    assert system is not None
    return path, marginals(system, bounded_constants(system)).covariance


def test_the_iterated_smoother_is_dense_gauss_newton() -> None:
    """Row 17: a pendulum seen through its sine; optimum and covariances of three ways, 1e-8."""
    rng = np.random.default_rng(63)
    truth = [np.array([1.3, 0.1])]
    for _ in range(39):
        truth.append(swing(truth[-1]) + np.sqrt(np.diag(SWING_NOISE)) * rng.standard_normal(2))
    measured = np.sin(np.array(truth)[:, 0]) + SINE_SD * rng.standard_normal(40)
    start = np.array(truth) + 0.05 * rng.standard_normal((40, 2))
    ours, ours_covariance = chain_gauss_newton(measured, start)
    kalman, kalman_covariance = iterated_kalman_smoother(measured, start)
    dense = least_squares(
        lambda flat: whitened_rows(measured, flat.reshape(-1, 2)),
        start.ravel(),
        jac="3-point",
        xtol=1e-15,
        ftol=1e-15,
        gtol=1e-13,
    )
    np.testing.assert_allclose(ours, kalman, rtol=0, atol=1e-8)
    np.testing.assert_allclose(ours.ravel(), dense.x, rtol=0, atol=1e-7)
    np.testing.assert_allclose(ours_covariance, kalman_covariance, rtol=0, atol=1e-8)
    inverse = np.linalg.inv(dense.jac.T @ dense.jac).reshape(40, 2, 40, 2)
    np.testing.assert_allclose(ours_covariance, inverse[np.arange(40), :, np.arange(40)], rtol=0, atol=1e-8)
