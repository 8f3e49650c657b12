"""Files of a solved trial: solution, angles for a spreadsheet, C3D copy with the poses.

Shell: files and labels. Conventions: docs/conventions.md; files: docs/files.md.
"""

from __future__ import annotations

import csv
from collections.abc import Mapping
from pathlib import Path

import numpy as np
import xarray as xr

from sta_prior.io.c3d import copy_with_rotations
from sta_prior.io.files import atomic_path
from sta_prior.io.netcdf import write_dataset
from sta_prior.study import Trial

SUFFIXES = (".solution.nc", ".angles.csv", ".c3d")


def trial_files(out: Path, subject: str, trial: str) -> tuple[Path, Path, Path]:
    """Where the solution, the angles and the C3D copy of a trial lie."""
    solution, angles, copy = (out / subject / f"{trial}{suffix}" for suffix in SUFFIXES)
    return solution, angles, copy


def write_trial(out: Path, solution: xr.Dataset, trial: Trial, digests: Mapping[str, str]) -> None:
    """Write all files of a trial, or none of them.

    Parameters
    ----------
    out : folder of the results; the subject's folder is made where missing
    solution : as from `solve`
    trial : it was solved from
    digests : SHA-256 of its inputs, by name

    Raises
    ------
    InputError : a file cannot be written.
    OSError : a folder cannot be made.
    """
    files = trial_files(out, trial.subject.id, trial.id)
    made = [folder for folder in (out, files[0].parent) if not folder.exists()]
    files[0].parent.mkdir(parents=True, exist_ok=True)
    try:
        # The solution goes first and comes last: where it stands, its companions are whole and its own.
        for path in files:
            path.unlink(missing_ok=True)
        write_angles(files[1], solution)
        if trial.skin_path.suffix.lower() == ".c3d":
            labels = [str(name) for name in solution["segment"].values]
            copy_with_rotations(trial.skin_path, files[2], labels, _poses(solution))
        write_dataset(files[0], solution, "solution", digests)
    except BaseException:
        for path in files:
            path.unlink(missing_ok=True)
        for folder in reversed(made):
            if not any(folder.iterdir()):
                folder.rmdir()
        raise


def _poses(solution: xr.Dataset) -> np.ndarray[tuple[int, ...], np.dtype[np.float64]]:
    """Poses (t, S, 4, 4), m; NaN where not determined."""
    poses = np.zeros((*solution["position"].shape[:2], 4, 4))
    poses[..., :3, :3] = solution["rotation"].values
    poses[..., :3, 3] = solution["position"].values
    poses[..., 3, 3] = 1.0
    poses[np.isnan(solution["position"].values).any(axis=2)] = np.nan
    return poses


def write_angles(path: Path, solution: xr.Dataset) -> None:
    """Write joint angles (deg), their SD, the rigid fit's and joint travel (mm) as CSV."""
    header, columns = ["time_s"], [solution["time"].values]
    for joint in solution["joint"].values:
        for dof in solution["dof"].values:
            own = solution[["angle", "angle_sd", "angle_rigid"]].sel(joint=joint, dof=dof)
            if not (np.isfinite(own["angle"]) | np.isfinite(own["angle_rigid"])).any():
                continue
            for name, suffix in (("angle", ""), ("angle_sd", "_sd"), ("angle_rigid", "_rigid")):
                header.append(f"{joint}_{dof}{suffix}_deg")
                columns.append(np.degrees(own[name].values))
        for axis in solution["axis"].values:
            for name, suffix in (("joint_travel", ""), ("joint_travel_sd", "_sd")):
                header.append(f"{joint}_travel_{axis}{suffix}_mm")
                columns.append(1000.0 * solution[name].sel(joint=joint, axis=axis).values)
    with atomic_path(path) as temporary, temporary.open("w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(header)
        for row in zip(*columns, strict=True):
            writer.writerow([f"{row[0]:.6f}", *("" if np.isnan(v) else f"{v:.4f}" for v in row[1:])])
