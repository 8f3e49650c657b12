from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from sta_prior.angles import JointConvention, joint_angles
from sta_prior.checks import FloatArray, check_rotation
from sta_prior.rigid import deformation_modes, deformation_part, fit_rigid, rigid_subspace
from sta_prior.se3 import inverse, position_of, relative_difference, rotation_of, transform_points
from sta_prior.simulate import (
    TASKS,
    PopulationSettings,
    SimulatedStudy,
    SimulatedTrial,
    simulate_population,
    simulate_study,
)
from sta_prior.simulate.artifact import (
    THIGH,
    draw_weights,
    drives,
    residual_displacement,
    systematic_displacement,
)
from sta_prior.simulate.motion import draw_style, joint_travel, minimum_jerk, task_motion
from sta_prior.simulate.subject import SimulatedSubject

KNEE = JointConvention(kind="knee", side="right")
SEGMENT_MARKERS = (slice(0, 5), slice(5, 10))
BANDS = (
    (10.0, 15.0),
    (4.0, 6.0),
)  # mm RMS, thigh and shank: common practice, sources in the package docstring


@pytest.fixture(scope="module")
def demo() -> SimulatedStudy:
    return simulate_study(11)


def trials_of(study: SimulatedStudy, activity: str = "") -> list[tuple[SimulatedSubject, SimulatedTrial]]:
    return [(s, t) for s in study.subjects for t in s.trials if activity in ("", t.activity)]


def root_mean_square(vectors: FloatArray) -> float:
    return float(1e3 * np.sqrt((vectors**2).sum(axis=-1).mean()))


# --- artifact ---------------------------------------------------------------------------------


def test_artifact_is_exactly_zero_at_the_reference_posture(demo: SimulatedStudy) -> None:
    for subject in demo.subjects:
        reference = subject.style.reference_angles
        assert np.all(drives(reference, reference) == 0)
        for weights in subject.weights:
            assert np.all(systematic_displacement(weights, drives(reference, reference)) == 0)
        assert np.all(joint_travel(subject.style, reference) == 0)


def test_static_trial_shows_reference_positions(demo: SimulatedStudy) -> None:
    sd = demo.population.settings.instrument_sd
    for subject in demo.subjects:
        mean = subject.static_points.mean(axis=0)
        for segment, markers in enumerate(SEGMENT_MARKERS):
            seen = transform_points(inverse(subject.reference_pose[segment]), mean[markers])
            # 5 standard errors of a mean of 60 frames
            assert np.abs(seen - subject.body.markers[markers]).max() < 5 * sd / np.sqrt(60)
        rotation = rotation_of(inverse(subject.reference_pose[0]) @ subject.reference_pose[1])
        np.testing.assert_allclose(joint_angles(KNEE, rotation), subject.style.reference_angles, atol=1e-12)


@pytest.mark.parametrize("seed", range(6))
def test_displacement_has_the_stated_size(seed: int) -> None:
    study = simulate_study(seed)
    moved = np.concatenate([trial.displacement for _, trial in trials_of(study)])
    for markers, (lowest, highest) in zip(SEGMENT_MARKERS, BANDS, strict=True):
        assert lowest < root_mean_square(moved[:, markers]) < highest


def test_residual_has_its_size_and_correlation_time(demo: SimulatedStudy) -> None:
    residuals = [trial.displacement - trial.systematic for _, trial in trials_of(demo)]
    pooled = np.concatenate(residuals)
    assert root_mean_square(pooled[:, :5]) == pytest.approx(2.5, rel=0.05)
    assert root_mean_square(pooled[:, 5:]) == pytest.approx(1.2, rel=0.05)
    for lag in (2, 5, 10):
        correlation = np.mean([(r[lag:] * r[:-lag]).mean() for r in residuals]) / (pooled**2).mean()
        assert -lag / 100 / np.log(correlation) == pytest.approx(0.1, rel=0.1)


