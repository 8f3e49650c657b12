"""Optional inputs of a prior: tilt against gravity and angular velocity, from the pairs to a solved trial."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import made_priors as made
import numpy as np
import pytest
import xarray as xr
from differences import central_difference
from hypothesis import given
from hypothesis import strategies as st
from made_laboratory import make_courier_study, run
from made_studies import says
from scipy.spatial.transform import Rotation

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, MismatchError
from sta_prior.prior import Prior, learn, load_prior
from sta_prior.prior.inputs import (
    CHANGE_TIME,
    Driver,
    angle_changes,
    check_inputs,
    extra_drivers,
    input_columns,
    row_count,
    tilt,
    tilt_jacobian,
)
from sta_prior.prior.statistics import segment_frames
from sta_prior.se3 import rotation_exp
from sta_prior.solve import solve
from sta_prior.study import read_study
from sta_prior.testing import check_prior

KNEE_DOF = {"knee": ("flexion", "adduction", "internal_rotation")}
THIGH = made.SEGMENTS["thigh"]
MIRROR = np.diag([1.0, 1.0, -1.0])


def random_rotations(seed: int, count: int) -> FloatArray:
    return np.asarray(Rotation.random(count, rng=np.random.default_rng(seed)).as_matrix())


def with_gravity(pairs: xr.Dataset, seed: int = 0) -> xr.Dataset:
    """The pairs with bones that swing about the lab's z axis, y up, and a reference that stands."""
    generator = np.random.default_rng(seed)
    frames, segments = pairs.sizes["frame"], pairs.sizes["segment"]
    turn = np.zeros((frames, segments, 3))
    turn[..., 2] = generator.uniform(-0.5, 0.9, (frames, segments))
    turn[..., 0] = generator.uniform(-0.1, 0.1, (frames, segments))
    still = 0.03 * generator.standard_normal((pairs.sizes["subject"], segments, 3))
    more = pairs.assign(
        bone_rotation=(("frame", "segment", "row", "col"), rotation_exp(turn), {"units": "1"}),
        reference_rotation=(("subject", "segment", "row", "col"), rotation_exp(still), {"units": "1"}),
    )
    more.attrs["up"] = "y"
    return more


def tilted_pairs(subjects: int, seed: int = 3) -> xr.Dataset:
    """Pairs whose thigh markers also move 8 mm per rad of forward tilt, on average."""
    generator = np.random.default_rng(seed)
    pairs = with_gravity(made.make_pairs(generator, made.subjects_of(subjects), frames=60))
    own = pairs["marker_segment"].values == "thigh"
    direction = generator.standard_normal((int(own.sum()), 3))
    direction *= 0.008 / np.sqrt((direction**2).sum(axis=-1, keepdims=True))
    forward = tilt(pairs["bone_rotation"].values[:, 0], 1, "right")[:, 0]
    pairs["displacement"].values[:, own] += forward[:, None, None] * direction
    return pairs


def test_tilt_of_known_postures() -> None:
    """A bone that stands has none; raised forward by 30° and to its lateral side by 10° it has these."""
    raised = rotation_exp(np.radians([0.0, 0.0, 30.0]))
    aside = rotation_exp(np.radians([-10.0, 0.0, 0.0]))
    np.testing.assert_allclose(tilt(np.eye(3), 1, "right"), 0.0, atol=1e-15)
    np.testing.assert_allclose(np.degrees(tilt(raised, 1, "right")), [30.0, 0.0, 0.0], atol=1e-12)
    np.testing.assert_allclose(np.degrees(tilt(aside, 1, "right")), [0.0, 10.0, 0.0], atol=1e-12)


@pytest.mark.parametrize("up", [0, 1, 2])
def test_tilt_does_not_see_a_turn_about_the_vertical(up: int) -> None:
    bones = random_rotations(1, 20)
    turned = rotation_exp(1.1 * np.eye(3)[up]) @ bones
    np.testing.assert_allclose(tilt(turned, up, "right"), tilt(bones, up, "right"), atol=1e-12)


