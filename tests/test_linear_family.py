"""The linear family: features, their derivative, moments of the artifact."""

from __future__ import annotations

from dataclasses import replace

import made_priors as made
import numpy as np
import pytest
from differences import central_difference

from sta_prior.checks import FloatArray
from sta_prior.prior.artifact import GROWTH_LENGTH, FeatureArtifact
from sta_prior.prior.basis import SMALLEST_POWER, SOFT_EDGE, Basis, Term, orthonormal
from sta_prior.prior.hierarchy import Weights, new_subject, without_subject
from sta_prior.prior.interface import IsotropicArtifact
from sta_prior.prior.linear import linear_basis, reaches_of

REFERENCE = np.array([[0.1, 0.02, -0.03], [-0.2, 0.01, 0.05]])


def angles_of(generator: np.random.Generator, frames: int) -> FloatArray:
    return np.asarray(generator.uniform(-0.5, 1.5, (frames, 2, 3)), dtype=np.float64)


def learned_basis(generator: np.random.Generator, frames: int = 60) -> Basis:
    parts = [angles_of(generator, frames), angles_of(generator, 2 * frames)]
    return orthonormal(linear_basis((0, 1)), parts, [REFERENCE, 0.5 * REFERENCE])


def artifact_of(generator: np.random.Generator) -> FeatureArtifact:
    basis = learned_basis(generator)
    weights = Weights(
        0.01 * generator.standard_normal((basis.size, 6)),
        1e-5 * made.random_covariance(generator, 6 * basis.size),
    )
    residual, magnitude = (1e-6 * made.random_covariance(generator, 6) for _ in range(2))
    return FeatureArtifact(basis, weights, residual, 0.05, REFERENCE, magnitude)


def test_terms_are_flexion_and_its_square_at_every_adjacent_joint() -> None:
    basis = linear_basis((0, 2))
    assert basis.terms == (Term(0, 0, 1), Term(0, 0, 2), Term(2, 0, 1), Term(2, 0, 2))
    np.testing.assert_array_equal(basis.mixing, np.eye(4))
    assert basis.size == 5


def test_values_by_hand() -> None:
    basis = Basis((Term(1, 2, 1), Term(0, 0, 2)), np.array([[2.0, 0.0], [1.0, -3.0]]))
    angles = np.array([[[0.5, 0.0, 0.0], [0.0, 0.0, 0.4]]])
    # Raw: 0.4 − 0.05 = 0.35 and 0.25 − 0.01 = 0.24.
    np.testing.assert_allclose(basis.values(angles, REFERENCE), [[1.0, 0.70, 0.35 - 0.72]], rtol=1e-14)


def test_without_joints_only_the_constant_is_left() -> None:
    basis = orthonormal(linear_basis(()), [np.zeros((3, 0, 3))], [np.zeros((0, 3))])
    np.testing.assert_array_equal(basis.values(np.zeros((3, 0, 3)), np.zeros((0, 3))), np.ones((3, 1)))
    assert basis.derivatives(np.zeros((3, 0, 3))).shape == (3, 1, 0, 3)


def test_learned_features_are_orthonormal_over_the_training_frames() -> None:
    """Up to the floor: M(G + s²1)Mᵀ = 1, so their Gram matrix is 1 − s²·MMᵀ."""
    generator = np.random.default_rng(1)
    parts = [angles_of(generator, 50), angles_of(generator, 80)]
    references = [REFERENCE, 0.5 * REFERENCE]
    basis = orthonormal(linear_basis((0, 1)), parts, references)
    values = np.concatenate([basis.values(q, q0) for q, q0 in zip(parts, references, strict=True)])[:, 1:]
    gram = values.T @ values / values.shape[0]
    floor = SMALLEST_POWER**2 * basis.mixing @ basis.mixing.T
    np.testing.assert_allclose(gram + floor, np.eye(4), atol=1e-12)
    assert np.abs(gram - np.eye(4)).max() < 0.02
    np.testing.assert_allclose(basis.mixing, np.tril(basis.mixing), atol=0)


def test_an_angle_that_hardly_moves_is_not_blown_up() -> None:
    still = np.broadcast_to(REFERENCE + 1e-6, (40, 2, 3))
    basis = orthonormal(linear_basis((0,)), [still], [REFERENCE])
    assert np.abs(basis.mixing).max() < 1.001 / SMALLEST_POWER
    assert np.abs(basis.values(still, REFERENCE)[:, 1:]).max() < 1e-4


