"""Bone frames: recipes and the ISB standards, against frames worked by hand."""

from __future__ import annotations

import numpy as np
import pytest
from made_studies import says
from scipy.spatial.transform import Rotation

from sta_prior.checks import FloatArray
from sta_prior.errors import NotDeterminedError
from sta_prior.study import AxisRecipe, FrameRecipe, StandardFrame, frame_pose

ORIGIN = np.array([0.1, 0.9, -0.2])
# Landmarks of a right leg that stands along the lab axes (x forward, y up, z right), about ORIGIN, m.
TIBIA = {
    "LM": [0.0, 0.0, 0.04],
    "MM": [0.0, 0.0, -0.04],
    "LC": [0.0, 0.40, 0.05],
    "MC": [0.0, 0.40, -0.05],
}
FEMUR = {"HJC": [0.0, 0.0, 0.0], "LE": [0.0, -0.42, 0.05], "ME": [0.0, -0.42, -0.05]}
PELVIS = {
    "RASIS": [0.08, 0.0, 0.12],
    "LASIS": [0.08, 0.0, -0.12],
    "RPSIS": [-0.08, 0.0, 0.05],
    "LPSIS": [-0.08, 0.0, -0.05],
    "RHJC": [0.0, 0.0, 0.0],
}
TIBIA_NAMES = (
    ("lateral_malleolus", "LM"),
    ("medial_malleolus", "MM"),
    ("lateral_condyle", "LC"),
    ("medial_condyle", "MC"),
)
FEMUR_NAMES = (("hip_joint_centre", "HJC"), ("lateral_epicondyle", "LE"), ("medial_epicondyle", "ME"))
PELVIS_NAMES = (
    ("right_asis", "RASIS"),
    ("left_asis", "LASIS"),
    ("right_psis", "RPSIS"),
    ("left_psis", "LPSIS"),
    ("hip_joint_centre", "RHJC"),
)


def placed(landmarks: dict[str, list[float]], *, mirrored: bool = False) -> dict[str, FloatArray]:
    """The landmarks about ORIGIN; mirrored as they lie on a left leg, lateral still named lateral."""
    sign = np.array([1.0, 1.0, -1.0 if mirrored else 1.0])
    return {name: ORIGIN + sign * np.array(xyz) for name, xyz in landmarks.items()}


@pytest.mark.parametrize("side", ["right", "left"])
@pytest.mark.parametrize(
    ("standard", "names", "landmarks"),
    [
        ("isb-tibia", TIBIA_NAMES, TIBIA),
        ("isb-calcaneus", TIBIA_NAMES, TIBIA),
        ("isb-femur", FEMUR_NAMES, FEMUR),
    ],
)
def test_isb_frames_of_an_axis_aligned_leg_are_the_lab_axes_on_both_sides(standard, names, landmarks, side):
    # Worked by hand from the definitions of Wu et al. (2002), J Biomech 35, 543–548, from memory.
    pose = frame_pose(
        StandardFrame(standard, side, names), placed(landmarks, mirrored=side == "left"), ("hand",)
    )
    np.testing.assert_allclose(pose[:3, :3], np.eye(3), atol=1e-15)
    np.testing.assert_allclose(pose[:3, 3], ORIGIN, atol=1e-15)


@pytest.mark.parametrize("side", ["right", "left", None])
def test_isb_pelvis_does_not_depend_on_the_side(side):
    # Wu et al. (2002), from memory: z along the ASISs to the right, x in the plane of ASISs and mid-PSIS.
    pose = frame_pose(StandardFrame("isb-pelvis", side, PELVIS_NAMES), placed(PELVIS), ("hand",))
    np.testing.assert_allclose(pose[:3, :3], np.eye(3), atol=1e-15)
    np.testing.assert_allclose(pose[:3, 3], ORIGIN, atol=1e-15)
    without_hip = frame_pose(StandardFrame("isb-pelvis", side, PELVIS_NAMES[:4]), placed(PELVIS), ("hand",))
    np.testing.assert_allclose(without_hip[:3, :3], np.eye(3), atol=1e-15)
    np.testing.assert_allclose(without_hip[:3, 3], ORIGIN + np.array([0.08, 0.0, 0.0]), atol=1e-15)