def test_tilt_of_the_mirrored_leg_is_the_same() -> None:
    bones = random_rotations(2, 20)
    np.testing.assert_allclose(tilt(MIRROR @ bones @ MIRROR, 1, "left"), tilt(bones, 1, "right"), atol=1e-12)


@pytest.mark.parametrize("side", ["right", "left"])
@pytest.mark.parametrize("up", [0, 1, 2])
def test_tilt_jacobian_agrees_with_differences(up: int, side: str) -> None:
    bones = random_rotations(3, 20)
    expected = central_difference(lambda step: tilt(bones @ rotation_exp(step), up, side), 3)
    # Within three degrees of a bone that lies, forward tilt turns without bound.
    upright = np.hypot(bones[:, up, 0], bones[:, up, 1]) > 0.05
    assert upright.sum() > 15
    got = tilt_jacobian(bones, up, side)
    np.testing.assert_allclose(got[upright], expected[upright], rtol=1e-5, atol=1e-6)


@given(st.integers(7, 60), st.floats(0.004, 0.02), st.floats(-5, 5), st.floats(-3, 3))
def test_changes_of_a_steady_turn(frames: int, step: float, velocity: float, start: float) -> None:
    """The derivative of a line is its slope, whatever the length and the rate; wrapping changes nothing."""
    time = step * np.arange(frames)
    line = start + velocity * time
    wrapped = np.angle(np.exp(1j * line))[:, None]
    np.testing.assert_allclose(angle_changes(time, wrapped), CHANGE_TIME * velocity, atol=1e-9)


def test_changes_never_reach_across_a_gap() -> None:
    time = np.concatenate([np.arange(20), 60 + np.arange(20), [200.0]]) / 100.0
    angles = np.concatenate([np.zeros(20), np.ones(20), [5.0]])
    angles[3] = np.nan
    got = angle_changes(time, angles)
    np.testing.assert_array_equal(np.flatnonzero(np.isnan(got)), [3, 40])
    np.testing.assert_allclose(got[np.isfinite(got)], 0.0, atol=1e-12)


def test_places_of_inputs() -> None:
    both = ("tilt", "angular-velocity")
    assert row_count((), 2) == 2
    assert row_count(both, 2) == 5
    assert input_columns(both, [1], 2) == [1, 2, 4]
    assert input_columns(("angular-velocity",), [1, 0], 2) == [1, 0, 3, 2]
    assert extra_drivers(both, (0,), 2) == (
        Driver(2, 0, (1, 2), True, "tilt"),
        Driver(2, 1, (1,), False, "tilt"),
        Driver(3, 0, (1,), False, "angular-velocity"),
    )
    assert check_inputs(["angular-velocity", "tilt", "tilt"]) == both


def test_frames_carry_the_inputs_and_both_sides_alike() -> None:
    plain = made.make_pairs(np.random.default_rng(4), ["P01", "P02"], left=["P02"])
    pairs = with_gravity(plain)
    for name in ("bone_rotation", "reference_rotation"):
        left = pairs[name].values[pairs["subject"].values == "P02"] if name == "bone_rotation" else None
        if left is not None:
            pairs[name].values[pairs["subject"].values == "P02"] = MIRROR @ left @ MIRROR
    both = segment_frames(pairs, "thigh", THIGH, KNEE_DOF, ("tilt", "angular-velocity"))
    for item in both:
        own = (pairs["subject"].values == item.subject) & (pairs["trial"].values == item.trial)
        bones = pairs["bone_rotation"].values[own, 0]
        right = MIRROR @ bones @ MIRROR if item.subject == "P02" else bones
        assert item.angles.shape[1:] == (3, 3)
        np.testing.assert_allclose(item.angles[:, 1], tilt(right, 1, "right"), atol=1e-12)
        np.testing.assert_allclose(
            item.angles[:, 2], angle_changes(item.time, pairs["angle"].values[own])[:, 0], atol=1e-12
        )
        np.testing.assert_array_equal(item.reference_angles[2], 0.0)
    assert segment_frames(pairs, "thigh", THIGH, KNEE_DOF)[0].angles.shape[1:] == (1, 3)


