"""Learning a prior from paired data: what it holds, what it refuses, and what must not matter."""

from __future__ import annotations

import shutil
from pathlib import Path
from typing import cast

import made_priors as made
import numpy as np
import pytest
import xarray as xr
from made_studies import says

from sta_prior.errors import InputError
from sta_prior.io.c3d import write_c3d
from sta_prior.io.files import read_points
from sta_prior.io.netcdf import dataset_digest
from sta_prior.io.text import read_bone_table, write_bone_table
from sta_prior.pairs import pair
from sta_prior.prior import DEFAULT_FAMILY, Prior, known_families, learn
from sta_prior.prior.feature_model import FeatureModel
from sta_prior.prior.learning import joint_labels
from sta_prior.simulate import write_study
from sta_prior.study import read_study

PERSONAL = (
    "Personal prior: it learned from one subject, P01, and holds for that subject. The spread between "
    "subjects is assumed, not learned; for anyone else its intervals are wide and unverified."
)


def models(prior: Prior) -> dict[str, FeatureModel]:
    """The segments of a prior of a family that is linear in features."""
    return {name: cast(FeatureModel, model) for name, model in prior.segments.items()}


def assert_same_prior(one: Prior, other: Prior, rtol: float = 1e-9) -> None:
    assert tuple(one.segments) == tuple(other.segments)
    for name, model in models(one).items():
        twin = models(other)[name]
        assert model.markers == twin.markers
        assert model.basis.terms == twin.basis.terms
        np.testing.assert_allclose(model.basis.mixing, twin.basis.mixing, rtol=1e-8)
        assert [(w.joint, w.dof, w.count, w.kind) for w in model.basis.waves] == [
            (w.joint, w.dof, w.count, w.kind) for w in twin.basis.waves
        ]
        for part in ("centre", "limit", "length", "scale"):
            got, expected = ([getattr(w, part) for w in m.basis.waves] for m in (model, twin))
            np.testing.assert_allclose(got, expected, rtol=1e-9, err_msg=part)
        assert model.basis.reaches == twin.basis.reaches
        np.testing.assert_allclose(model.magnitude, twin.magnitude, rtol=1e-12)
        for part in ("constants", "shares"):
            got, expected = getattr(model.time_scales, part), getattr(twin.time_scales, part)
            np.testing.assert_allclose(got, expected, rtol=1e-6, err_msg=part)
        assert model.inflation == pytest.approx(twin.inflation, rel=1e-9)
        np.testing.assert_allclose(model.layout, twin.layout, rtol=1e-12)
        for part in ("residual", "subject_covariance", "trial_covariance"):
            a, b = getattr(model.hierarchy, part), getattr(twin.hierarchy, part)
            np.testing.assert_allclose(a, b, rtol=0, atol=rtol * np.abs(b).max(), err_msg=part)
        a, b = model.hierarchy.population, twin.hierarchy.population
        np.testing.assert_allclose(a.mean, b.mean, rtol=0, atol=rtol * np.abs(b.mean).max())
        np.testing.assert_allclose(a.covariance, b.covariance, rtol=0, atol=rtol * b.covariance.max())
    np.testing.assert_allclose(
        one.validation["coverage"].values, other.validation["coverage"].values, atol=1e-12
    )
    for part in ("rms_error", "crps", "log_score", "log_score_zero", "log_score_pooled"):
        np.testing.assert_allclose(one.validation[part].values, other.validation[part].values, rtol=1e-7)


def test_a_prior_holds_what_it_learned_from() -> None:
    generator = np.random.default_rng(1)
    pairs = made.make_pairs(generator, made.subjects_of(3), left=["P02"])
    pairs.attrs["invented_data"] = 1
    pairs.attrs["covariates"] = '{"P01": {"mass_kg": 71.5}, "P03": {"mass_kg": 64.0}}'
    prior = learn(pairs, hold_out=["P03"])
    assert prior.family == DEFAULT_FAMILY == "reduced-rank-gp"
    assert prior.subjects == ("P01", "P02")
    assert not prior.is_personal
    assert prior.invented
    assert prior.covariates == {"P01": {"mass_kg": 71.5}}
    assert prior.pairs_digest == dataset_digest(pairs)
    (knee,) = prior.joints
    assert (knee.name, knee.kind, knee.proximal, knee.distal) == made.KNEE
    assert knee.dof == ("flexion", "adduction", "internal_rotation")
    assert [(t.subject, t.trial, t.activity, t.digest, t.times.size) for t in prior.trials] == [
        ("P01", "walk_1", "walk", "digest of P01 walk_1", 40),
        ("P01", "walk_2", "walk", "digest of P01 walk_2", 40),
        ("P02", "walk_1", "walk", "digest of P02 walk_1", 40),
        ("P02", "walk_2", "walk", "digest of P02 walk_2", 40),
    ]
    np.testing.assert_array_equal(prior.trials[0].times, pairs["time"].values[:40])
    shank = models(prior)["shank"]
    assert shank.markers == ("SA", "SB", "SC")
    mirrored = pairs["reference"].values[:2, 3:] * np.array([[[1, 1, 1]], [[1, 1, -1]]])
    np.testing.assert_allclose(shank.layout, mirrored.mean(axis=0), rtol=1e-14)
    assert [t.subject for t in shank.trials] == ["P01", "P01", "P02", "P02"]
    assert shank.hierarchy.stop_reason == "relative change of the covariances below 0.001"


