"""The reference posture: marker positions in the bone frames, joint centres and joint angles.

Three kinds: bone frames from the landmarks of a static trial ("static"), positions that
were measured in the bone frame ("points"), bone frames of an imaging system ("bone").
Conventions: docs/conventions.md.
"""

from __future__ import annotations

import warnings
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np

from sta_prior.angles import joint_angles
from sta_prior.checks import FloatArray, nearest
from sta_prior.errors import InputError, NotDeterminedError, StaPriorWarning, message
from sta_prior.rigid import fit_rigid
from sta_prior.se3 import inverse, mean_pose, rotation_of, transform_points
from sta_prior.study.frames import frame_pose, mean_point
from sta_prior.study.lab import Lab

Place = tuple[object, ...]

# Limits below: common practice, no source.
SMALLEST_DISTANCE = 0.005  # m, between two markers of a segment
SMALLEST_LINE_RATIO = 0.05  # extent of a cluster across its longest line over the extent along it
DOWNWARD, LYING = 120.0, 60.0  # degrees, of a bone's y axis from up
LARGEST_DISTANCE = 1.0  # m, of a marker from the origin of its bone


@dataclass(frozen=True, eq=False)
class Reference:
    """What one subject looks like at the reference posture, where all displacement is zero.

    Attributes
    ----------
    markers : shape (M, 3), m, bone frame of each marker's segment
    joint_centres : shape (J, 2, 3), m, in the proximal and in the distal bone frame;
        NaN where the lab names no centre
    angles : shape (J, 3), rad, in the order of each joint's own dof names
    poses : shape (S, 4, 4), m, lab ← bone; NaN where unknown
    marker_sd : shape (M,), m, spread of one coordinate over the frames used; NaN where
        the reference is a table of points or one frame
    kind : "static", "points" or "bone"
    notes : what was assumed or chosen, in words
    frame_offset : shape (S, 4, 4), m, imaging ← bone: a bone truth table's pose times it
        is the pose of the study's bone frame; identity where both frames are one
    """

    markers: FloatArray
    joint_centres: FloatArray
    angles: FloatArray
    poses: FloatArray
    marker_sd: FloatArray
    kind: Literal["static", "points", "bone"]
    notes: tuple[str, ...]
    frame_offset: FloatArray


def reference_from_frames(
    lab: Lab,
    points: Mapping[str, FloatArray],
    spread: Mapping[str, float],
    imaging: FloatArray,
    place: Place,
    notes: tuple[str, ...] = (),
) -> Reference:
    """Build the reference from points and bone poses that were seen together.

    Parameters
    ----------
    lab : of the subject's side
    points : for each marker, frame point and joint-centre point shape (n, 3), m, lab
        frame: n frames, or one frame that stands for a whole static trial
    spread : for each marker, m, as in Reference.marker_sd
    imaging : shape (n, S, 4, 4), m, lab ← imaging frame of each bone; NaN where unknown
    place : of the subject, for messages
    notes : words to start the reference's notes with

    Returns
    -------
    Reference of kind "static", or "bone" where a segment has its axes from imaging.

    Raises
    ------
    InputError : a segment with imaging axes has no pose.
    NotDeterminedError : landmarks that give no axes; markers nearly on a line.
    """
    poses = np.full_like(imaging, np.nan)
    offset = np.broadcast_to(np.eye(4), (len(lab.segments), 4, 4)).copy()
    for index, segment in enumerate(lab.segments):
        if segment.frame is None:
            poses[:, index] = imaging[:, index]
            continue
        poses[:, index] = frame_pose(segment.frame, points, (*place, f"segment.{segment.name}.frame"))
        relative = mean_pose(inverse(imaging[:, index]) @ poses[:, index])
        if not np.isnan(relative).any():
            offset[index] = relative
            notes = (*notes, f"bone truth of {segment.name} is restated in the frame of its landmarks")
    stacked = np.stack([points[name] for name in lab.markers], axis=1)
    own_pose = poses[:, lab.marker_segment]
    markers = _frame_mean(transform_points(inverse(own_pose), stacked[:, :, None, :])[:, :, 0, :])
    centres = np.full((len(lab.joints), 2, 3), np.nan)
    for index, joint in enumerate(lab.joints):
        if joint.centre:
            centre = mean_point(joint.centre, points)[:, None, :]
            for end, name in enumerate((joint.proximal, joint.distal)):
                bone = poses[:, lab.segment_index(name)]
                centres[index, end] = _frame_mean(transform_points(inverse(bone), centre)[:, 0, :])
    mean_poses = np.stack([mean_pose(poses[:, index]) for index in range(len(lab.segments))])
    from_imaging = any(segment.frame is None for segment in lab.segments)
    reference = Reference(
        markers=markers,
        joint_centres=centres,
        angles=reference_angles(lab, mean_poses),
        poses=mean_poses,
        marker_sd=np.array([spread[name] for name in lab.markers]),
        kind="bone" if from_imaging else "static",
        notes=notes,
        frame_offset=offset,
    )
    check_layout(lab, reference, place)
    check_axes(lab, reference, place)
    return reference


