"""Binding a prior to a trial: labels, sides, subsets of markers, and the subject's own paired frames."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from functools import cache
from typing import cast

import made_priors as made
import numpy as np
import pytest
import xarray as xr
from made_studies import says, warns

from sta_prior.errors import MismatchError
from sta_prior.prior import DEFAULT_FAMILY, Prior, learn
from sta_prior.prior.artifact import FeatureArtifact
from sta_prior.prior.base import Binding
from sta_prior.prior.family import Restricted
from sta_prior.prior.feature_model import FeatureModel
from sta_prior.prior.hierarchy import (
    Hierarchy,
    Weights,
    new_subject,
    subject_posterior,
    trial_posterior,
    without_subject,
)
from sta_prior.prior.statistics import mirror_signs, segment_frames, summarise
from sta_prior.study import Trial

REFERENCE = np.array([[0.08, 0.01, -0.02]])
ANGLES = np.array([[[0.2, 0.0, 0.1]], [[0.9, 0.1, 0.0]], [[0.08, 0.01, -0.02]]])
CHAIN = (made.KNEE, made.ANKLE)
FEET: Mapping[str, tuple[str, ...]] = {**made.SEGMENTS, "foot": ("FA", "FB", "FC")}


@cache
def all_pairs() -> xr.Dataset:
    """Five subjects of one population; the last one is never learned from."""
    return made.make_pairs(np.random.default_rng(1), made.subjects_of(5), trials=3)


@cache
def prior_of_four(family: str = DEFAULT_FAMILY) -> Prior:
    return learn(all_pairs(), family, hold_out=["P05"])


@cache
def prior_of_one() -> Prior:
    return learn(made.only(all_pairs(), ["P01"]))


def restricted(binding: Binding, segment: str = "thigh") -> Restricted:
    """What the solver gets: the trial's markers, side and joints."""
    return cast(Restricted, binding.artifacts[segment])


def artifact(binding: Binding, segment: str = "thigh") -> FeatureArtifact:
    """What the family gave: all markers, right side, the prior's joints."""
    return cast(FeatureArtifact, restricted(binding, segment).inner)


def weights(binding: Binding, segment: str = "thigh") -> Weights:
    return artifact(binding, segment).weights


def added_variance(binding: Binding) -> float:
    """Variance of the artifact over ANGLES that comes from the weights, m², summed."""
    got = restricted(binding)
    return float(np.einsum("faa->", got.moments(ANGLES).covariance - got.residual))


def model_of(prior: Prior, segment: str = "thigh") -> FeatureModel:
    return cast(FeatureModel, prior.segments[segment])


def assert_same(got: Weights, expected: Weights, rtol: float = 1e-12) -> None:
    np.testing.assert_allclose(got.mean, expected.mean, rtol=0, atol=rtol * np.abs(expected.mean).max())
    scale = np.abs(expected.covariance).max()
    np.testing.assert_allclose(got.covariance, expected.covariance, rtol=0, atol=rtol * scale)


def trial_of(subject: str, trial: str = "walk_1", side: str = "right", digest: str = "") -> Trial:
    return made.made_trial(made.made_lab(side=side), subject, trial, REFERENCE, digest)


def widened(prior: Prior, hierarchy: Hierarchy) -> Hierarchy:
    factor = model_of(prior).inflation
    return replace(
        hierarchy,
        subject_features=factor * hierarchy.subject_features,
        trial_features=factor * hierarchy.trial_features,
    )


def refused(text: str, **changes: object) -> None:
    """Bind to a lab with other joints or segments; expect the whole message."""
    lab = made.made_lab(**changes)  # type: ignore[arg-type]
    with says(MismatchError, text):
        prior_of_four().bind(made.made_trial(lab, "P05", "walk_1", REFERENCE))


def test_a_lab_without_the_joint_is_refused() -> None:
    refused(
        "lab.toml: prior needs the angles of joint knee, lab has knee_r. "
        "Add joint.knee to the lab file. Did you mean knee_r?",
        joints=(("knee_r", "knee", "thigh", "shank"),),
    )
    refused(
        "lab.toml: prior needs the angles of joint knee, lab has none. Add joint.knee to the lab file.",
        joints=(),
    )


def test_a_joint_of_another_kind_is_refused() -> None:
    refused(
        "lab.toml, joint.knee: prior expects kind knee, lab has hip.",
        joints=(("knee", "hip", "thigh", "shank"),),
    )


