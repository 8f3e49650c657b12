"""Where compiled kernels are kept between runs.

Kernels are compiled once and kept beside the package, or in the user's cache. Where neither can be written,
as in a shared read-only installation without a home, the compiler would refuse to start: a folder for
temporary files serves then.
"""

from __future__ import annotations

import os
import tempfile
from collections.abc import MutableMapping
from pathlib import Path

VARIABLE = "NUMBA_CACHE_DIR"


def keep_compiled(
    package: Path, home: Path, environment: MutableMapping[str, str], temporary: Path | None = None
) -> None:
    """Name a folder for compiled kernels where the usual ones cannot be written.

    Parameters
    ----------
    package : folder of the package
    home : the user's own folder
    environment : of this process; changed only where needed
    temporary : folder for temporary files, by default the system's
    """
    if VARIABLE in environment or _writable(package) or _writable(home):
        return
    user = os.getuid() if hasattr(os, "getuid") else 0
    environment[VARIABLE] = str((temporary or Path(tempfile.gettempdir())) / f"sta_prior-{user}")


def _writable(folder: Path) -> bool:
    return folder.is_dir() and os.access(folder, os.W_OK | os.X_OK)


# Read by the compiler when it is first imported, so this module comes before it (see __init__.py).
keep_compiled(Path(__file__).parent, Path(os.path.expanduser("~")), os.environ)
