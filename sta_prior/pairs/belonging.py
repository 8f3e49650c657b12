"""Does a trial belong to its reference? Marker distances, and clusters that sit away from the bone.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.

Artifact changes with posture and is zero in the reference posture. Another placement of the
markers, another order of labels or a bone frame of another session are there in every posture:
hence distances are judged in the tenth of the trial that fits best, and the offset of the
cluster in the postures nearest to the reference. The single best frame would not do: among hundreds
of frames one with a stray marker fits by chance.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.rigid import fit_rigid
from sta_prior.se3 import inverse, rotation_log

DISTANCE_LIMIT = 0.006
"""RMS change of marker distances that nine tenths of the frames exceed, m. Real trials that belong
stay below 5.4 mm, those that do not begin at 7 mm (seen on open paired and skin-only data)."""

OFFSET_LIMIT = 0.030
"""Offset of an intact cluster from the bone, m: 1.7 times the rigid artifact of about 17–18 mm
reported for thigh and shank (see docs/literature.md)."""

ROTATION_LIMIT = np.radians(20.0)
"""Rotation of an intact cluster against the bone, rad: twice the largest rigid part reported."""

BEST_SHARE = 0.1
NEAREST_SHARE = 0.1
NEAREST_COUNT = 5


@dataclass(frozen=True)
class Belonging:
    """How well one segment of a trial fits its reference.

    distance_misfit: m, RMS change of marker distances, which nine tenths of the frames exceed;
    offset: m and rotation: rad, of the cluster against the bone in the postures nearest to the
    reference (NaN without bone truth).
    """

    distance_misfit: float
    offset: float
    rotation: float

    def reasons(self, segment: str) -> list[str]:
        """Words for what does not fit; empty where all is well."""
        words = []
        if self.distance_misfit > DISTANCE_LIMIT:
            words.append(
                f"{segment} marker distances differ from the reference by "
                f"{1000 * self.distance_misfit:.1f} mm RMS even in the best tenth of the frames, "
                f"expected at most {1000 * DISTANCE_LIMIT:.0f} mm"
            )
        elif self.offset > OFFSET_LIMIT or self.rotation > ROTATION_LIMIT:
            words.append(
                f"{segment} cluster keeps its shape but sits {1000 * self.offset:.0f} mm and "
                f"{np.degrees(self.rotation):.0f}° from the bone near the reference posture, expected "
                f"at most {1000 * OFFSET_LIMIT:.0f} mm and {np.degrees(ROTATION_LIMIT):.0f}°"
            )
        return words


def distance_misfit(points: FloatArray, reference: FloatArray) -> float:
    """RMS change of the distances between markers, the value that nine tenths of the frames exceed.

    Parameters
    ----------
    points : shape (F, m, 3), m, NaN hidden
    reference : shape (m, 3), m

    Returns
    -------
    m; NaN where no frame shows three markers.
    """
    first, second = np.triu_indices(reference.shape[0], 1)
    now = np.linalg.norm(points[:, first] - points[:, second], axis=-1)
    change = now - np.linalg.norm(reference[first] - reference[second], axis=-1)
    seen = np.isfinite(change)
    enough = seen.sum(axis=1) >= 3
    # A frame counts only if it shows about as many markers as the trial ever does.
    enough &= seen.sum(axis=1) >= 0.8 * seen.sum(axis=1).max(initial=0)
    if not enough.any():
        return float("nan")
    squared = np.where(seen, change, 0.0)[enough] ** 2
    mean = np.sort(squared.sum(axis=1) / seen[enough].sum(axis=1))
    return float(np.sqrt(mean[max(int(BEST_SHARE * mean.size), 1) - 1]))


def check_belonging(
    points: FloatArray,
    reference: FloatArray,
    bone: FloatArray | None = None,
    posture_distance: FloatArray | None = None,
) -> Belonging:
    """Hold one segment's markers against its reference.

    Parameters
    ----------
    points : shape (F, m, 3), m, lab, NaN hidden
    reference : shape (m, 3), m, bone frame
    bone : shape (F, 4, 4), lab ← bone, NaN unknown; without it only distances are judged
    posture_distance : shape (F,), rad, angle from the reference posture
    """
    misfit = distance_misfit(points, reference)
    if bone is None or posture_distance is None:
        return Belonging(misfit, float("nan"), float("nan"))
    fit = fit_rigid(reference, points)
    known = np.flatnonzero(fit.determined & np.isfinite(posture_distance) & np.isfinite(bone[:, 0, 0]))
    if known.size == 0:
        return Belonging(misfit, float("nan"), float("nan"))
    count = max(NEAREST_COUNT, int(NEAREST_SHARE * known.size))
    nearest = known[np.argsort(posture_distance[known], kind="stable")[:count]]
    bone_from_cluster = inverse(bone[nearest]) @ fit.pose[nearest]
    centroid = reference.mean(axis=0)
    moved = bone_from_cluster[:, :3, :3] @ centroid + bone_from_cluster[:, :3, 3] - centroid
    turned = np.median(rotation_log(bone_from_cluster[:, :3, :3]), axis=0)
    return Belonging(misfit, float(np.linalg.norm(np.median(moved, axis=0))), float(np.linalg.norm(turned)))
