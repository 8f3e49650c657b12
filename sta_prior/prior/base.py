"""A learned prior: what it holds, and how it is bound to a trial.

Shell: holds the labels. Conventions: docs/conventions.md.
"""

from __future__ import annotations

import warnings
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
import xarray as xr

from sta_prior.checks import FloatArray, nearest
from sta_prior.errors import MismatchError, StaPriorWarning, message
from sta_prior.pairs.pairing import segment_side
from sta_prior.prior.augmented import Augmented
from sta_prior.prior.family import Own, Posture, SegmentModel, restrict
from sta_prior.prior.inputs import TILT, VELOCITY, input_columns, row_count, tilt
from sta_prior.prior.interface import Artifact
from sta_prior.prior.magnitude import magnitude_for, words
from sta_prior.prior.personal import LearnedTrial, OwnPairs, own_pairs
from sta_prior.prior.statistics import SegmentFrames, segment_frames
from sta_prior.study import Lab, Reference, Trial


@dataclass(frozen=True)
class JointLabel:
    """A joint as the prior knows it: name, kind, the bones it joins and its degrees of freedom."""

    name: str
    kind: str
    proximal: str
    distal: str
    dof: tuple[str, ...]


@dataclass(frozen=True)
class Binding:
    """A prior bound to a trial: an artifact per segment of the lab, and what it rests on.

    informed_times: s, instants of this trial whose bone truth informed the weights;
    basis_of_belief: words; inputs: what drives the artifacts beside the joint angles.
    """

    artifacts: dict[str, Artifact]
    informed_times: FloatArray
    basis_of_belief: str
    inputs: tuple[str, ...] = ()


