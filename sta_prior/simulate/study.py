"""The invented courier study: all subjects in memory, or as files of the contract.

Conventions: docs/conventions.md; files: docs/files.md.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import xarray as xr
from numpy.random import Generator

from sta_prior.checks import FloatArray, nearest
from sta_prior.errors import InputError, message
from sta_prior.io.c3d import write_c3d
from sta_prior.io.files import atomic_path
from sta_prior.io.points import points_dataset
from sta_prior.io.text import write_bone_table
from sta_prior.se3 import position_of, rotation_of
from sta_prior.simulate.artifact import Population, PopulationSettings, draw_population, drives
from sta_prior.simulate.mechanisms import TISSUE_SD, AverageTissue, check_mechanism, draw_average, scaled
from sta_prior.simulate.motion import RATE, TASKS, draw_style, task_motion
from sta_prior.simulate.subject import (
    LANDMARKS,
    MARKERS,
    SEGMENTS,
    SimulatedSubject,
    SimulatedTrial,
    average_layouts,
    simulate_subject,
)

IMAGED_COUNT, ARCHIVED_COUNT = 9, 6
_SIZES = {"demo": (9, 6, 2), "small": (4, 2, 1)}  # imaged, archived subjects, trials of each task
_MOMENT_STYLES = 24  # invented people whose motion the artifact's size refers to
_TRUTH_SD = 0.05  # mm and deg, declared for the exact bone tables: files are rounded
_TITLE = "Courier stair study, right leg (invented data)"
_README = """Courier stair study: INVENTED DATA

Everything in this folder was made by the simulator of sta_prior (size {size}, seed {seed}).
No person was measured. Couriers, marker positions, motion, soft-tissue artifact and bone
poses are invented and can be used to try the program, not to learn anything about people.

lab.toml     segments, frames, joint
study.toml   what a laboratory would have: skin trials of all subjects; bone poses of the
             imaged subjects in two short windows a trial
truth.toml   the same trials with exact bone poses of every subject in every frame
K01, K02 …   one folder a subject: static trial, skin trials (C3D), bone poses (CSV);
             *_bone.csv belongs to study.toml, *_truth.csv to truth.toml
"""
_LAB = """# Invented data: see README.txt.
title = "{title}"
up = "y"

[segment.thigh]
markers = ["TA", "TB", "TC", "TD", "TE"]
[segment.thigh.frame]
origin = ["HJC"]
y = {{ from = ["LEP", "MEP"], to = ["HJC"] }}
z = {{ from = ["MEP"], to = ["LEP"] }}

[segment.shank]
markers = ["SA", "SB", "SC", "SD", "SE"]
[segment.shank.frame]
standard = "isb-tibia"
side = "right"
[segment.shank.frame.points]
lateral_malleolus = "LMA"
medial_malleolus = "MMA"
lateral_condyle = "LCO"
medial_condyle = "MCO"