def test_a_joint_of_other_segments_is_refused() -> None:
    refused(
        "lab.toml, joint.knee: prior expects thigh as proximal and shank as distal segment, "
        "lab has shank and thigh. Name the segments as in the prior.",
        joints=(("knee", "knee", "shank", "thigh"),),
    )


def test_a_segment_that_the_prior_lacks_is_refused() -> None:
    refused(
        "lab.toml, segment.thighs: not in the prior, which knows thigh, shank. "
        "Learn a prior with it. Did you mean thigh?",
        segments={"thighs": ("TA", "TB", "TC")},
    )


def test_a_marker_that_the_prior_lacks_gets_the_published_size() -> None:
    prior = prior_of_four()
    more = made.made_trial(
        made.made_lab(segments={"thigh": ("TA", "TX", "TC", "TB")}), "P05", "walk_1", REFERENCE
    )
    few = made.made_trial(made.made_lab(segments={"thigh": ("TA", "TC", "TB")}), "P05", "walk_1", REFERENCE)
    text = (
        "lab.toml, segment.thigh: the prior does not know marker TX: artifact of published size is assumed "
        "there. Rename it, or learn a prior with it."
    )
    with warns(text):
        got = prior.bind(more).artifacts["thigh"]
    known = prior.bind(few).artifacts["thigh"]
    at, other = [0, 1, 2, 6, 7, 8, 9, 10, 11], [3, 4, 5]
    moments, plain = got.moments(ANGLES), known.moments(ANGLES)
    np.testing.assert_array_equal(moments.mean[:, at], plain.mean)
    np.testing.assert_array_equal(moments.covariance[:, at][:, :, at], plain.covariance)
    assert not moments.mean[:, other].any()
    assert not moments.covariance[:, at][:, :, other].any()
    # Thigh, walking: 13.9 mm RMS of three axes, 56 % of it at the reference, see templates/magnitude.toml.
    size = np.sqrt(np.einsum("faa->f", moments.covariance[:, other][:, :, other]))
    assert (size > 0.55 * 0.0139).all()
    assert (size <= 0.0139).all()
    count = moments.features.shape[1]
    assert got.constant_covariance.shape == (12 * count, 12 * count)


def test_markers_that_are_all_strange_are_refused() -> None:
    refused(
        "lab.toml, segment.thigh: prior expects thigh markers TA TB TC, lab has TX TY TZ. "
        "Rename TX or learn a prior with it.",
        segments={"thigh": ("TX", "TY", "TZ")},
    )


def test_a_subject_never_imaged_gets_population_and_spread_widened() -> None:
    prior = prior_of_four()
    bound = prior.bind(trial_of("P05"))
    for name in prior.segments:
        model, got = model_of(prior, name), artifact(bound, name)
        assert_same(got.weights, new_subject(model.hierarchy, model.inflation), 0.0)
        np.testing.assert_array_equal(got.residual, model.hierarchy.residual)
        np.testing.assert_array_equal(got.time_scales.constants, model.time_scales.constants)
        assert got.basis.terms == model.basis.terms
        np.testing.assert_array_equal(got.reference, REFERENCE)
        moments, whole = got.moments(ANGLES), restricted(bound, name).moments(ANGLES)
        # The lab has all markers, on the right side: nothing is left out and nothing turned.
        for part in ("mean", "mean_derivative", "features", "covariance"):
            np.testing.assert_array_equal(getattr(whole, part), getattr(moments, part))
        for part in ("residual", "constant_covariance", "time_constant"):
            np.testing.assert_array_equal(getattr(restricted(bound, name), part), getattr(got, part))
        assert not moments.mean[2].any()
        assert (np.linalg.eigvalsh(moments.covariance)[:, 0] > 0).all()
    assert bound.informed_times.size == 0
    assert bound.basis_of_belief == "a prior of 4 other subject(s)"


def test_a_subject_learned_from_is_told_so_where_its_own_frames_are_not_used() -> None:
    prior = prior_of_four()
    bound = prior.bind(trial_of("P02"))
    assert_same(weights(bound), weights(prior.bind(trial_of("P05"))), 0.0)
    assert bound.basis_of_belief == "a prior of 4 subject(s), this one among them"
    np.testing.assert_array_equal(bound.informed_times, all_pairs()["time"].values[:40])
    assert prior.bind(trial_of("P02", "walk_9")).informed_times.size == 0


