"""Rigid fit of many frames: the compiled fit against singular values, truth, SciPy, and itself elsewhere."""

from __future__ import annotations

import os
import subprocess
import sys
from concurrent.futures import ThreadPoolExecutor
from dataclasses import fields
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy.spatial.transform import Rotation

from sta_prior import se3
from sta_prior.checks import FloatArray
from sta_prior.errors import ShapeError
from sta_prior.rigid import MINIMUM_LINE_RATIO, PoseFit, RigidFit, fit_poses, fit_rigid
from sta_prior.rigid.fit import FEWEST_COMPILED
from sta_prior.rigid.kernels import LANES, SMALLEST_MARGIN, THRESHOLD_BAND, fit_frames
from sta_prior.rigid.singular import fit_singular

sys.path.insert(0, str(Path(__file__).parents[1] / "docs" / "benchmarks"))
import rigid as benchmark

BENCHMARKS = Path(__file__).parents[1] / "docs" / "benchmarks"
FRAMES = 1500
CASES = benchmark.cases(FRAMES, seed=7)
quick = settings(max_examples=40, deadline=None, derandomize=True, database=None)
each_case = pytest.mark.parametrize("name", CASES)
each_line = pytest.mark.parametrize("ratio", benchmark.LINE_RATIOS)


def same(fit: PoseFit, other: PoseFit) -> None:
    """Equal in every bit, in all that both hold."""
    for field in fields(PoseFit if type(fit) is not type(other) else fit):
        np.testing.assert_array_equal(getattr(fit, field.name), getattr(other, field.name), field.name)


# --- against singular values -----------------------------------------------------------------------


@each_case
def test_equals_singular_values(name: str) -> None:
    """1e-12 rad, and 1e-12 of the distance; who is determined, and what is NaN, to the frame."""
    case = CASES[name]
    fit = fit_rigid(case.reference, case.points, case.minimum_line_ratio)
    exact = fit_singular(case.reference, case.points, case.minimum_line_ratio)
    np.testing.assert_array_equal(fit.determined, exact.determined)
    for label, array in exact._asdict().items():
        np.testing.assert_array_equal(np.isnan(getattr(fit, label)), np.isnan(array), label)
    found = {label: value for label, value in benchmark.differences(case).items() if not np.isnan(value)}
    assert found.pop("determined") == 0
    assert found == dict.fromkeys(found, pytest.approx(0.0, abs=1e-12))


@each_case
def test_rotations_are_rotations(name: str) -> None:
    case = CASES[name]
    fit = fit_poses(case.reference, case.points, case.minimum_line_ratio)
    rotation = se3.rotation_of(fit.pose[fit.determined])
    gram = np.swapaxes(rotation, -1, -2) @ rotation
    np.testing.assert_allclose(gram, np.broadcast_to(np.eye(3), gram.shape), rtol=0, atol=3e-15)
    np.testing.assert_allclose(np.linalg.det(rotation), 1.0, rtol=0, atol=3e-15)


@quick
@given(
    st.integers(3, 6).flatmap(
        lambda m: st.tuples(
            arrays(np.float64, (m, 3), elements=st.floats(-0.2, 0.2, allow_subnormal=False)),
            arrays(np.float64, (m, 3), elements=st.floats(-0.2, 0.2, allow_subnormal=False)),
        )
    ),
    st.floats(0.0, 1.0),
    st.integers(0, 2**32 - 1),
)
def test_equals_singular_values_for_any_cluster(
    pair: tuple[FloatArray, FloatArray], share: float, seed: int
) -> None:
    """From the cluster itself, moved, to points of any other shape; a band of frames from 0 to 1."""
    reference, other = pair
    rng = np.random.default_rng(seed)
    shares = share * np.linspace(0.0, 1.0, FEWEST_COMPILED)[:, None, None]
    shapes = (1.0 - shares) * reference + shares * other
    points = se3.transform_points(se3.exp(rng.normal(size=(len(shapes), 6))), shapes)
    fit, exact = fit_rigid(reference, points), fit_singular(reference, points, MINIMUM_LINE_RATIO)
    np.testing.assert_array_equal(fit.determined, exact.determined)
    np.testing.assert_allclose(fit.pose, exact.pose, rtol=0, atol=1e-12)
    np.testing.assert_allclose(fit.residual, exact.residual, rtol=0, atol=1e-12)
    np.testing.assert_allclose(fit.spread, exact.spread, rtol=0, atol=1e-12)
    np.testing.assert_allclose(fit.line_ratio, exact.line_ratio, rtol=1e-12, atol=0)
    np.testing.assert_allclose(fit.unit_covariance, exact.unit_covariance, rtol=1e-9, atol=1e-9)


