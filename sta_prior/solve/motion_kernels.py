"""The motion prior's share of a span, compiled; see solve/motion.py for the model.

Kernel: arrays in, arrays out. The derivatives of one step are 6×6 blocks, and its precision is a Kronecker
product of a small matrix over the derivatives of the state with a diagonal one over the components.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from sta_prior.checks import FloatArray, IntArray
from sta_prior.se3 import jacobians
from sta_prior.solve.chain_kernels import ByteArray, _product

# Offsets in bytes into LETTERS and NUMBERS, and from one number to the next.
_PLAIN, _TURNED = 2, 3
_ZERO, _PLUS = 8, 16
_BYTES = 8

_SERIES_ANGLE = jacobians._SERIES_ANGLE
_SERIES = np.array(
    [
        (*series, *[0.0] * (8 - len(series)))
        for series in (jacobians._COTANGENT, jacobians._SINE_2, jacobians._SINE_3, jacobians._SINE_4)
    ]
)


@njit(cache=True, nogil=True, error_model="numpy")
def _coefficients(square: float, result: FloatArray) -> None:
    """Coefficients of the Jacobians at a squared angle; se3/jacobians.py names and derives them."""
    if square < _SERIES_ANGLE**2:
        for kind in range(4):
            total = 0.0
            for term in range(7, -1, -1):
                total = total * square + _SERIES[kind, term]
            result[kind] = total
        return
    angle = math.sqrt(square)
    sine, cosine = math.sin(angle), math.cos(angle)
    result[0] = (1.0 - 0.5 * angle / math.tan(0.5 * angle)) / square
    result[1] = (angle - sine) / (square * angle)
    result[2] = (0.5 * square + cosine - 1.0) / square**2
    result[3] = (2.0 * angle - 3.0 * sine + angle * cosine) / (2.0 * square**2 * angle)


@njit(cache=True, nogil=True, error_model="numpy")
def _rotation_vector(rotation: FloatArray, vector: FloatArray) -> None:
    """Rotation vector of a rotation, by way of the quaternion: right at any angle."""
    trace = rotation[0, 0] + rotation[1, 1] + rotation[2, 2]
    largest = 0
    for i in range(1, 3):
        if rotation[i, i] > rotation[largest, largest]:
            largest = i
    if trace >= rotation[largest, largest]:
        real = 1.0 + trace
        vector[0] = rotation[2, 1] - rotation[1, 2]
        vector[1] = rotation[0, 2] - rotation[2, 0]
        vector[2] = rotation[1, 0] - rotation[0, 1]
    else:
        i = largest
        j, k = (i + 1) % 3, (i + 2) % 3
        real = rotation[k, j] - rotation[j, k]
        vector[i] = 1.0 + 2.0 * rotation[i, i] - trace
        vector[j] = rotation[i, j] + rotation[j, i]
        vector[k] = rotation[i, k] + rotation[k, i]
        if real < 0.0:
            real = -real
            for i in range(3):
                vector[i] = -vector[i]
    length = math.sqrt(vector[0] ** 2 + vector[1] ** 2 + vector[2] ** 2)
    factor = 2.0 * math.atan2(length, real) / length if length > 0.0 else 2.0 / real
    for i in range(3):
        vector[i] *= factor


@njit(cache=True, nogil=True, error_model="numpy")
def _cross(vector: FloatArray, matrix: FloatArray) -> None:
    """Write the matrix of the cross product."""
    matrix[0, 0] = matrix[1, 1] = matrix[2, 2] = 0.0
    matrix[2, 1], matrix[1, 2] = vector[0], -vector[0]
    matrix[0, 2], matrix[2, 0] = vector[1], -vector[1]
    matrix[1, 0], matrix[0, 1] = vector[2], -vector[2]


@njit(cache=True, nogil=True, error_model="numpy")
def _times(left: FloatArray, right: FloatArray, result: FloatArray) -> None:
    """Product of two 3×3 matrices."""
    for i in range(3):
        for j in range(3):
            result[i, j] = left[i, 0] * right[0, j] + left[i, 1] * right[1, j] + left[i, 2] * right[2, j]


@njit(cache=True, nogil=True, error_model="numpy")
def step_jacobians(
    earlier: FloatArray,
    later: FloatArray,
    tangent: FloatArray,
    left: FloatArray,
    right: FloatArray,
    work: FloatArray,
) -> None:
    """Tangent of the move from one pose to the next, and the inverse left and right Jacobian there.

    Parameters
    ----------
    earlier, later : shape (4, 4), lab ← bone
    tangent : shape (6,), ξ = Log(T⁻¹T′); written
    left, right : shape (6, 6), J_l(ξ)⁻¹ and J_r(ξ)⁻¹; written below and on the diagonal blocks
    work : shape (9, 3, 3), scratch

    Notes
    -----
    The two Jacobians' blocks are each other's transposes, as J_r(ξ) = J_l(−ξ).
    """
    turn, move, squared, root, coupling = work[0], work[1], work[2], work[3], work[4]
    first, second, third, fourth = work[5], work[6], work[7], work[8]
    coefficients, place = first.reshape(9), second.reshape(9)
    for i in range(3):
        place[i] = 0.0
        for j in range(3):
            place[i] += earlier[j, i] * (later[j, 3] - earlier[j, 3])
            turn[i, j] = (
                earlier[0, i] * later[0, j] + earlier[1, i] * later[1, j] + earlier[2, i] * later[2, j]
            )
    _rotation_vector(turn, tangent)
    _coefficients(tangent[0] ** 2 + tangent[1] ** 2 + tangent[2] ** 2, coefficients)
    bend, sine_2, sine_3, sine_4 = coefficients[0], coefficients[1], coefficients[2], coefficients[3]
    _cross(tangent, turn)
    _times(turn, turn, squared)
    for i in range(3):
        for j in range(3):
            root[i, j] = bend * squared[i, j] - 0.5 * turn[i, j]
        root[i, i] += 1.0
    for i in range(3):
        tangent[3 + i] = root[i, 0] * place[0] + root[i, 1] * place[1] + root[i, 2] * place[2]
    _cross(tangent[3:], move)
    # Products of f = turn and r = move: fr, rf, frf.
    _times(turn, move, first)
    _times(move, turn, second)
    _times(first, turn, third)
    for i in range(3):
        for j in range(3):
            coupling[i, j] = (
                0.5 * move[i, j]
                + sine_2 * (first[i, j] + second[i, j] + third[i, j])
                - 3.0 * sine_3 * third[i, j]
            )
    _times(turn, first, fourth)
    for i in range(3):
        for j in range(3):
            coupling[i, j] += sine_3 * fourth[i, j]
    _times(second, turn, fourth)
    for i in range(3):
        for j in range(3):
            coupling[i, j] += sine_3 * fourth[i, j]
    _times(third, turn, first)
    _times(turn, third, second)
    for i in range(3):
        for j in range(3):
            coupling[i, j] += sine_4 * (first[i, j] + second[i, j])
    _times(root, coupling, first)
    _times(first, root, second)
    for i in range(3):
        for j in range(3):
            left[i, j] = left[3 + i, 3 + j] = root[i, j]
            right[j, i] = right[3 + j, 3 + i] = root[i, j]
            left[3 + i, j] = -second[i, j]
            right[3 + j, i] = -second[i, j]


@njit(cache=True, nogil=True, error_model="numpy")
def _bracket(first: FloatArray, second: FloatArray, result: FloatArray) -> None:
    """Lie bracket ad(ξ)η of two tangents, (6,)."""
    for i in range(3):
        j, k = (i + 1) % 3, (i + 2) % 3
        result[i] = first[j] * second[k] - first[k] * second[j]
        result[3 + i] = (
            first[3 + j] * second[k]
            - first[3 + k] * second[j]
            + first[j] * second[3 + k]
            - first[k] * second[3 + j]
        )


@njit(cache=True, nogil=True, error_model="numpy")
def _turn(tangent: FloatArray, factor: float, rows: FloatArray, first: int) -> None:
    """Add factor·ad(ξ) to six columns of rows, (6, …), from the first on."""
    unit, column = np.zeros(6), np.empty(6)
    for j in range(6):
        unit[:] = 0.0
        unit[j] = 1.0
        _bracket(tangent, unit, column)
        for i in range(6):
            rows[i, first + j] += factor * column[i]


@njit(cache=True, nogil=True, error_model="numpy")
def _bend(tangent: FloatArray, rate: FloatArray, result: FloatArray) -> None:
    """Derivative of J_r(ξ)⁻¹w in ξ, (6, 6): −ad(w)/2 − (ad(ad(ξ)w) + ad(ξ)ad(w))/12, and less than 1e-5."""
    inner, unit, column, twice = np.empty(6), np.zeros(6), np.empty(6), np.empty(6)
    _bracket(tangent, rate, inner)
    for j in range(6):
        unit[:] = 0.0
        unit[j] = 1.0
        _bracket(rate, unit, column)
        _bracket(tangent, column, twice)
        for i in range(6):
            result[i, j] = -0.5 * column[i] - twice[i] / 12.0
        _bracket(inner, unit, column)
        for i in range(6):
            result[i, j] -= column[i] / 12.0


@njit(cache=True, nogil=True, error_model="numpy")
def _derivatives(
    tangent: FloatArray,
    left: FloatArray,
    right: FloatArray,
    rates: FloatArray,
    transition: FloatArray,
    rows: FloatArray,
) -> None:
    """Derivative of a step's innovations, (6·order, 12·order), in the state at its end, then at its start."""
    order = transition.shape[0]
    begin = 6 * order
    for i in range(6):
        for j in range(6):
            rows[i, j] = right[i, j]
            rows[i, begin + j] = -left[i, j]
            for k in range(1, order):
                rows[6 * k + i, 6 * k + j] = right[i, j]
        for k in range(order):
            for m in range(1, order):
                rows[6 * k + i, begin + 6 * m + i] = -transition[k, m]
    bend = np.empty((6, 6))
    for k in range(1, order):
        _bend(tangent, rates[k - 1], bend)
        for i in range(6):
            for j in range(6):
                end, start = 0.0, 0.0
                for m in range(6):
                    end += bend[i, m] * right[m, j]
                    start -= bend[i, m] * left[m, j]
                rows[6 * k + i, j] = end
                rows[6 * k + i, begin + j] = start


