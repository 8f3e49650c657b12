"""Solve one trial of many, in whatever process.

Shell: files and labels. Conventions: docs/conventions.md. Every trial is independent; one that
fails never stops the rest.
"""

from __future__ import annotations

import json
import warnings
from collections.abc import Mapping
from dataclasses import dataclass, replace
from importlib.metadata import version
from pathlib import Path

import numpy as np
import xarray as xr

from sta_prior.batch.output import trial_files, write_trial
from sta_prior.errors import InputError, StaPriorError, StaPriorWarning, message
from sta_prior.io.files import file_digest
from sta_prior.io.netcdf import dataset_digest, read_dataset
from sta_prior.prior import Prior, load_prior
from sta_prior.solve import solve
from sta_prior.study import Study, Subject, Trial, read_study


@dataclass(frozen=True)
class Job:
    """One trial to solve, told by paths and names only, so that a worker can take it.

    run : differs from run to run, so that a worker reads the inputs once a run.
    """

    run: str
    study: str
    subject: str
    trial: str
    out: str
    estimator: str
    prior: str | None
    personal: str | None
    resume: bool
    constants: str = "bounded"
    exclude_suspects: bool = False

    @property
    def options(self) -> str:
        """Choices that a solution depends on beside its inputs and the estimator."""
        words = [f"constants {self.constants}"] if self.constants != "bounded" else []
        return ", ".join([*words, *(["suspects excluded"] if self.exclude_suspects else [])])


@dataclass(frozen=True)
class Outcome:
    """What became of a trial: status "solved", "kept" (resumed) or "failed", and words."""

    subject: str
    trial: str
    activity: str
    status: str
    reason: str = ""
    warnings: tuple[str, ...] = ()
    frames: int = 0
    frames_undetermined: int = 0
    frames_informed: int = 0
    estimator: str = ""
    iterations: int = 0
    stop_reason: str = ""
    seconds: float = 0.0
    observability: str = ""
    suspects: str = ""
    input_digest: str = ""


@dataclass(frozen=True)
class Inputs:
    """What all trials of a run share, read once a process."""

    study: Study
    prior: Prior | None
    personal: xr.Dataset | None
    prior_digest: str
    personal_digest: str


def solution_path(out: Path, subject: str, trial: str) -> Path:
    """Where a trial's solution lies."""
    return trial_files(out, subject, trial)[0]


def read_inputs(study: str, prior: str | None, personal: str | None) -> Inputs:
    """Read study, prior and personal pairs; InputError for one that cannot be used."""
    loaded = load_prior(prior) if prior else None
    paired = read_dataset(personal, "pairs") if personal else None
    return Inputs(
        read_study(study),
        loaded,
        paired,
        loaded.digest if loaded is not None else "",
        dataset_digest(paired) if paired is not None else "",
    )


_kept: dict[str, Inputs] = {}


def keep_inputs(run: str, inputs: Inputs) -> None:
    """Keep the inputs of a run for its jobs in this process; those of an earlier run are let go."""
    _kept.clear()
    _kept[run] = inputs


def inputs_of(job: Job) -> Inputs:
    """Return the inputs of a job's run, read in this process when its first job comes."""
    if job.run not in _kept:
        keep_inputs(job.run, read_inputs(job.study, job.prior, job.personal))
    return _kept[job.run]


def solve_job(job: Job) -> Outcome:
    """Solve one trial and write its files; never raises what a bad trial can cause."""
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always", StaPriorWarning)
        try:
            outcome = _solve_and_write(job)
        except StaPriorError as error:
            outcome = _failure(job, str(error))
        except np.linalg.LinAlgError as error:
            wrong = f"its equations cannot be solved ({error})"
            outcome = _failure(job, message((job.subject, job.trial), wrong, "Look at its markers."))
        except OSError as error:
            wrong = f"cannot be written ({error.strerror or error})"
            outcome = _failure(
                job, message((job.out, job.subject, job.trial), wrong, "Choose another --out.")
            )
    return replace(outcome, warnings=_texts(caught))


