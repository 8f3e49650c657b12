"""The lab file: segments with their skin markers, bone frames, joints.

Conventions: docs/conventions.md. The file's form: docs/files.md.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass, replace
from functools import cached_property
from pathlib import Path
from typing import Literal

import numpy as np

from sta_prior.angles import JointConvention
from sta_prior.checks import FloatArray, IntArray, nearest
from sta_prior.errors import InputError, message
from sta_prior.io.text import Table, read_toml
from sta_prior.study.frames import Frame, FrameRecipe, Side
from sta_prior.study.recipes import frame_sides, read_frame, read_side

UpAxis = Literal["x", "y", "z"]

MINIMUM_MARKERS = 3
LAB_KEYS = ("title", "up", "segment", "joint")
SEGMENT_KEYS = ("markers", "frame")
JOINT_KEYS = ("proximal", "distal", "kind", "side", "sequence", "signs", "centre", "travel_sd_mm")
JOINT_KINDS = ("knee", "hip", "ankle", "cardan")


@dataclass(frozen=True)
class Segment:
    """One bone with the skin markers on it.

    Attributes
    ----------
    name : as in the lab file
    markers : labels of the skin markers whose artifact is modelled
    frame : recipe or standard on landmarks; None where the axes come from imaging
    """

    name: str
    markers: tuple[str, ...]
    frame: Frame


@dataclass(frozen=True)
class Joint:
    """Two bones that move on each other.

    Attributes
    ----------
    name : as in the lab file
    proximal, distal : names of the segments
    convention : names and signs of the angles, side included
    centre : names of the points whose mean is the joint centre; empty where none is named
    travel_sd : m, SD of the centre's travel along each axis; 0 is a ball joint,
        infinity is no joint
    """

    name: str
    proximal: str
    distal: str
    convention: JointConvention
    centre: tuple[str, ...]
    travel_sd: float


@dataclass(frozen=True)
class Lab:
    """Segments and joints of a study, in the order of the lab file.

    Attributes
    ----------
    title : as in the lab file, else its name
    up : lab axis that points up
    segments, joints : in the order of the file
    path : the file
    up_declared : whether the file says which axis points up
    """

    title: str
    up: UpAxis
    segments: tuple[Segment, ...]
    joints: tuple[Joint, ...]
    path: Path
    up_declared: bool = True

    @cached_property
    def markers(self) -> tuple[str, ...]:
        """Labels of all skin markers, in segment order."""
        return tuple(label for segment in self.segments for label in segment.markers)

    @cached_property
    def marker_segment(self) -> IntArray:
        """Index of the segment of each marker, shape (M,)."""
        counts = [len(segment.markers) for segment in self.segments]
        return np.repeat(np.arange(len(counts), dtype=np.int64), counts)

    @property
    def segment_names(self) -> tuple[str, ...]:
        """Names of the segments."""
        return tuple(segment.name for segment in self.segments)

    @property
    def up_vector(self) -> FloatArray:
        """Unit vector of the lab axis that points up, shape (3,)."""
        axes: FloatArray = np.eye(3)
        axis: FloatArray = axes["xyz".index(self.up)]
        return axis

    @property
    def frame_points(self) -> tuple[str, ...]:
        """Names of all points that landmark frames need, each once."""
        names = (name for segment in self.segments if segment.frame for name in segment.frame.points)
        return tuple(dict.fromkeys(names))

    @property
    def sides(self) -> frozenset[Side]:
        """Sides of the body that knees, hips, ankles and standard frames are declared for."""
        joints = (joint.convention for joint in self.joints)
        sides = {convention.side for convention in joints if convention.kind != "cardan"}
        return frozenset(sides | frame_sides(segment.frame for segment in self.segments))

    def segment_index(self, name: str) -> int:
        """Return the place of a segment in the lab's order.

        Raises
        ------
        InputError : no segment of that name.
        """
        if name not in self.segment_names:
            raise InputError(
                message(
                    self.path,
                    f"no segment {name}, has {' '.join(self.segment_names)}",
                    nearest(name, self.segment_names),
                )
            )
        return self.segment_names.index(name)

    def for_side(self, side: Side) -> Lab:
        """Return the lab for a subject measured on the given side of the body.

        Sets the side of every joint and standard frame, and turns round the z axis of a
        recipe that is written for the other side: z points right on both.

        Raises
        ------
        InputError : the lab declares joints or frames of both sides.
        """
        if len(self.sides) == 2:
            raise InputError(
                message(
                    self.path,
                    f"has joints or frames of both sides, side = {side!r} cannot replace them",
                    "Leave out the subject's side.",
                )
            )
        segments = tuple(
            replace(segment, frame=segment.frame and segment.frame.for_side(side))
            for segment in self.segments
        )
        joints = tuple(
            replace(joint, convention=replace(joint.convention, side=side)) for joint in self.joints
        )
        return replace(self, segments=segments, joints=joints)


def read_lab(path: str | Path) -> Lab:
    """Read a lab file.

    Parameters
    ----------
    path : TOML file

    Returns
    -------
    Lab, with the sides that the file declares.

    Raises
    ------
    InputError : with file and dotted place: an unknown or missing key, a value of the
        wrong kind, a marker in two segments, a joint of a segment that is not there,
        joints that do not form a tree.
    """
    top = read_toml(path)
    top.refuse_unknown(LAB_KEYS)
    segment_tables = _children(top.table("segment"))
    joint_tables = _children(top.table("joint", {}))
    if not segment_tables:
        raise InputError(message(top.place("segment"), "empty, expected segments", "Add [segment.thigh]."))
    joints = tuple(_read_joint(name, table, segment_tables) for name, table in joint_tables.items())
    _check_tree(joints, top)
    segments = tuple(_read_segment(name, table) for name, table in segment_tables.items())
    _check_markers(segments, top)
    lab = Lab(
        title=top.text("title", top.path.stem),
        up=top.choice("up", ("x", "y", "z"), "y"),
        segments=segments,
        joints=joints,
        path=top.path,
        up_declared="up" in top,
    )
    return _with_recipe_sides(lab)


def _children(family: Table) -> dict[str, Table]:
    """Return the named tables below a key, [segment.thigh] or [joint.knee]."""
    return {name: family.table(name) for name in family}


def _read_segment(name: str, table: Table) -> Segment:
    """Read one [segment.NAME]."""
    table.refuse_unknown(SEGMENT_KEYS)
    markers = tuple(table.texts("markers"))
    check_distinct(markers, table, "markers", "marker")
    if len(markers) < MINIMUM_MARKERS:
        raise InputError(
            message(
                table.place("markers"),
                f"expected at least {MINIMUM_MARKERS} markers, got {len(markers)}",
                "Fewer do not show how a bone is turned.",
            )
        )
    return Segment(name, markers, read_frame(table))


def _read_joint(name: str, table: Table, segments: Iterable[str]) -> Joint:
    """Read one [joint.NAME]."""
    table.refuse_unknown(JOINT_KEYS)
    known = list(segments)
    ends = []
    for key in ("proximal", "distal"):
        ends.append(table.text(key))
        if ends[-1] not in known:
            do = nearest(ends[-1], known) or f"Segments: {', '.join(known)}."
            raise InputError(message(table.place(key), f"no segment {ends[-1]}", do))
    if ends[0] == ends[1]:
        raise InputError(
            message(table.place(), f"proximal and distal are both {ends[0]}", "Name two segments.")
        )
    travel_sd = _travel_sd(table)
    centre = tuple(table.texts("centre", ()))
    check_distinct(centre, table, "centre", "point")
    if not centre and math.isfinite(travel_sd):
        raise InputError(
            message(
                table.place("centre"),
                "missing, expected a list of points",
                'Add centre, or travel_sd_mm = "free" for no joint.',
            )
        )
    return Joint(name, ends[0], ends[1], _convention(table), centre, travel_sd)


def _convention(table: Table) -> JointConvention:
    """Read kind, side, sequence and signs of a joint."""
    kind = table.choice("kind", JOINT_KINDS)
    if kind != "cardan":
        for key in ("sequence", "signs"):
            if key in table:
                raise InputError(
                    message(
                        table.place(key),
                        f"only for kind cardan, the angles of kind {kind} are fixed",
                        f'Remove {key}, or use kind = "cardan".',
                    )
                )
        return JointConvention(kind, read_side(table))
    side = read_side(table) if "side" in table else "right"
    sequence = table.text("sequence")
    first, second, third = _signs(table)
    try:
        return JointConvention("cardan", side, sequence, (first, second, third))
    except InputError as error:
        place = ", ".join(str(part) for part in table.place())
        raise InputError(f"{place}, {error}") from None


def _signs(table: Table) -> list[float]:
    """Read the three signs of a cardan joint, +1 where none are given."""
    signs: list[float] = table.numbers("signs", [1.0, 1.0, 1.0])
    if len(signs) != 3:
        raise InputError(
            message(table.place("signs"), f"expected 3 signs, got {len(signs)}", "Write [1, 1, -1].")
        )
    return signs


def _travel_sd(table: Table) -> float:
    """Read travel_sd_mm, in m; "free" is infinite."""
    if table.get("travel_sd_mm") == "free":
        return math.inf
    if isinstance(table.get("travel_sd_mm"), str):
        raise InputError(
            message(
                table.place("travel_sd_mm"),
                f'expected a number of mm or "free", got {table["travel_sd_mm"]!r}',
                'Write "free" for no joint, 0 for a ball joint.',
            )
        )
    return float(table.number("travel_sd_mm", minimum=0.0)) / 1000.0


def _check_markers(segments: tuple[Segment, ...], top: Table) -> None:
    """Refuse a marker that stands in two segments."""
    owner: dict[str, str] = {}
    for segment in segments:
        for label in segment.markers:
            if label in owner:
                raise InputError(
                    message(
                        top.place(f"segment.{segment.name}.markers"),
                        f"marker {label} is in segment {owner[label]} too, expected in one only",
                        "A marker moves with one bone.",
                    )
                )
            owner[label] = segment.name


def _check_tree(joints: tuple[Joint, ...], top: Table) -> None:
    """Refuse a segment with two proximal joints, and joints that close a ring."""
    parent: dict[str, Joint] = {}
    for joint in joints:
        place = top.place(f"joint.{joint.name}")
        if joint.distal in parent:
            raise InputError(
                message(
                    place,
                    f"segment {joint.distal} is distal in joint {parent[joint.distal].name} too",
                    "Give each segment one proximal joint.",
                )
            )
        parent[joint.distal] = joint
        above, way = joint.proximal, [joint.distal, joint.proximal]
        while above in parent:
            above = parent[above].proximal
            way.append(above)
            if above == joint.distal:
                raise InputError(
                    message(place, f"joints form a ring, {' – '.join(way)}", "Remove one of its joints.")
                )


def _with_recipe_sides(lab: Lab) -> Lab:
    """Give each recipe that names no side the one side of the lab, if it has one."""
    side: Literal["right", "left", "both"] = next(iter(lab.sides)) if len(lab.sides) == 1 else "both"
    segments = tuple(
        replace(segment, frame=replace(segment.frame, side=side))
        if isinstance(segment.frame, FrameRecipe) and segment.frame.side is None
        else segment
        for segment in lab.segments
    )
    return replace(lab, segments=segments)


def check_distinct(names: tuple[str, ...], table: Table, key: str, what: str) -> None:
    """Raise InputError for a name that stands twice in a list of the file."""
    for name in names:
        if names.count(name) > 1:
            raise InputError(
                message(table.place(key), f"{what} {name} stands {names.count(name)} times", "Name it once.")
            )
