"""Paired frames of the very subject to be solved: which are new to a prior, and under which name.

Shell: reads the labels of a pairs Dataset. Conventions: docs/conventions.md.
"""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr

from sta_prior.checks import FloatArray
from sta_prior.errors import StaPriorWarning, message

SAME_INSTANT = 5e-4
"""Frames of one recording nearer in time than this are one frame, s."""


@dataclass(frozen=True)
class LearnedTrial:
    """A trial that the prior learned from: digest of its skin file, instants used, s."""

    subject: str
    trial: str
    activity: str
    digest: str
    times: FloatArray


@dataclass(frozen=True)
class OwnPairs:
    """New frames of one subject.

    data: pairs of that subject's trials with at least one new frame, new frames only; keys: from the
    trial's name in the pairs to the name under which its frames count, that of the learned trial
    where the recording is the same, else its digest (another recording may bear a learned name).
    """

    data: xr.Dataset
    keys: dict[str, str]

    @property
    def empty(self) -> bool:
        """Whether no frame is new."""
        return self.data.sizes["trial"] == 0

    def times_of(self, digest: str) -> FloatArray:
        """Instants of the new frames of a recording, s."""
        digests = [str(value) for value in self.data["trial_digest"].values]
        if digest not in digests:
            return np.zeros(0)
        name = str(self.data["trial_id"].values[digests.index(digest)])
        return np.asarray(self.data["time"].values[self.data["trial"].values == name], dtype=np.float64)


def own_pairs(subject: str, personal: xr.Dataset, learned: Sequence[LearnedTrial]) -> OwnPairs | None:
    """Keep a subject's frames that a prior has not learned from; None where the pairs hold none at all.

    Frames are told by the digest of their recording and their instant: the same window is never counted
    twice, and a new window of a known recording is not lost.
    """
    mine = [index for index, name in enumerate(personal["trial_subject"].values) if str(name) == subject]
    if not mine:
        warnings.warn(
            message(
                subject, "the personal pairs hold no frames of this subject", "Solved with the prior alone."
            ),
            StaPriorWarning,
            stacklevel=4,
        )
        return None
    known = {item.digest: item for item in learned if item.subject == subject}
    frame_trial = personal["trial"].values
    own = personal["subject"].values == subject
    keep = np.zeros(own.size, dtype=bool)
    kept, keys = [], {}
    for index in mine:
        name, digest = str(personal["trial_id"].values[index]), str(personal["trial_digest"].values[index])
        frames = np.flatnonzero(own & (frame_trial == name))
        if digest in known and known[digest].times.size:
            gaps = np.abs(personal["time"].values[frames][:, None] - known[digest].times[None, :])
            frames = frames[gaps.min(axis=1) > SAME_INSTANT]
        if frames.size:
            keep[frames] = True
            kept.append(index)
            keys[name] = known[digest].trial if digest in known else digest
    return OwnPairs(personal.isel(trial=kept, frame=np.flatnonzero(keep)), keys)
