"""The ROTATION group of C3D files, in and out, held against two independent reading libraries.

Rules: C3D file format user guide (C3D.org), 2019 rotation extension: 17 floats a pose, the 4×4 local→lab
matrix column by column and a reliability.
"""

from __future__ import annotations

import struct
import warnings
from pathlib import Path

import c3d as other_library
import ezc3d
import numpy as np
import pytest
import xarray as xr
from made_c3d import BIG, DEC, LITTLE, RATE, cloud, make_c3d
from made_points import made_points, made_poses, refusal

from sta_prior.errors import ShapeError
from sta_prior.io.c3d import copy_with_rotations, read_c3d, read_c3d_rotations, write_c3d
from sta_prior.io.c3d_records import read_records
from sta_prior.io.points import points_dataset

DATA = Path(__file__).parents[2] / "shared" / "data"
ORDERS = pytest.mark.parametrize("processor", [LITTLE, DEC, BIG])
MATRIX = np.array(
    [[0.0, -1.0, 0.0, 0.125], [0.0, 0.0, -1.0, 0.25], [1.0, 0.0, 0.0, 0.5], [0.0, 0.0, 0.0, 1.0]]
)


def parameters_and_data(path: Path) -> tuple[dict[str, tuple[int, list[int], bytes]], list[np.ndarray]]:
    """Stored parameters, those of ROTATION apart, and analog samples, as an independent library says."""
    with path.open("rb") as file, warnings.catch_warnings(action="ignore"):
        reader = other_library.Reader(file)
        stored = {
            f"{group_name}:{name}": (parameter.bytes_per_element, parameter.dimensions, parameter.bytes)
            for group_name, group in reader.group_items()
            for name, parameter in group.param_items()
            if group_name != "ROTATION"
        }
        return stored, [analog for _, _, analog in reader.read_frames()]


def pointers(path: Path) -> tuple[int, int]:
    """POINT:DATA_START and ROTATION:DATA_START, as an independent library says."""
    with path.open("rb") as file, warnings.catch_warnings(action="ignore"):
        reader = other_library.Reader(file)
        return reader.get_uint16("POINT:DATA_START"), reader.get_uint16("ROTATION:DATA_START")


@ORDERS
def test_a_pose_is_17_floats_column_by_column(tmp_path: Path, processor: int) -> None:
    source = make_c3d(tmp_path / "a.c3d", cloud(frames=2), processor=processor)
    target = tmp_path / "b.c3d"
    copy_with_rotations(source, target, ["thigh"], np.stack([MATRIX, MATRIX])[:, None], 0.75)
    content = target.read_bytes()
    raw = content[-512:][: 2 * 17 * 4]  # two poses fill a part of the last block
    if processor == DEC:
        halves = np.frombuffer(raw, "<u2").reshape(-1, 2)[:, ::-1].tobytes()
        stored = np.array(struct.unpack("<34f", halves)) / 4
    else:
        stored = np.array(struct.unpack((">" if processor == BIG else "<") + "34f", raw))
    columns = [0, 0, 1, 0, -1, 0, 0, 0, 0, -1, 0, 0, 125, 250, 500, 1, 0.75]  # mm, as POINT:UNITS says
    assert stored.tolist() == columns * 2


@ORDERS
@pytest.mark.parametrize("real", [True, False])
def test_poses_survive_in_every_byte_order_and_the_rest_stays(
    tmp_path: Path, processor: int, real: bool
) -> None:
    events = [("Foot Off", "Left", 0.0, 0.02)]
    source = make_c3d(
        tmp_path / "a.c3d", cloud(frames=6), processor=processor, real=real, events=events, analog=2
    )
    poses = made_poses(6, 2)
    poses[3, 1] = np.nan
    reliability = np.linspace(0, 1, 12).reshape(6, 2)
    copy_with_rotations(source, tmp_path / "b.c3d", ["thigh", "shank"], poses, reliability)
    back = read_c3d_rotations(tmp_path / "b.c3d")
    np.testing.assert_allclose(back["rotation"], poses[..., :3, :3], rtol=0, atol=1e-6)
    np.testing.assert_allclose(back["position"], poses[..., :3, 3], rtol=0, atol=1e-6)
    reliability[3, 1] = -1
    np.testing.assert_allclose(back["reliability"], reliability, atol=1e-6)
    assert back["segment"].to_numpy().tolist() == ["thigh", "shank"]
    assert back.attrs["rate"] == RATE
    xr.testing.assert_identical(read_c3d(tmp_path / "b.c3d").assign_attrs(source="a.c3d"), read_c3d(source))
    (before, analog), (after, kept_analog) = (
        parameters_and_data(source),
        parameters_and_data(tmp_path / "b.c3d"),
    )
    pointer = {"POINT:DATA_START"}
    assert set(after) == set(before)
    assert all(after[name] == before[name] for name in set(after) - pointer)
    assert np.array_equal(kept_analog, analog)


