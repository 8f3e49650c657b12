"""Intervals for a subject never imaged: few-subject factor, and calibration on left-out subjects."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import norm
from scipy.stats import t as student

from sta_prior.checks import FloatArray
from sta_prior.prior.calibration import (
    LARGEST_INFLATION,
    PSEUDO_SUBJECTS,
    Calibration,
    calibrate,
    few_subjects_factor,
    freedom,
    nested_coverage,
)
from sta_prior.prior.fitting import FitSettings

LEVELS = np.array([0.50, 0.90, 0.95])


def subjects_like(generator: np.random.Generator, count: int, spread: float) -> list[FloatArray]:
    """Ratios of normal subjects whose own scale is lognormal: heavy tails over subjects."""
    scales = np.exp(spread * generator.standard_normal(count))
    return [scale * generator.standard_normal(400) for scale in scales]


def test_freedom_counts_the_weak_prior_of_the_fit() -> None:
    assert FitSettings().pseudo_units == PSEUDO_SUBJECTS
    assert freedom(9) == 10.0
    assert freedom(1) == freedom(0) == 2.0


def test_few_subjects_factor_against_tables_of_students_t() -> None:
    """95 % points of Student's t: 2.353 (3), 2.015 (5), 1.812 (10), 1.721 (21); any textbook's table."""
    for subjects, point in ((2, 2.353), (4, 2.015), (9, 1.812), (20, 1.721)):
        assert few_subjects_factor(subjects) == pytest.approx((point / 1.645) ** 2, rel=2e-3)
    assert few_subjects_factor(10_000) == pytest.approx(1.0, abs=1e-3)
    assert few_subjects_factor(1) == few_subjects_factor(0) == LARGEST_INFLATION


def test_without_left_out_subjects_the_law_is_students() -> None:
    factors = calibrate([], 4, LEVELS).factors
    np.testing.assert_allclose(factors, student.ppf(0.5 + 0.5 * LEVELS, 5.0), rtol=1e-12)


def test_a_factor_is_the_quantile_of_the_mixture() -> None:
    generator = np.random.default_rng(1)
    ratios = subjects_like(generator, 5, 0.5)
    factors = calibrate(ratios, 5, LEVELS).factors
    law = 2 * student.cdf(factors, freedom(5)) - 1
    share = (sum((np.abs(r)[:, None] <= factors).mean(axis=0) for r in ratios) + law) / 6
    np.testing.assert_allclose(share, LEVELS, atol=1 / 400)


def test_many_normal_subjects_give_the_normal_law() -> None:
    ratios = subjects_like(np.random.default_rng(2), 200, 0.0)
    factors = calibrate(ratios, 200, LEVELS).factors
    np.testing.assert_allclose(factors, norm.ppf(0.5 + 0.5 * LEVELS), rtol=0.02)


def test_every_subject_counts_alike_however_many_frames_it_has() -> None:
    ratios = subjects_like(np.random.default_rng(3), 4, 0.5)
    often = [np.tile(ratios[0], 7), *ratios[1:]]
    np.testing.assert_array_equal(calibrate(often, 4).factors, calibrate(ratios, 4).factors)


def test_signs_and_order_do_not_matter() -> None:
    ratios = subjects_like(np.random.default_rng(4), 3, 0.5)
    turned = [-ratio[::-1] for ratio in reversed(ratios)]
    np.testing.assert_allclose(calibrate(turned, 3).factors, calibrate(ratios, 3).factors, rtol=1e-12)


def test_fewer_subjects_give_wider_tails() -> None:
    one = [np.random.default_rng(5).standard_normal(2000)]
    widths = [calibrate(one * count, count, LEVELS).factors[2] for count in (2, 4, 9, 20)]
    assert widths == sorted(widths, reverse=True)
    assert widths[0] > 1.15 * widths[3]


def test_new_subjects_are_covered_population_after_population() -> None:
    """400 populations of nine subjects; standard error of a mean coverage 0.8 points, bound 4 points."""
    generator = np.random.default_rng(6)
    covered, by_normal = [], []
    for _ in range(400):
        *left_out, new = subjects_like(generator, 10, 0.4)
        factors = calibrate(left_out, 9, LEVELS).factors
        covered.append((np.abs(new)[:, None] <= factors).mean(axis=0))
        by_normal.append(float((np.abs(new) <= norm.ppf(0.975)).mean()))
    assert np.abs(np.mean(covered, axis=0) - LEVELS).max() < 0.04
    # The law of the middle subject is over-confident about the next.
    assert np.mean(by_normal) < 0.92


def test_nested_coverage_never_uses_a_subject_on_itself() -> None:
    ratios = subjects_like(np.random.default_rng(7), 4, 0.5)
    wild = [100.0 * ratios[0], *ratios[1:]]
    before, after = nested_coverage(ratios, LEVELS), nested_coverage(wild, LEVELS)
    assert before.shape == (4, 3)
    assert np.all(after[0] < 0.1)
    # The wild subject widens everybody else's interval and not its own.
    assert np.all(after[1:] >= before[1:])
    factors = calibrate(ratios[1:], 3, LEVELS).factors
    np.testing.assert_allclose(before[0], (np.abs(ratios[0])[:, None] <= factors).mean(axis=0))


def test_table_and_its_inverse_agree() -> None:
    table = calibrate(subjects_like(np.random.default_rng(8), 9, 0.3), 9)
    np.testing.assert_allclose(table.share_inside(table.factors), table.levels, atol=1e-12)
    np.testing.assert_allclose(table.factor(table.levels), table.factors)
    assert table.share_inside(np.array([0.0]))[0] == 0.0
    plain = Calibration(np.array([0.5, 0.9]), np.array([0.6, 1.8]))
    assert plain.factor(0.7) == pytest.approx(1.2)
    assert plain.share_inside(np.array([0.3, 9.0])).tolist() == pytest.approx([0.25, 0.9])