def test_equals_a_loop_over_scipy() -> None:
    """Another library: SciPy's Rotation.align_vectors, residuals as large as the cluster too."""
    for name in ("noise of 5 mm", "noise of 100 mm, as large as the cluster", "mirrored, 5 mm"):
        case = CASES[name]
        poses = fit_poses(case.reference, case.points).pose[:200]
        source = case.reference - case.reference.mean(axis=0)
        for pose, target in zip(poses, case.points, strict=False):
            expected = Rotation.align_vectors(target - target.mean(axis=0), source)[0]
            np.testing.assert_allclose(se3.rotation_of(pose), expected.as_matrix(), rtol=0, atol=1e-12)


# --- against truth: the guard ----------------------------------------------------------------------


@each_line
def test_error_near_a_line_is_that_of_rounding(ratio: float) -> None:
    """Noise-free: a turn about the line is known to about 1e-16/ratio², as by singular values."""
    case = CASES[f"line ratio {ratio:g}"]
    fit = fit_poses(case.reference, case.points, case.minimum_line_ratio)
    exact = fit_singular(case.reference, case.points, case.minimum_line_ratio)
    assert case.poses is not None
    error, other = (
        np.linalg.norm(se3.rotation_of(pose - case.poses), axis=(1, 2)).max()
        for pose in (fit.pose, exact.pose)
    )
    assert fit.determined.all()
    np.testing.assert_allclose(fit.line_ratio, ratio, rtol=0.2 * ratio + 1e-15 / ratio**2 + 1e-3)
    assert error < 20 * np.finfo(float).eps / ratio**2
    assert error < 2 * other + 1e-14


@pytest.mark.parametrize("name", ["noise-free", "noise of 5 mm", "square", "tetrahedron", "mirrored"])
def test_ordinary_frames_are_not_in_doubt(name: str) -> None:
    assert not benchmark.in_doubt(CASES[name]).any()


@pytest.mark.parametrize(
    "name", [*(f"line ratio {r:g}" for r in (0.03, 0.01, 1e-6)), "mirrored tetrahedron, 1 mm"]
)
def test_what_is_all_but_open_gets_the_bits_of_singular_values(name: str) -> None:
    case = CASES[name]
    assert benchmark.in_doubt(case).all()
    fit = fit_rigid(case.reference, case.points, case.minimum_line_ratio)
    exact = fit_singular(case.reference, case.points, case.minimum_line_ratio)
    same(fit, RigidFit(**exact._asdict()))


def test_large_residuals_are_seldom_in_doubt() -> None:
    """Newton's iteration is given enough steps: it alone would leave one frame in twenty at seven."""
    for name in ("noise of 100 mm, as large as the cluster", "points that have nothing to do with it"):
        assert benchmark.in_doubt(CASES[name]).mean() < 0.01


def test_the_margin_is_where_it_is_said_to_be() -> None:
    """A noise-free line ratio on either side of √margin."""
    for factor, doubt in ((0.99, True), (1.01, False)):
        line = benchmark.nearly_on_a_line(float(np.sqrt(SMALLEST_MARGIN)))
        exact = float(fit_singular(line, line, 0.0).line_ratio)
        # Stretching across the line, about its mean, changes the ratio alone.
        axis = np.linalg.svd(line)[2][0]
        along = line @ axis
        across = line - along[:, None] * axis
        cluster = along[:, None] * axis + across * (factor * np.sqrt(SMALLEST_MARGIN) / exact)
        case = benchmark.Case(cluster, np.repeat(cluster[None], LANES, axis=0))
        assert benchmark.in_doubt(case).all() == doubt
        assert benchmark.in_doubt(case).any() == doubt


@pytest.mark.parametrize("name", ["noise of 5 mm", "noise of 30 mm", "line ratio 0.1, 2 mm"])
def test_a_limit_on_a_frame_s_own_line_ratio_decides_alike(name: str) -> None:
    """However near: the last bits of the line ratio never change who is determined."""
    case = CASES[name]
    exact = fit_singular(case.reference, case.points, 0.0)
    for frame in range(20):
        for factor in (1.0, 1.0 + 2e-16, 1.0 - 2e-16, 1.0 + 0.5 * THRESHOLD_BAND, 1.0 - 2.0 * THRESHOLD_BAND):
            limit = factor * float(exact.line_ratio[frame])
            fit = fit_poses(case.reference, case.points, limit)
            np.testing.assert_array_equal(fit.determined, exact.line_ratio >= limit)