def test_the_left_side_gets_mirrored_moments() -> None:
    prior = prior_of_four()
    right, left = (restricted(prior.bind(trial_of("P05", side=side))) for side in ("right", "left"))
    one, other = right.moments(ANGLES), left.moments(ANGLES)
    signs = mirror_signs(3)
    np.testing.assert_allclose(other.mean, one.mean * signs, rtol=1e-14)
    np.testing.assert_allclose(
        other.mean_derivative, one.mean_derivative * signs[:, None, None], rtol=1e-14, atol=0
    )
    np.testing.assert_allclose(other.covariance, one.covariance * np.outer(signs, signs), rtol=1e-10)
    np.testing.assert_array_equal(other.features, one.features)
    np.testing.assert_array_equal(left.residual, right.residual * np.outer(signs, signs))
    count = right.constant_covariance.shape[0] // 9
    both = np.tile(signs, count)
    np.testing.assert_array_equal(left.constant_covariance, right.constant_covariance * np.outer(both, both))


@pytest.mark.parametrize("side", ["right", "left"])
def test_a_subset_of_the_markers_in_another_order_gives_the_marginal(side: str) -> None:
    prior = prior_of_four()
    lab = made.made_lab(segments={"thigh": ("TC", "TA"), "shank": made.SEGMENTS["shank"]}, side=side)
    part = restricted(prior.bind(made.made_trial(lab, "P05", "walk_1", REFERENCE)))
    whole = restricted(prior.bind(trial_of("P05", side=side)))
    columns = np.array([6, 7, 8, 0, 1, 2])
    got, expected = part.moments(ANGLES), whole.moments(ANGLES)
    np.testing.assert_array_equal(got.mean, expected.mean[:, columns])
    np.testing.assert_array_equal(got.mean_derivative, expected.mean_derivative[:, columns])
    np.testing.assert_allclose(
        got.covariance, expected.covariance[:, columns[:, None], columns[None, :]], rtol=1e-12
    )
    np.testing.assert_array_equal(part.residual, whole.residual[np.ix_(columns, columns)])
    count = got.features.shape[1]
    constant = (9 * np.arange(count)[:, None] + columns).reshape(-1)
    np.testing.assert_array_equal(
        part.constant_covariance, whole.constant_covariance[np.ix_(constant, constant)]
    )


def test_joints_may_stand_elsewhere_in_the_lab() -> None:
    prior = prior_of_four()
    segments = {"shank": made.SEGMENTS["shank"], "thigh": made.SEGMENTS["thigh"]}
    lab = made.made_lab(joints=(("ankle", "ankle", "shank", "foot"), made.KNEE), segments=segments)
    bound = prior.bind(made.made_trial(lab, "P05", "walk_1", np.concatenate([9 + REFERENCE, REFERENCE])))
    angles = np.concatenate([np.random.default_rng(2).standard_normal((3, 1, 3)), ANGLES], axis=1)
    got = restricted(bound).moments(angles)
    expected = restricted(prior.bind(trial_of("P05"))).moments(ANGLES)
    np.testing.assert_array_equal(got.mean, expected.mean)
    np.testing.assert_array_equal(got.covariance, expected.covariance)
    assert not got.mean_derivative[:, :, 0].any()
    np.testing.assert_array_equal(got.mean_derivative[:, :, 1], expected.mean_derivative[:, :, 0])


def test_a_personal_prior_is_the_same_with_and_without_the_pairs_it_learned_from() -> None:
    prior, pairs = prior_of_one(), all_pairs()
    model = model_of(prior)
    for name in ("walk_2", "walk_9"):
        trial = trial_of("P01", name)
        one, other = prior.bind(trial), prior.bind(trial, personal=pairs)
        assert_same(weights(other), weights(one), 0.0)
        alone = without_subject(model.hierarchy, list(model.trials), model.basis.relative_variance, "P01")
        assert_same(weights(one), trial_posterior(alone, list(model.trials), name))
        assert one.basis_of_belief == other.basis_of_belief == "the subject's own paired frames and the prior"
        np.testing.assert_array_equal(one.informed_times, other.informed_times)
        assert one.informed_times.size == (40 if name == "walk_2" else 0)


def test_a_personal_prior_warns_of_anybody_else() -> None:
    prior = prior_of_one()
    with warns(
        "P05, walk_1: the prior is personal: it learned from P01 only. "
        "Its spread between subjects is assumed, not learned; trust neither mean nor interval."
    ):
        bound = prior.bind(trial_of("P05"))
    model = model_of(prior)
    assert model.inflation == 4.0
    assert_same(weights(bound), new_subject(model.hierarchy, 4.0), 0.0)


