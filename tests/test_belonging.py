"""Does a trial belong to its reference? Other placement, swapped labels, offset clusters; not artifact."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from sta_prior import se3
from sta_prior.checks import FloatArray
from sta_prior.pairs.belonging import (
    DISTANCE_LIMIT,
    OFFSET_LIMIT,
    ROTATION_LIMIT,
    Belonging,
    check_belonging,
    distance_misfit,
)

FRAMES = 100
CLUSTER = np.array([[0.06, -0.10, 0.05], [0.07, -0.22, -0.02], [-0.01, -0.15, 0.09], [0.05, -0.30, 0.06]])
AWAY = np.abs(np.linspace(-1.2, 1.2, FRAMES))  # rad from the reference posture, least in mid-trial


def bones(seed: int = 1) -> FloatArray:
    rng = np.random.default_rng(seed)
    rotation = Rotation.from_rotvec(rng.standard_normal((FRAMES, 3))).as_matrix()
    return se3.make_pose(rotation, rng.uniform(-1, 1, (FRAMES, 3)))


def checked(positions: FloatArray, reference: FloatArray = CLUSTER) -> Belonging:
    """Positions (F, m, 3) or (m, 3) in the bone, seen in the lab."""
    bone = bones()
    points = se3.transform_points(bone, np.broadcast_to(positions, (FRAMES, *reference.shape)))
    return check_belonging(points, reference, bone, AWAY)


def rms_change(first: FloatArray, second: FloatArray) -> float:
    """RMS change of all distances between markers, one pair after the other."""
    changes = [
        np.linalg.norm(first[i] - first[j]) - np.linalg.norm(second[i] - second[j])
        for i in range(len(first))
        for j in range(i)
    ]
    return float(np.sqrt(np.mean(np.square(changes))))


def artifact(size: float, at_reference: float = 0.0, seed: int = 2) -> FloatArray:
    """Displacement (F, m, 3) that grows with posture to the given size, and differs by marker, m."""
    rng = np.random.default_rng(seed)
    direction = rng.standard_normal((4, 3))
    direction /= np.linalg.norm(direction, axis=1, keepdims=True)
    grown = size * AWAY / AWAY.max() + at_reference
    noise = 0.0005 * rng.standard_normal((FRAMES, 4, 3))
    return np.asarray(noise + grown[:, None, None] * direction)


def test_a_trial_that_belongs_is_not_refused() -> None:
    found = checked(CLUSTER)
    assert found.distance_misfit < 1e-12
    assert found.offset < 1e-12
    assert found.rotation < 1e-12
    assert found.reasons("thigh") == []


@pytest.mark.parametrize("size", [0.010, 0.030, 0.060])
def test_artifact_is_no_reason_whatever_its_size_away_from_the_reference(size: float) -> None:
    """Published peaks reach 40 mm (LITERATURE §1.1): it grows with posture from zero."""
    found = checked(CLUSTER + artifact(size))
    assert found.reasons("thigh") == []
    assert found.distance_misfit < DISTANCE_LIMIT


def test_artifact_that_moves_the_whole_cluster_is_no_reason() -> None:
    """Rigid artifact of 25 mm and 15° at the far end of the movement (LITERATURE §1.1)."""
    grown = AWAY / AWAY.max()
    turned = Rotation.from_rotvec(np.radians(15.0) * grown[:, None] * [0.0, 1.0, 0.0]).as_matrix()
    centre = CLUSTER.mean(axis=0)
    moved = (CLUSTER - centre) @ np.swapaxes(turned, 1, 2) + centre
    found = checked(moved + 0.025 * grown[:, None, None] * np.array([0.0, 1.0, 0.0]))
    assert found.reasons("thigh") == []


def test_another_placement_is_named_with_its_size() -> None:
    placed = CLUSTER + np.array([[0, 0, 0], [0, 0, 0], [0, 0.035, 0.01], [0, 0, 0]])
    found = checked(placed)
    expected = rms_change(placed, CLUSTER)
    assert found.distance_misfit == pytest.approx(expected, abs=1e-12)
    assert 0.010 < expected < 0.030
    assert found.reasons("thigh") == [
        f"thigh marker distances differ from the reference by {1000 * expected:.1f} mm RMS even in the best "
        "tenth of the frames, expected at most 6 mm"
    ]


def test_swapped_labels_are_named() -> None:
    swapped = CLUSTER[[1, 0, 2, 3]]
    found = checked(swapped)
    assert found.reasons("shank") == [
        f"shank marker distances differ from the reference by {1000 * rms_change(swapped, CLUSTER):.1f} mm "
        "RMS even in the best tenth of the frames, expected at most 6 mm"
    ]


def test_swapped_labels_of_a_symmetric_cluster_show_as_a_turned_cluster() -> None:
    """A rectangle with two pairs of labels exchanged keeps every distance."""
    square = np.array([[0.0, -0.1, 0.05], [0.0, -0.1, -0.05], [0.0, -0.25, 0.05], [0.0, -0.25, -0.05]])
    found = checked(square[[1, 0, 3, 2]], square)
    assert found.distance_misfit < 1e-12
    assert found.reasons("thigh") == [
        "thigh cluster keeps its shape but sits 0 mm and 180° from the bone near the reference posture, "
        "expected at most 30 mm and 20°"
    ]


@pytest.mark.parametrize(
    ("shift", "turn", "words"),
    [(0.041, 0.0, "41 mm and 0°"), (0.0, 27.0, "0 mm and 27°"), (0.052, 33.0, "52 mm and 33°")],
)
def test_intact_cluster_away_from_the_bone_is_named(shift: float, turn: float, words: str) -> None:
    centre = CLUSTER.mean(axis=0)
    rotation = Rotation.from_rotvec(np.radians(turn) * np.array([0.6, 0.0, 0.8])).as_matrix()
    placed = (CLUSTER - centre) @ rotation.T + centre + shift * np.array([0.0, 0.6, -0.8])
    found = checked(placed)
    assert found.distance_misfit < 1e-12
    assert found.offset == pytest.approx(shift, abs=1e-9)
    assert found.rotation == pytest.approx(np.radians(turn), abs=1e-9)
    assert found.reasons("thigh") == [
        f"thigh cluster keeps its shape but sits {words} from the bone near the reference posture, "
        "expected at most 30 mm and 20°"
    ]


def test_limits_are_those_of_the_words() -> None:
    limits = [DISTANCE_LIMIT, OFFSET_LIMIT, float(np.degrees(ROTATION_LIMIT))]
    assert limits == pytest.approx([0.006, 0.030, 20.0])
    at = Belonging(DISTANCE_LIMIT, OFFSET_LIMIT, float(ROTATION_LIMIT))
    assert at.reasons("thigh") == []
    assert len(Belonging(0.0061, 0.0, 0.0).reasons("thigh")) == 1
    assert len(Belonging(0.0, 0.0301, 0.0).reasons("thigh")) == 1
    assert len(Belonging(0.0, 0.0, 0.35).reasons("thigh")) == 1
    # A cluster of another shape has no meaningful offset: one reason, the first.
    assert len(Belonging(0.02, 0.05, 1.0).reasons("thigh")) == 1
    assert Belonging(np.nan, np.nan, np.nan).reasons("thigh") == []


def test_offset_is_judged_in_the_postures_nearest_to_the_reference() -> None:
    """A tenth of the frames, and the middle one of those: neither far postures nor a stray frame count."""
    shift = np.where(np.sort(AWAY)[10] > AWAY, 0.012, 0.080)[:, None, None] * np.array([1.0, 0.0, 0.0])
    stray = np.argmin(AWAY)
    shift[stray] = [0.5, 0.0, 0.0]
    found = checked(CLUSTER + shift)
    assert found.offset == pytest.approx(0.012, abs=1e-9)


def test_few_frames_are_all_judged() -> None:
    bone = bones()[:3]
    points = se3.transform_points(bone, np.broadcast_to(CLUSTER + np.array([0.04, 0, 0]), (3, 4, 3)))
    assert check_belonging(points, CLUSTER, bone, AWAY[:3]).offset == pytest.approx(0.04, abs=1e-9)


def test_frames_without_bone_or_markers_are_passed_over() -> None:
    bone = bones()
    points = se3.transform_points(bone, np.broadcast_to(CLUSTER + np.array([0.02, 0, 0]), (FRAMES, 4, 3)))
    nearest = np.argsort(AWAY, kind="stable")
    bone[nearest[:20]] = np.nan
    points[nearest[20:40], 1:] = np.nan
    away = AWAY.copy()
    away[nearest[40:60]] = np.nan
    found = check_belonging(points, CLUSTER, bone, away)
    assert found.offset == pytest.approx(0.02, abs=1e-9)
    assert found.distance_misfit < 1e-12


def test_without_bone_only_distances_are_judged() -> None:
    points = np.broadcast_to(CLUSTER + np.array([0.5, 0, 0]), (FRAMES, 4, 3))
    found = check_belonging(points, CLUSTER)
    assert found.distance_misfit < 1e-12
    assert np.isnan([found.offset, found.rotation]).all()
    nothing = check_belonging(points, CLUSTER, np.full((FRAMES, 4, 4), np.nan), AWAY)
    assert np.isnan([nothing.offset, nothing.rotation]).all()


def test_distances_are_judged_in_the_best_tenth() -> None:
    """Nine tenths of the frames exceed the figure: one frame that fits by chance does not hide a misfit."""
    moved = np.broadcast_to(CLUSTER, (FRAMES, 4, 3)).copy()
    moved[:, 3, 1] += 0.001 * np.arange(FRAMES)
    expected = rms_change(moved[9], CLUSTER)
    assert distance_misfit(moved, CLUSTER) == pytest.approx(expected, abs=1e-12)
    assert distance_misfit(moved[::-1], CLUSTER) == pytest.approx(expected, abs=1e-12)
    one_good = np.broadcast_to(CLUSTER * [1.0, 1.2, 1.0], (FRAMES, 4, 3)).copy()
    one_good[40] = CLUSTER
    assert distance_misfit(one_good, CLUSTER) > DISTANCE_LIMIT


def test_frames_with_few_markers_do_not_decide() -> None:
    """Three unmoved markers fit well in frames that hide the moved one; the other frames decide."""
    moved = np.broadcast_to(CLUSTER, (FRAMES, 4, 3)).copy()
    moved[:, 3] += [0.0, 0.05, 0.0]
    moved[:50, 3] = np.nan
    assert distance_misfit(moved, CLUSTER) == pytest.approx(rms_change(moved[60], CLUSTER), abs=1e-12)
    moved[50:, 3] = np.nan
    assert distance_misfit(moved, CLUSTER) < 1e-12


def test_too_few_markers_for_any_distance() -> None:
    points = np.broadcast_to(CLUSTER, (FRAMES, 4, 3)).copy()
    points[:, 2:] = np.nan
    assert np.isnan(distance_misfit(points, CLUSTER))
    assert np.isnan(distance_misfit(points[:0], CLUSTER))
