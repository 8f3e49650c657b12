"""The ``magnitude`` family: zero-mean artifact of published size, for laboratories without paired data.

Kernel, but for ``read_magnitudes`` and what calls it. Conventions: docs/conventions.md. Numbers and their
sources: templates/magnitude.toml, with a copy in priors/.

    d(q) = f(q, q0) u + r,   |f|² = 1 − exp(−½ (|q − q0|/L)²)
    u ~ N(0, c V), constant in a trial,   r ~ N(0, (1 − c) V)

Artifact is zero in the reference posture by definition. Its SD therefore rises, with the flexion away from
there, from that of the residual r to its full size: a static trial is never quite the rest position of the
skin, so it does not start at zero. V holds a rigid part common to all markers, which a rigid fit mistakes
for bone motion, and a deformation without any. By itself such a prior gives an honest interval, not a better
pose: with one segment the posterior mean is the rigid fit.
"""

from __future__ import annotations

import math
import re
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import cache, cached_property
from importlib.resources import files
from itertools import pairwise
from pathlib import Path

import numpy as np

from sta_prior.checks import FloatArray, check_shape, nearest
from sta_prior.errors import InputError, MismatchError, message
from sta_prior.io.text import Table, read_toml
from sta_prior.prior.hierarchy import unison_covariance
from sta_prior.prior.interface import Moments
from sta_prior.rigid import marker_jacobian

FLEXION = 0
PACKAGED = "templates/magnitude.toml"
TAGS = ("seen", "from memory", "none")
SMALLEST_DIRECTION = 1e-6
"""Part of the largest singular value of the markers' Jacobian below which a rigid motion moves none."""


def unison_shape(markers: FloatArray | None, outputs: int, share: float, rotation: float) -> FloatArray:
    """Covariance of stacked markers of mean variance 1, ``share`` of it in unison.

    Parameters
    ----------
    markers : shape (m, 3), m, reference positions; NaN counts as their middle; None for an equal
        translation of all markers and independent rests
    outputs : n = 3m
    share : 0 … 1, share of the mean square that is one rigid motion of all markers
    rotation : rad/m, SD of that motion's rotation about each axis through the middle of the markers, against
        the SD of its translation

    Returns
    -------
    shape (n, n). With markers the rest has no rigid part at all: a share is exact, not a lower bound. Too few
    markers to deform (one) move in unison.
    """
    if markers is None:
        return unison_covariance(outputs, share)
    seen = np.asarray(np.isfinite(markers).all(axis=1))
    middle = markers[seen].mean(axis=0) if seen.any() else np.zeros(3)
    lever = marker_jacobian(np.where(seen[:, None], markers - middle, 0.0))
    rigid = (lever * np.repeat([rotation**2, 1.0], 3)) @ lever.T
    left, values, _ = np.linalg.svd(lever, full_matrices=False)
    basis = left[:, values > SMALLEST_DIRECTION * values[0]]
    rest = np.eye(outputs) - basis @ basis.T
    rigid *= outputs / np.trace(rigid)
    if outputs == basis.shape[1]:
        return np.asarray(rigid)
    shape: FloatArray = share * rigid + (1.0 - share) * outputs / np.trace(rest) * rest
    return shape


