"""What the markers and joints leave open, in words.

Kernel: arrays in, text out. Conventions: docs/conventions.md.
"""

from __future__ import annotations

import numpy as np

from sta_prior.checks import BoolArray
from sta_prior.solve.terms import SegmentProblem
from sta_prior.study import Lab


def describe_observability(segments: list[SegmentProblem], determined: BoolArray, lab: Lab) -> str:
    """Say per segment in how many frames its pose is not determined, and why.

    Parameters
    ----------
    segments : the problem, in lab order
    determined : shape (F, S)
    lab : names of segments and markers

    Returns
    -------
    One sentence a segment and cause; empty where every frame is determined.
    """
    sentences = []
    for segment in segments:
        missing = ~determined[:, segment.index]
        if not missing.any():
            continue
        seen = np.isfinite(segment.points[..., 0])
        count = seen.sum(axis=1)
        markers = np.array(lab.segments[segment.index].markers)
        name = lab.segments[segment.index].name
        total = missing.size
        for visible, words in ((0, "no marker is seen"), (1, "one marker is seen: rotation is open")):
            frames = int((missing & (count == visible)).sum())
            if frames:
                sentences.append(f"{name}: not determined in {frames} of {total} frames, {words}")
        two = missing & (count == 2)
        for pair in np.unique(seen[two], axis=0):
            frames = int((two & (seen == pair).all(axis=1)).sum())
            line = "–".join(markers[pair])
            sentences.append(
                f"{name}: not determined in {frames} of {total} frames, "
                f"rotation about the line {line} is open"
            )
        more = int((missing & (count > 2)).sum())
        if more:
            sentences.append(
                f"{name}: not determined in {more} of {total} frames, the markers seen lie near one line, "
                "an adjoining segment is not determined, or the iteration did not settle"
            )
    return "; ".join(sentences)
