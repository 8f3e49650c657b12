"""A small made-up leg with known frames, and its files, for the tests of the study layer."""

from __future__ import annotations

import contextlib
from collections.abc import Iterator, Mapping
from pathlib import Path

import ezc3d
import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from sta_prior.checks import FloatArray
from sta_prior.errors import StaPriorWarning
from sta_prior.se3 import make_pose, transform_points

THIGH_MARKERS = ("TA", "TB", "TC", "TD")
SHANK_MARKERS = ("SA", "SB", "SC", "SD")
# Bone frames of a right leg, m: x forward, y up, z right. Landmarks lie on the axes, so that
# the recipes of LAB give exactly these frames.
THIGH = {
    "TA": (0.06, -0.10, 0.05),
    "TB": (0.07, -0.22, -0.02),
    "TC": (-0.01, -0.15, 0.09),
    "TD": (0.05, -0.30, 0.06),
    "HJC": (0.0, 0.0, 0.0),
    "LEP": (0.0, -0.40, 0.045),
    "MEP": (0.0, -0.40, -0.045),
}
SHANK = {
    "SA": (0.04, 0.30, 0.04),
    "SB": (0.05, 0.18, -0.01),
    "SC": (-0.02, 0.22, 0.06),
    "SD": (0.04, 0.10, 0.03),
    "LMA": (0.0, 0.0, 0.035),
    "MMA": (0.0, 0.0, -0.035),
    "LCO": (0.0, 0.38, 0.045),
    "MCO": (0.0, 0.38, -0.045),
}
KNEE_IN_SHANK = np.array([0.0, 0.395, 0.0])

