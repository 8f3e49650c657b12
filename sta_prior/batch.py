"""Solve many trials: workers, resuming, and what is left on disk.

Shell: files and labels. Conventions: docs/conventions.md; files: docs/files.md. Every trial is
independent; one that fails never stops the rest, and every file is written in one piece.
"""

from __future__ import annotations

import csv
import json
import warnings
from collections.abc import Callable, Sequence
from contextlib import AbstractContextManager, nullcontext
from dataclasses import asdict, dataclass, replace
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from typing import Any

import joblib
import numpy as np
import xarray as xr

from sta_prior.errors import InputError, StaPriorError, StaPriorWarning, message
from sta_prior.io.c3d import copy_with_rotations
from sta_prior.io.files import atomic_path, file_digest
from sta_prior.io.netcdf import dataset_digest, read_dataset, write_dataset
from sta_prior.prior import Prior, load_prior
from sta_prior.solve import DEFAULT_ESTIMATOR, solve
from sta_prior.study import Study, Trial, read_study

LIBRARIES = ("numpy", "scipy", "xarray", "ezc3d")


@dataclass(frozen=True)
class Job:
    """One trial to solve, told by paths and names only, so that a worker can take it."""

    study: str
    subject: str
    trial: str
    out: str
    estimator: str
    prior: str | None
    personal: str | None
    resume: bool


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
    input_digest: str = ""


@dataclass(frozen=True)
class Run:
    """Outcomes of all trials of a run."""

    outcomes: tuple[Outcome, ...]

    @property
    def failed(self) -> list[Outcome]:
        """Trials that could not be solved."""
        return [item for item in self.outcomes if item.status == "failed"]


def solution_path(out: Path, subject: str, trial: str) -> Path:
    """Where a trial's solution lies."""
    return out / subject / f"{trial}.solution.nc"


Inputs = tuple[Study, Prior | None, xr.Dataset | None]


def _loaded(study: str, prior: str | None, personal: str | None) -> Inputs:
    """Read the inputs once a process, not once a trial."""
    stamp = (study, prior, personal, *(Path(p).stat().st_mtime_ns for p in (study, prior, personal) if p))
    if _kept.get("stamp") != stamp:
        _kept["inputs"] = (
            read_study(study),
            load_prior(prior) if prior else None,
            read_dataset(personal, "pairs") if personal else None,
        )
        _kept["stamp"] = stamp
    inputs: Inputs = _kept["inputs"]
    return inputs


_kept: dict[str, Any] = {}


def solve_job(job: Job) -> Outcome:
    """Solve one trial and write its files; never raises what a bad trial can cause."""
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always", StaPriorWarning)
        try:
            outcome = _solve_and_write(job)
        except (StaPriorError, np.linalg.LinAlgError, OSError) as error:
            outcome = Outcome(job.subject, job.trial, "", "failed", str(error))
    return replace(outcome, warnings=_texts(caught))


def _solve_and_write(job: Job) -> Outcome:
    study, prior, personal = _loaded(job.study, job.prior, job.personal)
    trial = study.trial(job.subject, job.trial)
    digests = _digests(trial, prior, personal)
    path = solution_path(Path(job.out), job.subject, job.trial)
    solution = _kept_solution(path, job, digests) if job.resume else None
    status = "solved" if solution is None else "kept"
    if solution is None:
        solution = solve(trial, prior, job.estimator, personal)
        _refuse_empty(solution, trial)
        _write_trial(path, solution, trial, digests)
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
        input_digest=digests["skin"],
    )


def _texts(caught: list[warnings.WarningMessage]) -> tuple[str, ...]:
    texts = [str(item.message) for item in caught if issubclass(item.category, StaPriorWarning)]
    return tuple(dict.fromkeys(texts))


