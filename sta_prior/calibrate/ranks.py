"""Where the truth of a drawn trial stands in the smoother's posterior.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.stats import norm

from sta_prior import se3
from sta_prior.calibrate.draw import DrawnTrial, Recipe, draw_trial
from sta_prior.checks import FloatArray
from sta_prior.solve.smoother import smooth
from sta_prior.solve.trajectory_posterior import describe_trajectory

QUANTITIES = (
    *(
        f"{segment} {kind} {axis}"
        for segment in ("thigh", "shank")
        for kind in ("rotation", "position")
        for axis in "xyz"
    ),
    *(f"knee {name}" for name in ("flexion", "adduction", "rotation")),
)
"""Components of Log(T̂⁻¹T) of both segments, along the bone's axes, and the knee's angles."""

LOOKS = (0.1, 0.5, 0.9)
"""Frames that are looked at, as parts of a trial."""


@dataclass(frozen=True)
class Ranked:
    """What one trial gives.

    places: (looks, quantities), Φ((truth − mean)/SD), uniform on 0 … 1 if the posterior is right; frames:
    (looks,); sd: (looks, quantities), rad and m; converged; iterations.
    """

    places: FloatArray
    frames: tuple[int, ...]
    sd: FloatArray
    converged: bool
    iterations: int


def rank_trial(trial: DrawnTrial, constant_time: float) -> Ranked:
    """Solve a drawn trial and place its truth in the posterior.

    Parameters
    ----------
    trial : from `draw_trial`
    constant_time : information about the constants that counts, s; infinite for all
    """
    smoothed = smooth(trial.problem, trial.start, constant_time)
    found = describe_trajectory(smoothed)
    count = trial.poses.shape[0]
    frames = tuple(round(look * (count - 1)) for look in LOOKS)
    at = np.array(frames)
    away = se3.log(se3.inverse(smoothed.state.poses[at]) @ trial.poses[at]).reshape(at.size, -1)
    spread = np.sqrt(np.einsum("fxx->fx", found.covariance[at]))
    error = np.concatenate([away, (trial.angles - found.angles)[at, 0]], axis=1)
    sd = np.concatenate([spread, found.angle_sd[at, 0]], axis=1)
    converged = not smoothed.stop_reason.startswith("not converged")
    return Ranked(norm.cdf(error / sd), frames, sd, converged, smoothed.iterations)


def rank_one(seed: int, number: int, recipe: Recipe, constant_time: float) -> Ranked:
    """Draw and place one trial; its random numbers depend on seed and number alone."""
    return rank_trial(draw_trial(np.random.default_rng([seed, number]), recipe), constant_time)