@njit(cache=True, nogil=True, error_model="numpy")
def _scatter(dense: FloatArray, places: IntArray, block: FloatArray) -> None:
    """Add a segment's matrix to a frame's block, six columns at a time."""
    for k in range(places.size):
        for i in range(6):
            row = block[places[k] + i]
            for m in range(places.size):
                for j in range(6):
                    row[places[m] + j] += dense[6 * k + i, 6 * m + j]


@njit(cache=True, nogil=True, error_model="numpy")
def add_motion(
    poses: FloatArray,
    rates: FloatArray,
    transition: FloatArray,
    precision: FloatArray,
    inverse_density: FloatArray,
    start: int,
    expected: bool,
    places: IntArray,
    diagonal: FloatArray,
    lower: FloatArray,
    gradient: FloatArray,
    size: IntArray,
    letters: ByteArray,
    numbers: FloatArray,
) -> float:
    """Add the motion prior of a segment to the blocks of a span; give its cost of the steps into the span.

    Parameters
    ----------
    poses : shape (F, 4, 4), lab ← bone, of the segment, from one frame before the span to one after
    rates : shape (F, order − 1, 6)
    transition : shape (order, order), Φ
    precision : shape (order, order), inverse of Q for unit density
    inverse_density : shape (6,)
    start : the span's first frame among the F
    expected : for the expected information: innovations turn with the bone's axes, and taken as they are
        would count as knowledge of how these lie in the markers
    places : shape (order,), where the segment's pose and rates begin among a frame's unknowns
    diagonal, lower : shape (f, p, p), added to
    gradient : shape (f, p), added to
    size : 6·order and twice that, for BLAS
    letters, numbers : LETTERS, NUMBERS
    """
    frames, order = poses.shape[0], transition.shape[0]
    stop, states = start + gradient.shape[0], 6 * order
    letter, number, integer = letters.ctypes.data, numbers.ctypes.data, size.ctypes.data
    tangent, work = np.empty(6), np.empty((9, 3, 3))
    left, right = np.zeros((6, 6)), np.zeros((6, 6))
    residual, pull = np.empty(states), np.empty(states)
    rows, weighed = np.zeros((states, 2 * states)), np.empty((states, 2 * states))
    whole, pulled = np.empty((2 * states, 2 * states)), np.empty(2 * states)
    cost = 0.0
    for frame in range(frames - 1):
        step_jacobians(poses[frame], poses[frame + 1], tangent, left, right, work)
        _derivatives(tangent, left, right, rates[frame + 1], transition, rows)
        for i in range(6):
            residual[i] = tangent[i]
            for k in range(1, order):
                residual[6 * k + i] = 0.0
                for j in range(6):
                    residual[6 * k + i] += right[i, j] * rates[frame + 1, k - 1, j]
            for k in range(order):
                for m in range(1, order):
                    residual[6 * k + i] -= transition[k, m] * rates[frame, m - 1, i]
        if expected:
            for k in range(order):
                _turn(residual[6 * k : 6 * k + 6], -1.0, rows[6 * k : 6 * k + 6], states)
        for k in range(order):
            for i in range(6):
                row = 6 * k + i
                pull[row] = 0.0
                for j in range(2 * states):
                    weighed[row, j] = 0.0
                for m in range(order):
                    factor = precision[k, m] * inverse_density[i]
                    pull[row] += factor * residual[6 * m + i]
                    for j in range(2 * states):
                        weighed[row, j] += factor * rows[6 * m + i, j]
        _product(
            *(letter + _PLAIN, letter + _TURNED, integer + _BYTES, integer + _BYTES, integer),
            *(number + _PLUS, weighed.ctypes.data, integer + _BYTES, rows.ctypes.data, integer + _BYTES),
            *(number + _ZERO, whole.ctypes.data, integer + _BYTES),
        )
        for j in range(2 * states):
            pulled[j] = 0.0
        for i in range(states):
            for j in range(2 * states):
                pulled[j] += rows[i, j] * pull[i]
        if frame + 1 < stop:
            later = frame + 1 - start
            for i in range(states):
                cost += 0.5 * residual[i] * pull[i]
            _scatter(whole[:states, :states], places, diagonal[later])
            for i in range(states):
                gradient[later, places[i // 6] + i % 6] += pulled[i]
        if frame >= start:
            now = frame - start
            _scatter(whole[states:, states:], places, diagonal[now])
            _scatter(whole[:states, states:], places, lower[now])
            for i in range(states):
                gradient[now, places[i // 6] + i % 6] += pulled[states + i]
    return cost
