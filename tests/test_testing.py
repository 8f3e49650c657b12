"""The public battery: every family passes it, and each of its checks sees a planted fault."""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path

import made_priors as made
import numpy as np
import pytest
import xarray as xr
from made_studies import says

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError
from sta_prior.io.netcdf import dataset_digest, read_dataset, write_dataset
from sta_prior.prior import Artifact, Moments, Prior, base, families, known_families, learn
from sta_prior.prior.family import Own, Posture, Restricted, SegmentData, SegmentModel, Values, Variable
from sta_prior.prior.family import restrict as plain_restrict
from sta_prior.prior.feature_model import LINEAR
from sta_prior.prior.statistics import SegmentFrames, segment_frames
from sta_prior.prior.time_scales import TimeScales
from sta_prior.testing import FailedCheckError, check_prior, example_pairs
from sta_prior.testing.battery import CHECKS
from sta_prior.testing.example import OWN, RESIDUAL, SIZE

NEED_PAIRS = {"beyond the data", "learning again", "few subjects"}


@cache
def pairs_of(seed: int = 1, left: tuple[str, ...] = ()) -> xr.Dataset:
    return example_pairs(seed, left=left)


@cache
def linear_prior() -> Prior:
    return learn(pairs_of(), "linear")


def expected_checks(prior: Prior) -> set[str]:
    """All of them; a family that learns nothing of any subject has no own subject to compare."""
    learns = any(m.knows(name) for m in prior.segments.values() for name in prior.subjects)
    return set(CHECKS) - (set() if learns else {"own subject"})


@pytest.mark.parametrize("family", known_families())
def test_every_family_passes(family: str) -> None:
    pairs = pairs_of(2, ("S03",))
    prior = learn(pairs, family)
    assert set(check_prior(prior, pairs)) == expected_checks(prior)


@pytest.mark.parametrize("family", known_families())
def test_every_family_passes_on_other_pairs_with_gaps_and_subjects_held_out(family: str) -> None:
    """A knee and an ankle, three markers a segment, some hidden; two subjects not learned from."""
    generator = np.random.default_rng(5)
    joints = (made.KNEE, made.ANKLE)
    pairs = made.make_pairs(generator, made.subjects_of(8), joints=joints, left=["P02"], frames=40)
    hidden = generator.uniform(size=pairs["displacement"].shape[:2]) < 0.05
    pairs["displacement"].values[hidden] = np.nan
    prior = learn(pairs, family, hold_out=["P01", "P05"])
    assert set(check_prior(prior, pairs)) == expected_checks(prior)


@pytest.mark.parametrize("family", known_families())
def test_without_pairs_nothing_is_learned_again(family: str) -> None:
    prior = learn(example_pairs(3, subjects=3), family)
    assert set(check_prior(prior)) == expected_checks(prior) - NEED_PAIRS


@pytest.mark.parametrize("family", ["linear", "reduced-rank-gp"])
def test_a_personal_prior_passes(family: str) -> None:
    pairs = example_pairs(4, subjects=1, trials=3)
    assert set(check_prior(learn(pairs, family), pairs)) == set(CHECKS) - {"few subjects"}


# Faults, planted in a model that passes.


@dataclass(frozen=True)
class BentArtifact:
    """An artifact whose moments, residual, constants or decay time are changed."""

    inner: Artifact
    bend: Callable[[Moments, FloatArray], Moments] = lambda moments, angles: moments
    residual_of: Callable[[FloatArray], FloatArray] = lambda residual: residual
    constant_of: Callable[[FloatArray], FloatArray] = lambda constant: constant
    time: float | None = None
    time_scales: object = None

    @property
    def residual(self) -> FloatArray:
        return self.residual_of(self.inner.residual)

    @property
    def constant_covariance(self) -> FloatArray:
        return self.constant_of(self.inner.constant_covariance)

    @property
    def time_constant(self) -> float:
        return self.inner.time_constant if self.time is None else self.time

    def moments(self, angles: FloatArray) -> Moments:
        return self.bend(self.inner.moments(angles), angles)


@dataclass(frozen=True)
class Fault:
    """What is wrong with a family; every part does nothing by default."""

    artifact: Callable[[Artifact, Posture], Artifact] = lambda artifact, posture: artifact
    new: Callable[[SegmentModel, float | None], float | None] = lambda model, inflation: inflation
    widened: Callable[[float], float] = lambda inflation: inflation
    own_is_new: bool = False
    stored: Callable[[str, Values], Values] = lambda name, values: values
    learned: Callable[[SegmentModel], SegmentModel] = lambda model: model


