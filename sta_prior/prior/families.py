"""The families of priors by name: built in, or installed plug-ins.

Conventions: docs/conventions.md.
"""

from __future__ import annotations

from importlib.metadata import entry_points
from typing import cast

from sta_prior.checks import nearest
from sta_prior.errors import InputError, message
from sta_prior.prior.family import Family
from sta_prior.prior.feature_model import LINEAR, REDUCED_RANK
from sta_prior.prior.other_models import EXACT, MAGNITUDE

GROUP = "sta_prior.priors"
BUILT_IN: dict[str, Family] = {family.name: family for family in (REDUCED_RANK, LINEAR, EXACT, MAGNITUDE)}
DEFAULT_FAMILY = REDUCED_RANK.name


def known_families() -> list[str]:
    """Names of all families, built in first."""
    plugins = [point.name for point in entry_points(group=GROUP)]
    return [*BUILT_IN, *(name for name in plugins if name not in BUILT_IN)]


def find_family(name: str, place: str = "--family") -> Family:
    """Return a family by name; InputError with the nearest known name otherwise."""
    if name in BUILT_IN:
        return BUILT_IN[name]
    for point in entry_points(group=GROUP):
        if point.name == name:
            try:
                return cast(Family, point.load())
            except (ImportError, AttributeError) as error:
                raise InputError(
                    message(place, f"plug-in {name} cannot be loaded ({error})", "Install it again.")
                ) from error
    names = known_families()
    raise InputError(
        message(place, f"no family {name} here, known: {', '.join(names)}", nearest(name, names))
    )
