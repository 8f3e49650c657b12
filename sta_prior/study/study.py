"""The study file: subjects, their trials, and where the data is. Data is read when asked for.

Conventions: docs/conventions.md. The file's form: docs/files.md.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Literal

import numpy as np
import xarray as xr

from sta_prior.checks import FloatArray, nearest
from sta_prior.errors import InputError, message
from sta_prior.io.files import file_digest
from sta_prior.io.text import read_reference_points
from sta_prior.study.frames import Side
from sta_prior.study.lab import Lab
from sta_prior.study.reference import Reference, reference_from_frames, reference_from_points
from sta_prior.study.sources import (
    BoneSource,
    bone_poses,
    cycles_from_events,
    read_bones,
    read_trial_points,
)
from sta_prior.study.static import average_bones, average_static, check_points, first_bone_frames

Alignment = Literal["shared", "estimate"]


@dataclass(frozen=True, eq=False)
class Trial:
    """One recording of a subject. Its files are read when asked for, and not before.

    Attributes
    ----------
    id, activity, session : names; session is empty where none is given
    subject : whose trial it is
    clock, space : "shared", or "estimate" for an unknown lag, an unknown transform
    clock_window : s, largest lag to look for
    bone_sd_position, bone_sd_rotation : m, rad, accuracy of the bone truth
    bone_sd_declared : whether the study gives that accuracy; else it is the default
    skin_path : the file with the skin markers
    bone_source : the file with the bone truth; None for an archived trial
    declared_cycles : pairs of start and end, s, as the study gives them; None where it
        leaves them to the file's events
    """

    id: str
    activity: str
    session: str
    subject: Subject = field(repr=False)
    clock: Alignment
    space: Alignment
    clock_window: float
    bone_sd_position: float
    bone_sd_rotation: float
    bone_sd_declared: bool
    skin_path: Path
    bone_source: BoneSource | None
    declared_cycles: tuple[tuple[float, float], ...] | None

    @property
    def place(self) -> tuple[object, ...]:
        """Subject and trial, as messages name them."""
        return (self.subject.id, self.id)

    @property
    def has_bone(self) -> bool:
        """Whether the study names bone truth for the trial."""
        return self.bone_source is not None

    @property
    def cycles(self) -> FloatArray:
        """Start and end of each cycle, shape (n, 2), s, skin clock.

        As the study gives them, else from one foot strike of the subject's side (right
        where none is declared) to the next in the file's events; n = 0 where there are none.
        """
        if self.declared_cycles is not None:
            return np.array(self.declared_cycles, dtype=np.float64).reshape(-1, 2)
        return cycles_from_events(read_trial_points(self.skin_path), self.subject.side or "right")

    def skin(self) -> xr.Dataset:
        """Read the skin markers, in the lab's order.

        Returns
        -------
        Dataset: dims time, marker, axis; `position` m, lab frame, NaN hidden; `residual`
        m; time s; attributes as in the Points Dataset of sta_prior/io.

        Raises
        ------
        InputError : a marker of the lab is not in the file; the file cannot be read.
        """
        points = read_trial_points(self.skin_path)
        labels = [str(label) for label in points["point"].to_numpy()]
        for label in self.subject.lab.markers:
            if label not in labels:
                raise InputError(
                    message(
                        (self.skin_path, f"marker {label}"),
                        f"not among the {len(labels)} points of the file",
                        nearest(label, labels) or f"Its points: {' '.join(labels)}.",
                    )
                )
        return points.sel(point=list(self.subject.lab.markers)).rename(point="marker")

    def bone(self) -> xr.Dataset | None:
        """Read the bone truth, in the lab's segment order; None where the study names none.

        Returns
        -------
        Dataset: dims time, segment, row, col, axis; `rotation`, `position` m, NaN where not
        in view; lab and clock of the file, bone frames of the file: multiply poses by the
        reference's `frame_offset` for those of the study.

        Raises
        ------
        InputError : no segment of the lab in the file; bone pins; the file cannot be read.
        """
        if self.bone_source is None:
            return None
        return read_bones(self.bone_source, self.subject.lab, self.place)

    def digest(self) -> str:
        """Return the SHA-256 of the skin file, hexadecimal."""
        return file_digest(self.skin_path)


@dataclass(frozen=True, eq=False)
class Subject:
    """One person with a reference posture and trials.

    Attributes
    ----------
    id : name
    side : side of the body; None where neither the subject nor the lab says one
    lab : with joints and frames of the subject's side
    covariates : any number the study gives, such as mass_kg
    trials : in the order of the study file
    static_path, bone_static_path, reference_points_path : files of the reference posture
    study_path : the study file, for messages
    invented : whether the study declares its data invented
    """

    id: str
    side: Side | None
    lab: Lab
    covariates: dict[str, float]
    static_path: Path | None
    bone_static_path: Path | None
    reference_points_path: Path | None
    study_path: Path
    invented: bool = False
    trials: tuple[Trial, ...] = field(default=(), repr=False)
    _kept: dict[str, Reference] = field(default_factory=dict, init=False, repr=False)

    def reference(self) -> Reference:
        """Return the reference posture; computed once.

        Raises
        ------
        InputError : a point, a segment's pose or a file that is needed is not there.
        NotDeterminedError : landmarks that give no axes; markers nearly on a line.

        Warns
        -----
        StaPriorWarning : the subject moved; doubtful layout; no posture to take angles from.
        """
        if "reference" not in self._kept:
            points_given = self.reference_points_path is not None
            self._kept["reference"] = self._from_points() if points_given else self._from_static()
        return self._kept["reference"]

    def _from_points(self) -> Reference:
        """Reference positions measured in the bone frame."""
        path = Path(str(self.reference_points_path))
        table = read_reference_points(path)
        return reference_from_points(self.lab, table, self._bone_static(), (path,))

    def _from_static(self) -> Reference:
        """Reference from a static trial, with bone poses where there are any."""
        path = Path(str(self.static_path))
        points = read_trial_points(path)
        names = check_points(points, self.lab, (path,))
        paired = None if self.bone_static_path else self._trial_of_static(path)
        if paired is not None:
            bones = read_bones(paired.bone_source, self.lab, paired.place) if paired.bone_source else None
            if bones is not None:
                time = bones["time"].to_numpy().astype(np.float64)
                frames = first_bone_frames(points, names, time, bone_poses(bones), self.lab, (path,))
                return reference_from_frames(
                    self.lab, frames.points, frames.spread, frames.imaging, (path,), frames.notes
                )
        imaging = self._bone_static()
        self._check_imaging(imaging)
        average = average_static(points, names, (path,))
        return reference_from_frames(
            self.lab, average.points, average.spread, imaging[None], (path,), average.notes
        )

    def _trial_of_static(self, path: Path) -> Trial | None:
        """Return the first trial that is the static file and has bones in its clock and space."""
        for trial in self.trials:
            shared = trial.clock == "shared" and trial.space == "shared" and trial.has_bone
            if shared and trial.skin_path.resolve() == path.resolve():
                return trial
        return None

    def _bone_static(self) -> FloatArray:
        """Mean bone poses at the reference posture, shape (S, 4, 4), m; NaN where unknown."""
        if self.bone_static_path is None:
            return np.full((len(self.lab.segments), 4, 4), np.nan)
        place = (self.bone_static_path,)
        bones = read_bones(BoneSource("table", self.bone_static_path), self.lab, place)
        return average_bones(bone_poses(bones), self.lab, place)

    def _check_imaging(self, imaging: FloatArray) -> None:
        """Refuse a segment whose axes come from imaging and that no imaging shows."""
        for index, segment in enumerate(self.lab.segments):
            if segment.frame is None and np.isnan(imaging[index]).any():
                if self.bone_static_path is not None:
                    raise InputError(
                        message(
                            (self.bone_static_path, f"segment {segment.name}"),
                            'no pose, expected one for frame = "imaging"',
                            "Add it, or give the segment a recipe.",
                        )
                    )
                raise InputError(
                    message(
                        (self.study_path, f"subject {self.id}", f"segment {segment.name}"),
                        'frame = "imaging" but no bone_static, and the static file is not the skin file of a '
                        "trial with bone truth in shared clock and space",
                        "Add bone_static.",
                    )
                )


@dataclass(frozen=True, eq=False)
class Study:
    """Subjects and trials of a study file.

    Attributes
    ----------
    lab : as the lab file has it, before any subject's side
    subjects : in the order of the file
    path : the file
    invented : whether the study declares its data invented
    title : as the file gives it, else the lab's
    """

    lab: Lab
    subjects: tuple[Subject, ...]
    path: Path
    invented: bool
    title: str

    def subject(self, subject_id: str) -> Subject:
        """Return a subject by its id; InputError for an unknown one."""
        self._check_known([subject_id], [subject.id for subject in self.subjects], "subject")
        return next(subject for subject in self.subjects if subject.id == subject_id)

    def trial(self, subject_id: str, trial_id: str) -> Trial:
        """Return a trial by its subject's id and its own; InputError for an unknown one."""
        subject = self.subject(subject_id)
        known = [trial.id for trial in subject.trials]
        self._check_known([trial_id], known, f"trial of subject {subject_id}")
        return next(trial for trial in subject.trials if trial.id == trial_id)

    def select(
        self, subjects: Iterable[str] | None = None, trials: Iterable[str] | None = None
    ) -> list[Trial]:
        """Return the trials of some subjects, in the order of the file.

        Parameters
        ----------
        subjects : ids; None for all
        trials : ids, each of which at least one of these subjects has; None for all

        Raises
        ------
        InputError : an id that is not there, with the nearest that is.
        """
        wanted_subjects = None if subjects is None else list(subjects)
        wanted_trials = None if trials is None else list(trials)
        self._check_known(wanted_subjects or [], [subject.id for subject in self.subjects], "subject")
        chosen = [s for s in self.subjects if wanted_subjects is None or s.id in wanted_subjects]
        all_trials = [trial for subject in chosen for trial in subject.trials]
        self._check_known(wanted_trials or [], list(dict.fromkeys(t.id for t in all_trials)), "trial")
        return [trial for trial in all_trials if wanted_trials is None or trial.id in wanted_trials]

    def _check_known(self, wanted: Sequence[str], known: Sequence[str], what: str) -> None:
        """Raise for the first id that is not known."""
        for name in wanted:
            if name not in known:
                do = nearest(name, known) or f"Known: {', '.join(known)}."
                raise InputError(message(self.path, f"no {what} {name}", do))
