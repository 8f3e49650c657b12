"""The exact Gaussian process: its algebra against the dense law, published values and the reduced rank."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.random import Generator
from scipy.stats import chi2
from sklearn.gaussian_process.kernels import RBF

from sta_prior.checks import FloatArray
from sta_prior.prior.artifact import FeatureArtifact
from sta_prior.prior.basis import Basis, Wave
from sta_prior.prior.exact_core import AngleKernel, joint_gaussian, with_outputs
from sta_prior.prior.exact_model import ExactFit
from sta_prior.prior.hierarchy import (
    TrialStatistics,
    Weights,
    condition_on,
    make_block,
    through,
    total_message,
    trial_message,
)
from sta_prior.prior.interface import Artifact
from sta_prior.prior.statistics import SegmentFrames

KNEE = 1
RATE = 50.0


def covariance(generator: Generator, size: int) -> FloatArray:
    root = generator.standard_normal((size, 2 * size))
    return np.asarray(root @ root.T / (2 * size))


def made_fit(seed: int = 0, joints: int = 2, trials: int = 5, frames: int = 4, outputs: int = 6) -> ExactFit:
    """Two subjects (the first with all trials but two), random frames; in mm-like units of 1."""
    generator = np.random.default_rng(seed)
    count = trials * frames
    owner = np.repeat([0] * (trials - 2) + [1, 1], frames)
    references = np.repeat(generator.uniform(0.0, 0.2, (trials, joints)), frames, axis=0)
    angles = generator.uniform(0.1, 1.3, (count, joints))
    both = np.concatenate([angles, references])
    reach = np.stack([both.min(axis=0), both.max(axis=0)], axis=-1)
    return ExactFit(
        adjacent=np.arange(1, 1 + joints),
        scale=np.full(joints, 0.6),
        lengths=np.linspace(0.6, 0.8, joints),
        wave=1.3,
        trend=0.7,
        levels=np.array([0.5, 0.35, 0.15, 0.04]),
        outputs=covariance(generator, outputs),
        residual=0.2 * covariance(generator, outputs),
        observed_residual=0.3 * covariance(generator, outputs),
        bone=0.01 * np.eye(outputs),
        angles=angles,
        references=references,
        displacement=generator.standard_normal((count, outputs)),
        noise=generator.uniform(0.7, 1.5, count),
        subject=owner,
        trial=np.repeat(np.arange(trials), frames),
        subject_names=("A", "B"),
        trial_names=tuple(f"t{index}" for index in range(trials)),
        trial_subject=owner[::frames],
        reach=reach,
        inducing=generator.uniform(reach[:, 0], reach[:, 1], (30, joints)),
        magnitude=4.0 * np.eye(outputs),
        time_constants=np.array([0.05]),
        time_shares=np.array([1.0]),
        spacing=0.15,
        log_likelihood=0.0,
        iterations=0,
        stop_reason="made up",
    )


REFERENCE = np.array([[0.3, 0.0, 0.1], [0.12, 0.0, 0.0], [0.15, 0.1, 0.0]])


def inside(fit: ExactFit, seed: int = 1, frames: int = 7) -> FloatArray:
    """Angles within the reach of the fit, three joints."""
    generator = np.random.default_rng(seed)
    angles = generator.uniform(-0.2, 0.2, (frames, 3, 3))
    low, high = fit.reach[:, 0] + 0.01, fit.reach[:, 1] - 0.01
    angles[:, fit.adjacent, 0] = generator.uniform(low, high, (frames, fit.adjacent.size))
    return angles


def dense(fit: ExactFit, angles: FloatArray, subject: int, trial: int) -> tuple[FloatArray, FloatArray]:
    """Mean (F·n,) and covariance (F·n, F·n) of the artifact without residual, from the full N·n matrix."""
    p, s, t, o = fit.levels
    x = angles[:, fit.adjacent, 0]
    x0 = np.tile(REFERENCE[fit.adjacent, 0], (x.shape[0], 1))

    def k(a: FloatArray, b: FloatArray) -> FloatArray:
        apart = (a[:, None] - b) / fit.lengths
        wave = fit.wave * np.exp(-0.5 * (apart**2).sum(axis=-1))
        return np.asarray(wave + fit.trend * (a / fit.scale) @ (b / fit.scale).T)

    def k0(a: FloatArray, a0: FloatArray, b: FloatArray, b0: FloatArray) -> FloatArray:
        return k(a, b) - k(a, b0) - k(a0, b) + k(a0, b0)

    same_subject = fit.subject[:, None] == fit.subject
    same_trial = fit.trial[:, None] == fit.trial
    gram = k0(fit.angles, fit.references, fit.angles, fit.references)
    gram = gram * (p + s * same_subject + t * same_trial) + o * same_trial
    cross = k0(x, x0, fit.angles, fit.references)
    cross = cross * (p + s * (fit.subject == subject) + t * (fit.trial == trial)) + o * (fit.trial == trial)
    own = (p + s + t) * k0(x, x0, x, x0) + o
    total = np.kron(gram, fit.outputs) + np.kron(np.diag(fit.noise), fit.observed_residual)
    between = np.kron(cross, fit.outputs)
    solved = np.linalg.solve(total, np.column_stack([fit.displacement.reshape(-1), between.T]))
    return between @ solved[:, 0], np.kron(own, fit.outputs) - between @ solved[:, 1:]


def own_blocks(matrix: FloatArray, frames: int) -> FloatArray:
    size = matrix.shape[0] // frames
    return np.stack([matrix[size * f : size * (f + 1), size * f : size * (f + 1)] for f in range(frames)])


def test_two_points_by_hand() -> None:
    # LITERATURE §5, row 18: closed forms recomputed from Rasmussen & Williams (2006), ch. 2 (from memory).
    kernel = RBF(1.0)
    x, at = np.array([[0.0], [1.0]]), np.array([[0.5]])
    one = np.eye(1)
    gaussian = joint_gaussian(kernel(x), np.ones(2), one, 0.1 * one, np.array([[1.0], [2.0]]))
    assert gaussian.mean(kernel(at, x))[0, 0] == pytest.approx(1.5513877191, abs=1e-9)
    variance = gaussian.variances(kernel(at, x), np.ones(1))[0, 0, 0]
    assert variance == pytest.approx(0.0872700955, abs=1e-9)
    assert gaussian.log_likelihood() == pytest.approx(-3.5770425528, abs=1e-9)


def test_the_split_density_is_that_of_the_dense_law_and_so_is_its_slope() -> None:
    generator = np.random.default_rng(4)
    gram, outputs, residual = (covariance(generator, size) for size in (5, 3, 3))
    noise, shown = generator.uniform(0.5, 2.0, 5), generator.standard_normal((5, 3))

    def density(gram: FloatArray) -> float:
        total = np.kron(gram, outputs) + np.kron(np.diag(noise), residual)
        quadratic = shown.reshape(-1) @ np.linalg.solve(total, shown.reshape(-1))
        return float(-0.5 * (quadratic + np.linalg.slogdet(2.0 * np.pi * total)[1]))

    gaussian = joint_gaussian(gram, noise, outputs, residual, shown)
    assert gaussian.log_likelihood() == pytest.approx(density(gram), rel=1e-12)
    change = covariance(generator, 5)
    step = 1e-6
    slope = (density(gram + step * change) - density(gram - step * change)) / (2 * step)
    assert np.vdot(gaussian.gram_slope(), change) == pytest.approx(slope, rel=1e-6)
    other = with_outputs(joint_gaussian(gram, noise, np.eye(3), np.eye(3), shown), outputs, residual)
    assert other.log_likelihood() == pytest.approx(density(gram), rel=1e-12)


@pytest.mark.parametrize(
    ("subject", "trial", "index"), [("C", "", (-1, -1)), ("A", "", (0, -1)), ("B", "t4", (1, 4))]
)
def test_moments_are_those_of_the_dense_joint_law(subject: str, trial: str, index: tuple[int, int]) -> None:
    fit = made_fit()
    angles = inside(fit)
    artifact = fit.artifact(REFERENCE, subject=subject, trial=trial)
    moments = artifact.moments(angles)
    mean, spread = dense(fit, angles, *index)
    np.testing.assert_allclose(moments.mean.reshape(-1), mean, atol=1e-10)
    blocks = own_blocks(spread, angles.shape[0]) + fit.residual
    np.testing.assert_allclose(moments.covariance, blocks, atol=1e-10)


def test_trial_constant_unknowns_carry_the_covariance_between_frames() -> None:
    fit = made_fit(joints=1)
    angles = inside(fit)
    artifact = fit.artifact(REFERENCE, subject="B", trial="t3")
    features = artifact.moments(angles).features
    count = features.shape[1]
    spread = artifact.constant_covariance.reshape(count, 6, count, 6)
    built = np.einsum("fk,kalb,gl->fagb", features, spread, features).reshape(42, 42)
    _, expected = dense(fit, angles, 1, 3)
    np.testing.assert_allclose(built, expected, atol=1e-5)
    assert np.linalg.eigvalsh(artifact.constant_covariance).min() > -1e-9


def test_the_derivative_of_the_mean_agrees_with_differences() -> None:
    fit = made_fit()
    angles = inside(fit)
    artifact = fit.artifact(REFERENCE, subject="A", trial="t1")
    step = np.cbrt(np.finfo(float).eps)
    for joint in range(3):
        for dof in range(3):
            change = np.zeros((3, 3))
            change[joint, dof] = step
            ahead, behind = (artifact.moments(angles + sign * change).mean for sign in (1, -1))
            slope = artifact.moments(angles).mean_derivative[:, :, joint, dof]
            np.testing.assert_allclose(slope, (ahead - behind) / (2 * step), rtol=1e-6, atol=1e-8)


def test_nothing_but_offset_and_residual_is_left_at_the_reference() -> None:
    fit = made_fit()
    moments = fit.artifact(REFERENCE).moments(REFERENCE[None])
    np.testing.assert_allclose(moments.mean, 0.0, atol=1e-12)
    np.testing.assert_allclose(moments.covariance[0], fit.levels[3] * fit.outputs + fit.residual, atol=1e-12)
    np.testing.assert_allclose(moments.features[0, 1:], 0.0, atol=1e-12)


def test_beyond_the_data_the_mean_is_held_and_the_spread_grows_to_the_magnitude() -> None:
    fit = made_fit(joints=1)
    angles = np.tile(REFERENCE, (6, 1, 1))
    edge = fit.reach[0, 1]
    angles[:, KNEE, 0] = edge + np.array([0.0, 0.1, 0.3, 0.6, 1.0, 5.0])
    moments = fit.artifact(REFERENCE).moments(angles)
    assert np.all(np.diff(np.einsum("faa->f", moments.covariance)) > 0)
    np.testing.assert_allclose(moments.covariance[-1] - moments.covariance[0], fit.magnitude, atol=1e-12)
    np.testing.assert_allclose(moments.mean, np.broadcast_to(moments.mean[0], (6, 6)))
    assert not moments.mean_derivative[1:].any()


def test_a_subject_of_its_own_frames_is_the_same_as_one_learned_from() -> None:
    """Own frames given later: the same posterior as if they had been there from the start."""
    whole = made_fit(joints=1)
    mine = whole.trial == 4
    part = replace(
        whole,
        **{
            name: getattr(whole, name)[~mine]
            for name in ("angles", "references", "displacement", "noise", "subject", "trial")
        },
        trial_names=whole.trial_names[:4],
        trial_subject=whole.trial_subject[:4],
        spacing=0.01,
        bone=0.0 * whole.bone,
    )
    angles = np.zeros((4, 3, 3))
    angles[:, KNEE, 0] = whole.angles[mine, 0]
    reference = np.zeros((3, 3))
    reference[KNEE, 0] = whole.references[mine][0, 0]
    # The frame's noise factor comes from its bone-truth noise.
    bone = (whole.noise[mine] - 1.0)[:, None, None] * whole.observed_residual
    own = SegmentFrames("B", "t4", angles, reference, whole.displacement[mine], bone, np.arange(4) / RATE)
    asked = inside(whole)
    later = part.artifact(REFERENCE, [own], "B", "t4").moments(asked)
    before = whole.artifact(REFERENCE, subject="B", trial="t4").moments(asked)
    np.testing.assert_allclose(later.mean, before.mean, atol=1e-9)
    np.testing.assert_allclose(later.covariance, before.covariance, atol=1e-9)
    stranger = part.artifact(REFERENCE, [own], "C").moments(asked)
    assert np.trace(stranger.covariance.sum(axis=0)) > np.trace(later.covariance.sum(axis=0))


def test_inflation_widens_what_is_constant_in_a_trial_and_nothing_else() -> None:
    fit = made_fit()
    asked = inside(fit)
    plain, wide = (fit.artifact(REFERENCE, inflation=factor).moments(asked) for factor in (1.0, 2.5))
    np.testing.assert_allclose(wide.mean, plain.mean)
    np.testing.assert_allclose(
        wide.covariance - fit.residual, 2.5 * (plain.covariance - fit.residual), atol=1e-12
    )
    own, wider = (fit.artifact(REFERENCE, (), "A", "", factor).moments(asked) for factor in (1.0, 2.5))
    assert np.einsum("faa->", wider.covariance) > np.einsum("faa->", own.covariance)


def reduced_rank(fit: ExactFit, functions: int, limit: float) -> Artifact:
    """The same prior and frames by Hilbert-space weights and messages, for a subject never imaged."""
    centre = float(fit.reach.mean())
    wave = Wave(KNEE, 0, centre, limit, float(fit.lengths[0]), functions)
    basis = Basis((), np.zeros((0, 0)), (wave,))
    p, s, t, o = fit.levels
    n = fit.outputs.shape[0]

    def spread(share: float, offset: float) -> FloatArray:
        return np.asarray(np.kron(np.diag([offset, *np.full(functions, share)]), fit.outputs))

    by_subject = {}
    for index in np.unique(fit.trial):
        here = fit.trial == index
        angles, reference = np.zeros((int(here.sum()), 3, 3)), np.zeros((3, 3))
        angles[:, KNEE, 0], reference[KNEE, 0] = fit.angles[here, 0], fit.references[here][0, 0]
        features = basis.values(angles, reference)
        nothing = np.zeros((angles.shape[0], n, n))
        block = make_block(
            features, fit.displacement[here], nothing, 1.0 / fit.noise[here], np.ones(n, dtype=bool)
        )
        trial = TrialStatistics("", "", (block,))
        own = through(trial_message(trial, fit.observed_residual), spread(t, o))
        by_subject.setdefault(int(fit.subject[here][0]), []).append(own)
    size = (1 + functions) * n
    messages = [through(total_message(own, size), spread(s, 0.0)) for own in by_subject.values()]
    belief = condition_on(
        Weights(np.zeros((1 + functions, n)), spread(p, 0.0)), total_message(messages, size)
    )
    weights = Weights(belief.mean, belief.covariance + spread(s, 0.0) + spread(t, o))
    return FeatureArtifact(basis, weights, fit.residual, 0.05, REFERENCE, fit.magnitude)


def test_reduced_rank_meets_the_exact_process_in_the_limit() -> None:
    # LITERATURE §7, row 22: Solin & Särkkä (2020), with the boundary far from the data and many functions.
    fit = replace(made_fit(joints=1), wave=1.0, trend=0.0)
    asked = inside(fit)
    exact = fit.artifact(REFERENCE).moments(asked)
    errors = []
    for functions in (4, 8, 32):
        near = reduced_rank(fit, functions, 3.0).moments(asked)
        errors.append(
            max(
                float(np.abs(near.mean - exact.mean).max()),
                float(np.abs(near.covariance - exact.covariance).max()),
                float(np.abs(near.mean_derivative - exact.mean_derivative).max()),
            )
        )
    assert errors[0] > 1e-3
    assert errors[2] < 1e-6


def test_a_known_law_covers_subjects_that_were_not_seen() -> None:
    """Frames, subjects and trials drawn from the law itself, conditioned with the law's own parameters."""
    generator = np.random.default_rng(12)
    base = made_fit(joints=1, outputs=3)
    asked = np.tile(REFERENCE, (1, 1, 1))
    asked[0, KNEE, 0] = 0.8
    at, at0 = asked[0, [KNEE], 0][None], REFERENCE[[KNEE], 0][None]
    p, s, t, o = base.levels
    same = base.trial[:, None] == base.trial
    share = p + s * (base.subject[:, None] == base.subject) + t * same
    k = AngleKernel(base.scale, base.lengths, base.wave, base.trend)
    own = k.gram(base.angles, base.references, base.angles, base.references) * share + o * same
    cross = p * k.gram(at, at0, base.angles, base.references)
    joint = np.block([[own, cross.T], [cross, (p + s + t) * k.variance(at, at0)[:, None] + o]])
    root = np.linalg.cholesky(joint + 1e-12 * np.eye(joint.shape[0]))
    markers, noise = (np.linalg.cholesky(m) for m in (base.outputs, base.observed_residual))
    total, draws = 0.0, 100
    for _ in range(draws):
        artifact = root @ generator.standard_normal((joint.shape[0], 3)) @ markers.T
        error = np.sqrt(base.noise)[:, None] * (generator.standard_normal((20, 3)) @ noise.T)
        fit = replace(base, displacement=artifact[:-1] + error, residual=base.observed_residual)
        moments = fit.artifact(REFERENCE).moments(asked)
        rest = artifact[-1] + generator.standard_normal(3) @ noise.T - moments.mean[0]
        total += float(rest @ np.linalg.solve(moments.covariance[0], rest))
    assert chi2.ppf(0.0005, 3 * draws) < total < chi2.ppf(0.9995, 3 * draws)