@pytest.mark.parametrize("order", ["pc", "dec", "sgi"])
@pytest.mark.parametrize("form", ["int", "real"])
def test_a_copy_of_each_real_variant(tmp_path: Path, order: str, form: str) -> None:
    source = DATA / "c3d_variants" / f"sample02_{order}_{form}.c3d"
    if not source.exists():
        pytest.skip(f"{source.name} is not there: ../shared/data is absent")
    poses = made_poses(89, 2)
    target = tmp_path / "b.c3d"
    copy_with_rotations(source, target, ["thigh", "shank"], poses)
    back = read_c3d_rotations(target)
    np.testing.assert_allclose(back["rotation"], poses[..., :3, :3], rtol=0, atol=1e-6)
    np.testing.assert_allclose(back["position"], poses[..., :3, 3], rtol=0, atol=1e-6)
    assert read_c3d(target).equals(read_c3d(source))
    (before, analog), (after, kept_analog) = parameters_and_data(source), parameters_and_data(target)
    assert {**after, "POINT:DATA_START": None} == {**before, "POINT:DATA_START": None}
    assert np.array_equal(kept_analog, analog)
    assert np.abs(analog).max() > 100
    assert target.read_bytes()[298:512] == source.read_bytes()[298:512]  # events in the header
    added = len(target.read_bytes()) - len(source.read_bytes())
    assert 0 < added - 89 * 2 * 17 * 4 < 4 * 512
    if order == "pc":  # the library decodes rotations of little-endian files
        theirs = ezc3d.c3d(str(target))["data"]
        np.testing.assert_allclose(
            theirs["rotations"].transpose(3, 2, 0, 1)[..., :3, :3], poses[..., :3, :3], atol=1e-6
        )
        np.testing.assert_allclose(
            theirs["rotations"][:3, 3].transpose(2, 1, 0) / 1000, poses[..., :3, 3], atol=1e-6
        )
        assert np.array_equal(theirs["analogs"], ezc3d.c3d(str(source))["data"]["analogs"])


def test_poses_that_an_independent_library_wrote(tmp_path: Path) -> None:
    poses = made_poses(5, 3)
    theirs = ezc3d.c3d()
    theirs["parameters"]["POINT"]["UNITS"]["value"] = ["mm"]
    theirs["parameters"]["POINT"]["RATE"]["value"] = [100.0]
    theirs["parameters"]["POINT"]["LABELS"]["value"] = ["A", "B"]
    theirs["data"]["points"] = np.random.default_rng(5).normal(0, 500, (4, 2, 5))
    stored = poses.copy()
    stored[..., :3, 3] *= 1000
    theirs["data"]["rotations"] = stored.transpose(2, 3, 1, 0)
    theirs.add_parameter("ROTATION", "LABELS", ["pelvis", "thigh", "shank"])
    theirs.write(str(tmp_path / "a.c3d"))
    ours = read_c3d_rotations(tmp_path / "a.c3d")
    np.testing.assert_allclose(ours["rotation"], poses[..., :3, :3], rtol=0, atol=1e-6)
    np.testing.assert_allclose(ours["position"], poses[..., :3, 3], rtol=0, atol=1e-6)
    assert ours["segment"].to_numpy().tolist() == ["pelvis", "thigh", "shank"]
    copy_with_rotations(tmp_path / "a.c3d", tmp_path / "b.c3d", ["foot"], poses[:, :1])
    assert read_c3d_rotations(tmp_path / "b.c3d")["segment"].to_numpy().tolist() == ["foot"]
    records, sound = read_records((tmp_path / "b.c3d").read_bytes(), tmp_path)
    names = [record.name for record in records if record.group < 0]
    assert sound
    assert names.count("ROTATION") == 1
    assert len((tmp_path / "b.c3d").read_bytes()) < len((tmp_path / "a.c3d").read_bytes()) + 512


