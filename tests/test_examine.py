"""A finished prior tested on other paired data."""

from __future__ import annotations

from functools import cache
from pathlib import Path

import made_priors as made
import numpy as np
import xarray as xr
from made_studies import says

from sta_prior.errors import InputError, MismatchError
from sta_prior.prior import Prior, examine, learn, load_prior
from sta_prior.prior.statistics import segment_frames
from sta_prior.prior.validate import LEVELS, coverage, predict_others, summarise_validation

CHAIN = (made.ANKLE, made.KNEE)
FEET = {**made.SEGMENTS, "foot": ("FA", "FB", "FC")}


@cache
def all_pairs() -> xr.Dataset:
    return made.make_pairs(np.random.default_rng(1), made.subjects_of(6))


@cache
def prior_of_four() -> Prior:
    return learn(made.only(all_pairs(), made.subjects_of(4)))


def test_other_subjects_are_predicted_as_never_imaged() -> None:
    prior, pairs = prior_of_four(), all_pairs()
    found = examine(prior, pairs)
    assert found["unit"].values.tolist() == ["P05", "P06"]
    assert found["segment"].values.tolist() == ["thigh", "shank"]
    shank = prior.segments["shank"]
    frames = segment_frames(
        made.only(pairs, ["P05", "P06"]), "shank", shank.markers, {"knee": made.dof_of("knee")}
    )
    widths = prior.validation["half_width"].sel(segment="shank").values
    expected = summarise_validation("shank", predict_others(shank, frames), shank.inflation, widths)
    xr.testing.assert_allclose(found.sel(segment=["shank"]), expected, rtol=1e-12)
    assert found["by_subject"].values.tolist() == [1, 1]


def test_what_was_learned_from_is_left_out_whatever_else_there_is() -> None:
    """A subject of the prior stays out with all trials: they are no test of the spread between subjects."""
    pairs = all_pairs()
    prior = learn(made.only(pairs, made.subjects_of(4), ["walk_1"]))
    assert examine(prior, pairs)["unit"].values.tolist() == ["P05", "P06"]
    text = "--pairs: the prior learned from every subject in it. Give other subjects' pairs."
    with says(InputError, text):
        examine(
            prior,
            made.only(pairs, ["P02", "P03"], ["walk_2"]).assign_coords(
                trial_digest=("trial", ["digest of P02 walk_1", "digest of P03 walk_1"])
            ),
        )


def test_joints_of_the_other_pairs_may_stand_in_another_order() -> None:
    generator = np.random.default_rng(2)
    pairs = made.make_pairs(generator, made.subjects_of(4), joints=CHAIN, segments=FEET)
    prior = learn(made.only(pairs, made.subjects_of(3)))
    turned = pairs.isel(joint=[1, 0], dof=[4, 3, 2, 1, 0])
    xr.testing.assert_allclose(examine(prior, turned), examine(prior, pairs), rtol=1e-12)


def test_pairs_without_a_joint_or_with_another_are_refused() -> None:
    prior, pairs = prior_of_four(), made.only(all_pairs(), ["P05"])
    with says(MismatchError, "--pairs: prior needs joint knee of kind knee."):
        examine(prior, pairs.assign_coords(joint=["knee_l"]))
    with says(MismatchError, "--pairs: prior needs joint knee of kind knee."):
        examine(prior, pairs.assign_coords(joint_kind=("joint", ["hip"])))


def test_pairs_without_a_segment_or_its_markers_are_refused() -> None:
    prior, pairs = prior_of_four(), made.only(all_pairs(), ["P05"])
    with says(MismatchError, "--pairs: prior expects segment shank, the pairs lack it."):
        examine(prior, pairs.isel(segment=[0]))
    with says(MismatchError, "--pairs: prior expects shank markers SA SB SC, the pairs have none."):
        examine(prior, pairs.isel(marker=[0, 1, 2]))


def test_a_segment_that_some_subjects_do_not_show_is_scored_on_the_others() -> None:
    pairs = all_pairs().copy(deep=True)
    pairs["displacement"].values[pairs["subject"].values == "P06", 3:] = np.nan
    found = examine(prior_of_four(), pairs)
    assert np.isfinite(found["rms_error"].values).tolist() == [[True, True], [True, False]]


def test_too_few_subjects_to_calibrate_leave_normal_intervals_with_the_factor() -> None:
    prior = learn(made.only(all_pairs(), made.subjects_of(2)))
    found = examine(prior, all_pairs())
    shank = prior.segments["shank"]
    assert shank.inflation > 1.5
    others = [name for name in made.subjects_of(6) if name not in made.subjects_of(2)]
    frames = segment_frames(
        made.only(all_pairs(), others), "shank", shank.markers, {"knee": made.dof_of("knee")}
    )
    left_out = predict_others(shank, frames)
    expected = [[coverage(item, level, shank.inflation) for level in LEVELS] for item in left_out]
    np.testing.assert_allclose(found["coverage"].sel(segment="shank").values, expected, rtol=1e-12)


def test_published_sizes_are_tested_on_the_markers_and_joints_of_the_pairs() -> None:
    prior = load_prior(Path(__file__).parents[1] / "priors" / "magnitude.nc")
    found = examine(prior, all_pairs())
    assert found["segment"].values.tolist() == ["thigh", "shank"]
    assert found.sizes["unit"] == 6
    np.testing.assert_allclose(found["rms_error"].values, found["rms_zero"].values, rtol=1e-12)
