"""A folder of solutions held against the bone truth of its study."""

from __future__ import annotations

import json
import warnings
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import xarray as xr

from sta_prior.compare.average import summarise
from sta_prior.compare.scores import Score, binomial_range
from sta_prior.compare.tables import Cell, record, write_csv
from sta_prior.compare.trial import FrameSet, score_trial
from sta_prior.compare.truth import BoneTruth, bone_truth
from sta_prior.errors import InputError, MismatchError, StaPriorError, StaPriorWarning, message
from sta_prior.io.netcdf import read_dataset
from sta_prior.study import Study, Trial

SUFFIX = ".solution.nc"


@dataclass(frozen=True)
class Comparison:
    """Scores of the solutions in one folder.

    Attributes
    ----------
    directory : where the solutions are
    frames : which frames were scored
    table : one score a trial, part and component
    summary : the same, averaged over trials within a subject, then over subjects:
        levels "overall", "activity", "subject"
    notes : what the reader must know to read the numbers
    refused : why a solved trial was not compared, one message each
    invented : whether the data is invented
    """

    directory: Path
    frames: FrameSet
    table: tuple[Score, ...]
    summary: tuple[Score, ...]
    notes: tuple[str, ...]
    refused: tuple[str, ...]
    invented: bool

    def to_csv(self, path: str | Path) -> Path:
        """Write summary and trials as one table, atomically, in deg and mm; return its path."""
        write_csv(Path(path), (*self.summary, *self.table))
        return Path(path)

    def to_dict(self) -> dict[str, object]:
        """Return the comparison as plain data: units in the keys, None where there is no number."""

        def records(scores: tuple[Score, ...]) -> list[dict[str, Cell]]:
            return [{key: cell for key, cell in record(score).items() if cell != ""} for score in scores]

        return {
            "directory": str(self.directory),
            "frames": self.frames,
            "invented_data": int(self.invented),
            "summary": records(self.summary),
            "trials": records(self.table),
            "notes": list(self.notes),
            "refused": list(self.refused),
        }

    def to_json(self) -> str:
        """Return the comparison as JSON text."""
        return json.dumps(self.to_dict(), ensure_ascii=False, allow_nan=False)


def solution_paths(directory: str | Path) -> list[tuple[str, str, Path]]:
    """Find the solutions DIR/<subject>/<trial>.solution.nc.

    Returns
    -------
    (subject id, trial id, path), sorted.

    Raises
    ------
    InputError : no such folder, or no solution in it.
    """
    folder = Path(directory)
    if not folder.is_dir():
        raise InputError(message(folder, "no such folder", "Name the folder given to solve as --out."))
    found = sorted(folder.glob(f"*/*{SUFFIX}"))
    if not found:
        raise InputError(
            message(folder, f"no <subject>/<trial>{SUFFIX} in it", "Run solve with it as --out first.")
        )
    return [(path.parent.name, path.name.removesuffix(SUFFIX), path) for path in found]


def compare_solutions(directory: str | Path, study: Study, *, frames: FrameSet = "hidden") -> Comparison:
    """Hold the solutions in a folder against the study's bone truth.

    Parameters
    ----------
    directory : with <subject>/<trial>.solution.nc
    study : that the trials were solved from
    frames : "hidden" scores only frames whose own bone truth did not inform the
        prior in use; "informed" the others; "all" both

    Returns
    -------
    Comparison. A solved trial that cannot be compared stands in ``refused`` (and
    is warned of), unless the study simply has no bone truth for it.

    Raises
    ------
    InputError : no solution in the folder, or none that can be compared.

    Notes
    -----
    Truth frames are matched to solution frames on the shared clock, nearest within
    half a frame; nothing is interpolated. Errors are estimate minus truth:
    log(truth⁻¹ · estimate) for pose components, along the bone's axes. Intervals
    are judged with the posterior covariance plus the declared covariance of the
    bone truth, since the truth is itself a measurement.
    """
    table: list[Score] = []
    notes: list[str] = []
    refused: list[str] = []
    without_truth: list[str] = []
    truths: list[tuple[str, BoneTruth]] = []
    informed = 0
    for subject_id, trial_id, path in solution_paths(directory):
        try:
            trial = study.trial(subject_id, trial_id)
            if not trial.has_bone:
                without_truth.append(f"{subject_id} {trial_id}")
                continue
            solution = read_dataset(path, "solution")
            _same_input(path, solution, trial)
            truth = bone_truth(trial, np.asarray(solution["time"].values, dtype=np.float64))
            scores = score_trial(solution, trial, truth, frames)
        except StaPriorError as error:
            refused.append(str(error))
            continue
        if scores:
            truths.append((f"{subject_id} {trial_id}", truth))
            table += scores
            informed += max(score.frames_informed for score in scores)
        else:
            refused.append(
                message((subject_id, trial_id), f"no {frames} frame with bone truth", _other_frames(frames))
            )
    if not table:
        nothing = [f"{name} has no bone truth in the study" for name in without_truth]
        raise InputError(
            message(Path(directory), f"no solution can be compared: {(refused + nothing)[0].rstrip('.')}")
        )
    for text in refused:
        warnings.warn(text, StaPriorWarning, stacklevel=2)
    summary = summarise(table)
    notes += _sample_notes(table, summary)
    notes += _truth_notes(truths, without_truth)
    if informed and frames == "hidden":
        notes.append(
            f"{informed} frames are left out because bone truth of that very frame informed the prior; "
            f"to score them would flatter the estimate."
        )
    return Comparison(
        directory=Path(directory),
        frames=frames,
        table=tuple(table),
        summary=summary,
        notes=tuple(notes),
        refused=tuple(refused),
        invented=study.invented,
    )


