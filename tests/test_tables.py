"""CSV tables: points, bone poses, reference points; each refusal with file, line and column."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from scipy.spatial.transform import Rotation

from sta_prior.errors import InputError
from sta_prior.io import read_points
from sta_prior.io.rotations import poses_dataset
from sta_prior.io.text import (
    read_bone_table,
    read_points_csv,
    read_reference_points,
    write_bone_table,
    write_points_csv,
)

DATA = Path(__file__).parents[2] / "shared" / "data"
POINTS = "time,TA_x,TA_y,TA_z,TB_x,TB_y,TB_z"
ROWS = ("0.00,1,2,3,400,500,600", "0.01,2,3,4,401,501,601", "0.02,3,4,5,402,502,602")
POSE = [f"r{i}{j}" for i in (1, 2, 3) for j in (1, 2, 3)] + ["px", "py", "pz"]
BONES = ",".join(["time", *(f"{name}_{column}" for name in ("thigh", "shank") for column in POSE)])
QUARTER = "0,-1,0,1,0,0,0,0,1"  # 90° about z
REFERENCE = "segment,point,x,y,z"


def table(tmp_path: Path, *lines: str, unit: str = "# unit: mm") -> Path:
    path = tmp_path / "table.csv"
    path.write_text("\n".join([unit, *lines]) + "\n", encoding="utf-8")
    return path


def refusal(function: object, path: Path) -> str:
    """The message with which a file is refused, without the path; one line."""
    assert callable(function)
    with pytest.raises(InputError) as caught:
        function(path)
    text = str(caught.value)
    assert "\n" not in text
    assert text.startswith(str(path))
    return text.removeprefix(str(path))


def test_points_are_read_in_metres(tmp_path: Path) -> None:
    points = read_points_csv(table(tmp_path, POINTS, *ROWS))
    assert points["position"].dims == ("time", "point", "axis")
    np.testing.assert_allclose(points["position"][1], [[0.002, 0.003, 0.004], [0.401, 0.501, 0.601]])
    assert points["point"].to_numpy().tolist() == ["TA", "TB"]
    assert points["time"].to_numpy().tolist() == [0.0, 0.01, 0.02]
    assert points["residual"].isnull().all()
    assert points.attrs["rate"] == pytest.approx(100.0)
    assert points.attrs["units_declared"] == "mm"
    assert points.attrs["events"] == "[]"
    assert read_points(table(tmp_path, POINTS, *ROWS)).identical(points)


def test_the_declared_unit_is_honoured(tmp_path: Path) -> None:
    in_mm = read_points_csv(table(tmp_path, POINTS, *ROWS))
    rows = [
        ",".join([row.split(",")[0], *(str(float(c) / 1000) for c in row.split(",")[1:])]) for row in ROWS
    ]
    in_m = read_points_csv(table(tmp_path, POINTS, *rows, unit="#unit: M ,,,,,,"))
    np.testing.assert_allclose(in_m["position"], in_mm["position"], rtol=1e-12)


@pytest.mark.parametrize("row", ["0.02,3,4,5,,,", "0.02,3,4,5,402,,602", "0.02 , 3,4,5, , , "])
def test_a_blank_is_an_occluded_point(tmp_path: Path, row: str) -> None:
    points = read_points_csv(table(tmp_path, POINTS, *ROWS[:2], row))
    assert points["position"].isnull().all("axis").to_numpy().nonzero() == (2, 1)
    assert points["position"].isnull().any("axis").to_numpy().nonzero() == (2, 1)


def test_columns_in_any_order_and_spreadsheet_habits(tmp_path: Path) -> None:
    path = tmp_path / "table.csv"
    text = '# unit: mm\r\ntime,"T A_z",T A_y,T A_x\r\n0,3,2,1\r\n1,300,200,100\r\n,,,\r\n\r\n'
    path.write_bytes(b"\xef\xbb\xbf" + text.encode())
    points = read_points_csv(path)
    np.testing.assert_allclose(points["position"], [[[0.001, 0.002, 0.003]], [[0.1, 0.2, 0.3]]])
    assert points["point"].to_numpy().tolist() == ["T A"]


@pytest.mark.parametrize(
    ("lines", "expected"),
    [
        (
            ["time,TA_x,TA_y,TB_x,TB_y,TB_z", "0,1,2,3,4,5"],
            ", header, point TA: expected 3 columns, got 2, TA_z missing. Add what is missing.",
        ),
        (
            [POINTS, ROWS[0], "0.01,2,three,4,401,501,601"],
            ", line 4, column TA_y: expected a number or a blank, got 'three'. "
            "Leave the cell blank where the value is missing.",
        ),
        (
            [POINTS, ROWS[0], "0.01,2,3,4,401,501,NaN"],
            ", line 4, column TB_z: expected a number or a blank, got 'NaN'. "
            "Leave the cell blank where the value is missing.",
        ),
        (
            [POINTS, "0.01,2,3,1_0,401,501,inf"],
            ", line 3, column TA_z: expected a number or a blank, got '1_0'. "
            "Leave the cell blank where the value is missing.",
        ),
        (
            [POINTS, ROWS[0], ROWS[2], ROWS[1]],
            ", line 5, column time: expected a time after 0.02 s, got 0.01 s. "
            "Sort the rows by time and remove repeated ones.",
        ),
        (
            [POINTS, ROWS[1], ROWS[1]],
            ", line 4, column time: expected a time after 0.01 s, got 0.01 s. "
            "Sort the rows by time and remove repeated ones.",
        ),
        (
            [POINTS, ROWS[0], ",1,2,3,4,5,6"],
            ", line 4, column time: blank, expected a time in s. Fill it in.",
        ),
        (
            ["TA_x,TA_y,TA_z", "1,2,3"],
            ", header: expected time as first column, got 'TA_x'. Add it, in s.",
        ),
        (["time", "0"], ", header: no point beside time. Add a point's columns."),
        (
            ["time,TA_x,TA_y,TA_z,force", "0,1,2,3,4"],
            ", header, column 5: expected <point>_x … <point>_z, got 'force'. Rename or remove the column.",
        ),
        (
            ["time,TA_x,TA_y,TA_z,TA_x", "0,1,2,3,4"],
            ", line 2: column TA_x stands 2 times (numbers 2, 5), expected once. "
            "Rename or remove all but one.",
        ),
        ([POINTS], ": a header but no rows. Export the table again."),
        ([POINTS, "", ",,,,,,"], ": a header but no rows. Export the table again."),
        ([], ", line 2: no header. Name the columns in the second line."),
        (
            [POINTS, "0,1,2,3,4,5"],
            ", line 3: expected 7 cells as in the header, got 6. "
            "Separate cells by commas, write decimals with a point, leave a missing cell blank.",
        ),
        (
            [POINTS, ROWS[0], '0.01,2,3,4,401,501,"601'],
            ", line 4: not a CSV row (unexpected end of data). Export the table again.",
        ),
        ([POINTS, "0,,,,,,", "1,1,,,,3,"], ": none of its 2 points is seen in any row. Export it again."),
        (
            [POINTS, "0,0.5,0.5,0.5,0.25,0.5,0.5", "1,0.5,0.5,0.5,0.5,0.5,1.0"],
            ": declared in mm, all points together span 0.5 mm, expected at least 20 mm. The numbers look "
            "like metres: correct the declared unit or export the file again.",
        ),
    ],
)
def test_a_points_table_that_is_wrong_is_refused(tmp_path: Path, lines: list[str], expected: str) -> None:
    assert refusal(read_points_csv, table(tmp_path, *lines)) == expected


def test_a_wrong_or_missing_unit_is_refused(tmp_path: Path) -> None:
    path = table(tmp_path, POINTS, *ROWS, unit="# unit: inch")
    assert refusal(read_points_csv, path) == (
        ", line 1: unit 'inch', expected one of mm, cm, m. Correct the declared unit."
    )
    path = table(tmp_path, *ROWS, unit=POINTS)
    assert refusal(read_points_csv, path) == (
        f", line 1: expected '# unit: mm' or '# unit: m', got '{POINTS}'. Put the unit there."
    )
    rows = [row.replace(",4", ",4000") for row in ROWS]
    assert refusal(read_points_csv, table(tmp_path, POINTS, *rows, unit="# unit: m")) == (
        ": declared in m, all points together span 4e+05 m, expected at most 100 m. The numbers look like "
        "millimetres: correct the declared unit, or remove stray points."
    )


@pytest.mark.parametrize("function", [read_points_csv, read_bone_table, read_reference_points])
def test_empty_foreign_and_missing_files_are_refused(tmp_path: Path, function: object) -> None:
    path = tmp_path / "table.csv"
    assert refusal(function, path) == ": no such file. Check the name and the folder."
    path.write_bytes(b"")
    assert refusal(function, path) == ": the file is empty. Export or copy it again."
    path.write_bytes(b"# unit: mm\n\x89PNG\r\n\x1a\n")
    assert refusal(function, path) == ", line 2: not UTF-8 text. Save the file as UTF-8 text."
    path.write_bytes(b"# unit: mm\n\na\0b")
    assert refusal(function, path) == ", line 3: a zero byte, expected text. Save the file as UTF-8 text."


def test_bone_poses_are_read_row_by_row(tmp_path: Path) -> None:
    rows = [f"0.5,{QUARTER},10,20,300,{','.join(12 * [''])}", f"0.6,{','.join(12 * [''])},{QUARTER},1,2,3"]
    bones = read_bone_table(table(tmp_path, BONES, *rows))
    assert bones["segment"].to_numpy().tolist() == ["thigh", "shank"]
    assert bones["rotation"].dims == ("time", "segment", "row", "col")
    assert bones["rotation"][0, 0].to_numpy().tolist() == [[0, -1, 0], [1, 0, 0], [0, 0, 1]]
    np.testing.assert_allclose(bones["position"][0, 0], [0.01, 0.02, 0.3])
    assert bones["rotation"].isnull().all(("row", "col")).to_numpy().tolist() == [
        [False, True],
        [True, False],
    ]
    assert bones["position"].isnull().any("axis").to_numpy().tolist() == [[False, True], [True, False]]
    assert {name: value.attrs["units"] for name, value in bones.items()} == {"rotation": "1", "position": "m"}


def bone_row(time: float, rotation: str = QUARTER, position: str = "10,20,300") -> str:
    return f"{time},{QUARTER},10,20,300,{rotation},{position}"


@pytest.mark.parametrize(
    ("row", "expected"),
    [
        (
            bone_row(0.25, "1,0.25,0,0,1,0,0,0,1"),
            ", time 0.25, segment shank: not orthonormal, RᵀR differs from 1 by 0.25, "
            "expected at most 0.001. A sheared or scaled matrix is not a pose.",
        ),
        (
            bone_row(0.25, "1.002,0,0,0,1.002,0,0,0,1.002"),
            ", time 0.25, segment shank: not orthonormal, RᵀR differs from 1 by 0.004, "
            "expected at most 0.001. A sheared or scaled matrix is not a pose.",
        ),
        (
            bone_row(0.25, "1,0,0,0,1,0,0,0,-1"),
            ", time 0.25, segment shank: a reflection, expected determinant +1, got −1. "
            "Check the order and the sign of its axes.",
        ),
        (
            bone_row(0.25, "0,0,0,0,0,0,0,0,0"),
            ", time 0.25, segment shank: not orthonormal, RᵀR differs from 1 by 1, "
            "expected at most 0.001. A sheared or scaled matrix is not a pose.",
        ),
        (
            bone_row(0.25, position="10,,"),
            ", line 4, column shank_py: 2 of 12 cells of the pose blank, expected all or none. "
            "Leave all blank where the bone is not in view.",
        ),
        (
            bone_row(0.25, QUARTER.replace("-1", "x")),
            ", line 4, column shank_r12: expected a number or a blank, got 'x'. "
            "Leave the cell blank where the value is missing.",
        ),
    ],
)
def test_a_bone_pose_that_is_wrong_is_refused_with_its_place(tmp_path: Path, row: str, expected: str) -> None:
    assert refusal(read_bone_table, table(tmp_path, BONES, bone_row(0.125), row)) == expected


def test_a_bone_table_that_is_wrong_is_refused(tmp_path: Path) -> None:
    blank = [f"{time}{24 * ','}" for time in (0, 1, 2)]
    assert refusal(read_bone_table, table(tmp_path, BONES, *blank)) == (
        ": no bone is in view in any of its 3 rows. Leave the table out of the study, or export it again."
    )
    header = BONES.replace(",shank_r33", "")
    assert refusal(read_bone_table, table(tmp_path, header, bone_row(0).replace(",300", "", 1))) == (
        ", header, segment shank: expected 12 columns, got 11, shank_r33 missing. Add what is missing."
    )
    small = f"0,{QUARTER},0.25,1.5,0.125,{QUARTER},0.5,1,0.25"
    assert refusal(read_bone_table, table(tmp_path, BONES, small)) == (
        ": declared in mm, all points together span 1.5 mm, expected at least 5 mm. The numbers look "
        "like metres: correct the declared unit or export the file again."
    )
    large = f"0,{QUARTER},100,1500,100,{QUARTER},300,1000,200"
    assert refusal(read_bone_table, table(tmp_path, BONES, large, unit="# unit: m")) == (
        ": declared in m, all points together span 1500 m, expected at most 100 m. The numbers look "
        "like millimetres: correct the declared unit, or remove stray points."
    )


def test_rounding_of_a_rotation_is_removed(tmp_path: Path) -> None:
    """A table of five decimals: the nearest rotation is within their rounding of the true one."""
    truth = Rotation.random(40, rng=np.random.default_rng(6)).as_matrix()
    rows = [
        ",".join([str(k), *(f"{v:.5f}" for v in R.ravel()), "10,20,300", QUARTER, "1,2,3"])
        for k, R in enumerate(truth)
    ]
    got = read_bone_table(table(tmp_path, BONES, *rows))["rotation"].to_numpy()[:, 0]
    np.testing.assert_allclose(np.swapaxes(got, 1, 2) @ got, np.tile(np.eye(3), (40, 1, 1)), atol=1e-14)
    np.testing.assert_allclose(got, truth, atol=2e-5)


def test_reference_points(tmp_path: Path) -> None:
    points = read_reference_points(
        table(tmp_path, REFERENCE, "thigh,TA,-44.5,163,62", "thigh,KJC,1,2,3", "shank,KJC,4,5,-6")
    )
    assert list(points) == [("thigh", "TA"), ("thigh", "KJC"), ("shank", "KJC")]
    np.testing.assert_allclose(points["thigh", "TA"], [-0.0445, 0.163, 0.062])
    np.testing.assert_allclose(points["shank", "KJC"], [0.004, 0.005, -0.006])


@pytest.mark.parametrize(
    ("lines", "expected"),
    [
        (
            ["segment,marker,x,y,z", "thigh,TA,1,2,3"],
            ", header: expected segment,point,x,y,z, got segment,marker,x,y,z. Rename the columns.",
        ),
        ([REFERENCE, "thigh,TA,1,,3"], ", line 3, column y: blank. Fill it in or remove the row."),
        ([REFERENCE, "thigh,,1,2,3"], ", line 3, column point: blank. Fill it in or remove the row."),
        (
            [REFERENCE, "thigh,TA,1,2,x"],
            ", line 3, column z: expected a number or a blank, got 'x'. "
            "Leave the cell blank where the value is missing.",
        ),
        (
            [REFERENCE, "thigh,TA,1,2,3", "shank,TA,4,5,6", "thigh,TA,7,8,9"],
            ", line 5: point TA of segment thigh stands a second time. Keep one of the rows.",
        ),
        (
            [REFERENCE, "thigh,TA,0.1,0.2,0.3", "thigh,TB,0.2,0.2,0.3", "thigh,TC,0.1,0.6,0.3"],
            ": declared in mm, all points together span 0.4 mm, expected at least 20 mm. The numbers look "
            "like metres: correct the declared unit or export the file again.",
        ),
    ],
)
def test_reference_points_that_are_wrong_are_refused(tmp_path: Path, lines: list[str], expected: str) -> None:
    assert refusal(read_reference_points, table(tmp_path, *lines)) == expected


def test_a_pose_that_is_missing_in_part_is_written_as_blank(tmp_path: Path) -> None:
    rotation = np.tile(np.eye(3), (2, 1, 1, 1))
    poses = poses_dataset(
        rotation, np.array([[[0.1, np.nan, 0.3]], [[0.1, 0.2, 0.3]]]), np.arange(2.0), ["a"], {}
    )
    write_bone_table(tmp_path / "a.csv", poses)
    assert (tmp_path / "a.csv").read_text().splitlines()[2] == "0.0" + 12 * ","


def test_names_that_cannot_head_a_column_are_refused(tmp_path: Path) -> None:
    path = tmp_path / "a.csv"
    points = read_points_csv(table(tmp_path, POINTS, *ROWS))
    for label in (" TA", "T\nA", ""):
        with pytest.raises(InputError) as caught:
            write_points_csv(path, points.assign_coords(point=[label, "TB"]))
        assert str(caught.value) == (
            f"{path}: point {label!r} cannot name a column. Rename it: no blanks around, no line breaks."
        )
    assert not path.exists()


def test_every_table_at_hand_is_read(tmp_path: Path) -> None:
    paths = sorted((DATA / "paired").rglob("*.csv"))
    if not paths:
        pytest.skip("paired/*.csv is not there: ../shared/data is absent")
    for path in paths:
        if path.name == "reference.csv":
            points = read_reference_points(path)
            assert {segment for segment, _ in points} == {"thigh", "shank"}
            continue
        bones: xr.Dataset = read_bone_table(path)
        assert bones["segment"].to_numpy().tolist() == ["thigh", "shank"]
        seen = bones["rotation"].notnull().all(("row", "col"))
        assert float(abs(bones["position"]).max()) < 5
        assert np.array_equal(seen, bones["position"].notnull().all("axis"))
