"""Made points and poses, and the message of a refusal, shared by the tests of writing C3D files."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr
from scipy.spatial.transform import Rotation

from sta_prior.errors import InputError
from sta_prior.io.points import Event, points_dataset


def made_points(
    frames: int = 5, labels: int = 3, seed: int = 3, events: tuple[Event, ...] = ()
) -> xr.Dataset:
    rng = np.random.default_rng(seed)
    position = rng.uniform(-2, 2, (frames, labels, 3))
    residual = rng.uniform(0.0002, 0.003, (frames, labels))
    position[1, 0] = residual[1, 0] = np.nan
    residual[2, -1] = 0.0
    return points_dataset(
        position,
        residual,
        np.arange(frames) / 100,
        [f"P{number}" for number in range(labels)],
        rate=100.0,
        source="made",
        units_declared="m",
        events=events,
    )


def made_poses(count: int, segments: int, seed: int = 4) -> np.ndarray:
    rng = np.random.default_rng(seed)
    poses = np.tile(np.eye(4), (count, segments, 1, 1))
    poses[..., :3, :3] = Rotation.random(count * segments, rng=rng).as_matrix().reshape(count, segments, 3, 3)
    poses[..., :3, 3] = rng.uniform(-2, 2, (count, segments, 3))
    return poses


def refusal(function: object, *arguments: object, kind: type[Exception] = InputError, **named: object) -> str:
    assert callable(function)
    with pytest.raises(kind) as caught:
        function(*arguments, **named)
    assert "\n" not in str(caught.value)
    return str(caught.value)
