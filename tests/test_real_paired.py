"""The whole chain of commands on open paired data: pins and fluoroscopy, one or two subjects a laboratory.

Data: the open sample of Cereatti et al. (2017), J Biomech 62:5–13, doi 10.1016/j.jbiomech.2017.02.004. It
is not part of this repository. Bone truth is given to the program in every other eighth of a trial; scored
are the frames of the other eighths alone. One subject a laboratory: this shows transfer within a subject,
not between subjects.
"""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr
from made_laboratory import Done, contents, run

DATA = Path(__file__).parents[2] / "shared" / "data" / "paired"
BONE_NOISE_DEG = 0.7  # declared in the study files
# Of the rigid fit's rotation error, what may be left. Throwaway prototypes on the same windows left 0.1–0.3
# at the thigh and 0.2–0.7 at the shank; these bounds stand well above them.
THIGH_RATIO, SHANK_RATIO = 0.6, 0.8

Key = tuple[str, str, str]


@dataclass(frozen=True)
class Chain:
    """What the commands said and left on one laboratory's data."""

    folder: Path
    pair: Done
    learn: Done
    solve: Done
    compare: dict[str, Any]

    def score(self, subject: str, trial: str, part: str, component: str) -> dict[str, Any]:
        """One row of the comparison."""
        (row,) = [
            row
            for row in self.compare["trials"]
            if (row["subject"], row["trial"], row["part"], row["component"])
            == (subject, trial, part, component)
        ]
        return dict(row)

    def coverage(self, subject: str, trial: str, part: str) -> float:
        """Share of hidden frames inside the 90 % interval, mean over rx, ry and rz, percent."""
        return float(
            np.mean(
                [
                    self.score(subject, trial, part, component)["coverage_90_percent"]
                    for component in ("rx", "ry", "rz")
                ]
            )
        )


@pytest.fixture(scope="module")
def chain(tmp_path_factory: pytest.TempPathFactory) -> Callable[[str], Chain]:
    """Run the chain on a laboratory's data, once each."""
    done: dict[str, Chain] = {}

    def chain_of(name: str) -> Chain:
        source = DATA / name
        if not (source / "study.toml").is_file():
            pytest.skip(f"no data: {source.relative_to(DATA.parents[2])}")
        if name not in done:
            done[name] = _run_chain(source, tmp_path_factory.mktemp(name))
        return done[name]

    return chain_of


def _run_chain(source: Path, folder: Path) -> Chain:
    study = source / "study.toml"
    before = contents(source)
    pair = run(folder, "pair", study, "--out", "pairs.nc", "--json")
    learn = run(folder, "learn", "pairs.nc", "--out", "prior.nc", "--json")
    words = ("--prior", "prior.nc", "--personal", "pairs.nc", "--estimator", "frame-map", "--out", "solved")
    solve = run(folder, "solve", study, *words)
    compare = run(folder, "compare", "solved", source / "truth.toml", "--json")
    assert (learn.status, solve.status, compare.status) == (0, 0, 0)
    assert contents(source) == before
    return Chain(folder, pair, learn, solve, json.loads(compare.out))


REFUSED = {
    "pins-able": [("R01", "cutting", "cluster keeps its shape but sits ")],
    "fluoro-able": [("R02", "stepUp", "marker distances differ from the reference by ")],
    "fluoro-prosthesis": [("R01", "sit2stand", "marker distances differ from the reference by ")],
    "cadaver-pins": [],
}


@pytest.mark.parametrize("name", REFUSED)
def test_trials_whose_reference_does_not_belong_are_refused_by_name(
    chain: Callable[[str], Chain], name: str
) -> None:
    done = chain(name).pair
    assert done.status == (3 if REFUSED[name] else 0)
    refused = json.loads(done.out)["refused"]
    assert [(item["subject"], item["trial"]) for item in refused] == [(s, t) for s, t, _ in REFUSED[name]]
    for (subject, trial, words), item in zip(REFUSED[name], refused, strict=True):
        assert words in item["reason"]
        assert f"{subject}, {trial}: " in done.err


def test_paired_displacement_has_the_size_of_skin(chain: Callable[[str], Chain]) -> None:
    """A few mm to a few cm, as measured with pins by others (Leardini et al. 2005, from memory)."""
    for name in REFUSED:
        with xr.open_dataset(chain(name).folder / "pairs.nc", engine="h5netcdf") as pairs:
            assert float(pairs["displacement_rms"].min()) > 0.001
            assert float(pairs["displacement_peak"].max()) < 0.06
            assert np.nanmax(np.abs(pairs["clock_lag"].values)) == 0.0


