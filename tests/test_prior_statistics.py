"""From paired data to sufficient statistics: frames of a segment, noise of the bone truth."""

from __future__ import annotations

import made_priors as made
import numpy as np
import pytest
from differences import central_difference
from made_studies import says

from sta_prior import se3
from sta_prior.checks import FloatArray
from sta_prior.errors import MismatchError
from sta_prior.prior.linear import linear_basis
from sta_prior.prior.statistics import (
    adjacent_joints,
    bone_noise,
    gather_angles,
    mirror_signs,
    segment_frames,
    summarise,
    windows,
)

KNEE_DOF: dict[str, tuple[str, ...]] = {"knee": made.dof_of("knee")}
THIGH = made.SEGMENTS["thigh"]


def test_windows_end_where_time_jumps() -> None:
    time = np.array([0.0, 0.01, 0.02, 0.10, 0.11, 0.12, 0.136, 0.146, 0.160])
    # 16 ms is more than 1.5 usual steps of 10 ms, 14 ms is not.
    np.testing.assert_array_equal(windows(time), [0, 0, 0, 1, 1, 1, 2, 2, 2])
    np.testing.assert_array_equal(windows(np.array([0.0, 0.01, 0.024])), [0, 0, 0])
    np.testing.assert_array_equal(windows(np.array([3.0])), [0.0])
    assert windows(np.zeros(0)).size == 0


def test_mirror_turns_the_third_axis_of_every_marker() -> None:
    np.testing.assert_array_equal(mirror_signs(2), [1, 1, -1, 1, 1, -1])


def test_noise_of_the_bone_truth_is_that_of_a_small_error_of_the_pose() -> None:
    """Displacement of a marker under T·Exp(ξ), by central differences: C = J·Σ·Jᵀ."""
    generator = np.random.default_rng(1)
    points = 0.2 * generator.standard_normal((4, 3, 3))
    spread = np.diag(np.repeat([0.01**2, 0.002**2], 3))

    def seen(error: FloatArray) -> FloatArray:
        moved = se3.inverse(se3.exp(error))
        return np.asarray(se3.transform_points(moved, points).reshape(4, 9))

    jacobian = central_difference(seen, 6)
    expected = jacobian @ spread @ np.swapaxes(jacobian, 1, 2)
    np.testing.assert_allclose(bone_noise(points, 0.01, 0.002), expected, rtol=1e-8, atol=1e-14)


def test_noise_by_hand_and_of_hidden_markers() -> None:
    """One marker 0.3 m along y: rotation about x and z moves it by 0.3 m/rad along z and x."""
    points = np.array([[[0.0, 0.3, 0.0], [np.nan] * 3]])
    noise = bone_noise(points, 0.01, 0.002)[0]
    expected = np.diag([9e-6 + 4e-6, 4e-6, 9e-6 + 4e-6])
    np.testing.assert_allclose(noise[:3, :3], expected, atol=1e-18)
    np.testing.assert_allclose(noise[3:, 3:], 4e-6 * np.eye(3), atol=1e-18)
    assert (
        np.linalg.matrix_rank(bone_noise(0.1 * np.random.default_rng(2).standard_normal((1, 5, 3)), 1, 1))
        == 6
    )


def test_angles_stand_in_the_order_of_each_joint() -> None:
    """An ankle beside a knee shares the column internal_rotation: there it stands before dorsiflexion."""
    pairs = made.make_pairs(np.random.default_rng(3), ["P01"], joints=(made.KNEE, made.ANKLE))
    assert [str(d) for d in pairs["dof"].values] == [
        *("flexion", "adduction", "internal_rotation"),
        *("dorsiflexion", "inversion"),
    ]
    both = {"ankle": made.dof_of("ankle"), "knee": made.dof_of("knee")}
    angles = gather_angles(pairs, "angle", both)
    assert angles.shape == (pairs.sizes["frame"], 2, 3)
    for index, joint in enumerate(both):
        for column, name in enumerate(both[joint]):
            expected = pairs["angle"].sel(joint=joint, dof=name).values
            np.testing.assert_array_equal(angles[:, index, column], expected)


def test_a_joint_that_the_pairs_lack_is_refused() -> None:
    pairs = made.make_pairs(np.random.default_rng(4), ["P01"])
    wanted = {"ankle": made.dof_of("ankle")}
    with says(
        MismatchError,
        "pairs, joint ankle: expected it with dorsiflexion, inversion, internal_rotation, the pairs have "
        "knee with flexion, adduction, internal_rotation. Pair with a lab file that has it.",
    ):
        gather_angles(pairs, "angle", wanted)


def test_joints_that_touch_a_segment() -> None:
    chain = (made.HIP, made.KNEE, made.ANKLE)
    pairs = made.make_pairs(np.random.default_rng(5), ["P01"], joints=chain)
    assert adjacent_joints(pairs, "shank", ("ankle", "hip", "knee")) == (0, 2)
    assert adjacent_joints(pairs, "pelvis", ("ankle", "hip", "knee")) == (1,)
    assert adjacent_joints(pairs, "head", ("ankle", "hip", "knee")) == ()


