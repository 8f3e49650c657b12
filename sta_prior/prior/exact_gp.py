"""The ``exact-gp`` family: an exact Gaussian process over flexion, for small sets.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The algebra: prior/exact_core.py.

Frames at flexion x of subjects and trials, with k the covariance of f(x) − f(x0), x0 the reference:

    cov(d_i, d_j) = (k_ij (p + s·[same subject] + t·[same trial]) + o·[same trial]) M + [i = j] w_i Σ

p + s + t = 1; M and Σ are full covariances over the segment's outputs; o is what a trial adds to the
reference; w_i carries the bone-truth noise of the frame. A subject never imaged shares only p with the
frames. Frames are thinned to nearly independent ones, three (slowest) decay times of the residual apart.

References
----------
Solin & Särkkä (2020), Stat Comput, doi 10.1007/s11222-019-09886-w (what this family is the limit of).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy.optimize import minimize

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, NotDeterminedError, message
from sta_prior.gaussian import subtract_psd, symmetrise
from sta_prior.prior.basis import SMALLEST_POWER, orthonormal
from sta_prior.prior.exact_core import (
    AngleKernel,
    JointGaussian,
    inducing_angles,
    joint_gaussian,
    sklearn_kernel,
    with_outputs,
)
from sta_prior.prior.exact_model import ExactFit, Observed, noise_factor, observe
from sta_prior.prior.fitting import INSTRUMENT_SD
from sta_prior.prior.hierarchy import unison_covariance
from sta_prior.prior.lag_products import learn_time_scales
from sta_prior.prior.linear import linear_basis
from sta_prior.prior.statistics import SegmentFrames
from sta_prior.prior.time_scales import TimeScales

USE_ANOTHER = "Use reduced-rank-gp, which sums frames instead of keeping them."
LEVEL_NAMES = ("subject share", "trial share", "offset of a trial")


@dataclass(frozen=True)
class ExactSettings:
    """Limits and weak priors of the fit.

    most_frames: thinned frames that an exact process takes; spacing: of thinned frames, in decay times of
    the residual; length_range: bounds of a length scale as multiples of half the range of the angle;
    pseudo_share: weight of the prior on M and Σ, in directions or frames for each output; levels: typical
    variance between subjects, between trials and of a trial's offset against the population's.
    """

    most_frames: int = 600
    spacing: float = 3.0
    length_range: tuple[float, float] = (0.1, 10.0)
    pseudo_share: float = 0.5
    levels: tuple[float, float, float] = (1.0, 0.2, 0.05)
    maximum_iterations: int = 12
    tolerance: float = 1e-4


@dataclass(frozen=True)
class _Problem:
    """Everything about a fit that does not change: frames, and weak priors M0, Σ0 of weight pseudo."""

    seen: Observed
    scale: FloatArray
    outputs: FloatArray
    residual: FloatArray
    pseudo: float

    def parts(self, theta: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Kernel between frames and its derivatives by log wave and log lengths, (N, N), (N, N, 1 + D)."""
        depth = self.scale.size
        kernel = sklearn_kernel(float(np.exp(theta[0])), np.exp(theta[1 : 1 + depth]), 1.0)
        count = self.seen.subject.size
        both = np.concatenate([self.seen.angles, self.seen.references]) / self.scale
        value, slope = kernel(both, eval_gradient=True)

        def difference(block: FloatArray) -> FloatArray:
            here, there = block[:count], block[count:]
            result: FloatArray = here[:, :count] - here[:, count:] - there[:, :count] + there[:, count:]
            return result

        return difference(value), difference(slope)

    def gram(self, theta: FloatArray) -> tuple[FloatArray, list[FloatArray]]:
        """K and its derivatives by every log parameter."""
        value, slope = self.parts(theta)
        seen = self.seen
        same_subject = (seen.subject[:, None] == seen.subject).astype(float)
        same_trial = (seen.trial[:, None] == seen.trial).astype(float)
        p, s, t, o = levels_of(theta)
        share = p + s * same_subject + t * same_trial
        gram = value * share + o * same_trial
        slopes = [share * slope[..., index] for index in range(slope.shape[-1])]
        slopes += [s * (value * same_subject - gram), t * (value * same_trial - gram)]
        slopes += [o * same_trial]
        return gram, slopes