@pytest.mark.parametrize("scale", [1e-60, 1e-30, 1e-6, 1e6, 1e60])
def test_any_unit_of_length(scale: float) -> None:
    """Products of tiny or huge lengths leave the range of the closed form, not that of the fit."""
    points = CASES["noise of 5 mm"].points[:100]
    here, there = fit_poses(benchmark.THIGH, points), fit_poses(scale * benchmark.THIGH, scale * points)
    np.testing.assert_allclose(se3.rotation_of(there.pose), se3.rotation_of(here.pose), rtol=0, atol=1e-12)
    np.testing.assert_allclose(there.spread, scale * here.spread, rtol=1e-9)


def test_markers_on_one_spot_determine_nothing() -> None:
    points = np.zeros((FEWEST_COMPILED, 5, 3))
    points[1::2] += 1e-200 * benchmark.THIGH
    fit = fit_rigid(benchmark.THIGH, points)
    np.testing.assert_array_equal(fit.determined, fit_singular(benchmark.THIGH, points, 0.02).determined)
    assert not fit.determined[::2].any()
    assert (fit.line_ratio[::2] == 0.0).all()
    assert np.isnan(fit.pose[::2]).all()


@pytest.mark.parametrize("limit", [0.0, MINIMUM_LINE_RATIO])
def test_few_markers_seen_in_many_frames(limit: float) -> None:
    """From none to five in turn; below three nothing is determined, whatever the limit."""
    case = CASES["noise of 5 mm"]
    points = case.points[:600].copy()
    seen = np.arange(600) % 6
    points[np.arange(5) >= seen[:, None]] = np.nan
    fit, exact = fit_rigid(case.reference, points, limit), fit_singular(case.reference, points, limit)
    np.testing.assert_array_equal(fit.determined, seen >= 3)
    np.testing.assert_array_equal(fit.line_ratio[seen < 3], exact.line_ratio[seen < 3])
    np.testing.assert_allclose(fit.pose, exact.pose, rtol=0, atol=1e-12)
    np.testing.assert_array_equal(np.isnan(fit.residual), np.isnan(exact.residual))
    np.testing.assert_array_equal(np.isnan(fit.unit_covariance), np.isnan(exact.unit_covariance))


# --- the same bits, in any company -----------------------------------------------------------------


@pytest.mark.parametrize(
    "name", ["noise of 30 mm", "three in ten markers hidden, 5 mm", "line ratio 0.05, 2 mm"]
)
def test_a_frame_does_not_see_its_company(name: str) -> None:
    """Reordered, in parts that fill no lane, and with or without the rest of the results."""
    case = CASES[name]
    whole = fit_rigid(case.reference, case.points)
    same(fit_poses(case.reference, case.points), whole)
    same(fit_rigid(case.reference, case.points), whole)
    order = np.random.default_rng(8).permutation(FRAMES)
    mixed = fit_rigid(case.reference, case.points[order])
    for field in fields(RigidFit):
        expected = getattr(whole, field.name)
        np.testing.assert_array_equal(getattr(mixed, field.name), expected[order])
        parts = [
            getattr(fit_rigid(case.reference, case.points[first : first + 300]), field.name)
            for first in range(0, FRAMES, 300)
        ]
        np.testing.assert_array_equal(np.concatenate(parts), expected)


def test_threads_do_not_disturb_each_other() -> None:
    case = CASES["noise of 30 mm"]
    whole = fit_rigid(case.reference, case.points)
    with ThreadPoolExecutor(4) as pool:
        for fit in pool.map(lambda _: fit_rigid(case.reference, case.points), range(8)):
            same(fit, whole)


def test_few_frames_agree_with_many() -> None:
    """Below the limit singular values are taken: other bits, the same answer."""
    case = CASES["noise of 30 mm"]
    many = fit_rigid(case.reference, case.points[:FEWEST_COMPILED])
    few = fit_rigid(case.reference, case.points[: FEWEST_COMPILED - 1])
    same(few, RigidFit(**fit_singular(case.reference, case.points[: FEWEST_COMPILED - 1], 0.02)._asdict()))
    np.testing.assert_allclose(few.pose, many.pose[:-1], rtol=0, atol=1e-12)
    np.testing.assert_allclose(few.unit_covariance, many.unit_covariance[:-1], rtol=1e-12)


# --- how arrays come -------------------------------------------------------------------------------


