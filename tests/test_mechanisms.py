"""The second invented mechanism: zero at the reference, sizes, spring, windows, and the study around it."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from made_studies import says

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError
from sta_prior.pairs import pair
from sta_prior.simulate import SimulatedStudy, SimulatedTrial, simulate_study, write_study
from sta_prior.simulate.mechanisms import (
    AVERAGE,
    DAMPING_RANGE,
    FEWEST_FRAMES,
    FREQUENCY_RANGE,
    MOST_FRAMES,
    SegmentTissue,
    bulge_and_slide,
    draw_tissue,
    scattered_windows,
    spring_response,
    strikes_of,
    wobble,
)
from sta_prior.study import read_study

MECHANISM = "bulge-slide-wobble"
SEGMENT_MARKERS = (slice(0, 5), slice(5, 10))
# mm RMS, thigh and shank: common practice, no source.
BANDS = ((10.0, 15.0), (4.0, 6.0))


@pytest.fixture(scope="module")
def demo() -> SimulatedStudy:
    return simulate_study(21, mechanism=MECHANISM)


def tissues(study: SimulatedStudy, segment: int) -> list[SegmentTissue]:
    return [subject.tissue[segment] for subject in study.subjects if subject.tissue is not None]


def trials_of(study: SimulatedStudy, activity: str = "") -> list[SimulatedTrial]:
    return [t for s in study.subjects for t in s.trials if activity in ("", t.activity)]


def size(vectors: FloatArray) -> float:
    return float(1e3 * np.sqrt((vectors**2).sum(axis=-1).mean()))


def test_an_unknown_mechanism_is_refused_with_the_nearest() -> None:
    text = (
        "mechanism: expected one of drives, bulge-slide-wobble, got bulge-slide. "
        "Did you mean bulge-slide-wobble?"
    )
    with says(InputError, text):
        simulate_study(1, "small", mechanism="bulge-slide")


def test_artifact_is_exactly_zero_at_the_reference_and_at_rest(demo: SimulatedStudy) -> None:
    pose = np.broadcast_to(np.eye(4), (50, 4, 4))
    for subject in demo.subjects:
        assert subject.tissue is not None
        reference = subject.style.reference_angles
        for tissue in subject.tissue:
            assert np.all(bulge_and_slide(tissue, reference, reference) == 0.0)
            still = wobble(tissue, pose, np.arange(50) / 100, (), np.random.default_rng(0))
            assert np.all(still == 0.0)


def test_displacement_lies_in_the_usual_bands() -> None:
    """Over populations; fifteen subjects with factors of SD 0.25 and 0.35 scatter by some 15 %."""
    sizes = []
    for seed in range(4):
        moved = np.concatenate([t.displacement for t in trials_of(simulate_study(seed, mechanism=MECHANISM))])
        sizes.append([size(moved[:, markers]) for markers in SEGMENT_MARKERS])
    for mean, own, (lowest, highest) in zip(np.mean(sizes, axis=0), np.transpose(sizes), BANDS, strict=True):
        assert lowest < mean < highest
        assert np.abs(own / mean - 1.0).max() < 0.4


def test_wobble_follows_impact_and_is_small_in_the_lift(demo: SimulatedStudy) -> None:
    def moved(activity: str) -> float:
        parts = [trial.displacement - trial.systematic for trial in trials_of(demo, activity)]
        return size(np.concatenate(parts)[:, :5])

    assert moved("level-walk") > 3 * moved("parcel-lift")
    assert strikes_of("parcel-lift", ((0.0, 3.0),)) == ()
    assert strikes_of("level-walk", ((0.2, 1.3), (1.3, 2.4))) == (0.2, 1.3, 2.4)


def test_bulge_saturates_at_a_subjects_own_onset(demo: SimulatedStudy) -> None:
    flexion = np.radians(np.arange(0.0, 121.0))
    angles = np.stack([flexion, np.zeros_like(flexion), np.zeros_like(flexion)], axis=1)
    onsets = []
    for tissue in tissues(demo, 0):
        only = SegmentTissue(**{**vars(tissue), "slide": 0 * tissue.slide, "turn": 0 * tissue.turn})
        length = np.linalg.norm(bulge_and_slide(only, angles, np.zeros(3))[:, 2], axis=-1)
        rise = np.diff(length)
        # Half-degree steps: steepest at the onset, flat at 120°.
        assert abs(np.degrees(tissue.onset) - (np.argmax(rise) + 0.5)) <= 1.0
        assert rise[-1] < 0.05 * rise.max()
        onsets.append(tissue.onset)
    assert np.degrees(np.std(onsets)) > 4.0


def test_slide_dies_out_with_distance_from_the_knee() -> None:
    markers = np.array([[0.06, -0.42 + distance, 0.03] for distance in (0.02, 0.10, 0.20, 0.30)])
    ratios = []
    for seed in range(200):
        tissue = draw_tissue(AVERAGE[0], markers, 1.0, np.random.default_rng(seed))
        length = np.linalg.norm(tissue.slide, axis=1)
        ratios.append(np.log(length[0] / length[-1]))
    # 0.28 m at a length of 0.14 m, lognormal with SD 0.25: mean 2·exp(0.25²/2) = 2.06.
    assert np.mean(ratios) == pytest.approx(0.28 / 0.14 * np.exp(0.25**2 / 2), rel=0.06)


def test_tissue_factor_multiplies_the_whole_artifact() -> None:
    markers = np.array([[0.06, -0.2, 0.03], [0.02, -0.3, 0.07]])
    one, two = (draw_tissue(AVERAGE[0], markers, s, np.random.default_rng(3)) for s in (1.0, 2.0))
    for part in ("bulge", "slide", "turn", "gain"):
        np.testing.assert_allclose(getattr(two, part), 2.0 * getattr(one, part), rtol=1e-12)
    factors = [
        subject.tissue_factor
        for seed in range(6)
        for subject in simulate_study(seed, "small", mechanism=MECHANISM).subjects
    ]
    assert np.std(np.log(factors)) == pytest.approx(0.25, abs=4 * 0.25 / np.sqrt(2 * len(factors)))


@pytest.mark.parametrize("damping", [0.2, 0.4])
def test_spring_rings_down_as_the_textbook_says(damping: float) -> None:
    """Step release: x = x₀e^(−ζωt)(cos ω_d t + ζ/√(1 − ζ²) sin ω_d t), any textbook of vibrations."""
    rate = 2 * np.pi * 5.0
    force = np.zeros((1000, 3))
    force[0] = rate**2 * np.array([1.0, 2.0, -1.0])
    response = spring_response(force, 1e-3, 5.0, damping)
    time = np.arange(1000) * 1e-3
    damped = rate * np.sqrt(1 - damping**2)
    decay = np.exp(-damping * rate * time)
    ring = decay * (np.cos(damped * time) + damping / np.sqrt(1 - damping**2) * np.sin(damped * time))
    # The force is held over the first step, so the release is one step late.
    np.testing.assert_allclose(response[1:, 0], ring[:-1], atol=1e-9)
    np.testing.assert_allclose(response[:, 1], 2 * response[:, 0], rtol=1e-9, atol=1e-15)


def test_spring_constants_stay_in_their_ranges(demo: SimulatedStudy) -> None:
    for segment in (0, 1):
        for tissue in tissues(demo, segment):
            assert FREQUENCY_RANGE[0] <= tissue.frequency <= FREQUENCY_RANGE[1]
            assert DAMPING_RANGE[0] <= tissue.damping <= DAMPING_RANGE[1]


def test_windows_are_short_scattered_and_unequal(demo: SimulatedStudy) -> None:
    generator = np.random.default_rng(5)
    views = [scattered_windows(251, generator) for _ in range(400)]
    lengths = []
    for view in views:
        edges = np.flatnonzero(np.diff(np.concatenate([[0], view.astype(int), [0]])))
        lengths += (edges[1::2] - edges[::2]).tolist()
    assert min(lengths) >= FEWEST_FRAMES
    # Two windows may overlap into one; a single one is never longer.
    assert np.median(lengths) <= MOST_FRAMES
    assert sum(not view.any() for view in views) == pytest.approx(0.15 * 400, abs=4 * np.sqrt(0.13 * 400))
    imaged = [s for s in demo.subjects if s.imaged]
    frames = [sum(int(np.isfinite(t.imaged_pose[:, 0, 0, 0]).sum()) for t in s.trials) for s in imaged]
    assert max(frames) > 1.2 * min(frames)


def test_same_seed_same_bits_and_the_first_mechanism_is_untouched() -> None:
    one, two = (simulate_study(6, "small", mechanism=MECHANISM) for _ in range(2))
    np.testing.assert_array_equal(one.subjects[0].trials[0].points, two.subjects[0].trials[0].points)
    plain = simulate_study(6, "small")
    assert plain.population.tissue is None
    assert all(subject.tissue is None for subject in plain.subjects)
    assert not np.array_equal(
        plain.subjects[0].trials[0].displacement, one.subjects[0].trials[0].displacement
    )


def test_files_of_the_mechanism_pair_to_its_displacement(tmp_path: Path) -> None:
    made = write_study(tmp_path / "study", 4, "small", mechanism=MECHANISM)
    pairs = pair(read_study(tmp_path / "study" / "truth.toml"))
    subject = made.subjects[0]
    own = (pairs["subject"].values == subject.id) & (pairs["trial"].values == subject.trials[0].id)
    found = pairs["displacement"].values[own]
    error = found - subject.trials[0].displacement[: found.shape[0]]
    # Instrument noise of 0.3 mm and the reference's own error; the artifact is ten times as large.
    assert np.sqrt(np.nanmean(error**2)) < 0.6e-3
