"""Skin markers at the instants of bone truth: the very frame, straight lines between, never across a gap."""

from __future__ import annotations

import numpy as np
import pytest

from sta_prior.checks import FloatArray
from sta_prior.pairs.align import SAME_INSTANT, skin_at

RATE = 100.0


def curve(time: FloatArray) -> FloatArray:
    """Three markers on parabolas of 20 m/s² and 5 m/s, shape (F, 3, 3)."""
    start = np.arange(9.0).reshape(3, 3)
    return start + 5.0 * time[:, None, None] + 10.0 * (time[:, None, None] - 0.05) ** 2


def test_same_instants_give_the_very_frames() -> None:
    time = np.arange(20) / RATE
    points = np.random.default_rng(1).standard_normal((20, 4, 3))
    points[7, 2] = np.nan
    positions, inside = skin_at(time, points, time[3:12])
    np.testing.assert_array_equal(positions, points[3:12])
    assert inside.all()


@pytest.mark.parametrize("part", [-0.9, -0.3, 0.4, 0.9])
def test_nearly_the_same_instant_is_the_same(part: float) -> None:
    """Clocks written with few digits: within a fiftieth of the period nothing is interpolated."""
    time = np.arange(20) / RATE
    points = np.random.default_rng(2).standard_normal((20, 4, 3))
    points[[4, 6]] = np.nan
    bone = time[[0, 5, 19]] + part * SAME_INSTANT / RATE
    positions, inside = skin_at(time, points, bone)
    np.testing.assert_array_equal(positions, points[[0, 5, 19]])
    assert inside.all()


def test_between_frames_lies_the_straight_line() -> None:
    time = np.arange(20) / RATE
    points = curve(time)
    bone = (np.arange(12.0) + 3.25) / RATE
    positions, _ = skin_at(time, points, bone)
    np.testing.assert_allclose(positions, 0.75 * points[3:15] + 0.25 * points[4:16], atol=1e-12)


def test_error_of_the_straight_line_is_what_the_docstring_says() -> None:
    """20 m/s² at 100 Hz: at most a·h²/8 = 0.25 mm, halfway between frames."""
    time = np.arange(20) / RATE
    bone = (np.arange(12.0) + 3.5) / RATE
    positions, _ = skin_at(time, curve(time), bone)
    np.testing.assert_allclose(np.abs(positions - curve(bone)).max(), 0.00025, rtol=1e-6)


def test_never_from_one_frame_alone() -> None:
    time = np.arange(20) / RATE
    points = curve(time)
    points[8, 1] = np.nan
    positions, inside = skin_at(time, points, np.array([0.074, 0.076, 0.084, 0.094]))
    hidden = np.asarray(np.isnan(positions).any(axis=-1))
    np.testing.assert_array_equal(hidden[:, 1], [True, True, True, False])
    assert not hidden[:, [0, 2]].any()
    assert inside.all()


def test_never_across_frames_that_the_file_lacks() -> None:
    """Frames 3 to 5 are missing: no position in the hole, also not near its middle or its ends."""
    kept = np.array([0, 1, 2, 6, 7, 8])
    time = kept / RATE
    points = curve(time)
    bone = np.array([0.02, 0.0201, 0.025, 0.03, 0.04, 0.05, 0.0599, 0.06, 0.065])
    positions, inside = skin_at(time, points, bone)
    assert inside.all()
    hidden = np.isnan(positions).all(axis=(1, 2))
    np.testing.assert_array_equal(hidden, [False, False, True, True, True, True, False, False, False])
    np.testing.assert_array_equal(positions[[0, 1]], points[[2, 2]])
    np.testing.assert_array_equal(positions[[6, 7]], points[[3, 3]])
    np.testing.assert_allclose(positions[8], (points[3] + points[4]) / 2, atol=1e-14)


def test_instants_outside_the_trial() -> None:
    time = 1.0 + np.arange(10) / RATE
    points = curve(time)
    slack = SAME_INSTANT / RATE
    bone = np.array(
        [0.5, 1.0 - 2 * slack, 1.0 - 0.5 * slack, 1.0, 1.09, 1.09 + 0.5 * slack, 1.09 + 2 * slack]
    )
    positions, inside = skin_at(time, points, bone)
    np.testing.assert_array_equal(inside, [False, False, True, True, True, True, False])
    np.testing.assert_array_equal(np.isnan(positions).all(axis=(1, 2)), ~inside)
    np.testing.assert_array_equal(positions[2:6], points[[0, 0, 9, 9]])


def test_a_faster_or_slower_bone_clock() -> None:
    time = np.arange(50) / RATE
    points = np.random.default_rng(3).standard_normal((50, 2, 3))
    for rate in (25.0, 250.0):
        bone = np.arange(int(0.3 * rate)) / rate
        positions, inside = skin_at(time, points, bone)
        assert inside.all()
        expected = np.stack(
            [np.interp(bone, time, column) for column in points.reshape(50, -1).T], axis=-1
        ).reshape(-1, 2, 3)
        np.testing.assert_allclose(positions, expected, atol=1e-9)


def test_a_trial_of_one_frame() -> None:
    points = curve(np.array([0.3]))
    positions, inside = skin_at(np.array([0.3]), points, np.array([0.1, 0.3, 0.5]))
    np.testing.assert_array_equal(inside, [False, True, False])
    np.testing.assert_array_equal(positions[1], points[0])
    assert np.isnan(positions[[0, 2]]).all()