@dataclass(frozen=True)
class FaultyModel:
    """A linear model with a fault."""

    inner: SegmentModel
    fault: Fault

    @property
    def name(self) -> str:
        return self.inner.name

    @property
    def markers(self) -> tuple[str, ...]:
        return self.inner.markers

    @property
    def layout(self) -> FloatArray:
        return self.inner.layout

    @property
    def inflation(self) -> float:
        return self.inner.inflation

    def for_new_subject(self, posture: Posture, inflation: float | None = None) -> Artifact:
        plain = self.inner.for_new_subject(posture, self.fault.new(self.inner, inflation))
        return self.fault.artifact(plain, posture)

    def for_subject(self, posture: Posture, own: Own) -> Artifact:
        if self.fault.own_is_new:
            return self.for_new_subject(posture)
        return self.fault.artifact(self.inner.for_subject(posture, own), posture)

    def knows(self, subject: str) -> bool:
        return self.inner.knows(subject)

    def refitted(self, frames: Sequence[SegmentFrames]) -> SegmentModel:
        return replace(self, inner=self.inner.refitted(frames))

    def with_inflation(self, inflation: float) -> SegmentModel:
        return replace(self, inner=self.inner.with_inflation(self.fault.widened(inflation)))

    def variables(self) -> dict[str, Variable]:
        return {
            key: variable._replace(values=self.fault.stored(key, variable.values))
            for key, variable in self.inner.variables().items()
        }

    def describe(self) -> str:
        return self.inner.describe()


@dataclass(frozen=True)
class FaultyFamily:
    """The linear family with a fault."""

    fault: Fault
    name: str = "faulty"

    def learn(self, data: SegmentData) -> SegmentModel:
        return FaultyModel(self.fault.learned(LINEAR.learn(data)), self.fault)

    def read(self, name: str, stored: Mapping[str, Values]) -> SegmentModel:
        return FaultyModel(LINEAR.read(name, stored), self.fault)


def bent(bend: Callable[[Moments, FloatArray], Moments]) -> Fault:
    return Fault(artifact=lambda artifact, posture: BentArtifact(artifact, bend))


def narrow_covariance(moments: Moments, angles: FloatArray) -> Moments:
    return replace(moments, covariance=0.9 * moments.covariance)


def lopsided(moments: Moments, angles: FloatArray) -> Moments:
    covariance = moments.covariance.copy()
    covariance[:, 0, 1] += 1e-6
    return replace(moments, covariance=covariance)


def singular(moments: Moments, angles: FloatArray) -> Moments:
    one = np.ones(moments.mean.shape[1])
    return replace(moments, covariance=np.broadcast_to(np.outer(one, one), moments.covariance.shape))


def indefinite(residual: FloatArray) -> FloatArray:
    return np.asarray(residual - 0.5 * np.trace(residual) * np.eye(residual.shape[0]))


def sure_of_high_knees(moments: Moments, angles: FloatArray) -> Moments:
    shrink = 1.0 - 0.3 * np.clip(angles[:, 1, 0] - 1.5, 0.0, 1.0)
    return replace(moments, covariance=shrink[:, None, None] * moments.covariance)


def mean_of_all(moments: Moments, angles: FloatArray) -> Moments:
    return replace(moments, mean=moments.mean - 0.5 * moments.mean.mean(axis=0))


def shifted(moments: Moments, angles: FloatArray) -> Moments:
    return replace(moments, mean=moments.mean + 0.0021)


def steep_beyond(moments: Moments, angles: FloatArray) -> Moments:
    """The slope goes on where the mean is held."""
    held = np.abs(moments.mean_derivative).max(axis=(1, 2, 3)) < 1e-6
    return replace(moments, mean_derivative=moments.mean_derivative + 0.01 * held[:, None, None, None])


def scaled(scales: object, time: float = 0.08) -> Fault:
    return Fault(artifact=lambda artifact, posture: BentArtifact(artifact, time=time, time_scales=scales))


def by_first_marker(artifact: Artifact, posture: Posture) -> Artifact:
    factor = 1.0 + abs(float(posture.markers[0, 1]))
    return BentArtifact(artifact, lambda m, angles: replace(m, covariance=factor * m.covariance))


COUNT = iter(range(1, 1000))