@dataclass(frozen=True)
class MagnitudeArtifact:
    """Zero-mean artifact of one segment in one trial.

    Attributes
    ----------
    outputs : n, three a marker
    size : m, SD of an axis, mean over the markers, far from the reference posture
    unison_share : share of the mean square that all markers do as one rigid body
    time_constant : s, decay time of the residual
    subject_share : share of the mean square that is constant in a trial
    markers : shape (m, 3), m, reference positions, bone frame; None for an equal translation
    rotation : rad/m, rotation against translation of the part in unison
    reference : shape (joints, 3), rad, at the reference posture; None: full size at every posture
    adjacent : positions of the joints that touch the segment; None for all
    full_angle : rad, L above
    note : what a user should know about the choice of the numbers, or empty
    """

    outputs: int
    size: float
    unison_share: float
    time_constant: float
    subject_share: float = 0.0
    markers: FloatArray | None = None
    rotation: float = 0.0
    reference: FloatArray | None = None
    adjacent: tuple[int, ...] | None = None
    full_angle: float = math.radians(17.0)
    note: str = ""

    @cached_property
    def full_covariance(self) -> FloatArray:
        """Covariance far from the reference posture, (n, n) m²: what other families' spread grows by."""
        return self.size**2 * unison_shape(self.markers, self.outputs, self.unison_share, self.rotation)

    @property
    def residual(self) -> FloatArray:
        """Covariance of what is not constant in a trial, (n, n) m²; all there is at the reference."""
        return (1.0 - self.subject_share) * self.full_covariance

    @property
    def constant_covariance(self) -> FloatArray:
        """Covariance of the trial-constant unknowns, (K·n, K·n) m²: one set for each adjacent joint."""
        copies = np.eye(max(self._origin.size, 1))
        return np.asarray(np.kron(copies, self.subject_share * self.full_covariance), dtype=np.float64)

    def _flexion(self, angles: FloatArray) -> FloatArray:
        """Flexion of the adjacent joints, (..., joints, 3) to (..., K)."""
        chosen = angles if self.adjacent is None else angles[..., list(self.adjacent), :]
        return chosen[..., FLEXION]

    @cached_property
    def _origin(self) -> FloatArray:
        """Flexion at the reference, (K,); empty where it is not known."""
        origin = np.zeros(0) if self.reference is None else self._flexion(self.reference)
        return origin if np.isfinite(origin).all() else np.zeros(0)

    def features(self, angles: FloatArray) -> FloatArray:
        """Vector f of each frame, (F, K): along the flexion away from the reference, at most 1 long."""
        if not self._origin.size:
            return np.ones((angles.shape[0], 1))
        away = self._flexion(angles) - self._origin
        square = np.einsum("fj,fj->f", away, away) / self.full_angle**2
        # −expm1(−½s)/s tends to ½ where the posture is the reference.
        ratio = np.where(square > 1e-12, -np.expm1(-0.5 * square) / np.maximum(square, 1e-12), 0.5)
        return np.asarray(away / self.full_angle * np.sqrt(ratio)[:, None])

    def moments(self, angles: FloatArray) -> Moments:
        """Moments at joint angles of shape (F, joints, 3), rad."""
        frames, joints, _ = angles.shape
        features = self.features(angles)
        grown = self.subject_share * np.einsum("fk,fk->f", features, features)
        return Moments(
            mean=np.zeros((frames, self.outputs)),
            mean_derivative=np.zeros((frames, self.outputs, joints, 3)),
            features=features,
            covariance=(grown + 1.0 - self.subject_share)[:, None, None] * self.full_covariance,
        )


@dataclass(frozen=True)
class Sourced:
    """A number with where it comes from: value, what was published, source, DOI, tag, how it was taken."""

    value: float
    published: str
    source: str
    doi: str
    tag: str
    how: str


@dataclass(frozen=True)
class SegmentMagnitude:
    """Published numbers of one segment.

    names: words that mean it; size: by task group, mm, RMS length of a displacement; unison_share; rotation:
    deg/mm, rotation against translation of the part in unison.
    """

    names: tuple[str, ...]
    size: Mapping[str, Sourced]
    unison_share: Sourced
    rotation: Sourced


@dataclass(frozen=True)
class Magnitudes:
    """The table of published sizes.

    segments: by name; tasks: words of every task group; subject_share; full_angle: deg; time_constant: s.
    """

    segments: Mapping[str, SegmentMagnitude]
    tasks: Mapping[str, tuple[str, ...]]
    subject_share: Sourced
    full_angle: Sourced
    time_constant: Sourced
    place: str = field(default="magnitude.toml")

    def segment(self, name: str) -> str:
        """Name in the table of a segment, whatever its side; MismatchError if it has none."""
        tokens = words(name)
        for known, entry in self.segments.items():
            if any(word in tokens for word in entry.names):
                return known
        known_names = ", ".join(self.segments)
        raise MismatchError(
            message(
                (self.place, f"segment {name}"),
                f"no published size, known: {known_names}",
                nearest(name, self.segments) or "Learn a prior from paired data.",
            )
        )

    def task(self, segment: str, activity: str) -> tuple[str, str]:
        """Task group of an activity for a segment of the table, and a note where that was no plain match."""
        tokens = words(activity)
        sizes = self.segments[segment].size
        found = [task for task, group in self.tasks.items() if any(_says(tokens, word) for word in group)]
        widest = max(found or self.tasks, key=lambda task: sizes[task].value)
        if len(found) == 1:
            return widest, ""
        shown = f"activity {activity}" if activity else "no activity"
        why = f"fits {', '.join(found)}" if found else f"fits none of {', '.join(self.tasks)}"
        return widest, f"{segment}: {shown} {why}; the widest, {widest}, is taken."


def words(name: str) -> tuple[str, ...]:
    """Lower-case words of a name: ``left_Thigh`` and ``stepUp`` have two each, digits are left out."""
    split = re.sub(r"([a-z])([A-Z])|([A-Z])([A-Z][a-z])", r"\1\3 \2\4", name)
    return tuple(re.findall(r"[a-z]+", split.lower()))


def _says(tokens: Sequence[str], wanted: str) -> bool:
    """Whether a word begins like the wanted one, or two words in a row like two."""
    parts = wanted.split()
    rows = [(token,) for token in tokens] if len(parts) == 1 else list(pairwise(tokens))
    return any(all(have.startswith(part) for have, part in zip(row, parts, strict=True)) for row in rows)