@pytest.mark.parametrize("family", ["linear", "reduced-rank-gp"])
def test_learning_predicts_subjects_left_out(family: str) -> None:
    """Artifact a radian: 4 mm shared, 2 mm of one's own. Expected share left: √(2²·1.2)/√(4² + 2²) = 0.49.

    Bound 0.75, for six subjects draw few shared weights, and residual and bone noise are left over too.
    """
    prior = learn(made.make_pairs(np.random.default_rng(2), made.subjects_of(6)), family)
    assert prior.family == family
    for name in prior.segments:
        figures = prior.validation.sel(segment=name)
        assert figures["rms_error"].mean() < 0.75 * figures["rms_zero"].mean()
        assert figures["crps"].mean() < 0.75 * figures["crps_zero"].mean()
        for rival in ("log_score_zero", "log_score_pooled"):
            assert figures["log_score"].mean() > figures[rival].mean()


def test_hold_out_is_learning_without() -> None:
    pairs = made.make_pairs(np.random.default_rng(3), made.subjects_of(4))
    assert_same_prior(learn(pairs, hold_out=["P02", "P04"]), learn(made.only(pairs, ["P01", "P03"])), 0.0)


def test_an_unknown_subject_held_out_is_refused_with_the_nearest() -> None:
    pairs = made.make_pairs(np.random.default_rng(4), made.subjects_of(2))
    text = "--hold-out: subject P11 is not in the paired data, which has P01, P02. Did you mean P01?"
    with says(InputError, text):
        learn(pairs, hold_out=["P02", "P11"])


def test_holding_out_everybody_is_refused() -> None:
    pairs = made.make_pairs(np.random.default_rng(5), made.subjects_of(2))
    with says(InputError, "--hold-out: leaves no subject to learn from."):
        learn(pairs, hold_out=["P01", "P02"])


def test_an_unknown_family_is_refused_with_the_nearest() -> None:
    pairs = made.make_pairs(np.random.default_rng(6), ["P01"])
    known = ", ".join(known_families())
    assert known.startswith("reduced-rank-gp, linear")
    with says(InputError, f"--family: no family liner here, known: {known}. Did you mean linear?"):
        learn(pairs, family="liner")


def test_pairs_without_a_joint_are_refused() -> None:
    pairs = made.make_pairs(np.random.default_rng(7), ["P01"]).isel(joint=[])
    with says(InputError, "pairs: no joint, so no angle can drive the artifact. Add a joint."):
        learn(pairs)


def test_pairs_without_angles_are_refused() -> None:
    pairs = made.make_pairs(np.random.default_rng(8), made.subjects_of(2))
    pairs["angle"].values[:] = np.nan
    text = "pairs, thigh: no frame has both a visible marker and all joint angles."
    with says(InputError, text):
        learn(pairs)
    pairs["reference_angle"].values[:] = np.nan
    with says(InputError, text):
        learn(pairs)


def test_a_marker_never_seen_is_refused() -> None:
    pairs = made.make_pairs(np.random.default_rng(9), made.subjects_of(2))
    pairs["displacement"].values[:, 4] = np.nan
    with says(
        InputError,
        "pairs, shank, marker SB: never seen together with bone truth. "
        "Drop it from the lab file or pair a trial that shows it.",
    ):
        learn(pairs)


@pytest.mark.parametrize(
    ("subjects", "notes"),
    [
        (1, (PERSONAL,)),
        (
            8,
            (
                "8 subjects: too few to certify a 90 % band without assumptions, which needs at least nine "
                "(n ≥ 1/α − 1 exchangeable subjects).",
            ),
        ),
        (9, ("9 subjects cannot certify a 95 % band without assumptions, which needs at least nineteen.",)),
        (18, ("18 subjects cannot certify a 95 % band without assumptions, which needs at least nineteen.",)),
        (19, ()),
    ],
)
def test_notes_say_how_far_the_subjects_go(subjects: int, notes: tuple[str, ...]) -> None:
    """Split conformal bands need n ≥ 1/α − 1 exchangeable subjects: 9 for 90 %, 19 for 95 % (recomputed:
    the ⌈(n + 1)(1 − α)⌉-th smallest of n scores exists from there on).
    """
    for level, needed in ((0.90, 9), (0.95, 19)):
        exists = [int(np.ceil(round((n + 1) * level, 9))) <= n for n in range(1, 30)]
        assert exists.index(True) + 1 == needed
    pairs = made.make_pairs(np.random.default_rng(10), made.subjects_of(subjects), trials=1, frames=20)
    prior = learn(pairs)
    assert prior.notes == notes
    assert prior.is_personal == (subjects == 1)


