"""The zero-mean prior of published sizes: its algebra, its table, and what it refuses."""

from __future__ import annotations

import tomllib
from pathlib import Path

import numpy as np
import pytest

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, MismatchError, ShapeError
from sta_prior.prior.interface import Artifact
from sta_prior.prior.magnitude import (
    MagnitudeArtifact,
    magnitude_for,
    read_magnitudes,
    unison_shape,
    words,
)
from sta_prior.rigid import marker_jacobian, rigid_part

ROOT = Path(__file__).parents[1]
MARKERS = np.array([[0.05, 0.2, 0.06], [0.06, 0.1, 0.05], [-0.02, 0.15, 0.08], [0.03, 0.05, 0.07]])
REFERENCE = np.deg2rad([[5.0, 0.0, 0.0], [10.0, 0.0, 0.0]])


def thigh(activity: str = "walking", **options: object) -> MagnitudeArtifact:
    return magnitude_for("thigh", MARKERS, activity, REFERENCE, **options)  # type: ignore[arg-type]


def postures(*knee_deg: float) -> FloatArray:
    angles = np.tile(REFERENCE, (len(knee_deg), 1, 1))
    angles[:, 1, 0] += np.deg2rad(knee_deg)
    return angles


def axis_sd(artifact: Artifact, angles: FloatArray) -> FloatArray:
    return np.asarray(np.sqrt(np.einsum("faa->f", artifact.moments(angles).covariance) / 12))


def test_far_from_the_reference_the_size_is_the_published_one() -> None:
    # Andersen et al. (2012): largest 27.0 mm at the thigh in walking (seen); χ with 3 degrees of freedom.
    sd = axis_sd(thigh(), postures(120.0))
    assert 1000.0 * sd[0] * np.sqrt(3) == pytest.approx(27.0 / 1.94, abs=0.05)


def test_the_spread_rises_with_the_angle_from_the_floor_of_the_residual() -> None:
    artifact = thigh()
    sd = axis_sd(artifact, postures(0.0, 1.0, 5.0, 17.0, 34.0, 68.0))
    assert np.all(np.diff(sd) > 0)
    np.testing.assert_allclose(sd[0], artifact.size * np.sqrt(1 - 0.69), rtol=1e-12)
    # At the full angle, L, 1 − exp(−½) of the constant part's variance is there.
    np.testing.assert_allclose(
        sd[3], artifact.size * np.sqrt(1 - 0.69 + 0.69 * (1 - np.exp(-0.5))), rtol=1e-12
    )


def test_only_adjacent_joints_count() -> None:
    hip_only = thigh(adjacent=(0,))
    np.testing.assert_allclose(
        axis_sd(hip_only, postures(90.0)), axis_sd(hip_only, postures(0.0)), rtol=1e-14
    )
    assert hip_only.features(postures(0.0, 30.0)).shape == (2, 1)
    assert thigh().features(postures(0.0, 30.0)).shape == (2, 2)


def test_an_unknown_reference_takes_the_full_size_everywhere() -> None:
    blind = magnitude_for("thigh", MARKERS, "walking")
    unknown = magnitude_for("thigh", MARKERS, "walking", np.full((2, 3), np.nan))
    for artifact in (blind, unknown):
        np.testing.assert_allclose(axis_sd(artifact, postures(0.0, 90.0)), blind.size, rtol=1e-12)
        assert artifact.constant_covariance.shape == (12, 12)


def test_features_and_residual_make_up_the_covariance_and_the_mean_is_zero() -> None:
    artifact = thigh()
    angles = postures(0.0, 3.0, 40.0)
    angles[:, 0, 0] += [0.0, 0.1, -0.3]
    moments = artifact.moments(angles)
    assert not moments.mean.any()
    assert not moments.mean_derivative.any()
    count = moments.features.shape[1]
    spread = artifact.constant_covariance.reshape(count, 12, count, 12)
    built = np.einsum("fk,kalb,fl->fab", moments.features, spread, moments.features) + artifact.residual
    np.testing.assert_allclose(moments.covariance, built, rtol=1e-12, atol=1e-18)
    assert np.linalg.eigvalsh(moments.covariance).min() > 0


def test_features_are_smooth_through_the_reference() -> None:
    artifact = thigh(adjacent=(1,))
    step = np.rad2deg(artifact.full_angle) * np.array([-2e-5, -1e-7, 0.0, 1e-7, 2e-5])
    values = artifact.features(postures(*step))[:, 0]
    np.testing.assert_allclose(values, np.deg2rad(step) / artifact.full_angle / np.sqrt(2), rtol=1e-9)


