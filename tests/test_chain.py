"""Linear algebra of a trajectory against dense algebra, SciPy's banded solver, and itself in other spans."""

from __future__ import annotations

import tracemalloc
from dataclasses import dataclass

import numpy as np
import pytest
import scipy.linalg
from hypothesis import given, settings
from hypothesis import strategies as st

from sta_prior.checks import FloatArray
from sta_prior.errors import InputError, NotDeterminedError, ShapeError
from sta_prior.solve.chain import Span, Spans, Step, bounded_constants, factor, from_arrays, step
from sta_prior.solve.chain_marginals import Marginals, marginal_spans, marginals

SIZES = [(1, 1, 0), (1, 5, 3), (2, 4, 0), (2, 4, 7), (9, 12, 0), (7, 24, 11), (5, 30, 60), (13, 6, 80)]
"""Frames, states, constants."""


@dataclass(frozen=True)
class System:
    """A random system: dense, and in blocks. ``information`` is H without the prior of the constants."""

    frames: int
    states: int
    information: FloatArray
    gradient: FloatArray
    own: FloatArray

    @property
    def split(self) -> int:
        return self.frames * self.states

    def blocks(self) -> tuple[FloatArray, ...]:
        n, (frames, states) = self.split, (self.frames, self.states)
        block = self.information[:n, :n].reshape(frames, states, frames, states)
        return (
            np.array([block[t, :, t] for t in range(frames)]),
            np.array([block[t + 1, :, t] for t in range(frames - 1)]).reshape(-1, states, states),
            self.information[:n, n:].reshape(frames, states, -1),
            self.gradient[:n].reshape(frames, states),
            self.information[n:, n:],
            self.gradient[n:],
        )

    def spans(self) -> Spans:
        return from_arrays(*self.blocks())


def made(frames: int, states: int, constants: int, seed: int = 1) -> System:
    """Sum of rows that see two neighbouring frames and the constants."""
    rng = np.random.default_rng(seed)
    size = frames * states + constants
    information = np.zeros((size, size))
    for t in range(frames):
        rows = np.zeros((states + 2, size))
        pair = slice(t * states, min(frames, t + 2) * states)
        rows[:, pair] = rng.normal(size=rows[:, pair].shape)
        rows[:, frames * states :] = rng.normal(size=(states + 2, constants))
        information += rows.T @ rows
    states_only = np.arange(frames * states)
    information[states_only, states_only] += rng.uniform(0.5, 2.0, size=len(states_only))
    return System(frames, states, information, rng.normal(size=size), rng.normal(size=constants))


@dataclass(frozen=True)
class Dense:
    """Everything by dense algebra."""

    states: FloatArray
    constants: FloatArray
    known: FloatArray
    share: FloatArray
    cross: FloatArray
    log_determinants: tuple[float, float]


def dense(system: System, bound: float) -> Dense:
    n = system.split
    a, b, c = (system.information[:n, :n], system.information[:n, n:], system.information[n:, n:])
    inverse = np.linalg.inv(a)
    response = inverse @ b
    precision = np.eye(len(c)) + (c - b.T @ response) / bound
    covariance = np.linalg.inv(precision)
    reduced = system.gradient[n:] - response.T @ system.gradient[:n]
    change = -covariance @ (system.own + reduced / bound)
    return Dense(
        states=-inverse @ (system.gradient[:n] + b @ change),
        constants=change,
        known=inverse,
        share=response @ covariance @ response.T,
        cross=-response @ covariance,
        log_determinants=(np.linalg.slogdet(a)[1], np.linalg.slogdet(precision)[1]),
    )


def diagonal_blocks(matrix: FloatArray, system: System, leading: int, offset: int = 0) -> FloatArray:
    block = matrix.reshape(system.frames, system.states, system.frames, system.states)
    inside = [block[t, :leading, t + offset, :leading] for t in range(system.frames - offset)]
    return np.array(inside).reshape(-1, leading, leading)


def close(got: FloatArray, wanted: FloatArray, tolerance: float = 1e-8) -> bool:
    """Relative to the largest entry."""
    assert got.shape == wanted.shape
    return bool(
        np.abs(got - wanted).max(initial=0.0) <= tolerance * max(np.abs(wanted).max(initial=0.0), 1e-300)
    )


