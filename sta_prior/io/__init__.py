"""Files in and out: C3D, CSV, TOML and NetCDF, as plain Datasets in SI units.

This layer knows no trial and no study. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from sta_prior.io.c3d import copy_with_rotations, read_c3d, read_c3d_rotations, write_c3d
from sta_prior.io.files import atomic_path, file_digest, read_points
from sta_prior.io.netcdf import (
    dataset_digest,
    read_dataset,
    read_points_netcdf,
    write_dataset,
    write_points_netcdf,
)
from sta_prior.io.points import Event, points_dataset, read_events
from sta_prior.io.text import (
    Table,
    read_bone_table,
    read_points_csv,
    read_reference_points,
    read_toml,
    write_bone_table,
    write_points_csv,
    write_reference_points,
)

__all__ = [
    "Event",
    "Table",
    "atomic_path",
    "copy_with_rotations",
    "dataset_digest",
    "file_digest",
    "points_dataset",
    "read_bone_table",
    "read_c3d",
    "read_c3d_rotations",
    "read_dataset",
    "read_events",
    "read_points",
    "read_points_csv",
    "read_points_netcdf",
    "read_reference_points",
    "read_toml",
    "write_bone_table",
    "write_c3d",
    "write_dataset",
    "write_points_csv",
    "write_points_netcdf",
    "write_reference_points",
]