def _failure(job: Job, reason: str) -> Outcome:
    return Outcome(job.subject, job.trial, "", "failed", reason)


def _solve_and_write(job: Job) -> Outcome:
    inputs = inputs_of(job)
    trial = inputs.study.trial(job.subject, job.trial)
    digests = {**input_digests(trial, inputs), "options": job.options}
    solution = _kept_solution(job, trial, digests) if job.resume else None
    status = "solved" if solution is None else "kept"
    if solution is None:
        solution = solve(
            trial, inputs.prior, job.estimator, inputs.personal, job.constants, job.exclude_suspects
        )
        _refuse_empty(solution, trial)
        write_trial(Path(job.out), solution, trial, digests)
    determined = np.isfinite(solution["position"].values).all(axis=(1, 2))
    return Outcome(
        subject=job.subject,
        trial=job.trial,
        activity=trial.activity,
        status=status,
        frames=int(solution.sizes["time"]),
        frames_undetermined=int((~determined).sum()),
        frames_informed=int(solution["informed"].sum()),
        estimator=str(solution.attrs["estimator"]),
        iterations=int(solution.attrs["iterations"]),
        stop_reason=str(solution.attrs["stop_reason"]),
        seconds=float(solution.attrs["seconds"]),
        observability=str(solution.attrs["observability"]),
        suspects=str(solution.attrs["suspects"]),
        input_digest=digests["skin"],
    )


def _texts(caught: list[warnings.WarningMessage]) -> tuple[str, ...]:
    texts = [str(item.message) for item in caught if issubclass(item.category, StaPriorWarning)]
    return tuple(dict.fromkeys(texts))


def input_digests(trial: Trial, inputs: Inputs) -> dict[str, str]:
    """SHA-256 of everything that the solution of a trial depends on, by name."""
    subject = trial.subject
    return {
        "skin": trial.digest(),
        "lab": file_digest(subject.lab.path),
        "side": subject.side or "",
        "reference": "+".join(file_digest(path) for path in _reference_files(subject)),
        "prior": inputs.prior_digest,
        "personal": inputs.personal_digest,
    }


def _reference_files(subject: Subject) -> list[Path]:
    """Files of the reference posture, and bone truth of the trial that serves as static trial."""
    named = [subject.static_path, subject.reference_points_path, subject.bone_static_path]
    if subject.bone_static_path is None:
        named += [
            trial.bone_source.path
            for trial in subject.trials
            if trial.skin_path == subject.static_path and trial.bone_source is not None
        ]
    return [path for path in named if path is not None]


def _kept_solution(job: Job, trial: Trial, digests: Mapping[str, str]) -> xr.Dataset | None:
    """An earlier solution of the very same input by the same program, whole; None where there is none."""
    solution, angles, copy = trial_files(Path(job.out), job.subject, job.trial)
    wanted = [solution, angles, *([copy] if trial.skin_path.suffix.lower() == ".c3d" else [])]
    if not all(path.is_file() for path in wanted):
        return None
    try:
        data = read_dataset(solution, "solution")
        same = json.loads(str(data.attrs.get("input_digests", ""))) == digests
    except (InputError, json.JSONDecodeError):
        return None
    same = same and data.attrs.get("estimator") == job.estimator
    return data if same and data.attrs.get("created_by") == f"sta_prior {version('sta-prior')}" else None


def _refuse_empty(solution: xr.Dataset, trial: Trial) -> None:
    """A trial of which nothing is determined is a failure, not a file of blanks."""
    if np.isfinite(solution["position"].values).all(axis=2).any():
        return
    words = str(solution.attrs["observability"]) or str(solution.attrs["stop_reason"])
    wrong = f"no pose is determined in any frame: {words}"
    raise InputError(message((trial.subject.id, trial.id), wrong, "Fill its gaps or leave it out."))
