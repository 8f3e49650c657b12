"""Marginal covariances of a trajectory after `sta_prior.solve.chain.factor`.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. Computed span by span from the last frame to
the first; only what is asked for is stored for all frames.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from scipy.linalg import solve_triangular

from sta_prior.checks import FloatArray
from sta_prior.errors import ShapeError, message
from sta_prior.solve import chain_kernels as kernels
from sta_prior.solve.chain import ChainFactor, ConstantsPosterior, panels_of


@dataclass(frozen=True, eq=False)
class Marginals:
    """Covariance of the leading k states of the frames start…stop − 1; n = stop − start.

    Attributes
    ----------
    start, stop : the frames
    states : shape (n, k, k), blocks of A⁻¹: with the constants known
    share : shape (n, k, k), what the constants add, X S⁻¹ Xᵀ with X = A⁻¹B
    lagged : shape (m, k, k), cov(x_t, x_{t+1}) with the constants' share, where t + 1 < T; None if not asked
    with_constants : shape (n, k, c), cov(x_t, u); None if not asked
    """

    start: int
    stop: int
    states: FloatArray
    share: FloatArray
    lagged: FloatArray | None
    with_constants: FloatArray | None

    @property
    def covariance(self) -> FloatArray:
        """Shape (n, k, k), of the states whatever the constants are."""
        return self.states + self.share


def _kept(system: ChainFactor, leading: int | None) -> int:
    """How many states are wanted, checked."""
    kept = system.states if leading is None else leading
    if not 1 <= kept <= system.states:
        raise ShapeError(message("leading", f"expected 1 to {system.states} states, got {kept}"))
    return kept


def marginal_spans(
    system: ChainFactor,
    posterior: ConstantsPosterior,
    leading: int | None = None,
    *,
    lagged: bool = False,
    with_constants: bool = False,
) -> Iterator[Marginals]:
    """Covariances span by span, the last span first; for what need not exist for all frames at once.

    Parameters
    ----------
    system : from `chain.factor`
    posterior : from `chain.bounded_constants`
    leading : k, how many of the p states are wanted; None for all
    lagged : whether cov(x_t, x_{t+1}) is wanted
    with_constants : whether cov(x_t, u) is wanted

    Raises
    ------
    ShapeError : k is not within 1…p.

    Notes
    -----
    Backward recursion for the blocks of the inverse within the band, the smoother of Rauch, Tung and
    Striebel in information form. With K_t = R_t⁻¹N_t:
    P_t = (R_tᵀR_t)⁻¹ + K_t P_{t+1} K_tᵀ, cov(x_t, x_{t+1}) = −K_t P_{t+1}, X_t = R_t⁻¹Y_t − K_t X_{t+1}.
    The covariance with the constants is −X S⁻¹.
    """
    states, constants = system.states, system.constants
    kept = _kept(system, leading)
    covariance, after = np.zeros((states, states)), np.zeros((states, constants))
    for index in reversed(range(len(system.edges) - 1)):
        start, stop = system.edges[index : index + 2]
        panels, count = panels_of(system, index), stop - start
        responses = np.empty((count + 1, states, constants))
        responses[-1] = after
        diagonal = np.empty((count, kept, kept))
        beside = np.empty((count if lagged else 0, kept, kept))
        work, size = np.empty((2, states, states)), kernels.sizes(states, constants, panels.shape[-1])
        with kernels.one_thread():
            kernels.covariances(
                panels, covariance, responses, diagonal, beside, work, size, kernels.LETTERS, kernels.NUMBERS
            )
            whitened = _solved(posterior, responses[:, :kept], "N")
            cross = -_solved(posterior, whitened[:-1], "T") if with_constants else None
            share = whitened[:-1] @ whitened[:-1].swapaxes(-1, -2)
            if lagged:
                beside += whitened[:-1] @ whitened[1:].swapaxes(-1, -2)
        after = responses[0]
        # The last frame has none after it.
        pairs = beside[: system.frames - 1 - start] if lagged else None
        yield Marginals(start, stop, diagonal, share, pairs, cross)


def _solved(posterior: ConstantsPosterior, rows: FloatArray, turned: str) -> FloatArray:
    """Rows of X L⁻ᵀ ("N") or of X L⁻¹ ("T"), X of shape (n, k, c) and S = L Lᵀ."""
    if not rows.shape[-1]:
        return rows
    # Fortran reads rows as columns.
    columns = rows.reshape(-1, rows.shape[-1]).T
    solved = solve_triangular(posterior.factor, columns, lower=True, trans=turned, check_finite=False)
    return np.asarray(solved.T.reshape(rows.shape), dtype=np.float64)


def marginals(
    system: ChainFactor,
    posterior: ConstantsPosterior,
    leading: int | None = None,
    *,
    lagged: bool = False,
    with_constants: bool = False,
) -> Marginals:
    """Covariances of all frames; arguments and errors as in `marginal_spans`."""
    frames, kept = system.frames, _kept(system, leading)
    whole = Marginals(
        start=0,
        stop=frames,
        states=np.empty((frames, kept, kept)),
        share=np.empty((frames, kept, kept)),
        lagged=np.empty((frames - 1, kept, kept)) if lagged else None,
        with_constants=np.empty((frames, kept, system.constants)) if with_constants else None,
    )
    for part in marginal_spans(system, posterior, kept, lagged=lagged, with_constants=with_constants):
        own = slice(part.start, part.stop)
        whole.states[own], whole.share[own] = part.states, part.share
        if whole.lagged is not None and part.lagged is not None:
            whole.lagged[own] = part.lagged
        if whole.with_constants is not None and part.with_constants is not None:
            whole.with_constants[own] = part.with_constants
    return whole
