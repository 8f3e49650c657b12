"""Reading a study file: every key checked, every file there, no data read.

Conventions: docs/conventions.md. The file's form: docs/files.md.
"""

from __future__ import annotations

import re
import warnings
from pathlib import Path
from typing import Any

import numpy as np

from sta_prior.checks import nearest
from sta_prior.errors import InputError, StaPriorWarning, message
from sta_prior.io.files import POINT_SUFFIXES
from sta_prior.io.text import Table, read_toml
from sta_prior.study.frames import Side
from sta_prior.study.lab import Lab, read_lab
from sta_prior.study.sources import existing_file, read_bone_source
from sta_prior.study.study import Study, Subject, Trial

STUDY_KEYS = ("lab", "title", "invented_data", "subject")
SUBJECT_KEYS = ("id", "side", "static", "bone_static", "reference_points", "trial")
TRIAL_KEYS = (
    *("id", "activity", "session", "skin", "bone", "clock", "clock_window_s", "space", "bone_sd", "cycles"),
)
ALIGNMENTS = ("shared", "estimate")
DEFAULT_CLOCK_WINDOW = 0.5  # s
# Taken where the study declares no accuracy: see the docstring of read_study.
DEFAULT_BONE_SD_MM = 0.5
DEFAULT_BONE_SD_DEG = 0.5
# Ids become file names and parts of comma-separated lists.
ID = re.compile(r"\w(?:[\w .+-]*[\w+-])?")


def read_study(path: str | Path) -> Study:
    """Read a study file and its lab file; the data files are only checked to be there.

    Parameters
    ----------
    path : TOML file

    Returns
    -------
    Study. Reading a trial or a reference posture happens when it is asked for.

    Raises
    ------
    InputError : with file and dotted place: an unknown or missing key, a value of the
        wrong kind, an id that stands twice, a file that is not there.

    Warns
    -----
    StaPriorWarning : two subjects with one skin file.

    Notes
    -----
    Where a trial with bone truth declares no `bone_sd`, 0.5 mm and 0.5° are taken (common
    practice, no source) and `bone_sd_declared` is False: declare the accuracy of your
    system in motion, which is often poorer.
    """
    top = read_toml(path)
    top.refuse_unknown(STUDY_KEYS)
    lab_path = existing_file(top, "lab", "the study", (".toml",))
    lab = read_lab(lab_path)
    invented = top.flag("invented_data", False)
    subjects = [_read_subject(table, lab, invented) for table in top.tables("subject")]
    if not subjects:
        raise InputError(
            message(top.place("subject"), "no subjects, expected at least one", "Add [[subject]].")
        )
    _refuse_repeated([subject.id for subject in subjects], top, "subject")
    _warn_shared_skin(subjects, top)
    return Study(
        lab=lab,
        subjects=tuple(subjects),
        path=Path(path),
        invented=invented,
        title=top.text("title", lab.title),
    )


def _read_subject(table: Table, lab: Lab, invented: bool) -> Subject:
    """Read one [[subject]] with its trials."""
    covariates = {
        key: table.number(key)
        for key, value in table.items()
        if key not in SUBJECT_KEYS and isinstance(value, int | float) and not isinstance(value, bool)
    }
    for key, value in table.items():
        if key not in covariates and key not in SUBJECT_KEYS:
            close = nearest(key, SUBJECT_KEYS)
            wrong = f"expected a number, as every covariate is, got {value!r}"
            do = f"Write a number, or one of the keys {', '.join(SUBJECT_KEYS)}."
            raise InputError(
                message(table.place(key), f"unknown key {key!r}" if close else wrong, close or do)
            )
    name = _read_id(table)
    whose = f"subject {name}"
    side: Side | None = table.choice("side", ("right", "left"), None)
    own_lab = lab if side is None else lab.for_side(side)
    paths: dict[str, Path | None] = {
        key: existing_file(table, key, whose, suffixes) if key in table else None
        for key, suffixes in (
            ("static", POINT_SUFFIXES),
            ("bone_static", (".csv",)),
            ("reference_points", (".csv",)),
        )
    }
    if (paths["static"] is None) == (paths["reference_points"] is None):
        wrong = "neither" if paths["static"] is None else "both"
        raise InputError(
            message(
                table.place(),
                f"expected static or reference_points, got {wrong} for {whose}",
                "A reference posture comes from one of them.",
            )
        )
    subject = Subject(
        id=name,
        side=side or (next(iter(lab.sides)) if len(lab.sides) == 1 else None),
        lab=own_lab,
        covariates=covariates,
        static_path=paths["static"],
        bone_static_path=paths["bone_static"],
        reference_points_path=paths["reference_points"],
        study_path=table.path,
        invented=invented,
    )
    trials = tuple(_read_trial(trial, subject) for trial in table.tables("trial", ()))
    _refuse_repeated([trial.id for trial in trials], table, "trial")
    # Subject and trials point at each other: the subject is made first and completed here, once.
    object.__setattr__(subject, "trials", trials)
    return subject


