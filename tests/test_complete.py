"""Trials that hide nothing: the short way through the expectation step against the general one."""

from __future__ import annotations

from dataclasses import replace

import made_priors as made
import numpy as np
import pytest

from sta_prior.prior.expectation import Expectation, State


@pytest.mark.parametrize("frames", [3, 12])
@pytest.mark.parametrize("point", [False, True])
def test_moments_are_those_of_the_general_step(frames: int, point: bool) -> None:
    """Also with fewer frames a trial than features, a feature without spread, and one that never moves."""
    generator = np.random.default_rng(frames)
    truth = made.random_hierarchy(generator, 5, 6)
    drawn = made.with_weights(made.draw_trials(generator, truth, [2, 1, 3], frames), generator)
    drawn[1].features[:, 3] = 0.0
    trials = made.statistics_of([drawn[at] for at in (3, 0, 5, 2, 1, 4)])
    trials[0] = replace(trials[0], blocks=trials[0].blocks + trials[3].blocks)
    apart = truth.trial_features.copy()
    apart[2], apart[:, 2] = 0.0, 0.0
    state = State(truth.subject_features, apart, truth.subject_outputs, truth.observed_residual)
    width = np.array([0.0, 4.0, 1.0, 2.0, 3.0])
    short, general = Expectation(trials, width, point), Expectation(trials, width, point)
    assert short._complete is not None
    assert short.counted == pytest.approx(short._complete.counted)
    general._complete = None
    one, other = short(state), general(state)
    weight = made.random_covariance(generator, 5)
    for level in ("subjects", "trials"):
        (mean, spread), (expected, around) = getattr(one, level), getattr(other, level)
        np.testing.assert_allclose(mean, expected, atol=1e-10, err_msg=level)
        np.testing.assert_allclose(spread.total(), around.total(), atol=1e-10, err_msg=level)
        np.testing.assert_allclose(spread.along(weight), around.along(weight), atol=1e-10, err_msg=level)
    np.testing.assert_allclose(one.residual, other.residual, atol=1e-10)
    assert not one.trials[0][..., 2].any()