LAB = """\
title = "Courier stair study, right leg"
up = "y"
[segment.thigh]
markers = ["TA", "TB", "TC", "TD"]
[segment.thigh.frame]
origin = ["HJC"]
y = { from = ["LEP", "MEP"], to = ["HJC"] }
z = { from = ["MEP"], to = ["LEP"] }
[segment.shank]
markers = ["SA", "SB", "SC", "SD"]
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
IMAGING_LAB = """\
[segment.thigh]
markers = ["TA", "TB", "TC", "TD"]
frame = "imaging"
[segment.shank]
markers = ["SA", "SB", "SC", "SD"]
frame = "imaging"
[joint.knee]
proximal = "thigh"
distal = "shank"
kind = "knee"
side = "right"
centre = ["LEP", "MEP"]
travel_sd_mm = 5.0
"""
STUDY = """\
lab = "lab.toml"
[[subject]]
id = "P01"
static = "static.csv"
mass_kg = 71.5
[[subject.trial]]
id = "stairs_01"
activity = "stairs"
skin = "stairs.csv"
bone = "stairs_bone.csv"
"""


@contextlib.contextmanager
def says(kind: type[Exception], text: str) -> Iterator[None]:
    """Expect an error whose whole message is the text."""
    with pytest.raises(kind) as caught:
        yield
    assert str(caught.value) == text, f"got {caught.value}"


@contextlib.contextmanager
def warns(*texts: str) -> Iterator[None]:
    """Expect exactly these warnings of the package, each by its whole message."""
    with pytest.warns(StaPriorWarning) as caught:
        yield
    got = [str(one.message) for one in caught]
    assert got == list(texts), f"got {got}"


def knee_rotation(flexion: float, adduction: float, internal: float) -> FloatArray:
    """Rotation thigh ← shank of a right knee, angles in degrees: Rz(−flexion) Rx(adduction) Ry(internal)."""
    turns = Rotation.from_euler("ZXY", [-flexion, adduction, internal], degrees=True)
    return np.asarray(turns.as_matrix(), dtype=np.float64)


def leg_poses(angles: tuple[float, float, float] = (5.0, 2.0, -3.0), side: str = "right") -> FloatArray:
    """Poses lab ← thigh and lab ← shank, shape (2, 4, 4), m, for anatomical knee angles in degrees."""
    mirror = np.diag([1.0, 1.0, -1.0 if side == "left" else 1.0])
    turned = mirror @ knee_rotation(*angles) @ mirror
    thigh = make_pose(Rotation.from_euler("y", 25, degrees=True).as_matrix(), [0.3, 0.95, -0.2])
    thigh_from_shank = make_pose(turned, [0.0, -0.40, 0.0] - turned @ KNEE_IN_SHANK)
    return np.stack([thigh, thigh @ thigh_from_shank])


def leg_points(poses: FloatArray, side: str = "right") -> dict[str, FloatArray]:
    """Every marker and landmark in the lab, shape (..., 3), m, for poses of shape (..., 2, 4, 4)."""
    sign = np.array([1.0, 1.0, -1.0 if side == "left" else 1.0])
    points = {}
    for index, bone in enumerate((THIGH, SHANK)):
        for name, position in bone.items():
            own = (np.array(position) * sign)[None, :]
            points[name] = transform_points(poses[..., index, :, :], own)[..., 0, :]
    return points


def still(
    points: Mapping[str, FloatArray], frames: int, sd: float = 0.0, seed: int = 1
) -> dict[str, FloatArray]:
    """Repeat points over frames with independent noise of the given SD, m; shape (frames, 3)."""
    random = np.random.default_rng(seed)
    return {name: xyz + sd * random.standard_normal((frames, 3)) for name, xyz in points.items()}


def write_points(path: Path, points: Mapping[str, FloatArray], rate: float = 100.0) -> None:
    """Write a trial as CSV in mm; NaN is blank."""
    header = ",".join(["time", *(f"{name}_{axis}" for name in points for axis in "xyz")])
    stacked = np.concatenate(list(points.values()), axis=1) * 1e3
    rows = [f"{i / rate:.4f}," + ",".join(_cell(v) for v in row) for i, row in enumerate(stacked)]
    path.write_text("\n".join(["# unit: mm", header, *rows, ""]), encoding="utf-8")


def write_bones(path: Path, names: tuple[str, ...], time: FloatArray, poses: FloatArray) -> None:
    """Write a bone pose table in mm; poses of shape (n, S, 4, 4), NaN is blank."""
    ends = [f"r{i}{j}" for i in (1, 2, 3) for j in (1, 2, 3)] + ["px", "py", "pz"]
    header = ",".join(["time", *(f"{name}_{end}" for name in names for end in ends)])
    rotation = poses[..., :3, :3].reshape(*poses.shape[:2], 9)
    cells = np.concatenate([rotation, poses[..., :3, 3] * 1e3], axis=-1).reshape(len(time), -1)
    rows = [f"{t:.4f}," + ",".join(_cell(v) for v in row) for t, row in zip(time, cells, strict=True)]
    path.write_text("\n".join(["# unit: mm", header, *rows, ""]), encoding="utf-8")


def write_reference(path: Path, rows: Mapping[tuple[str, str], tuple[float, float, float]]) -> None:
    """Write reference points in mm from metres."""
    lines = [f"{s},{p}," + ",".join(_cell(v * 1e3) for v in xyz) for (s, p), xyz in rows.items()]
    path.write_text("\n".join(["# unit: mm", "segment,point,x,y,z", *lines, ""]), encoding="utf-8")


def write_c3d(
    path: Path, points: Mapping[str, FloatArray], events: tuple[tuple[str, float, str], ...] = ()
) -> None:
    """Write a trial as C3D in mm at 100 Hz; events are label, time in s, context."""
    stacked = np.stack(list(points.values())) * 1e3
    file = ezc3d.c3d()
    file["parameters"]["POINT"]["RATE"]["value"] = [100.0]
    file["parameters"]["POINT"]["UNITS"]["value"] = ["mm"]
    file["parameters"]["POINT"]["LABELS"]["value"] = list(points)
    data = np.ones((4, len(points), stacked.shape[1]))
    data[:3] = stacked.transpose(2, 0, 1)
    file["data"]["points"] = data
    if events:
        file.add_parameter("EVENT", "USED", [len(events)])
        file.add_parameter("EVENT", "LABELS", [label for label, _, _ in events])
        file.add_parameter("EVENT", "CONTEXTS", [context for _, _, context in events])
        file.add_parameter("EVENT", "TIMES", np.array([[0.0] * len(events), [t for _, t, _ in events]]))
    file.write(str(path))


def reference_rows(side: str = "right") -> dict[tuple[str, str], tuple[float, float, float]]:
    """Markers and knee centre of the leg as reference points, m."""
    sign = -1.0 if side == "left" else 1.0
    rows = {("thigh", name): THIGH[name] for name in THIGH_MARKERS}
    rows |= {("shank", name): SHANK[name] for name in SHANK_MARKERS}
    rows = {key: (x, y, sign * z) for key, (x, y, z) in rows.items()}
    return rows | {("thigh", "KJC"): (0.0, -0.40, 0.0), ("shank", "KJC"): tuple(KNEE_IN_SHANK)}


def make_study(
    folder: Path,
    *,
    lab: str = LAB,
    study: str = STUDY,
    angles: tuple[float, float, float] = (5.0, 2.0, -3.0),
    side: str = "right",
) -> Path:
    """Write lab, study, a quiet static trial and one trial with bone truth; return the study's path."""
    (folder / "lab.toml").write_text(lab, encoding="utf-8")
    (folder / "study.toml").write_text(study, encoding="utf-8")
    poses = leg_poses(angles, side)
    write_points(folder / "static.csv", still(leg_points(poses, side), 40))
    flexion = np.linspace(5.0, 35.0, 30)
    moving = np.stack([leg_poses((f, 2.0, -3.0), side) for f in flexion])
    write_points(folder / "stairs.csv", leg_points(moving, side))
    write_bones(folder / "stairs_bone.csv", ("thigh", "shank"), np.arange(10, 20) / 100, moving[10:20])
    return folder / "study.toml"


def _cell(value: float) -> str:
    return "" if np.isnan(value) else repr(float(value))