@pytest.mark.filterwarnings("ignore:.*the standard expects mm")
def test_positions_stand_in_the_unit_of_the_file(tmp_path: Path) -> None:
    words = cloud(frames=2) / (1000, 1000, 1000, 1)
    source = make_c3d(tmp_path / "a.c3d", words, units="m")
    copy_with_rotations(source, tmp_path / "b.c3d", ["thigh"], np.stack([MATRIX, MATRIX])[:, None])
    raw = np.frombuffer((tmp_path / "b.c3d").read_bytes()[-512:], "<f4")
    assert raw[12:15].tolist() == [0.125, 0.25, 0.5]
    back = read_c3d_rotations(tmp_path / "b.c3d")
    assert back["position"][0, 0].to_numpy().tolist() == [0.125, 0.25, 0.5]


def test_poses_at_a_multiple_of_the_frame_rate(tmp_path: Path) -> None:
    source = make_c3d(tmp_path / "a.c3d", cloud(frames=4))
    poses = made_poses(12, 1)
    copy_with_rotations(source, tmp_path / "b.c3d", ["thigh"], poses)
    back = read_c3d_rotations(tmp_path / "b.c3d")
    np.testing.assert_allclose(back["rotation"], poses[..., :3, :3], atol=1e-6)
    np.testing.assert_allclose(back["time"], np.arange(12) / (3 * RATE))
    assert ezc3d.c3d(str(tmp_path / "b.c3d"))["data"]["rotations"].shape == (4, 4, 1, 12)


def test_write_with_rotations(tmp_path: Path) -> None:
    write_c3d(tmp_path / "a.c3d", made_points(frames=4))
    copy_with_rotations(tmp_path / "a.c3d", tmp_path / "b.c3d", ["thigh", "shank"], made_poses(4, 2), 0.5)
    rotations = read_c3d_rotations(tmp_path / "b.c3d")
    write_c3d(tmp_path / "c.c3d", made_points(frames=4), rotations=rotations)
    xr.testing.assert_allclose(read_c3d_rotations(tmp_path / "c.c3d"), rotations, atol=1e-6)
    write_c3d(tmp_path / "d.c3d", made_points(frames=4), rotations=rotations.drop_vars("reliability"))
    assert (read_c3d_rotations(tmp_path / "d.c3d")["reliability"] == 1).all()


def test_poses_that_do_not_fit_are_refused(tmp_path: Path) -> None:
    source, target = make_c3d(tmp_path / "a.c3d", cloud(frames=4)), tmp_path / "b.c3d"
    many = made_poses(4, 2)
    assert refusal(copy_with_rotations, source, target, ["thigh"], many, kind=ShapeError) == (
        f"{target}, poses: expected 1 segments as there are labels (at least 1), got 2."
    )
    assert refusal(copy_with_rotations, source, target, ["a", "b"], made_poses(6, 2), kind=ShapeError) == (
        f"{target}, poses: expected a whole multiple of 4 frames, got 6."
    )
    assert refusal(copy_with_rotations, source, target, ["a", "a"], many) == (
        f"{target}: segment a stands 2 times (numbers 1, 2), expected once. Rename or remove all but one."
    )
    assert refusal(copy_with_rotations, source, target, ["a", "b"], many[..., :3, :], kind=ShapeError) == (
        "poses: expected shape (..., n, n, 4, 4), got (4, 2, 3, 4)."
    )
    assert not target.exists()


def test_poses_go_before_the_points_where_a_16_bit_pointer_would_not_reach_behind_them(
    tmp_path: Path,
) -> None:
    frames, count = 36000, 60  # 34.6 MB of points
    position = np.zeros((frames, count, 3))
    position[..., 0] = np.arange(count)
    labels = [f"M{number}" for number in range(count)]
    points = points_dataset(
        position,
        position[..., 1],
        np.arange(frames) / 100,
        labels,
        rate=100.0,
        source="",
        units_declared="mm",
    )
    write_c3d(tmp_path / "a.c3d", points)
    poses = np.broadcast_to(MATRIX, (frames, 1, 4, 4))
    copy_with_rotations(tmp_path / "a.c3d", tmp_path / "b.c3d", ["thigh"], poses)
    point, rotation = pointers(tmp_path / "b.c3d")
    assert rotation < point
    back = read_c3d_rotations(tmp_path / "b.c3d")
    np.testing.assert_allclose(back["rotation"], poses[..., :3, :3], atol=1e-6)
    assert read_c3d(tmp_path / "b.c3d")["position"].equals(read_c3d(tmp_path / "a.c3d")["position"])