def run(
    system: System, bound: float = 1.0, leading: int | None = None, span: int = 256, memory: float = 3e8
) -> tuple[Step, Marginals, tuple[float, float]]:
    eliminated = factor(system.spans(), system.frames, span=span, memory=memory)
    posterior = bounded_constants(eliminated, bound)
    told = marginals(eliminated, posterior, leading, lagged=True, with_constants=True)
    return (
        step(eliminated, posterior, system.own),
        told,
        (eliminated.log_determinant, posterior.log_determinant),
    )


def check(system: System, bound: float, leading: int, span: int, memory: float) -> None:
    steps, told, log_determinants = run(system, bound, leading, span, memory)
    wanted = dense(system, bound)
    whole = wanted.known + wanted.share
    assert close(steps.constants, wanted.constants)
    assert close(steps.states.reshape(-1), wanted.states)
    assert close(told.states, diagonal_blocks(wanted.known, system, leading))
    assert close(told.share, diagonal_blocks(wanted.share, system, leading))
    assert close(told.covariance, diagonal_blocks(whole, system, leading))
    assert told.lagged is not None
    assert close(told.lagged, diagonal_blocks(whole, system, leading, 1))
    assert told.with_constants is not None
    cross = wanted.cross.reshape(system.frames, system.states, len(system.own))
    assert close(told.with_constants, cross[:, :leading])
    np.testing.assert_allclose(log_determinants, wanted.log_determinants, rtol=1e-8, atol=1e-8)


@pytest.mark.parametrize("bound", [1.0, 7.5])
@pytest.mark.parametrize(("frames", "states", "constants"), SIZES)
def test_everything_agrees_with_dense_algebra(frames: int, states: int, constants: int, bound: float) -> None:
    check(made(frames, states, constants), bound, states, span=256, memory=3e8)


