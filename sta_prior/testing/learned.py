"""Checks of what a prior has learned: its file, its subjects, learning again.

Shell over arrays. Conventions: docs/conventions.md.
"""

from __future__ import annotations

import tempfile
from pathlib import Path

import h5py
import numpy as np
import xarray as xr

from sta_prior.io.netcdf import dataset_digest
from sta_prior.prior.base import Prior
from sta_prior.prior.family import Own
from sta_prior.prior.files import load_prior
from sta_prior.prior.learning import learn
from sta_prior.testing.case import PARTS, ROUNDING, Case, spread

FEW, MANY = 2, 6
"""Subjects of each of the priors that must be wider, and the least that they are held against."""


def check_file(case: Case) -> bool:
    """A saved prior comes back with the same moments; plain readers open the file."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "prior.nc"
        case.prior.save(path)
        back = load_prior(path)
        _check_plain(case, path)
    if back.digest != case.prior.digest:
        raise case.fail("", "content of the saved prior has another digest")
    bound = case.artifacts(case.setting, back)
    for segment, artifact in case.artifacts(case.setting).items():
        own = case.prior.segments[segment]
        one, other = [artifact], [bound[segment]]
        for subject in filter(own.knows, case.prior.subjects[:1]):
            belonging = (case.posture(segment), Own(subject, (), ""))
            one.append(own.for_subject(*belonging))
            other.append(back.segments[segment].for_subject(*belonging))
        for before, after in zip(one, other, strict=True):
            for part in PARTS:
                values = (getattr(item.moments(case.angles), part) for item in (before, after))
                if not np.array_equal(*values):
                    raise case.fail(segment, f"{part} of the saved prior is another, expected the same bits")
    return True


def _check_plain(case: Case, path: Path) -> None:
    with xr.open_dataset(path, engine="h5netcdf") as data:
        for name, variable in data.variables.items():
            if variable.dtype.kind in "iuf" and "units" not in variable.attrs:
                raise case.fail("", f"stored variable {name} has no units")
    with h5py.File(path, "r") as file:
        for name, item in file.items():
            text = h5py.check_string_dtype(item.dtype) is not None
            if not text and item.dtype.kind not in "biuf":
                raise case.fail("", f"stored variable {name} is {item.dtype}, expected numbers or text")


def check_own_subject(case: Case) -> bool:
    """A subject with paired frames is predicted with less spread than one never imaged."""
    known = case.learned_subjects
    for segment, model in case.prior.segments.items():
        new = spread(case.new(segment), case.inside)
        for subject in filter(model.knows, known):
            own = spread(model.for_subject(case.posture(segment), Own(subject, (), "")), case.inside)
            if own >= new:
                raise case.fail(
                    segment,
                    f"SD for {subject}, which it learned from, is {1000 * own:.2f} mm, "
                    f"for a subject never imaged {1000 * new:.2f} mm, expected more",
                )
    return bool(known)


def check_learning_again(case: Case) -> bool:
    """Learning from the same pairs gives the same prior, to the last bit."""
    if case.pairs is None:
        return False
    if case.prior.pairs_digest != dataset_digest(case.pairs):
        raise case.fail("", "the pairs are not those that the prior learned from")
    if _learn(case.prior, case.pairs, case.prior.subjects).digest != case.prior.digest:
        raise case.fail("", "learning again from the same pairs gives another prior")
    return True


def _learn(prior: Prior, pairs: xr.Dataset, subjects: tuple[str, ...]) -> Prior:
    """A prior of the same family from some of the subjects."""
    others = [str(name) for name in pairs["subject_id"].values if str(name) not in subjects]
    return learn(pairs, prior.family, others)


def check_few_subjects(case: Case) -> bool:
    """Priors from few subjects are wider than one from many; one that learns nothing is as wide.

    Two subjects may be alike by chance, so the mean over several pairs of them is asked.
    """
    subjects = case.prior.subjects
    if case.pairs is None or len(subjects) < MANY:
        return False
    small = [_learn(case.prior, case.pairs, subjects[at : at + FEW]) for at in range(0, MANY, FEW)]
    learns = bool(case.learned_subjects)
    for segment in case.prior.segments:
        narrow = spread(case.new(segment), case.inside)
        wide = [spread(case.new(segment, prior.segments[segment]), case.inside) for prior in small]
        mean = sum(wide) / len(wide)
        if mean <= narrow if learns else mean < (1.0 - ROUNDING) * narrow:
            raise case.fail(
                segment,
                f"SD for a new subject is {1000 * mean:.2f} mm after {FEW} subjects, {1000 * narrow:.2f} mm "
                f"after {len(subjects)}, expected the wider after the fewer",
            )
    return True
