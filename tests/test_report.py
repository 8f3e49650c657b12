"""The report page: what it says, that it stands alone, that names cannot inject, that it carries many."""

from __future__ import annotations

import json
import math
import re
import shutil
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from made_solutions import DOF, MARKERS, keep, knee_angles, made_solution, made_study, walking_poses
from made_solutions import TIMES as STUDY_TIMES
from page_reader import PageReader

from sta_prior.compare.scores import Errors, Score
from sta_prior.compare.tables import write_csv
from sta_prior.errors import InputError
from sta_prior.report import build_report
from sta_prior.report.content import (
    DASH,
    angle_table,
    marker_table,
    number,
    percent,
    segment_table,
    share_table,
)
from sta_prior.report.figures import (
    ESTIMATE,
    SHADE,
    TRUTH,
    TruthCurve,
    angle_figure,
    artifact_figure,
    runs,
    thinned,
    travel_figure,
)

TIMES = np.arange(0.0, 1.2, 0.02)
HOSTILE = "<script>alert(1)</script>"


def solution_of(times: np.ndarray = TIMES, **attributes: object) -> xr.Dataset:
    return made_solution(times, walking_poses(times), rigid_error=np.full(6, 0.01), **attributes)


def page_of(directory: Path) -> PageReader:
    path = build_report(directory)
    assert path == directory / "report.html"
    return PageReader(path.read_text(encoding="utf-8"))


def test_page_says_what_was_run_and_what_to_beware_of(tmp_path: Path) -> None:
    keep(tmp_path, "K01", "stair-up-01", solution_of(suspects="TC", observability="rotation about TA–TB"))
    run = {"command": "sta-prior solve", "versions": {"numpy": "2.4"}, "digests": {"prior.nc": "cd" * 32}}
    (tmp_path / "run.json").write_text(json.dumps(run), encoding="utf-8")
    (tmp_path / "summary.csv").write_text(
        "subject,trial,angle_sd_deg\nK01,stair-up-01,nan\n", encoding="utf-8"
    )
    page = page_of(tmp_path)
    for words in (
        "K01 stair-up-01",
        "smoother",
        "0f" * 32,
        "cd" * 32,
        "versions › numpy 2.4",
        "sta_prior",
        "step below tolerance, 7 iterations",
        "Suspect markers TC",
        "rotation about TA–TB",
        "ethics approval",
        "justification",
        "licensed practice",
        "Not for clinical decisions",
        "A small marker residual says nothing about pose accuracy",
        "The intervals rest on the prior",
        "K01 stair-up-01 –",
    ):
        assert words in page.text
    assert "INVENTED DATA" not in page.text


def test_page_needs_no_other_file_and_runs_no_script(tmp_path: Path) -> None:
    keep(tmp_path, "K01", "a", solution_of())
    page = page_of(tmp_path)
    assert {tag for tag, _ in page.elements} & {"script", "link", "img", "iframe", "object", "base"} == set()
    links = [
        value
        for _, attributes in page.elements
        for key, value in attributes.items()
        if key in ("href", "src", "xlink:href", "action") or key.startswith("on")
    ]
    assert links
    assert all(value is not None and value.startswith("#") for value in links)
    policies = [meta for meta in page.all("meta") if meta.get("http-equiv") == "Content-Security-Policy"]
    assert policies[0]["content"] == "default-src 'none'; style-src 'unsafe-inline'; img-src data:"


def test_page_is_accessible_and_well_formed(tmp_path: Path) -> None:
    for trial in ("a", "b"):
        keep(tmp_path, "K01", trial, solution_of())
    page = page_of(tmp_path)
    assert page.unbalanced == []
    assert page.open == []
    assert page.all("html") == [{"lang": "en"}]
    assert len(page.all("h1")) == 1
    assert all(header.get("scope") in ("col", "row") for header in page.all("th"))
    assert len(page.all("caption")) == len(page.all("table"))
    images = [svg for svg in page.all("svg") if svg.get("aria-hidden") != "true"]
    assert len(images) == 6
    assert all(svg["role"] == "img" and len(svg["aria-label"] or "") > 40 for svg in images)
    ids = [attributes["id"] for _, attributes in page.elements if "id" in attributes]
    assert len(ids) == len(set(ids))
    targets = {str(a["href"])[1:] for a in page.all("a")} | {
        str(use["xlink:href"])[1:] for use in page.all("use")
    }
    assert targets <= set(ids)


