"""Error and coverage of the smoother on subjects never imaged, over simulated populations.

    python docs/studies/smoother.py populations --populations 6
    python docs/studies/smoother.py variants --populations 2
    python docs/studies/smoother.py personal --populations 3
    python docs/studies/smoother.py durations --populations 3
    python docs/studies/smoother.py mismatch --populations 2

One population: a prior from nine imaged subjects; trials of eight archived ones, solved by several
estimators. The artifact is that of simulate/mechanisms.py, which no family of priors contains, or the simpler
`drives`. Results: docs/smoother.md.
"""

from __future__ import annotations

import argparse
import warnings
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field, replace
from typing import Any, cast

import numpy as np
from scipy.stats import chi2, norm
from study_in_memory import (
    KNEE,
    SPLIT,
    TRAVEL_SD,
    Couriers,
    artifacts_for,
    knee_angles,
    make_couriers,
    only_tasks,
    pairs_of,
    reference_markers,
)

from sta_prior.checks import FloatArray
from sta_prior.errors import StaPriorWarning
from sta_prior.prior import Prior, learn
from sta_prior.prior.family import Own, Posture
from sta_prior.prior.interface import Artifact
from sta_prior.prior.statistics import segment_frames
from sta_prior.prior.time_scales import TimeScales
from sta_prior.se3 import exp, inverse, log
from sta_prior.simulate import MECHANISMS, SEGMENTS, TASKS
from sta_prior.simulate import motion as simulated_motion
from sta_prior.simulate.subject import SimulatedSubject, SimulatedTrial
from sta_prior.solve.frame import bridge, first_look, solve_frames
from sta_prior.solve.posterior import FrameSolution
from sta_prior.solve.terms import JointProblem, SegmentProblem
from sta_prior.solve.trajectory_posterior import solve_trajectory

QUANTILE = float(norm.ppf(0.95))
STEP = 0.01
SUBJECTS, FRESH = 9, 8
Solver = Callable[[list[SegmentProblem], list[JointProblem], FloatArray], FrameSolution]

SOLVERS: dict[str, Solver] = {
    "frame-map": solve_frames,
    "smoother": lambda s, j, start: solve_trajectory(s, j, start, STEP),
    "smoother, full information": lambda s, j, start: solve_trajectory(s, j, start, STEP, constants="full"),
    "smoother, no constants": lambda s, j, start: solve_trajectory(s, j, start, STEP, constants="none"),
    "smoother, noise on jerk": lambda s, j, start: solve_trajectory(s, j, start, STEP, order=3),
}