def test_the_share_in_unison_is_exact_and_rigid() -> None:
    shape = unison_shape(MARKERS, 12, 0.7, 9.7)
    assert np.trace(shape) == pytest.approx(12.0)
    basis = np.linalg.qr(marker_jacobian(MARKERS))[0]
    assert np.trace(basis.T @ shape @ basis) / 12 == pytest.approx(0.7, rel=1e-12)


def test_rotation_and_translation_in_unison_have_the_published_proportion() -> None:
    # Ancillao et al. (2021): thigh about 10° and 18 mm (seen).
    artifact = thigh()
    factor = np.linalg.cholesky(artifact.full_covariance)
    middle = MARKERS.mean(axis=0)
    rigid = rigid_part(MARKERS - middle, factor.T.reshape(12, 4, 3))
    sd = np.sqrt(np.einsum("ij,ij->j", rigid, rigid))
    np.testing.assert_allclose(np.rad2deg(sd[:3]) / (1000.0 * sd[3:]), 10.0 / 18.0, rtol=1e-3)


def test_one_segment_and_a_flat_pose_prior_leave_the_rigid_fit_as_it_is() -> None:
    """LITERATURE §1.4, first statement (derived): such a prior changes the interval, not the pose."""
    generator = np.random.default_rng(3)
    lever = marker_jacobian(MARKERS)
    noise = 0.0005**2 * np.eye(12)
    weight = np.linalg.inv(thigh().full_covariance + noise)
    shown = 0.01 * generator.standard_normal(12)
    weighted = np.linalg.solve(lever.T @ weight @ lever, lever.T @ weight @ shown)
    np.testing.assert_allclose(weighted, np.linalg.lstsq(lever, shown, rcond=None)[0], atol=1e-10)


def test_without_positions_markers_share_a_translation() -> None:
    shape = unison_shape(None, 6, 0.6, 9.7)
    np.testing.assert_allclose(np.diag(shape), 1.0)
    np.testing.assert_allclose(np.diag(shape, 3), 0.6)


@pytest.mark.parametrize("count", [1, 2, 3])
def test_few_or_hidden_markers_still_give_a_covariance(count: int) -> None:
    markers = MARKERS[:count].copy()
    if count == 3:
        markers[1] = np.nan
    covariance = magnitude_for("shank", markers).full_covariance
    assert covariance.shape == (3 * count, 3 * count)
    assert np.linalg.eigvalsh(covariance).min() > 0


@pytest.mark.parametrize(
    ("name", "task"),
    [
        *(("level-walk", "walking"), ("Gait 02", "walking"), ("running", "running_cutting")),
        *(("cutting", "running_cutting"), ("hopping", "running_cutting"), ("stepUp", "stairs")),
        *(("stair-down", "stairs"), ("sit2stand", "deep_flexion"), ("kneeAgainstGravity", "deep_flexion")),
        *(("hipKneeFlex", "deep_flexion"), ("parcel-lift", "deep_flexion"), ("open_chain", "deep_flexion")),
    ],
)
def test_activities_are_known_by_their_words(name: str, task: str) -> None:
    assert read_magnitudes().task("thigh", name) == (task, "")


def test_an_unknown_or_double_activity_takes_the_widest_and_says_so() -> None:
    table = read_magnitudes()
    assert table.task("shank", "juggling") == (
        "deep_flexion",
        "shank: activity juggling fits none of walking, running_cutting, stairs, deep_flexion; "
        "the widest, deep_flexion, is taken.",
    )
    assert table.task("thigh", "stair-walk") == (
        "stairs",
        "thigh: activity stair-walk fits walking, stairs; the widest, stairs, is taken.",
    )
    assert magnitude_for("foot", MARKERS).note.startswith("foot: no activity fits none of")
    assert 1000 * magnitude_for("thigh", MARKERS, "juggling").size * np.sqrt(3) == pytest.approx(29.3)


@pytest.mark.parametrize("name", ["thigh", "left_thigh", "Right-Thigh", "thighLeft", "RThigh", "femur"])
def test_segments_are_known_whatever_their_side(name: str) -> None:
    assert read_magnitudes().segment(name) == "thigh"