def test_hostile_names_cannot_inject(tmp_path: Path) -> None:
    solution = solution_of(
        estimator=HOSTILE, suspects=HOSTILE, observability=f'"><img src=x onerror=1>{HOSTILE}'
    )
    names = {"TA": f"{HOSTILE}", "TB": r"$\frac{$", "TC": '"]--></svg>', "TD": "大腿"}
    solution = solution.assign_coords(marker=[names.get(marker, marker) for marker in MARKERS])
    solution = solution.assign_coords(joint=["</style><b>knee"], segment=["thigh&lt;", "shank"])
    keep(tmp_path, "K<b>01", "<img src=x onerror=alert(1)>", solution)
    (tmp_path / "run.json").write_text(json.dumps({HOSTILE: [HOSTILE, {"x": HOSTILE}]}), encoding="utf-8")
    (tmp_path / "summary.csv").write_text(f"subject,{HOSTILE}\nK01,{HOSTILE}\n", encoding="utf-8")
    (tmp_path / "compare.csv").write_text(
        f"level,subject,part,component,rms_deg\nsubject,{HOSTILE},{HOSTILE},{HOSTILE},{HOSTILE}\n",
        encoding="utf-8",
    )
    page = page_of(tmp_path)
    tags = {tag for tag, _ in page.elements}
    assert tags & {"script", "img", "b", "iframe"} == set()
    assert not any(key.startswith("on") for _, attributes in page.elements for key in attributes)
    assert page.unbalanced == []
    assert HOSTILE in page.text
    assert "<img src=x onerror=alert(1)>" in page.text
    assert r"$\frac{$ (mm)" in page.text
    assert "大腿 (mm)" in page.text


@pytest.mark.parametrize(
    ("invented", "words"),
    [
        ((1, 1), "INVENTED DATA. Everything on this page comes from a simulator"),
        ((1, 0), "INVENTED DATA. 1 of these trials come from a simulator"),
    ],
)
def test_invented_data_is_unmistakable(tmp_path: Path, invented: tuple[int, int], words: str) -> None:
    for trial, flag in zip("ab", invented, strict=True):
        keep(tmp_path, "K01", trial, solution_of(invented_data=flag))
    page = page_of(tmp_path)
    assert words in page.text
    assert page.text.count("invented data") == sum(invented)


def test_numbers_that_are_missing_read_as_a_dash(tmp_path: Path) -> None:
    solution = solution_of().drop_vars(["support", "support_class", "conflict_p", "information_share"])
    for name in (
        "angle",
        "angle_sd",
        "angle_rigid",
        "joint_travel",
        "artifact",
        "position",
        "rigid_position",
    ):
        solution[name][:] = np.nan
    keep(tmp_path, "K01", "a", solution)
    page = page_of(tmp_path)
    assert not re.search(r"\b(nan|NaN|None|inf)\b", page.text)
    assert "K01 a 60 1.18 – – – – –" in page.text
    assert "thigh – – – 100 % 100 % 60 frames from 0.00 s" in page.text
    assert len([svg for svg in page.all("svg") if svg.get("role") == "img"]) == 1  # artifact: "no value"
    assert "no value" in page.text


def test_number_and_percent() -> None:
    assert [number(v) for v in (math.nan, math.inf, -0.04, -1.25, 3.0)] == [DASH, DASH, "0.0", "−1.2", "3.0"]
    assert [percent(v) for v in (math.nan, 0.0, 0.004, 0.5, 0.996, 1.0, -0.031)] == [
        DASH,
        "0 %",
        "< 1 %",
        "50 %",
        "> 99 %",
        "100 %",
        "−3 %",
    ]


