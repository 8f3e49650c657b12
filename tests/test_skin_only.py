"""Archived skin trials of three laboratories, without bone truth: both legs, rigid and linked.

Data (not part of this repository; see SOURCES.md beside it): treadmill running, figshare doi
10.6084/m9.figshare.4543435, CC BY 4.0; running with single skin markers, BMC notebooks of Duarte &
Watanabe, CC BY 4.0; walking with gaps, sample set of the C3D standard's site. The lab files are ours:
thighs from hip to knee, shanks from knee to ankle, z from medial to lateral on the right, turned on the
left. The greater trochanter stands for the hip where no hip joint centre was calculated, which tilts the
thigh's frame by some degrees.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from made_laboratory import contents, run

import sta_prior as sta
from sta_prior.batch import Run, solve_study
from sta_prior.errors import StaPriorWarning

DATA = Path(__file__).parents[2] / "shared" / "data" / "skin_only"

LEG = """
[segment.{side}_thigh]
markers = [{thigh}]
[segment.{side}_thigh.frame]
side = "{side}"
origin = ["{hip}"]
y = {{ from = ["{lateral_knee}", "{medial_knee}"], to = ["{hip}"] }}
z = {{ from = ["{left_of_knee}"], to = ["{right_of_knee}"] }}
[segment.{side}_shank]
markers = [{shank}]
[segment.{side}_shank.frame]
side = "{side}"
origin = ["{lateral_ankle}", "{medial_ankle}"]
y = {{ from = ["{lateral_ankle}", "{medial_ankle}"], to = ["{lateral_knee}", "{medial_knee}"] }}
z = {{ from = ["{left_of_ankle}"], to = ["{right_of_ankle}"] }}
[joint.{side}_knee]
proximal = "{side}_thigh"
distal = "{side}_shank"
kind = "knee"
side = "{side}"
centre = ["{lateral_knee}", "{medial_knee}"]
travel_sd_mm = 5.0
"""


@dataclass(frozen=True)
class Archive:
    """How a laboratory names its points; {0} is R or L."""

    up: str
    static: str
    trials: dict[str, str]
    thigh: tuple[str, ...]
    shank: tuple[str, ...]
    hip: str
    knee: tuple[str, str]
    ankle: tuple[str, str]


CORNERS = ("Top.Lateral", "Top.Medial", "Bottom.Lateral", "Bottom.Medial")
ARCHIVES = {
    "treadmill-run": Archive(
        up="y",
        static="RBDS001_static.c3d",
        trials={"run": "RBDS001_runT35.c3d"},
        thigh=tuple(f"{{0}}.Thigh.{corner}" for corner in CORNERS),
        shank=tuple(f"{{0}}.Shank.{corner}" for corner in CORNERS),
        hip="{0}.GTR",
        knee=("{0}.Knee", "{0}.Knee.Medial"),
        ankle=("{0}.Ankle", "{0}.Ankle.Medial"),
    ),
    "skin-walk": Archive(
        up="y",
        static="run_static.c3d",
        trials={"run": "run.c3d", "walk_1": "walk_1.c3d", "walk_2": "walk_2.c3d", "walk_3": "walk_3.c3d"},
        thigh=("{0}TH1", "{0}TH2", "{0}TH3"),
        shank=("{0}TB1", "{0}TB2", "{0}TB3"),
        hip="{0}HJC",
        knee=("{0}LFC", "{0}MFC"),
        ankle=("{0}LMAL", "{0}MMAL"),
    ),
    "gappy-walk": Archive(
        up="z",
        static="sample26_Standing_Hybrid_1.c3d",
        trials={f"walk_{n}": f"sample26_Walking_Hybrid_1_{n}.c3d" for n in range(1, 6)},
        thigh=tuple(f"{{0}}_THIGH_{n}" for n in range(1, 5)),
        shank=tuple(f"{{0}}_SHANK_{n}" for n in range(1, 5)),
        hip="{0}_TROCH",
        knee=("{0}_KNEE_LAT", "{0}_KNEE_MED"),
        ankle=("{0}_ANKLE_LAT", "{0}_ANKLE_MED"),
    ),
}


def leg_text(archive: Archive, side: str) -> str:
    """Lab file of one leg. On the left, lateral lies to the left."""
    letter = side[0].upper()
    lateral_knee, medial_knee = (name.format(letter) for name in archive.knee)
    lateral_ankle, medial_ankle = (name.format(letter) for name in archive.ankle)
    right = side == "right"
    return LEG.format(
        side=side,
        thigh=", ".join(f'"{name.format(letter)}"' for name in archive.thigh),
        shank=", ".join(f'"{name.format(letter)}"' for name in archive.shank),
        hip=archive.hip.format(letter),
        lateral_knee=lateral_knee,
        medial_knee=medial_knee,
        lateral_ankle=lateral_ankle,
        medial_ankle=medial_ankle,
        left_of_knee=medial_knee if right else lateral_knee,
        right_of_knee=lateral_knee if right else medial_knee,
        left_of_ankle=medial_ankle if right else lateral_ankle,
        right_of_ankle=lateral_ankle if right else medial_ankle,
    )


def write_study_of(folder: Path, name: str) -> Path:
    """Write lab and study file of an archive; skip where the data is not there."""
    archive, source = ARCHIVES[name], DATA / name
    if not source.is_dir():
        pytest.skip(f"no data: {source.relative_to(DATA.parents[2])}")
    legs = "".join(leg_text(archive, side) for side in ("right", "left"))
    (folder / "lab.toml").write_text(f'title = "{name}"\nup = "{archive.up}"\n{legs}', encoding="utf-8")
    lines = ['lab = "lab.toml"', "[[subject]]", 'id = "R01"', f'static = "{source / archive.static}"']
    for trial, file in archive.trials.items():
        activity = trial.split("_")[0]
        lines += ["[[subject.trial]]", f'id = "{trial}"', f'activity = "{activity}"']
        lines.append(f'skin = "{source / file}"')
    (folder / "study.toml").write_text("\n".join(lines) + "\n", encoding="utf-8")
    return folder / "study.toml"


def flexion(solution: xr.Dataset, side: str) -> np.ndarray:
    """Knee flexion where it is known, deg."""
    values = np.degrees(solution["angle"].sel(joint=f"{side}_knee", dof="flexion").values)
    return np.asarray(values[np.isfinite(values)])


def check_units_and_uncertainty(solution: xr.Dataset) -> None:
    """SI units, proper rotations, known where determined and blank elsewhere."""
    units = {
        name: solution[name].attrs["units"] for name in ("position", "angle", "joint_travel", "artifact")
    }
    assert units == {"position": "m", "angle": "rad", "joint_travel": "m", "artifact": "m"}
    rotation = solution["rotation"].values
    known = np.isfinite(rotation).all(axis=(2, 3))
    assert np.array_equal(known, np.isfinite(solution["position"].values).all(axis=2))
    assert known.any(axis=0).all()
    np.testing.assert_allclose(np.linalg.det(rotation[known]), 1.0, atol=1e-9)
    sd = np.sqrt(np.einsum("...xx->...x", solution["pose_covariance"].values))
    assert np.array_equal(np.isfinite(sd).all(axis=2), known)
    assert (sd[known] > 0).all()
    assert np.abs(solution["position"].values[known]).max() < 10.0


ESTIMATORS = ("rigid", "linked")


@pytest.mark.parametrize("estimator", ESTIMATORS)
@pytest.mark.parametrize("name", ["treadmill-run", "skin-walk"])
def test_running(tmp_path: Path, name: str, estimator: str) -> None:
    """Knees of a runner: nearly straight before contact, over 85° in swing, never past 130°.

    Common practice, no source; the same bounds for both sides, so a side turned round would be seen.
    """
    study = sta.read_study(write_study_of(tmp_path, name))
    solution = sta.solve(study.trial("R01", "run"), estimator=estimator)
    check_units_and_uncertainty(solution)
    assert solution.attrs["observability"] == ""
    assert solution.attrs["reference_notes"] == ""
    for side in ("right", "left"):
        bent = flexion(solution, side)
        assert bent.size == solution.sizes["time"]
        assert -5.0 < bent.min() < 25.0
        assert 85.0 < bent.max() < 130.0
        own = solution.sel(joint=f"{side}_knee")
        # Malleoli stand turned outwards against the condyles by 10–40° on both sides (tibial torsion).
        assert -40.0 < np.degrees(float(own["angle"].sel(dof="internal_rotation").median())) < -10.0
        assert abs(np.degrees(float(own["angle"].sel(dof="adduction").median()))) < 10.0


def test_the_linked_fit_holds_the_knee_together(tmp_path: Path) -> None:
    """Travel of the knee centre is what the joint term holds; the rigid fit leaves it to the skin."""
    study = sta.read_study(write_study_of(tmp_path, "skin-walk"))
    trial = study.trial("R01", "run")
    travel = {
        estimator: float(np.sqrt((sta.solve(trial, estimator=estimator)["joint_travel"] ** 2).mean()))
        for estimator in ESTIMATORS
    }
    assert travel["linked"] < 0.7 * travel["rigid"]
    assert travel["rigid"] < 0.02


def test_trials_with_other_markers_fail_by_name_and_the_run_is_kept(tmp_path: Path) -> None:
    write_study_of(tmp_path, "skin-walk")
    before = contents(DATA / "skin-walk")
    done = run(tmp_path, "solve", "study.toml", "--out", "solved", "--estimator", "linked")
    assert done.status == 3
    lines = done.err.splitlines()
    assert [re.search(r"walk_\d", line).group() for line in lines] == ["walk_1", "walk_2", "walk_3"]  # type: ignore[union-attr]
    assert all(": not among the " in line and ", marker RTH1" in line for line in lines)
    written = {path.name for path in (tmp_path / "solved" / "R01").iterdir()}
    assert written == {"run.solution.nc", "run.angles.csv", "run.c3d"}
    assert contents(DATA / "skin-walk") == before


Walks = dict[str, tuple[Run, dict[str, xr.Dataset]]]


@pytest.fixture(scope="module")
def walks(tmp_path_factory: pytest.TempPathFactory) -> Walks:
    """The five walks with gaps, solved with each estimator."""
    folder = tmp_path_factory.mktemp("walks")
    study = write_study_of(folder, "gappy-walk")
    result = {}
    for estimator in ESTIMATORS:
        done = solve_study(study, folder / estimator, estimator=estimator)
        solutions = {}
        for name in ARCHIVES["gappy-walk"].trials:
            path = folder / estimator / "R01" / f"{name}.solution.nc"
            with xr.open_dataset(path, engine="h5netcdf") as file:
                solutions[name] = file.load()
        result[estimator] = (done, solutions)
    return result


@pytest.mark.parametrize("estimator", ESTIMATORS)
def test_walking_with_gaps(walks: Walks, estimator: str) -> None:
    """Knees of a walker: about straight in stance, 45–75° in swing (common practice, no source).

    Judged on the 2nd and 98th percentile: at the edge of the volume three markers are little.
    """
    done, solutions = walks[estimator]
    assert done.failed == []
    for solution in solutions.values():
        check_units_and_uncertainty(solution)
        assert str(solution.attrs["stop_reason"])
        for side in ("right", "left"):
            low, high = np.percentile(flexion(solution, side), [2, 98])
            assert -20.0 < low < 10.0
            assert 45.0 < high < 75.0


@pytest.mark.parametrize("estimator", ESTIMATORS)
def test_a_gap_is_blank_and_told_in_words(walks: Walks, estimator: str) -> None:
    _, solutions = walks[estimator]
    for solution in solutions.values():
        segments = solution["marker_segment"].values
        seen = solution["marker_seen"].values.astype(bool)
        known = np.isfinite(solution["position"].values).all(axis=2)
        told: dict[str, int] = {}
        pattern = r"(\w+): not determined in (\d+) of (\d+) frames, ([^;]+)"
        for segment, frames, total, words in re.findall(pattern, solution.attrs["observability"]):
            assert int(total) == solution.sizes["time"]
            assert words.strip()
            told[segment] = told.get(segment, 0) + int(frames)
        for index, segment in enumerate(str(name) for name in solution["segment"].values):
            count = seen[:, segments == segment].sum(axis=1)
            assert not known[count == 0, index].any()
            if estimator == "rigid":
                assert not known[count < 3, index].any()
            assert told.get(segment, 0) == int((~known[:, index]).sum())
            # The rest is solved but for a few frames that lie near a line or do not settle.
            assert known[count >= 3, index].mean() > 0.98


def test_the_linked_fit_solves_frames_that_one_segment_alone_cannot(
    walks: Walks,
) -> None:
    known = {
        estimator: sum(
            int(np.isfinite(solution["angle"].values).all(axis=2).sum()) for solution in solutions.values()
        )
        for estimator, (_, solutions) in walks.items()
    }
    assert known["linked"] > known["rigid"]


@pytest.mark.parametrize("estimator", ESTIMATORS)
def test_the_static_trial_that_does_not_belong_is_noticed_by_segment(walks: Walks, estimator: str) -> None:
    """The right shank's markers stand about 7 mm from where the static trial has them."""
    done, solutions = walks[estimator]
    for (name, solution), outcome in zip(solutions.items(), done.outcomes, strict=True):
        words = str(solution.attrs["reference_notes"])
        (note,) = [text for text in outcome.warnings if "marker distances differ" in text]
        assert note.startswith(f"R01, {name}: right_shank marker distances differ from the reference")
        for text in (words, note):
            assert re.findall(r"(\w+) marker distances differ", text) == ["right_shank"]
        (size,) = re.findall(r"by ([\d.]+) mm RMS", words)
        assert 6.0 < float(size) < 9.0
        assert "the reference does not belong to this trial" in words


def test_the_command_notes_the_static_trial_that_does_not_belong(tmp_path: Path) -> None:
    write_study_of(tmp_path, "gappy-walk")
    words = ("solve", "study.toml", "--out", "solved", "--estimator", "rigid", "--trials", "walk_2")
    done = run(tmp_path, *words)
    assert done.status == 0
    (note,) = done.err.splitlines()
    assert note.startswith("Note. R01, walk_2: right_shank marker distances differ from the reference by ")
    assert note.endswith("Its poses are solved but should not be trusted.")


def test_the_other_archives_give_no_warning(tmp_path: Path) -> None:
    """The warnings of this program are errors in these tests: solving without one is the check."""
    assert issubclass(StaPriorWarning, UserWarning)
    for name in ("treadmill-run", "skin-walk"):
        folder = tmp_path / name
        folder.mkdir()
        trial = sta.read_study(write_study_of(folder, name)).trial("R01", "run")
        assert sta.solve(trial, estimator="rigid").attrs["reference_notes"] == ""