def test_an_unknown_segment_is_refused() -> None:
    with pytest.raises(MismatchError) as caught:
        magnitude_for("left_scapula", MARKERS)
    assert str(caught.value) == (
        "magnitude.toml, segment left_scapula: no published size, known: thigh, shank, foot. "
        "Learn a prior from paired data."
    )
    with pytest.raises(MismatchError, match=r"Did you mean shank\?$"):
        magnitude_for("shanks", MARKERS)


def test_positions_of_another_shape_are_refused() -> None:
    with pytest.raises(ShapeError) as caught:
        magnitude_for("thigh", np.zeros((4, 2)))
    assert str(caught.value) == "markers_reference: expected shape (..., n, 3), got (4, 2)."


def test_names_fall_into_words() -> None:
    assert words("left_Thigh2") == ("left", "thigh")
    assert words("stepUp-01") == ("step", "up")


def test_every_number_has_its_source_and_its_tag() -> None:
    table = read_magnitudes()
    numbers = [table.subject_share, table.full_angle, table.time_constant]
    for entry in table.segments.values():
        numbers += [*entry.size.values(), entry.unison_share, entry.rotation]
    assert list(table.segments) == ["thigh", "shank", "foot"]
    assert len(numbers) == 3 + 3 * 6
    assert all(number.source and number.how and number.published for number in numbers)
    assert all("own choice" in number.source for number in numbers if number.tag == "none")
    assert sum(number.tag == "from memory" for number in numbers) == 1


def test_no_size_falls_below_that_of_walking() -> None:
    for entry in read_magnitudes().segments.values():
        assert all(size.value >= entry.size["walking"].value for size in entry.size.values())


def test_the_copy_for_reading_agrees_and_the_package_ships_its_own() -> None:
    packaged = ROOT / "sta_prior" / "templates" / "magnitude.toml"
    assert packaged.read_bytes() == (ROOT / "priors" / "magnitude.toml").read_bytes()
    settings = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    patterns = settings["tool"]["setuptools"]["package-data"]["sta_prior"]
    assert any(Path("templates/magnitude.toml").match(pattern) for pattern in patterns)


def changed(tmp_path: Path, old: str, new: str) -> str:
    text = (ROOT / "priors" / "magnitude.toml").read_text(encoding="utf-8")
    assert old in text
    path = tmp_path / "own.toml"
    path.write_text(text.replace(old, new, 1), encoding="utf-8")
    return str(path)


@pytest.mark.parametrize(
    ("old", "new", "wrong"),
    [
        (
            'tag = "seen"\nhow = "27.0 / 1.94."',
            'tag = "heard"\nhow = "27.0 / 1.94."',
            "segment.thigh.size_mm.walking.tag: expected one of seen, from memory, none, got 'heard'. "
            "Choose one of them.",
        ),
        (
            "value = 13.9\n",
            "value = 139.0\n",
            "segment.thigh.size_mm.walking.value: expected at least 0.1 and at most 100, got 139. "
            "Correct the value.",
        ),
        (
            'doi = ""\ntag = "none"\nhow = "A quarter',
            'doi = 3\ntag = "none"\nhow = "A quarter',
            "common.full_angle_deg.doi: expected a text, which may be empty. Quote it.",
        ),
    ],
)
def test_a_table_with_a_fault_is_refused(tmp_path: Path, old: str, new: str, wrong: str) -> None:
    path = changed(tmp_path, old, new)
    with pytest.raises(InputError) as caught:
        read_magnitudes(path)
    assert str(caught.value) == f"{path}, {wrong}"


def test_a_table_without_segments_is_refused(tmp_path: Path) -> None:
    text = (ROOT / "priors" / "magnitude.toml").read_text(encoding="utf-8")
    path = tmp_path / "own.toml"
    path.write_text(text.split("[segment.thigh]")[0] + "[segment]\n", encoding="utf-8")
    with pytest.raises(InputError) as caught:
        read_magnitudes(str(path))
    assert str(caught.value) == f"{path}, segment: nothing here. List at least one."


def test_a_table_of_ones_own_is_read(tmp_path: Path) -> None:
    table = read_magnitudes(changed(tmp_path, "value = 13.9\n", "value = 11.0\n"))
    artifact = magnitude_for("thigh", MARKERS, "walking", magnitudes=table)
    assert 1000 * artifact.size * np.sqrt(3) == pytest.approx(11.0)