@dataclass
class Score:
    """Errors of one estimator over trials; angles in rad, poses as tangents, z by predicted SD."""

    angle: list[FloatArray] = field(default_factory=list)
    angle_z: list[FloatArray] = field(default_factory=list)
    pose: list[FloatArray] = field(default_factory=list)
    pose_z: list[FloatArray] = field(default_factory=list)
    flagged: list[float] = field(default_factory=list)

    def add(self, trial: SimulatedTrial, found: FrameSolution | None, poses: FloatArray) -> None:
        """Score a trial; without a solution only the poses."""
        angles = knee_angles(poses) if found is None else found.angles[:, 0]
        error = angles - knee_angles(trial.lab_from_bone)
        away = log(inverse(poses) @ trial.lab_from_bone)
        self.angle.append(error)
        self.pose.append(away)
        if found is None:
            return
        self.angle_z.append(error / found.angle_sd[:, 0])
        sd = np.sqrt(np.einsum("fkk->fk", found.covariance)).reshape(away.shape)
        self.pose_z.append(away / sd)
        p = chi2.sf(found.conflict, np.maximum(found.conflict_freedom, 1.0))
        self.flagged.append(float(np.nanmean(p < 0.05)))

    def errors(self) -> FloatArray:
        """RMS of three angles, deg, and of the two positions, mm."""
        angle = np.degrees(np.sqrt(np.nanmean(np.concatenate(self.angle) ** 2, axis=0)))
        place = np.sqrt(np.nanmean((np.concatenate(self.pose)[..., 3:] ** 2).sum(axis=-1), axis=0))
        return np.concatenate([angle, 1e3 * place])

    def covered(self) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Coverage at 90 %, %, of three angles and of twelve pose components; normalised squared errors."""
        angle, pose = np.concatenate(self.angle_z), np.concatenate(self.pose_z)
        share = [100 * np.nanmean(np.abs(z) <= QUANTILE, axis=0) for z in (angle, pose)]
        return share[0], share[1].reshape(-1), np.nanmean(angle**2, axis=0)


def solve_all(
    prior: Prior,
    subjects: Iterable[SimulatedSubject],
    solvers: Sequence[str],
    scores: dict[str, Score],
    change: Callable[[Artifact], Artifact] = lambda artifact: artifact,
    scale: float = 1.0,
    own: Callable[[Prior, SimulatedSubject], Sequence[Artifact]] | None = None,
) -> None:
    """Solve every trial of the subjects and add up.

    scale: of the true artifact; change: of the prior's; own: artifacts of a subject with frames of its own.
    """
    for subject in subjects:
        reference = reference_markers(subject)
        usual = own(prior, subject) if own is not None else artifacts_for(prior.segments, subject)
        artifacts = [change(artifact) for artifact in usual]
        proximal, distal = subject.body.centres
        joints = [JointProblem(0, 1, KNEE, proximal, distal, TRAVEL_SD)]
        for trial in subject.trials:
            more = (scale - 1.0) * trial.displacement
            turn = trial.lab_from_bone[..., :3, :3]
            points = trial.points.copy()
            points[:, :SPLIT] += np.einsum("fab,fmb->fma", turn[:, 0], more[:, :SPLIT])
            points[:, SPLIT:] += np.einsum("fab,fmb->fma", turn[:, 1], more[:, SPLIT:])
            segments = [
                SegmentProblem(0, points[:, :SPLIT], reference[:SPLIT], artifacts[0]),
                SegmentProblem(1, points[:, SPLIT:], reference[SPLIT:], artifacts[1]),
            ]
            start = bridge(first_look(segments, 2)[0], joints)
            scores.setdefault("rigid", Score()).add(trial, None, start)
            for name in solvers:
                found = SOLVERS[name](segments, joints, start)
                scores.setdefault(name, Score()).add(trial, found, found.poses)


def one_of_each(subjects: Sequence[SimulatedSubject]) -> list[SimulatedSubject]:
    """The subjects with one trial of every task."""
    return [replace(subject, trials=subject.trials[: len(TASKS)]) for subject in subjects]


def long_walks(seed: int, mechanism: str, duration: float) -> list[SimulatedSubject]:
    """The fresh subjects of a population, each walking once for so long, s."""
    usual = simulated_motion._DURATION
    simulated_motion._DURATION = {**usual, "level-walk": duration}
    try:
        fresh = make_couriers(seed, mechanism, 0, FRESH).fresh
    finally:
        simulated_motion._DURATION = usual
    return [replace(s, trials=s.trials[:1]) for s in only_tasks(fresh, ["level-walk"])]


HEAD = (
    "| {} | estimator | knee error, degrees | against rigid | all three | position, mm (thigh / shank) "
    "| thigh against rigid | angles covered at 90 % | pose components, lowest–highest | normalised error "
    "| frames in conflict |"
)
RULE = "|" + "---|" * 11


def row(label: str, name: str, score: Score, rigid: Score) -> str:
    """One line of a table."""
    own, base = score.errors(), rigid.errors()
    total = [float(np.sqrt((errors[:3] ** 2).sum())) for errors in (own, base)]
    cells = [
        label,
        name,
        " / ".join(f"{value:.2f}" for value in own[:3]),
        " / ".join(f"{value:.2f}" for value in own[:3] / base[:3]),
        f"{total[0] / total[1]:.2f}",
        " / ".join(f"{value:.1f}" for value in own[3:]),
        f"{own[3] / base[3]:.2f}",
    ]
    if score.angle_z:
        angle, pose, squared = score.covered()
        cells += [
            " / ".join(f"{value:.0f}" for value in angle),
            f"{pose.min():.0f}–{pose.max():.0f}",
            " / ".join(f"{value:.2f}" for value in squared),
            f"{100 * np.mean(score.flagged):.0f} %",
        ]
    else:
        cells += ["", "", "", ""]
    return "| " + " | ".join(cells) + " |"


def show(label: str, scores: dict[str, Score]) -> None:
    """Print the lines of one setting."""
    for name, score in scores.items():
        print(row(label, name, score, scores["rigid"]), flush=True)


def populations(
    first: int, count: int, mechanisms: Sequence[str], solvers: Sequence[str] = ("frame-map", "smoother")
) -> None:
    """Trials of usual length: every population, and all together."""
    print(HEAD.format("mechanism") + "\n" + RULE)
    for mechanism in mechanisms:
        scores: dict[str, Score] = {}
        for seed in range(first, first + count):
            couriers = make_couriers(seed, mechanism, SUBJECTS, FRESH)
            prior = learn(pairs_of(couriers.learned, couriers.population))
            alone: dict[str, Score] = {}
            solve_all(prior, one_of_each(couriers.fresh), solvers, alone)
            show(f"{mechanism}, {seed}", alone)
            for name, score in alone.items():
                whole = scores.setdefault(name, Score())
                for part in ("angle", "angle_z", "pose", "pose_z", "flagged"):
                    getattr(whole, part).extend(getattr(score, part))
        show(f"{mechanism}, all", scores)


def variants(first: int, count: int, mechanisms: Sequence[str]) -> None:
    """The smoother's options."""
    populations(first, count, mechanisms, list(SOLVERS))