def _read_trial(table: Table, subject: Subject) -> Trial:
    """Read one [[subject.trial]]."""
    table.refuse_unknown(TRIAL_KEYS)
    name = _read_id(table)
    whose = f"subject {subject.id}, trial {name}"
    accuracy = table.table("bone_sd", {})
    accuracy.refuse_unknown(("mm", "deg"))
    return Trial(
        id=name,
        activity=table.text("activity"),
        session=table.text("session", ""),
        subject=subject,
        clock=table.choice("clock", ALIGNMENTS, "shared"),
        space=table.choice("space", ALIGNMENTS, "shared"),
        clock_window=table.number("clock_window_s", DEFAULT_CLOCK_WINDOW, minimum=0.0),
        bone_sd_position=accuracy.number("mm", DEFAULT_BONE_SD_MM, minimum=0.0) / 1000.0,
        bone_sd_rotation=float(np.deg2rad(accuracy.number("deg", DEFAULT_BONE_SD_DEG, minimum=0.0))),
        bone_sd_declared="mm" in accuracy and "deg" in accuracy,
        skin_path=existing_file(table, "skin", whose, POINT_SUFFIXES),
        bone_source=read_bone_source(table, subject.lab, whose),
        declared_cycles=_read_cycles(table),
    )


def _read_id(table: Table) -> str:
    """Read an id that can be a file name and stand in a comma-separated list."""
    name: str = table.text("id")
    if not ID.fullmatch(name):
        raise InputError(
            message(
                table.place("id"),
                f"{name!r} cannot be an id, expected letters, digits, - _ + . and single blanks inside",
                "Ids become file names.",
            )
        )
    return name


def _read_cycles(table: Table) -> tuple[tuple[float, float], ...] | None:
    """Read cycles = [[start, end], …]."""
    if "cycles" not in table:
        return None
    written: Any = table["cycles"]
    if not isinstance(written, list):
        raise InputError(
            message(table.place("cycles"), "expected a list of [start, end]", "Write [[0.42, 1.51], …].")
        )
    cycles = []
    for number, pair in enumerate(written, start=1):
        key = f"cycles[{number}]"
        values = Table({key: pair}, table.path, table.dotted).numbers(key)
        if len(values) != 2 or not values[0] < values[1]:
            raise InputError(
                message(
                    table.place(key),
                    f"expected start and a later end in s, got {pair}",
                    "Write [0.42, 1.51].",
                )
            )
        cycles.append((values[0], values[1]))
    return tuple(cycles)


def _refuse_repeated(names: list[str], table: Table, key: str) -> None:
    """Raise for the first id that stands twice."""
    for index, name in enumerate(names):
        if name in names[:index]:
            raise InputError(
                message(
                    table.place(f"{key}[{index + 1}].id"),
                    f"id {name} stands a second time, first in {key}[{names.index(name) + 1}]",
                    "Give each its own id.",
                )
            )


def _warn_shared_skin(subjects: list[Subject], top: Table) -> None:
    """Warn of one skin file under two subjects: a slip of copying, as a rule."""
    owner: dict[Path, str] = {}
    for subject in subjects:
        for trial in subject.trials:
            first = owner.setdefault(trial.skin_path, subject.id)
            if first != subject.id:
                warnings.warn(
                    message(
                        (top.path, f"subject {subject.id}", f"trial {trial.id}"),
                        f"skin file {trial.skin_path.name} belongs to subject {first} too",
                        "Check the copy.",
                    ),
                    StaPriorWarning,
                    stacklevel=3,
                )
