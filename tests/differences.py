"""Central differences for the tests of Jacobians."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from sta_prior.checks import FloatArray

# The step that balances truncation against rounding, times the scale of the variable.
STEP = float(np.cbrt(np.finfo(np.float64).eps))


def central_difference(
    function: Callable[[FloatArray], FloatArray], size: int, scale: float = 1.0
) -> FloatArray:
    """Derivative of function(δ) at δ = 0, δ of the given size; the new axis is the last."""
    step = STEP * scale
    columns = [(function(step * unit) - function(-step * unit)) / (2 * step) for unit in np.eye(size)]
    return np.stack(columns, axis=-1)
