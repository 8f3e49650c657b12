"""What every family of priors must keep, as checks that run on a learned prior.

Shell over arrays. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from collections.abc import Callable

import xarray as xr

from sta_prior.prior.base import Prior
from sta_prior.testing import binding, learned, moments
from sta_prior.testing.case import Case, make_case

CHECKS: dict[str, Callable[[Case], bool]] = {
    "shapes": moments.check_shapes,
    "frames alone": moments.check_frames_alone,
    "derivative": moments.check_derivative,
    "covariance": moments.check_covariance,
    "beyond the data": moments.check_beyond,
    "reference posture": moments.check_reference,
    "markers": binding.check_markers,
    "side": binding.check_side,
    "joints": binding.check_joints,
    "inflation": moments.check_inflation,
    "file": learned.check_file,
    "own subject": learned.check_own_subject,
    "learning again": learned.check_learning_again,
    "few subjects": learned.check_few_subjects,
}


def check_prior(prior: Prior, pairs: xr.Dataset | None = None) -> tuple[str, ...]:
    """Run the battery that every family of priors must pass.

    Parameters
    ----------
    prior : learned by the family under test
    pairs : the paired data it learned from, such as example_pairs(); without them the angles are a plain bend
        and nothing is learned again

    Returns
    -------
    Names of the checks that were made. "own subject" needs a family that knows subjects; "beyond the data",
    "learning again" and "few subjects" need pairs, the last of six subjects or more.

    Raises
    ------
    FailedCheckError : an AssertionError that says which check failed and how; the first one only.
    """
    case = make_case(prior, pairs)
    return tuple(name for name, check in CHECKS.items() if check(case))