@pytest.mark.parametrize("memory", [0.0, 3e8])
@pytest.mark.parametrize(("frames", "states", "constants"), SIZES)
def test_leading_states_in_short_spans_agree_with_dense_algebra(
    frames: int, states: int, constants: int, memory: float
) -> None:
    check(made(frames, states, constants, seed=2), 3.0, max(1, states // 2), span=3, memory=memory)


@settings(deadline=None, max_examples=60, derandomize=True)
@given(
    frames=st.integers(1, 12),
    states=st.integers(1, 13),
    constants=st.integers(0, 9),
    span=st.integers(1, 14),
    kept=st.booleans(),
    bound=st.floats(1.0, 1e3),
    leading=st.integers(1, 13),
    seed=st.integers(0, 10_000),
)
def test_any_sizes_agree_with_dense_algebra(
    frames: int, states: int, constants: int, span: int, kept: bool, bound: float, leading: int, seed: int
) -> None:
    system = made(frames, states, constants, seed)
    check(system, bound, min(leading, states), span, 3e8 if kept else 0.0)


def test_without_a_bound_the_step_solves_the_whole_system() -> None:
    system = made(6, 8, 5)
    n = system.split
    whole, gradient = system.information.copy(), system.gradient.copy()
    whole[n:, n:] += np.eye(5)
    gradient[n:] += system.own
    solution = -np.linalg.solve(whole, gradient)
    steps, told, log_determinants = run(system)
    assert close(np.concatenate([steps.states.reshape(-1), steps.constants]), solution, 1e-11)
    covariance = np.linalg.inv(whole)[:n, :n]
    assert close(told.covariance, diagonal_blocks(covariance, system, 8), 1e-11)
    np.testing.assert_allclose(sum(log_determinants), np.linalg.slogdet(whole)[1], rtol=1e-12)


@pytest.mark.parametrize("states", [3, 24])
def test_without_constants_the_step_is_that_of_scipys_banded_solver(states: int) -> None:
    system = made(40, states, 0)
    n = system.split
    bands = np.zeros((2 * states, n))
    for offset in range(2 * states):
        bands[offset, : n - offset] = np.diag(system.information, -offset)
    wanted = -scipy.linalg.solveh_banded(bands, system.gradient, lower=True)
    assert close(run(system)[0].states.reshape(-1), wanted, 1e-11)
    root = scipy.linalg.cholesky_banded(bands, lower=True)
    np.testing.assert_allclose(run(system)[2], (2 * np.log(root[0]).sum(), 0.0), rtol=1e-12)


def test_the_decrement_is_the_quadratic_form_of_the_gradient() -> None:
    system = made(5, 4, 3)
    n = system.split
    wanted = system.gradient[:n] @ np.linalg.solve(system.information[:n, :n], system.gradient[:n])
    np.testing.assert_allclose(factor(system.spans(), 5).decrement, wanted, rtol=1e-12)


@pytest.mark.parametrize("memory", [0.0, 3e8])
def test_other_spans_give_the_same(memory: float) -> None:
    system = made(23, 7, 5)
    steps, told, log_determinants = run(system, 2.0)
    for span in (1, 2, 5, 22, 23):
        other_steps, other, other_log_determinants = run(system, 2.0, span=span, memory=memory)
        assert close(other_steps.states, steps.states, 1e-12)
        assert close(other_steps.constants, steps.constants, 1e-12)
        # The recursion itself does not know where a span ends.
        np.testing.assert_array_equal(other.states, told.states)
        assert close(other.share, told.share, 1e-12)
        np.testing.assert_allclose(other_log_determinants, log_determinants, rtol=1e-12)


def test_computed_anew_is_bit_for_bit_what_was_kept() -> None:
    system = made(23, 7, 5)
    kept, anew = (run(system, 2.0, span=4, memory=memory)[1] for memory in (3e8, 0.0))
    for name in ("states", "share", "lagged", "with_constants"):
        np.testing.assert_array_equal(getattr(kept, name), getattr(anew, name))


def test_spans_are_asked_for_in_order_and_once_where_they_are_kept() -> None:
    system, asked = made(7, 3, 2), []

    def recorded(start: int, stop: int) -> Span:
        asked.append((start, stop))
        return system.spans()(start, stop)

    forward = [(0, 3), (3, 6), (6, 7)]
    for memory, wanted in ((3e8, forward), (0.0, forward + 2 * forward[::-1])):
        asked.clear()
        eliminated = factor(recorded, 7, span=3, memory=memory)
        assert eliminated.keeps_panels == (memory > 0)
        posterior = bounded_constants(eliminated)
        step(eliminated, posterior)
        told = [(part.start, part.stop) for part in marginal_spans(eliminated, posterior)]
        assert told == forward[::-1]
        assert asked == wanted


def test_constants_may_come_with_any_span() -> None:
    system = made(6, 3, 4)
    whole, gradient = system.blocks()[4:]

    def shared(start: int, stop: int) -> Span:
        part = system.spans()(start, stop)
        return part._replace(
            constants_information=whole * (stop - start) / 6, constants_gradient=gradient * (stop - start) / 6
        )

    together, apart = factor(system.spans(), 6), factor(shared, 6, span=4)
    np.testing.assert_allclose(apart.information, together.information, rtol=1e-11, atol=1e-11)
    np.testing.assert_allclose(apart.gradient, together.gradient, rtol=1e-11, atol=1e-11)


def test_what_follows_the_last_frame_is_not_used() -> None:
    system = made(5, 3, 2)
    diagonal, lower, *rest = system.blocks()
    padded = from_arrays(diagonal, np.concatenate([lower, np.full((1, 3, 3), np.nan)]), *rest)
    wanted = factor(system.spans(), 5)
    got = factor(padded, 5)
    np.testing.assert_array_equal(got.information, wanted.information)
    posterior = bounded_constants(got)
    np.testing.assert_array_equal(step(got, posterior).states, step(wanted, bounded_constants(wanted)).states)
    assert np.isfinite(marginals(got, posterior).covariance).all()


def test_the_lower_triangle_of_a_diagonal_block_is_not_read() -> None:
    system = made(4, 5, 2)
    diagonal, *rest = system.blocks()
    upper = np.triu(diagonal) + np.tril(np.full_like(diagonal, 1e9), -1)
    assert factor(from_arrays(upper, *rest), 4).log_determinant == factor(system.spans(), 4).log_determinant


def test_a_bound_may_be_a_function_of_the_information() -> None:
    eliminated = factor(made(6, 3, 4).spans(), 6)
    posterior = bounded_constants(eliminated, lambda information: 1.0 + np.trace(information))
    assert posterior.bound == 1.0 + np.trace(eliminated.information)
    wanted = np.linalg.inv(np.eye(4) + eliminated.information / posterior.bound)
    np.testing.assert_allclose(posterior.covariance, wanted, rtol=1e-12)


def test_a_bound_that_grows_leads_back_to_the_prior() -> None:
    system = made(6, 3, 4)
    eliminated = factor(system.spans(), 6)
    posterior = bounded_constants(eliminated, 1e14)
    np.testing.assert_allclose(posterior.covariance, np.eye(4), atol=1e-11)
    np.testing.assert_allclose(step(eliminated, posterior, system.own).constants, -system.own, atol=1e-11)


def test_memory_does_not_grow_with_the_arrow() -> None:
    frames, states, constants = 3000, 12, 40
    block, link = 3.0 * np.eye(states), -np.eye(states)
    rng = np.random.default_rng(4)
    pattern = rng.normal(size=(states, constants))

    def spans(start: int, stop: int) -> Span:
        count = stop - start
        return Span(
            np.broadcast_to(block, (count, states, states)),
            np.broadcast_to(link, (count, states, states)),
            np.broadcast_to(pattern, (count, states, constants)),
            np.ones((count, states)),
            count * pattern.T @ pattern,
        )

    def peak(memory: float) -> float:
        tracemalloc.start()
        eliminated = factor(spans, frames, span=100, memory=memory)
        posterior = bounded_constants(eliminated)
        step(eliminated, posterior)
        marginals(eliminated, posterior, 6)
        highest = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        return highest

    peak(0.0)  # Compiles.
    arrow = 8.0 * frames * states * constants
    # Stored for all frames: the step and two covariances, 12 + 2·36 numbers a frame. Then the ends of spans.
    assert peak(0.0) < 8.0 * frames * 84 + 0.3 * arrow
    assert peak(3e8) > arrow


def broken(diagonal: FloatArray | None = None) -> tuple[FloatArray, ...]:
    """Seven frames of two states with one constant."""
    blocks = np.broadcast_to(np.eye(2), (7, 2, 2)) if diagonal is None else diagonal
    return blocks.copy(), np.zeros((6, 2, 2)), np.zeros((7, 2, 1)), np.zeros((7, 2))


@pytest.mark.parametrize("span", [2, 256])
def test_a_block_that_is_not_positive_definite_names_frame_and_unknown(span: int) -> None:
    blocks = broken()
    blocks[0][5] = [[4.0, 2.0], [2.0, 0.75]]
    with pytest.raises(NotDeterminedError) as caught:
        factor(from_arrays(*blocks), 7, span=span)
    assert str(caught.value) == (
        "frame 5: the information is not positive definite, expected a pivot above 0, got -0.25 at "
        "unknown 1. Give every unknown a prior or data."
    )


@pytest.mark.parametrize(
    ("which", "place", "text"),
    [
        (0, (4, 0, 1), "frame 4, diagonal: value at (0, 1) is nan, expected a finite number."),
        (0, (0, 1, 1), "frame 0, diagonal: value at (1, 1) is nan, expected a finite number."),
        (1, (3, 1, 0), "frame 3, lower: value at (1, 0) is nan, expected a finite number."),
        (2, (2, 1, 0), "frame 2, coupling: value at (1, 0) is nan, expected a finite number."),
        (3, (6, 1), "frame 6, gradient: value at (1,) is nan, expected a finite number."),
    ],
)
def test_a_number_that_is_not_finite_is_named(which: int, place: tuple[int, ...], text: str) -> None:
    blocks = broken()
    blocks[which][place] = np.nan
    with pytest.raises(ShapeError) as caught:
        factor(from_arrays(*blocks), 7, span=3)
    assert str(caught.value) == text


def test_an_infinite_block_is_named() -> None:
    blocks = broken()
    blocks[0][5, 1, 1] = np.inf
    with pytest.raises(ShapeError) as caught:
        factor(from_arrays(*blocks), 7, span=3)
    assert str(caught.value) == "frame 5, diagonal: value at (1, 1) is inf, expected a finite number."


@pytest.mark.parametrize(
    ("change", "text"),
    [
        ({"diagonal": np.ones((3, 2, 4))}, "diagonal: expected shape (3, 2, 2), got (3, 2, 4)."),
        ({"lower": np.ones((2, 2, 2))}, "lower: expected shape (3, 2, 2), got (2, 2, 2)."),
        ({"coupling": np.ones((3, 2, 5))}, "coupling: expected shape (3, 2, 1), got (3, 2, 5)."),
        ({"gradient": np.ones((3, 3))}, "gradient: expected shape (3, 2), got (3, 3)."),
        (
            {"constants_information": np.ones((2, 2))},
            "constants_information: expected shape (1, 1), got (2, 2).",
        ),
        ({"constants_gradient": np.ones(4)}, "constants_gradient: expected shape (1,), got (4,)."),
    ],
)
def test_another_shape_is_named_with_its_span(change: dict[str, FloatArray], text: str) -> None:
    good = from_arrays(*broken())

    def spans(start: int, stop: int) -> Span:
        part = good(start, stop)
        return part._replace(**change) if start == 3 else part

    with pytest.raises(ShapeError) as caught:
        factor(spans, 7, span=3)
    assert str(caught.value) == f"frames 3–5, {text}"


def test_a_coupling_without_axes_is_refused() -> None:
    blocks = broken()
    with pytest.raises(ShapeError) as caught:
        factor(from_arrays(blocks[0], blocks[1], np.zeros((7, 2)), blocks[3]), 7)
    assert str(caught.value) == "frames 0–6, coupling: expected shape (n, p, c) with p above 0, got (7, 2)."


def test_no_frames_are_refused() -> None:
    with pytest.raises(ShapeError) as caught:
        factor(from_arrays(*broken()), 0, span=3)
    assert str(caught.value) == "chain: expected at least 1 frame and spans of at least 1, got 0 and 3."


@pytest.mark.parametrize(("bound", "told"), [(0.5, "0.5"), (np.nan, "nan"), (np.inf, "inf")])
def test_a_bound_below_one_is_refused(bound: float, told: str) -> None:
    eliminated = factor(from_arrays(*broken()), 7)
    with pytest.raises(InputError) as caught:
        bounded_constants(eliminated, bound)
    assert str(caught.value) == f"constants, bound: expected a finite number of at least 1, got {told}."


def test_constants_less_informed_than_their_coupling_are_refused() -> None:
    blocks = broken()
    blocks[2][:, 0, 0] = 1.0
    with pytest.raises(NotDeterminedError) as caught:
        bounded_constants(factor(from_arrays(*blocks), 7))
    assert str(caught.value) == (
        "constants: smallest eigenvalue of their precision is -6, expected above 0. "
        "Give constants_information what belongs to the coupling."
    )


def test_constants_that_are_not_finite_are_refused() -> None:
    with pytest.raises(ShapeError) as caught:
        bounded_constants(factor(from_arrays(*broken(), np.array([[np.nan]])), 7))
    assert str(caught.value) == "constants: their information is not finite."


def test_another_prior_gradient_is_refused() -> None:
    eliminated = factor(from_arrays(*broken()), 7)
    with pytest.raises(ShapeError) as caught:
        step(eliminated, bounded_constants(eliminated), np.zeros(3))
    assert str(caught.value) == "constants, prior_gradient: expected shape (1,), got (3,)."


@pytest.mark.parametrize("leading", [0, 3])
def test_more_states_than_there_are_cannot_be_asked_for(leading: int) -> None:
    eliminated = factor(from_arrays(*broken()), 7)
    with pytest.raises(ShapeError) as caught:
        marginals(eliminated, bounded_constants(eliminated), leading)
    assert str(caught.value) == f"leading: expected 1 to 2 states, got {leading}."
