"""What a command prints and where, and what it refuses before any work is done.

Conventions: docs/conventions.md.
"""

from __future__ import annotations

import json
import math
import os
import sys
import warnings
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

from sta_prior.errors import InputError, StaPriorWarning, message


class Screen:
    """What a command prints, and where: text to stdout, or JSON alone there and all else to stderr."""

    def __init__(self, quiet: bool, as_json: bool) -> None:
        self.quiet, self.as_json = quiet, as_json
        self.out = Console(stderr=as_json, highlight=False, soft_wrap=True)
        self.err = Console(stderr=True, highlight=False, soft_wrap=True)

    def say(self, *items: Any) -> None:
        """Print lines or tables unless quiet."""
        if not self.quiet:
            for item in items:
                self.out.print(item, markup=False)

    def note(self, text: str) -> None:
        """Print a line on stderr unless quiet."""
        if not self.quiet:
            self.err.print(text, markup=False)

    def finish(self, summary: dict[str, Any], *lines: Any) -> None:
        """End a command: the summary as JSON where asked for, the lines otherwise."""
        if self.as_json:
            text = json.dumps(_without_nan(summary), ensure_ascii=False, indent=1, allow_nan=False)
            sys.stdout.write(text + "\n")
        else:
            self.say(*lines)

    @contextmanager
    def bar(self, total: int, what: str) -> Iterator[Callable[[], None]]:
        """Progress bar on stderr; advances at each call."""
        if self.quiet or self.as_json or not self.err.is_terminal:
            yield lambda: None
            return
        columns = (TextColumn(what), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
        with Progress(*columns, console=self.err, transient=True) as progress:
            task = progress.add_task(what, total=total)
            yield lambda: progress.advance(task)


def _without_nan(value: Any) -> Any:
    """Plain data with null where a number is not known: JSON has no NaN."""
    if isinstance(value, dict):
        return {key: _without_nan(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_without_nan(item) for item in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value


def check_target(target: Path, *inputs: Path | None) -> None:
    """Refuse a file that cannot be written, or that is an input, before the work is done."""
    folder = target.absolute().parent
    if target.is_dir():
        raise InputError(message(target, "a folder, expected a file name", "Name the file itself."))
    if not folder.is_dir():
        raise InputError(message(target, f"no folder {folder}", "Make it first, or choose another --out."))
    if any(target.resolve() == path.resolve() for path in inputs if path is not None):
        wrong = "both an input and the file to write"
        raise InputError(message(target, wrong, "Choose another --out."))
    if not os.access(folder, os.W_OK | os.X_OK):
        raise InputError(message(target, "nothing can be written in its folder", "Choose another --out."))


@contextmanager
def warnings_as_notes(screen: Screen) -> Iterator[None]:
    """Show the package's warnings as plain lines, each once."""
    shown: set[str] = set()

    def show(text: Warning | str, category: type[Warning], *_: Any, **__: Any) -> None:
        if issubclass(category, StaPriorWarning) and str(text) not in shown:
            shown.add(str(text))
            screen.note(f"Note. {text}")

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        warnings.simplefilter("always", StaPriorWarning)
        warnings.showwarning = show  # type: ignore[assignment]
        yield
