"""Build the prior files of this folder: python priors/build.py

``magnitude.nc`` holds published sizes; ``couriers-invented.nc`` is learned from the invented courier
study and describes nobody.
"""

from __future__ import annotations

import tempfile
from dataclasses import replace
from importlib.metadata import version
from pathlib import Path

import xarray as xr

from sta_prior.pairs import pair
from sta_prior.prior import Prior, learn
from sta_prior.prior.magnitude import read_magnitudes
from sta_prior.prior.other_models import MagnitudeModel
from sta_prior.simulate import write_study
from sta_prior.study import read_study

FOLDER = Path(__file__).parent
SEED = 1


def magnitude() -> Prior:
    """Published sizes of every segment of the table, for any markers, at every posture."""
    segments = {name: MagnitudeModel(name) for name in read_magnitudes().segments}
    notes = (
        "Published sizes, mean zero: intervals, no correction. Every number and its source stand in "
        "magnitude.toml. It knows no reference posture, so the artifact has its full size everywhere.",
    )
    return Prior("magnitude", (), segments, (), xr.Dataset(), notes)


def couriers() -> Prior:
    """The default family on the invented study."""
    with tempfile.TemporaryDirectory() as folder:
        write_study(folder, SEED)
        prior = learn(pair(read_study(Path(folder) / "study.toml")))
    made = f"Learned from the invented courier study, seed {SEED}, by sta_prior {version('sta-prior')}."
    return replace(prior, notes=(made, *prior.notes))


if __name__ == "__main__":
    magnitude().save(FOLDER / "magnitude.nc")
    couriers().save(FOLDER / "couriers-invented.nc")