def test_isb_pelvis_tilts_with_the_psis():
    lowered = placed(PELVIS)
    for name in ("RPSIS", "LPSIS"):
        lowered[name] = lowered[name] - [0.0, 0.16 * np.tan(np.deg2rad(20.0)), 0.0]
    pose = frame_pose(StandardFrame("isb-pelvis", "right", PELVIS_NAMES), lowered, ("hand",))
    # x rises by 20° towards the front: a turn of +20° about z
    np.testing.assert_allclose(
        pose[:3, :3], Rotation.from_euler("z", 20, degrees=True).as_matrix(), atol=1e-12
    )


def test_isb_tibia_keeps_z_along_the_malleoli_and_calcaneus_keeps_y_along_the_shaft():
    # The order of the axes (Wu et al. 2002, from memory): twist the malleoli by 20° about the shaft
    # and tilt them by 6°; the tibia follows them, the calcaneus frame follows condyles and shaft.
    twisted = placed(TIBIA)
    turn = Rotation.from_euler("yx", [20, 6], degrees=True).as_matrix()
    for name in ("LM", "MM"):
        twisted[name] = ORIGIN + turn @ np.array(TIBIA[name])
    tibia = frame_pose(StandardFrame("isb-tibia", "right", TIBIA_NAMES), twisted, ("hand",))
    along = twisted["LM"] - twisted["MM"]
    np.testing.assert_allclose(tibia[:3, 2], along / np.linalg.norm(along), atol=1e-14)
    # x is normal to the torsional plane: malleoli and inter-condylar point
    shaft = np.array([0.0, 0.40, 0.0])
    np.testing.assert_allclose(tibia[:3, 0] @ np.stack([along, shaft], axis=-1), 0.0, atol=1e-14)
    calcaneus = frame_pose(StandardFrame("isb-calcaneus", "right", TIBIA_NAMES), twisted, ("hand",))
    np.testing.assert_allclose(calcaneus[:3, :3], np.eye(3), atol=1e-14)


def test_isb_femur_keeps_y_exact_and_z_in_the_plane_of_the_three_points():
    tilted = placed(FEMUR)
    tilted["LE"] = tilted["LE"] + [0.0, -0.02, 0.0]
    pose = frame_pose(StandardFrame("isb-femur", "right", FEMUR_NAMES), tilted, ("hand",))
    middle = (tilted["LE"] + tilted["ME"]) / 2
    np.testing.assert_allclose(pose[:3, 1], (ORIGIN - middle) / np.linalg.norm(ORIGIN - middle), atol=1e-14)
    np.testing.assert_allclose(pose[:3, 0], [1.0, 0.0, 0.0], atol=1e-14)


AXES = {"x": [1.0, 0.0, 0.0], "y": [0.0, 1.0, 0.0], "z": [0.0, 0.0, 1.0]}


@pytest.mark.parametrize(("first", "second"), ["xy", "xz", "yx", "yz", "zx", "zy"])
def test_any_two_axes_first_exact_second_perpendicular_third_right_handed(first, second):
    turn = Rotation.from_euler("xyz", [40, -70, 110], degrees=True).as_matrix()
    # the second direction leans towards the first: it must be made perpendicular
    leaning = np.array(AXES[second]) + 0.4 * np.array(AXES[first])
    points = {"O": ORIGIN, "P": ORIGIN + 0.3 * turn @ AXES[first], "Q": ORIGIN + turn @ leaning}
    recipe = FrameRecipe(("O",), AxisRecipe(first, ("O",), ("P",)), AxisRecipe(second, ("O",), ("Q",)))
    pose = frame_pose(recipe, points, ("hand",))
    np.testing.assert_allclose(pose[:3, :3], turn, atol=1e-14)
    np.testing.assert_allclose(pose[:3, 3], ORIGIN, atol=0)


