"""The prior files of priors/: whole, labelled, and what the program of today makes of them."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from sta_prior.prior import load_prior
from sta_prior.prior.magnitude import read_magnitudes
from sta_prior.simulate import write_study
from sta_prior.solve import solve
from sta_prior.study import read_study

PRIORS = Path(__file__).parents[1] / "priors"


def test_the_example_is_labelled_invented_and_tells_where_it_comes_from() -> None:
    prior = load_prior(PRIORS / "couriers-invented.nc")
    assert prior.invented
    assert prior.family == "reduced-rank-gp"
    assert prior.subjects == tuple(f"K0{number}" for number in range(1, 10))
    assert prior.notes[0].startswith("Learned from the invented courier study, seed 1, by sta_prior ")
    with xr.open_dataset(PRIORS / "couriers-invented.nc", engine="h5netcdf") as data:
        assert data.attrs["invented_data"] == 1
        assert data.attrs["sta_prior_kind"] == "prior"


def test_published_sizes_are_those_of_the_table() -> None:
    prior, table = load_prior(PRIORS / "magnitude.nc"), read_magnitudes()
    assert list(prior.segments) == list(table.segments) == ["thigh", "shank", "foot"]
    assert not prior.subjects
    assert not prior.invented


@pytest.mark.parametrize("name", ["magnitude", "couriers-invented"])
def test_they_solve_a_trial(name: str, tmp_path: Path) -> None:
    write_study(tmp_path / "study", 5, "small")
    trial = read_study(tmp_path / "study" / "study.toml").trial("K10", "level-walk_01")
    solution = solve(trial, load_prior(PRIORS / f"{name}.nc"))
    assert np.isfinite(solution["angle_sd"].values).all()
    assert solution["angle_sd"].values.max() < math.radians(20.0)
    assert solution.attrs["invented_data"] == 1