def test_tables_hold_the_solution_s_own_numbers() -> None:
    solution = solution_of()
    angles = np.degrees(knee_angles(walking_poses(TIMES)))
    row = angle_table(solution).rows[0]
    assert row[0] == "knee flexion"
    assert row[1] == f"{number(angles[:, 0].min())} to {number(angles[:, 0].max())}"
    assert row[3] == "2.7"  # 1.645 · √2 · 0.02 rad
    seen = np.ones((60, len(MARKERS)), dtype=np.int8)
    seen[:15, 2] = 0
    solution["marker_seen"] = (("time", "marker"), seen)
    assert [row[4] for row in marker_table(solution).rows[:3]] == ["0 %", "0 %", "25 %"]
    assert marker_table(solution).rows[0][3] == "4.9"  # 1.645 · 3 mm
    solution["rigid_position"][10:14, 1] = np.nan
    solution["conflict_p"][:, 1] = np.where(np.arange(60) < 15, 0.01, 0.5)
    shank = segment_table(solution).rows[1]
    assert shank[1] == "88 % / 0 % / 12 %"
    assert shank[2:] == ("0.500", "25 %", "0 %", "7 %", "4 frames from 0.20 s")
    solution["information_share"][:] = [0.5, 0.25, 0.25, 0.0]
    shares = share_table(solution)
    assert shares is not None
    assert shares.columns[1:] == ("markers", "artifact prior", "joint", "motion")
    assert len(shares.rows) == 12
    assert shares.rows[3] == ("thigh tx", "50 %", "25 %", "25 %", "0 %")


def test_comparison_table_shows_levels_but_not_single_trials(tmp_path: Path) -> None:
    keep(tmp_path, "K01", "a", solution_of())
    errors = Errors(90, math.radians(-2.0), math.radians(2.0), 0.0, math.radians(2.5), 0.1, math.nan)
    rigid = Errors(90, 0.0, 0.0, 0.0, math.radians(5.0), 0.1, math.nan)
    rows = [
        Score(
            level,
            "knee",
            "flexion",
            "rad",
            subject=name,
            frames=frames,
            estimate=errors,
            rigid=rigid,
            ratio=0.5,
        )
        for level, name, frames in (("overall", "", 90), ("subject", "K01", 80), ("trial", "K01", 7777))
    ]
    write_csv(tmp_path / "compare.csv", rows)
    page = page_of(tmp_path)
    assert "knee flexion (deg) 1 90 – −2.00 0.00 2.50 5.73 – 5.00 0.50 – – – –" in page.text
    assert "Subject K01" in page.text
    assert "7777" not in page.text


def test_bone_truth_is_drawn_only_where_given() -> None:
    solution = solution_of()
    curve = TruthCurve(TIMES[5:25], knee_angles(walking_poses(TIMES[5:25]))[:, None], ("knee",), (DOF,))
    without, with_truth = angle_figure(solution, "t1a", 400), angle_figure(solution, "t1a", 400, curve)
    assert without is not None
    assert with_truth is not None
    assert TRUTH not in without.svg
    assert TRUTH in with_truth.svg
    assert without.svg.count(ESTIMATE) == 6  # a line and a band in each of three panels


def test_a_study_puts_its_bone_truth_on_the_page(tmp_path: Path) -> None:
    study = made_study(tmp_path, {"K01": ["stairs-1"]})
    out = tmp_path / "out"
    for trial in ("stairs-1", "not-in-the-study"):
        keep(out, "K01", trial, made_solution(STUDY_TIMES, walking_poses(STUDY_TIMES)))
    page = PageReader(build_report(out, study).read_text(encoding="utf-8"))
    assert page.text.count("and the bone truth (dots)") == 1
    assert "and the bone truth (dots)" not in page_of(out).text


def test_frames_beyond_the_prior_are_shaded_only_where_they_are() -> None:
    solution = solution_of()
    shaded = artifact_figure(solution, "t1m", 200)
    solution["support_class"][:] = 1
    plain = artifact_figure(solution, "t1m", 200)
    assert shaded is not None
    assert plain is not None
    assert shaded.svg.count(SHADE) == len(MARKERS)
    assert SHADE not in plain.svg


