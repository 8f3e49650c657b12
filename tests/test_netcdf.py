"""NetCDF files: units, kinds, digests, damaged and hostile files; reopened by plain xarray and h5py."""

from __future__ import annotations

import json
from pathlib import Path

import h5py
import numpy as np
import pytest
import xarray as xr
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import array_shapes, arrays
from made_c3d import cloud, make_c3d

from sta_prior.errors import InputError
from sta_prior.io import (
    dataset_digest,
    read_c3d,
    read_dataset,
    read_points_netcdf,
    write_dataset,
    write_points_netcdf,
)

AGAIN = " Copy it again or make it anew."


def made(frames: int = 50, seed: int = 0) -> xr.Dataset:
    rng = np.random.default_rng(seed)
    displacement = rng.normal(0, 0.01, (frames, 4, 3))
    displacement[3, 1] = np.nan
    return xr.Dataset(
        {
            "displacement": (
                ("frame", "marker", "axis"),
                displacement,
                {"units": "m", "long_name": "Artifact"},
            ),
            "pose_covariance": (("frame", "pose", "pose2"), np.zeros((frames, 6, 6)), {"units": "rad2, m2"}),
            "support_class": (
                ("frame",),
                np.arange(frames) % 3,
                {"units": "1", "flag_values": [0, 1, 2], "flag_meanings": "supported thin beyond"},
            ),
            "informed": (("frame",), np.arange(frames) % 2 == 0, {"units": "1"}),
            "lag": ((), 0.25, {"units": "s"}),
        },
        coords={
            "subject": ("frame", np.array(["P01", "P02"] * (frames // 2))),
            "time": ("frame", np.arange(frames) / 100, {"units": "s"}),
            "marker": ["TA", "TB", "TC", "TÄ"],
            "axis": ["x", "y", "z"],
        },
        attrs={"invented_data": 1, "suspects": ["TA", "TB"], "note": ""},
    )


def refusal(path: Path, kind: str = "pairs") -> str:
    """The message with which a file is refused, without the path; one line."""
    with pytest.raises(InputError) as caught:
        read_dataset(path, kind)  # type: ignore[arg-type]
    text = str(caught.value)
    assert "\n" not in text
    assert text.startswith(str(path))
    return text.removeprefix(str(path))


def test_what_was_written_is_read(tmp_path: Path) -> None:
    dataset = made()
    write_dataset(tmp_path / "a.nc", dataset, "pairs", {"skin.c3d": "0f"})
    back = read_dataset(tmp_path / "a.nc", "pairs")
    xr.testing.assert_equal(back, dataset)
    assert back["displacement"].attrs == {"units": "m", "long_name": "Artifact"}
    assert back["displacement"].dtype == np.float64
    assert back["informed"].dtype == np.bool_
    assert back["marker"].dtype.kind == "U"
    assert back.attrs["sta_prior_kind"] == "pairs"
    assert back.attrs["schema_version"] == 1
    assert back.attrs["created_by"].startswith("sta_prior ")
    assert json.loads(back.attrs["input_digests"]) == {"skin.c3d": "0f"}
    assert back.attrs["invented_data"] == 1
    assert list(back.attrs["suspects"]) == ["TA", "TB"]
    assert dataset_digest(back) == dataset_digest(dataset)
    (tmp_path / "a.nc").unlink()  # the file is closed, its content in memory
    assert float(back["lag"]) == 0.25


def test_a_file_opens_with_plain_xarray_and_h5py(tmp_path: Path) -> None:
    path = tmp_path / "a.nc"
    write_dataset(path, made(), "solution", {})
    with xr.open_dataset(path, engine="h5netcdf") as plain:
        assert {variable.attrs.get("units") is not None for variable in plain.variables.values()} == {True}
        np.testing.assert_array_equal(plain["displacement"], made()["displacement"])
        assert plain["subject"].to_numpy()[1] == "P02"
        assert "subject" in plain.coords
    with h5py.File(path, "r") as file:
        assert file["displacement"].compression == "gzip"
        assert file["displacement"].shape == (50, 4, 3)
        assert file["displacement"].attrs["units"] == "m"
        kinds = {name: item.dtype for name, item in file.items()}
    assert all(kind.kind != "O" or h5py.check_string_dtype(kind) for kind in kinds.values())


def test_writing_does_not_change_what_is_written(tmp_path: Path) -> None:
    dataset, untouched = made(), made()
    write_dataset(tmp_path / "a.nc", dataset, "pairs", {})
    assert dataset.identical(untouched)


def test_what_a_plain_reader_could_not_understand_is_not_written(tmp_path: Path) -> None:
    path = tmp_path / "a.nc"
    dataset = made()
    del dataset["lag"].attrs["units"]
    with pytest.raises(InputError) as caught:
        write_dataset(path, dataset, "pairs", {})
    assert str(caught.value) == (
        f"{path}, variable lag: no attribute units. Set it, '1' for what has no unit."
    )
    dataset["lag"] = ((), np.array({"a": 1}, dtype=object), {"units": "s"})
    with pytest.raises(InputError) as caught:
        write_dataset(path, dataset, "pairs", {})
    assert str(caught.value) == f"{path}, variable lag: type object, expected numbers or text. Convert it."
    assert list(tmp_path.iterdir()) == []


def test_a_failure_while_writing_leaves_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "a.nc"
    write_dataset(path, made(), "pairs", {"old": "1"})
    whole = xr.Dataset.to_netcdf

    def interrupted(self: xr.Dataset, target: Path, **named: object) -> None:
        whole(self, target, **named)  # type: ignore[call-overload]
        raise KeyboardInterrupt

    monkeypatch.setattr(xr.Dataset, "to_netcdf", interrupted)
    with pytest.raises(KeyboardInterrupt):
        write_dataset(path, made(seed=1), "pairs", {})
    assert [file.name for file in tmp_path.iterdir()] == ["a.nc"]
    assert read_dataset(path, "pairs").equals(made())


def test_foreign_kinds_and_versions_are_refused(tmp_path: Path) -> None:
    path = tmp_path / "a.nc"
    write_dataset(path, made(), "pairs", {})
    assert refusal(path, "prior") == ": expected a file of kind prior, got pairs. Name a prior file."
    for version, expected in (
        (7, ": schema version 7, this program reads up to 1. Update the program."),
        (0, ": schema version 0, expected 1 … 1." + AGAIN),
        ("new", ": schema version 'new', expected 1 … 1." + AGAIN),
    ):
        with h5py.File(path, "r+") as file:
            file.attrs["schema_version"] = version
        text = refusal(path)
        assert text.replace("np.int64(0)", "0") == expected
    with h5py.File(path, "r+") as file:
        del file.attrs["sta_prior_kind"]
    assert refusal(path) == ": no attribute sta_prior_kind. Name a file that this program wrote."


def test_empty_truncated_and_foreign_files_are_refused(tmp_path: Path) -> None:
    path = tmp_path / "a.nc"
    assert refusal(path) == ": no such file. Check the name and the folder."
    write_dataset(path, made(), "pairs", {})
    content = path.read_bytes()
    path.write_bytes(b"")
    assert refusal(path) == ": the file is empty. Export or copy it again."
    path.write_bytes(b"\x89PNG\r\n\x1a\n" + bytes(500))
    assert refusal(path) == ": not a NetCDF 4 file. Name a file that this program wrote."
    path.write_bytes(b"CDF\x01" + bytes(500))
    assert refusal(path) == ": not a NetCDF 4 file. Name a file that this program wrote."
    for size in np.linspace(9, len(content) - 1, 25).astype(int):
        path.write_bytes(content[:size])
        assert refusal(path).startswith(": damaged or truncated NetCDF (")


def test_damaged_bytes_end_in_a_dataset_or_in_one_line(tmp_path: Path) -> None:
    path = tmp_path / "a.nc"
    write_dataset(path, made(frames=4), "pairs", {})
    content, rng, refused = path.read_bytes(), np.random.default_rng(11), 0
    for _ in range(60):
        damaged = bytearray(content)
        for place in rng.integers(8, len(content), 40):
            damaged[place] = rng.integers(256)
        path.write_bytes(damaged)
        try:
            assert isinstance(read_dataset(path, "pairs"), xr.Dataset)
        except InputError as error:
            refused += "\n" not in str(error)
    assert refused > 10


def hostile(path: Path) -> h5py.File:
    write_dataset(path, made(), "pairs", {})
    return h5py.File(path, "r+")


def test_hostile_sizes_are_refused_before_loading(tmp_path: Path) -> None:
    path = tmp_path / "a.nc"
    with hostile(path) as file:
        file.create_dataset("wide", shape=(40_000, 40_000), dtype="f8", chunks=(100, 100)).attrs["units"] = (
            "m"
        )
    assert path.stat().st_size < 1e6
    assert refusal(path) == (
        ", variable wide: declared size with those before it 12.8 GB, expected at most 8.59 GB." + AGAIN
    )
    with hostile(path) as file:
        file.create_dataset("long", shape=(200_000_000,), dtype="i1", chunks=(1000,)).attrs["units"] = "1"
    assert refusal(path) == (", variable long: declared 200000000 long, expected at most 100000000." + AGAIN)


def test_what_reaches_beyond_the_file_or_needs_more_than_reading_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "a.nc"
    with hostile(path) as file:
        file["other"] = h5py.ExternalLink("/etc/hostname", "/")
    assert refusal(path) == ", variable other: a link, expected data in the file itself." + AGAIN
    with hostile(path) as file:
        file.create_dataset("raw", (4,), "f8", external=[(str(tmp_path / "raw.bin"), 0, 32)])
    assert refusal(path) == ", variable raw: data in another file, expected them here." + AGAIN
    with hostile(path) as file:
        file.create_group("inner")
    assert refusal(path) == ", variable inner: a group, expected a variable." + AGAIN
    with hostile(path) as file:
        file.create_dataset("lists", (2,), h5py.vlen_dtype(np.int32))
    assert refusal(path) == ", variable lists: type object, expected numbers or text." + AGAIN
    with hostile(path) as file:
        file.create_dataset("pairs", (2,), np.dtype([("a", "i4"), ("b", "f8")]))
    assert refusal(path) == (
        ", variable pairs: type [('a', '<i4'), ('b', '<f8')], expected numbers or text." + AGAIN
    )
    with hostile(path) as file:
        del file["lag"].attrs["units"]
    assert refusal(path) == (", variable lag: no attribute units. Set it, '1' for what has no unit.")


def test_points_survive_and_their_layout_is_checked(tmp_path: Path) -> None:
    points = read_c3d(make_c3d(tmp_path / "a.c3d", cloud()))
    path = tmp_path / "a.nc"
    write_points_netcdf(path, points)
    assert read_points_netcdf(path).identical(points)
    write_points_netcdf(path, points.transpose("axis", "point", "time"))
    assert read_points_netcdf(path).identical(points)
    in_mm = points.copy()
    in_mm["position"] = (points["position"] * 1000).assign_attrs(units="mm")
    late = points.assign_coords(time=("time", points["time"].to_numpy()[::-1], {"units": "s"}))
    for changed, expected in (
        (points.drop_vars("position"), ", variable position: expected it with dims time, point, axis."),
        (points.isel(axis=0), ", variable position: expected it with dims time, point, axis."),
        (in_mm, f", variable position: expected units m, got mm.{AGAIN}"),
        (points.drop_vars("point"), f", coordinate point: missing.{AGAIN}"),
        (points.assign_coords(axis=["a", "y", "z"]), f", coordinate axis: expected x, y, z.{AGAIN}"),
        (late, ", coordinate time: does not rise. Sort the frames by time."),
        (
            points.assign_coords(point=["A", "B", "A"]),
            ": label A stands 2 times (numbers 1, 3), expected once. Rename or remove all but one.",
        ),
        (
            points.assign(position=points["position"].where(False).assign_attrs(units="m")),
            f": none of its 3 points is seen in any frame.{AGAIN}",
        ),
        (
            points.assign(position=(points["position"] / 2000).assign_attrs(units="m")),
            ": declared in m, all points together span 0.968 mm, expected at least 20 mm. "
            "Check what was exported.",
        ),
    ):
        write_points_netcdf(path, changed)
        with pytest.raises(InputError) as caught:
            read_points_netcdf(path)
        assert str(caught.value) == f"{path}{expected}"


def test_the_digest_sees_content_and_nothing_else() -> None:
    dataset = made()
    digest = dataset_digest(dataset)
    assert (
        dataset_digest(dataset[["lag", "informed", "support_class", "pose_covariance", "displacement"]])
        == digest
    )
    assert (
        dataset_digest(dataset.assign_attrs(created_by="x", schema_version=1, input_digests="{}")) == digest
    )
    negative_zero = dataset.copy(deep=True)
    negative_zero["pose_covariance"][:] = -0.0
    assert dataset_digest(negative_zero) == digest
    other = dataset.copy(deep=True)
    other["displacement"][0, 0, 0] += 1e-15
    assert dataset_digest(other) != digest
    for change in (
        dataset.rename(lag="delay"),
        dataset.assign_attrs(invented_data=0),
        dataset.assign_coords(marker=["TA", "TB", "TC", "TD"]),
        dataset.assign(lag=dataset["lag"].assign_attrs(units="ms")),
        dataset.transpose("axis", ...),
    ):
        assert dataset_digest(change) != digest


NAMES = st.text("abcdefgh_äß", min_size=1, max_size=8).filter(lambda name: name[0] != "_")
VALUES = st.floats(allow_nan=True, allow_infinity=True, width=64)


@settings(max_examples=30, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.data(), names=st.lists(NAMES, min_size=1, max_size=3, unique=True))
def test_any_values_survive_a_round_trip(tmp_path: Path, data: st.DataObject, names: list[str]) -> None:
    shape = data.draw(array_shapes(max_dims=3, max_side=4, min_side=0))
    dims = [f"dim{number}" for number in range(len(shape))]
    kind = st.sampled_from(["f8", "f4", "i8", "i2", "?"])
    variables = {}
    for name in names:
        dtype = data.draw(kind)
        elements = VALUES if dtype == "f8" else None
        variables[name] = (dims, data.draw(arrays(dtype, shape, elements=elements)), {"units": "m"})
    dataset = xr.Dataset(variables, attrs={"title": data.draw(st.text("xyzü ", max_size=5))})
    path = tmp_path / "a.nc"
    write_dataset(path, dataset, "prior", {})
    back = read_dataset(path, "prior")
    xr.testing.assert_equal(back, dataset)
    assert {name: back[name].dtype for name in names} == {name: dataset[name].dtype for name in names}
    assert dataset_digest(back) == dataset_digest(dataset)