def test_a_tilt_that_matters_is_learned() -> None:
    """Left-out subjects: what follows the tilt is predicted with it and not without."""
    pairs = tilted_pairs(8)
    plain, driven = learn(pairs), learn(pairs, inputs=["tilt"])
    error = {name: prior.validation["rms_error"].sel(segment="thigh").mean().item()
             for name, prior in (("plain", plain), ("driven", driven))}  # fmt: skip
    assert error["driven"] < 0.75 * error["plain"]
    assert driven.inputs == ("tilt",)
    assert plain.inputs == ()


@pytest.mark.parametrize("inputs", [("tilt",), ("angular-velocity",), ("tilt", "angular-velocity")])
@pytest.mark.parametrize("family", ["reduced-rank-gp", "linear"])
def test_battery_and_storage(family: str, inputs: tuple[str, ...], tmp_path: Path) -> None:
    prior = learn(tilted_pairs(4), family, inputs=inputs)
    assert check_prior(prior)
    prior.save(tmp_path / "prior.nc")
    again = load_prior(tmp_path / "prior.nc")
    assert again.inputs == inputs
    assert again.digest == prior.digest


@pytest.mark.parametrize("family", ["exact-gp", "magnitude"])
def test_families_of_angles_alone_refuse_inputs(family: str) -> None:
    text = (
        f"--inputs: family {family} is driven by the joint angles only, got tilt. "
        "Leave --inputs out, or take another family."
    )
    with says(InputError, text):
        learn(tilted_pairs(2), family, inputs=["tilt"])


def test_unknown_input_is_refused() -> None:
    with says(InputError, "--inputs: no input tild, known: tilt, angular-velocity. Did you mean tilt?"):
        learn(tilted_pairs(2), inputs=["tild"])


@pytest.mark.parametrize("missing", ["rotation", "up", "reference"])
def test_tilt_needs_to_know_where_up_is(missing: str) -> None:
    pairs = tilted_pairs(2)
    if missing == "up":
        pairs.attrs["up"] = ""
    elif missing == "rotation":
        pairs = pairs.drop_vars("reference_rotation")
    else:
        pairs["reference_rotation"].values[1, 0] = np.nan
    text = (
        "pairs, segment thigh: input tilt needs the pose of every subject's reference posture in the lab. "
        "Pair again, from static trials, or learn without tilt."
    )
    with says(MismatchError, text):
        learn(pairs, inputs=["tilt"])


@pytest.fixture(scope="module")
def laboratory(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Prior]:
    """The invented courier study, and a prior of both inputs learned on the command line."""
    folder = tmp_path_factory.mktemp("laboratory")
    make_courier_study(folder)
    assert run(folder, "pair", "study.toml", "--out", "pairs.nc").status == 0
    words = ("learn", "pairs.nc", "--out", "prior.nc", "--inputs", "angular-velocity,tilt")
    assert run(folder, *words).status == 0
    return folder, load_prior(folder / "prior.nc")


def test_a_trial_is_solved_with_inputs(laboratory: tuple[Path, Prior]) -> None:
    folder, prior = laboratory
    assert prior.inputs == ("tilt", "angular-velocity")
    trial = read_study(folder / "study.toml").select(["K10"])[0]
    solution = solve(trial, prior)
    plain = solve(trial, learn(xr.load_dataset(folder / "pairs.nc")))
    difference = np.abs(solution["angle"] - plain["angle"]).max().item()
    assert 1e-6 < difference < np.radians(15.0)
    assert np.isfinite(solution["angle_sd"].values).all()
    told = run(folder, "check", "prior.nc")
    assert "Driven by flexion and by tilt and angular-velocity" in told.out


def test_a_study_that_does_not_say_where_up_is_cannot_use_tilt(laboratory: tuple[Path, Prior]) -> None:
    folder, prior = laboratory
    trial = read_study(folder / "study.toml").select(["K10"])[0]
    subject = trial.subject
    blind = replace(subject, lab=replace(subject.lab, up_declared=False))
    with pytest.raises(
        MismatchError, match=r"segment\.thigh: the prior takes its tilt, which needs up = … in"
    ):
        prior.bind(replace(trial, subject=blind))