def test_figures_are_the_same_bytes_each_time_and_name_their_range() -> None:
    solution = solution_of()
    solution["joint_travel"][:] = 0.0
    solution["joint_travel"][:, 0, 2] = np.linspace(-0.003, 0.001, TIMES.size)
    first, second = travel_figure(solution, "t1j", 400), travel_figure(solution, "t1j", 400)
    assert first == second
    assert first is not None
    assert first.alt == "Travel of the joint centre over time, size per panel: knee from 0.0 to 3.0 mm."
    assert 'id="t1j-' in first.svg
    assert "<!--" not in first.svg
    assert "<style" not in first.svg


def test_no_joint_no_angle_figure() -> None:
    solution = solution_of()
    solution["angle"][:] = np.nan
    solution["angle_rigid"][:] = np.nan
    solution["joint_travel"][:] = np.nan
    assert angle_figure(solution, "t1a", 400) is None
    assert travel_figure(solution, "t1j", 400) is None


def test_thinned_and_runs() -> None:
    for count, most in ((10_000, 400), (401, 400), (400, 400), (1, 400)):
        frames = thinned(count, most)
        assert frames[0] == 0
        assert len(frames) <= most
        assert len(set(np.diff(frames))) <= 1
    assert thinned(0, 400).size == 0
    assert runs(np.array([], dtype=bool)) == []
    assert runs(np.array([True, True])) == [(0, 1)]


def test_many_trials_are_folded_indexed_and_small(tmp_path: Path) -> None:
    solution = solution_of().isel(marker=[0])
    solution["angle"][:] = solution["angle_rigid"][:] = solution["joint_travel"][:] = np.nan
    keep(tmp_path, "K00", "t0", solution)
    for index in range(1, 52):
        copy = tmp_path / f"K{index // 4:02d}" / f"t{index % 4}.solution.nc"
        copy.parent.mkdir(exist_ok=True)
        shutil.copy(tmp_path / "K00" / "t0.solution.nc", copy)
    path = build_report(tmp_path)
    page = PageReader(path.read_text(encoding="utf-8"))
    assert len(page.all("details")) == 52
    assert not any("open" in details for details in page.all("details"))
    anchors = [a for a in page.all("a") if str(a["href"]).startswith("#trial-")]
    assert len(anchors) == 52
    assert path.stat().st_size < 52 * 50_000


def test_a_long_trial_is_thinned_and_says_so(tmp_path: Path) -> None:
    times = np.arange(0.0, 30.0, 0.01)
    keep(tmp_path, "K01", "long", solution_of(times))
    path = build_report(tmp_path)
    assert "Every 8th frame is drawn." in path.read_text(encoding="utf-8")
    assert path.stat().st_size < 700_000


def test_a_broken_solution_or_side_file_is_named_and_the_rest_shown(tmp_path: Path) -> None:
    keep(tmp_path, "K01", "a", solution_of())
    (tmp_path / "K01" / "b.solution.nc").write_bytes(b"not a solution")
    (tmp_path / "run.json").write_text("{", encoding="utf-8")
    page = page_of(tmp_path)
    assert "1 trial of 1 subject" in page.text
    assert "K01/b.solution.nc: not a NetCDF 4 file" in page.text
    assert "run.json: not JSON text" in page.text
    assert list(tmp_path.glob(".*")) == []


def test_no_solution_at_all_is_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError) as missing:
        build_report(tmp_path / "out")
    assert (
        str(missing.value) == f"{tmp_path / 'out'}: no such folder. Name the folder given to solve as --out."
    )
    with pytest.raises(InputError) as empty:
        build_report(tmp_path)
    assert str(empty.value) == (
        f"{tmp_path}: no <subject>/<trial>.solution.nc in it. Run solve with it as --out first."
    )
    (tmp_path / "K01").mkdir()
    broken = tmp_path / "K01" / "a.solution.nc"
    broken.write_bytes(b"junk")
    with pytest.raises(InputError) as unread:
        build_report(tmp_path)
    assert str(unread.value) == (
        f"{tmp_path}: no solution can be read: {broken}: not a NetCDF 4 file. "
        "Name a file that this program wrote."
    )
    assert not (tmp_path / "report.html").exists()