def _other_frames(frames: FrameSet) -> str:
    return "All of its bone truth informed the prior: solve with another." if frames == "hidden" else ""


def _same_input(path: Path, solution: xr.Dataset, trial: Trial) -> None:
    made_from = str(solution.attrs.get("input_digest", ""))
    now = trial.digest()
    if made_from and made_from != now:
        raise MismatchError(
            message(
                path,
                f"made from skin data {made_from[:12]}…, the study's file is {now[:12]}…",
                "Solve the trial again.",
            )
        )


def _sample_notes(table: list[Score], summary: tuple[Score, ...]) -> list[str]:
    overall = [score for score in summary if score.level == "overall"]
    subjects = max(score.subjects for score in overall)
    counted = [score for score in overall if score.unit != "1"]
    few = min(counted, key=lambda score: score.frames_effective)
    by_subject = binomial_range(subjects, 0.90)
    by_frame = binomial_range(few.frames_effective, 0.90)
    return [
        f"Frames are no independent sample: {few.part} {few.component} has {few.frames} scored frames, worth "
        f"about {few.frames_effective:.0f} by the lag-one correlation of its error. Right 90 % intervals "
        f"would cover {_percent(by_frame)} of so many, in 95 of 100 cases.",
        f"{subjects} {'subject' if subjects == 1 else 'subjects'}: a deviation that a subject keeps through "
        f"all frames is one draw a subject. Were that all, right 90 % intervals would cover "
        f"{_percent(by_subject)} of {subjects}.",
    ]


def _percent(bounds: tuple[float, float]) -> str:
    low, high = (f"{100 * bound:.0f}" for bound in bounds)
    return f"{low} %" if low == high else f"{low} to {high} %"


def _truth_notes(truths: list[tuple[str, BoneTruth]], without_truth: list[str]) -> list[str]:
    notes = []
    position = sorted({1000 * truth.sd_position for _, truth in truths})
    rotation = sorted({float(np.degrees(truth.sd_rotation)) for _, truth in truths})
    notes.append(
        f"Errors hold the bone truth's own error (SD {_between(rotation)}°, {_between(position)} mm), and "
        f"intervals are judged with its variance added."
    )
    assumed = [name for name, truth in truths if not truth.sd_declared]
    if assumed:
        notes.append(
            f"The study declares no bone_sd for {', '.join(assumed)}; the default was taken, and coverage "
            f"depends on it."
        )
    name, late = max(truths, key=lambda pair: pair[1].largest_offset)
    if late.largest_offset > 0.1 * late.step:
        notes.append(
            f"Bone-truth frames lie up to {1000 * late.largest_offset:.2g} ms from the solution frame "
            f"they are held against ({name}); fast motion turns that into error."
        )
    if without_truth:
        notes.append(f"{len(without_truth)} solved trials have no bone truth in the study.")
    return notes


def _between(values: list[float]) -> str:
    return f"{values[0]:.2g}" if len(values) == 1 else f"{values[0]:.2g} to {values[-1]:.2g}"