def another_each_time(model: SegmentModel) -> SegmentModel:
    assert hasattr(model, "time_scales")
    return replace(model, time_scales=TimeScales.single(0.01 + 1e-6 * next(COUNT)))  # type: ignore[type-var]


def short_beliefs(name: str, values: Values) -> Values:
    return values.astype(np.float32).astype(np.float64) if name == "population_mean" else values


FAULTS: dict[str, tuple[Fault, str]] = {
    "output lost": (
        bent(lambda m, angles: replace(m, mean=m.mean[:, :-1])),
        "mean has shape (37, 11), expected (37, 12).",
    ),
    "not finite": (
        bent(lambda m, angles: replace(m, features=m.features * np.nan)),
        "features has values that are not finite numbers.",
    ),
    "negative time": (
        Fault(artifact=lambda artifact, posture: BentArtifact(artifact, time=-0.02)),
        "time_constant is -0.02 s, expected 0 or more.",
    ),
    "time scales of another kind": (
        scaled((0.08, 0.02)),
        "time_scales is a tuple, expected TimeScales.",
    ),
    "one share too few": (
        scaled(TimeScales(np.array([0.08, 0.02]), np.array([1.0]))),
        "time_scales has constants of shape (2,) and shares of shape (1,), expected one or two of each.",
    ),
    "fast before slow": (
        scaled(TimeScales(np.array([0.02, 0.08]), np.array([0.5, 0.5]))),
        "decay times are 0.02 and 0.08 s, expected the slowest first, all above 0.",
    ),
    "shares of more than all": (
        scaled(TimeScales(np.array([0.08, 0.02]), np.array([0.7, 0.4]))),
        "shares of the decay times are 0.7 and 0.4, expected above 0 and of sum 1.",
    ),
    "not the slowest": (
        scaled(TimeScales(np.array([0.08, 0.02]), np.array([0.5, 0.5])), 0.02),
        "time_constant is 0.02 s, the slowest decay time is 0.08 s.",
    ),
    "depends on other frames": (bent(mean_of_all), "mean of a frame alone is not that among others."),
    "lopsided": (bent(lopsided), "covariance is not symmetric."),
    "indefinite": (
        Fault(artifact=lambda artifact, posture: BentArtifact(artifact, residual_of=indefinite)),
        "residual is not positive semi-definite.",
    ),
    "singular": (bent(singular), "covariance is singular. Give the residual a floor."),
    "narrow": (
        bent(narrow_covariance),
        "covariance is smaller than residual and trial-constant part together.",
    ),
    "sure of high knees": (
        bent(sure_of_high_knees),
        "spread shrinks above the range of the data of knee, expected growth or none.",
    ),
    "shifted": (
        bent(shifted),
        "mean artifact in the reference posture is 2.1 mm, expected 0. "
        "Take differences to the reference angles.",
    ),
    "first marker": (Fault(artifact=by_first_marker), "covariance changes with the order of the markers."),
    "inflation forgotten": (
        Fault(new=lambda model, inflation: inflation or 1.0),
        "a new subject does not get the model's own inflation by default.",
    ),
    "inflation not kept": (
        Fault(widened=lambda inflation: 1.5),
        "a new subject does not get the model's own inflation by default.",
    ),
    "own subject as any": (
        Fault(own_is_new=True),
        "SD for S01, which it learned from, is {new} mm, for a subject never imaged {new} mm, expected more.",
    ),
    "stored short": (
        Fault(stored=short_beliefs),
        "mean of the saved prior is another, expected the same bits.",
    ),
}


@pytest.mark.parametrize("fault", FAULTS)
def test_a_planted_fault_is_told(fault: str, monkeypatch: pytest.MonkeyPatch) -> None:
    wrong, text = FAULTS[fault]
    monkeypatch.setitem(families.BUILT_IN, "faulty", FaultyFamily(wrong))
    segments = {name: FaultyModel(model, wrong) for name, model in linear_prior().segments.items()}
    with pytest.raises(FailedCheckError) as caught:
        check_prior(replace(linear_prior(), family="faulty", segments=segments), pairs_of())
    found = str(caught.value)
    if "{new}" in text:
        text = text.format(new=found.split(" mm")[0].split()[-1])
    assert found == f"faulty, thigh: {text}"


