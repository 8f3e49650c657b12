"""The command line: arguments, exit status, what is printed. No numerics.

Exit status: 0 all done; 2 bad input, nothing written; 3 some trials failed, the others written;
130 interrupted, what was finished is kept. Conventions: docs/conventions.md.
"""

from __future__ import annotations

import os
import sys
from io import TextIOWrapper
from pathlib import Path
from typing import Annotated

import typer
from rich.console import Console

from sta_prior import words
from sta_prior.errors import StaPriorError, message
from sta_prior.prior import DEFAULT_FAMILY, known_families
from sta_prior.prior.inputs import INPUTS
from sta_prior.screen import Screen, check_target, warnings_as_notes
from sta_prior.solve import CONSTANTS, DEFAULT_ESTIMATOR, ESTIMATORS

app = typer.Typer(
    name="sta-prior",
    help="Compensate soft-tissue artifact in marker data with priors learned from imaged subjects. "
    "For research; not for clinical decisions.",
    add_completion=False,
    no_args_is_help=True,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)

OK, BAD_INPUT, SOME_FAILED, INTERRUPTED = 0, 2, 3, 130

Quiet = Annotated[bool, typer.Option("--quiet", help="Print nothing but errors.")]
Json = Annotated[bool, typer.Option("--json", help="Print a machine-readable summary alone on stdout.")]
Subjects = Annotated[str, typer.Option("--subjects", metavar="ID,…", help="Only these subjects.")]
Trials = Annotated[str, typer.Option("--trials", metavar="ID,…", help="Only these trials.")]


def _ids(text: str) -> list[str] | None:
    names = [name.strip() for name in text.split(",") if name.strip()]
    return names or None


@app.command()
def pair(
    study: Annotated[Path, typer.Argument(metavar="STUDY.toml", help="Study file.")],
    out: Annotated[Path, typer.Option("--out", metavar="PAIRS.nc", help="File to write.")],
    subjects: Subjects = "",
    trials: Trials = "",
    quiet: Quiet = False,
    as_json: Json = False,
) -> None:
    """Pair skin markers with bone truth: displacement in the bone frame, with quality figures.

    Trials whose reference does not belong to them are named and left out (exit status 3).

    Example:  sta-prior pair study.toml --out pairs.nc
    """
    from sta_prior.io.netcdf import write_dataset
    from sta_prior.pairs import input_digests, pair_with_report
    from sta_prior.study import read_study

    screen = Screen(quiet, as_json)
    with warnings_as_notes(screen):
        loaded = read_study(study)
        check_target(out, study, loaded.lab.path)
        data, report = pair_with_report(loaded, _ids(subjects), _ids(trials))
        write_dataset(out, data, "pairs", input_digests(data))
    for line in report.lines():
        screen.err.print(line, markup=False)
    summary = words.pairs_summary(data, report.refused, out)
    screen.finish(summary, words.pairs_table(data), f"Wrote {out}")
    raise typer.Exit(SOME_FAILED if report.refused else OK)


@app.command()
def learn(
    pairs: Annotated[Path, typer.Argument(metavar="PAIRS.nc", help="Paired data.")],
    out: Annotated[Path, typer.Option("--out", metavar="PRIOR.nc", help="File to write.")],
    family: Annotated[
        str, typer.Option("--family", metavar="NAME", help=f"One of: {', '.join(known_families())}.")
    ] = (DEFAULT_FAMILY),
    hold_out: Annotated[
        str, typer.Option("--hold-out", metavar="ID,…", help="Subjects not to learn from.")
    ] = "",
    inputs: Annotated[
        str,
        typer.Option(
            "--inputs",
            metavar="NAME,…",
            help=f"What may drive the artifact beside flexion: {', '.join(INPUTS)}.",
        ),
    ] = "",
    quiet: Quiet = False,
    as_json: Json = False,
) -> None:
    """Learn an artifact prior and validate it on subjects left out.

    With one subject it is a personal prior: it holds for that subject only.

    Example:  sta-prior learn pairs.nc --out prior.nc
    """
    from sta_prior.io.netcdf import read_dataset
    from sta_prior.prior import learn as learn_prior

    screen = Screen(quiet, as_json)
    with warnings_as_notes(screen):
        check_target(out, pairs)
        prior = learn_prior(read_dataset(pairs, "pairs"), family, _ids(hold_out) or (), _ids(inputs) or ())
        prior.save(out)
    screen.finish(words.prior_summary(prior, out), *words.prior_lines(prior), f"Wrote {out}")


