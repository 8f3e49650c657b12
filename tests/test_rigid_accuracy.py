"""How accurate a rigid fit is: published spreads, the covariance it reports, deformation that turns it."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from sta_prior import se3
from sta_prior.checks import FloatArray
from sta_prior.rigid import deformation_part, fit_rigid, marker_jacobian, rigid_part

DRAWS = 40_000
# The clusters of the published table, in mm; positions and spreads below are in mm too.
CLUSTERS = {
    "square": 50.0 * np.array([[1.0, 1, 0], [-1, 1, 0], [-1, -1, 0], [1, -1, 0]]),
    "tetrahedron": 50.0 * np.array([[1.0, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1]]),
    "thin": np.array([[100.0, 10, 0], [-100, 10, 0], [-100, -10, 0], [100, -10, 0]]),
}
ROTATION_SD = {
    "square": [0.57296, 0.57296, 0.40514],
    "tetrahedron": [0.40514, 0.40514, 0.40514],
    "thin": [2.86479, 0.28648, 0.28506],
}
TARGET_ERROR = {"square": 2.95804, "tetrahedron": 2.17945, "thin": 10.08712}

each_cluster = pytest.mark.parametrize("name", list(CLUSTERS))


@pytest.fixture(scope="module")
def simulated() -> dict[str, tuple[FloatArray, FloatArray]]:
    """Errors of the fitted pose and residuals for markers of 1 mm SD, by cluster."""
    rng = np.random.default_rng(20)
    truth = se3.exp([0.4, -0.9, 0.6, 100.0, -300.0, 800.0])
    result = {}
    for name, cluster in CLUSTERS.items():
        points = se3.transform_points(truth, cluster) + rng.normal(size=(DRAWS, 4, 3))
        fit = fit_rigid(cluster, points)
        result[name] = (se3.relative_difference(fit.pose, truth), fit.residual)
    return result


@each_cluster
def test_published_rotation_spread(name: str, simulated: dict[str, tuple[FloatArray, FloatArray]]) -> None:
    """Cov(θ) = σ² M⁻¹, Spoor & Veldpaus (1980), Woltring et al. (1985); 2 % Monte-Carlo."""
    formula = np.rad2deg(np.sqrt(np.diag(fit_rigid(CLUSTERS[name], CLUSTERS[name]).unit_covariance)[:3]))
    np.testing.assert_allclose(formula, ROTATION_SD[name], rtol=2e-5)
    found = np.rad2deg(simulated[name][0][:, :3].std(axis=0))
    np.testing.assert_allclose(found, ROTATION_SD[name], rtol=0.02)


@each_cluster
def test_published_error_at_a_target(name: str, simulated: dict[str, tuple[FloatArray, FloatArray]]) -> None:
    """Root mean square at (0, 0, 200) mm, formula of Fitzpatrick & West (2001), doi 10.1109/42.952729."""
    target = np.array([[0.0, 0.0, 200.0]])
    jacobian = marker_jacobian(target)
    unit = fit_rigid(CLUSTERS[name], CLUSTERS[name]).unit_covariance
    formula = np.sqrt(np.trace(jacobian @ unit @ jacobian.T))
    assert formula == pytest.approx(TARGET_ERROR[name], rel=1e-5)
    error = se3.transform_points(se3.exp(simulated[name][0]), target) - target
    assert np.sqrt((error**2).sum(axis=-1).mean()) == pytest.approx(TARGET_ERROR[name], rel=0.02)


@each_cluster
def test_published_residual(name: str, simulated: dict[str, tuple[FloatArray, FloatArray]]) -> None:
    """E[residual²] = (1 − 2/N)·3σ² a marker, Fitzpatrick et al.; 1.22474 mm for N = 4, σ = 1 mm, 1 %."""
    residual = simulated[name][1]
    assert np.sqrt((residual**2).sum(axis=-1).mean()) == pytest.approx(1.22474, rel=0.01)


@each_cluster
def test_residual_does_not_tell_the_error(
    name: str, simulated: dict[str, tuple[FloatArray, FloatArray]]
) -> None:
    """Fitzpatrick (2009): residual and target error are independent to first order; |r| < 0.1."""
    error, residual = simulated[name]
    target = np.array([[0.0, 0.0, 200.0]])
    target_error = np.linalg.norm(se3.transform_points(se3.exp(error), target) - target, axis=-1)[:, 0]
    cluster_residual = np.sqrt((residual**2).sum(axis=-1).mean(axis=-1))
    assert abs(np.corrcoef(target_error, cluster_residual)[0, 1]) < 0.1


# --- the covariance that the fit reports -----------------------------------------------------------

SHANK = np.array([[0.03, -0.10, 0.05], [0.05, -0.18, 0.02], [0.01, -0.25, 0.045], [0.045, -0.30, -0.01]])


def test_unit_covariance_is_the_inverse_information() -> None:
    """Closed form against (JᵀJ)⁻¹ of the marker Jacobian, hidden markers dropped."""
    points = np.stack([SHANK, SHANK])
    points[1, 2] = np.nan
    found = fit_rigid(SHANK, points).unit_covariance
    for covariance, kept in zip(found, ([0, 1, 2, 3], [0, 1, 3]), strict=True):
        jacobian = marker_jacobian(SHANK[kept])
        np.testing.assert_allclose(covariance @ (jacobian.T @ jacobian), np.eye(6), atol=1e-9)
        np.testing.assert_array_equal(covariance, covariance.T)


@pytest.mark.parametrize("hidden", [[], [2]])
def test_unit_covariance_by_simulation(hidden: list[int]) -> None:
    """Whitened second moment of 20 000 simulated errors: every eigenvalue near 1.

    For a 6×6 sample covariance of n draws the eigenvalues lie within (1 ± √(6/n))², and the
    bound leaves 4 further standard errors.
    """
    draws, sd = 20_000, 1e-3
    rng = np.random.default_rng(21)
    truth = se3.exp(rng.normal(size=(draws, 6)))
    points = se3.transform_points(truth, SHANK) + sd * rng.normal(size=(draws, 4, 3))
    points[:, hidden] = np.nan
    fit = fit_rigid(SHANK, points)
    error = se3.relative_difference(fit.pose, truth)
    factor = np.linalg.cholesky(sd**2 * fit.unit_covariance[0])
    white = np.linalg.solve(factor, error.T)
    spread = np.linalg.eigvalsh(white @ white.T / draws)
    bound = np.sqrt(6 / draws) + 4 * np.sqrt(2 / draws)
    assert spread[0] > (1 - bound) ** 2
    assert spread[-1] < (1 + bound) ** 2
    # The squared Mahalanobis distance is χ² with 6 degrees of freedom: 95 % lie below 12.5916.
    inside = ((white**2).sum(axis=0) < 12.5916).sum()
    low, high = stats.binom.interval(0.9999, draws, 0.95)
    assert low <= inside <= high


def test_covariance_of_a_frame_comes_from_its_own_markers() -> None:
    """Along the long axis the spread grows when the marker that fixes it is hidden."""
    points = np.stack([SHANK, SHANK])
    points[1, 3] = np.nan
    spread = np.sqrt(np.diagonal(fit_rigid(SHANK, points).unit_covariance, axis1=-2, axis2=-1))
    assert (spread[1] > spread[0]).all()


# --- deformation -----------------------------------------------------------------------------------

STRETCH = np.array([[1.10, 0.05, 0.02], [0.05, 0.95, 0.03], [0.02, 0.03, 1.05]])


@each_cluster
def test_growing_about_the_centroid_turns_nothing(name: str) -> None:
    """Recomputed: a homothety commutes with Σ a aᵀ and leaves 0°, 1e-10°."""
    cluster = CLUSTERS[name]
    angle = np.linalg.norm(se3.rotation_log(se3.rotation_of(fit_rigid(cluster, 1.2 * cluster).pose)))
    assert np.rad2deg(angle) < 1e-10


@pytest.mark.parametrize(("name", "expected"), [("tetrahedron", 0.0), ("square", 2.004), ("thin", 3.259)])
def test_a_symmetric_stretch_may_turn_the_fit(name: str, expected: float) -> None:
    """Rotation error of a stretch that does not commute with Σ a aᵀ; recomputed, 1e-3°."""
    cluster = CLUSTERS[name]
    moments = cluster.T @ cluster
    commutes = np.abs(STRETCH @ moments - moments @ STRETCH).max() < 1e-9 * np.abs(moments).max()
    assert commutes == (expected == 0.0)
    rotation = se3.rotation_of(fit_rigid(cluster, cluster @ STRETCH).pose)
    assert np.rad2deg(np.linalg.norm(se3.rotation_log(rotation))) == pytest.approx(expected, abs=1e-3)
    # The projection on J says so too; splitting by matrix symmetry would say 0.
    turn = np.rad2deg(np.linalg.norm(rigid_part(cluster, cluster @ STRETCH - cluster)[:3]))
    assert turn == pytest.approx(expected, abs=0.15 * expected + 1e-12)


@each_cluster
def test_what_is_orthogonal_to_rigid_motion_does_not_move_the_fit(name: str) -> None:
    """At any size: Σ a × (a + d) = 0 is the fit's own condition, with the centroid in place."""
    cluster = CLUSTERS[name]
    field = deformation_part(cluster, np.random.default_rng(22).normal(size=cluster.shape))
    for size in (0.1, 1.0, 3.0):
        np.testing.assert_allclose(fit_rigid(cluster, cluster + size * field).pose, np.eye(4), atol=1e-13)
