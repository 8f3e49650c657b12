"""The demonstration: the whole chain on an invented study of couriers.

Shell. Conventions: docs/conventions.md. Every number in it is invented and labelled so.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from time import perf_counter
from typing import Any

from sta_prior import words
from sta_prior.batch import solve_study
from sta_prior.compare import compare_solutions, format_comparison
from sta_prior.io.netcdf import write_dataset
from sta_prior.pairs import input_digests, pair_with_report
from sta_prior.prior import learn
from sta_prior.report import build_report
from sta_prior.simulate import write_study
from sta_prior.study import read_study


@dataclass(frozen=True)
class DemoResult:
    """Where the report is, what to print, and trials that were left out, with the reason."""

    report: Path
    lines: list[Any]
    failures: list[str]
    summary: dict[str, Any]


def run_demo(out: str | Path, seed: int, workers: int, note: Callable[[str], None]) -> DemoResult:
    """Make the invented study and run pair, learn, solve, compare and report on it.

    Parameters
    ----------
    out : folder to make
    seed : of the invented data
    workers : processes that solve
    note : called with a line before every step
    """
    folder, started = Path(out), perf_counter()
    note("Inventing a study: nine imaged and six archived couriers, stairs, lifting and walking …")
    write_study(folder, seed)
    study = read_study(folder / "study.toml")
    note("Pairing skin markers with bone truth of the imaged couriers …")
    data, report = pair_with_report(study)
    write_dataset(folder / "pairs.nc", data, "pairs", input_digests(data))
    note("Learning a prior and validating it on couriers left out …")
    prior = learn(data)
    prior.save(folder / "prior.nc")
    imaged = set(prior.subjects)
    archived = [subject.id for subject in study.subjects if subject.id not in imaged]
    note(f"Solving the trials of {len(archived)} couriers that the prior has never seen …")
    solved = folder / "solved"
    run = solve_study(folder / "study.toml", solved, folder / "prior.nc", subjects=archived, workers=workers)
    note("Comparing with the invented bone truth, and writing the report …")
    truth = read_study(folder / "truth.toml")
    comparison = compare_solutions(solved, truth)
    comparison.to_csv(solved / "compare.csv")
    page = build_report(solved, truth)
    lines = [*words.prior_lines(prior), *format_comparison(comparison)]
    summary = {
        "report": str(page),
        "seconds": round(perf_counter() - started, 1),
        "refused": [list(item) for item in report.refused],
        "prior": words.prior_summary(prior, folder / "prior.nc"),
        "run": words.run_summary(run, solved, page),
        "comparison": comparison.to_dict(),
        "invented_data": 1,
    }
    failures = [*report.lines(), *(f"Failed. {item.reason}" for item in run.failed)]
    return DemoResult(page, lines, failures, summary)