@dataclass(frozen=True)
class Prior:
    """An artifact prior for the segments of one marker set.

    Attributes
    ----------
    family : name of the family
    joints : joints whose angles drive the artifact
    segments : by name
    trials : what it learned from
    covariates : by subject
    validation : Dataset of left-out figures, see prior.validate
    notes : what a user should know, in words
    invented : learned from invented data
    pairs_digest : content digest of the paired data
    inputs : optional inputs beside the joint angles
    """

    family: str
    joints: tuple[JointLabel, ...]
    segments: Mapping[str, SegmentModel]
    trials: tuple[LearnedTrial, ...]
    validation: xr.Dataset
    notes: tuple[str, ...] = ()
    invented: bool = False
    pairs_digest: str = ""
    covariates: Mapping[str, Mapping[str, float]] = field(default_factory=dict)
    inputs: tuple[str, ...] = ()

    @property
    def subjects(self) -> tuple[str, ...]:
        """Subjects it learned from, sorted."""
        return tuple(sorted({trial.subject for trial in self.trials}))

    @property
    def is_personal(self) -> bool:
        """Whether it learned from one subject only."""
        return len(self.subjects) == 1

    def save(self, path: str | Path) -> None:
        """Write the prior as NetCDF, atomically; data only, nothing is pickled."""
        from sta_prior.prior.files import write_prior

        write_prior(Path(path), self)

    @property
    def digest(self) -> str:
        """Digest of the content, as stored in solutions."""
        from sta_prior.prior.files import prior_digest

        return prior_digest(self)

    def bind(self, trial: Trial, personal: xr.Dataset | None = None) -> Binding:
        """Bind the prior to a trial.

        Parameters
        ----------
        trial : the trial to solve
        personal : paired data that hold the trial's subject; frames that the prior already
            learned from are recognised by their digest and not counted twice

        Returns
        -------
        Binding

        Raises
        ------
        MismatchError : the lab's markers or joints do not fit the prior.
        """
        lab = trial.subject.lab
        joint_columns = self._match_joints(lab)
        columns = input_columns(self.inputs, joint_columns, len(lab.joints))
        total = row_count(self.inputs, len(lab.joints))
        own = own_pairs(trial.subject.id, personal, self.trials) if personal is not None else None
        self._warn_of_a_stranger(trial)
        reference = trial.subject.reference()
        artifacts: dict[str, Artifact] = {}
        mirror = np.array([1.0, 1.0, -1.0])
        for index, segment in enumerate(lab.segments):
            model = self._match_segment(segment.name, segment.markers, lab)
            side = segment_side(lab, segment.name)
            positions = reference.markers[lab.marker_segment == index]
            posture = Posture(
                self._reference_inputs(reference, lab, index, side)[columns],
                positions * mirror if side == "left" else positions,
                trial.activity,
            )
            inner = self._artifact(model, posture, trial, own)
            known = [marker for marker in segment.markers if not model.markers or marker in model.markers]
            first = [
                3 * (model.markers.index(marker) if model.markers else place)
                for place, marker in enumerate(known)
            ]
            outputs = (np.array(first)[:, None] + np.arange(3)).reshape(-1)
            bound: Artifact = restrict(inner, outputs, side, columns, total)
            if len(known) < len(segment.markers):
                bound = self._with_strangers(
                    bound, model, segment.markers, posture, side, lab, columns, total
                )
            artifacts[segment.name] = bound
        times, belief = self._what_informs(trial, own)
        return Binding(artifacts, times, belief, self.inputs)

    def _reference_inputs(self, reference: Reference, lab: Lab, segment: int, side: str) -> FloatArray:
        """All inputs of a segment in the trial's reference posture, (rows, 3) rad."""
        rows = [reference.angles]
        if TILT in self.inputs:
            rotation = reference.poses[segment, :3, :3]
            if not (lab.up_declared and np.isfinite(rotation).all()):
                raise MismatchError(
                    message(
                        (lab.path, f"segment.{lab.segments[segment].name}"),
                        f"the prior takes its {TILT}, which needs up = … in the lab file and a reference "
                        "posture with known bone poses in the lab",
                        f"Declare up and give a static trial, or learn a prior without {TILT}.",
                    )
                )
            rows.append(tilt(rotation, "xyz".index(lab.up), side)[None])
        if VELOCITY in self.inputs:
            rows.append(np.zeros(reference.angles.shape))
        return np.concatenate(rows)

    def _warn_of_a_stranger(self, trial: Trial) -> None:
        """Say so where a personal prior meets another subject."""
        if self.is_personal and trial.subject.id not in self.subjects:
            warnings.warn(
                message(
                    (trial.subject.id, trial.id),
                    f"the prior is personal: it learned from {self.subjects[0]} only",
                    "Its spread between subjects is assumed, not learned; trust neither mean nor interval.",
                ),
                StaPriorWarning,
                stacklevel=4,
            )

    def _match_joints(self, lab: Lab) -> list[int]:
        """Position in the lab of every joint of the prior."""
        names = [joint.name for joint in lab.joints]
        columns = []
        for joint in self.joints:
            if joint.name not in names:
                raise MismatchError(
                    message(
                        lab.path,
                        f"prior needs the angles of joint {joint.name}, lab has {', '.join(names) or 'none'}",
                        f"Add joint.{joint.name} to the lab file. {nearest(joint.name, names)}".strip(),
                    )
                )
            index = names.index(joint.name)
            if lab.joints[index].convention.kind != joint.kind:
                raise MismatchError(
                    message(
                        (lab.path, f"joint.{joint.name}"),
                        f"prior expects kind {joint.kind}, lab has {lab.joints[index].convention.kind}",
                    )
                )
            ends = (lab.joints[index].proximal, lab.joints[index].distal)
            if ends != (joint.proximal, joint.distal):
                raise MismatchError(
                    message(
                        (lab.path, f"joint.{joint.name}"),
                        f"prior expects {joint.proximal} as proximal and {joint.distal} as distal segment, "
                        f"lab has {ends[0]} and {ends[1]}",
                        "Name the segments as in the prior.",
                    )
                )
            columns.append(index)
        return columns

    def _match_segment(self, name: str, markers: tuple[str, ...], lab: Lab) -> SegmentModel:
        if name not in self.segments:
            alias = [key for key, model in self.segments.items() if not model.markers and key in words(name)]
            if alias:
                return self.segments[alias[0]]
            known = ", ".join(self.segments)
            raise MismatchError(
                message(
                    (lab.path, f"segment.{name}"),
                    f"not in the prior, which knows {known}",
                    f"Learn a prior with it. {nearest(name, self.segments)}".strip(),
                )
            )
        model = self.segments[name]
        if model.markers and not set(markers) & set(model.markers):
            raise MismatchError(
                message(
                    (lab.path, f"segment.{name}"),
                    f"prior expects {name} markers {' '.join(model.markers)}, lab has {' '.join(markers)}",
                    f"Rename {markers[0]} or learn a prior with it.",
                )
            )
        return model

    def _with_strangers(
        self,
        bound: Artifact,
        model: SegmentModel,
        markers: tuple[str, ...],
        posture: Posture,
        side: str,
        lab: Lab,
        columns: list[int],
        total: int,
    ) -> Artifact:
        """Give markers that the prior does not know an artifact of published size, and say so."""
        strange = [place for place, marker in enumerate(markers) if marker not in model.markers]
        names = " ".join(markers[place] for place in strange)
        adjacent = tuple(
            index for index, joint in enumerate(self.joints) if model.name in (joint.proximal, joint.distal)
        )
        try:
            size = magnitude_for(
                model.name, posture.markers[strange], posture.activity, posture.angles, adjacent
            )
        except MismatchError as error:
            raise MismatchError(
                message(
                    (lab.path, f"segment.{model.name}"),
                    f"prior expects {model.name} markers {' '.join(model.markers)}, "
                    f"lab has {' '.join(markers)}",
                    f"Rename {markers[strange[0]]} or learn a prior with it.",
                )
            ) from error
        warnings.warn(
            message(
                (lab.path, f"segment.{model.name}"),
                f"the prior does not know marker {names}: artifact of published size is assumed there",
                "Rename it, or learn a prior with it.",
            ),
            StaPriorWarning,
            stacklevel=4,
        )
        every = np.arange(3 * len(strange))
        others = restrict(size, every, side, columns, total)
        places = np.arange(3 * len(markers)).reshape(-1, 3)
        rest = [place for place in range(len(markers)) if place not in strange]
        return Augmented(bound, others, places[rest].reshape(-1), places[strange].reshape(-1))

    def _artifact(
        self, model: SegmentModel, posture: Posture, trial: Trial, own: OwnPairs | None
    ) -> Artifact:
        subject = trial.subject.id
        if not model.markers or (own is None and not (self.is_personal and model.knows(subject))):
            # A model of any markers learns from nobody's frames.
            return model.for_new_subject(posture)
        frames: list[SegmentFrames] = []
        if own is not None and not own.empty:
            dof = {joint.name: joint.dof for joint in self.joints}
            frames = [
                replace(item, trial=own.keys[item.trial])
                for item in segment_frames(own.data, model.name, model.markers, dof, self.inputs)
            ]
        # A personal prior's own subject needs no widening for subjects that were not imaged.
        widened = not (self.is_personal and subject in self.subjects)
        return model.for_subject(posture, Own(subject, frames, self._trial_key(trial, own), widened))

    def _trial_key(self, trial: Trial, own: OwnPairs | None) -> str:
        """Name under which this very trial's frames are known; empty if none are."""
        digest = trial.digest()
        for item in self.trials:
            if item.subject == trial.subject.id and item.digest == digest:
                return item.trial
        return digest if own is not None and own.times_of(digest).size else ""

    def _what_informs(self, trial: Trial, own: OwnPairs | None) -> tuple[FloatArray, str]:
        subject, digest = trial.subject.id, trial.digest()
        times = [item.times for item in self.trials if item.subject == subject and item.digest == digest]
        if own is not None:
            times.append(own.times_of(digest))
        informed = np.concatenate(times) if times else np.zeros(0)
        known = subject in self.subjects
        if (own is not None and (known or not own.empty)) or (self.is_personal and known):
            return informed, "the subject's own paired frames and the prior"
        if known:
            return informed, f"a prior of {len(self.subjects)} subject(s), this one among them"
        return informed, f"a prior of {len(self.subjects)} other subject(s)"