WINDOW = 80
"""Frames of a subject's own window: 0.8 s."""


def with_windows(subject: SimulatedSubject) -> SimulatedSubject:
    """Two windows of bone truth, in the second trials of climbing and of walking."""
    generator = np.random.default_rng(int(subject.id[1:]))
    later = [t for t in subject.trials[len(TASKS) :] if t.activity in (TASKS[0], "level-walk")]
    trials = []
    for trial in later:
        noise = np.repeat([0.001, 0.0005], 3) * generator.standard_normal((trial.time.size, 2, 6))
        imaged = trial.lab_from_bone @ exp(noise)
        start = (trial.time.size - WINDOW) // 2
        imaged[:start] = imaged[start + WINDOW :] = np.nan
        trials.append(replace(trial, imaged_pose=imaged))
    return replace(subject, trials=tuple(trials))


def personal(first: int, count: int, mechanisms: Sequence[str]) -> None:
    """Archived subjects with two windows of 0.8 s of their own."""
    print(HEAD.format("mechanism") + "\n" + RULE)
    for mechanism in mechanisms:
        scores: dict[str, Score] = {}
        for seed in range(first, first + count):
            couriers = make_couriers(seed, mechanism, SUBJECTS, FRESH)
            prior = learn(pairs_of(couriers.learned, couriers.population))

            def own(prior: Prior, subject: SimulatedSubject, couriers: Couriers = couriers) -> list[Artifact]:
                whole = next(item for item in couriers.fresh if item.id == subject.id)
                pairs = pairs_of([with_windows(whole)], couriers.population)
                reference = reference_markers(subject)
                artifacts: list[Artifact] = []
                for name, markers in zip(SEGMENTS, (reference[:SPLIT], reference[SPLIT:]), strict=True):
                    model = prior.segments[name]
                    frames = segment_frames(pairs, name, model.markers, {"knee": KNEE.dof})
                    posture = Posture(subject.style.reference_angles[None], markers)
                    artifacts.append(model.for_subject(posture, Own(subject.id, frames, "")))
                return artifacts

            people = one_of_each(couriers.fresh)
            solve_all(prior, people, ["frame-map", "smoother"], scores, own=own)
        show(f"{mechanism}, two own windows", scores)


