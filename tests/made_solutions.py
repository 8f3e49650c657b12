"""Solutions and studies made for tests: exact poses moved by known errors, in the contract's form."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np
import xarray as xr

from sta_prior.angles import JointConvention, joint_angles
from sta_prior.checks import FloatArray
from sta_prior.io.netcdf import write_dataset
from sta_prior.io.text import write_bone_table, write_points_csv, write_reference_points
from sta_prior.se3 import exp, inverse, transform_points
from sta_prior.study import Study, read_study

SEGMENTS = ("thigh", "shank")
MARKERS = ("TA", "TB", "TC", "TD", "SA", "SB", "SC", "SD")
KNEE = JointConvention(kind="knee", side="right")
DOF = ("flexion", "adduction", "internal_rotation")
SOURCES = ("markers", "artifact_prior", "joint", "motion")
POSE = ("rx", "ry", "rz", "tx", "ty", "tz")

TIMES = np.arange(0.0, 1.0, 0.01)
CENTRE = {"thigh": np.array([0.0, -0.40, 0.0]), "shank": np.array([0.0, 0.02, 0.0])}
LAB = """
[segment.thigh]
markers = ["TA", "TB", "TC", "TD"]
frame = {thigh_frame}
[segment.shank]
markers = ["SA", "SB", "SC", "SD"]
frame = "imaging"
[joint.knee]
proximal = "thigh"
distal = "shank"
kind = "knee"
side = "right"
centre = ["KJC"]
travel_sd_mm = 5.0
"""
TRIAL = """
[[subject.trial]]
id = "{trial}"
activity = "{activity}"
skin = "{subject}_{trial}.csv"
{bone}
clock = "{clock}"
space = "{space}"
bone_sd = {{ mm = {mm}, deg = {deg} }}
"""


def walking_poses(times: FloatArray, swing: float = 0.5) -> FloatArray:
    """Poses (n, 2, 4, 4), lab_from_bone, m, of a thigh and a shank that bend at the knee."""
    phase = 2 * np.pi * times
    tangent = np.zeros((len(times), 2, 6))
    tangent[:, 0, 2] = swing * np.sin(phase)
    tangent[:, 0, 1] = 0.05 * np.cos(phase)
    tangent[:, 0, 3] = 1.2 * times
    tangent[:, 0, 4] = 0.9
    thigh = exp(tangent[:, 0])
    bend = np.zeros((len(times), 6))
    bend[:, 2] = -0.6 - swing * np.cos(phase)
    bend[:, 0] = 0.04 * np.sin(phase)
    bend[:, 1] = 0.08 * np.cos(2 * phase)
    bend[:, 4] = -0.42
    return np.stack([thigh, thigh @ exp(bend)], axis=1)


def knee_angles(poses: FloatArray) -> FloatArray:
    """Right knee angles (n, 3), rad, of poses (n, 2, 4, 4)."""
    return joint_angles(KNEE, (inverse(poses[:, 0]) @ poses[:, 1])[..., :3, :3])


def made_solution(
    times: FloatArray,
    poses: FloatArray,
    *,
    error: FloatArray | None = None,
    rigid_error: FloatArray | None = None,
    sd: Sequence[float] = (0.02, 0.02, 0.02, 0.004, 0.004, 0.004),
    angle_sd: float = 0.02 * np.sqrt(2),
    seed: int = 0,
    **attributes: object,
) -> xr.Dataset:
    """A solution whose poses are ``poses`` moved by known tangents.

    times (n,) s; poses (n, 2, 4, 4) m; error and rigid_error broadcast to (n, 2, 6)
    along the bone's axes, rad and m; sd of the stated pose covariance.
    """
    count = len(times)
    moved = poses @ exp(np.broadcast_to(0.0 if error is None else error, (count, 2, 6)))
    fitted = poses @ exp(np.broadcast_to(0.0 if rigid_error is None else rigid_error, (count, 2, 6)))
    rng = np.random.default_rng(seed)
    phase = 2 * np.pi * times[:, None, None]
    size = 0.004 + 0.012 * rng.random((1, len(MARKERS), 3))
    artifact = size * np.sin(phase + 6 * rng.random((1, len(MARKERS), 3)))
    share = rng.dirichlet((5.0, 3.0, 1.5, 2.0), size=(count, 2, 6))
    support_class = np.zeros((count, 2), dtype=np.int8)
    support_class[count // 2 : count // 2 + count // 8] = 2
    variables = {
        "rotation": (("time", "segment", "row", "col"), moved[..., :3, :3], "1"),
        "position": (("time", "segment", "axis"), moved[..., :3, 3], "m"),
        "pose_covariance": (
            ("time", "segment", "pose", "pose2"),
            np.broadcast_to(np.diag(np.square(sd)), (count, 2, 6, 6)).copy(),
            "rad2, rad m, m2",
        ),
        "rigid_rotation": (("time", "segment", "row", "col"), fitted[..., :3, :3], "1"),
        "rigid_position": (("time", "segment", "axis"), fitted[..., :3, 3], "m"),
        "angle": (("time", "joint", "dof"), knee_angles(moved)[:, None], "rad"),
        "angle_sd": (("time", "joint", "dof"), np.full((count, 1, 3), angle_sd), "rad"),
        "angle_rigid": (("time", "joint", "dof"), knee_angles(fitted)[:, None], "rad"),
        "joint_travel": (("time", "joint", "axis"), 0.004 * np.sin(phase + np.arange(3.0)), "m"),
        "joint_travel_sd": (("time", "joint", "axis"), np.full((count, 1, 3), 0.002), "m"),
        "artifact": (("time", "marker", "axis"), artifact, "m"),
        "artifact_sd": (("time", "marker", "axis"), np.full_like(artifact, 0.003), "m"),
        "support": (("time", "segment"), np.full((count, 2), 0.8), "1"),
        "support_class": (("time", "segment"), support_class, "1"),
        "information_share": (("time", "segment", "pose", "source"), share, "1"),
        "conflict_p": (("time", "segment"), rng.random((count, 2)), "1"),
        "informed": (("time",), np.zeros(count, dtype=np.int8), "1"),
    }
    dataset = xr.Dataset(
        {name: (dims, values, {"units": units}) for name, (dims, values, units) in variables.items()},
        coords={
            "time": ("time", times, {"units": "s"}),
            "segment": list(SEGMENTS),
            "marker": list(MARKERS),
            "joint": ["knee"],
            "dof": list(DOF),
            "axis": list("xyz"),
            "pose": list(POSE),
            "pose2": list(POSE),
            "source": list(SOURCES),
        },
        attrs={
            "estimator": "smoother",
            "iterations": 7,
            "stop_reason": "step below tolerance",
            "seconds": 1.8,
            "prior_digest": "0f" * 32,
            "input_digest": "",
            "observability": "",
            "suspects": "",
        },
    )
    dataset.attrs.update(attributes)
    return dataset


def bone_table(path: Path, times: np.ndarray, poses: np.ndarray) -> None:
    dataset = xr.Dataset(
        {
            "rotation": (("time", "segment", "row", "col"), poses[..., :3, :3]),
            "position": (("time", "segment", "axis"), poses[..., :3, 3]),
        },
        coords={"time": times, "segment": list(SEGMENTS)},
    )
    write_bone_table(path, dataset)


def made_study(
    folder: Path,
    trials: dict[str, list[str]],
    *,
    poses: np.ndarray | None = None,
    bone_times: np.ndarray = TIMES,
    bone: bool = True,
    clock: str = "shared",
    space: str = "shared",
    mm: float = 0.5,
    deg: float = 0.5,
    thigh_frame: str = '"imaging"',
) -> Study:
    """A study of subjects and their trials, all with one motion; bone truth at ``bone_times``."""
    folder.mkdir(parents=True, exist_ok=True)
    true = walking_poses(bone_times) if poses is None else poses
    rng = np.random.default_rng(3)
    reference = {
        ("thigh" if label[0] == "T" else "shank", label): 0.08 * rng.standard_normal(3) for label in MARKERS
    }
    landmarks = {"HJC": [0.0, 0.0, 0.0], "LEP": [0.02, -0.4, 0.05], "MEP": [0.02, -0.4, -0.05]}
    extra = {("thigh", name): np.array(position) for name, position in landmarks.items()}
    reference |= {(name, "KJC"): position for name, position in CENTRE.items()} | extra
    write_reference_points(folder / "reference.csv", reference)
    bone_table(folder / "static_bone.csv", np.zeros(1), walking_poses(np.zeros(1)))
    (folder / "lab.toml").write_text(LAB.format(thigh_frame=thigh_frame), encoding="utf-8")
    lines = ['lab = "lab.toml"', "invented_data = true"]
    for subject, names in trials.items():
        lines += ["[[subject]]", f'id = "{subject}"', 'side = "right"']
        lines += ['reference_points = "reference.csv"', 'bone_static = "static_bone.csv"']
        for name in names:
            skin = folder / f"{subject}_{name}.csv"
            points = np.stack([reference["thigh" if m[0] == "T" else "shank", m] for m in MARKERS])
            own = walking_poses(TIMES[:5])[:, [0 if m[0] == "T" else 1 for m in MARKERS]]
            write_points_csv(
                skin,
                xr.Dataset(
                    {
                        "position": (
                            ("time", "point", "axis"),
                            transform_points(own, points[:, None])[..., 0, :],
                        )
                    },
                    coords={"time": TIMES[:5], "point": list(MARKERS)},
                ),
            )
            table = f"{subject}_{name}_bone.csv"
            bone_table(folder / table, bone_times, true)
            lines.append(
                TRIAL.format(
                    trial=name,
                    subject=subject,
                    activity=name.split("-")[0],
                    bone=f'bone = "{table}"' if bone else "",
                    clock=clock,
                    space=space,
                    mm=mm,
                    deg=deg,
                )
            )
    path = folder / "study.toml"
    path.write_text("\n".join(lines), encoding="utf-8")
    return read_study(path)


def keep(out: Path, subject: str, trial: str, solution: xr.Dataset) -> None:
    (out / subject).mkdir(parents=True, exist_ok=True)
    write_dataset(out / subject / f"{trial}.solution.nc", solution, "solution", {})
