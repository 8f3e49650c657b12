"""The lab file: what it gives, and what it refuses in which words."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from made_studies import LAB, says

from sta_prior.errors import InputError
from sta_prior.study import AxisRecipe, FrameRecipe, Lab, StandardFrame, read_lab


def lab_of(folder: Path, text: str) -> Lab:
    path = folder / "lab.toml"
    path.write_text(text, encoding="utf-8")
    return read_lab(path)


def refused(folder: Path, text: str, expected: str) -> None:
    """Read a lab file and compare the whole message, which starts with the file."""
    with says(InputError, f"{folder / 'lab.toml'}{expected}"):
        lab_of(folder, text)


def test_the_contract_s_example(tmp_path):
    lab = lab_of(tmp_path, LAB)
    assert (lab.title, lab.up, lab.up_declared) == ("Courier stair study, right leg", "y", True)
    assert lab.segment_names == ("thigh", "shank")
    assert lab.markers == ("TA", "TB", "TC", "TD", "SA", "SB", "SC", "SD")
    assert lab.marker_segment.tolist() == [0, 0, 0, 0, 1, 1, 1, 1]
    assert lab.segment_index("shank") == 1
    thigh, shank = lab.segments
    assert thigh.frame == FrameRecipe(
        ("HJC",), AxisRecipe("y", ("LEP", "MEP"), ("HJC",)), AxisRecipe("z", ("MEP",), ("LEP",)), "right"
    )
    assert isinstance(shank.frame, StandardFrame)
    assert shank.frame.standard == "isb-tibia"
    assert lab.frame_points == ("HJC", "LEP", "MEP", "LMA", "MMA", "LCO", "MCO")
    knee = lab.joints[0]
    assert (knee.name, knee.proximal, knee.distal, knee.centre) == ("knee", "thigh", "shank", ("LEP", "MEP"))
    assert knee.travel_sd == pytest.approx(0.005)
    assert knee.convention.dof == ("flexion", "adduction", "internal_rotation")
    np.testing.assert_array_equal(lab.up_vector, [0.0, 1.0, 0.0])


def test_the_first_axis_in_the_file_is_the_exact_one(tmp_path):
    y, z = LAB.index("y = { from"), LAB.index("z = { from")
    end = LAB.index("\n", z) + 1
    swapped = LAB[:y] + LAB[z:end] + LAB[y:z] + LAB[end:]
    frame = lab_of(tmp_path, swapped).segments[0].frame
    assert isinstance(frame, FrameRecipe)
    assert (frame.first.axis, frame.second.axis) == ("z", "y")


def test_travel_free_ball_and_none(tmp_path):
    free = lab_of(tmp_path, LAB.replace("5.0", '"free"').replace('centre = ["LEP", "MEP"]\n', ""))
    assert math.isinf(free.joints[0].travel_sd)
    assert free.joints[0].centre == ()
    assert lab_of(tmp_path, LAB.replace("5.0", "0")).joints[0].travel_sd == 0.0


def test_title_and_up_may_be_left_out(tmp_path):
    lab = lab_of(tmp_path, LAB[LAB.index("[segment.thigh]") :])
    assert (lab.title, lab.up, lab.up_declared) == ("lab", "y", False)


def test_the_other_side_sets_joints_standards_and_recipes(tmp_path):
    lab = lab_of(tmp_path, LAB)
    left = lab.for_side("left")
    assert left.sides == {"left"}
    assert left.joints[0].convention.side == "left"
    thigh, shank = left.segments
    assert isinstance(shank.frame, StandardFrame)
    assert shank.frame.side == "left"
    assert isinstance(thigh.frame, FrameRecipe)
    assert thigh.frame.second == AxisRecipe("z", ("LEP",), ("MEP",))
    assert thigh.frame.first == lab.segments[0].frame.first
    assert left.for_side("right") == lab
    assert lab.for_side("right") == lab


def test_a_recipe_of_both_sides_keeps_its_z(tmp_path):
    lab = lab_of(tmp_path, LAB.replace('origin = ["HJC"]', 'origin = ["HJC"]\nside = "both"'))
    assert lab.for_side("left").segments[0].frame == lab.segments[0].frame


CARDAN = LAB.replace('kind = "knee"', 'kind = "cardan"').replace(
    'side = "right"\ncentre', 'sequence = "yxz"\nsigns = [1, -1, 1]\ncentre'
)


def test_cardan_joints_take_sequence_and_signs(tmp_path):
    convention = lab_of(tmp_path, CARDAN).joints[0].convention
    assert (convention.sequence, convention.signs) == ("yxz", (1.0, -1.0, 1.0))
    assert convention.dof == ("rotation_1", "rotation_2", "rotation_3")


HIP = """\
[segment.pelvis]
markers = ["PA", "PB", "PC"]
[segment.pelvis.frame]
standard = "isb-pelvis"
points = { right_asis = "PA", left_asis = "PB", right_psis = "PC", left_psis = "PC" }
[joint.hip]
proximal = "pelvis"
distal = "thigh"
kind = "hip"
side = "right"
centre = ["HJC"]
travel_sd_mm = 3
"""


def test_a_chain_of_joints_and_a_pelvis_without_side(tmp_path):
    lab = lab_of(tmp_path, LAB + HIP)
    assert [joint.name for joint in lab.joints] == ["knee", "hip"]
    assert lab.sides == {"right"}
    assert lab.for_side("left").joints[1].convention.side == "left"


def test_both_sides_cannot_be_replaced_by_one(tmp_path):
    lab = lab_of(tmp_path, LAB.replace('kind = "knee"\nside = "right"', 'kind = "knee"\nside = "left"'))
    assert lab.sides == {"left", "right"}
    expected = (
        f"{tmp_path / 'lab.toml'}: has joints or frames of both sides, side = 'left' cannot replace them. "
        "Leave out the subject's side."
    )
    with says(InputError, expected):
        lab.for_side("left")


def test_an_unknown_segment_is_named(tmp_path):
    expected = f"{tmp_path / 'lab.toml'}: no segment shenk, has thigh shank. Did you mean shank?"
    with says(InputError, expected):
        lab_of(tmp_path, LAB).segment_index("shenk")


FORMS = 'expected "imaging", a recipe with origin and two of x, y, z, or a table with standard'
FRAME = LAB[LAB.index("[segment.thigh.frame]") : LAB.index("[segment.shank]")]


WRONG = [
    ("title", "titel", ", titel: unknown key 'titel'. Did you mean title?"),
    (
        "[segment.thigh]\nmarkers",
        "[segment.thigh]\nmarker",
        ", segment.thigh.marker: unknown key 'marker'. Did you mean markers?",
    ),
    (
        '"TC", "TD"]',
        '"TC", "TA"]',
        ", segment.thigh.markers: marker TA stands 2 times. Name it once.",
    ),
    (
        '["SA", "SB", "SC", "SD"]',
        '["SA", "SB"]',
        ", segment.shank.markers: expected at least 3 markers, got 2. "
        "Fewer do not show how a bone is turned.",
    ),
    (
        '"SC", "SD"]',
        '"SC", "TD"]',
        ", segment.shank.markers: marker TD is in segment thigh too, expected in one only. "
        "A marker moves with one bone.",
    ),
    (FRAME, "", f", segment.thigh.frame: missing, {FORMS}."),
    (
        FRAME,
        'frame = "imagin"\n',
        f", segment.thigh.frame: {FORMS}, got 'imagin'. Did you mean imaging?",
    ),
    (
        FRAME,
        'frame = "isb-femur"\n',
        f", segment.thigh.frame: {FORMS}, got 'isb-femur'. "
        'A standard is written { standard = "isb-tibia", … }.',
    ),
    (
        'z = { from = ["MEP"], to = ["LEP"] }\n',
        "",
        ", segment.thigh.frame: expected two of the axes x, y, z, got y. "
        "The third follows by the right-hand rule.",
    ),
    (
        'origin = ["HJC"]',
        "origin = []",
        ", segment.thigh.frame.origin: an empty list, expected points. Name at least one.",
    ),
    (
        'z = { from = ["MEP"], to = ["LEP"] }',
        'z = { from = ["MEP"], to = ["MEP"] }',
        ", segment.thigh.frame.z: from and to are the same points, MEP. Name two places.",
    ),
    (
        'z = { from = ["MEP"], to',
        'z = { form = ["MEP"], to',
        ", segment.thigh.frame.z.form: unknown key 'form'. Did you mean from?",
    ),
    (
        'origin = ["HJC"]',
        'orign = ["HJC"]',
        ", segment.thigh.frame.orign: unknown key 'orign'. Did you mean origin?",
    ),
    (
        "isb-tibia",
        "isb-tibea",
        ", segment.shank.frame.standard: expected one of isb-pelvis, isb-femur, isb-tibia, isb-calcaneus, "
        "got 'isb-tibea'. Did you mean isb-tibia?",
    ),
    (
        "lateral_condyle",
        "lateral_condile",
        ", segment.shank.frame.points.lateral_condile: unknown key 'lateral_condile'. "
        "Did you mean lateral_condyle?",
    ),
    (
        'lateral_condyle = "LCO"\n',
        "",
        ", segment.shank.frame.points: isb-tibia needs lateral_malleolus medial_malleolus lateral_condyle "
        "medial_condyle, lateral_condyle missing. Name the point that shows it.",
    ),
    (
        'standard = "isb-tibia"\nside = "right"',
        'standard = "isb-tibia"',
        ', segment.shank.frame.side: missing, expected right or left. Write side = "right".',
    ),
    (
        'proximal = "thigh"',
        'proximal = "tigh"',
        ", joint.knee.proximal: no segment tigh. Did you mean thigh?",
    ),
    (
        'distal = "shank"',
        'distal = "foot"',
        ", joint.knee.distal: no segment foot. Segments: thigh, shank.",
    ),
    (
        'distal = "shank"',
        'distal = "thigh"',
        ", joint.knee: proximal and distal are both thigh. Name two segments.",
    ),
    (
        'kind = "knee"',
        'kind = "kne"',
        ", joint.knee.kind: expected one of knee, hip, ankle, cardan, got 'kne'. Did you mean knee?",
    ),
    (
        'kind = "knee"\nside = "right"',
        'kind = "knee"',
        ', joint.knee.side: missing, expected right or left. Write side = "right".',
    ),
    (
        'kind = "knee"',
        'kind = "knee"\nsequence = "zxy"',
        ", joint.knee.sequence: only for kind cardan, the angles of kind knee are fixed. "
        'Remove sequence, or use kind = "cardan".',
    ),
    (
        'centre = ["LEP", "MEP"]\n',
        "",
        ", joint.knee.centre: missing, expected a list of points. "
        'Add centre, or travel_sd_mm = "free" for no joint.',
    ),
    (
        "travel_sd_mm = 5.0",
        'travel_sd_mm = "loose"',
        ", joint.knee.travel_sd_mm: expected a number of mm or \"free\", got 'loose'. "
        'Write "free" for no joint, 0 for a ball joint.',
    ),
    (
        "travel_sd_mm",
        "travel_sd",
        ", joint.knee.travel_sd: unknown key 'travel_sd'. Did you mean travel_sd_mm?",
    ),
    (LAB[: LAB.index("[joint.knee]")], "", ", segment: missing, expected a table. Add segment = …."),
    (
        LAB[: LAB.index("[joint.knee]")],
        "[segment]\n",
        ", segment: empty, expected segments. Add [segment.thigh].",
    ),
]


@pytest.mark.parametrize(("old", "new", "expected"), WRONG, ids=[str(n) for n in range(len(WRONG))])
def test_what_is_wrong_is_named_with_its_place(tmp_path, old, new, expected):
    assert LAB.count(old) >= 1
    refused(tmp_path, LAB.replace(old, new, 1), expected)


def test_a_cardan_sequence_without_meaning_is_named_with_its_place(tmp_path):
    refused(
        tmp_path,
        CARDAN.replace("yxz", "yyz"),
        ", joint.knee, joint sequence: expected three of x, y, z with no neighbours alike, got 'yyz'. "
        'Write, for example, "zxy" or "yxy".',
    )


def test_cardan_signs_are_three(tmp_path):
    refused(
        tmp_path,
        CARDAN.replace("[1, -1, 1]", "[1, -1]"),
        ", joint.knee.signs: expected 3 signs, got 2. Write [1, 1, -1].",
    )


def test_joints_form_a_tree(tmp_path):
    second = LAB[LAB.index("[joint.knee]") :].replace("joint.knee", "joint.patella")
    refused(
        tmp_path,
        LAB + second,
        ", joint.patella: segment shank is distal in joint knee too. Give each segment one proximal joint.",
    )
    ring = second.replace('"thigh"', '"foot"').replace('"shank"', '"thigh"')
    foot = '[segment.foot]\nmarkers = ["FA", "FB", "FC"]\nframe = "imaging"\n'
    ankle = second.replace("patella", "ankle").replace('"shank"', '"foot"').replace('"thigh"', '"shank"')
    refused(
        tmp_path,
        LAB + foot + ankle + ring,
        ", joint.patella: joints form a ring, thigh – foot – shank – thigh. Remove one of its joints.",
    )