def test_a_list_of_points_is_averaged_and_batches_equal_single_calls():
    random = np.random.default_rng(7)
    recipe = FrameRecipe(("A", "B"), AxisRecipe("y", ("A", "B"), ("C",)), AxisRecipe("z", ("A",), ("B", "D")))
    many = {name: random.normal(size=(4, 2, 3)) for name in "ABCD"}
    poses = frame_pose(recipe, many, ("hand",))
    assert poses.shape == (4, 2, 4, 4)
    np.testing.assert_allclose(poses[..., :3, 3], (many["A"] + many["B"]) / 2, atol=1e-15)
    for index in np.ndindex(4, 2):
        single = frame_pose(recipe, {name: xyz[index] for name, xyz in many.items()}, ("hand",))
        np.testing.assert_allclose(poses[index], single, atol=1e-14)
    many["C"][1, 0] = np.nan
    gapped = frame_pose(recipe, many, ("hand",))
    assert np.isnan(gapped[1, 0]).all()
    np.testing.assert_array_equal(gapped[0], poses[0])


def test_a_frame_moves_with_the_body():
    move = Rotation.from_euler("xyz", [10, 20, 30], degrees=True).as_matrix()
    frame = StandardFrame("isb-femur", "right", FEMUR_NAMES)
    before = frame_pose(frame, placed(FEMUR), ("hand",))
    after = frame_pose(frame, {name: move @ xyz for name, xyz in placed(FEMUR).items()}, ("hand",))
    np.testing.assert_allclose(after[:3, :3], move @ before[:3, :3], atol=1e-14)
    np.testing.assert_allclose(after[:3, 3], move @ before[:3, 3], atol=1e-14)


def test_a_recipe_for_the_other_side_turns_z_round_only():
    written = FrameRecipe(
        ("HJC",), AxisRecipe("y", ("LE", "ME"), ("HJC",)), AxisRecipe("z", ("ME",), ("LE",)), "right"
    )
    pose = frame_pose(written.for_side("left"), placed(FEMUR, mirrored=True), ("hand",))
    np.testing.assert_allclose(pose[:3, :3], np.eye(3), atol=1e-15)
    assert written.for_side("right") == written
    assert written.for_side("left").for_side("right") == written
    for side in ("both", None):
        kept = FrameRecipe(written.origin, written.first, written.second, side)
        assert kept.for_side("left") == kept


def test_a_recipe_tells_the_points_it_needs_once():
    assert StandardFrame("isb-femur", "left", FEMUR_NAMES).points == ("HJC", "LE", "ME")
    recipe = FrameRecipe(("A",), AxisRecipe("x", ("A",), ("B",)), AxisRecipe("y", ("B",), ("C", "A")))
    assert recipe.points == ("A", "B", "C")


def test_parallel_axes_are_refused():
    points = {"A": np.zeros(3), "B": np.array([0.0, 1.0, 0.0]), "C": np.array([0.0, 1.0, np.tan(0.05)])}
    recipe = FrameRecipe(("A",), AxisRecipe("y", ("A",), ("B",)), AxisRecipe("z", ("A",), ("C",)))
    expected = (
        "static.csv, segment.thigh.frame: axes y and z are parallel within 2.9°, expected at least 5°. "
        "Choose points off the first axis."
    )
    with says(NotDeterminedError, expected):
        frame_pose(recipe, points, ("static.csv", "segment.thigh.frame"))
    # the same where the second points the other way
    points["C"] = -points["C"]
    with says(NotDeterminedError, expected):
        frame_pose(recipe, points, ("static.csv", "segment.thigh.frame"))


def test_an_axis_without_length_is_refused():
    points = {"A": np.zeros(3), "B": np.array([0.0, 0.0004, 0.0]), "C": np.array([0.0, 0.0, 1.0])}
    recipe = FrameRecipe(("A",), AxisRecipe("y", ("A",), ("B",)), AxisRecipe("z", ("A",), ("C",)))
    expected = (
        "static.csv: axis y from A to B is 0.40 mm long, expected at least 1 mm. Choose points further apart."
    )
    with says(NotDeterminedError, expected):
        frame_pose(recipe, points, ("static.csv",))