def test_more_than_the_pointers_reach_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    source, target = make_c3d(tmp_path / "a.c3d", cloud(frames=40)), tmp_path / "b.c3d"
    monkeypatch.setattr("sta_prior.io.c3d_write.SHORT_LIMIT", 5)
    assert refusal(copy_with_rotations, source, target, ["a", "b", "c"], made_poses(40, 3)) == (
        f"{target}: points and poses are longer than 5 blocks each, more than a C3D file can point to. "
        "Cut the trial."
    )


def changed(path: Path, name: str, at: int, value: bytes) -> Path:
    """A copy of the file in which some bytes of a parameter's record are others."""
    content = path.read_bytes()
    group, parameter = name.split(":")
    records, _ = read_records(content, path)
    number = next(-record.group for record in records if record.group < 0 and record.name == group)
    record = next(record for record in records if (record.group, record.name) == (number, parameter))
    head = 2 + len(parameter) + 2  # name and pointer; then type, number of dimensions and dimensions
    place = content.index(record.content) + head + 2 + record.content[head + 1] + at
    path = path.with_name("changed.c3d")
    path.write_bytes(content[:place] + value + content[place + len(value) :])
    return path


def test_a_rotation_group_that_is_wrong_is_refused(tmp_path: Path) -> None:
    source = make_c3d(tmp_path / "a.c3d", cloud(frames=4))
    assert refusal(read_c3d_rotations, source) == (
        f"{source}: no ROTATION group with poses. Name a file that holds segment poses."
    )
    target = tmp_path / "b.c3d"
    poses = made_poses(4, 2)
    copy_with_rotations(source, target, ["thigh", "shank"], poses)
    other = tmp_path / "changed.c3d"
    changed(target, "ROTATION:RATE", 0, struct.pack("<f", 75.0))
    assert refusal(read_c3d_rotations, other) == (
        f"{other}, ROTATION:RATE: expected a whole multiple of POINT:RATE 50 Hz, got 75 Hz. "
        "Export the poses at the rate of the points."
    )
    changed(target, "ROTATION:LABELS", 5, b"     ")
    assert refusal(read_c3d_rotations, other) == (
        f"{other}, ROTATION:LABELS: expected 2 names, got 1. Copy or export the file again."
    )
    changed(target, "ROTATION:LABELS", 0, b"shankshank")
    assert refusal(read_c3d_rotations, other) == (
        f"{other}, ROTATION:LABELS: label shank stands 2 times (numbers 1, 2), expected once. "
        "Rename or remove all but one."
    )
    changed(target, "ROTATION:DATA_START", 0, struct.pack("<H", 100))
    assert refusal(read_c3d_rotations, other) == (
        f"{other}, ROTATION: truncated, its data are bytes 50688 … 51232, the file has "
        f"{len(target.read_bytes())}. Copy or export the file again."
    )


def test_a_matrix_that_is_no_rotation_is_refused_with_its_place(tmp_path: Path) -> None:
    source = make_c3d(tmp_path / "a.c3d", cloud(frames=4))
    poses = made_poses(4, 2)
    poses[2, 1, :3, :3] = [[1, 0.25, 0], [0, 1, 0], [0, 0, 1]]
    path = tmp_path / "b.c3d"
    copy_with_rotations(source, path, ["thigh", "shank"], poses)
    assert refusal(read_c3d_rotations, path) == (
        f"{path}, ROTATION, time 0.04, segment shank: not orthonormal, RᵀR differs from 1 by 0.25, "
        "expected at most 0.001. A sheared or scaled matrix is not a pose."
    )
    poses[2, 1, :3, :3] = np.diag([1, 1, -1])
    copy_with_rotations(source, path, ["thigh", "shank"], poses)
    assert refusal(read_c3d_rotations, path) == (
        f"{path}, ROTATION, time 0.04, segment shank: a reflection, expected determinant +1, got −1. "
        "Check the order and the sign of its axes."
    )
