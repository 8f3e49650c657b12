"""C3D files that are empty, truncated, foreign or damaged: one line, never a traceback."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from made_c3d import BIG, DEC, LITTLE, RATE, cloud, make_c3d

from sta_prior.errors import InputError
from sta_prior.io.c3d import copy_with_rotations, read_c3d, read_c3d_rotations

DATA = Path(__file__).parents[2] / "shared" / "data"
VARIANTS = [f"sample02_{order}_{form}.c3d" for order in ("pc", "dec", "sgi") for form in ("real", "int")]
ORDERS = pytest.mark.parametrize("processor", [LITTLE, DEC, BIG])
AGAIN = " Copy or export the file again."
PARAMETERS = ": not a C3D file or truncated, its parameters would end after byte 1024"


def data(*parts: str) -> Path:
    path = DATA.joinpath(*parts)
    if not path.exists():
        pytest.skip(f"{path.name} is not there: ../shared/data is absent")
    return path


def refusal(path: Path) -> str:
    """The message with which a file is refused, without the path; one line."""
    with pytest.raises(InputError) as caught:
        read_c3d(path)
    text = str(caught.value)
    assert "\n" not in text
    assert text.startswith(str(path))
    return text.removeprefix(str(path))


@pytest.mark.parametrize(
    ("changes", "expected"),
    [
        ({"USED": 7}, ": POINT:USED is 7, the header says 3." + AGAIN),
        ({"DATA_START": 9}, ": POINT:DATA_START is 9, the header says 6." + AGAIN),
        ({"SCALE": 0.5}, ": POINT:SCALE is 0.5, the header says -0.125." + AGAIN),
        ({"SCALE": 0.0}, ": POINT:SCALE is 0, expected a number other than 0." + AGAIN),
        ({"SCALE": np.nan}, ": POINT:SCALE is nan, expected a number other than 0." + AGAIN),
        ({"RATE": 0.0}, ": POINT:RATE is 0 Hz, expected more than 0. Export it with its rate."),
        ({"RATE": np.inf}, ": POINT:RATE is inf Hz, expected more than 0. Export it with its rate."),
        (
            {"ANALOG USED": 2},
            ": ANALOG:USED 2 × 0 samples a frame is 0, the header says 1." + AGAIN,
        ),
        ({"FRAMES": 90}, ": truncated, expected 90 frames, got 4." + AGAIN),
        (
            {"FRAMES": 65535, "LONG_FRAMES": np.nan},
            ", POINT:LONG_FRAMES: expected a whole number, got nan." + AGAIN,
        ),
        ({"USED": 0, "header points": 0}, ": holds 0 points and 4 frames. Name a file with 3D points."),
    ],
)
def test_a_header_that_the_parameters_contradict_is_refused(
    tmp_path: Path, changes: dict[str, object], expected: str
) -> None:
    if "ANALOG USED" in changes:
        changes = {**changes, "header analog": 1}
    assert refusal(make_c3d(tmp_path / "a.c3d", cloud(), changes=changes)) == expected


def test_a_record_that_is_too_short_for_its_values_is_refused(tmp_path: Path) -> None:
    path = make_c3d(tmp_path / "a.c3d", cloud())
    content = path.read_bytes()
    at = content.index(b"RATE") + 4
    for new, place in ((b"\x05\0", at), (b"\x63", at + 2), (b"\xff", at + 3)):  # pointer, type, dimensions
        path.write_bytes(content[:place] + new + content[place + len(new) :])
        assert refusal(path) == ", parameter 'RATE': damaged, its values do not fit in its record." + AGAIN


def test_a_parameter_that_stands_twice_is_refused(tmp_path: Path) -> None:
    path = make_c3d(tmp_path / "a.c3d", cloud())
    path.write_bytes(path.read_bytes().replace(b"UNITS", b"SCALE"))
    assert refusal(path) == ": its parameters cannot be decoded (KeyError)." + AGAIN


def test_points_that_no_library_decodes_are_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def read_frames(*_: object, **__: object) -> None:
        raise ValueError

    path = make_c3d(tmp_path / "a.c3d", cloud(), processor=BIG)
    monkeypatch.setattr("c3d.Reader.read_frames", read_frames)
    assert refusal(path) == ": its points cannot be decoded (ValueError)." + AGAIN


@pytest.mark.parametrize("last", [b"\0\0", b"\xff\x7f"])
def test_the_last_record_may_end_in_any_pointer_out_of_the_section(tmp_path: Path, last: bytes) -> None:
    path = make_c3d(tmp_path / "a.c3d", cloud())
    content = path.read_bytes()
    at = content.index(b"LABELS") + 6
    path.write_bytes(content[:at] + last + content[at + 2 :])
    assert read_c3d(path)["point"].to_numpy().tolist() == ["M0", "M1", "M2"]
    poses = np.broadcast_to(np.eye(4), (4, 1, 4, 4))
    copy_with_rotations(path, tmp_path / "b.c3d", ["thigh"], poses)
    assert read_c3d(tmp_path / "b.c3d")["point"].to_numpy().tolist() == ["M0", "M1", "M2"]
    assert (read_c3d_rotations(tmp_path / "b.c3d")["rotation"] == np.eye(3)).all()


def test_what_the_parameters_leave_out_is_taken_from_the_header(tmp_path: Path) -> None:
    absent = {"USED": None, "FRAMES": None, "DATA_START": None, "SCALE": None, "RATE": None}
    points = read_c3d(make_c3d(tmp_path / "a.c3d", cloud(frames=5), changes=absent))
    np.testing.assert_allclose(points["position"], cloud(frames=5)[..., :3] * 1e-3)
    assert points.attrs["rate"] == RATE


def test_nothing_seen_is_refused(tmp_path: Path) -> None:
    words = cloud(points=5)
    words[..., 3] = -1
    assert refusal(make_c3d(tmp_path / "a.c3d", words)) == (
        ": none of its 5 points is seen in any frame." + AGAIN
    )


@pytest.mark.parametrize(
    ("cut", "expected"),
    [
        (0, ": the file is empty. Export or copy it again."),
        (1, ": not a C3D file (its second byte is not 50 hex). Export the trial as C3D."),
        (300, PARAMETERS + ", it has 300 bytes." + AGAIN),
        (1023, PARAMETERS + ", it has 1023 bytes." + AGAIN),
        (1500, ": truncated inside its parameters, expected at least 2560 bytes, got 1500." + AGAIN),
        (2560, ": truncated, expected 4 frames, got 0." + AGAIN),
        (2560 + 2 * 48, ": truncated, expected 4 frames, got 2." + AGAIN),
        (2560 + 4 * 48 - 1, ": truncated, expected 4 frames, got 3." + AGAIN),
    ],
)
def test_a_truncated_file_is_refused(tmp_path: Path, cut: int, expected: str) -> None:
    path = make_c3d(tmp_path / "a.c3d", cloud())
    path.write_bytes(path.read_bytes()[:cut])
    assert refusal(path) == expected


@pytest.mark.parametrize("name", VARIANTS[:2] + VARIANTS[4:])
def test_no_cut_of_a_real_file_gives_points(tmp_path: Path, name: str) -> None:
    content = data("c3d_variants", name).read_bytes()
    frames = 89 * (36 * 4 + 64) * (4 if "real" in name else 2)
    path = tmp_path / "cut.c3d"
    for size in np.linspace(0, 12 * 512 + frames - 1, 60).astype(int):
        path.write_bytes(content[:size])
        assert refusal(path)


@pytest.mark.parametrize(
    ("content", "expected"),
    [
        (b"\x89PNG\r\n\x1a\n" + bytes(5000), "not a C3D file or truncated, its parameters would"),
        (b"time,TA_x\n" * 900, "not a C3D file (its second byte is not 50 hex)."),
        (b"\x02P" + bytes(4000), "not a C3D file or damaged, expected processor code 84, 85 or 86, got 0."),
        (b"\x02P" + bytes(510) + b"\x01P\x02T" + bytes(2000), "no POINT group among its parameters."),
    ],
)
def test_a_foreign_file_is_refused(tmp_path: Path, content: bytes, expected: str) -> None:
    path = tmp_path / "a.c3d"
    path.write_bytes(content)
    assert expected in refusal(path)


def test_a_missing_file_and_a_folder_are_refused(tmp_path: Path) -> None:
    assert refusal(tmp_path / "no.c3d") == ": no such file. Check the name and the folder."
    assert refusal(tmp_path) == ": a folder, expected a file. Name the file itself."


@pytest.mark.filterwarnings("ignore::sta_prior.errors.StaPriorWarning")
@ORDERS
def test_damaged_bytes_end_in_points_or_in_one_line(tmp_path: Path, processor: int) -> None:
    """No byte of header and parameters may lead to a traceback; 400 files with 1–4 random bytes each."""
    content = make_c3d(
        tmp_path / "a.c3d", cloud(), processor=processor, events=[("Foot Off", "Left", 0.0, 0.02)]
    ).read_bytes()
    rng, refused = np.random.default_rng(processor), 0
    path = tmp_path / "b.c3d"
    for _ in range(400):
        damaged = bytearray(content)
        for place in rng.choice([*range(0, 24), *range(512, 1100)], rng.integers(1, 5)):
            damaged[place] = rng.integers(256)
        path.write_bytes(damaged)
        try:
            points = read_c3d(path)
        except InputError as error:
            refused += "\n" not in str(error)
        else:
            assert points["position"].dims == ("time", "point", "axis")
    assert 50 < refused <= 400