@app.command()
def check(
    prior_file: Annotated[Path, typer.Argument(metavar="PRIOR.nc", help="Prior.")],
    pairs: Annotated[
        Path | None,
        typer.Option("--pairs", metavar="PAIRS.nc", help="Test it on these paired data of other subjects."),
    ] = None,
    quiet: Quiet = False,
    as_json: Json = False,
) -> None:
    """Print what a prior is made of and how well it predicted subjects left out.

    Example:  sta-prior check prior.nc
    """
    from sta_prior.io.netcdf import read_dataset
    from sta_prior.prior import examine, load_prior

    screen = Screen(quiet, as_json)
    with warnings_as_notes(screen):
        prior = load_prior(prior_file)
        found = examine(prior, read_dataset(pairs, "pairs")) if pairs else None
    screen.finish(words.prior_summary(prior, prior_file, found), *words.prior_lines(prior, found))


@app.command()
def solve(
    study: Annotated[Path, typer.Argument(metavar="STUDY.toml", help="Study file.")],
    out: Annotated[Path, typer.Option("--out", metavar="DIR", help="Folder of the results.")],
    prior: Annotated[
        Path | None,
        typer.Option("--prior", metavar="PRIOR.nc", help="Prior; rigid and linked work without."),
    ] = None,
    estimator: Annotated[
        str, typer.Option("--estimator", metavar="NAME", help=f"One of: {', '.join(ESTIMATORS)}.")
    ] = DEFAULT_ESTIMATOR,
    subjects: Subjects = "",
    trials: Trials = "",
    personal: Annotated[
        Path | None,
        typer.Option("--personal", metavar="PAIRS.nc", help="Paired frames of the subjects themselves."),
    ] = None,
    workers: Annotated[int, typer.Option("--workers", min=1, help="Processes on this machine.")] = 1,
    scheduler: Annotated[
        str | None, typer.Option("--scheduler", metavar="ADDRESS", help="dask.distributed scheduler.")
    ] = None,
    resume: Annotated[bool, typer.Option("--resume", help="Keep solutions of the very same input.")] = False,
    exclude_suspects: Annotated[
        bool, typer.Option("--exclude-suspects", help="Solve without markers that do not fit the prior.")
    ] = False,
    constants: Annotated[
        str,
        typer.Option(
            "--constants",
            metavar="NAME",
            help="What the smoother learns of the subject from the trial itself. "
            f"One of: {', '.join(CONSTANTS)}.",
        ),
    ] = "bounded",
    quiet: Quiet = False,
    as_json: Json = False,
) -> None:
    """Solve every skin trial: bone poses and joint angles with posterior uncertainty.

    Bone truth in the study, if any, is never read here.

    Example:  sta-prior solve study.toml --prior prior.nc --out solved
    """
    from sta_prior.batch import Outcome, solve_study
    from sta_prior.report import build_report
    from sta_prior.study import read_study

    screen = Screen(quiet, as_json)
    with warnings_as_notes(screen):
        chosen = read_study(study).select(_ids(subjects), _ids(trials))
        with screen.bar(len(chosen), "solving") as advance:

            def progress(outcome: Outcome) -> None:
                advance()
                for text in outcome.warnings:
                    screen.note(f"Note. {text}")

            run = solve_study(
                study,
                out,
                prior,
                estimator,
                _ids(subjects),
                _ids(trials),
                personal,
                workers,
                scheduler,
                resume,
                constants,
                exclude_suspects,
                progress,
            )
        page = build_report(out)
    for item in run.failed:
        screen.err.print(f"Failed. {item.reason}", markup=False)
    screen.finish(words.run_summary(run, out, page), words.run_table(run), f"Wrote {out}; report: {page}")
    raise typer.Exit(SOME_FAILED if run.failed else OK)