def test_features_do_not_depend_on_the_order_of_frames_and_trials() -> None:
    generator = np.random.default_rng(2)
    parts = [angles_of(generator, 50), angles_of(generator, 80)]
    one = orthonormal(linear_basis((0, 1)), parts, [REFERENCE, 2 * REFERENCE])
    other = orthonormal(linear_basis((0, 1)), [parts[1][::-1], parts[0]], [2 * REFERENCE, REFERENCE])
    np.testing.assert_allclose(one.mixing, other.mixing, rtol=1e-10)


def test_derivative_of_the_mean_is_that_of_central_differences() -> None:
    generator = np.random.default_rng(3)
    artifact = artifact_of(generator)
    angles = angles_of(generator, 5)

    def mean(change: FloatArray) -> FloatArray:
        return artifact.moments(angles + change.reshape(2, 3)).mean

    expected = central_difference(mean, 6).reshape(5, 6, 2, 3)
    got = artifact.moments(angles).mean_derivative
    np.testing.assert_allclose(got, expected, rtol=1e-6, atol=1e-9)
    assert np.abs(got[..., 0]).min() > 1e-5
    assert not got[..., 1:].any()


def test_moments_are_those_of_the_weights_by_dense_algebra() -> None:
    generator = np.random.default_rng(4)
    artifact = artifact_of(generator)
    angles = angles_of(generator, 7)
    moments = artifact.moments(angles)
    for frame, z in enumerate(moments.features):
        design = np.kron(z, np.eye(6))
        np.testing.assert_allclose(
            moments.mean[frame], design @ artifact.weights.mean.reshape(-1), rtol=1e-12
        )
        expected = design @ artifact.constant_covariance @ design.T + artifact.residual
        np.testing.assert_allclose(moments.covariance[frame], expected, rtol=1e-10, atol=1e-18)
    np.testing.assert_array_equal(moments.features, artifact.basis.values(angles, REFERENCE))
    np.testing.assert_array_equal(moments.features[:, 0], 1.0)


def test_covariance_is_positive_even_far_outside_the_data() -> None:
    generator = np.random.default_rng(5)
    artifact = replace(artifact_of(generator), residual=np.zeros((6, 6)))
    far = np.concatenate([angles_of(generator, 20), 10.0 * angles_of(generator, 20), REFERENCE[None]])
    covariance = artifact.moments(far).covariance
    np.testing.assert_allclose(covariance, np.swapaxes(covariance, 1, 2), rtol=1e-12)
    values = np.linalg.eigvalsh(covariance)
    assert (values[:, 0] > -1e-14 * values[:, -1]).all()


def test_population_mean_is_zero_at_the_reference_posture() -> None:
    """Of a subject never imaged, exactly; only the spread of the constant and the residual are left there."""
    generator = np.random.default_rng(6)
    hierarchy = made.random_hierarchy(generator, 5, 6)
    mean = generator.standard_normal((5, 6))
    drawn = made.draw_trials(generator, hierarchy, [2, 2, 2], 8, mean=mean)
    known = without_subject(hierarchy, made.statistics_of(drawn), np.ones(5), "")
    weights = new_subject(known, 1.3)
    assert np.abs(weights.mean[1:]).max() > 0.5
    magnitude = np.eye(6)
    artifact = FeatureArtifact(
        learned_basis(generator), weights, hierarchy.residual, 0.05, REFERENCE, magnitude
    )
    moments = artifact.moments(REFERENCE[None])
    assert not moments.mean.any()
    np.testing.assert_array_equal(moments.features, [[1.0, 0, 0, 0, 0]])
    constant = known.subject_covariance[:6, :6] + known.trial_covariance[:6, :6]
    np.testing.assert_allclose(moments.covariance[0], 1.3 * constant + hierarchy.residual, rtol=1e-12)


def held_artifact(generator: np.random.Generator) -> FeatureArtifact:
    """The linear family as it is learned: flexion of both joints held between −0.5 and 1.5 rad."""
    parts = [np.concatenate([angles_of(generator, 30), np.full((1, 2, 3), -0.5), np.full((1, 2, 3), 1.5)])]
    artifact = artifact_of(generator)
    reaches = reaches_of((0, 1), parts, [REFERENCE])
    return replace(artifact, basis=replace(artifact.basis, reaches=reaches))


