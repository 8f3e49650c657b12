"""Exceptions and warnings of the package, and the one form their messages take.

Form: ``place: what is wrong, expected …, got …. What to do.`` The place goes
file, segment or marker, column, frame. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from pathlib import Path


class StaPriorError(Exception):
    """Root of every error that the package raises on purpose."""


class InputError(StaPriorError):
    """The content of a file or an argument cannot be used."""


class ShapeError(StaPriorError, ValueError):
    """An array has other axes than the function needs."""


class RotationError(StaPriorError, ValueError):
    """A matrix that should be a rotation is not one."""


class CovarianceError(StaPriorError, ValueError):
    """A matrix that should be a covariance is not one."""


class MismatchError(StaPriorError):
    """A prior and a trial, or two files, do not fit together."""


class NotDeterminedError(StaPriorError):
    """The data does not determine what was asked for."""


class NotConvergedError(StaPriorError):
    """An iteration ended without reaching its tolerance."""


class StaPriorWarning(UserWarning):
    """Something the user should know; the result stands."""


def message(place: str | Path | tuple[object, ...], wrong: str, do: str = "") -> str:
    """Build a message in the package's form.

    Parameters
    ----------
    place : where it is; a tuple is joined with commas (file, marker, frames 3–9)
    wrong : what is wrong, with expected and got
    do : what the user can do about it

    Returns
    -------
    One line of text.

    Examples
    --------
    >>> message(("lab.toml", "segment.thigh"), "no markers", "List at least three.")
    'lab.toml, segment.thigh: no markers. List at least three.'
    """
    parts = place if isinstance(place, tuple) else (place,)
    where = ", ".join(str(part) for part in parts if part is not None and str(part))
    text = f"{where}: {wrong.rstrip('.')}." if where else f"{wrong.rstrip('.')}."
    return f"{text} {do}".rstrip()