@app.command()
def compare(
    directory: Annotated[Path, typer.Argument(metavar="DIR", help="Folder of solutions.")],
    study: Annotated[Path, typer.Argument(metavar="STUDY.toml", help="Study file with bone truth.")],
    out: Annotated[
        Path | None,
        typer.Option("--out", metavar="FILE.csv", help="Table to write; by default DIR/compare.csv."),
    ] = None,
    quiet: Quiet = False,
    as_json: Json = False,
) -> None:
    """Hold solutions against bone truth: error, constant offset apart from tracking, coverage.

    Frames whose bone truth informed the prior are counted but not scored.

    Example:  sta-prior compare solved truth.toml --out errors.csv
    """
    from sta_prior.compare import compare_solutions, format_comparison
    from sta_prior.study import read_study

    screen = Screen(quiet, as_json)
    with warnings_as_notes(screen):
        loaded = read_study(study)
        if out is not None:
            check_target(out, study, loaded.lab.path)
        comparison = compare_solutions(directory, loaded)
        target = comparison.to_csv(out or directory / "compare.csv")
    screen.finish(comparison.to_dict(), *format_comparison(comparison), f"Wrote {target}")
    raise typer.Exit(SOME_FAILED if comparison.refused else OK)


@app.command()
def report(
    directory: Annotated[Path, typer.Argument(metavar="DIR", help="Folder of solutions.")],
    truth: Annotated[
        Path | None,
        typer.Option(
            "--truth", metavar="STUDY.toml", help="Draw this study's bone truth beside the estimate."
        ),
    ] = None,
    quiet: Quiet = False,
    as_json: Json = False,
) -> None:
    """Build DIR/report.html again from the files in DIR.

    Example:  sta-prior report solved
    """
    from sta_prior.report import build_report
    from sta_prior.study import read_study

    screen = Screen(quiet, as_json)
    with warnings_as_notes(screen):
        page = build_report(directory, read_study(truth) if truth else None)
    screen.finish({"report": str(page)}, f"Wrote {page}")


@app.command()
def demo(
    out: Annotated[Path, typer.Option("--out", metavar="DIR", help="Folder to make.")],
    seed: Annotated[int, typer.Option("--seed", min=0, help="Seed of the invented data.")] = 1,
    workers: Annotated[int, typer.Option("--workers", min=1, help="Processes on this machine.")] = 2,
    quiet: Quiet = False,
    as_json: Json = False,
) -> None:
    """Run the whole chain on an invented study of couriers: make, pair, learn, solve, compare, report.

    Example:  sta-prior demo --out demo
    """
    from sta_prior.demo import run_demo

    screen = Screen(quiet, as_json)
    with warnings_as_notes(screen):
        result = run_demo(out, seed, workers, screen.note)
    for line in result.failures:
        screen.err.print(line, markup=False)
    screen.finish(result.summary, *result.lines, f"The report: {result.report}")
    raise typer.Exit(SOME_FAILED if result.failures else OK)


def main() -> None:
    """Run the command line and leave with the exit status of the module's docstring."""
    # One thread a process: the matrices are small, and threads only get in each other's way.
    for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"):
        os.environ.setdefault(name, "1")
    for stream in (sys.stdout, sys.stderr):
        # A terminal without ° or – must not stop a command that has done its work.
        if isinstance(stream, TextIOWrapper):
            stream.reconfigure(errors="backslashreplace")
    say = Console(stderr=True, highlight=False, soft_wrap=True)
    try:
        app()
    except StaPriorError as error:
        say.print(f"Error. {error}", markup=False)
        sys.exit(BAD_INPUT)
    except OSError as error:
        wrong = f"cannot be read or written ({error.strerror or error})"
        text = message(error.filename or "", wrong, "Check its name, its permissions and the space left.")
        say.print(f"Error. {text}", markup=False)
        sys.exit(BAD_INPUT)
    except SystemExit as end:
        # The command layer turns an interruption into this status and says nothing.
        if end.code == INTERRUPTED:
            say.print("Interrupted. What was finished is kept; solve --resume goes on from there.")
        raise