def levels_of(theta: FloatArray) -> FloatArray:
    """Shares p, s, t of sum 1 and the offset o, from the last three log parameters."""
    s, t, o = np.exp(theta[-3:])
    return np.asarray(np.array([1.0, s, t, o]) / (1.0 + s + t))


@dataclass(frozen=True)
class _Search:
    """Weak log-normal prior and bounds of the log parameters, shape (3 + 1 + D,) each."""

    centre: FloatArray
    width: FloatArray
    low: FloatArray
    high: FloatArray


def _search(half_range: FloatArray, scale: FloatArray, settings: ExactSettings) -> _Search:
    lengths = np.log(half_range / scale)
    levels = np.log(settings.levels)
    low, high = np.log(settings.length_range)
    wide = np.log(1e3)
    return _Search(
        centre=np.concatenate([[0.0], lengths, levels]),
        width=np.concatenate([[1.0], np.full(lengths.size, 0.7), [1.0, 1.0, 1.5]]),
        low=np.concatenate([[-wide], lengths + low, levels - wide]),
        high=np.concatenate([[wide], lengths + high, levels + wide]),
    )


def _scored(gaussian: JointGaussian, problem: _Problem) -> tuple[FloatArray, FloatArray]:
    """One Fisher-scoring step for M and Σ, shortened where it would leave the positive definite ones."""
    eigenvalues, y = gaussian.eigenvalues, gaussian.scores
    spread = np.maximum(gaussian.spread, 1e-6 * gaussian.spread[-1])
    inverse = 1.0 / (1.0 + np.outer(eigenvalues, spread))
    to = np.linalg.solve(gaussian.back, np.eye(spread.size))
    strength = problem.pseudo / np.outer(spread, spread)
    e = eigenvalues[:, None]
    ee, ei, ii = ((inverse * e**power).T @ inverse for power in (2, 1, 0))
    ee, ii = ee + strength, ii + problem.pseudo
    moment_m = (y * inverse * e).T @ (y * inverse) + strength * (to.T @ problem.outputs @ to)
    moment_s = (y * inverse).T @ (y * inverse) + problem.pseudo * (to.T @ problem.residual @ to)
    determinant = ee * ii - ei**2
    wanted = (
        (ii * moment_m - ei * moment_s) / determinant,
        (ee * moment_s - ei * moment_m) / determinant,
    )
    steps = []
    for matrix, old in zip(wanted, (spread, np.ones(spread.size)), strict=True):
        root = np.sqrt(old)
        lowest = float(np.linalg.eigvalsh(symmetrise(matrix) / np.outer(root, root))[0])
        part = 1.0 if lowest > 0.1 else 0.9 / (1.0 - lowest)
        full = np.diag(old) + part * (symmetrise(matrix) - np.diag(old))
        steps.append(symmetrise(gaussian.back.T @ full @ gaussian.back))
    return steps[0], steps[1]


@dataclass(frozen=True)
class _State:
    """Log parameters, M, Σ with bone-truth noise (m²), and the noise factor w of every frame."""

    theta: FloatArray
    outputs: FloatArray
    residual: FloatArray
    noise: FloatArray