def _sourced(table: Table, minimum: float, maximum: float) -> Sourced:
    table.refuse_unknown(("value", "published", "source", "doi", "tag", "how"))
    doi = table.get("doi", "")
    if not isinstance(doi, str):
        raise InputError(message(table.place("doi"), "expected a text, which may be empty", "Quote it."))
    return Sourced(
        value=table.number("value", minimum=minimum, maximum=maximum),
        published=table.text("published"),
        source=table.text("source"),
        doi=doi,
        tag=table.choice("tag", TAGS),
        how=table.text("how"),
    )


def read_magnitudes(path: str | None = None) -> Magnitudes:
    """Read a table of published sizes.

    Parameters
    ----------
    path : TOML file in the form of the packaged one; that one by default

    Returns
    -------
    Magnitudes

    Raises
    ------
    InputError : a number without a value in its range, source, tag or how it was taken; a task group without
        a size; no segment.
    """
    if path is None:
        return _packaged()
    return _magnitudes(read_toml(path))


def packaged_text() -> str:
    """The packaged table as text, for a prior file to carry."""
    return files("sta_prior").joinpath(PACKAGED).read_text(encoding="utf-8")


@cache
def magnitudes_of(text: str) -> Magnitudes:
    """Published sizes from the text of a table; InputError as read_magnitudes."""
    try:
        content = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise InputError(message("magnitude.toml", f"not a table of sizes ({error})")) from error
    return _magnitudes(Table(content, Path("magnitude.toml"), ""))


def _packaged() -> Magnitudes:
    return magnitudes_of(packaged_text())


def _magnitudes(table: Table) -> Magnitudes:
    table.refuse_unknown(("title", "task", "common", "segment"))
    groups = table.table("task")
    tasks = {name: tuple(groups.texts(name)) for name in groups}
    common = table.table("common")
    common.refuse_unknown(("subject_share", "full_angle_deg", "time_constant_s"))
    entries = table.table("segment")
    if not entries or not tasks:
        place = entries.place() if tasks else groups.place()
        raise InputError(message(place, "nothing here", "List at least one."))
    segments = {}
    for name in entries:
        entry = entries.table(name)
        entry.refuse_unknown(("names", "size_mm", "unison_share", "rotation_deg_per_mm"))
        sizes = entry.table("size_mm")
        sizes.refuse_unknown(tasks)
        segments[name] = SegmentMagnitude(
            names=tuple(entry.texts("names")),
            size={task: _sourced(sizes.table(task), 0.1, 100.0) for task in tasks},
            unison_share=_sourced(entry.table("unison_share"), 0.0, 0.99),
            rotation=_sourced(entry.table("rotation_deg_per_mm"), 0.0, 10.0),
        )
    return Magnitudes(
        segments=segments,
        tasks=tasks,
        subject_share=_sourced(common.table("subject_share"), 0.0, 0.99),
        full_angle=_sourced(common.table("full_angle_deg"), 1.0, 90.0),
        time_constant=_sourced(common.table("time_constant_s"), 0.001, 10.0),
        place=table.path.name,
    )


def magnitude_for(
    segment_name: str,
    markers_reference: FloatArray,
    activity: str = "",
    reference_angles: FloatArray | None = None,
    adjacent: tuple[int, ...] | None = None,
    magnitudes: Magnitudes | None = None,
) -> MagnitudeArtifact:
    """Artifact of published size for one segment in one trial.

    Parameters
    ----------
    segment_name : thigh, shank or foot, with or without a side before or behind
    markers_reference : shape (m, 3), m, reference positions in the bone frame
    activity : name of the task; none or an unknown one takes the widest size and says so in ``note``
    reference_angles : shape (joints, 3), rad; without them the artifact has its full size everywhere
    adjacent : positions of the joints that touch the segment; all by default
    magnitudes : the table; the packaged one by default

    Returns
    -------
    MagnitudeArtifact

    Raises
    ------
    MismatchError : no published size for such a segment.
    ShapeError : positions of another shape.

    Examples
    --------
    >>> artifact = magnitude_for("left_thigh", 0.05 * np.eye(4, 3), "level-walk")
    >>> round(1000 * artifact.size * math.sqrt(3), 1)
    13.9
    """
    table = magnitudes or read_magnitudes()
    markers = check_shape(markers_reference, (None, 3), "markers_reference")
    name = table.segment(segment_name)
    task, note = table.task(name, activity)
    entry = table.segments[name]
    return MagnitudeArtifact(
        outputs=3 * markers.shape[0],
        size=0.001 * entry.size[task].value / math.sqrt(3.0),
        unison_share=entry.unison_share.value,
        time_constant=table.time_constant.value,
        subject_share=table.subject_share.value,
        markers=markers,
        rotation=math.radians(1000.0 * entry.rotation.value),
        reference=reference_angles,
        adjacent=adjacent,
        full_angle=math.radians(table.full_angle.value),
        note=note,
    )
