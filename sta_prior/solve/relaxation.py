"""How far to go along the next step of an iteration that swings or crawls.

Kernel: arrays in, arrays out. Conventions: docs/conventions.md.
"""

from __future__ import annotations

import numpy as np

from sta_prior.checks import FloatArray

LIMITS = (0.1, 20.0)


def relaxation(made: FloatArray, change: FloatArray) -> FloatArray:
    """Factor on the next step of each frame, from the last one: Aitken's, for vectors.

    Parameters
    ----------
    made : shape (F, n), last move; NaN before the first
    change : shape (F, n), by how much the move shrank the full step

    Returns
    -------
    shape (F,): below 1 where steps swing, above 1 where they crawl, 1 where nothing can be said:
    at first, and where the step grows, on the way out of a point that does not hold.

    References
    ----------
    Irons & Tuck (1969), Int J Numer Methods Eng 1, 275–277 (from memory).
    """
    squared = np.einsum("fn,fn->f", change, change)
    shrinking = np.einsum("fn,fn->f", made, change)
    known = np.isfinite(shrinking) & (shrinking > 0.0)
    factor = np.where(known, shrinking, 1.0) / np.where(known, squared, 1.0)
    return np.clip(factor, *LIMITS)
