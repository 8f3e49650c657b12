"""The command line run inside the test process, and small folders of files to run it on."""

from __future__ import annotations

import contextlib
import hashlib
import io
import sys
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from unittest.mock import patch

import numpy as np
from made_studies import STUDY, leg_points, leg_poses, make_study, still, write_bones, write_c3d

from sta_prior import cli
from sta_prior.checks import FloatArray
from sta_prior.simulate import write_study

TRIAL = """\
[[subject.trial]]
id = "{name}"
activity = "stairs"
skin = "{name}.c3d"
bone = "{name}_bone.csv"
bone_sd = {{ mm = 0.5, deg = 0.5 }}
"""


@dataclass(frozen=True)
class Done:
    """How a command ended and what it said."""

    status: int
    out: str
    err: str


def run(folder: Path, *words: str | Path) -> Done:
    """Run ``sta-prior`` with these words in a folder, in this process, as its console script would."""
    out, err = io.StringIO(), io.StringIO()
    status = 0
    with (
        contextlib.chdir(folder),
        patch.object(sys, "argv", ["sta-prior", *map(str, words)]),
        contextlib.redirect_stdout(out),
        contextlib.redirect_stderr(err),
    ):
        try:
            cli.main()
        except SystemExit as end:
            status = end.code if isinstance(end.code, int) else 1 if end.code else 0
    return Done(status, out.getvalue(), err.getvalue())


def contents(folder: Path) -> dict[str, str]:
    """Every file below a folder with its digest, and every folder."""
    return {
        str(path.relative_to(folder)): hashlib.sha256(path.read_bytes()).hexdigest() if path.is_file() else ""
        for path in sorted(folder.rglob("*"))
    }


def leg_motion(most: float = 35.0, frames: int = 30) -> FloatArray:
    """Poses of the made-up leg bending from 5° to ``most`` degrees, shape (frames, 2, 4, 4), m."""
    return np.stack([leg_poses((flexion, 2.0, -3.0)) for flexion in np.linspace(5.0, most, frames)])


def write_leg_trial(folder: Path, name: str, poses: FloatArray) -> None:
    """Write a skin trial as C3D, and its bone table for a third of the frames."""
    write_c3d(folder / f"{name}.c3d", leg_points(poses))
    window = slice(len(poses) // 3, 2 * len(poses) // 3)
    time = np.arange(len(poses))[window] / 100
    write_bones(folder / f"{name}_bone.csv", ("thigh", "shank"), time, poses[window])


def make_leg_study(folder: Path, trials: Sequence[str] = ("stairs_01",)) -> Path:
    """Write the study of the made-up leg with C3D files: one subject, the given trials; return its path."""
    make_study(folder)
    for name in ("static.csv", "stairs.csv", "stairs_bone.csv"):
        (folder / name).unlink()
    head = STUDY.split("[[subject.trial]]")[0].replace("static.csv", "static.c3d")
    text = head + "".join(TRIAL.format(name=name) for name in trials)
    (folder / "study.toml").write_text(text, encoding="utf-8")
    write_c3d(folder / "static.c3d", still(leg_points(leg_poses()), 40))
    for index, name in enumerate(trials):
        write_leg_trial(folder, name, leg_motion(35.0 + 5.0 * index))
    return folder / "study.toml"


def keep_trials(study: Path, subjects: Sequence[str], activities: Sequence[str]) -> None:
    """Cut a study file of the invented couriers down to some subjects and activities."""
    first, *blocks = study.read_text(encoding="utf-8").split("[[subject]]\n")
    kept = [first]
    for block in blocks:
        head, *trials = block.split("[[subject.trial]]\n")
        if any(f'id = "{subject}"' in head for subject in subjects):
            wanted = [text for text in trials if any(f'activity = "{name}"' in text for name in activities)]
            kept.append("[[subject.trial]]\n".join([head, *wanted]))
    study.write_text("[[subject]]\n".join(kept), encoding="utf-8")


def make_courier_study(folder: Path, activities: Sequence[str] = ("level-walk",)) -> Path:
    """Write two imaged couriers and an archived one, one trial an activity; return study.toml."""
    write_study(folder, seed=7, size="small")
    for name in ("study.toml", "truth.toml"):
        keep_trials(folder / name, ("K01", "K02", "K10"), activities)
    return folder / "study.toml"


def replace_in(path: Path, old: str, new: str) -> None:
    """Replace the first of what must be there in a text file."""
    text = path.read_text(encoding="utf-8")
    assert old in text, f"{old!r} is not in {path.name}"
    path.write_text(text.replace(old, new, 1), encoding="utf-8")


def cut(path: Path, size: int) -> None:
    """Truncate a file."""
    content = path.read_bytes()
    assert size < len(content)
    path.write_bytes(content[:size])