def reference_from_points(
    lab: Lab,
    table: Mapping[tuple[str, str], FloatArray],
    imaging: FloatArray,
    place: Place,
) -> Reference:
    """Build the reference from positions that were measured in the bone frame.

    Parameters
    ----------
    lab : of the subject's side
    table : (segment, point) → shape (3,), m, bone frame
    imaging : shape (S, 4, 4), m, lab ← bone frame of the table at the reference posture;
        NaN where unknown: then the joint angles there are taken as zero
    place : of the table, for messages

    Returns
    -------
    Reference of kind "points".

    Raises
    ------
    InputError : no row for a marker or for a joint centre in one of its segments.
    NotDeterminedError : landmarks that give no axes; markers nearly on a line.

    Warns
    -----
    StaPriorWarning : no bone pose at the reference posture; doubtful layout.
    """
    notes: list[str] = []
    offset = np.broadcast_to(np.eye(4), (len(lab.segments), 4, 4)).copy()
    for index, segment in enumerate(lab.segments):
        own = {point: position for (name, point), position in table.items() if name == segment.name}
        if segment.frame is not None and set(segment.frame.points) <= set(own):
            offset[index] = frame_pose(segment.frame, own, (*place, f"segment.{segment.name}.frame"))
            notes.append(f"{segment.name}: positions are restated in the frame of the landmarks in the table")
        elif segment.frame is not None:
            notes.append(f"{segment.name}: positions are taken as given in the lab file's frame")
    bone_from_table = inverse(offset)
    markers = np.stack(
        [
            _row(table, lab.segments[index].name, name, f"marker {name}", place)
            for name, index in zip(lab.markers, lab.marker_segment, strict=True)
        ]
    )
    markers = transform_points(bone_from_table[lab.marker_segment], markers[:, None, :])[:, 0, :]
    centres = np.full((len(lab.joints), 2, 3), np.nan)
    for index, joint in enumerate(lab.joints):
        for end, segment_name in enumerate((joint.proximal, joint.distal)):
            if joint.centre:
                what = f"joint.{joint.name}.centre"
                own = {name: _row(table, segment_name, name, what, place) for name in joint.centre}
                centre = mean_point(joint.centre, own)[None, :]
                bone = bone_from_table[lab.segment_index(segment_name)]
                centres[index, end] = transform_points(bone, centre)[0]
    poses = imaging @ offset
    angles = reference_angles(lab, poses)
    unknown = [joint.name for joint, angle in zip(lab.joints, angles, strict=True) if np.isnan(angle).any()]
    if unknown:
        angles = np.where(np.isnan(angles), 0.0, angles)
        text = f"no bone pose at the reference posture, the angles of {' '.join(unknown)} are taken as zero"
        notes.append(text)
        warnings.warn(
            message(place, text, "Give bone_static if the posture was not the zero of the bone frames."),
            StaPriorWarning,
            stacklevel=2,
        )
    reference = Reference(
        markers=markers,
        joint_centres=centres,
        angles=angles,
        poses=poses,
        marker_sd=np.full(len(markers), np.nan),
        kind="points",
        notes=tuple(notes),
        frame_offset=offset,
    )
    check_layout(lab, reference, place)
    check_axes(lab, reference, place)
    return reference


def reference_angles(lab: Lab, poses: FloatArray) -> FloatArray:
    """Return the joint angles of bone poses, shape (S, 4, 4) → (J, 3), rad; NaN where a bone is unknown."""
    angles = np.full((len(lab.joints), 3), np.nan)
    for index, joint in enumerate(lab.joints):
        proximal = poses[lab.segment_index(joint.proximal)]
        distal = poses[lab.segment_index(joint.distal)]
        angles[index] = joint_angles(joint.convention, rotation_of(inverse(proximal) @ distal))
    return angles


