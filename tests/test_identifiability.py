"""What markers alone can and cannot tell about artifact, and the posterior of a pose in closed form.

One segment, displacement split into a rigid part (parameters r) and deformation, flat prior on the
pose ξ:  y = J ξ + J r + D α + e.  Derived and recomputed; no source beyond.
"""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg

from sta_prior import se3
from sta_prior.angles import JointConvention, joint_angles, rotation_from_angles
from sta_prior.checks import FloatArray
from sta_prior.gaussian import condition, solve_spd
from sta_prior.rigid import deformation_modes, fit_rigid, marker_jacobian, rigid_part

CLUSTER = np.array(
    [[0.06, 0.25, 0.05], [0.09, 0.15, 0.02], [0.02, 0.12, 0.09], [-0.02, 0.2, 0.085], [0.08, 0.3, -0.01]]
)
NOISE_SD = 1e-3
J = marker_jacobian(CLUSTER)
MODES = deformation_modes(CLUSTER).modes
DEFORMATION = MODES[:, 6:]


def full_covariance(size: int, scale: FloatArray, seed: int) -> FloatArray:
    """A dense covariance with standard deviations near the scale given."""
    root = np.random.default_rng(seed).normal(size=(size, size + 3)) / np.sqrt(size + 3)
    result: FloatArray = scale[:, None] * (root @ root.T) * scale
    return result


