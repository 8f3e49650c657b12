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

_REQUIRED: Any = object()
_KINDS = {
    bool: "true or false",
    int: "a whole number",
    float: "a number",
    str: "a text",
    list: "a list",
    dict: "a table",
}


def _kind(value: object) -> str:
    """Return how messages call a value's type."""
    return _KINDS.get(type(value), "a date or time")


@dataclass(frozen=True)
class Table(Mapping[str, Any]):
    """A TOML table that knows its file and its dotted place.

    Parameters
    ----------
    values : the table's content
    path : the file
    dotted : place of the table in the file; empty for the whole file
    """

    values_: Mapping[str, Any] = field(repr=False)
    path: Path
    dotted: str = ""

    def __getitem__(self, key: str) -> Any:
        return self.values_[key]

    def __iter__(self) -> Iterator[str]:
        return iter(self.values_)

    def __len__(self) -> int:
        return len(self.values_)

    def place(self, key: str = "") -> tuple[object, ...]:
        """Return file and dotted place of a key (or of the table itself), for messages."""
        dotted = ".".join(part for part in (self.dotted, key) if part)
        return (self.path, dotted) if dotted else (self.path,)

    def _wrong_type(self, key: str, expected: str, value: object) -> InputError:
        shown = f"{_kind(value)} ({value!r})" if isinstance(value, bool | int | float | str) else _kind(value)
        return InputError(message(self.place(key), f"expected {expected}, got {shown}", "Correct the value."))

    def _value(self, key: str, default: Any, expected: str) -> Any:
        if key in self.values_:
            return self.values_[key]
        if default is _REQUIRED:
            close = nearest(key, self.values_)
            raise InputError(
                message(self.place(key), f"missing, expected {expected}", close or f"Add {key} = ….")
            )
        return default

    def text(self, key: str, default: str | None = _REQUIRED) -> Any:
        """Return a text that is not blank; the default, where given, if the key is absent."""
        value = self._value(key, default, "a text")
        if key in self.values_ and (not isinstance(value, str) or not value.strip()):
            raise self._wrong_type(key, "a text that is not blank", value)
        return value

    def number(
        self,
        key: str,
        default: float | None = _REQUIRED,
        *,
        minimum: float = -math.inf,
        maximum: float = math.inf,
    ) -> Any:
        """Return a finite number within the limits, as float; the default if the key is absent."""
        value = self._value(key, default, "a number")
        if key not in self.values_:
            return value
        if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
            raise self._wrong_type(key, "a finite number", value)
        if not minimum <= value <= maximum:
            limits = f"at least {minimum:g}" if maximum == math.inf else f"{minimum:g} … {maximum:g}"
            limits = f"at most {maximum:g}" if minimum == -math.inf else limits
            raise InputError(
                message(self.place(key), f"expected {limits}, got {value:g}", "Correct the value.")
            )
        return float(value)

    def flag(self, key: str, default: bool | None = _REQUIRED) -> Any:
        """Return true or false; the default if the key is absent."""
        value = self._value(key, default, "true or false")
        if key in self.values_ and not isinstance(value, bool):
            raise self._wrong_type(key, "true or false", value)
        return value

    def texts(self, key: str, default: Iterable[str] | None = _REQUIRED) -> Any:
        """Return a list of texts, none of them blank; the default if the key is absent."""
        value = self._value(key, default, "a list of texts")
        if key not in self.values_:
            return value if value is None else list(value)
        if not isinstance(value, list):
            raise self._wrong_type(key, "a list of texts", value)
        for number, item in enumerate(value, start=1):
            if not isinstance(item, str) or not item.strip():
                raise self._wrong_type(f"{key}[{number}]", "a text that is not blank", item)
        return list(value)

    def numbers(self, key: str, default: Iterable[float] | None = _REQUIRED) -> Any:
        """Return a list of finite numbers, as floats; the default if the key is absent."""
        value = self._value(key, default, "a list of numbers")
        if key not in self.values_:
            return value if value is None else list(value)
        if not isinstance(value, list):
            raise self._wrong_type(key, "a list of numbers", value)
        for number, item in enumerate(value, start=1):
            if isinstance(item, bool) or not isinstance(item, int | float) or not math.isfinite(item):
                raise self._wrong_type(f"{key}[{number}]", "a finite number", item)
        return [float(item) for item in value]

    def choice(self, key: str, allowed: Iterable[str], default: str | None = _REQUIRED) -> Any:
        """Return a text that is one of the allowed; the default if the key is absent."""
        allowed = list(allowed)
        value = self._value(key, default, f"one of {', '.join(allowed)}")
        if key not in self.values_:
            return value
        if not isinstance(value, str):
            raise self._wrong_type(key, f"one of {', '.join(allowed)}", value)
        if value not in allowed:
            raise InputError(
                message(
                    self.place(key),
                    f"expected one of {', '.join(allowed)}, got {value!r}",
                    nearest(value, allowed) or "Choose one of them.",
                )
            )
        return value

    def table(self, key: str, default: Mapping[str, Any] | None = _REQUIRED) -> Table:
        """Return a table; the default, where given, as a table if the key is absent."""
        value = self._value(key, default, "a table")
        if not isinstance(value, Mapping):
            raise self._wrong_type(key, "a table", value)
        return Table(value, self.path, str(self.place(key)[1]))

    def tables(self, key: str, default: Iterable[Mapping[str, Any]] | None = _REQUIRED) -> list[Table]:
        """Return an array of tables; its members are numbered from 1 in messages."""
        value = self._value(key, default, "an array of tables")
        if not isinstance(value, list | tuple) or not all(isinstance(item, Mapping) for item in value):
            raise self._wrong_type(key, f"an array of tables ([[{key}]])", value)
        dotted = str(self.place(key)[1])
        return [Table(item, self.path, f"{dotted}[{number}]") for number, item in enumerate(value, start=1)]

    def refuse_unknown(self, allowed: Iterable[str]) -> None:
        """Raise InputError for the first key that is not allowed, with the nearest right one."""
        allowed = list(allowed)
        for key in self.values_:
            if key not in allowed:
                do = nearest(key, allowed) or f"Known keys: {', '.join(allowed)}."
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
        what = str(error)
        wrong, _, where = what.partition(" (at ")
        where = where.rstrip(")") or "line 1"
        if where == "end of document":
            where = f"line {len(text.splitlines())}"
        raise InputError(
            message((path, where), f"not TOML: {wrong[0].lower()}{wrong[1:]}", "Correct the line.")
        ) from None