def test_residual_covariance_is_full_across_markers(demo: SimulatedStudy) -> None:
    pooled = np.concatenate([trial.displacement - trial.systematic for _, trial in trials_of(demo)])
    for segment, markers in zip(demo.population.segments, SEGMENT_MARKERS, strict=True):
        wanted = segment.residual_factor @ segment.residual_factor.T
        flat = pooled[:, markers].reshape(len(pooled), -1)
        # about len/19 independent frames (correlation 0.905 a frame): relative error some 5 %
        np.testing.assert_allclose(flat.T @ flat / len(flat), wanted, atol=0.1 * np.abs(wanted).max())
        values = np.linalg.eigvalsh(wanted)
        assert values[0] > 1e-4 * values[-1]
        between_markers = wanted.reshape(5, 3, 5, 3)[0, :, 1]
        assert np.abs(between_markers).max() > 0.2 * np.diag(wanted).min()


def matched_displacements(seed: int, subjects: int) -> tuple[list[FloatArray], FloatArray]:
    """Two residual repeats of many subjects at the same angles: per segment (2, subjects, frames, 5, 3)."""
    generator = np.random.default_rng(seed)
    population = simulate_population(generator)
    drive = []
    for _ in range(6):
        style = draw_style(generator)
        for task in TASKS:
            angles = task_motion(task, style, (0.42, 0.4), generator).angles
            drive.append(drives(angles[::20], style.reference_angles))
    stacked = np.concatenate(drive)
    people = [draw_weights(population, generator) for _ in range(subjects)]
    result = []
    for index, segment in enumerate(population.segments):
        systematic = np.stack([systematic_displacement(weights[index], stacked) for weights, _ in people])
        residual = np.stack(
            [
                residual_displacement(segment.residual_factor, len(stacked), 0.2, 0.1, generator)
                for _ in range(2 * subjects)
            ]
        )
        result.append(systematic + residual.reshape(2, subjects, *residual.shape[1:]))
    return result, np.array([factor for _, factor in people])


@pytest.mark.parametrize("seed", [21, 22])
def test_between_subject_share_by_variance_decomposition(seed: int) -> None:
    displacements, _ = matched_displacements(seed, 200)
    for moved in displacements:
        total = (moved**2).mean()
        within = ((moved[0] - moved[1]) ** 2).mean() / 2
        between = moved.mean(axis=0).var(axis=0, ddof=1).mean() - within / 2
        assert 0.40 < between / total < 0.50


def test_tissue_factor_is_lognormal_with_mean_one_and_can_be_off() -> None:
    generator = np.random.default_rng(3)
    usual = simulate_population(generator)
    factors = np.array([draw_weights(usual, generator)[1] for _ in range(2000)])
    assert np.log(factors).std() == pytest.approx(0.15, rel=0.06)
    wide = simulate_population(generator, PopulationSettings(tissue_sd=0.4))
    factors = np.array([draw_weights(wide, generator)[1] for _ in range(2000)])
    assert factors.mean() == pytest.approx(1.0, abs=4 * 0.42 / np.sqrt(2000))
    off = simulate_population(generator, PopulationSettings(tissue_sd=0.0))
    assert draw_weights(off, generator)[1] == 1.0


def test_common_rigid_part_is_about_seventy_percent() -> None:
    # Of one body with the average layout; population mean and spread alike.
    population = simulate_population(np.random.default_rng(4))
    for segment in population.segments:
        basis = rigid_subspace(segment.layout)
        for factor in (segment.marker_factor, segment.residual_factor):
            share = np.trace(basis.T @ factor @ factor.T @ basis) / np.trace(factor @ factor.T)
            assert share == pytest.approx(0.70, abs=1e-9)
    study = simulate_study(4)
    for markers in SEGMENT_MARKERS:
        deforming, total = 0.0, 0.0
        for subject, trial in trials_of(study):
            moved = trial.displacement[:, markers]
            deforming += (deformation_part(subject.body.markers[markers], moved) ** 2).sum()
            total += (moved**2).sum()
        assert 1 - deforming / total == pytest.approx(0.70, abs=0.12)


