"""Writing C3D files and their ROTATION group, held against two independent reading libraries.

Rules: C3D file format user guide (C3D.org), 2019 rotation extension: 17 floats a pose, the 4×4 local→lab
matrix column by column and a reliability.
"""

from __future__ import annotations

import json
import warnings
from pathlib import Path

import c3d as other_library
import ezc3d
import numpy as np
import pytest
from made_c3d import BIG, DEC, LITTLE
from made_points import made_points, refusal

from sta_prior.io.c3d import read_c3d, write_c3d
from sta_prior.io.points import Event, read_events

DATA = Path(__file__).parents[2] / "shared" / "data"
ORDERS = pytest.mark.parametrize("processor", [LITTLE, DEC, BIG])
MATRIX = np.array(
    [[0.0, -1.0, 0.0, 0.125], [0.0, 0.0, -1.0, 0.25], [1.0, 0.0, 0.0, 0.5], [0.0, 0.0, 0.0, 1.0]]
)


@pytest.mark.filterwarnings("ignore:.*the standard expects mm")
@pytest.mark.parametrize("unit", ["mm", "cm", "m"])
def test_points_events_and_occlusion_survive_a_round_trip(tmp_path: Path, unit: str) -> None:
    events = (Event("Foot Strike", 0.01, "Right"), Event("Foot Off", 0.035, ""))
    points = made_points(events=events)
    write_c3d(tmp_path / "a.c3d", points, unit=unit)
    back = read_c3d(tmp_path / "a.c3d")
    np.testing.assert_allclose(back["position"], points["position"], rtol=0, atol=1e-6)
    np.testing.assert_allclose(back["residual"], points["residual"], rtol=0, atol=0.003 / 255)
    assert np.array_equal(back["residual"] == 0, points["residual"] == 0)
    assert back["point"].equals(points["point"])
    np.testing.assert_allclose(back["time"], points["time"])
    assert [(event.label, event.context) for event in read_events(back)] == [
        ("Foot Strike", "Right"),
        ("Foot Off", ""),
    ]
    np.testing.assert_allclose([event.time for event in read_events(back)], [0.01, 0.035], atol=1e-6)


def test_two_libraries_read_what_was_written(tmp_path: Path) -> None:
    points = made_points(frames=7, labels=4, events=(Event("Foot Off", 0.02, "Left"),))
    path = tmp_path / "a.c3d"
    write_c3d(path, points)
    theirs = ezc3d.c3d(str(path))
    np.testing.assert_allclose(
        theirs["data"]["points"][:3].transpose(2, 1, 0) / 1000, points["position"], rtol=0, atol=1e-6
    )
    assert theirs["parameters"]["POINT"]["LABELS"]["value"] == ["P0", "P1", "P2", "P3"]
    assert theirs["parameters"]["EVENT"]["LABELS"]["value"] == ["Foot Off"]
    assert theirs["parameters"]["EVENT"]["TIMES"]["value"].ravel().tolist() == pytest.approx([0, 0.02])
    with path.open("rb") as file, warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="No analog data found")
        frames = np.array([frame for _, frame, _ in other_library.Reader(file).read_frames()], dtype=float)
    assert ((frames[..., 3] < 0).nonzero()) == (1, 0)
    frames[1, 0] = np.nan
    np.testing.assert_allclose(frames[..., :3] / 1000, points["position"], rtol=0, atol=1e-6)
    np.testing.assert_allclose(frames[..., 3] / 1000, points["residual"], rtol=0, atol=0.003 / 255)


def test_an_unknown_residual_is_written_as_zero_and_a_known_one_never(tmp_path: Path) -> None:
    points = made_points()
    points["residual"][0] = np.nan
    points["residual"][3, 2] = 1e-9
    write_c3d(tmp_path / "a.c3d", points)
    back = read_c3d(tmp_path / "a.c3d")
    assert (back["residual"][0] == 0).all()
    assert float(back["residual"][3, 2]) > 0
    write_c3d(tmp_path / "b.c3d", points.drop_vars("residual"))
    seen = points["position"].notnull().all("axis")
    assert ((read_c3d(tmp_path / "b.c3d")["residual"] == 0) == seen).all()


def test_more_points_than_one_parameter_and_more_frames_than_16_bits_hold(tmp_path: Path) -> None:
    many = made_points(labels=600)
    write_c3d(tmp_path / "a.c3d", many)
    assert read_c3d(tmp_path / "a.c3d")["point"].equals(many["point"])
    theirs = ezc3d.c3d(str(tmp_path / "a.c3d"))["parameters"]["POINT"]
    assert [len(theirs[name]["value"]) for name in ("LABELS", "LABELS2", "LABELS3")] == [255, 255, 90]
    long = made_points(frames=70000, labels=1)
    write_c3d(tmp_path / "b.c3d", long, rotations=None)
    back = read_c3d(tmp_path / "b.c3d")
    np.testing.assert_allclose(back["position"], long["position"], rtol=0, atol=1e-6)
    with (tmp_path / "b.c3d").open("rb") as file, warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="No analog data found")
        assert other_library.Reader(file).frame_count == 70000


def test_what_the_format_cannot_hold_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "a.c3d"
    points = made_points()
    uneven = points.assign_coords(time=[0.0, 0.01, 0.02, 0.036, 0.046])
    assert refusal(write_c3d, path, uneven) == (
        f"{path}, frame 3: time 0.036 s, expected 0.03 s at 100 Hz. "
        "C3D needs evenly spaced frames: write CSV instead."
    )
    assert refusal(write_c3d, path, points.assign_attrs(rate=np.nan)) == (
        f"{path}: frame rate nan Hz, expected more than 0. Set the attribute rate."
    )
    assert refusal(write_c3d, path, points.assign_coords(point=["A", "B ", "B"])) == (
        f"{path}: label B stands 2 times (numbers 2, 3), expected once. Rename or remove all but one."
    )
    assert refusal(write_c3d, path, points.assign_coords(point=["A", " ", "B"])) == (
        f"{path}, point 2: a blank label. Name the point."
    )
    assert refusal(write_c3d, path, points.assign_coords(point=["A", "x" * 130, "B"])) == (
        f"{path}, LABELS: xxxxxxxxxxxxxxxxxxxx… takes 130 bytes, expected at most 127. Shorten it."
    )
    assert refusal(write_c3d, path, points.isel(time=slice(0))) == (
        f"{path}: 3 points and 0 frames to write. Give at least one of each."
    )
    assert refusal(write_c3d, path, points, unit="ft") == (
        f"{path}: unit 'ft', expected one of mm, cm, m. Correct the declared unit."
    )
    crowded = points.assign_attrs(events=json.dumps([["a", 0.0, ""]] * 300))
    assert refusal(write_c3d, path, crowded) == (
        f"{path}: 300 events, a C3D file holds at most 255. Remove some."
    )
    assert refusal(
        write_c3d, path, made_points(labels=1300).assign_coords(point=[f"{n:0120}" for n in range(1300)])
    ) == (
        f"{path}: the parameters need 311 blocks, a C3D file holds at most 255. "
        "Write fewer points or shorter labels."
    )
    assert refusal(write_c3d, tmp_path / "no" / "a.c3d", points) == (
        f"{tmp_path / 'no' / 'a.c3d'}: cannot be written (No such file or directory). "
        "Name a folder that exists and is writable."
    )
    assert list(tmp_path.iterdir()) == []
