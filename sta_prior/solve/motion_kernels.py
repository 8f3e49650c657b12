"""The motion prior's share of a span, compiled; see solve/motion.py for the model.

Kernel: arrays in, arrays out. The derivatives of one step are 6×6 blocks, and its precision is a Kronecker
product of a small matrix over the derivatives of the state with a diagonal one over the components.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from sta_prior.checks import FloatArray
from sta_prior.se3 import jacobians

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
    """Rotation vector of a rotation, by the quaternion's largest component (Shepperd 1978, from memory)."""
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
def _add_product(left: FloatArray, right: FloatArray, block: FloatArray) -> None:
    """Add leftᵀ·right, 6×6."""
    for i in range(6):
        for j in range(6):
            block[i, j] += (
                left[0, i] * right[0, j]
                + left[1, i] * right[1, j]
                + left[2, i] * right[2, j]
                + left[3, i] * right[3, j]
                + left[4, i] * right[4, j]
                + left[5, i] * right[5, j]
            )


@njit(cache=True, nogil=True, error_model="numpy")
def _through_rates(rates: FloatArray, jacobian: FloatArray, columns: FloatArray, sign: float) -> None:
    """Derivative of the innovations in a pose, (order, 6, 6), from that of ξ, sign · J.

    J_r(ξ)⁻¹ ≈ 1 + ad(ξ)/2 where it acts on the rates: over one step the rest is below rounding of what moves.
    """
    for i in range(6):
        for j in range(6):
            columns[0, i, j] = sign * jacobian[i, j]
    for k in range(rates.shape[0]):
        # −½ ad(ϖ) J, ad(ϖ) = [[ω×, 0], [v×, ω×]].
        for i in range(3):
            after, before = (i + 1) % 3, (i + 2) % 3
            for j in range(6):
                columns[k + 1, i, j] = (-0.5 * sign) * (
                    rates[k, after] * jacobian[before, j] - rates[k, before] * jacobian[after, j]
                )
                columns[k + 1, 3 + i, j] = (-0.5 * sign) * (
                    rates[k, after] * jacobian[3 + before, j]
                    - rates[k, before] * jacobian[3 + after, j]
                    + rates[k, 3 + after] * jacobian[before, j]
                    - rates[k, 3 + before] * jacobian[after, j]
                )


@njit(cache=True, nogil=True, error_model="numpy")
def _weigh(
    columns: FloatArray, precision: FloatArray, inverse_density: FloatArray, weighed: FloatArray
) -> None:
    """Apply precision ⊗ diag(inverse density) to (order, 6, w)."""
    order, _, width = columns.shape
    for k in range(order):
        for i in range(6):
            for j in range(width):
                total = 0.0
                for m in range(order):
                    total += precision[k, m] * columns[m, i, j]
                weighed[k, i, j] = inverse_density[i] * total


@njit(cache=True, nogil=True, error_model="numpy")
def add_motion(
    poses: FloatArray,
    rates: FloatArray,
    transition: FloatArray,
    precision: FloatArray,
    inverse_density: FloatArray,
    start: int,
    place: int,
    rate_place: int,
    diagonal: FloatArray,
    lower: FloatArray,
    gradient: FloatArray,
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
    place, rate_place : columns of the segment's pose and rates
    diagonal, lower : shape (f, p, p), added to
    gradient : shape (f, p), added to
    """
    frames, order = poses.shape[0], transition.shape[0]
    stop = start + gradient.shape[0]
    tangent, work = np.empty(6), np.empty((9, 3, 3))
    left, right = np.zeros((6, 6)), np.zeros((6, 6))
    scaled, square, block = np.empty((6, 6)), np.empty((6, 6)), np.empty((6, 6))
    residual, pull = np.empty((order, 6, 1)), np.empty((order, 6, 1))
    after, weighed_after = np.empty((order, 6, 6)), np.empty((order, 6, 6))
    before, weighed_before = np.empty((order, 6, 6)), np.empty((order, 6, 6))
    carried = precision @ transition
    steady = transition.T @ carried
    cost = 0.0
    for frame in range(frames - 1):
        now, later = frame - start, frame + 1 - start
        step_jacobians(poses[frame], poses[frame + 1], tangent, left, right, work)
        for k in range(order):
            for i in range(6):
                total = 0.0
                if k == 0:
                    total = tangent[i]
                else:
                    for j in range(6):
                        total += right[i, j] * rates[frame + 1, k - 1, j]
                for m in range(1, order):
                    total -= transition[k, m] * rates[frame, m - 1, i]
                residual[k, i, 0] = total
        _weigh(residual, precision, inverse_density, pull)
        _through_rates(rates[frame + 1], right, after, 1.0)
        _weigh(after, precision, inverse_density, weighed_after)
        for i in range(6):
            for j in range(6):
                scaled[i, j] = inverse_density[i] * right[i, j]
        if frame + 1 < stop:
            for k in range(order):
                for i in range(6):
                    cost += 0.5 * residual[k, i, 0] * pull[k, i, 0]
            into = diagonal[later]
            square[:] = 0.0
            _add_product(right, scaled, square)
            for k in range(order):
                _add_product(after[k], weighed_after[k], into[place : place + 6, place : place + 6])
                if k == 0:
                    continue
                row = rate_place + 6 * (k - 1)
                block[:] = 0.0
                _add_product(weighed_after[k], right, block)
                for i in range(6):
                    for j in range(6):
                        into[place + i, row + j] += block[i, j]
                        into[row + j, place + i] += block[i, j]
                for m in range(1, order):
                    column = rate_place + 6 * (m - 1)
                    for i in range(6):
                        for j in range(6):
                            into[row + i, column + j] += precision[k, m] * square[i, j]
            for k in range(order):
                for i in range(6):
                    for j in range(6):
                        gradient[later, place + j] += after[k, i, j] * pull[k, i, 0]
                        if k > 0:
                            gradient[later, rate_place + 6 * (k - 1) + j] += right[i, j] * pull[k, i, 0]
        if frame < start:
            continue
        _through_rates(rates[frame + 1], left, before, -1.0)
        _weigh(before, precision, inverse_density, weighed_before)
        own, link = diagonal[now], lower[now]
        for k in range(order):
            _add_product(before[k], weighed_before[k], own[place : place + 6, place : place + 6])
            _add_product(after[k], weighed_before[k], link[place : place + 6, place : place + 6])
            for i in range(6):
                for j in range(6):
                    gradient[now, place + j] += before[k, i, j] * pull[k, i, 0]
            if k == 0:
                continue
            row = rate_place + 6 * (k - 1)
            _add_product(right, weighed_before[k], link[row : row + 6, place : place + 6])
            for i in range(6):
                for m in range(order):
                    gradient[now, row + i] -= transition[m, k] * pull[m, i, 0]
                    for j in range(6):
                        own[place + j, row + i] -= transition[m, k] * weighed_before[m, i, j]
                        own[row + i, place + j] -= transition[m, k] * weighed_before[m, i, j]
                        link[place + j, row + i] -= transition[m, k] * weighed_after[m, i, j]
                for m in range(1, order):
                    column = rate_place + 6 * (m - 1)
                    own[row + i, column + i] += steady[k, m] * inverse_density[i]
                    for j in range(6):
                        link[row + j, column + i] -= carried[k, m] * scaled[i, j]
    return cost