def fit_exact(
    frames: Sequence[SegmentFrames],
    adjacent: tuple[int, ...],
    magnitude: FloatArray | None = None,
    start: ExactFit | None = None,
    settings: ExactSettings | None = None,
) -> ExactFit:
    """Fit an exact Gaussian process to the paired frames of one segment.

    Parameters
    ----------
    frames : paired frames by trial, right side; frames that hide a marker are left out
    adjacent : positions of the joints whose flexion drives the artifact
    magnitude : shape (n, n), m², what the covariance gains far beyond the data; mean square displacement
        with equal signs in unison by default
    start : an earlier fit whose covariance over angles, levels and decay times are kept: only M and Σ are
        learned from these frames
    settings : see ExactSettings

    Returns
    -------
    ExactFit

    Raises
    ------
    InputError : no joint, too many frames, or a subject without a frame that shows all markers.
    NotDeterminedError : a length scale, share or offset ended on its bound.

    Notes
    -----
    The marginal likelihood of all outputs together, with weak log-normal priors on the parameters over
    angles and weak Wishart-like priors on M and Σ, is climbed in turn by L-BFGS and by Fisher scoring.
    With one subject the spread between subjects is the weak prior's, not learned.
    """
    settings = settings or ExactSettings()
    if not adjacent:
        raise InputError(
            message("exact-gp", "no joint touches the segment, so no angle can drive it", "Add a joint.")
        )
    joints = np.array(adjacent, dtype=np.int64)
    scales = start.time_scales if start is not None else _time_scales(frames, adjacent)
    subjects = tuple(sorted({item.subject for item in frames}))
    keys = tuple(sorted({(item.subject, item.trial) for item in frames}))
    spacing = settings.spacing * scales.slowest
    seen = observe(frames, joints, spacing, subjects, keys)
    _refuse(seen, subjects, settings)
    reach = _reach(seen)
    half_range = np.maximum(0.5 * (reach[:, 1] - reach[:, 0]), SMALLEST_POWER)
    problem, state = _prepare(seen, settings)
    if start is not None:
        problem = replace(problem, scale=start.scale)
        theta = _theta_of(start)
        state = _State(theta, start.outputs, start.observed_residual, state.noise)
    else:
        search = _search(half_range, problem.scale, settings)
        state = replace(state, theta=search.centre)
    before, iterations = -np.inf, 0
    stop_reason = f"not converged in {settings.maximum_iterations} iterations"
    while iterations < settings.maximum_iterations:
        iterations += 1
        state, likelihood = _covariances(problem, state, settings)
        if start is None:
            state = replace(state, theta=_climb(problem, state, search))
        if abs(likelihood - before) < settings.tolerance * seen.displacement.size:
            stop_reason = f"log likelihood changed by less than {settings.tolerance:g} a value"
            break
        before = likelihood
    if start is None:
        _refuse_bounds(state.theta, search, problem.scale)
    bone = seen.bone.mean(axis=0)
    kernel = _kernel_of(state.theta, problem.scale)
    n = seen.displacement.shape[1]
    mean_square = float((seen.displacement**2).mean())
    return ExactFit(
        adjacent=joints,
        scale=kernel.scale,
        lengths=kernel.lengths,
        wave=kernel.wave,
        trend=kernel.trend,
        levels=levels_of(state.theta),
        outputs=state.outputs,
        residual=subtract_psd(state.residual, bone, INSTRUMENT_SD**2),
        observed_residual=state.residual,
        bone=bone,
        angles=seen.angles,
        references=seen.references,
        displacement=seen.displacement,
        noise=state.noise,
        subject=seen.subject,
        trial=seen.trial,
        subject_names=subjects,
        trial_names=tuple(name for _, name in keys),
        trial_subject=np.array([subjects.index(subject) for subject, _ in keys], dtype=np.int64),
        reach=reach,
        inducing=inducing_angles(kernel, seen.angles, seen.references.mean(axis=0), reach),
        magnitude=mean_square * unison_covariance(n) if magnitude is None else magnitude,
        time_constants=scales.constants,
        time_shares=scales.shares,
        spacing=spacing,
        log_likelihood=likelihood,
        iterations=iterations,
        stop_reason=stop_reason,
    )


def _time_scales(frames: Sequence[SegmentFrames], adjacent: tuple[int, ...]) -> TimeScales:
    angles = [item.angles for item in frames]
    references = [item.reference_angles for item in frames]
    return learn_time_scales(frames, orthonormal(linear_basis(adjacent), angles, references))


def _refuse(seen: Observed, subjects: tuple[str, ...], settings: ExactSettings) -> None:
    for index, name in enumerate(subjects):
        if not (seen.subject == index).any():
            raise InputError(
                message(("exact-gp", name), "no frame shows all markers of the segment", USE_ANOTHER)
            )
    if seen.subject.size > settings.most_frames:
        raise InputError(
            message(
                "exact-gp",
                f"expected at most {settings.most_frames} frames after thinning, got {seen.subject.size}",
                USE_ANOTHER,
            )
        )


def _reach(seen: Observed) -> FloatArray:
    both = np.concatenate([seen.angles, seen.references])
    return np.stack([both.min(axis=0), both.max(axis=0)], axis=-1)