def test_a_slope_that_goes_on_beyond_the_data_is_told() -> None:
    """The mean comes to rest there, softly: differences give next to nothing, not quite 0."""
    wrong = bent(steep_beyond)
    segments = {name: FaultyModel(model, wrong) for name, model in linear_prior().segments.items()}
    with pytest.raises(FailedCheckError) as caught:
        check_prior(replace(linear_prior(), segments=segments), pairs_of())
    found = str(caught.value)
    assert "thigh: derivative of the mean beyond the range of the data is 0.01 m/rad for output " in found
    assert abs(float(found.split("central differences give ")[1].rstrip("."))) < 1e-6


def test_a_wrong_slope_is_told_within_the_data() -> None:
    """The derivative of the knee's first angle a tenth too steep; the message names the worst of all."""
    steep = bent(lambda m, angles: replace(m, mean_derivative=1.1 * m.mean_derivative))
    segments = {name: FaultyModel(model, steep) for name, model in linear_prior().segments.items()}
    with pytest.raises(FailedCheckError) as caught:
        check_prior(replace(linear_prior(), family="faulty", segments=segments), pairs_of())
    text = str(caught.value)
    assert text.startswith("faulty, thigh: derivative of the mean within the range of the data is ")
    got, expected = (float(text.split(word)[1].split()[0].rstrip(".")) for word in (" is ", " give "))
    assert got == pytest.approx(1.1 * expected, rel=1e-3)


