"""Bone frames from landmarks: recipes of the lab file and the ISB standards.

Axes of every segment frame: x forward, y up (proximal), z to the right, on both
sides of the body. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.errors import NotDeterminedError, message
from sta_prior.se3 import make_pose

AxisName = Literal["x", "y", "z"]
Side = Literal["right", "left"]
RecipeSide = Literal["right", "left", "both"]

AXES: tuple[AxisName, ...] = ("x", "y", "z")
# Common practice, no source: a frame from axes closer than this turns with every mm of landmark error.
MINIMUM_AXIS_ANGLE = np.deg2rad(5.0)
MINIMUM_AXIS_LENGTH = 0.001  # m

STANDARD_LANDMARKS: dict[str, tuple[str, ...]] = {
    "isb-pelvis": ("right_asis", "left_asis", "right_psis", "left_psis"),
    "isb-femur": ("hip_joint_centre", "lateral_epicondyle", "medial_epicondyle"),
    "isb-tibia": ("lateral_malleolus", "medial_malleolus", "lateral_condyle", "medial_condyle"),
    "isb-calcaneus": ("lateral_malleolus", "medial_malleolus", "lateral_condyle", "medial_condyle"),
}
OPTIONAL_LANDMARKS: dict[str, tuple[str, ...]] = {"isb-pelvis": ("hip_joint_centre",)}


@dataclass(frozen=True)
class AxisRecipe:
    """One axis: the direction from the mean of some points to the mean of others.

    Parameters
    ----------
    axis : "x", "y" or "z"
    start, end : names of the points that are averaged at each end
    """

    axis: AxisName
    start: tuple[str, ...]
    end: tuple[str, ...]

    def reversed(self) -> AxisRecipe:
        """Return the same axis pointing the other way."""
        return replace(self, start=self.end, end=self.start)


@dataclass(frozen=True)
class FrameRecipe:
    """A bone frame from named points.

    Parameters
    ----------
    origin : names of the points whose mean is the origin
    first : the axis that is exact
    second : the axis that is made perpendicular to the first; the third follows by
        the right-hand rule
    side : side of the body the points are named for; "both" where z points to the
        right whichever side is looked at (a pelvis with right and left landmarks); None
        where nothing is said
    """

    origin: tuple[str, ...]
    first: AxisRecipe
    second: AxisRecipe
    side: RecipeSide | None = None

    @property
    def points(self) -> tuple[str, ...]:
        """Names of all points the recipe needs, each once, in reading order."""
        names = (*self.origin, *self.first.start, *self.first.end, *self.second.start, *self.second.end)
        return tuple(dict.fromkeys(names))

    def recipe(self) -> FrameRecipe:
        """Return the recipe itself, so that both kinds of frame read alike."""
        return self

    def for_side(self, side: Side) -> FrameRecipe:
        """Return the recipe for the given side of the body.

        The same point names (lateral, medial) are used on the other leg, so a z axis
        from medial to lateral is turned round to keep pointing to the right; x and y
        are the same on both sides.
        """
        if self.side in (None, "both", side):
            return self
        first, second = (axis.reversed() if axis.axis == "z" else axis for axis in (self.first, self.second))
        return replace(self, first=first, second=second, side=side)


@dataclass(frozen=True)
class StandardFrame:
    """A bone frame as the International Society of Biomechanics recommends it.

    Parameters
    ----------
    standard : "isb-pelvis", "isb-femur", "isb-tibia" or "isb-calcaneus"
    side : side of the body; the pelvis may leave it open
    landmarks : pairs of a landmark of the standard and the point that shows it

    Notes
    -----
    The landmark definitions are from memory: the paper's text was not at hand; check
    them there before quoting them.

    - pelvis: origin the hip joint centre (the mid-point of the ASISs where none is
      given, which leaves angles untouched); z along the ASISs to the right; x in the
      plane of the ASISs and the mid-point of the PSISs, forward.
    - femur: origin the hip joint centre; y from the mid-point of the epicondyles to
      it; z in the plane of the three points, to the right.
    - tibia and fibula: origin midway between the malleoli; z along the malleoli to the
      right; x perpendicular to the torsional plane (inter-condylar point and
      malleoli), forward.
    - calcaneus: with the ankle in neutral, which the static trial has to show: origin
      as the tibia; y along the long axis of tibia and fibula; x perpendicular to their
      frontal plane (inter-malleolar point and condyles), forward.

    References
    ----------
    Wu et al. (2002), J Biomech 35(4), 543–548.
    """

    standard: str
    side: Side | None
    landmarks: tuple[tuple[str, str], ...]

    @property
    def points(self) -> tuple[str, ...]:
        """Names of all points the frame needs, each once."""
        return self.recipe().points

    def for_side(self, side: Side) -> StandardFrame:
        """Return the same standard for the given side of the body."""
        return replace(self, side=side)

    def recipe(self) -> FrameRecipe:
        """Return the standard written out as origin, exact axis and second axis."""
        at = {landmark: (point,) for landmark, point in self.landmarks}
        side = self.side or "right"
        if self.standard == "isb-pelvis":
            front = at["right_asis"] + at["left_asis"]
            back = at["right_psis"] + at["left_psis"]
            across = AxisRecipe("z", at["left_asis"], at["right_asis"])
            return FrameRecipe(at.get("hip_joint_centre", front), across, AxisRecipe("x", back, front))
        if self.standard == "isb-femur":
            lateral, medial = at["lateral_epicondyle"], at["medial_epicondyle"]
            along = AxisRecipe("y", lateral + medial, at["hip_joint_centre"])
            across = AxisRecipe("z", medial, lateral)
            return FrameRecipe(at["hip_joint_centre"], along, across, "right").for_side(side)
        lateral, medial = at["lateral_malleolus"], at["medial_malleolus"]
        along = AxisRecipe("y", lateral + medial, at["lateral_condyle"] + at["medial_condyle"])
        if self.standard == "isb-tibia":
            written = FrameRecipe(lateral + medial, AxisRecipe("z", medial, lateral), along, "right")
        else:
            across = AxisRecipe("z", at["medial_condyle"], at["lateral_condyle"])
            written = FrameRecipe(lateral + medial, along, across, "right")
        return written.for_side(side)


Frame = FrameRecipe | StandardFrame | None


def frame_pose(
    frame: FrameRecipe | StandardFrame, points: Mapping[str, FloatArray], place: tuple[object, ...]
) -> FloatArray:
    """Build the pose of a bone frame from its points.

    Parameters
    ----------
    frame : recipe or standard
    points : for each name in ``frame.points`` shape (..., 3), m, all in one frame
    place : where it is, for messages

    Returns
    -------
    shape (..., 4, 4), rotation unitless, position m: maps bone coordinates to those of
    the points. All NaN where a point is NaN.

    Raises
    ------
    NotDeterminedError : an axis of no length, or the two axes parallel within 5°.

    Examples
    --------
    >>> at = {"O": [0, 0, 0], "U": [0, 2, 0], "R": [0, 0.1, 0.3]}
    >>> axes = AxisRecipe("y", ("O",), ("U",)), AxisRecipe("z", ("O",), ("R",))
    >>> recipe = FrameRecipe(("O",), *axes)
    >>> pose = frame_pose(recipe, {name: np.array(xyz) for name, xyz in at.items()}, ("doc",))
    >>> bool(np.allclose(pose, np.eye(4)))
    True
    """
    recipe = frame.recipe()
    first = _direction(recipe.first, points, place)
    second = _direction(recipe.second, points, place)
    across = np.cross(first, second)
    sine = np.linalg.norm(across, axis=-1)
    apart = np.arctan2(sine, np.abs((first * second).sum(axis=-1)))
    if np.any(apart < MINIMUM_AXIS_ANGLE):
        raise NotDeterminedError(
            message(
                place,
                f"axes {recipe.first.axis} and {recipe.second.axis} are parallel within "
                f"{np.rad2deg(np.nanmin(apart)):.1f}°, expected at least "
                f"{np.rad2deg(MINIMUM_AXIS_ANGLE):.0f}°",
                "Choose points off the first axis.",
            )
        )
    i, j = AXES.index(recipe.first.axis), AXES.index(recipe.second.axis)
    sign = 1.0 if (j - i) % 3 == 1 else -1.0
    third = sign * across / sine[..., None]
    columns = [first, first, first]
    columns[j] = sign * np.cross(third, first)
    columns[3 - i - j] = third
    return make_pose(np.stack(columns, axis=-1), mean_point(recipe.origin, points))


def mean_point(names: tuple[str, ...], points: Mapping[str, FloatArray]) -> FloatArray:
    """Return the mean of the named points, shape (..., 3), m, in their own frame."""
    mean: FloatArray = np.mean([np.asarray(points[name], dtype=np.float64) for name in names], axis=0)
    return mean


def _direction(axis: AxisRecipe, points: Mapping[str, FloatArray], place: tuple[object, ...]) -> FloatArray:
    """Return the unit vector along the axis, shape (..., 3)."""
    vector = mean_point(axis.end, points) - mean_point(axis.start, points)
    length = np.linalg.norm(vector, axis=-1, keepdims=True)
    if np.any(length < MINIMUM_AXIS_LENGTH):
        raise NotDeterminedError(
            message(
                place,
                f"axis {axis.axis} from {' '.join(axis.start)} to {' '.join(axis.end)} is "
                f"{np.nanmin(length) * 1e3:.2f} mm long, expected at least "
                f"{MINIMUM_AXIS_LENGTH * 1e3:.0f} mm",
                "Choose points further apart.",
            )
        )
    unit: FloatArray = vector / length
    return unit