def _prepare(seen: Observed, settings: ExactSettings) -> tuple[_Problem, _State]:
    """Weak priors sized by the data, and where to start."""
    n = seen.displacement.shape[1]
    # Bounded below by a millimetre, so that data without artifact still gives a proper prior.
    size = max(float((seen.displacement**2).mean()), 0.001**2)
    scale = np.maximum(np.sqrt(((seen.angles - seen.references) ** 2).mean(axis=0)), SMALLEST_POWER)
    problem = _Problem(
        seen=seen,
        scale=scale,
        # Trend and wave of D joints have a mean square of about 1 + D.
        outputs=0.9 * size / (1 + scale.size) * unison_covariance(n),
        residual=0.1 * size * unison_covariance(n, 0.5),
        pseudo=settings.pseudo_share * n,
    )
    state = _State(np.zeros(0), problem.outputs, problem.residual, np.ones(seen.subject.size))
    return problem, state


def _covariances(problem: _Problem, state: _State, settings: ExactSettings) -> tuple[_State, float]:
    """M, Σ and the noise factors for given parameters over angles, and the log likelihood."""
    gram, _ = problem.gram(state.theta)
    seen = problem.seen
    noise = noise_factor(state.residual, seen.bone.mean(axis=0), seen.bone)
    gaussian = joint_gaussian(gram, noise, state.outputs, state.residual, seen.displacement)
    for _ in range(20):
        outputs, residual = _scored(gaussian, problem)
        change = max(
            float(np.abs(np.diag(new) / np.diag(old) - 1.0).max())
            for new, old in ((outputs, state.outputs), (residual, state.residual))
        )
        state = replace(state, outputs=outputs, residual=residual)
        gaussian = with_outputs(gaussian, outputs, residual)
        if change < 10.0 * settings.tolerance:
            break
    return replace(state, noise=noise), gaussian.log_likelihood()


def _climb(problem: _Problem, state: _State, search: _Search) -> FloatArray:
    """Log parameters of the highest penalised marginal likelihood for given M and Σ."""

    def cost(theta: FloatArray) -> tuple[float, FloatArray]:
        gram, slopes = problem.gram(theta)
        gaussian = joint_gaussian(gram, state.noise, state.outputs, state.residual, problem.seen.displacement)
        slope = gaussian.gram_slope()
        away = (theta - search.centre) / search.width
        gradient = np.array([float(np.vdot(slope, item)) for item in slopes])
        return 0.5 * float(away @ away) - gaussian.log_likelihood(), away / search.width - gradient

    bounds = list(zip(search.low, search.high, strict=True))
    found = minimize(cost, state.theta, jac=True, method="L-BFGS-B", bounds=bounds, options={"maxiter": 8})
    return np.asarray(found.x, dtype=np.float64)


def _refuse_bounds(theta: FloatArray, search: _Search, scale: FloatArray) -> None:
    """Refuse a parameter that ended on its bound: the data do not determine it."""
    names = ["size of the deviation", *(f"length scale {d + 1} in rad" for d in range(scale.size))]
    units = np.concatenate([[1.0], scale, np.ones(3)])
    for index, name in enumerate([*names, *LEVEL_NAMES]):
        edge = 1e-6 * (search.high[index] - search.low[index])
        if not search.low[index] + edge < theta[index] < search.high[index] - edge:
            low, high, got = units[index] * np.exp([search.low[index], search.high[index], theta[index]])
            raise NotDeterminedError(
                message(
                    ("exact-gp", name),
                    f"expected inside its bounds {low:.3g} to {high:.3g}, got {got:.3g}",
                    "Pair frames of a wider range of flexion, or use reduced-rank-gp.",
                )
            )


def _kernel_of(theta: FloatArray, scale: FloatArray) -> AngleKernel:
    return AngleKernel(scale, scale * np.exp(theta[1 : 1 + scale.size]), float(np.exp(theta[0])), 1.0)


def _theta_of(fit: ExactFit) -> FloatArray:
    p, s, t, o = fit.levels
    shares = np.array([s / p, t / p, o / p])
    return np.asarray(np.log(np.concatenate([[fit.wave], fit.lengths / fit.scale, shares])))