def check_layout(lab: Lab, reference: Reference, place: Place) -> None:
    """Refuse marker clusters near a line; warn of markers that coincide or lie far off their bone.

    Raises
    ------
    NotDeterminedError : the extent of a cluster across its longest line is below 5 % of
        that along it.

    Warns
    -----
    StaPriorWarning : two markers of a segment closer than 5 mm; a marker over 1 m from
        the origin of its bone, as when static trial and bone poses have different lab frames.
    """
    for index, segment in enumerate(lab.segments):
        cluster = reference.markers[lab.marker_segment == index]
        where = (*place, f"segment {segment.name}")
        ratio = float(fit_rigid(cluster, cluster).line_ratio)
        if ratio < SMALLEST_LINE_RATIO:
            raise NotDeterminedError(
                message(
                    where,
                    f"markers {' '.join(segment.markers)} lie near a line, extent across it is "
                    f"{100 * ratio:.1f} % of that along it, expected at least "
                    f"{100 * SMALLEST_LINE_RATIO:.0f} %",
                    "Add a marker off the line.",
                )
            )
        gaps = np.linalg.norm(cluster[:, None, :] - cluster[None, :, :], axis=-1)
        gaps[np.tril_indices(len(gaps))] = np.inf
        first, second = np.unravel_index(int(gaps.argmin()), gaps.shape)
        if gaps[first, second] < SMALLEST_DISTANCE:
            _warn(
                where,
                f"markers {segment.markers[first]} and {segment.markers[second]} are "
                f"{gaps[first, second] * 1e3:.1f} mm apart, expected at least "
                f"{SMALLEST_DISTANCE * 1e3:.0f} mm",
                "Check that they are not one marker under two labels.",
            )
        distance = np.linalg.norm(cluster, axis=-1)
        far = int(distance.argmax())
        if distance[far] > LARGEST_DISTANCE:
            _warn(
                where,
                f"marker {segment.markers[far]} is {distance[far]:.2f} m from the origin of its bone, "
                f"expected at most {LARGEST_DISTANCE:.0f} m",
                "Check that marker and bone positions have one lab frame and the right units.",
            )


def check_axes(lab: Lab, reference: Reference, place: Place) -> None:
    """Warn of bone axes that cannot all follow x forward, y up, z right.

    Warns
    -----
    StaPriorWarning : the z axes of the two bones of a knee, hip or ankle point to
        opposite sides; in a lab that declares `up`, the y axis of a landmark frame points
        down, or none stands up.
    """
    rotations = rotation_of(reference.poses)
    for joint in lab.joints:
        ends = [rotations[lab.segment_index(name)][:, 2] for name in (joint.proximal, joint.distal)]
        if joint.convention.kind != "cardan" and ends[0] @ ends[1] < 0:
            apart = np.rad2deg(np.arccos(np.clip(ends[0] @ ends[1], -1, 1)))
            _warn(
                (*place, f"joint {joint.name}"),
                f"the z axes of {joint.proximal} and {joint.distal} are {apart:.0f}° apart in the reference "
                "posture, expected both to point to the right of the body",
                "Check the side, and from and to of z.",
            )
    if not lab.up_declared:
        return
    tilts = np.rad2deg(np.arccos(np.clip(rotations[:, :, 1] @ lab.up_vector, -1, 1)))
    landmark = {s.name: tilt for s, tilt in zip(lab.segments, tilts, strict=True) if s.frame is not None}
    for name, tilt in landmark.items():
        if tilt > DOWNWARD:
            _warn(
                (*place, f"segment {name}"),
                f"the y axis is {tilt:.0f}° from the lab's {lab.up} axis in the reference posture, "
                "expected y to point up",
                "Check up, and from and to of y.",
            )
    if landmark and all(LYING < tilt <= DOWNWARD for tilt in landmark.values()):
        angles = " ".join(f"{name} {tilt:.0f}°" for name, tilt in landmark.items())
        _warn(
            place,
            f"no bone stands along the lab's {lab.up} axis in the reference posture, "
            f"y axes are off by {angles}",
            "Check up, unless the subject lay or sat.",
        )


def _frame_mean(values: FloatArray) -> FloatArray:
    """Mean over the first axis of what is there, shape (n, ..., 3) → (..., 3); NaN where nothing is."""
    seen = np.isfinite(values).all(axis=-1, keepdims=True)
    count = seen.sum(axis=0)
    total = np.where(seen, values, 0.0).sum(axis=0)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)


def _row(
    table: Mapping[tuple[str, str], FloatArray], segment: str, point: str, what: str, place: Place
) -> FloatArray:
    """Return the position of a point in a segment's frame, or say which row is missing."""
    if (segment, point) not in table:
        known = [name for owner, name in table if owner == segment]
        raise InputError(
            message(
                (*place, what),
                f"no row {segment},{point}",
                nearest(point, known) or f"Add the position of {point} in the frame of {segment}.",
            )
        )
    return np.asarray(table[segment, point], dtype=np.float64)


def _warn(place: Place, wrong: str, do: str) -> None:
    """Warn in the package's form."""
    warnings.warn(message(place, wrong, do), StaPriorWarning, stacklevel=4)