def flat_prior_posterior(spread: FloatArray, observed: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Mean and covariance of ξ for y ~ N(J ξ, spread): generalised least squares."""
    weighted = solve_spd(spread, J).T
    covariance = solve_spd(weighted @ J, np.eye(6))
    return covariance @ (weighted @ observed), covariance


RIGID_COVARIANCE = full_covariance(6, np.array([0.02, 0.02, 0.02, 0.006, 0.006, 0.006]), 1)
DEFORMATION_COVARIANCE = full_covariance(9, np.full(9, 0.004), 2)
INSTRUMENT = NOISE_SD**2 * np.eye(15)


# --- independent rigid part and deformation --------------------------------------------------------


def test_independent_modes_leave_the_least_squares_pose() -> None:
    """Posterior covariance Σ_r + σ²(JᵀJ)⁻¹ and the unweighted mean, 1e-10."""
    spread = J @ RIGID_COVARIANCE @ J.T + DEFORMATION @ DEFORMATION_COVARIANCE @ DEFORMATION.T + INSTRUMENT
    observed = 0.01 * np.random.default_rng(3).normal(size=15)
    mean, covariance = flat_prior_posterior(spread, observed)
    fit = fit_rigid(CLUSTER, CLUSTER)
    expected = RIGID_COVARIANCE + NOISE_SD**2 * fit.unit_covariance
    np.testing.assert_allclose(covariance, expected, rtol=0, atol=1e-10 * np.abs(expected).max())
    least_squares = rigid_part(CLUSTER, observed.reshape(5, 3))
    np.testing.assert_allclose(mean, least_squares, rtol=0, atol=1e-10)


def test_a_wide_prior_on_the_pose_is_the_flat_one() -> None:
    """The same through `condition`, pose and artifact as unknowns: limit of prior SD → ∞."""
    observed = 0.01 * np.random.default_rng(4).normal(size=15)
    prior = scipy.linalg.block_diag(1e2 * np.eye(6), RIGID_COVARIANCE, DEFORMATION_COVARIANCE)
    design = np.concatenate([J, J, DEFORMATION], axis=1)
    posterior = condition(np.zeros(21), prior, design, observed, INSTRUMENT)
    expected = RIGID_COVARIANCE + NOISE_SD**2 * fit_rigid(CLUSTER, CLUSTER).unit_covariance
    np.testing.assert_allclose(posterior.covariance[:6, :6], expected, rtol=1e-3, atol=1e-8)
    np.testing.assert_allclose(posterior.mean[:6], rigid_part(CLUSTER, observed.reshape(5, 3)), rtol=1e-4)
    # The rigid part is not seen at all: it keeps its prior.
    np.testing.assert_allclose(posterior.covariance[6:12, 6:12], RIGID_COVARIANCE, rtol=1e-3, atol=1e-9)


def test_the_size_of_an_independent_prior_does_not_move_the_pose() -> None:
    observed = 0.01 * np.random.default_rng(5).normal(size=15)
    means = []
    for size in (1e-2, 1.0, 1e2):
        artifact = J @ RIGID_COVARIANCE @ J.T + DEFORMATION @ DEFORMATION_COVARIANCE @ DEFORMATION.T
        means.append(flat_prior_posterior(size * artifact + INSTRUMENT, observed)[0])
    np.testing.assert_allclose(means[0], means[1], rtol=0, atol=1e-10)
    np.testing.assert_allclose(means[2], means[1], rtol=0, atol=1e-10)


# --- rigid part correlated with deformation --------------------------------------------------------

# In the orthonormal rigid basis U = J·A a mode's amplitude is one number; ξ = A·amplitude.
AMPLITUDE = MODES[:, :6].T @ J  # amplitude of each pose parameter
RIGID_SD = np.array([8.0, 6.0, 5.0, 9.0, 7.0, 4.0]) * 1e-3
DEFORMATION_SD = np.array([3.0, 4.0, 2.0, 5.0, 3.0, 1.0]) * 1e-3
CORRELATION = np.array([0.9, -0.7, 0.5, 0.0, 0.3, -0.95])


def paired_spread(sign: float = 1.0) -> FloatArray:
    """Covariance of the markers when rigid mode k goes with deformation mode k."""
    joint = np.zeros((15, 15))
    joint[np.arange(6), np.arange(6)] = RIGID_SD**2
    joint[np.arange(6, 12), np.arange(6, 12)] = DEFORMATION_SD**2
    mixed = sign * CORRELATION * RIGID_SD * DEFORMATION_SD
    joint[np.arange(6), np.arange(6, 12)] = mixed
    joint[np.arange(6, 12), np.arange(6)] = mixed
    return MODES @ joint @ MODES.T + INSTRUMENT


def test_correlated_modes_sharpen_the_pose_by_the_published_formula() -> None:
    """var = σ_r² (1 − ρ² σ_d²/(σ_d² + σ_n²)) + σ² (JᵀJ)⁻¹ for each mode, 1e-10."""
    covariance = flat_prior_posterior(paired_spread(), np.zeros(15))[1]
    kept = RIGID_SD**2 * (1 - CORRELATION**2 * DEFORMATION_SD**2 / (DEFORMATION_SD**2 + NOISE_SD**2))
    back = np.linalg.inv(AMPLITUDE)
    unit = fit_rigid(CLUSTER, CLUSTER).unit_covariance
    expected = back @ np.diag(kept) @ back.T + NOISE_SD**2 * unit
    np.testing.assert_allclose(covariance, expected, rtol=0, atol=1e-10 * np.abs(expected).max())
    independent = back @ np.diag(RIGID_SD**2) @ back.T + NOISE_SD**2 * unit
    assert np.linalg.eigvalsh(independent - covariance)[0] > -1e-15


def test_the_gain_is_real_when_the_truth_is_the_prior_and_a_loss_when_it_is_opposite() -> None:
    """20 000 draws. The mean square error is the stated variance; with the sign of the correlation
    wrong it is worse than least squares: what a prior gains it can lose.
    """
    draws = 20_000
    rng = np.random.default_rng(6)
    observed = rng.multivariate_normal(np.zeros(15), paired_spread(), size=draws)
    mean, covariance = flat_prior_posterior(paired_spread(), observed.T)
    white = np.linalg.solve(np.linalg.cholesky(covariance), mean)
    # Mean of χ² with 6 degrees of freedom, within 4 standard errors.
    assert (white**2).sum(axis=0).mean() == pytest.approx(6.0, abs=4 * np.sqrt(12 / draws))
    least_squares = rigid_part(CLUSTER, observed.reshape(draws, 5, 3)).T
    wrong = flat_prior_posterior(paired_spread(-1.0), observed.T)[0]

    def error(estimate: FloatArray) -> float:
        return float(((AMPLITUDE @ estimate) ** 2).sum(axis=0).mean())

    assert error(mean) < 0.75 * error(least_squares)
    assert error(wrong) > 1.25 * error(least_squares)


# --- artifact that follows the angle itself --------------------------------------------------------


def followed(gain: float, flexion: FloatArray) -> FloatArray:
    """Shank markers in the thigh frame when the skin turns back by gain × flexion about the bone."""
    knee = JointConvention("knee", "right")
    angles = np.zeros((*flexion.shape, 3))
    angles[..., 0] = flexion
    thigh_from_shank = se3.make_pose(rotation_from_angles(knee, angles), [0.0, -0.4, 0.0])
    skin = np.zeros_like(angles)
    skin[..., 0] = -gain * flexion
    shank_from_skin = se3.make_pose(rotation_from_angles(knee, skin), np.zeros(3))
    return se3.transform_points(thigh_from_shank @ shank_from_skin, CLUSTER)


@pytest.mark.parametrize("gain", [0.0, 0.3, 0.8, -0.2])
def test_an_artifact_that_follows_the_angle_scales_it(gain: float) -> None:
    """Apparent angle = (1 − g)·true, with no residual to betray it."""
    knee = JointConvention("knee", "right")
    flexion = np.deg2rad(np.linspace(0.0, 70.0, 15))
    fit = fit_rigid(CLUSTER, followed(gain, flexion))
    apparent = joint_angles(knee, se3.rotation_of(fit.pose))[:, 0]
    np.testing.assert_allclose(apparent, (1 - gain) * flexion, rtol=0, atol=1e-12)
    assert fit.spread.max() < 1e-12
    np.testing.assert_allclose(apparent / (1 - gain), flexion, rtol=0, atol=1e-11)  # a known gain undoes it


def test_the_gain_cannot_be_read_from_the_markers() -> None:
    """Another gain with another motion gives the very same markers; at g = 1 nothing is left to scale."""
    flexion = np.deg2rad(np.linspace(0.0, 40.0, 9))
    one, other = followed(0.2, flexion), followed(0.6, 2.0 * flexion)  # 0.8·f = 0.4·2f
    np.testing.assert_allclose(one, other, rtol=0, atol=1e-14)
    still = followed(1.0, flexion)
    np.testing.assert_allclose(still, np.broadcast_to(still[0], still.shape), rtol=0, atol=1e-14)


def test_sensitivity_to_the_gain() -> None:
    """d(corrected)/dg = true/(1 − g) at the right gain: an error of 0.1 costs 10° of 60° at g = 0.4."""
    true, gain, step = np.deg2rad(60.0), 0.4, 1e-5
    pose = fit_rigid(CLUSTER, followed(gain, np.array(true))).pose
    apparent = joint_angles(JointConvention("knee", "right"), se3.rotation_of(pose))[0]
    slope = (apparent / (1 - gain - step) - apparent / (1 - gain + step)) / (2 * step)
    assert slope == pytest.approx(true / (1 - gain), rel=1e-8)
    assert np.rad2deg(0.1 * slope) == pytest.approx(10.0, rel=1e-8)