def test_deformation_follows_the_rigid_part_only_with_coupling() -> None:
    def largest_cross_correlation(coupling: float) -> float:
        population = simulate_population(np.random.default_rng(5), PopulationSettings(coupling=coupling))
        segment = population.segments[0]
        covariance = segment.marker_factor @ segment.marker_factor.T
        basis = np.linalg.qr(rigid_subspace(segment.layout), mode="complete")[0]
        sizes = [
            np.linalg.cholesky(basis[:, p].T @ covariance @ basis[:, p]) for p in (slice(6), slice(6, 15))
        ]
        cross = basis[:, :6].T @ covariance @ basis[:, 6:]
        white = np.linalg.solve(sizes[1], np.linalg.solve(sizes[0], cross).T)
        return float(np.linalg.norm(white, 2))

    assert largest_cross_correlation(0.0) < 1e-9
    # canonical correlation of the construction
    assert largest_cross_correlation(0.6) == pytest.approx(0.6, abs=1e-9)


def test_neighbouring_markers_deform_alike() -> None:
    def smooth_share(smooth_length: float) -> float:
        """Part of the deformation's variance in modes that are linear in position."""
        settings = PopulationSettings(coupling=0.0, smooth_length=smooth_length)
        segment = simulate_population(np.random.default_rng(6), settings).segments[0]
        named = deformation_modes(segment.layout)
        variances = ((named.modes.T @ segment.marker_factor) ** 2).sum(axis=1)
        linear = [name.startswith(("homothety", "stretch")) for name in named.names]
        return float(variances[linear].sum() / variances[6:].sum())

    assert smooth_share(0.12) > smooth_share(0.001) + 0.1


# --- motion -----------------------------------------------------------------------------------


def test_angles_stay_in_the_range_of_their_task(demo: SimulatedStudy) -> None:
    limits = {"stair-up": (80, 96), "stair-down": (75, 96), "parcel-lift": (85, 102), "level-walk": (50, 62)}
    for task, (lowest_peak, limit) in limits.items():
        for _, trial in trials_of(demo, task):
            flexion = np.rad2deg(trial.angles[:, 0])
            assert lowest_peak < flexion.max() <= limit
            assert -1 < flexion.min() < 20
            assert 2.0 <= trial.time[-1] <= 3.0
    secondary = np.rad2deg(np.concatenate([trial.angles[:, 1:] for _, trial in trials_of(demo)]))
    assert np.abs(secondary[:, 0]).max() < 6
    assert np.ptp(secondary[:, 0]) > 4
    assert np.abs(secondary[:, 1]).max() < 15
    assert np.ptp(secondary[:, 1]) > 9
    travel = 1e3 * np.concatenate([trial.travel for _, trial in trials_of(demo)])
    assert 2 < np.abs(travel).max() < 10


def test_poses_angles_and_travel_agree(demo: SimulatedStudy) -> None:
    for subject, trial in trials_of(demo)[::7]:
        check_rotation(rotation_of(trial.lab_from_bone))
        thigh_from_shank = inverse(trial.lab_from_bone[:, 0]) @ trial.lab_from_bone[:, 1]
        np.testing.assert_allclose(
            joint_angles(KNEE, rotation_of(thigh_from_shank)), trial.angles, atol=1e-10
        )
        centre = transform_points(thigh_from_shank, subject.body.centres[None, 1:])[:, 0]
        np.testing.assert_allclose(centre - subject.body.centres[0], trial.travel, atol=1e-10)


def test_root_moves_as_the_task_asks(demo: SimulatedStudy) -> None:
    def velocity(task: str) -> FloatArray:
        return np.mean(
            [
                (t.lab_from_bone[-1, 0, :3, 3] - t.lab_from_bone[0, 0, :3, 3]) / t.time[-1]
                for _, t in trials_of(demo, task)
            ],
            axis=0,
        )

    assert velocity("level-walk")[0] == pytest.approx(1.2, abs=0.08)
    assert abs(velocity("level-walk")[1]) < 0.03
    assert velocity("stair-up")[1] > 0.2
    assert velocity("stair-down")[1] < -0.2
    for _, trial in trials_of(demo, "parcel-lift"):
        ankle = position_of(trial.lab_from_bone[:, 1])
        hip = position_of(trial.lab_from_bone[:, 0])
        assert np.ptp(ankle[:, 1]) < 0.03  # the foot stays on the floor
        assert np.ptp(hip[:, 1]) > 0.15