@pytest.mark.parametrize("name", ["walk_1", "walk_9"])
def test_frames_already_learned_are_not_counted_twice(name: str) -> None:
    """Own frames of a subject in the prior: out of the population, then in as its own, each once."""
    prior, pairs = prior_of_four(), all_pairs()
    model = model_of(prior)
    trial = trial_of("P02", name)
    known = [item for item in model.trials if item.subject == "P02"]
    others = without_subject(model.hierarchy, list(model.trials), model.basis.relative_variance, "P02")
    expected = trial_posterior(widened(prior, others), known, name)
    for personal in (pairs, made.only(pairs, ["P02"]), made.only(pairs, ["P02"], ["walk_3"])):
        assert_same(weights(prior.bind(trial, personal)), expected)
    # A weight learned twice would be sharper.
    twice = trial_posterior(widened(prior, others), known + known, name)
    assert np.trace(twice.covariance) < 0.999 * np.trace(expected.covariance)


@pytest.mark.parametrize("family", ["linear", "reduced-rank-gp"])
def test_own_frames_of_a_subject_never_imaged_sharpen_its_weights(family: str) -> None:
    prior = prior_of_four(family)
    pairs = made.only(all_pairs(), ["P05"], ["walk_1", "walk_2"])
    second = made.only(pairs, ["P05"], ["walk_2"])
    stranger = prior.bind(trial_of("P05", "walk_1"))
    other = prior.bind(trial_of("P05", "walk_1"), second)
    same = prior.bind(trial_of("P05", "walk_1"), pairs)
    another = prior.bind(trial_of("P05", "walk_9"), pairs)
    # In the order of positive matrices: what is known of other trials helps, the very frames help more.
    for wide, sharp in ((stranger, other), (other, another), (other, same)):
        gain = np.linalg.eigvalsh(weights(wide).covariance - weights(sharp).covariance)
        assert gain[0] > -1e-9 * gain[-1]
        # What the weights add at the angles; waves that hardly move there stay as unknown as they were.
        assert added_variance(sharp) < 0.95 * added_variance(wide)
    model = model_of(prior)
    dof = {joint.name: joint.dof for joint in prior.joints}
    own = [summarise(item, model.basis) for item in segment_frames(pairs, "thigh", model.markers, dof)]
    wider = widened(prior, model.hierarchy)
    assert_same(weights(same), trial_posterior(wider, own, "walk_1"))
    belief = subject_posterior(wider, own)
    assert_same(weights(another), Weights(belief.mean, belief.covariance + wider.trial_covariance))


def test_own_frames_inform_and_say_so() -> None:
    prior, pairs = prior_of_four(), made.only(all_pairs(), ["P05"], ["walk_1"])
    bound = prior.bind(trial_of("P05", "walk_1"), pairs)
    np.testing.assert_array_equal(bound.informed_times, pairs["time"].values)
    assert bound.basis_of_belief == "the subject's own paired frames and the prior"
    assert prior.bind(trial_of("P05", "walk_2"), pairs).informed_times.size == 0


def test_another_recording_of_the_same_name_is_another_trial() -> None:
    """The second day's walk_1 shares the subject's weights with the first day's, not the trial's."""
    prior, pairs = prior_of_four(), made.only(all_pairs(), ["P02"], ["walk_1"])
    pairs = pairs.assign_coords(trial_digest=("trial", ["digest of the second day"]))
    pairs["displacement"] = -pairs["displacement"]
    renamed = pairs.assign_coords(
        trial_id=("trial", ["day_2"]), trial=("frame", np.full(pairs.sizes["frame"], "day_2"))
    )
    trial = trial_of("P02", "walk_1", digest="digest of the second day")
    one, other = weights(prior.bind(trial, pairs)), weights(prior.bind(trial, renamed))
    assert_same(one, other)
    first_day = weights(prior.bind(trial_of("P02", "walk_1"), pairs))
    assert np.abs(first_day.mean - one.mean).max() > 0.1 * np.abs(one.mean).max()


def test_personal_pairs_without_the_subject_change_nothing() -> None:
    prior, pairs = prior_of_four(), made.only(all_pairs(), ["P01", "P02"])
    for subject in ("P05", "P03"):
        plain = prior.bind(trial_of(subject))
        with warns(
            f"{subject}: the personal pairs hold no frames of this subject. Solved with the prior alone."
        ):
            bound = prior.bind(trial_of(subject), pairs)
        assert_same(weights(bound), weights(plain), 0.0)
        assert bound.basis_of_belief == plain.basis_of_belief


