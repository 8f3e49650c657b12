"""Prior files: nothing lost, open to any reader, and every damaged file refused in words."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import h5py
import made_priors as made
import numpy as np
import pytest
import xarray as xr
from made_studies import says

from sta_prior.errors import InputError
from sta_prior.io.netcdf import read_dataset, write_dataset
from sta_prior.pairs import pair
from sta_prior.prior import Prior, known_families, learn, load_prior
from sta_prior.prior.files import prior_to_dataset
from sta_prior.simulate import write_study
from sta_prior.study import read_study


@pytest.fixture(scope="module")
def prior() -> Prior:
    pairs = made.make_pairs(np.random.default_rng(1), made.subjects_of(3), left=["P02"])
    pairs["displacement"].values[3:20, 1] = np.nan
    pairs.attrs["invented_data"] = 1
    pairs.attrs["covariates"] = '{"P01": {"height_m": 1.74, "mass_kg": 71.5}}'
    return learn(pairs)


@pytest.fixture(scope="module")
def saved(prior: Prior, tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("prior") / "prior.nc"
    prior.save(path)
    return path


def assert_equal(one: object, other: object, place: str = "prior") -> None:
    """Same values to the last bit, whatever nests what."""
    if isinstance(one, np.ndarray):
        np.testing.assert_array_equal(one, np.asarray(other), err_msg=place)
    elif isinstance(one, xr.Dataset):
        xr.testing.assert_identical(one, other)
    elif isinstance(one, dict):
        assert isinstance(other, dict), place
        assert list(one) == list(other), place
        for key in one:
            assert_equal(one[key], other[key], f"{place}.{key}")
    elif isinstance(one, tuple):
        assert isinstance(other, tuple), place
        assert len(one) == len(other), place
        for index, item in enumerate(one):
            assert_equal(item, other[index], f"{place}[{index}]")
    elif hasattr(one, "__dataclass_fields__"):
        assert type(one) is type(other), place
        for name in one.__dataclass_fields__:
            assert_equal(getattr(one, name), getattr(other, name), f"{place}.{name}")
    else:
        assert one == other, place


def test_a_prior_comes_back_as_it_was(prior: Prior, saved: Path) -> None:
    assert_equal(prior, load_prior(saved))


def test_a_personal_prior_without_validation_comes_back(tmp_path: Path) -> None:
    personal = learn(made.make_pairs(np.random.default_rng(2), ["P01"], trials=1))
    personal.save(tmp_path / "personal.nc")
    back = load_prior(tmp_path / "personal.nc")
    assert_equal(personal, back)
    assert back.is_personal
    assert back.validation.sizes["unit"] == 0
    assert back.digest == personal.digest


def test_the_digest_is_that_of_the_content(prior: Prior, saved: Path, tmp_path: Path) -> None:
    assert load_prior(saved).digest == prior.digest
    load_prior(saved).save(tmp_path / "again.nc")
    assert load_prior(tmp_path / "again.nc").digest == prior.digest
    thigh = prior.segments["thigh"]
    other = replace(prior, segments={**prior.segments, "thigh": thigh.with_inflation(1.01)})
    assert other.digest != prior.digest
    assert replace(prior, notes=("another",)).digest != prior.digest
    assert len(prior.digest) == 64


def test_a_prior_of_a_study_keeps_its_digest(tmp_path: Path) -> None:
    write_study(tmp_path / "study", 3, "small")
    pairs = pair(read_study(tmp_path / "study" / "study.toml"))
    write_dataset(tmp_path / "pairs.nc", pairs, "pairs", {})
    one, other = learn(pairs), learn(read_dataset(tmp_path / "pairs.nc", "pairs"))
    assert one.digest == other.digest
    assert one.invented
    assert set(one.covariates) == {"K01", "K02", "K03", "K04"}
    one.save(tmp_path / "prior.nc")
    back = load_prior(tmp_path / "prior.nc")
    assert back.digest == one.digest
    trial = read_study(tmp_path / "study" / "study.toml").trial("K10", "level-walk_01")
    angles = np.random.default_rng(3).uniform(0, 1, (4, 1, 3))
    for segment in ("thigh", "shank"):
        got, expected = (p.bind(trial).artifacts[segment].moments(angles) for p in (back, one))
        np.testing.assert_array_equal(got.mean, expected.mean)
        np.testing.assert_array_equal(got.covariance, expected.covariance)


def test_plain_xarray_opens_it(prior: Prior, saved: Path) -> None:
    with xr.open_dataset(saved, engine="h5netcdf") as data:
        assert data.attrs["sta_prior_kind"] == "prior"
        assert data.attrs["schema_version"] == 1
        assert data.attrs["family"] == "reduced-rank-gp"
        assert data.attrs["invented_data"] == 1
        assert json.loads(data.attrs["input_digests"]) == {"pairs": prior.pairs_digest}
        assert json.loads(data.attrs["notes"]) == list(prior.notes)
        assert all(variable.dtype.kind in "biufSUO" for variable in data.variables.values())
        numbers = [n for n, v in data.variables.items() if v.dtype.kind in "biuf"]
        assert [name for name in numbers if not data[name].attrs.get("units")] == []
        residual = data["thigh_residual"]
        assert residual.dims == ("output_thigh", "output2_thigh")
        assert residual.attrs["units"] == "m2"
        stored = prior.segments["thigh"].variables()["residual"]
        np.testing.assert_array_equal(residual.values, stored.values)
        assert stored.values.shape == (9, 9)
        assert data["validation_coverage"].dims == (
            "validation_segment",
            "validation_unit",
            "validation_level",
        )


def test_plain_hdf5_opens_it_and_nothing_is_an_object(saved: Path) -> None:
    with h5py.File(saved, "r") as file:
        assert len(file) > 60
        for name, item in file.items():
            assert isinstance(item, h5py.Dataset), name
            text = h5py.check_string_dtype(item.dtype) is not None
            assert text or item.dtype.kind in "biufS", f"{name} is {item.dtype}"
            assert h5py.check_ref_dtype(item.dtype) is None or name in item.attrs
        assert file["thigh_markers"][:].tolist() == [b"TA", b"TB", b"TC"]


def test_a_missing_file_is_told(tmp_path: Path) -> None:
    path = tmp_path / "prior.nc"
    with pytest.raises(InputError) as caught:
        load_prior(path)
    assert str(caught.value).startswith(f"{path}: ")


def test_a_foreign_file_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "prior.nc"
    path.write_text("time,TA_x\n", encoding="utf-8")
    with says(InputError, f"{path}: not a NetCDF 4 file. Name a file that this program wrote."):
        load_prior(path)
    xr.Dataset({"a": ("x", [1.0])}).to_netcdf(path, engine="h5netcdf")
    with says(InputError, f"{path}: no attribute sta_prior_kind. Name a file that this program wrote."):
        load_prior(path)


def test_another_kind_of_file_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "pairs.nc"
    write_dataset(path, made.make_pairs(np.random.default_rng(4), ["P01"]), "pairs", {})
    with says(InputError, f"{path}: expected a file of kind prior, got pairs. Name a prior file."):
        load_prior(path)


@pytest.mark.parametrize("share", [0.3, 0.7, 0.99])
def test_a_truncated_file_is_refused(saved: Path, tmp_path: Path, share: float) -> None:
    path = tmp_path / "cut.nc"
    whole = saved.read_bytes()
    path.write_bytes(whole[: int(share * len(whole))])
    with pytest.raises(InputError) as caught:
        load_prior(path)
    text = str(caught.value)
    assert text.startswith(f"{path}: damaged or truncated NetCDF (")
    assert text.endswith("). Copy it again or make it anew.")
    assert "\n" not in text


def test_an_unknown_family_is_refused(prior: Prior, tmp_path: Path) -> None:
    path = tmp_path / "prior.nc"
    replace(prior, family="reduced-rank-gps").save(path)
    with says(
        InputError,
        "family of the prior: no family reduced-rank-gps here, "
        f"known: {', '.join(known_families())}. Did you mean reduced-rank-gp?",
    ):
        load_prior(path)


def without(name: str) -> Callable[[xr.Dataset], xr.Dataset]:
    return lambda data: data.drop_vars(name)


def with_attribute(name: str, value: str) -> Callable[[xr.Dataset], xr.Dataset]:
    return lambda data: data.assign_attrs({name: value})


@pytest.mark.parametrize(
    ("damage", "reason"),
    [
        (without("shank_residual"), "'residual'"),
        (without("learned_time"), "learned_time"),
        (with_attribute("joints", '[{"name": "knee"}]'), "dof"),
        (with_attribute("joints", '[{"name": "knee", "dof": ["flexion"], "colour": "red"}]'), "colour"),
        (with_attribute("notes", "{"), "Expecting"),
        (without("thigh_block_subject"), "'block_subject'"),
        (without("segment_names"), "segment_names"),
        (with_attribute("covariates", "["), "Expecting"),
    ],
    ids=["residual", "times", "joint short", "joint long", "notes", "blocks", "segments", "covariates"],
)
def test_a_file_that_lacks_a_part_is_refused(
    prior: Prior, tmp_path: Path, damage: Callable[[xr.Dataset], xr.Dataset], reason: str
) -> None:
    path = tmp_path / "prior.nc"
    write_dataset(path, damage(prior_to_dataset(prior)), "prior", {})
    with pytest.raises(InputError) as caught:
        load_prior(path)
    text = str(caught.value)
    assert text.startswith(f"{path}: not a whole prior file (")
    assert reason in text
    assert text.endswith("). Learn the prior again.")


def test_saving_leaves_no_half_written_file(prior: Prior, tmp_path: Path) -> None:
    path = tmp_path / "prior.nc"
    path.write_text("an earlier prior", encoding="utf-8")
    broken = replace(prior, validation=prior.validation.assign(bad=("unit", np.array([None] * 3))))
    with says(
        InputError,
        f"{path}, variable validation_bad: type object, expected numbers or text. Convert it.",
    ):
        broken.save(path)
    assert path.read_text(encoding="utf-8") == "an earlier prior"
    assert [item.name for item in tmp_path.iterdir()] == ["prior.nc"]


def with_less(name: str, sizes: dict[str, int]) -> Callable[[xr.Dataset], xr.Dataset]:
    """The first rows of an array, along dimensions of other names."""

    def change(data: xr.Dataset) -> xr.Dataset:
        short = data[name].isel({dim: slice(size) for dim, size in sizes.items()})
        return data.drop_vars(name).assign({name: short.rename({dim: f"other_{dim}" for dim in sizes})})

    return change


@pytest.mark.parametrize(
    ("name", "sizes", "expected", "got"),
    [
        ("trial_features", {"feature_thigh": 7, "feature2_thigh": 7}, "(9, 9)", "(7, 7)"),
        ("residual", {"output2_thigh": 6}, "(9, 9)", "(9, 6)"),
        ("population_covariance", {"weight_thigh": 9}, "(81, 81)", "(9, 81)"),
        ("layout", {"place_thigh": 2}, "(3, 3)", "(2, 3)"),
        ("block_cross", {"feature_thigh": 3}, None, "(BLOCKS, 3, 9)"),
    ],
)
def test_arrays_that_do_not_fit_each_other_are_refused(
    prior: Prior, tmp_path: Path, name: str, sizes: dict[str, int], expected: str | None, got: str
) -> None:
    path = tmp_path / "prior.nc"
    data = prior_to_dataset(prior)
    write_dataset(path, with_less(f"thigh_{name}", sizes)(data), "prior", {})
    blocks, features = data.sizes["block_thigh"], data.sizes["feature_thigh"]
    with says(
        InputError,
        f"{path}: not a whole prior file (thigh, {name}: "
        f"expected shape {expected or (blocks, features, 9)}, got {got.replace('BLOCKS', str(blocks))}). "
        "Learn the prior again.",
    ):
        load_prior(path)


def test_sums_of_other_numbers_of_blocks_are_refused(prior: Prior, tmp_path: Path) -> None:
    path = tmp_path / "prior.nc"
    data = prior_to_dataset(prior)
    write_dataset(path, with_less("thigh_block_weight", {"block_thigh": 5})(data), "prior", {})
    with says(
        InputError,
        f"{path}: not a whole prior file (thigh, block_weight: "
        f"expected {data.sizes['block_thigh']} rows, one a block, got 5). Learn the prior again.",
    ):
        load_prior(path)


def test_an_array_of_other_dimensions_is_refused(prior: Prior, tmp_path: Path) -> None:
    path = tmp_path / "prior.nc"
    data = prior_to_dataset(prior)
    flat = data["thigh_magnitude"].isel(output2_thigh=0, drop=True)
    write_dataset(path, data.assign(thigh_magnitude=flat), "prior", {})
    with says(
        InputError,
        f"{path}: not a whole prior file (thigh, magnitude: expected shape (9, 9), got (9,)). "
        "Learn the prior again.",
    ):
        load_prior(path)


def test_a_file_from_before_there_was_a_choice_is_read(prior: Prior, tmp_path: Path) -> None:
    path = tmp_path / "prior.nc"
    older = prior_to_dataset(prior).drop_vars(["thigh_feature_shrinkage", "thigh_shrinkage_reason"])
    write_dataset(path, older, "prior", {})
    words = load_prior(path).segments["thigh"].describe()
    assert "; between-subject shrinkage 40 % between features, 20 % between outputs, fixed; " in words