def test_motion_is_smooth(demo: SimulatedStudy) -> None:
    for _, trial in trials_of(demo):
        acceleration = np.diff(trial.angles[:, 0], 2) * 100.0**2
        assert 5 < np.abs(acceleration).max() < 200  # rad/s²: common practice, no source
        # no kink: from frame to frame the acceleration changes by a fraction of its largest value
        assert np.abs(np.diff(acceleration)).max() < 0.3 * np.abs(acceleration).max()


def test_minimum_jerk_ends_at_rest() -> None:
    time = np.linspace(-0.5, 1.5, 20001)
    rise = minimum_jerk(time, 0.0, 1.0)
    assert (rise[0], rise[-1]) == (0.0, 1.0)
    assert rise[10000] == pytest.approx(0.5)
    assert np.abs(np.gradient(rise, time)).max() == pytest.approx(1.875, rel=1e-4)  # Flash & Hogan (1985)


def test_cycles_are_whole_and_inside(demo: SimulatedStudy) -> None:
    for _, trial in trials_of(demo):
        assert len(trial.cycles) >= 1
        for start, end in trial.cycles:
            assert 0 <= start < end <= trial.time[-1]


# --- measurement ------------------------------------------------------------------------------


def test_points_are_pose_times_displaced_marker_plus_noise(demo: SimulatedStudy) -> None:
    noise = []
    for subject, trial in trials_of(demo):
        exact = [
            transform_points(
                trial.lab_from_bone[:, k], subject.body.markers[markers] + trial.displacement[:, markers]
            )
            for k, markers in enumerate(SEGMENT_MARKERS)
        ]
        noise.append((trial.points - np.concatenate(exact, axis=1)).ravel())
    pooled = np.concatenate(noise)
    assert np.nanstd(pooled) == pytest.approx(0.3e-3, rel=0.01)
    assert abs(np.nanmean(pooled)) < 5 * 0.3e-3 / np.sqrt(len(pooled))


def test_a_few_trials_have_occlusions(demo: SimulatedStudy) -> None:
    hidden = [np.isnan(trial.points).all(axis=-1) for _, trial in trials_of(demo)]
    touched = [h for h in hidden if h.any()]
    assert 0.05 < len(touched) / len(hidden) < 0.35
    for mask in touched:
        lost = mask.sum(axis=0)
        assert 1 <= (lost > 0).sum() <= 2
        assert lost.max() <= 30


def test_bone_truth_comes_in_two_windows_with_white_noise(demo: SimulatedStudy) -> None:
    differences = []
    for subject, trial in trials_of(demo):
        in_view = np.isfinite(trial.imaged_pose[:, 0, 0, 0])
        assert np.array_equal(in_view, np.isfinite(trial.imaged_pose).all(axis=(1, 2, 3)))
        edges = np.flatnonzero(np.diff(np.concatenate([[0], in_view.astype(int), [0]])))
        lengths = edges[1::2] - edges[::2]
        if not subject.imaged:
            assert not in_view.any()
            continue
        assert len(lengths) == 2 or (len(lengths) == 1 and lengths[0] >= 119)  # the two may touch
        if len(lengths) == 2:
            assert np.all((lengths >= 59) & (lengths <= 81))
        differences.append(relative_difference(trial.imaged_pose[in_view], trial.lab_from_bone[in_view]))
    pooled = np.concatenate(differences).reshape(-1, 6)
    np.testing.assert_allclose(np.rad2deg(pooled[:, :3].std(axis=0)), 0.5, rtol=0.03)
    np.testing.assert_allclose(1e3 * pooled[:, 3:].std(axis=0), 0.5, rtol=0.03)