def _digests(trial: Trial, prior: Prior | None, personal: xr.Dataset | None) -> dict[str, str]:
    return {
        "skin": trial.digest(),
        "lab": file_digest(trial.subject.lab.path),
        "reference": "+".join(
            file_digest(path)
            for path in (
                trial.subject.static_path,
                trial.subject.reference_points_path,
                trial.subject.bone_static_path,
            )
            if path is not None
        ),
        "prior": prior.digest if prior is not None else "",
        "personal": dataset_digest(personal) if personal is not None else "",
    }


def _kept_solution(path: Path, job: Job, digests: dict[str, str]) -> xr.Dataset | None:
    """An earlier solution of the very same input, whole; None where there is none."""
    if not path.exists():
        return None
    try:
        data = read_dataset(path, "solution")
    except InputError:
        return None
    same = json.loads(str(data.attrs.get("input_digests", "{}"))) == digests
    return data if same and data.attrs.get("estimator") == job.estimator else None


def _refuse_empty(solution: xr.Dataset, trial: Trial) -> None:
    """A trial of which nothing is determined is a failure, not a file of blanks."""
    if np.isfinite(solution["position"].values).all(axis=2).any():
        return
    words = str(solution.attrs["observability"]) or str(solution.attrs["stop_reason"])
    raise InputError(message((trial.subject.id, trial.id), f"no pose is determined in any frame: {words}"))


def _write_trial(path: Path, solution: xr.Dataset, trial: Trial, digests: dict[str, str]) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    write_angles(path.with_name(f"{trial.id}.angles.csv"), solution)
    if trial.skin_path.suffix.lower() == ".c3d":
        poses = np.zeros((*solution["position"].shape[:2], 4, 4))
        poses[..., :3, :3] = solution["rotation"].values
        poses[..., :3, 3] = solution["position"].values
        poses[..., 3, 3] = 1.0
        poses[np.isnan(solution["position"].values).any(axis=2)] = np.nan
        labels = [str(name) for name in solution["segment"].values]
        copy_with_rotations(trial.skin_path, path.with_name(f"{trial.id}.c3d"), labels, poses)
    # The solution goes last: where it stands, its companions are whole.
    write_dataset(path, solution, "solution", digests)