def test_frames_of_a_segment_are_those_of_the_pairs() -> None:
    pairs = made.make_pairs(np.random.default_rng(6), ["P01", "P02"], bone_sd=(0.001, 0.02))
    found = segment_frames(pairs, "thigh", THIGH, KNEE_DOF)
    names = [("P01", "walk_1"), ("P01", "walk_2"), ("P02", "walk_1"), ("P02", "walk_2")]
    assert [(item.subject, item.trial) for item in found] == names
    last = found[3]
    own = (pairs["subject"].values == "P02") & (pairs["trial"].values == "walk_2")
    displacement = pairs["displacement"].values[own][:, :3]
    np.testing.assert_array_equal(last.displacement, displacement.reshape(-1, 9))
    np.testing.assert_array_equal(last.angles, pairs["angle"].values[own])
    np.testing.assert_array_equal(last.reference_angles, pairs["reference_angle"].values[1])
    np.testing.assert_array_equal(last.time, pairs["time"].values[own])
    np.testing.assert_array_equal(last.window, np.repeat([0.0, 1.0], 20))
    assert last.step == pytest.approx(0.01)
    points = displacement + pairs["reference"].values[1, :3]
    np.testing.assert_allclose(last.noise, bone_noise(points, 0.02, 0.001), rtol=1e-14)


def test_a_left_side_is_mirrored_with_its_noise() -> None:
    right = made.make_pairs(np.random.default_rng(7), ["P01"])
    left = made.make_pairs(np.random.default_rng(7), ["P01"], left=["P01"])
    np.testing.assert_array_equal(left["reference"].values[..., 2], -right["reference"].values[..., 2])
    for one, other in zip(
        segment_frames(right, "thigh", THIGH, KNEE_DOF),
        segment_frames(left, "thigh", THIGH, KNEE_DOF),
        strict=True,
    ):
        for name in ("displacement", "noise", "angles", "time"):
            np.testing.assert_array_equal(getattr(one, name), getattr(other, name))


def test_markers_come_in_the_order_asked_for_and_missing_ones_are_hidden() -> None:
    pairs = made.make_pairs(np.random.default_rng(8), ["P01"])
    (first, _) = segment_frames(pairs, "thigh", ("TC", "TX", "TA"), KNEE_DOF)
    own = pairs["trial"].values == "walk_1"
    np.testing.assert_array_equal(first.displacement[:, :3], pairs["displacement"].values[own, 2])
    np.testing.assert_array_equal(first.displacement[:, 6:], pairs["displacement"].values[own, 0])
    assert np.isnan(first.displacement[:, 3:6]).all()
    assert np.isfinite(first.noise).all()


def test_frames_without_angles_or_markers_are_dropped() -> None:
    pairs = made.make_pairs(np.random.default_rng(9), ["P01"], trials=3)
    pairs["angle"].values[3, 0, 1] = np.nan
    pairs["displacement"].values[5, :3] = np.nan
    pairs["displacement"].values[7, :2] = np.nan
    pairs["displacement"].values[40:80, :3] = np.nan
    found = segment_frames(pairs, "thigh", THIGH, KNEE_DOF)
    assert [item.trial for item in found] == ["walk_1", "walk_3"]
    assert found[0].time.size == 38
    assert np.isin(pairs["time"].values[[3, 5]], found[0].time).tolist() == [False, False]
    pairs["reference_angle"].values[0, 0, 2] = np.nan
    assert segment_frames(pairs, "thigh", THIGH, KNEE_DOF) == []


def test_angles_of_joints_that_do_not_touch_the_segment_may_be_unknown() -> None:
    pairs = made.make_pairs(np.random.default_rng(10), ["P01"], joints=(made.KNEE, made.ANKLE))
    pairs["angle"].values[:, 1] = np.nan
    dof = {"knee": made.dof_of("knee"), "ankle": made.dof_of("ankle")}
    assert len(segment_frames(pairs, "thigh", THIGH, dof)) == 2
    assert segment_frames(pairs, "shank", made.SEGMENTS["shank"], dof) == []


def test_a_segment_that_the_pairs_lack_has_no_frames() -> None:
    pairs = made.make_pairs(np.random.default_rng(11), ["P01"])
    assert segment_frames(pairs, "foot", ("FA", "FB"), KNEE_DOF) == []


def test_order_of_frames_in_the_pairs_does_not_matter() -> None:
    generator = np.random.default_rng(12)
    pairs = made.make_pairs(generator, ["P01", "P02"])
    shuffled = pairs.isel(frame=generator.permutation(pairs.sizes["frame"]))
    for one, other in zip(
        segment_frames(pairs, "thigh", THIGH, KNEE_DOF),
        segment_frames(shuffled, "thigh", THIGH, KNEE_DOF),
        strict=True,
    ):
        for name in ("displacement", "noise", "angles", "time", "window"):
            np.testing.assert_array_equal(getattr(one, name), getattr(other, name))


def test_statistics_hold_every_seen_frame_once() -> None:
    pairs = made.make_pairs(np.random.default_rng(13), ["P01"], trials=1)
    pairs["displacement"].values[4:9, 1] = np.nan
    (frames,) = segment_frames(pairs, "thigh", THIGH, KNEE_DOF)
    basis = linear_basis((0,))
    trial = summarise(frames, basis, 0.03)
    assert (trial.subject, trial.trial) == ("P01", "walk_1")
    assert [block.frames for block in trial.blocks] == [5, 35]
    np.testing.assert_array_equal(trial.blocks[0].seen, np.repeat([True, False, True], 3))
    rho = np.exp(-0.01 / 0.03)
    window = 1 + 19 * (1 - rho) / (1 + rho)
    assert sum(block.weight for block in trial.blocks) == pytest.approx(2 * window, rel=1e-10)
    gram = sum(block.feature_gram for block in trial.blocks)
    values = basis.values(frames.angles, frames.reference_angles)
    np.testing.assert_allclose(gram, window / 20 * values.T @ values, rtol=1e-10)
    noise = np.sum([block.noise_gram for block in trial.blocks], axis=0)
    shown = np.delete(frames.noise, slice(4, 9), axis=0)
    np.testing.assert_allclose(noise[4, 4], window / 20 * shown[:, 4, 4].sum(), rtol=1e-10)
