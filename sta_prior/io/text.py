"""CSV tables and TOML files: the text readers and writers in one place.

Conventions: docs/conventions.md.
"""

from __future__ import annotations

from sta_prior.io.tables import (
    read_bone_table,
    read_points_csv,
    read_reference_points,
    write_bone_table,
    write_points_csv,
    write_reference_points,
)
from sta_prior.io.toml import Table, read_toml

__all__ = [
    "Table",
    "read_bone_table",
    "read_points_csv",
    "read_reference_points",
    "read_toml",
    "write_bone_table",
    "write_points_csv",
    "write_reference_points",
]