[joint.knee]
proximal = "thigh"
distal = "shank"
kind = "knee"
side = "right"
centre = ["LEP", "MEP"]
travel_sd_mm = 5.0
"""


@dataclass(frozen=True)
class SimulatedStudy:
    """The invented study in memory.

    Attributes
    ----------
    seed : it came from
    size : demo or small
    population : what all subjects share
    subjects : imaged first, then archived
    """

    seed: int
    size: str
    population: Population
    subjects: tuple[SimulatedSubject, ...]


def simulate_population(
    generator: Generator, settings: PopulationSettings | None = None, mechanism: str = "drives"
) -> Population:
    """Draw a population whose artifact has its stated size over the four tasks.

    Parameters
    ----------
    generator : source of all randomness
    settings : sizes; the default is the invented study
    mechanism : of the artifact, one of mechanisms.MECHANISMS

    Returns
    -------
    Population.

    Raises
    ------
    InputError : an unknown mechanism, or sizes that do not fit together.
    """
    if check_mechanism(mechanism) != "drives":
        settings = settings if settings is not None else PopulationSettings(tissue_sd=TISSUE_SD)
    moments = []
    for _ in range(_MOMENT_STYLES):
        style = draw_style(generator)
        for task in TASKS:
            drive = drives(task_motion(task, style, (0.42, 0.40), generator).angles, style.reference_angles)
            moments.append(drive.T @ drive / len(drive))
    population = draw_population(generator, average_layouts(), np.mean(moments, axis=0), settings)
    return population if mechanism == "drives" else _with_tissue(population, generator)


def _with_tissue(population: Population, generator: Generator) -> Population:
    """The population with tissue of the second mechanism, its artifact of the stated size."""
    drawn = replace(population, tissue=draw_average(generator))
    schedule = tuple((task, 1) for task in TASKS)
    people = [simulate_subject("", False, drawn, schedule, generator) for _ in range(_MOMENT_STYLES)]
    trials = [trial for person in people for trial in person.trials]
    first, tissue = 0, []
    for segment, sizes, average in zip(
        population.segments,
        (population.settings.thigh, population.settings.shank),
        drawn.tissue or (),
        strict=True,
    ):
        own = slice(first, first + len(segment.layout))
        first = own.stop
        systematic = [trial.systematic[:, own] for trial in trials]
        wobbling = [trial.displacement[:, own] - trial.systematic[:, own] for trial in trials]
        explained = np.sqrt(sizes.displacement_rms**2 - sizes.residual_rms**2)
        tissue.append(
            scaled(
                average,
                float(explained / _root_mean_square(systematic)),
                float(sizes.residual_rms / _root_mean_square(wobbling)),
            )
        )
    pair: tuple[AverageTissue, AverageTissue] = (tissue[0], tissue[1])
    return replace(population, tissue=pair)


def _root_mean_square(vectors: list[FloatArray]) -> float:
    """Of the lengths of vectors (..., 3), over all arrays."""
    return float(np.sqrt((np.concatenate(vectors) ** 2).sum(axis=-1).mean()))


def simulate_study(
    seed: int,
    size: str = "demo",
    settings: PopulationSettings | None = None,
    mechanism: str = "drives",
) -> SimulatedStudy:
    """Make the invented study in memory.

    Parameters
    ----------
    seed : the same seed gives the same bits
    size : "demo" (nine imaged and six archived subjects, two trials a task) or "small"
        (the first four and two of them, one trial a task)
    settings : sizes of artifact and noise; the default is the invented study
    mechanism : of the artifact, one of mechanisms.MECHANISMS

    Returns
    -------
    SimulatedStudy; positions m, angles rad.

    Raises
    ------
    InputError : an unknown size or mechanism, or settings that do not fit together.
    """
    if size not in _SIZES:
        known = ", ".join(_SIZES)
        raise InputError(message("size", f"expected one of {known}, got {size}", nearest(size, _SIZES)))
    imaged, archived, repetitions = _SIZES[size]
    # One child for each possible subject: subject K03 is the same person in every size.
    first, *children = np.random.default_rng(seed).spawn(1 + IMAGED_COUNT + ARCHIVED_COUNT)
    population = simulate_population(first, settings, mechanism)
    numbers = [*range(imaged), *range(IMAGED_COUNT, IMAGED_COUNT + archived)]
    schedule = tuple((task, repetition) for repetition in range(1, repetitions + 1) for task in TASKS)
    subjects = tuple(
        simulate_subject(f"K{number + 1:02d}", number < IMAGED_COUNT, population, schedule, children[number])
        for number in numbers
    )
    return SimulatedStudy(seed, size, population, subjects)


def write_study(
    folder: str | Path,
    seed: int,
    size: str = "demo",
    settings: PopulationSettings | None = None,
    mechanism: str = "drives",
) -> SimulatedStudy:
    """Make the invented study and write it as files of the contract.

    Parameters
    ----------
    folder : to write into; must be new, empty, or hold an earlier invented study
    seed, size, settings, mechanism : as simulate_study

    Returns
    -------
    SimulatedStudy, the truth behind the files.

    Raises
    ------
    InputError : the folder holds something else, or as simulate_study.

    Notes
    -----
    study.toml: bone truth of imaged subjects in windows, archived subjects skin only.
    truth.toml: exact bone truth of every subject in every frame.
    """
    target = Path(folder)
    _refuse_foreign(target)
    study = simulate_study(seed, size, settings, mechanism)
    target.mkdir(parents=True, exist_ok=True)
    _write_text(target / "README.txt", _README.format(size=size, seed=seed))
    _write_text(target / "lab.toml", _LAB.format(title=_TITLE))
    for subject in study.subjects:
        place = target / subject.id
        place.mkdir(exist_ok=True)
        static_time = np.arange(len(subject.static_points)) / RATE
        write_c3d(
            place / "static.c3d",
            _points_dataset(static_time, subject.static_points, (*MARKERS, *LANDMARKS), "static.c3d"),
        )
        for trial in subject.trials:
            name = f"{trial.id}.c3d"
            write_c3d(place / name, _points_dataset(trial.time, trial.points, MARKERS, name))
            write_bone_table(place / f"{trial.id}_truth.csv", _bone_dataset(trial.time, trial.lab_from_bone))
            if subject.imaged:
                write_bone_table(place / f"{trial.id}_bone.csv", _bone_dataset(trial.time, trial.imaged_pose))
    _write_text(target / "truth.toml", _study_text(study, exact=True))
    _write_text(target / "study.toml", _study_text(study, exact=False))
    return study


def _refuse_foreign(folder: Path) -> None:
    """Refuse a folder that holds anything but an earlier invented study."""
    if folder.exists() and not folder.is_dir():
        raise InputError(message(folder, "is a file, expected a folder", "Name another folder."))
    if not folder.is_dir() or not any(folder.iterdir()):
        return
    earlier = folder / "study.toml"
    if not earlier.is_file() or "invented_data = true" not in earlier.read_text("utf-8").splitlines():
        raise InputError(
            message(
                folder,
                "not empty and holds no invented study",
                "Name a new folder; nothing is overwritten.",
            )
        )


def _write_text(path: Path, text: str) -> None:
    with atomic_path(path) as temporary:
        temporary.write_text(text, encoding="utf-8")


def _points_dataset(time: FloatArray, points: FloatArray, labels: tuple[str, ...], source: str) -> xr.Dataset:
    """Measured points (n, m, 3) m as the Dataset that the C3D writer takes."""
    spread = 3e-4  # m, reported by an invented camera system
    residual = np.where(np.isnan(points).any(axis=-1), np.nan, spread)
    return points_dataset(points, residual, time, labels, rate=RATE, source=source, units_declared="mm")


def _bone_dataset(time: FloatArray, poses: FloatArray) -> xr.Dataset:
    """Poses (n, 2, 4, 4) as the Dataset that the bone-table writer takes."""
    return xr.Dataset(
        {
            "rotation": (("time", "segment", "row", "col"), rotation_of(poses), {"units": "1"}),
            "position": (("time", "segment", "axis"), position_of(poses), {"units": "m"}),
        },
        coords={"time": time, "segment": list(SEGMENTS), "axis": ["x", "y", "z"]},
    )


def _study_text(study: SimulatedStudy, exact: bool) -> str:
    settings = study.population.settings
    position_sd = _TRUTH_SD if exact else 1e3 * settings.bone_sd_position
    rotation_sd = _TRUTH_SD if exact else np.rad2deg(settings.bone_sd_rotation)
    spread = f"{{ mm = {position_sd:.6g}, deg = {rotation_sd:.6g} }}"
    kind = "exact bone truth of all frames" if exact else "what a laboratory would have"
    lines = [
        f"# Courier stair study: invented data, {kind}. See README.txt.",
        "invented_data = true",
        'lab = "lab.toml"',
    ]
    for subject in study.subjects:
        lines += [
            "",
            "[[subject]]",
            f'id = "{subject.id}"',
            'side = "right"',
            f'static = "{subject.id}/static.c3d"',
            f"mass_kg = {subject.body.mass:.1f}",
            f"height_m = {subject.body.height:.2f}",
        ]
        for trial in subject.trials:
            lines += _trial_lines(subject, trial, exact, spread)
    return "\n".join(lines) + "\n"


def _trial_lines(subject: SimulatedSubject, trial: SimulatedTrial, exact: bool, spread: str) -> list[str]:
    stem = f"{subject.id}/{trial.id}"
    cycles = ", ".join(f"[{start:.3f}, {end:.3f}]" for start, end in trial.cycles)
    lines = [
        "[[subject.trial]]",
        f'id = "{trial.id}"',
        f'activity = "{trial.activity}"',
        f'session = "{trial.session}"',
        f'skin = "{stem}.c3d"',
        f"cycles = [{cycles}]",
    ]
    if exact or subject.imaged:
        table = f"{stem}_truth.csv" if exact else f"{stem}_bone.csv"
        lines += [f'bone = "{table}"', 'clock = "shared"', 'space = "shared"', f"bone_sd = {spread}"]
    return lines