def test_same_seed_same_bits_other_seed_differs() -> None:
    first, again, other = (simulate_study(seed, "small") for seed in (7, 7, 8))
    for (_, a), (_, b), (_, c) in zip(*map(trials_of, (first, again, other)), strict=True):
        for name in ("points", "imaged_pose", "displacement", "angles"):
            assert getattr(a, name).tobytes() == getattr(b, name).tobytes()
        assert not np.array_equal(a.displacement[:200], c.displacement[:200])


def test_small_study_holds_the_same_people_as_demo() -> None:
    small, full = simulate_study(7, "small"), simulate_study(7)
    assert [s.id for s in full.subjects] == [f"K{n:02d}" for n in range(1, 16)]
    assert [s.imaged for s in full.subjects] == [True] * 9 + [False] * 6
    assert [s.id for s in small.subjects] == ["K01", "K02", "K03", "K04", "K10", "K11"]
    people = {s.id: s for s in full.subjects}
    for subject in small.subjects:
        assert np.array_equal(people[subject.id].trials[0].points, subject.trials[0].points, equal_nan=True)
    assert [t.id for t in small.subjects[0].trials] == [f"{task}_01" for task in TASKS]
    assert {t.session for t in full.subjects[0].trials} == {"morning", "afternoon"}


# --- plausibility (factor 2; never a proof of accuracy) ---------------------------------------


def test_plausible_largest_walking_artifact(demo: SimulatedStudy) -> None:
    # Andersen et al. (2012), Gait & Posture 35, 606–611, doi 10.1016/j.gaitpost.2011.11.032:
    # largest residual in walking, thigh 27.0 mm, shank 24.2 mm, "same order".
    moved = np.concatenate([trial.displacement for _, trial in trials_of(demo, "level-walk")])
    largest = [1e3 * np.linalg.norm(moved[:, markers], axis=-1).max() for markers in SEGMENT_MARKERS]
    assert 27.0 / 2 < largest[0] < 27.0 * 2
    assert 24.2 / 2 < largest[1] < 24.2 * 2


def test_plausible_knee_error_of_the_rigid_fit_in_walking(demo: SimulatedStudy) -> None:
    # Benoit et al. (2006), Gait & Posture 24, 152–164, doi 10.1016/j.gaitpost.2005.04.012:
    # average knee errors up to 4.4° and 13.0 mm in walking: the worst axis of each.
    angle_errors, travel_errors = [], []
    for subject, trial in trials_of(demo, "level-walk"):
        thigh, shank = (
            fit_rigid(subject.body.markers[markers], trial.points[:, markers]).pose
            for markers in SEGMENT_MARKERS
        )
        thigh_from_shank = inverse(thigh) @ shank
        angle_errors.append(joint_angles(KNEE, rotation_of(thigh_from_shank)) - trial.angles)
        centre = transform_points(thigh_from_shank, subject.body.centres[None, 1:])[:, 0]
        travel_errors.append(centre - subject.body.centres[0] - trial.travel)
    angle = np.rad2deg(np.mean([np.sqrt(np.nanmean(e**2, axis=0)) for e in angle_errors], axis=0))
    travel = 1e3 * np.mean([np.sqrt(np.nanmean(e**2, axis=0)) for e in travel_errors], axis=0)
    assert 4.4 / 2 < angle.max() < 4.4 * 2
    assert 13.0 / 2 < travel.max() < 13.0 * 2


def test_settings_scale_the_artifact() -> None:
    double = PopulationSettings(thigh=replace(THIGH, displacement_rms=24.6e-3, residual_rms=5e-3))
    plain, scaled = simulate_study(9, "small"), simulate_study(9, "small", double)
    for (_, a), (_, b) in zip(trials_of(plain), trials_of(scaled), strict=True):
        np.testing.assert_allclose(b.displacement[:, :5], 2 * a.displacement[:, :5], atol=1e-12)
        np.testing.assert_allclose(b.displacement[:, 5:], a.displacement[:, 5:], atol=1e-12)