def test_personal_pairs_may_lack_markers_and_segments() -> None:
    prior, pairs = prior_of_four(), made.only(all_pairs(), ["P05"])
    trial = trial_of("P05", "walk_9")
    thigh_only = pairs.isel(segment=[0], marker=[0, 2])
    bound = prior.bind(trial, thigh_only)
    assert_same(weights(bound, "shank"), weights(prior.bind(trial), "shank"), 0.0)
    hidden = pairs.copy(deep=True)
    hidden["displacement"].values[:, 1] = np.nan
    assert_same(weights(bound), weights(prior.bind(trial, hidden)))


def test_personal_pairs_of_a_left_side_are_mirrored_twice() -> None:
    """Learned on the right, own frames and trial on the left: the mirror image of all on the right."""
    generator = np.random.default_rng(1)
    left = made.make_pairs(generator, made.subjects_of(5), trials=3, left=["P05"])
    np.testing.assert_array_equal(left["displacement"].values[:40], all_pairs()["displacement"].values[:40])
    prior = prior_of_four()
    one = prior.bind(trial_of("P05", "walk_2"), all_pairs())
    other = prior.bind(trial_of("P05", "walk_2", side="left"), left)
    # The family always sees a right side; only what the solver gets is turned.
    assert_same(weights(other), weights(one))
    right, mirrored = restricted(one).moments(ANGLES), restricted(other).moments(ANGLES)
    signs = mirror_signs(3)
    assert np.abs(right.mean[:, signs < 0]).max() > 1e-4
    np.testing.assert_allclose(mirrored.mean, right.mean * signs, rtol=1e-9, atol=1e-12)
    expected = right.covariance * np.outer(signs, signs)
    np.testing.assert_allclose(mirrored.covariance, expected, rtol=0, atol=1e-10 * expected.max())
    both = np.tile(signs, weights(one).mean.shape[0])
    constant = restricted(one).constant_covariance * np.outer(both, both)
    np.testing.assert_allclose(
        restricted(other).constant_covariance, constant, rtol=0, atol=1e-10 * constant.max()
    )


def test_personal_pairs_may_have_their_joints_in_another_order() -> None:
    generator = np.random.default_rng(3)
    pairs = made.make_pairs(generator, made.subjects_of(4), joints=CHAIN, segments=FEET)
    prior = learn(pairs, hold_out=["P04"])
    lab = made.made_lab(CHAIN, FEET)
    trial = made.made_trial(lab, "P04", "walk_1", np.zeros((2, 3)))
    own = made.only(pairs, ["P04"])
    turned = own.isel(joint=[1, 0], dof=[4, 3, 2, 1, 0])
    for name in FEET:
        assert_same(weights(prior.bind(trial, turned), name), weights(prior.bind(trial, own), name))


def test_personal_pairs_without_a_joint_are_refused() -> None:
    generator = np.random.default_rng(4)
    prior = learn(made.make_pairs(generator, made.subjects_of(2), joints=CHAIN, segments=FEET))
    own = made.make_pairs(generator, ["P09"])
    trial = made.made_trial(made.made_lab(CHAIN, FEET), "P09", "walk_1", np.zeros((2, 3)))
    with says(
        MismatchError,
        "pairs, joint ankle: expected it with dorsiflexion, inversion, internal_rotation, the pairs have "
        "knee with flexion, adduction, internal_rotation. Pair with a lab file that has it.",
    ):
        prior.bind(trial, own)


def test_artifact_of_a_foot_follows_dorsiflexion() -> None:
    """Bound to a lab, the angle that drives the foot is the first of its ankle, as it was in learning."""
    pairs = made.make_pairs(np.random.default_rng(5), made.subjects_of(4), joints=CHAIN, segments=FEET)
    prior = learn(pairs)
    lab = made.made_lab(CHAIN, FEET)
    foot = restricted(prior.bind(made.made_trial(lab, "P09", "walk_1", np.zeros((2, 3)))), "foot")

    def change(joint: int, angle: int) -> float:
        moved = np.zeros((1, 2, 3))
        moved[0, joint, angle] = 0.5
        return float(np.abs(foot.moments(moved).mean).max())

    assert change(1, 0) > 5e-4
    assert change(1, 2) == change(0, 0) == 0.0
