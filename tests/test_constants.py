"""Trial-constant unknowns reduced to modes, and the length of the next step."""

from __future__ import annotations

import numpy as np
import pytest
from made_problems import made_angles, made_artifact, random_covariance

from sta_prior.checks import FloatArray
from sta_prior.solve.constants import NEGLIGIBLE, ConstantModes, reduce_constants
from sta_prior.solve.relaxation import LIMITS, relaxation

OUTPUTS = 12


def made(seed: int, frames: int = 50) -> tuple[FloatArray, FloatArray]:
    """Covariance (K·n, K·n) and features (F, K) of a prior at some angles."""
    rng = np.random.default_rng(seed)
    artifact = made_artifact(rng, OUTPUTS // 3, [0, 1])
    return artifact.constant_covariance, artifact.design(made_angles(rng, frames, 2)).features


def whole_moment(covariance: FloatArray, features: FloatArray) -> FloatArray:
    """Mean over the frames of Z P Zᵀ, frame by frame with Z = z ⊗ 1."""
    n = covariance.shape[0] // features.shape[1]
    total = np.zeros((n, n))
    for values in features:
        design = np.kron(values, np.eye(n))
        total += design @ covariance @ design.T / len(features)
    return total


def kept_moment(modes: ConstantModes, features: FloatArray) -> FloatArray:
    """Mean over the frames of (Z V)(Z V)ᵀ."""
    shown = np.einsum("fk,knc->fnc", features, modes.modes)
    return np.asarray(np.einsum("fnc,fmc->nm", shown, shown) / len(features))


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_kept_and_left_out_make_up_the_whole_second_moment(seed: int) -> None:
    covariance, features = made(seed)
    modes = reduce_constants(covariance, features, OUTPUTS)
    whole = whole_moment(covariance, features)
    together = kept_moment(modes, features) + modes.rest
    np.testing.assert_allclose(together, whole, rtol=0, atol=1e-12 * np.abs(whole).max())
    assert 0 < modes.modes.shape[2] < covariance.shape[0]


def test_what_is_left_out_is_negligible_and_no_mode_more_could_be() -> None:
    covariance, features = made(4)
    modes = reduce_constants(covariance, features, OUTPUTS)
    left_out = float(np.trace(modes.rest))
    assert 0.0 < left_out <= OUTPUTS * NEGLIGIBLE**2
    shown = np.einsum("fk,knc->fnc", features, modes.modes)
    smallest = float((shown**2).sum(axis=(0, 1)).min()) / len(features)
    assert left_out + smallest > OUTPUTS * NEGLIGIBLE**2
    assert np.linalg.eigvalsh(modes.rest)[0] > -1e-12 * left_out


def test_modes_are_felt_independently_of_each_other() -> None:
    """Over the trial's frames their mean products vanish: u stays N(0, 1) with nothing twice."""
    covariance, features = made(5)
    modes = reduce_constants(covariance, features, OUTPUTS).modes
    shown = np.einsum("fk,knc->fnc", features, modes)
    products = np.einsum("fnc,fnd->cd", shown, shown) / len(features)
    np.testing.assert_allclose(products, np.diag(np.diag(products)), rtol=0, atol=1e-12 * products.max())


def test_a_wide_covariance_of_full_rank_keeps_every_direction() -> None:
    rng = np.random.default_rng(6)
    covariance = random_covariance(rng, 3 * OUTPUTS, 1.0)
    features = rng.standard_normal((40, 3))
    modes = reduce_constants(covariance, features, OUTPUTS)
    assert modes.modes.shape == (3, OUTPUTS, 3 * OUTPUTS)
    flat = modes.modes.reshape(3 * OUTPUTS, -1)
    np.testing.assert_allclose(flat @ flat.T, covariance, rtol=0, atol=1e-12 * np.abs(covariance).max())
    np.testing.assert_array_equal(modes.rest, np.zeros((OUTPUTS, OUTPUTS)))


def test_a_trial_in_one_posture_feels_no_more_than_the_outputs() -> None:
    covariance, features = made(7)
    still = np.repeat(features[:1], 30, axis=0)
    modes = reduce_constants(covariance, still, OUTPUTS)
    assert modes.modes.shape[2] <= OUTPUTS
    whole = whole_moment(covariance, still)
    np.testing.assert_allclose(
        kept_moment(modes, still) + modes.rest, whole, atol=1e-12 * np.abs(whole).max()
    )


def test_directions_too_small_to_be_felt_leave_no_mode() -> None:
    covariance, features = made(8)
    small = 1e-4 * covariance * NEGLIGIBLE**2 / np.abs(covariance).max()
    modes = reduce_constants(small, features, OUTPUTS)
    assert modes.modes.shape == (features.shape[1], OUTPUTS, 0)
    whole = whole_moment(small, features)
    np.testing.assert_allclose(modes.rest, whole, rtol=0, atol=1e-12 * np.abs(whole).max())


def test_no_features_leave_no_mode_and_no_rest() -> None:
    modes = reduce_constants(np.zeros((0, 0)), np.zeros((20, 0)), OUTPUTS)
    assert modes.modes.shape == (0, OUTPUTS, 0)
    np.testing.assert_array_equal(modes.rest, np.zeros((OUTPUTS, OUTPUTS)))


# --- length of the next step ------------------------------------------------------------------------


@pytest.mark.parametrize("slope", [0.2, 0.9, 1.0, 1.6])
def test_a_step_of_the_wrong_length_is_set_right_by_the_one_before(slope: float) -> None:
    """A full step of ``slope`` times the way to the optimum: the second move, so stretched, arrives."""
    rng = np.random.default_rng(9)
    optimum, place = rng.standard_normal((2, 5, 4))
    first = slope * (optimum - place)
    place = place + first
    second = slope * (optimum - place)
    factor = relaxation(first, first - second)
    np.testing.assert_allclose(factor, np.full(5, 1.0 / slope), rtol=1e-12)
    np.testing.assert_allclose(place + factor[:, None] * second, optimum, atol=1e-12)


def test_nothing_is_said_at_first_and_where_the_step_grows() -> None:
    nothing = np.full((1, 3), np.nan)
    np.testing.assert_array_equal(relaxation(nothing, nothing), [1.0])
    move = np.array([[1.0, 0.0, 0.0], [1.0, 0.0, 0.0]])
    grown = np.array([[-0.5, 0.0, 0.0], [0.0, 0.0, 0.0]])
    np.testing.assert_array_equal(relaxation(move, grown), [1.0, 1.0])


def test_the_factor_stays_within_its_limits_frame_by_frame() -> None:
    move = np.ones((3, 2))
    change = np.array([[1e-3, 1e-3], [50.0, 50.0], [0.5, 0.5]])
    np.testing.assert_allclose(relaxation(move, change), [LIMITS[1], LIMITS[0], 2.0])