def test_beyond_the_data_the_mean_stays_at_the_edge() -> None:
    generator = np.random.default_rng(8)
    artifact = held_artifact(generator)
    assert [(r.joint, r.dof, r.low, r.high) for r in artifact.basis.reaches] == [
        (0, 0, -0.5, 1.5),
        (1, 0, -0.5, 1.5),
    ]
    edge, beyond, further = (np.full((1, 2, 3), 1.5) for _ in range(3))
    beyond[0, 0, 0], further[0, 0, 0] = 2.5, 3.5
    at_edge, far, last = (artifact.moments(angles) for angles in (edge, beyond, further))
    np.testing.assert_allclose(far.mean, last.mean, rtol=1e-12)
    np.testing.assert_allclose(far.features, last.features, rtol=1e-12)
    # It comes to rest within the soft edge: no further than its slope there could take it.
    slope = np.abs(at_edge.mean_derivative[:, :, 0, 0]).max()
    assert np.abs(far.mean - at_edge.mean).max() <= 1.1 * SOFT_EDGE * slope
    assert np.abs(far.mean_derivative[:, :, 0]).max() < 1e-12 * slope
    # The other joint is still at its edge, not beyond it: there the mean moves.
    assert np.abs(far.mean_derivative[0, :, 1, 0]).min() > 1e-5


def test_beyond_the_data_the_spread_grows_towards_the_magnitude() -> None:
    """By the square of the distance at first, all of it in the end: 1 − exp(−½(e/ℓ)²)."""
    artifact = held_artifact(np.random.default_rng(9))
    distance = np.array([0.0, 0.1, 0.3, 0.6, 1.2, 5.0])
    angles = np.zeros((distance.size, 2, 3))
    angles[:, 0, 0] = 1.5 + distance
    covariance = artifact.moments(angles).covariance
    growth = 1.0 - np.exp(-0.5 * (distance / GROWTH_LENGTH) ** 2)
    plain = replace(artifact, magnitude=np.zeros_like(artifact.magnitude))
    expected = plain.moments(angles).covariance + growth[:, None, None] * artifact.magnitude
    np.testing.assert_allclose(covariance, expected, rtol=1e-12)
    assert growth[-1] == pytest.approx(1.0)
    more = np.linalg.eigvalsh(np.diff(covariance, axis=0))
    assert (more[:, 0] > -1e-12 * more[:, -1]).all()
    # Sideways of both joints at once: the distance is Euclidean, 3-4-5.
    angles[0, :, 0] = [1.5 + 0.3, 1.5 + 0.4]
    both = artifact.moments(angles[:1]).covariance[0]
    grown = 1.0 - np.exp(-0.5 * (0.5 / GROWTH_LENGTH) ** 2)
    np.testing.assert_allclose(
        both,
        plain.moments(angles[:1]).covariance[0] + grown * artifact.magnitude,
        rtol=1e-12,
    )


def test_every_frame_stands_for_itself() -> None:
    generator = np.random.default_rng(7)
    artifact = artifact_of(generator)
    angles = angles_of(generator, 4)
    whole, single = artifact.moments(angles), artifact.moments(angles[2:3])
    for name in ("mean", "mean_derivative", "features", "covariance"):
        np.testing.assert_allclose(getattr(whole, name)[2:3], getattr(single, name), rtol=1e-12, atol=1e-20)


@pytest.mark.parametrize("joints", [0, 2])
def test_isotropic_artifact_is_least_squares_in_the_form_of_a_prior(joints: int) -> None:
    artifact = IsotropicArtifact(outputs=6, sd=0.003)
    moments = artifact.moments(np.zeros((4, joints, 3)))
    assert moments.mean.shape == (4, 6)
    assert moments.mean_derivative.shape == (4, 6, joints, 3)
    assert moments.features.shape == (4, 0)
    assert not moments.mean.any()
    assert not moments.mean_derivative.any()
    np.testing.assert_allclose(moments.covariance, np.broadcast_to(9e-6 * np.eye(6), (4, 6, 6)), rtol=1e-14)
    assert artifact.constant_covariance.shape == (0, 0)
    assert artifact.time_constant == 0.0
