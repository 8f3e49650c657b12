"""Solve the trials of a study: workers on this machine or a cluster, summary and run file.

Shell: files and labels. Conventions: docs/conventions.md; files: docs/files.md.
"""

from __future__ import annotations

import csv
import json
import os
import secrets
import warnings
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path

import joblib

from sta_prior.batch.job import Inputs, Job, Outcome, keep_inputs, read_inputs, solve_job
from sta_prior.batch.output import trial_files
from sta_prior.errors import InputError, message
from sta_prior.io.files import atomic_path, file_digest
from sta_prior.solve import CONSTANTS, DEFAULT_ESTIMATOR, ESTIMATORS, WITH_PRIOR, solve
from sta_prior.study import Study, Trial

LIBRARIES = ("numpy", "scipy", "xarray", "ezc3d")
RUN_FILES = ("summary.csv", "run.json", "report.html")


@dataclass(frozen=True)
class Run:
    """Outcomes of all trials of a run."""

    outcomes: tuple[Outcome, ...]

    @property
    def failed(self) -> list[Outcome]:
        """Trials that could not be solved."""
        return [item for item in self.outcomes if item.status == "failed"]


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
    constants: str = "bounded",
    exclude_suspects: bool = False,
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
    constants, exclude_suspects : as in `solve`
    progress : called with every outcome

    Returns
    -------
    Run, in the order of the study.

    Raises
    ------
    InputError : the inputs cannot be used at all, or every trial failed; nothing is written then.
    KeyboardInterrupt : after summary and run file of what was finished are written.
    """
    folder = Path(out)
    paths = [str(path) if path else None for path in (study_path, prior_path, personal_path)]
    if scheduler is not None or workers != 1:
        # A worker's folder is not this one's: on another machine, or kept from an earlier run.
        folder, paths = folder.absolute(), [str(Path(path).absolute()) if path else None for path in paths]
    study_name, prior_name, personal_name = paths
    inputs = read_inputs(str(study_name), prior_name, personal_name)
    chosen = inputs.study.select(subjects, trials)
    if not chosen:
        raise InputError(message(inputs.study.path, "no trial to solve", "Add [[subject.trial]]."))
    _check_folder(folder)
    _refuse_overwriting(folder, chosen, inputs.study, [path for path in paths if path])
    token = secrets.token_hex(8)
    keep_inputs(token, inputs)
    jobs = [
        Job(
            run=token,
            study=str(study_name),
            subject=trial.subject.id,
            trial=trial.id,
            out=str(folder),
            estimator=estimator,
            prior=prior_name,
            personal=personal_name,
            resume=resume,
            constants=constants,
            exclude_suspects=exclude_suspects,
        )
        for trial in chosen
    ]
    if (
        estimator not in ESTIMATORS
        or constants not in CONSTANTS
        or (estimator in WITH_PRIOR and inputs.prior is None)
    ):
        solve(chosen[0], None, estimator, constants=constants)  # says so once, not once a trial
    outcomes: list[Outcome] = []
    try:
        with _backend(scheduler) as processes, _outcomes(jobs, processes or workers) as coming:
            for outcome in coming:
                outcomes.append(outcome)
                progress(outcome)
    except KeyboardInterrupt:
        if any(item.status != "failed" for item in outcomes):
            _write_account(folder, jobs[0], outcomes, inputs, len(jobs))
        raise
    run = Run(tuple(outcomes))
    if len(run.failed) == len(outcomes):
        first = run.failed[0]
        more = f" {len(outcomes) - 1} more trials failed too." if len(outcomes) > 1 else ""
        raise InputError(f"{first.reason}{more}")
    _write_account(folder, jobs[0], outcomes, inputs, len(jobs))
    return run


def _check_folder(folder: Path) -> None:
    """Refuse a folder that cannot hold results, before anything is solved."""
    standing = next((path for path in (folder, *folder.absolute().parents) if path.exists()), folder)
    if not standing.is_dir():
        raise InputError(message(standing, "a file, expected a folder", "Choose another --out."))
    if not os.access(standing, os.W_OK | os.X_OK):
        raise InputError(message(standing, "nothing can be written in this folder", "Choose another --out."))


def _refuse_overwriting(folder: Path, chosen: list[Trial], study: Study, paths: list[str]) -> None:
    """Refuse a folder where a result would take the place of an input."""
    inputs = {Path(path).resolve() for path in paths} | {study.lab.path.resolve()}
    for subject in study.subjects:
        named = [subject.static_path, subject.bone_static_path, subject.reference_points_path]
        named += [trial.skin_path for trial in subject.trials]
        named += [trial.bone_source.path for trial in subject.trials if trial.bone_source is not None]
        inputs |= {path.resolve() for path in named if path is not None}
    targets = [folder / name for name in RUN_FILES]
    targets += [path for trial in chosen for path in trial_files(folder, trial.subject.id, trial.id)]
    for target in targets:
        if target.resolve() in inputs:
            wrong = "an input of the study, a result would take its place"
            raise InputError(message(target, wrong, "Choose another --out."))


@contextmanager
def _outcomes(jobs: list[Job], processes: int) -> Iterator[Iterator[Outcome]]:
    """Outcomes as they come, in the order of the jobs; jobs that nobody waits for any more are dropped."""
    parallel = joblib.Parallel(n_jobs=processes, return_as="generator")
    coming = parallel(joblib.delayed(solve_job)(job) for job in jobs)
    try:
        yield coming
    finally:
        with warnings.catch_warnings():
            # Of dropped jobs the account of the run tells, and the user dropped them.
            warnings.simplefilter("ignore", UserWarning)
            coming.close()


@contextmanager
def _backend(scheduler: str | None) -> Iterator[int | None]:
    """Send jobs to a scheduler where one is named; yields how many processes that needs, None for ours."""
    if scheduler is None:
        yield None
        return
    try:
        from dask.distributed import Client
    except ModuleNotFoundError as error:
        raise InputError(
            message("--scheduler", "dask.distributed is not installed", 'Install "sta-prior[cluster]".')
        ) from error
    try:
        client = Client(scheduler, timeout="10s")
    except (OSError, TimeoutError, ValueError) as error:
        wrong = f"no scheduler answers at {scheduler} ({type(error).__name__})"
        raise InputError(message("--scheduler", wrong, "Start one, or leave it out.")) from error
    with client, joblib.parallel_config(backend="dask", client=client):
        yield -1


def _write_account(folder: Path, job: Job, outcomes: Sequence[Outcome], inputs: Inputs, jobs: int) -> None:
    """Write summary.csv and run.json."""
    names = [name for name in Outcome.__dataclass_fields__ if name != "warnings"]
    with (
        atomic_path(folder / "summary.csv") as temporary,
        temporary.open("w", newline="", encoding="utf-8") as file,
    ):
        writer = csv.writer(file)
        writer.writerow([*names, "warnings"])
        for item in outcomes:
            writer.writerow([*(getattr(item, name) for name in names), " | ".join(item.warnings)])
    record = {
        "program": {"sta_prior": version("sta-prior"), **{name: version(name) for name in LIBRARIES}},
        "finished": datetime.now(UTC).isoformat(timespec="seconds"),
        "interrupted": len(outcomes) < jobs,
        "trials_chosen": jobs,
        "study": Path(job.study).name,
        "study_digest": file_digest(job.study),
        "estimator": job.estimator,
        "options": job.options,
        "prior": Path(job.prior).name if job.prior else "",
        "prior_digest": inputs.prior_digest,
        "prior_notes": list(inputs.prior.notes) if inputs.prior is not None else [],
        "personal": Path(job.personal).name if job.personal else "",
        "personal_digest": inputs.personal_digest,
        "trials": [asdict(item) for item in outcomes],
    }
    with atomic_path(folder / "run.json") as temporary:
        temporary.write_text(json.dumps(record, indent=1, ensure_ascii=False), encoding="utf-8")