def write_angles(path: Path, solution: xr.Dataset) -> None:
    """Write joint angles (deg), their SD, the rigid fit's and joint travel (mm) as CSV."""
    header, columns = ["time_s"], [solution["time"].values]
    for joint in solution["joint"].values:
        for dof in solution["dof"].values:
            for name, suffix in (("angle", ""), ("angle_sd", "_sd"), ("angle_rigid", "_rigid")):
                values = solution[name].sel(joint=joint, dof=dof).values
                if (
                    np.isfinite(values).any()
                    or np.isfinite(solution["angle"].sel(joint=joint, dof=dof)).any()
                ):
                    header.append(f"{joint}_{dof}{suffix}_deg")
                    columns.append(np.degrees(values))
        for axis in solution["axis"].values:
            for name, suffix in (("joint_travel", ""), ("joint_travel_sd", "_sd")):
                header.append(f"{joint}_travel_{axis}{suffix}_mm")
                columns.append(1000.0 * solution[name].sel(joint=joint, axis=axis).values)
    with atomic_path(path) as temporary, temporary.open("w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(header)
        for row in zip(*columns, strict=True):
            writer.writerow([f"{row[0]:.6f}", *("" if np.isnan(v) else f"{v:.4f}" for v in row[1:])])


def _write_summary(path: Path, outcomes: Sequence[Outcome]) -> None:
    names = [name for name in Outcome.__dataclass_fields__ if name != "warnings"]
    with atomic_path(path) as temporary, temporary.open("w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow([*names, "warnings"])
        for item in outcomes:
            writer.writerow([*(getattr(item, name) for name in names), " | ".join(item.warnings)])


def solve_study(
    study_path: str | Path,
    out: str | Path,
    prior_path: str | Path | None = None,
    estimator: str = DEFAULT_ESTIMATOR,
    subjects: Sequence[str] | None = None,
    trials: Sequence[str] | None = None,
    personal_path: str | Path | None = None,
    workers: int = 1,
    scheduler: str | None = None,
    resume: bool = False,
    progress: Callable[[Outcome], None] = lambda outcome: None,
) -> Run:
    """Solve every chosen trial of a study and write solutions, summary and run file.

    Parameters
    ----------
    study_path, prior_path, personal_path : files
    out : folder of the results; made where missing
    estimator, subjects, trials : as in `solve` and `Study.select`
    workers : processes on this machine
    scheduler : address of a dask.distributed scheduler instead (extra ``cluster``)
    resume : keep solutions of the very same input
    progress : called with every outcome

    Returns
    -------
    Run, in the order of the study.

    Raises
    ------
    InputError : the inputs cannot be used at all, or every trial failed; nothing is written then.
    """
    folder = Path(out)
    prior_name = str(prior_path) if prior_path else None
    personal_name = str(personal_path) if personal_path else None
    study, prior, personal = _loaded(str(study_path), prior_name, personal_name)
    chosen = study.select(subjects, trials)
    if not chosen:
        raise InputError(message(study.path, "no trial to solve"))
    if folder.exists() and not folder.is_dir():
        raise InputError(message(folder, "is a file, expected a folder", "Choose another --out."))
    jobs = [
        Job(
            study=str(study_path),
            subject=trial.subject.id,
            trial=trial.id,
            out=str(folder),
            estimator=estimator,
            prior=prior_name,
            personal=personal_name,
            resume=resume,
        )
        for trial in chosen
    ]
    if estimator == "frame-map" and prior is None:
        solve(chosen[0], None, estimator)
    outcomes = _run(jobs, workers, scheduler, progress)
    run = Run(tuple(outcomes))
    if len(run.failed) == len(outcomes):
        first = run.failed[0]
        more = f" (and {len(outcomes) - 1} more trials failed)" if len(outcomes) > 1 else ""
        raise InputError(f"{first.reason}{more}")
    _write_summary(folder / "summary.csv", outcomes)
    _write_run(folder / "run.json", jobs[0], outcomes, prior, personal)
    return run


def _run(
    jobs: list[Job], workers: int, scheduler: str | None, progress: Callable[[Outcome], None]
) -> list[Outcome]:
    outcomes = []
    with _backend(scheduler):
        parallel = joblib.Parallel(n_jobs=workers, return_as="generator")
        for outcome in parallel(joblib.delayed(solve_job)(job) for job in jobs):
            progress(outcome)
            outcomes.append(outcome)
    return outcomes


def _backend(scheduler: str | None) -> AbstractContextManager[object]:
    if scheduler is None:
        return nullcontext()
    try:
        from dask.distributed import Client
    except ModuleNotFoundError as error:
        raise InputError(
            message("--scheduler", "dask.distributed is not installed", "Install sta-prior with [cluster].")
        ) from error
    try:
        client = Client(scheduler, timeout="10s")
    except (OSError, TimeoutError, ValueError) as error:
        raise InputError(message("--scheduler", f"no scheduler answers at {scheduler} ({error})")) from error
    backend: AbstractContextManager[object] = joblib.parallel_config(backend="dask", client=client)
    return backend


def _write_run(
    path: Path, job: Job, outcomes: Sequence[Outcome], prior: Prior | None, personal: xr.Dataset | None
) -> None:
    record = {
        "program": {"sta_prior": version("sta-prior"), **{name: version(name) for name in LIBRARIES}},
        "finished": datetime.now(UTC).isoformat(timespec="seconds"),
        "study": Path(job.study).name,
        "study_digest": file_digest(job.study),
        "estimator": job.estimator,
        "prior": Path(job.prior).name if job.prior else "",
        "prior_digest": prior.digest if prior is not None else "",
        "prior_notes": list(prior.notes) if prior is not None else [],
        "personal": Path(job.personal).name if job.personal else "",
        "personal_digest": dataset_digest(personal) if personal is not None else "",
        "trials": [asdict(item) for item in outcomes],
    }
    with atomic_path(path) as temporary:
        temporary.write_text(json.dumps(record, indent=1, ensure_ascii=False), encoding="utf-8")