def test_a_prior_of_one_person_says_so(chain: Callable[[str], Chain]) -> None:
    for name, personal in (("pins-able", True), ("fluoro-able", False)):
        summary = json.loads(chain(name).learn.out)
        assert summary["personal"] is personal
        assert summary["notes"]


def test_a_trial_that_does_not_belong_is_solved_with_a_warning(chain: Callable[[str], Chain]) -> None:
    done = chain("fluoro-able")
    for segment in ("thigh", "shank"):
        assert f"Note. R02, stepUp: {segment} marker distances differ" in done.solve.err
    assert "R02, walking" not in done.solve.err
    path = done.folder / "solved" / "R02" / "stepUp.solution.nc"
    with xr.open_dataset(path, engine="h5netcdf") as solution:
        assert "the reference does not belong to this trial" in solution.attrs["reference_notes"]


def test_only_hidden_frames_are_scored(chain: Callable[[str], Chain]) -> None:
    for name in REFUSED:
        done = chain(name)
        assert done.compare["frames"] == "hidden"
        for subject, trial, part in SCORED.get(name, ()):
            path = done.folder / "solved" / subject / f"{trial}.solution.nc"
            with xr.open_dataset(path, engine="h5netcdf") as solution:
                informed = int(solution["informed"].sum())
                frames = int(solution.sizes["time"])
            row = done.score(subject, trial, part, "rotation")
            assert row["frames_informed_left_out"] == informed > 0
            assert row["frames"] <= frames - informed
            assert row["frames"] > 0.3 * frames


SCORED: dict[str, tuple[Key, ...]] = {
    "pins-able": tuple(
        ("R01", trial, part) for trial in ("hopping", "walking") for part in ("thigh", "shank")
    ),
    "fluoro-able": tuple(
        (subject, trial, part)
        for subject, trial in (("R01", "kneeFlex"), ("R02", "sit2stand"))
        for part in ("thigh", "shank")
    ),
    "cadaver-pins": (("R01", "hipKneeFlex", "thigh"), ("R01", "hipKneeFlex", "shank")),
}
ALL_SCORED = [(name, *key) for name, keys in SCORED.items() for key in keys]


@pytest.mark.parametrize(("name", "subject", "trial", "part"), ALL_SCORED)
def test_own_paired_frames_cut_the_rotation_error_of_the_rigid_fit(
    chain: Callable[[str], Chain], name: str, subject: str, trial: str, part: str
) -> None:
    row = chain(name).score(subject, trial, part, "rotation")
    if row["rigid_rms_deg"] < BONE_NOISE_DEG:
        # The rigid fit is already better than the bone truth is known: the cadaver's shank.
        assert (name, part) == ("cadaver-pins", "shank")
        assert row["rms_deg"] < BONE_NOISE_DEG
        return
    assert row["ratio_to_rigid"] <= {"thigh": THIGH_RATIO, "shank": SHANK_RATIO}[part], row


@pytest.mark.parametrize(("name", "subject", "trial", "part"), ALL_SCORED)
def test_the_intervals_hold_the_hidden_bone_truth(
    chain: Callable[[str], Chain], name: str, subject: str, trial: str, part: str
) -> None:
    """At least 85 % of hidden frames inside the 90 % intervals, mean over the components of rotation."""
    assert chain(name).coverage(subject, trial, part) >= 85.0


def test_walking_under_the_fluoroscope_gains_although_its_intervals_are_too_narrow(
    chain: Callable[[str], Chain],
) -> None:
    """R02 walking: 36 hidden frames of one trial, worth two or three independent ones; thigh coverage is
    about 80 %. With so few, 90 % intervals that are right cover 33–100 % (comparison's own note)."""
    done = chain("fluoro-able")
    assert done.score("R02", "walking", "thigh", "rotation")["ratio_to_rigid"] <= THIGH_RATIO
    assert done.score("R02", "walking", "shank", "rotation")["ratio_to_rigid"] <= SHANK_RATIO
    assert done.coverage("R02", "walking", "shank") >= 85.0
    assert any("Frames are no independent sample" in note for note in done.compare["notes"])


def test_an_implant_seen_in_seven_frames_gains_too(chain: Callable[[str], Chain]) -> None:
    """Seven or eight paired frames a trial at 6 Hz are too few for coverage; the error still falls."""
    done = chain("fluoro-prosthesis")
    for trial in ("kneeAgainstGravity", "stepUp"):
        for part in ("thigh", "shank"):
            assert done.score("R01", trial, part, "rotation")["ratio_to_rigid"] < 1.0