def test_a_family_that_learns_otherwise_each_time_is_told(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(families.BUILT_IN, "faulty", FaultyFamily(Fault(learned=another_each_time)))
    with says(FailedCheckError, "faulty: learning again from the same pairs gives another prior."):
        check_prior(learn(pairs_of(), "faulty"), pairs_of())


def test_pairs_of_another_study_are_told() -> None:
    with says(FailedCheckError, "linear: the pairs are not those that the prior learned from."):
        check_prior(linear_prior(), pairs_of(2))


def test_spread_that_does_not_shrink_with_subjects_is_told(monkeypatch: pytest.MonkeyPatch) -> None:
    """A residual that grows with the trials learned from: 4 of two subjects, 16 of eight."""

    def wider(model: SegmentModel) -> SegmentModel:
        factor = len(model.trials) ** 2  # type: ignore[attr-defined]
        hierarchy = model.hierarchy  # type: ignore[attr-defined]
        return replace(model, hierarchy=replace(hierarchy, residual=factor * hierarchy.residual))  # type: ignore[type-var]

    monkeypatch.setitem(families.BUILT_IN, "faulty", FaultyFamily(Fault(learned=wider)))
    with pytest.raises(FailedCheckError) as caught:
        check_prior(learn(pairs_of(), "faulty"), pairs_of())
    words = str(caught.value).split()
    assert str(caught.value) == (
        f"faulty, thigh: SD for a new subject is {words[8]} mm after 2 subjects, {words[13]} mm after 8, "
        "expected the wider after the fewer."
    )
    assert float(words[8]) < float(words[13])


@pytest.mark.parametrize(
    ("change", "check"),
    [
        (
            lambda words: {**words, "side": "right"},
            "mean of a left side is not the mirror image of a right one",
        ),
        (
            lambda words: {**words, "joints": sorted(words["joints"])},
            "mean changes with the order of the trial's joints",
        ),
        (
            lambda words: {**words, "outputs": np.arange(words["outputs"].size)},
            "mean changes with the order of the markers",
        ),
    ],
    ids=["side", "joints", "markers"],
)
def test_a_fault_in_the_binding_is_told(
    change: Callable[[dict[str, object]], dict[str, object]], check: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    def restrict(inner: Artifact, outputs: object, side: str, joints: object, total: int) -> Restricted:
        words = change({"outputs": outputs, "side": side, "joints": joints})
        return plain_restrict(inner, total=total, **words)  # type: ignore[arg-type]

    prior = linear_prior()
    monkeypatch.setattr(base, "restrict", restrict)
    with says(FailedCheckError, f"linear, thigh: {check}."):
        check_prior(prior, pairs_of())


# Invented pairs.


def test_the_same_seed_gives_the_same_pairs() -> None:
    assert dataset_digest(example_pairs(7)) == dataset_digest(example_pairs(7))
    assert dataset_digest(example_pairs(7)) != dataset_digest(example_pairs(8))


def test_pairs_have_the_sizes_asked_for(tmp_path: Path) -> None:
    pairs = example_pairs(1, subjects=3, trials=4, frames=10, markers=5)
    assert dict(pairs.sizes) == {
        "frame": 120,
        "marker": 10,
        "axis": 3,
        "joint": 2,
        "dof": 3,
        "subject": 3,
        "trial": 12,
        "segment": 2,
    }
    assert pairs["trial_id"].values[:4].tolist() == ["walk_01", "squat_01", "walk_02", "squat_02"]
    assert pairs.attrs["invented_data"] == 1
    write_dataset(tmp_path / "pairs.nc", pairs, "pairs", {})
    assert dataset_digest(read_dataset(tmp_path / "pairs.nc", "pairs")) == dataset_digest(pairs)


def test_a_left_side_is_the_mirror_image() -> None:
    right, left = example_pairs(1, subjects=2), example_pairs(1, subjects=2, left=["S02"])
    dof = {"knee": made.dof_of("knee")}
    for one, other in zip(
        segment_frames(right, "shank", ("S1", "S2", "S3", "S4"), dof),
        segment_frames(left, "shank", ("S1", "S2", "S3", "S4"), dof),
        strict=True,
    ):
        np.testing.assert_array_equal(one.displacement, other.displacement)
    assert left["segment_side"].values.tolist() == [["right", "right"], ["left", "left"]]
    assert not np.array_equal(left["displacement"].values, right["displacement"].values)


def test_artifact_of_the_pairs_has_the_size_that_the_module_states() -> None:
    """Forty subjects, thirty markers: SD of a weight √(6² + 2.1² + 0.6²) mm, of its mean over subjects 6 mm.

    Wobble 0.8 mm and bone truth 0.2 mm and 1 mrad at levers of 0.2 m: 0.8 to 0.9 mm near the reference.
    """
    pairs = example_pairs(9, subjects=40, trials=2, frames=40, markers=30)
    assert pairs["displacement"].shape == (3200, 60, 3)
    shank = pairs["displacement"].values[:, 30:].reshape(-1, 90)
    owner = [list(pairs["subject_id"].values).index(name) for name in pairs["subject"].values]
    change = pairs["angle"].values[:, 1, 0] - pairs["reference_angle"].values[owner, 1, 0]
    bent = 1.0 - np.exp(-np.maximum(change, 0.0) / 0.5)
    still = shank[bent == 0.0]
    assert still.shape[0] > 5
    assert RESIDUAL < still.std() < 0.0009
    owners = pairs["subject"].values
    slopes = []
    for name in pairs["subject_id"].values:
        own = owners == name
        slopes.append(bent[own] @ shank[own] / (bent[own] @ bent[own]))
    # Standard errors of an SD from 90 and from 40·90 weights: 7 % and, for all share a subject's, 1 %.
    assert np.mean(slopes, axis=0).std() == pytest.approx(SIZE, rel=0.2)
    assert np.std(slopes, axis=0).mean() == pytest.approx(OWN * SIZE, rel=0.1)


@pytest.mark.parametrize("name", ["subjects", "trials", "frames", "markers"])
def test_pairs_of_nothing_are_refused(name: str) -> None:
    with says(InputError, f"example_pairs, {name}: expected 1 or more, got -2."):
        example_pairs(**{name: -2})  # type: ignore[arg-type]


def test_an_unknown_left_subject_is_refused() -> None:
    with says(InputError, "example_pairs, left: no subject S04, has S01 S02 S03."):
        example_pairs(subjects=3, left=["S02", "S04"])


# The benchmark that uses the invented pairs.


def test_the_benchmark_of_learning_runs_and_its_page_shows_its_table(tmp_path: Path) -> None:
    folder = Path(__file__).parents[1] / "docs" / "benchmarks"
    small = ("--subjects", "3", "--trials", "1", "--frames", "40", "--points", "50")
    done = subprocess.run(
        [sys.executable, str(folder / "learn.py"), *small],
        cwd=tmp_path,
        env={**os.environ, "PYTHONPATH": str(folder.parents[1])},
        capture_output=True,
        text=True,
        check=False,
    )
    assert (done.returncode, done.stderr) == (0, "")
    printed = [line.split("|")[1] for line in done.stdout.splitlines() if line.startswith("|")]
    page = (folder / "README.md").read_text(encoding="utf-8")
    shown = [line.split("|")[1] for line in page.splitlines() if line.startswith("|")]
    size = "10 subjects × 3 trials × 1000 frames"
    expected = [
        row.replace("3 subjects × 1 trials × 40 frames", size).replace("50 p", "2000 p") for row in printed
    ]
    assert shown[: len(expected)] == expected
    assert "\nRatio 1/" in done.stdout
    assert "\nPeak memory " in done.stdout