def durations(first: int, count: int, mechanisms: Sequence[str]) -> None:
    """Level walking for 1, 3, 12 and 60 s."""
    print(HEAD.format("mechanism, s") + "\n" + RULE)
    for mechanism in mechanisms:
        priors = {}
        for seed in range(first, first + count):
            couriers = make_couriers(seed, mechanism, SUBJECTS, 0)
            priors[seed] = learn(pairs_of(couriers.learned, couriers.population))
        for duration in (1.0, 3.0, 12.0, 60.0):
            scores: dict[str, Score] = {}
            for seed, prior in priors.items():
                people = long_walks(seed, mechanism, duration)[: FRESH if duration < 30 else 4]
                solve_all(prior, people, ["frame-map", "smoother", "smoother, full information"], scores)
            show(f"{mechanism}, {duration:g}", scores)


def with_time(factor: float) -> Callable[[Artifact], Artifact]:
    """The prior with other decay times of its residual."""

    def change(artifact: Artifact) -> Artifact:
        scales = TimeScales.single(factor * artifact.time_constant)
        return cast(Artifact, replace(cast(Any, artifact), time_scales=scales))

    return change


def mismatch(first: int, count: int, mechanisms: Sequence[str]) -> None:
    """Truth that the prior does not expect."""
    print(HEAD.format("mechanism, mismatch") + "\n" + RULE)
    chosen = ["frame-map", "smoother"]
    for mechanism in mechanisms:
        settings: dict[str, dict[str, Score]] = {}
        for seed in range(first, first + count):
            couriers = make_couriers(seed, mechanism, SUBJECTS, FRESH)
            people = one_of_each(couriers.fresh)
            prior = learn(pairs_of(couriers.learned, couriers.population))
            for scale in (0.3, 0.5, 1.0, 1.5, 2.0, 3.0):
                name = f"artifact × {scale:g}" if scale != 1.0 else "none"
                solve_all(prior, people, chosen, settings.setdefault(name, {}), scale=scale)
            for factor in (0.3, 3.0):
                name = f"decay time × {factor:g}"
                solve_all(prior, people, chosen, settings.setdefault(name, {}), with_time(factor))
            walking = only_tasks(couriers.learned, ["level-walk"])
            elsewhere = learn(pairs_of(walking, couriers.population))
            others = [
                replace(s, trials=tuple(t for t in s.trials if t.activity != "level-walk")) for s in people
            ]
            solve_all(elsewhere, others, chosen, settings.setdefault("learned on walking, other tasks", {}))
            strange = make_couriers(seed + 500, mechanism, SUBJECTS, 0)
            foreign = learn(pairs_of(strange.learned, strange.population))
            solve_all(foreign, people, chosen, settings.setdefault("another population", {}))
        for name, scores in settings.items():
            show(f"{mechanism}, {name}", scores)


def main() -> None:
    """Read the arguments and run one study."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("study", choices=["populations", "variants", "personal", "durations", "mismatch"])
    parser.add_argument("--populations", type=int, default=6)
    parser.add_argument("--first-seed", type=int, default=7000)
    parser.add_argument("--mechanisms", nargs="+", default=list(MECHANISMS))
    chosen = parser.parse_args()
    warnings.simplefilter("ignore", StaPriorWarning)
    studies: dict[str, Callable[[int, int, Sequence[str]], None]] = {
        "populations": populations,
        "variants": variants,
        "personal": personal,
        "durations": durations,
        "mismatch": mismatch,
    }
    studies[chosen.study](chosen.first_seed, chosen.populations, chosen.mechanisms)


if __name__ == "__main__":
    main()
