"""Linear algebra of a trajectory: states coupled from frame to frame, and constants coupled to all of them.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md. The information (inverse covariance) is

    H = [[A, B], [Bᵀ, I + C]],   A block tridiagonal over T frames of p states, B (T·p, c), C (c, c),

where the constants have the prior N(0, I) and C is what the data says of them. The order of use:
`factor` (one sweep over the frames), `bounded_constants`, then `step` and `marginals` (chain_marginals.py).

Frames are handed over in spans by a function, so that B never has to exist as a whole. What elimination
leaves is kept where it fits the memory allowed; else only the end of each span is kept, and a span is
asked for again when it is needed. Frames count from 0.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike
from scipy.linalg import cho_solve

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, NotDeterminedError, ShapeError, message
from sta_prior.solve import chain_kernels as kernels

SPAN = 256
"""Frames in a span: long enough that the work outside the recursion does not count."""

MEMORY = 3e8
"""Bytes that what elimination leaves may take before it is computed anew instead."""


class Span(NamedTuple):
    """What the frames start…stop − 1 give to the information and its gradient; n = stop − start.

    Attributes
    ----------
    diagonal : shape (n, p, p), symmetric, A_tt; the upper triangle is read
    lower : shape (n, p, p), A_{t+1,t}; the last span may have n − 1, what stands there in n is not used
    coupling : shape (n, p, c), B_t
    gradient : shape (n, p), of half the squared residuals in the states
    constants_information : shape (c, c), part of C that these frames give; None for nothing
    constants_gradient : shape (c,), the data's gradient in the constants, likewise
    """

    diagonal: FloatArray
    lower: FloatArray
    coupling: FloatArray
    gradient: FloatArray
    constants_information: FloatArray | None = None
    constants_gradient: FloatArray | None = None


Spans = Callable[[int, int], Span]
"""Gives the frames start…stop − 1; asked for the same frames again it must give the same values."""


@dataclass(frozen=True, eq=False)
class ChainFactor:
    """The system with the states eliminated.

    Attributes
    ----------
    frames, states, constants : T, p and c
    information : shape (c, c), C − BᵀA⁻¹B, what the data says of the constants
    gradient : shape (c,), g_u − BᵀA⁻¹g_x, of the data alone
    decrement : gᵀA⁻¹g, twice the fall of the objective by a step of the states alone
    log_determinant : of A
    edges : first frames of the spans, and T
    """

    frames: int
    states: int
    constants: int
    information: FloatArray
    gradient: FloatArray
    decrement: float
    log_determinant: float
    _spans: Spans
    edges: tuple[int, ...]
    _before: FloatArray
    _panels: FloatArray | None

    @property
    def keeps_panels(self) -> bool:
        """Whether what elimination left was kept; else spans are asked for again."""
        return self._panels is not None


@dataclass(frozen=True, eq=False)
class ConstantsPosterior:
    """The constants once the states are integrated out, S = I + H/κ.

    Attributes
    ----------
    bound : κ ≥ 1
    factor : shape (c, c), lower triangular, S = L Lᵀ
    covariance : shape (c, c), S⁻¹
    log_determinant : of S
    """

    bound: float
    factor: FloatArray
    covariance: FloatArray
    log_determinant: float


class Step(NamedTuple):
    """Steps to the optimum: ``states`` (T, p) and ``constants`` (c,)."""

    states: FloatArray
    constants: FloatArray


def from_arrays(
    diagonal: FloatArray,
    lower: FloatArray,
    coupling: FloatArray,
    gradient: FloatArray,
    constants_information: FloatArray | None = None,
    constants_gradient: FloatArray | None = None,
) -> Spans:
    """Spans of a system that exists as arrays over all frames; shapes as in `Span` with n = T."""

    def spans(start: int, stop: int) -> Span:
        frames = slice(start, stop)
        whole = (constants_information, constants_gradient) if start == 0 else (None, None)
        return Span(diagonal[frames], lower[frames], coupling[frames], gradient[frames], *whole)

    return spans


def _clean(array: ArrayLike, shape: tuple[int, ...], place: tuple[str, ...], name: str) -> FloatArray:
    clean = np.ascontiguousarray(array, dtype=np.float64)
    if clean.shape != shape:
        raise ShapeError(message((*place, name), f"expected shape {shape}, got {clean.shape}"))
    return clean


def _checked(span: Span, start: int, stop: int, frames: int, states: int, constants: int) -> Span:
    """A span in the shapes and layout that the recursions need."""
    place = (f"frames {start}–{stop - 1}",)
    count = stop - start
    lower = np.asarray(span.lower)
    if stop == frames and lower.shape in {(count, states, states), (count - 1, states, states)}:
        # Nothing follows the last frame, whatever was handed over.
        lower = np.concatenate([lower[: count - 1], np.zeros((1, states, states))])
    information, gradient = span.constants_information, span.constants_gradient
    square = (constants, constants)
    return Span(
        _clean(span.diagonal, (count, states, states), place, "diagonal"),
        _clean(lower, (count, states, states), place, "lower"),
        _clean(span.coupling, (count, states, constants), place, "coupling"),
        _clean(span.gradient, (count, states), place, "gradient"),
        None if information is None else _clean(information, square, place, "constants_information"),
        None if gradient is None else _clean(gradient, (constants,), place, "constants_gradient"),
    )


def _stride(states: int, constants: int) -> int:
    """Length of a panel's row, a multiple of 8 numbers: rows begin alike in the cache's lines."""
    return -(-(2 * states + constants + 1) // 8) * 8


def _refuse_infinite(span: Span, start: int) -> None:
    """Raise for the first frame with a number that is not finite, if there is one."""
    names = ("diagonal", "lower", "coupling", "gradient")
    found = [(np.argwhere(~np.isfinite(array)), name) for name, array in zip(names, span[:4], strict=True)]
    places = [(tuple(int(i) for i in bad[0]), name) for bad, name in found if len(bad)]
    if places:
        index, name = min(places)
        value = getattr(span, name)[index]
        raise ShapeError(
            message(
                (f"frame {start + index[0]}", name),
                f"value at {index[1:]} is {value}, expected a finite number",
            )
        )


def _eliminate(span: Span, start: int, before: FloatArray, panels: FloatArray) -> None:
    """Write the panels of a span; raise where a block is not positive definite."""
    states, constants = span.coupling.shape[1:]
    size = kernels.sizes(states, constants, panels.shape[-1])
    with kernels.one_thread():
        failed = kernels.eliminate(*span[:4], before, panels, size, kernels.LETTERS, kernels.NUMBERS)
    if failed < 0:
        return
    _refuse_infinite(span, start)
    unknown = int(size[-1]) - 1
    raise NotDeterminedError(
        message(
            f"frame {start + failed}",
            f"the information is not positive definite, expected a pivot above 0, got "
            f"{panels[failed, unknown, unknown]:.3g} at unknown {unknown}",
            "Give every unknown a prior or data.",
        )
    )


def _arrow(panels: FloatArray, states: int, constants: int) -> FloatArray:
    """Columns Y and y of panels, shape (n·p, c + 1), a view."""
    return panels.reshape(-1, panels.shape[-1])[:, 2 * states : 2 * states + constants + 1]


def factor(spans: Spans, frames: int, *, span: int = SPAN, memory: float = MEMORY) -> ChainFactor:
    """Eliminate the states in one sweep over the frames.

    Parameters
    ----------
    spans : gives the system, see `Span`; called once for each span, in order
    frames : T ≥ 1
    span : frames in a span
    memory : bytes that what elimination leaves may take; above that, `step` and `marginals` ask for each
        span once more, at the price of one elimination each

    Raises
    ------
    NotDeterminedError : a block is not positive definite; names the frame and the unknown, counted from 0.
    ShapeError : a span has other shapes than asked for, or holds a number that is not finite.

    Notes
    -----
    Block Cholesky factorisation of A with Y = L⁻¹B and BᵀA⁻¹B = YᵀY summed along the way: Golub & Van Loan,
    Matrix Computations, 4th ed. (2013), sections 4.3 and 4.5. Time is linear in T.

    Examples
    --------
    Three frames of one state, coupled by −1, each seen together with one constant:

    >>> blocks, links = np.full((3, 1, 1), 3.0), np.full((2, 1, 1), -1.0)
    >>> system = from_arrays(blocks, links, np.ones((3, 1, 1)), np.zeros((3, 1)), np.array([[5.0]]))
    >>> eliminated = factor(system, 3)
    >>> round(float(np.exp(eliminated.log_determinant)), 9), eliminated.information.round(9).tolist()
    (21.0, [[3.142857143]])
    """
    if frames < 1 or span < 1:
        wrong = f"expected at least 1 frame and spans of at least 1, got {frames} and {span}"
        raise ShapeError(message("chain", wrong))
    edges = (*range(0, frames, span), frames)
    head = spans(0, edges[1])
    coupling = np.asarray(head.coupling)
    if coupling.ndim != 3 or not coupling.shape[1]:
        wrong = f"expected shape (n, p, c) with p above 0, got {coupling.shape}"
        raise ShapeError(message((f"frames 0–{edges[1] - 1}", "coupling"), wrong))
    states, constants = coupling.shape[1:]
    stride = _stride(states, constants)
    keep = 8.0 * frames * states * stride <= memory
    panels = np.empty((frames if keep else edges[1], states, stride))
    before = np.zeros((len(edges) - 1, states, stride))
    gram = np.zeros((constants + 1, constants + 1))
    information, gradient, log_determinant = np.zeros((constants, constants)), np.zeros(constants), 0.0
    previous = before[0]
    for index, (start, stop) in enumerate(pairwise(edges)):
        # The first span was asked for already, to learn the sizes.
        part = _checked(spans(start, stop) if index else head, start, stop, frames, states, constants)
        own = panels[start:stop] if keep else panels[: stop - start]
        before[index] = previous
        _eliminate(part, start, before[index], own)
        arrow = _arrow(own, states, constants)
        with kernels.one_thread():
            gram += arrow.T @ arrow
        log_determinant += 2.0 * float(np.log(np.einsum("nii->ni", own[:, :, :states])).sum())
        if not (np.isfinite(gram).all() and np.isfinite(log_determinant)):
            _refuse_infinite(part, start)
        if part.constants_information is not None:
            information += part.constants_information
        if part.constants_gradient is not None:
            gradient += part.constants_gradient
        previous = own[-1]
    information = information - gram[:-1, :-1]
    return ChainFactor(
        frames=frames,
        states=states,
        constants=constants,
        information=0.5 * (information + information.T),
        gradient=gradient - gram[:-1, -1],
        decrement=float(gram[-1, -1]),
        log_determinant=log_determinant,
        _spans=spans,
        edges=edges,
        _before=before,
        _panels=panels if keep else None,
    )


def bounded_constants(
    system: ChainFactor, bound: float | Callable[[FloatArray], float] = 1.0
) -> ConstantsPosterior:
    """Precision of the constants, with the data's information divided by a bound.

    Parameters
    ----------
    system : from `factor`
    bound : κ ≥ 1, or a function of the data's information, shape (c, c), that gives it; 1 is the exact
        posterior, more says that the frames are not as independent as the model has them

    Raises
    ------
    InputError : κ below 1 or not finite.
    NotDeterminedError : S = I + H/κ is not positive definite.
    """
    value = float(bound(system.information)) if callable(bound) else float(bound)
    if not 1.0 <= value < np.inf:
        wrong = f"expected a finite number of at least 1, got {value:g}"
        raise InputError(message(("constants", "bound"), wrong))
    precision = np.eye(system.constants) + system.information / value
    if not np.isfinite(precision).all():
        raise ShapeError(message("constants", "their information is not finite"))
    try:
        root = np.asarray(np.linalg.cholesky(precision), dtype=np.float64)
    except np.linalg.LinAlgError as error:
        lowest = float(np.linalg.eigvalsh(precision)[0])
        raise NotDeterminedError(
            message(
                "constants",
                f"smallest eigenvalue of their precision is {lowest:.3g}, expected above 0",
                "Give constants_information what belongs to the coupling.",
            )
        ) from error
    return ConstantsPosterior(
        bound=value,
        factor=root,
        covariance=np.asarray(cho_solve((root, True), np.eye(system.constants)), dtype=np.float64),
        log_determinant=2.0 * float(np.log(np.diag(root)).sum()),
    )


def step(system: ChainFactor, posterior: ConstantsPosterior, prior_gradient: ArrayLike | None = None) -> Step:
    """Solve for the steps of constants and states.

    Parameters
    ----------
    system : from `factor`
    posterior : from `bounded_constants`
    prior_gradient : shape (c,), gradient of the constants' prior: their present values; None for zeros

    Notes
    -----
    S du = −(g_prior + (g_u − BᵀA⁻¹g_x)/κ), dx = −A⁻¹(g_x + B du). With κ = 1 this is the solution of H.
    """
    own = np.zeros(system.constants) if prior_gradient is None else prior_gradient
    own = _clean(own, (system.constants,), ("constants",), "prior_gradient")
    change = -cho_solve((posterior.factor, True), own + system.gradient / posterior.bound)
    solution = np.empty((system.frames, system.states))
    after, weights = np.zeros(system.states), np.append(change, 1.0)
    for index in reversed(range(len(system.edges) - 1)):
        start, stop = system.edges[index : index + 2]
        panels, right = _weighted(system, index, weights)
        solution[start:stop] = -right
        kernels.substitute(panels, solution[start:stop], after)
        after = solution[start]
    return Step(solution, np.asarray(change, dtype=np.float64))


def _weighted(system: ChainFactor, index: int, weights: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Panels of a span, and Y du + y there, shape (n, p); ``weights`` is du and 1."""
    start, stop = system.edges[index : index + 2]
    states, constants, twice = system.states, system.constants, 2 * system.states
    if system._panels is not None:
        held = system._panels[start:stop]
        return held, (_arrow(held, states, constants) @ weights).reshape(-1, states)
    # With du known the arrow is not needed: eliminate g + B du.
    part = _checked(system._spans(start, stop), start, stop, system.frames, states, constants)
    edge, stride = system._before[index], _stride(states, 0)
    before, panels = np.zeros((states, stride)), np.empty((stop - start, states, stride))
    before[:, :twice] = edge[:, :twice]
    before[:, twice] = _arrow(edge, states, constants) @ weights
    known = Span(
        part.diagonal,
        part.lower,
        np.empty((stop - start, states, 0)),
        part.gradient + part.coupling @ weights[:-1],
    )
    _eliminate(known, start, before, panels)
    return panels, panels[:, :, twice]


def panels_of(system: ChainFactor, index: int) -> FloatArray:
    """What elimination left of a span (see `chain_kernels`), shape (n, p, w); kept, or computed anew."""
    start, stop = system.edges[index : index + 2]
    if system._panels is not None:
        return system._panels[start:stop]
    states, constants = system.states, system.constants
    part = _checked(system._spans(start, stop), start, stop, system.frames, states, constants)
    panels = np.empty((stop - start, states, _stride(states, constants)))
    _eliminate(part, start, system._before[index], panels)
    return panels
