"""CSV tables: whatever is written is read again (property tests)."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy.spatial.transform import Rotation

from sta_prior.io.points import points_dataset
from sta_prior.io.rotations import poses_dataset
from sta_prior.io.text import (
    read_bone_table,
    read_points_csv,
    read_reference_points,
    write_bone_table,
    write_points_csv,
    write_reference_points,
)

LABELS = st.lists(
    st.text(st.characters(blacklist_categories=["Cs", "Cc", "Zl", "Zp", "Zs"]), min_size=1, max_size=6),
    min_size=1,
    max_size=4,
    unique=True,
)
QUICK = settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])


@QUICK
@given(data=st.data(), labels=LABELS, unit=st.sampled_from(["mm", "cm", "m"]))
def test_points_survive_a_round_trip(
    tmp_path: Path, data: st.DataObject, labels: list[str], unit: str
) -> None:
    frames = data.draw(st.integers(1, 5))
    position = data.draw(arrays(float, (frames, len(labels), 3), elements=st.floats(-40, 40)))
    position[data.draw(arrays(bool, position.shape[:2]))] = np.nan
    position[0, 0] = (-1.0, 0.0, 1.0)
    position[-1, -1] = (1.0, 0.0, 1.0) if position[1:].size or len(labels) > 1 else (-1.0, 0.0, 1.0)
    if len(labels) == frames == 1:
        labels, position = [*labels, labels[0] + "B"], np.array([[[-1.0, 0.0, 1.0], [1.0, 0.5, 0.0]]])
    time = np.cumsum(data.draw(arrays(float, frames, elements=st.floats(1e-4, 1e3))))
    points = points_dataset(
        position, np.full(position.shape[:2], np.nan), time, labels,
        rate=1.0, source="table.csv", units_declared=unit,
    )  # fmt: skip
    path = tmp_path / "table.csv"
    write_points_csv(path, points, unit)
    back = read_points_csv(path)
    assert back["point"].to_numpy().tolist() == labels
    assert np.array_equal(back["time"], time)
    np.testing.assert_allclose(back["position"], position, rtol=1e-14, atol=0)


@QUICK
@given(seed=st.integers(0, 2**32 - 1), frames=st.integers(1, 6), unit=st.sampled_from(["mm", "m"]))
def test_bone_poses_survive_a_round_trip(tmp_path: Path, seed: int, frames: int, unit: str) -> None:
    rng = np.random.default_rng(seed)
    rotation = Rotation.random(frames * 2, rng=rng).as_matrix().reshape(frames, 2, 3, 3)
    position = rng.uniform(-2, 2, (frames, 2, 3))
    hidden = rng.random((frames, 2)) < 0.4
    hidden[0, 0] = False
    rotation[hidden], position[hidden] = np.nan, np.nan
    time = np.cumsum(rng.uniform(0.001, 0.1, frames))
    poses = poses_dataset(rotation, position, time, ["thigh", "shank_1"], {})
    path = tmp_path / "bones.csv"
    write_bone_table(path, poses, unit)
    back = read_bone_table(path)
    np.testing.assert_allclose(back["rotation"], rotation, rtol=0, atol=1e-14)
    np.testing.assert_allclose(back["position"], position, rtol=1e-14)
    assert np.array_equal(back["time"], time)
    assert back["segment"].to_numpy().tolist() == ["thigh", "shank_1"]


@QUICK
@given(
    points=st.dictionaries(
        st.tuples(st.sampled_from(["thigh", "shank"]), st.sampled_from(["TA", "T B", "K,C", 'q"'])),
        arrays(float, 3, elements=st.floats(-0.5, 0.5)),
        min_size=1,
        max_size=2,
    )
)
def test_reference_points_survive_a_round_trip(
    tmp_path: Path, points: dict[tuple[str, str], np.ndarray]
) -> None:
    path = tmp_path / "reference.csv"
    write_reference_points(path, points)
    back = read_reference_points(path)
    assert list(back) == list(points)
    for key, value in points.items():
        np.testing.assert_allclose(back[key], value, rtol=1e-14)
