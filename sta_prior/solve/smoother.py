"""Maximum a posteriori trajectories with posterior covariance (prototype driver)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sta_prior.checks import FloatArray
from sta_prior.solve.constants import reduce_constants
from sta_prior.solve.motion import first_rates, make_motion
from sta_prior.solve.terms import JointProblem, SegmentProblem, angles_and_jacobians, drive
from sta_prior.solve.trajectory import (
    Blocks, Trajectory, TrajectoryProblem, assemble_trajectory, moved, place_hidden,
)
from sta_prior.prior.interface import design_of

CONSTANT_TIME = 1.0


@dataclass
class Factor:
    lower: FloatArray
    link: FloatArray
    arrow: FloatArray  # A^-1 B
    schur: FloatArray
    inverse_schur: FloatArray


def factor(blocks: Blocks, kappa: float):
    T, p, _ = blocks.diagonal.shape
    c = blocks.arrow.shape[2]
    L = np.zeros((T, p, p)); M = np.zeros((T, p, p))
    rhs = np.concatenate([blocks.arrow, blocks.gradient[..., None]], axis=2)
    Y = np.zeros((T, p, c + 1))
    for t in range(T):
        d = blocks.diagonal[t]
        r = rhs[t]
        if t:
            M[t] = np.linalg.solve(L[t - 1], blocks.below[t - 1].T).T
            d = d - M[t] @ M[t].T
            r = r - M[t] @ Y[t - 1]
        L[t] = np.linalg.cholesky(d)
        Y[t] = np.linalg.solve(L[t], r)
    X = np.zeros_like(Y)
    for t in range(T - 1, -1, -1):
        r = Y[t]
        if t < T - 1:
            r = r - M[t + 1].T @ X[t + 1]
        X[t] = np.linalg.solve(L[t].T, r)
    arrow, shift = X[..., :c], X[..., c]
    data = blocks.corner - np.einsum("fpa,fpb->ab", blocks.arrow, arrow, optimize=True)
    reduced = blocks.corner_gradient - np.einsum("fpa,fp->a", blocks.arrow, shift)
    return L, M, arrow, shift, 0.5 * (data + data.T), reduced


def marginals(L, M, k):
    T, p, _ = L.shape
    out = np.zeros((T, k, k))
    S = None
    eye = np.eye(p)
    for t in range(T - 1, -1, -1):
        Li = np.linalg.solve(L[t], eye)
        P = Li.T @ Li
        if t < T - 1:
            G = Li.T @ M[t + 1].T
            P = P + G @ S @ G.T
        S = P
        out[t] = P[:k, :k]
    return out


def smooth(segments: list[SegmentProblem], joints: list[JointProblem], start: FloatArray, step: float,
           marker_sd: float = 0.0005, constant_time: float = CONSTANT_TIME, order: int = 2, density_factor: float = 1.0,
           maximum: int = 30, verbose: bool = False):
    from dataclasses import replace
    angles, jac = angles_and_jacobians(joints, start)
    modes = []
    for segment in segments:
        inputs, _ = drive(segment, start, angles, jac)
        design = design_of(segment.artifact, inputs)
        modes.append(reduce_constants(segment.artifact.constant_covariance, design.features, segment.reference.size))
    motions = [make_motion(start[:, s.index], step, order) for s in segments]
    motions = [replace(m, density=m.density * density_factor) for m in motions]
    problem = TrajectoryProblem(segments, joints, motions, modes, step, marker_sd)
    hidden = place_hidden(problem)
    rates = np.stack([first_rates(start[:, s.index], step, order) for s in segments], axis=1)
    state = Trajectory(start.copy(), rates, np.zeros((problem.frames, hidden.count)), np.zeros(problem.constants))
    kappa = max(1.0, problem.frames * step / constant_time)
    blocks = assemble_trajectory(problem, state, hidden)
    merit = blocks.cost + 0.5 * kappa * float(state.constants @ state.constants)
    c = problem.constants
    for it in range(maximum):
        L, M, arrow, shift, data, reduced = factor(blocks, kappa)
        du = -np.linalg.solve(kappa * np.eye(c) + data, kappa * state.constants + reduced)
        dx = -(shift + arrow @ du)
        size = np.abs(dx[:, : 6 * len(segments)]).max()
        scale = 1.0
        while True:
            trial = moved(problem, state, scale * dx, scale * du)
            new = assemble_trajectory(problem, trial, hidden)
            value = new.cost + 0.5 * kappa * float(trial.constants @ trial.constants)
            if value <= merit + 1e-9 * abs(merit) or scale < 1e-3:
                break
            scale *= 0.5
        if verbose:
            print(it, merit, value, scale, size)
        state, blocks = trial, new
        done = size < 1e-6 and scale == 1.0
        merit = value
        if done:
            break
    L, M, arrow, shift, data, reduced = factor(blocks, kappa)
    k = 6 * len(segments)
    cov = marginals(L, M, k)
    inner = kappa * np.linalg.inv(kappa * np.eye(c) + data)
    cov = cov + np.einsum("fka,ab,flb->fkl", arrow[:, :k], inner, arrow[:, :k], optimize=True)
    return state, cov, problem, it + 1
