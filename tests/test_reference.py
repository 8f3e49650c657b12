"""The reference posture: its three kinds, against a leg of known frames, and what is noticed."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from made_studies import (
    IMAGING_LAB,
    KNEE_IN_SHANK,
    LAB,
    SHANK,
    SHANK_MARKERS,
    STUDY,
    THIGH,
    THIGH_MARKERS,
    leg_points,
    leg_poses,
    make_study,
    reference_rows,
    says,
    still,
    warns,
    write_bones,
    write_points,
    write_reference,
)
from scipy.spatial.transform import Rotation

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, NotDeterminedError
from sta_prior.se3 import inverse, make_pose, relative_difference
from sta_prior.study import Reference, read_study

BONES = ("thigh", "shank")
MARKERS = np.array([THIGH[name] for name in THIGH_MARKERS] + [SHANK[name] for name in SHANK_MARKERS])
WITH_BONE_STATIC = STUDY.replace('static = "static.csv"', 'static = "static.csv"\nbone_static = "bones.csv"')
POINTS_STUDY = STUDY.replace('static = "static.csv"', 'reference_points = "reference.csv"')


def reference_of(path: Path) -> Reference:
    return read_study(path).subjects[0].reference()


def turned(poses: FloatArray) -> FloatArray:
    """Imaging frames that differ from the landmark frames by a constant of each bone."""
    offset = make_pose(
        Rotation.from_euler("xyz", [[10, 20, 30], [-40, 5, 60]], degrees=True).as_matrix(),
        np.array([[0.02, -0.3, 0.01], [0.0, 0.1, 0.03]]),
    )
    return poses @ inverse(offset)


# Kind 1: static trial and landmarks


@pytest.mark.parametrize("side", ["right", "left"])
def test_landmark_frames_give_back_markers_centres_and_angles(tmp_path, side):
    study = STUDY.replace('id = "P01"', f'id = "P01"\nside = "{side}"')
    path = make_study(tmp_path, study=study, angles=(12.0, -4.0, 6.0), side=side)
    reference = reference_of(path)
    sign = np.array([1.0, 1.0, -1.0 if side == "left" else 1.0])
    assert reference.kind == "static"
    np.testing.assert_allclose(reference.markers, MARKERS * sign, atol=1e-9)
    np.testing.assert_allclose(reference.poses, leg_poses((12.0, -4.0, 6.0), side), atol=1e-9)
    # anatomical angles have one sign on both sides of the body
    np.testing.assert_allclose(np.rad2deg(reference.angles), [[12.0, -4.0, 6.0]], atol=1e-6)
    np.testing.assert_allclose(reference.joint_centres, [[[0, -0.40, 0], KNEE_IN_SHANK]], atol=1e-9)
    np.testing.assert_array_equal(reference.frame_offset, np.broadcast_to(np.eye(4), (2, 4, 4)))
    np.testing.assert_array_equal(reference.marker_sd, 0.0)
    assert reference.notes == ()


def test_moving_the_lab_frame_changes_poses_only(tmp_path):
    path = make_study(tmp_path)
    before = reference_of(path)
    move = make_pose(Rotation.from_euler("y", 130, degrees=True).as_matrix(), [1.0, 0.1, -2.0])
    write_points(tmp_path / "static.csv", still(leg_points(move @ leg_poses()), 40))
    after = reference_of(path)
    np.testing.assert_allclose(after.markers, before.markers, atol=1e-9)
    np.testing.assert_allclose(after.angles, before.angles, atol=1e-9)
    np.testing.assert_allclose(after.poses, move @ before.poses, atol=1e-9)


def test_noise_is_averaged_and_its_size_reported(tmp_path):
    path = make_study(tmp_path)
    write_points(tmp_path / "static.csv", still(leg_points(leg_poses()), 400, sd=0.0004, seed=3))
    reference = reference_of(path)
    # a median of 400 has an SD of 1.25 × 0.4 mm / 20 = 0.025 mm; landmarks add their own
    np.testing.assert_allclose(reference.markers, MARKERS, atol=2e-4)
    # 400 × 3 coordinates: the robust SD is known to about 3 %
    np.testing.assert_allclose(reference.marker_sd, 0.0004, rtol=0.2)


def test_stray_frames_and_hidden_points_do_not_move_the_average(tmp_path):
    path = make_study(tmp_path)
    points = still(leg_points(leg_poses()), 60)
    points["TB"][:9] += 0.4
    points["LCO"][20:40] = np.nan
    write_points(tmp_path / "static.csv", points)
    reference = reference_of(path)
    np.testing.assert_allclose(reference.markers, MARKERS, atol=1e-9)
    assert reference.notes == ()


def test_frames_that_show_every_point_are_preferred(tmp_path):
    path = make_study(tmp_path)
    points = still(leg_points(leg_poses()), 60)
    points["LCO"][12:] = np.nan
    for xyz in points.values():
        xyz[12:] += 0.03  # the subject has stepped aside when LCO is lost
    write_points(tmp_path / "static.csv", points)
    reference = reference_of(path)
    np.testing.assert_allclose(reference.markers, MARKERS, atol=1e-9)
    np.testing.assert_allclose(reference.poses, leg_poses(), atol=1e-9)


def test_points_never_seen_together_are_averaged_each_on_its_own(tmp_path):
    path = make_study(tmp_path)
    points = still(leg_points(leg_poses()), 60)
    points["TB"][:30] = np.nan
    points["LCO"][30:] = np.nan
    write_points(tmp_path / "static.csv", points)
    reference = reference_of(path)
    np.testing.assert_allclose(reference.markers, MARKERS, atol=1e-9)
    assert reference.notes == (
        "0 of 60 static frames show every point: each point is averaged over its own frames",
    )


def test_a_subject_who_moves_is_noticed(tmp_path):
    path = make_study(tmp_path)
    points = still(leg_points(leg_poses()), 101)
    sway = np.linspace(-0.010, 0.010, 101)
    for name, xyz in points.items():
        xyz[:, 0] += sway * (1.2 if name == "TA" else 0.5)
    write_points(tmp_path / "static.csv", points)
    # even sway over ±12 mm: median deviation 6 mm, and 1.4826 of it is 8.9 mm; the others sway ±5 mm, 3.7 mm
    with warns(
        f"{tmp_path / 'static.csv'}, point TA: the subject moved, SD 8.9 mm, expected at most 5 mm "
        "(1 of 15 points). Use a quieter static trial."
    ):
        reference = reference_of(path)
    assert reference.notes == ("the subject moved in the static trial",)


# Kind 2: positions measured in the bone frame


@pytest.mark.parametrize("side", ["right", "left"])
def test_reference_points_with_the_pose_of_the_bones(tmp_path, side):
    lab = IMAGING_LAB.replace('["LEP", "MEP"]', '["KJC"]')
    study = POINTS_STUDY.replace("mass_kg", f'bone_static = "bones.csv"\nside = "{side}"\nmass_kg')
    write_reference(tmp_path / "reference.csv", reference_rows(side))
    write_bones(tmp_path / "bones.csv", BONES, np.zeros(1), leg_poses((40.0, 3.0, -8.0), side)[None])
    reference = reference_of(make_study(tmp_path, lab=lab, study=study))
    assert reference.kind == "points"
    assert reference.notes == ()
    sign = np.array([1.0, 1.0, -1.0 if side == "left" else 1.0])
    np.testing.assert_allclose(reference.markers, MARKERS * sign, atol=1e-12)
    np.testing.assert_allclose(np.rad2deg(reference.angles), [[40.0, 3.0, -8.0]], atol=1e-6)
    np.testing.assert_allclose(reference.joint_centres, [[[0, -0.40, 0], KNEE_IN_SHANK]], atol=1e-12)
    assert np.isnan(reference.marker_sd).all()


def test_without_the_pose_of_the_bones_the_angles_are_taken_as_zero(tmp_path):
    lab = IMAGING_LAB.replace('["LEP", "MEP"]', '["KJC"]')
    write_reference(tmp_path / "reference.csv", reference_rows())
    path = make_study(tmp_path, lab=lab, study=POINTS_STUDY)
    with warns(
        f"{tmp_path / 'reference.csv'}: no bone pose at the reference posture, the angles of knee are taken "
        "as zero. Give bone_static if the posture was not the zero of the bone frames."
    ):
        reference = reference_of(path)
    np.testing.assert_array_equal(reference.angles, [[0.0, 0.0, 0.0]])
    assert np.isnan(reference.poses).all()
    assert reference.notes == ("no bone pose at the reference posture, the angles of knee are taken as zero",)


def test_landmarks_in_the_table_restate_the_positions_in_the_recipe_s_frame(tmp_path):
    # the table is in an imaging frame; its landmark rows tell where the recipe's frame lies in it
    poses = leg_poses((40.0, 3.0, -8.0))
    imaging = turned(poses)
    in_imaging = {}
    for index, (name, bone) in enumerate(zip(BONES, (THIGH, SHANK), strict=True)):
        shift = inverse(imaging[index]) @ poses[index]
        for point, xyz in bone.items():
            in_imaging[name, point] = tuple(shift[:3, :3] @ xyz + shift[:3, 3])
        for point in ("LEP", "MEP"):
            centre = poses[0][:3, :3] @ THIGH[point] + poses[0][:3, 3]
            in_imaging[name, point] = tuple((inverse(imaging[index]) @ np.append(centre, 1.0))[:3])
    write_reference(tmp_path / "reference.csv", in_imaging)
    write_bones(tmp_path / "bones.csv", BONES, np.zeros(1), imaging[None])
    study = POINTS_STUDY.replace("mass_kg", 'bone_static = "bones.csv"\nmass_kg')
    reference = reference_of(make_study(tmp_path, study=study))
    np.testing.assert_allclose(reference.markers, MARKERS, atol=1e-9)
    np.testing.assert_allclose(reference.poses, poses, atol=1e-7)
    np.testing.assert_allclose(np.rad2deg(reference.angles), [[40.0, 3.0, -8.0]], atol=1e-5)
    np.testing.assert_allclose(reference.frame_offset, inverse(imaging) @ poses, atol=1e-7)
    np.testing.assert_allclose(reference.joint_centres, [[[0, -0.40, 0], KNEE_IN_SHANK]], atol=1e-7)


@pytest.mark.parametrize(
    ("dropped", "expected"),
    [
        (("thigh", "TB"), ", marker TB: no row thigh,TB. Did you mean TD?"),
        (
            ("shank", "KJC"),
            ", joint.knee.centre: no row shank,KJC. Add the position of KJC in the frame of shank.",
        ),
    ],
)
def test_a_missing_row_is_named(tmp_path, dropped, expected):
    rows = {key: xyz for key, xyz in reference_rows().items() if key != dropped}
    write_reference(tmp_path / "reference.csv", rows)
    lab = IMAGING_LAB.replace('["LEP", "MEP"]', '["KJC"]')
    path = make_study(tmp_path, lab=lab, study=POINTS_STUDY)
    with says(InputError, f"{tmp_path / 'reference.csv'}{expected}"):
        reference_of(path)


# Kind 3: axes from imaging


def test_imaging_axes_from_bone_static(tmp_path):
    poses = turned(leg_poses((12.0, -4.0, 6.0)))
    spread = np.array([[0.001, 0.0, 0.0], [-0.001, 0.0, 0.0], [0.0, 0.0, 0.0]])
    rows = np.repeat(poses[None], 3, axis=0)
    rows[:, :, :3, 3] += spread[:, None, :]
    path = make_study(tmp_path, lab=IMAGING_LAB, study=WITH_BONE_STATIC, angles=(12.0, -4.0, 6.0))
    write_bones(tmp_path / "bones.csv", BONES, np.arange(3.0), rows)
    reference = reference_of(path)
    assert reference.kind == "bone"
    np.testing.assert_allclose(reference.poses, poses, atol=1e-8)
    lab_markers = [
        leg_points(leg_poses((12.0, -4.0, 6.0)))[name] for name in (*THIGH_MARKERS, *SHANK_MARKERS)
    ]
    back = np.repeat(reference.poses, 4, axis=0)
    rebuilt = np.einsum("mij,mj->mi", back[:, :3, :3], reference.markers) + back[:, :3, 3]
    np.testing.assert_allclose(rebuilt, lab_markers, atol=1e-8)
    # the centre lies in both bones at one place of the lab
    ends = [poses[k] @ np.append(reference.joint_centres[0, k], 1.0) for k in (0, 1)]
    np.testing.assert_allclose(ends[0], ends[1], atol=1e-8)
    np.testing.assert_array_equal(reference.frame_offset, np.broadcast_to(np.eye(4), (2, 4, 4)))


def test_landmark_frames_with_bone_static_give_the_offset_of_the_bone_truth(tmp_path):
    poses = leg_poses((5.0, 2.0, -3.0))
    path = make_study(tmp_path, study=WITH_BONE_STATIC)
    write_bones(tmp_path / "bones.csv", BONES, np.zeros(1), turned(poses)[None])
    reference = reference_of(path)
    assert reference.kind == "static"
    np.testing.assert_allclose(reference.poses, poses, atol=1e-8)
    # imaging ← bone: a table's pose times the offset is the landmark frame's pose
    np.testing.assert_allclose(turned(poses) @ reference.frame_offset, poses, atol=1e-7)
    assert reference.notes == (
        "bone truth of thigh is restated in the frame of its landmarks",
        "bone truth of shank is restated in the frame of its landmarks",
    )


def test_bone_truth_at_the_reference_where_the_static_file_is_a_trial(tmp_path):
    lab = IMAGING_LAB
    study = STUDY.replace('static = "static.csv"', 'static = "stairs.csv"')
    reference = reference_of(make_study(tmp_path, lab=lab, study=study))
    # bone truth begins with frame 10 of 30: flexion 5° + 10/29 · 30°; ten frames lie within 0.1 s
    assert reference.kind == "bone"
    assert reference.notes == ("bone truth at the reference: 10 frames of the static file, 0.100–0.190 s",)
    np.testing.assert_allclose(reference.markers, MARKERS, atol=1e-8)
    middle = 5.0 + 30.0 * 14.5 / 29.0
    np.testing.assert_allclose(np.rad2deg(reference.angles), [[middle, 2.0, -3.0]], atol=1e-3)
    np.testing.assert_allclose(reference.joint_centres[0, 1], KNEE_IN_SHANK, atol=1e-8)
    assert np.isnan(reference.marker_sd).all()


@pytest.mark.parametrize(
    ("rate", "note"),
    [
        (50.0, "6 frames of the static file, 0.000–0.100 s"),
        (500.0, "10 frames of the static file, 0.000–0.018 s"),
    ],
)
def test_the_first_tenth_of_a_second_counts_and_at_most_ten_frames(tmp_path, rate, note):
    study = STUDY.replace('static = "static.csv"', 'static = "stairs.csv"')
    path = make_study(tmp_path, lab=IMAGING_LAB, study=study)
    poses = np.stack([leg_poses((f, 2.0, -3.0)) for f in np.linspace(5.0, 35.0, 30)])
    write_points(tmp_path / "stairs.csv", leg_points(poses), rate)
    write_bones(tmp_path / "stairs_bone.csv", BONES, np.arange(30) / rate, poses)
    reference = reference_of(path)
    assert reference.notes == (f"bone truth at the reference: {note}",)


def test_bone_static_stands_over_a_trial_that_is_the_static_file(tmp_path):
    study = WITH_BONE_STATIC.replace('static = "static.csv"', 'static = "stairs.csv"')
    path = make_study(tmp_path, lab=IMAGING_LAB, study=study)
    write_points(tmp_path / "stairs.csv", still(leg_points(leg_poses()), 30))
    write_bones(tmp_path / "bones.csv", BONES, np.zeros(1), turned(leg_poses())[None])
    np.testing.assert_allclose(reference_of(path).poses, turned(leg_poses()), atol=1e-9)


def test_frames_that_hide_a_marker_are_passed_over(tmp_path):
    study = STUDY.replace('static = "static.csv"', 'static = "stairs.csv"')
    path = make_study(tmp_path, lab=IMAGING_LAB, study=study)
    moving = leg_points(np.stack([leg_poses((f, 2.0, -3.0)) for f in np.linspace(5.0, 35.0, 30)]))
    moving["TC"][:16] = np.nan
    write_points(tmp_path / "stairs.csv", moving)
    reference = reference_of(path)
    assert reference.notes == ("bone truth at the reference: 4 frames of the static file, 0.160–0.190 s",)
    moving["SA"][16:] = np.nan
    write_points(tmp_path / "stairs.csv", moving)
    with says(
        InputError,
        f"{tmp_path / 'stairs.csv'}: no frame shows every point and the bones: 0 frames show every point, "
        "10 bone-truth rows show the bones. Give bone_static for the static trial.",
    ):
        reference_of(path)


@pytest.mark.parametrize("key", ["clock", "space"])
def test_bone_truth_that_is_not_aligned_gives_no_reference(tmp_path, key):
    study = STUDY.replace('static = "static.csv"', 'static = "stairs.csv"') + f'{key} = "estimate"\n'
    path = make_study(tmp_path, lab=IMAGING_LAB, study=study)
    with says(
        InputError,
        f'{path}, subject P01, segment thigh: frame = "imaging" but no bone_static, and the static file is '
        "not the skin file of a trial with bone truth in shared clock and space. Add bone_static.",
    ):
        reference_of(path)


def test_bone_static_without_a_segment_is_named(tmp_path):
    path = make_study(tmp_path, lab=IMAGING_LAB, study=WITH_BONE_STATIC)
    write_bones(tmp_path / "bones.csv", ("thigh",), np.zeros(1), leg_poses()[None, :1])
    with says(
        InputError,
        f'{tmp_path / "bones.csv"}, segment shank: no pose, expected one for frame = "imaging". '
        "Add it, or give the segment a recipe.",
    ):
        reference_of(path)


def test_a_bone_that_moves_in_bone_static_is_noticed(tmp_path):
    path = make_study(tmp_path, lab=IMAGING_LAB, study=WITH_BONE_STATIC)
    rows = np.stack([leg_poses((f, 2.0, -3.0)) for f in (2.0, 8.0)])
    write_bones(tmp_path / "bones.csv", BONES, np.arange(2.0), rows)
    shift = np.std(rows[:, 1, :3, 3], axis=0).max() * 1e3
    with warns(
        f"{tmp_path / 'bones.csv'}, segment shank: the bone moved, SD 3.0° and {shift:.1f} mm, "
        "expected at most 2° and 5 mm. Keep only the rows of the reference posture."
    ):
        reference_of(path)


# What is noticed in the layout


def test_a_static_trial_without_a_frame_point_is_named(tmp_path):
    path = make_study(tmp_path)
    points = still(leg_points(leg_poses()), 20)
    for missing, text in [
        ("LMA", ", segment.shank.frame: no point LMA. Did you mean MMA?"),
        (
            "HJC",
            ", segment.thigh.frame: no point HJC. "
            "A joint centre is no marker: add it to the file as a calculated point.",
        ),
        ("TB", ", segment.thigh.markers: no point TB. Did you mean TD?"),
    ]:
        write_points(tmp_path / "static.csv", {k: v for k, v in points.items() if k != missing})
        with says(InputError, f"{tmp_path / 'static.csv'}{text}"):
            reference_of(path)


def test_absent_hip_joint_centres_are_named(tmp_path):
    lab = IMAGING_LAB.replace('["LEP", "MEP"]', '["RHJC", "LHJC"]')
    path = make_study(tmp_path, lab=lab, study=WITH_BONE_STATIC.replace("bones.csv", "stairs_bone.csv"))
    points = {k: v for k, v in still(leg_points(leg_poses()), 20).items() if k != "HJC"}
    write_points(tmp_path / "static.csv", points)
    with says(
        InputError,
        f"{tmp_path / 'static.csv'}, joint.knee.centre: no points RHJC LHJC. "
        "A joint centre is no marker: add it to the file as a calculated point.",
    ):
        reference_of(path)


def test_a_marker_never_seen_is_named(tmp_path):
    path = make_study(tmp_path)
    points = still(leg_points(leg_poses()), 25)
    points["SC"][:] = np.nan
    write_points(tmp_path / "static.csv", points)
    with says(
        InputError,
        f"{tmp_path / 'static.csv'}, point SC: not seen in any of 25 frames. "
        "Take another static trial, or leave the point out of the lab file.",
    ):
        reference_of(path)


def test_markers_on_a_line_are_refused(tmp_path):
    path = make_study(tmp_path)
    points = leg_points(leg_poses())
    along = points["TB"] - points["TA"]
    across = np.cross(along, [0.0, 0.0, 1.0]) * 0.02 / np.linalg.norm(along)
    points["TC"] = points["TA"] + 0.5 * along + across * np.linalg.norm(along)
    points["TD"] = points["TA"] + 0.3 * along
    write_points(tmp_path / "static.csv", still(points, 20))
    cluster = np.stack([points[name] for name in THIGH_MARKERS])
    extent = np.linalg.svd(cluster - cluster.mean(axis=0), compute_uv=False)
    with says(
        NotDeterminedError,
        f"{tmp_path / 'static.csv'}, segment thigh: markers TA TB TC TD lie near a line, extent across it is "
        f"{100 * np.hypot(extent[1], extent[2]) / extent[0]:.1f} % of that along it, expected at least 5 %. "
        "Add a marker off the line.",
    ):
        reference_of(path)


def test_markers_at_one_place_are_noticed(tmp_path):
    path = make_study(tmp_path)
    points = leg_points(leg_poses())
    points["SC"] = points["SA"] + np.array([0.0, 0.0032, 0.0])
    write_points(tmp_path / "static.csv", still(points, 20))
    with warns(
        f"{tmp_path / 'static.csv'}, segment shank: markers SA and SC are 3.2 mm apart, expected at least "
        "5 mm. Check that they are not one marker under two labels."
    ):
        reference_of(path)


def test_bones_in_another_lab_frame_are_noticed(tmp_path):
    path = make_study(tmp_path, lab=IMAGING_LAB, study=WITH_BONE_STATIC)
    poses = leg_poses()
    poses[:, :3, 3] += [2.0, 0.0, 0.0]
    write_bones(tmp_path / "bones.csv", BONES, np.zeros(1), poses[None])
    far = []
    for name, labels, bone, pose in (
        ("thigh", THIGH_MARKERS, THIGH, poses[0]),
        ("shank", SHANK_MARKERS, SHANK, poses[1]),
    ):
        shift = pose[:3, :3].T @ [-2.0, 0.0, 0.0]
        distance = [np.linalg.norm(np.array(bone[label]) + shift) for label in labels]
        worst = int(np.argmax(distance))
        far.append(
            f"{tmp_path / 'static.csv'}, segment {name}: marker {labels[worst]} is {distance[worst]:.2f} m "
            "from the origin of its bone, expected at most 1 m. "
            "Check that marker and bone positions have one lab frame and the right units."
        )
    with warns(*far):
        reference_of(path)


def test_z_axes_to_opposite_sides_are_noticed(tmp_path):
    path = make_study(
        tmp_path, lab=LAB.replace('from = ["MEP"], to = ["LEP"]', 'from = ["LEP"], to = ["MEP"]')
    )
    with warns(
        f"{tmp_path / 'static.csv'}, joint knee: the z axes of thigh and shank are 176° apart in the "
        "reference posture, expected both to point to the right of the body. "
        "Check the side, and from and to of z."
    ):
        reference_of(path)


def test_z_axes_to_opposite_sides_are_noticed_in_bone_tables_too(tmp_path):
    poses = leg_poses((0.0, 0.0, 0.0))
    poses[1, :3, :3] = poses[1, :3, :3] @ np.diag([-1.0, 1.0, -1.0])
    lab = IMAGING_LAB.replace('["LEP", "MEP"]', '["KJC"]')
    study = POINTS_STUDY.replace("mass_kg", 'bone_static = "bones.csv"\nmass_kg')
    write_reference(tmp_path / "reference.csv", reference_rows())
    write_bones(tmp_path / "bones.csv", BONES, np.zeros(1), poses[None])
    path = make_study(tmp_path, lab=lab, study=study)
    with warns(
        f"{tmp_path / 'reference.csv'}, joint knee: the z axes of thigh and shank are 180° apart in the "
        "reference posture, expected both to point to the right of the body. "
        "Check the side, and from and to of z."
    ):
        reference_of(path)


def test_a_y_axis_that_points_down_is_noticed(tmp_path):
    upside_down = 'from = ["HJC"], to = ["LEP", "MEP"]'
    path = make_study(tmp_path, lab=LAB.replace('from = ["LEP", "MEP"], to = ["HJC"]', upside_down))
    with warns(
        f"{tmp_path / 'static.csv'}, segment thigh: the y axis is 180° from the lab's y axis in the "
        "reference posture, expected y to point up. Check up, and from and to of y."
    ):
        reference_of(path)


def test_an_up_axis_that_no_bone_follows_is_noticed(tmp_path):
    path = make_study(tmp_path, lab=LAB.replace('up = "y"', 'up = "x"'))
    tilts = np.rad2deg(np.arccos(leg_poses()[:, 0, 1]))
    with warns(
        f"{tmp_path / 'static.csv'}: no bone stands along the lab's x axis in the reference posture, y axes "
        f"are off by thigh {tilts[0]:.0f}° shank {tilts[1]:.0f}°. Check up, unless the subject lay or sat."
    ):
        reference_of(path)


def test_free_joint_without_a_centre_has_none(tmp_path):
    lab = LAB.replace("5.0", '"free"').replace('centre = ["LEP", "MEP"]\n', "")
    reference = reference_of(make_study(tmp_path, lab=lab))
    assert np.isnan(reference.joint_centres).all()
    assert np.isfinite(reference.angles).all()


# Real data: open sample of Cereatti et al. (2017), J Biomech 62, 5–13, doi 10.1016/j.jbiomech.2017.02.004

PAIRED = Path(__file__).parents[2] / "shared" / "data" / "paired"
# Range of plausible knee flexion at each subject's reference, deg: the tasks named in the data's description.
REAL = {
    ("pins-able", "R01"): (0, 60),
    ("cadaver-pins", "R01"): (-10, 30),
    ("fluoro-able", "R01"): (90, 130),
    ("fluoro-able", "R02"): (-10, 40),
    ("fluoro-prosthesis", "R01"): (30, 100),
}


@pytest.mark.parametrize(("folder", "subject_id"), REAL)
def test_real_reference_angles_are_plausible(folder, subject_id):
    if not (PAIRED / folder).is_dir():
        pytest.skip(f"real data not here: {PAIRED / folder}")
    subject = read_study(PAIRED / folder / "study.toml").subject(subject_id)
    reference = subject.reference()
    flexion, adduction, internal = np.rad2deg(reference.angles[0])
    low, high = REAL[folder, subject_id]
    assert low < flexion < high
    assert abs(adduction) < 15
    assert abs(internal) < 45
    assert reference.kind == "points"
    # the knee centre is one place, seen from both bones, to within its travel
    ends = [reference.poses[k] @ np.append(reference.joint_centres[0, k], 1.0) for k in (0, 1)]
    assert np.linalg.norm(ends[0] - ends[1]) < 0.015
    assert np.linalg.norm(reference.markers, axis=1).max() < 0.5


def test_real_reference_is_the_first_frame_of_its_trial():
    # the reference of this set is "simply the first valid frames" (its description)
    if not (PAIRED / "pins-able").is_dir():
        pytest.skip(f"real data not here: {PAIRED / 'pins-able'}")
    study = read_study(PAIRED / "pins-able" / "study.toml")
    trial, reference = study.trial("R01", "walking"), study.subject("R01").reference()
    bone, skin = trial.bone(), trial.skin()
    assert bone is not None
    pose = make_pose(bone["rotation"].to_numpy()[:5], bone["position"].to_numpy()[:5])
    turn = relative_difference(pose, reference.poses)
    assert np.rad2deg(np.linalg.norm(turn[..., :3], axis=-1)).max() < 8
    seen = skin["position"].to_numpy()[0]
    own = np.einsum(
        "mji,mj->mi",
        pose[0][study.lab.marker_segment, :3, :3],
        seen - pose[0][study.lab.marker_segment, :3, 3],
    )
    assert np.linalg.norm(own - reference.markers, axis=1).max() < 0.01