def test_any_layout_of_the_arrays_and_one_compiled_form() -> None:
    case = CASES["three in ten markers hidden, 5 mm"]
    whole = fit_rigid(case.reference, case.points)
    doubled = np.zeros((2 * FRAMES, 5, 6))
    doubled[::2, :, 1:4] = case.points
    locked = case.points.copy()
    locked.flags.writeable = False
    for points in (np.asfortranarray(case.points), doubled[::2, :, 1:4], locked, case.points.tolist()):
        same(fit_rigid(case.reference, points), whole)
    same(fit_rigid(np.asfortranarray(case.reference), case.points), whole)
    same(fit_rigid(np.repeat(case.reference[None], FRAMES, axis=0), case.points), whole)
    single = case.points.astype(np.float32)
    same(fit_rigid(case.reference, single), fit_rigid(case.reference, single.astype(np.float64)))
    assert len(fit_frames.signatures) == 1
    np.testing.assert_array_equal(case.points, CASES["three in ten markers hidden, 5 mm"].points)


def test_leading_axes_broadcast() -> None:
    rng = np.random.default_rng(9)
    references = benchmark.THIGH + 0.01 * rng.normal(size=(3, 1, 5, 3))
    points = CASES["noise of 5 mm"].points[:40]
    fit = fit_rigid(references, points)
    assert fit.pose.shape == (3, 40, 4, 4)
    assert fit.residual.shape == (3, 40, 5, 3)
    assert fit.unit_covariance.shape == (3, 40, 6, 6)
    assert fit.spread.shape == fit.determined.shape == fit.line_ratio.shape == (3, 40)
    exact = fit_singular(references, points, 0.02)
    np.testing.assert_allclose(fit.pose, exact.pose, rtol=0, atol=1e-12)
    np.testing.assert_allclose(fit.unit_covariance, exact.unit_covariance, rtol=1e-10)
    # One measurement against many references.
    many = benchmark.THIGH + 0.01 * rng.normal(size=(100, 5, 3))
    exact = fit_singular(many, points[0], 0.02)
    np.testing.assert_allclose(fit_rigid(many, points[0]).pose, exact.pose, rtol=0, atol=1e-12)
    assert fit_rigid(benchmark.THIGH, np.empty((2, 0, 5, 3))).pose.shape == (2, 0, 4, 4)


def test_an_unknown_reference_marker_is_hidden_in_every_frame() -> None:
    case = CASES["noise of 5 mm"]
    unknown = case.reference.copy()
    unknown[3, 1] = np.nan
    kept = [0, 1, 2, 4]
    fit, dropped = fit_rigid(unknown, case.points), fit_rigid(case.reference[kept], case.points[:, kept])
    np.testing.assert_array_equal(fit.pose, dropped.pose)
    np.testing.assert_array_equal(fit.unit_covariance, dropped.unit_covariance)
    np.testing.assert_array_equal(fit.spread, dropped.spread)
    assert np.isnan(fit.residual[:, 3]).all()


@pytest.mark.parametrize("fit", [fit_rigid, fit_poses])
def test_messages_of_many_frames(fit: object) -> None:
    assert callable(fit)
    points = CASES["noise of 5 mm"].points.copy()
    points[700, 1, 0] = np.nan  # hidden, but the infinite one beside it is still wrong
    points[700, 1, 2] = -np.inf
    with pytest.raises(ShapeError) as caught:
        fit(benchmark.THIGH, points)
    assert str(caught.value) == "points: value at (700, 1, 2) is -inf, expected a finite number."
    reference = benchmark.THIGH.copy()
    reference[4, 2] = np.inf
    with pytest.raises(ShapeError) as caught:
        fit(reference, points)
    assert str(caught.value) == "reference: value at (4, 2) is inf, expected a finite number."
    with pytest.raises(ShapeError) as caught:
        fit(benchmark.THIGH[:4], points)
    assert str(caught.value) == "points: expected 4 markers as in the reference, got 5."


# --- the benchmark ---------------------------------------------------------------------------------


def test_the_benchmark_runs() -> None:
    done = subprocess.run(
        [sys.executable, str(BENCHMARKS / "rigid.py"), "--frames", "500", "--loop", "50", "--cases", "100"],
        env={**os.environ, "PYTHONPATH": str(BENCHMARKS.parents[1])},
        capture_output=True,
        text=True,
        check=False,
    )
    assert (done.returncode, done.stderr) == (0, "")
    titles = [line.split("|")[1].strip() for line in done.stdout.splitlines() if line.startswith("| ")]
    assert titles[0] == "5 markers, noise of 5 mm"
    assert titles[8:] == ["case", *CASES]
    assert "wanted at most 1e-12: held. Frames whose `determined` differs: 0.\n" in done.stdout