def test_only_subjects_that_were_learned_from_count() -> None:
    """A subject whose knee was never in view gives no frame: the prior is a personal one."""
    pairs = made.make_pairs(np.random.default_rng(11), made.subjects_of(2))
    pairs["angle"].values[pairs["subject"].values == "P02"] = np.nan
    prior = learn(pairs)
    assert prior.subjects == ("P01",)
    assert [item.digest for item in prior.trials] == ["digest of P01 walk_1", "digest of P01 walk_2"]
    assert prior.notes == (PERSONAL,)


def test_one_trial_cannot_be_validated() -> None:
    prior = learn(made.make_pairs(np.random.default_rng(12), ["P01"], trials=1))
    sizes = prior.validation.sizes
    assert {name: sizes[name] for name in ("segment", "unit", "level", "bin")} == {
        "segment": 2, "unit": 0, "level": 3, "bin": 10,
    }  # fmt: skip
    assert prior.validation["by_subject"].values.tolist() == [0, 0]
    assert prior.segments["thigh"].inflation == 4.0


def test_a_personal_prior_is_validated_by_its_trials_unwidened() -> None:
    """Its own weights take no widening; anybody else's take the largest."""
    prior = learn(made.make_pairs(np.random.default_rng(19), ["P01"], trials=3))
    assert prior.validation["unit"].values.tolist() == ["walk_1", "walk_2", "walk_3"]
    assert prior.validation["by_subject"].values.tolist() == [0, 0]
    assert prior.validation["inflation"].values.tolist() == [1.0, 1.0]
    assert [model.inflation for model in prior.segments.values()] == [4.0, 4.0]
    figures = prior.validation
    assert (figures["rms_error"].mean("unit") < 0.6 * figures["rms_zero"].mean("unit")).all()


def test_segments_may_have_learned_from_different_subjects() -> None:
    pairs = made.make_pairs(np.random.default_rng(13), made.subjects_of(3))
    pairs["displacement"].values[pairs["subject"].values == "P02", 3:] = np.nan
    prior = learn(pairs)
    units = prior.validation["unit"].values.tolist()
    assert units == ["P01", "P02", "P03"]
    known = np.isfinite(prior.validation["coverage"].values).all(axis=-1)
    assert known.tolist() == [[True, True, True], [True, False, True]]


def test_angles_of_an_ankle_are_taken_in_its_own_order() -> None:
    """Artifact of the foot follows dorsiflexion; the column internal_rotation comes first in the pairs."""
    chain = (made.KNEE, made.ANKLE)
    segments = {**made.SEGMENTS, "foot": ("FA", "FB", "FC")}
    pairs = made.make_pairs(np.random.default_rng(14), made.subjects_of(4), joints=chain, segments=segments)
    assert [label.dof for label in joint_labels(pairs)] == [
        ("flexion", "adduction", "internal_rotation"),
        ("dorsiflexion", "inversion", "internal_rotation"),
    ]
    prior = learn(pairs)
    foot = models(prior)["foot"]
    assert [(term.joint, term.dof, term.power) for term in foot.basis.terms] == [(1, 0, 1), (1, 0, 2)]
    assert [(wave.joint, wave.dof) for wave in foot.basis.waves] == [(1, 0)]
    assert [(reach.joint, reach.dof) for reach in foot.basis.reaches] == [(1, 0)]
    assert [term.joint for term in models(prior)["shank"].basis.terms] == [0, 0, 1, 1]
    # Features of dorsiflexion, which moves by half a radian; internal rotation stands still in this data.
    values = foot.trials[0].blocks[0].feature_gram
    assert np.diag(values)[1] / values[0, 0] > 0.1


def test_order_of_everything_in_the_pairs_does_not_matter() -> None:
    generator = np.random.default_rng(15)
    pairs = made.make_pairs(generator, made.subjects_of(3), left=["P03"])
    pairs["displacement"].values[generator.uniform(size=pairs["displacement"].shape[:2]) < 0.1] = np.nan
    shuffled = pairs.isel(
        frame=generator.permutation(pairs.sizes["frame"]),
        trial=generator.permutation(pairs.sizes["trial"]),
        subject=[2, 0, 1],
        segment=[1, 0],
        dof=[2, 0, 1],
    )
    one, other = learn(pairs), learn(shuffled)
    assert tuple(other.segments) == ("shank", "thigh")
    aligned = xr.Dataset.sel(other.validation, segment=one.validation["segment"])
    segments = {name: other.segments[name] for name in one.segments}
    twin = Prior(other.family, other.joints, segments, other.trials, aligned)
    assert_same_prior(one, twin, 1e-8)


