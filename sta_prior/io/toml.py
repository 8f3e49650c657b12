"""TOML files whose every value knows its place, for messages.

Conventions: docs/conventions.md.
"""

from __future__ import annotations

import math
import tomllib
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from sta_prior.checks import nearest
from sta_prior.errors import InputError, message
from sta_prior.io.files import read_text


class _Required:
    """Stands where no default is given."""


_REQUIRED = _Required()
_KINDS = {
    bool: "true or false",
    int: "a whole number",
    float: "a number",
    str: "a text",
    list: "a list",
    dict: "a table",
}


def _is_text(value: object) -> bool:
    return isinstance(value, str) and bool(value.strip())


def _is_number(value: object) -> bool:
    """Return whether a value is a number that a float can hold."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        return False
    try:
        return math.isfinite(float(value))
    except OverflowError:
        return False


def _shown(value: object) -> str:
    """Return a value as messages show it: what it is and, if short, itself."""
    kind = _KINDS.get(type(value), "a date or time")
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str | int | float):
        text = repr(value)
        return f"{kind}, {text if len(text) <= 40 else text[:37] + '…'}"
    return kind


@dataclass(frozen=True)
class Table(Mapping[str, Any]):
    """A TOML table that knows its file and its dotted place.

    Parameters
    ----------
    content : keys and values
    path : the file
    dotted : place of the table in the file, as in segment.thigh or subject[1].trial[2]; empty for the file

    Notes
    -----
    It is a mapping; the getters below also check the type and name the place where it is wrong. Each raises
    InputError for a missing key unless a default (of any type) is given, and for a value of another type.
    """

    content: Mapping[str, Any] = field(repr=False)
    path: Path
    dotted: str = ""

    def __getitem__(self, key: str) -> Any:
        return self.content[key]

    def __iter__(self) -> Iterator[str]:
        return iter(self.content)

    def __len__(self) -> int:
        return len(self.content)

    def place(self, key: str = "") -> tuple[object, ...]:
        """Return file and dotted place of a key, or of the table itself, for messages."""
        dotted = self._dotted(key)
        return (self.path, dotted) if dotted else (self.path,)

    def _dotted(self, key: str) -> str:
        return ".".join(part for part in (self.dotted, key) if part)

    def _wrong(self, key: str, expected: str, value: object) -> InputError:
        wrong = f"expected {expected}, got {_shown(value)}"
        return InputError(message(self.place(key), wrong, "Correct the value."))

    def _missing(self, key: str, expected: str) -> InputError:
        do = nearest(key, self.content) or f"Add {key} = …."
        return InputError(message(self.place(key), f"missing, expected {expected}", do))

    def _get(self, key: str, default: object, expected: str) -> tuple[bool, Any]:
        """Return whether the key is there, and its value or else the default."""
        if key in self.content:
            return True, self.content[key]
        if isinstance(default, _Required):
            raise self._missing(key, expected)
        return False, default

    def text(self, key: str, default: object = _REQUIRED) -> Any:
        """Return a text that is not blank, or the default."""
        expected = "a text that is not blank"
        found, value = self._get(key, default, expected)
        if found and not _is_text(value):
            raise self._wrong(key, expected, value)
        return value

    def number(
        self,
        key: str,
        default: object = _REQUIRED,
        *,
        minimum: float = -math.inf,
        maximum: float = math.inf,
    ) -> Any:
        """Return a finite number from minimum to maximum, as float, or the default."""
        found, value = self._get(key, default, "a number")
        if not found:
            return value
        if not _is_number(value):
            raise self._wrong(key, "a finite number", value)
        if not minimum <= value <= maximum:
            limits = [f"at least {minimum:g}"] if minimum > -math.inf else []
            limits += [f"at most {maximum:g}"] if maximum < math.inf else []
            wrong = f"expected {' and '.join(limits)}, got {value:g}"
            raise InputError(message(self.place(key), wrong, "Correct the value."))
        return float(value)

    def flag(self, key: str, default: object = _REQUIRED) -> Any:
        """Return true or false, or the default."""
        found, value = self._get(key, default, "true or false")
        if found and not isinstance(value, bool):
            raise self._wrong(key, "true or false", value)
        return value

    def choice(self, key: str, allowed: Iterable[str], default: object = _REQUIRED) -> Any:
        """Return a text that is one of the allowed, or the default."""
        allowed = list(allowed)
        expected = f"one of {', '.join(allowed)}"
        found, value = self._get(key, default, expected)
        if found and not isinstance(value, str):
            raise self._wrong(key, expected, value)
        if found and value not in allowed:
            wrong = f"expected {expected}, got {value!r}"
            raise InputError(
                message(self.place(key), wrong, nearest(value, allowed) or "Choose one of them.")
            )
        return value

    def texts(self, key: str, default: object = _REQUIRED) -> Any:
        """Return a list of texts, none of them blank, or the default."""
        found, value = self._get(key, default, "a list of texts")
        if not found:
            return value
        if not isinstance(value, list):
            raise self._wrong(key, "a list of texts", value)
        for number, item in enumerate(value, start=1):
            if not _is_text(item):
                raise self._wrong(f"{key}[{number}]", "a text that is not blank", item)
        return list(value)

    def numbers(self, key: str, default: object = _REQUIRED) -> Any:
        """Return a list of finite numbers, as floats, or the default."""
        found, value = self._get(key, default, "a list of numbers")
        if not found:
            return value
        if not isinstance(value, list):
            raise self._wrong(key, "a list of numbers", value)
        for number, item in enumerate(value, start=1):
            if not _is_number(item):
                raise self._wrong(f"{key}[{number}]", "a finite number", item)
        return [float(item) for item in value]

    def table(self, key: str, default: Mapping[str, Any] | _Required = _REQUIRED) -> Table:
        """Return a table that knows its place; the default too becomes one."""
        _, value = self._get(key, default, "a table")
        if not isinstance(value, Mapping):
            raise self._wrong(key, "a table", value)
        return Table(value, self.path, self._dotted(key))

    def tables(self, key: str, default: Iterable[Mapping[str, Any]] | _Required = _REQUIRED) -> list[Table]:
        """Return an array of tables that know their places, numbered from 1; the default too becomes one."""
        expected = f"an array of tables, [[{self._bare(key)}]]"
        found, value = self._get(key, default, expected)
        if found and not isinstance(value, list):
            raise self._wrong(key, expected, value)
        tables = list(value)
        if not all(isinstance(item, Mapping) for item in tables):
            raise self._wrong(key, expected, value)
        dotted = self._dotted(key)
        return [Table(item, self.path, f"{dotted}[{number}]") for number, item in enumerate(tables, start=1)]

    def _bare(self, key: str) -> str:
        """Return the dotted place as a TOML header writes it, without numbers."""
        parts = self._dotted(key).split(".")
        return ".".join(part.split("[")[0] for part in parts)

    def refuse_unknown(self, allowed: Iterable[str]) -> None:
        """Raise InputError for the first key that is not allowed, with the nearest right one."""
        allowed = list(allowed)
        for key in self.content:
            if key not in allowed:
                do = nearest(key, allowed) or f"Known here: {', '.join(allowed)}."
                raise InputError(message(self.place(key), f"unknown key {key!r}", do))


def read_toml(path: str | Path) -> Table:
    """Read a TOML file.

    Parameters
    ----------
    path : the file

    Returns
    -------
    Its content, as a table that knows its place.

    Raises
    ------
    InputError : missing, empty or not text; not TOML, with the line.
    """
    path = Path(path)
    text = read_text(path)
    try:
        return Table(tomllib.loads(text), path)
    except tomllib.TOMLDecodeError as error:
        wrong, _, where = str(error).partition(" (at ")
        where = where.rstrip(")")
        if not where.startswith("line"):
            where = f"line {len(text.splitlines())}"
        wrong = f"not TOML ({wrong[0].lower()}{wrong[1:]})"
        raise InputError(message((path, where), wrong, "Correct the line.")) from None
    except RecursionError:
        raise InputError(message(path, "not TOML (nested too deeply)", "Flatten it.")) from None
