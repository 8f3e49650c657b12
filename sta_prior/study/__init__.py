"""Lab and study files: segments, bone frames, joints, subjects, trials, reference posture.

Conventions: docs/conventions.md. The files' form: docs/files.md.
"""

from __future__ import annotations

from sta_prior.study.frames import AxisRecipe, Frame, FrameRecipe, Side, StandardFrame, frame_pose
from sta_prior.study.lab import Joint, Lab, Segment, read_lab
from sta_prior.study.reader import read_study
from sta_prior.study.reference import Reference
from sta_prior.study.sources import BoneSource
from sta_prior.study.study import Study, Subject, Trial

__all__ = [
    "AxisRecipe",
    "BoneSource",
    "Frame",
    "FrameRecipe",
    "Joint",
    "Lab",
    "Reference",
    "Segment",
    "Side",
    "StandardFrame",
    "Study",
    "Subject",
    "Trial",
    "frame_pose",
    "read_lab",
    "read_study",
]