def test_order_of_markers_does_not_matter() -> None:
    pairs = made.make_pairs(np.random.default_rng(16), made.subjects_of(3))
    order = [2, 0, 1, 5, 3, 4]
    one = models(learn(pairs))["thigh"]
    other = models(learn(pairs.isel(marker=order)))["thigh"]
    assert other.markers == ("TC", "TA", "TB")
    columns = (3 * np.array([2, 0, 1])[:, None] + np.arange(3)).reshape(-1)
    expected = one.hierarchy.residual[np.ix_(columns, columns)]
    np.testing.assert_allclose(other.hierarchy.residual, expected, atol=1e-9 * expected.max())
    mean = one.hierarchy.population.mean[:, columns]
    np.testing.assert_allclose(other.hierarchy.population.mean, mean, atol=1e-9 * np.abs(mean).max())
    assert other.inflation == pytest.approx(one.inflation)


def test_subjects_names_do_not_matter() -> None:
    generator = np.random.default_rng(17)
    one = made.make_pairs(generator, ["P01", "P02", "P03"])
    other = one.copy(deep=True)
    names = {"P01": "Zoe", "P02": "Ann", "P03": "Max"}
    for key in ("subject", "subject_id", "trial_subject"):
        other[key] = (other[key].dims, np.array([names[str(name)] for name in other[key].values]))
    first, second = learn(one), learn(other)
    assert second.validation["unit"].values.tolist() == ["Ann", "Max", "Zoe"]
    reordered = first.validation.sel(unit=["P02", "P03", "P01"])
    twin = Prior(first.family, first.joints, first.segments, first.trials, reordered)
    assert_same_prior(second, twin)


def test_a_mirrored_copy_in_memory_gives_the_same_prior() -> None:
    right = learn(made.make_pairs(np.random.default_rng(18), made.subjects_of(3)))
    left = learn(made.make_pairs(np.random.default_rng(18), made.subjects_of(3), left=made.subjects_of(3)))
    mixed = learn(made.make_pairs(np.random.default_rng(18), made.subjects_of(3), left=["P02"]))
    assert_same_prior(left, right, 0.0)
    assert_same_prior(mixed, right, 0.0)


def mirror_files(folder: Path, subjects: list[str]) -> None:
    """Mirror an invented study in its lab, every position and pose, z → −z; its subjects turn left-sided."""
    mirror = np.diag([1.0, 1.0, -1.0])
    text = (folder / "study.toml").read_text(encoding="utf-8")
    (folder / "study.toml").write_text(text.replace('side = "right"', 'side = "left"'), encoding="utf-8")
    for subject in subjects:
        for path in (folder / subject).glob("*.c3d"):
            points = read_points(path)
            points["position"] = points["position"] * xr.DataArray([1.0, 1.0, -1.0], dims="axis")
            points["position"].attrs["units"] = "m"
            write_c3d(path, points)
        for path in (folder / subject).glob("*_bone.csv"):
            bones = read_bone_table(path)
            bones["rotation"].values[:] = mirror @ bones["rotation"].values @ mirror
            bones["position"].values[..., 2] *= -1.0
            write_bone_table(path, bones)


def test_a_mirrored_copy_of_a_study_gives_the_same_prior(tmp_path: Path) -> None:
    """From files on: a left leg is the mirror image of the right one. C3D files hold single precision."""
    write_study(tmp_path / "right", 5, "small")
    shutil.copytree(tmp_path / "right", tmp_path / "left")
    subjects = ["K01", "K02"]
    mirror_files(tmp_path / "left", subjects)
    right, left = (
        pair(read_study(tmp_path / side / "study.toml"), subjects=subjects) for side in ("right", "left")
    )
    assert set(left["segment_side"].values.ravel()) == {"left"}
    np.testing.assert_allclose(left["angle"].values, right["angle"].values, atol=1e-6)
    signs = np.array([1.0, 1.0, -1.0])
    np.testing.assert_allclose(
        left["displacement"].values * signs, right["displacement"].values, atol=1e-7, equal_nan=True
    )
    one, other = learn(left), learn(right)
    for name, model in models(one).items():
        twin = models(other)[name]
        scale = np.abs(twin.hierarchy.population.mean).max()
        np.testing.assert_allclose(
            model.hierarchy.population.mean, twin.hierarchy.population.mean, atol=1e-4 * scale
        )
        np.testing.assert_allclose(
            model.hierarchy.residual, twin.hierarchy.residual, atol=1e-4 * twin.hierarchy.residual.max()
        )
