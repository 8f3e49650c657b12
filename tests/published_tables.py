"""Tables of facts that mixed models were published with, and the trials they make."""

from __future__ import annotations

import csv
from collections.abc import Sequence
from pathlib import Path

import made_priors as made
import numpy as np
import pytest

from sta_prior.checks import FloatArray
from sta_prior.prior.hierarchy import TrialStatistics

DATA = Path(__file__).parents[2] / "shared" / "data" / "statistics"

# Yield of dyestuff, g, five samples of six batches: Davies & Goldsmith (1972), table 6.3; R package lme4.
DYESTUFF = """
1545 1440 1440 1520 1580  1540 1555 1490 1560 1495  1595 1550 1605 1510 1560
1445 1440 1595 1465 1545  1595 1630 1515 1635 1625  1520 1455 1450 1480 1445
"""
# Simulated, with a negative estimate of variance: Box & Tiao (1973), table 5.1.4; R package lme4. From
# memory; its mean and mean squares are those of the published table.
DYESTUFF2 = """
7.298 3.846 2.434 9.566 7.990  5.220 6.556 0.608 11.788 -0.892  0.110 10.386 13.434 5.510 8.166
2.212 4.852 7.092 9.288 4.980  0.282 9.014 4.458 9.446 7.198  1.722 4.782 8.106 0.758 3.758
"""
# Travel time of an ultrasonic wave, ns, three times in six rails: Devore (2000); R package nlme.
RAIL = "55 53 54  26 37 32  78 91 85  92 100 96  49 51 50  80 83 85"
# Distance pituitary to pterygomaxillary fissure, mm, at ages 8, 10, 12, 14: Potthoff & Roy (1964), Biometrika
# 51, 313–326; R package nlme. From memory; the published likelihoods below would show a wrong digit.
GIRLS = """
21 20 21.5 23  21 21.5 24 25.5  20.5 24 24.5 26  23.5 24.5 25 26.5  21.5 23 22.5 23.5  20 21 21 22.5
21.5 22.5 23 25  23 23 23.5 24  20 21 22 21.5  16.5 19 19 19.5  24.5 25 28 28
"""
BOYS = """
26 25 29 31  21.5 22.5 23 26.5  23 22.5 24 27.5  25.5 27.5 26.5 27  20 23.5 22.5 26  24.5 25.5 27 28.5
22 22 24.5 26.5  24 21.5 24.5 25.5  23 20.5 31 26  27.5 28 31 31.5  23 23 23.5 25  21.5 23.5 24 28
17 24.5 26 29.5  22.5 25.5 25.5 26  23 24.5 26 30  22 21.5 23.5 25
"""


def numbers(table: str) -> FloatArray:
    """A table of text as an array."""
    return np.array(table.split(), dtype=np.float64)


def rows_of(name: str) -> list[dict[str, str]]:
    """Rows of a table of the data folder; skips where it is absent."""
    path = DATA / name
    if not path.is_file():
        pytest.skip(f"shared/data/statistics/{name} is not there")
    with path.open(encoding="utf-8") as file:
        return list(csv.DictReader(file))


def trials_of(
    groups: Sequence[str], design: FloatArray, outputs: FloatArray, trials: Sequence[str] | None = None
) -> list[TrialStatistics]:
    """Statistics of rows: groups and trials (rows,), design (rows, K), outputs (rows,) or (rows, n)."""
    outputs = outputs.reshape(len(groups), -1)
    keys = list(zip(groups, trials if trials is not None else ["t"] * len(groups), strict=True))
    result = []
    for key in dict.fromkeys(keys):
        here = [index for index, other in enumerate(keys) if other == key]
        none = np.zeros((len(here), outputs.shape[1], outputs.shape[1]))
        frames = made.MadeTrial(*key, design[here], outputs[here], np.ones(len(here)), none)
        result.append(frames.statistics())
    return result


def one_way(table: str, each: int) -> list[TrialStatistics]:
    """Groups of ``each`` numbers and a mean."""
    values = numbers(table)
    names = [f"{index // each:02d}" for index in range(values.size)]
    return trials_of(names, np.ones((values.size, 1)), values)


def growth(table: str, first: str) -> list[TrialStatistics]:
    """Growth curves of children at four ages: a mean and a slope."""
    values = numbers(table)
    names = [f"{first}{index // 4:02d}" for index in range(values.size)]
    age = np.tile([8.0, 10.0, 12.0, 14.0], values.size // 4)
    return trials_of(names, np.stack([np.ones_like(age), age], axis=1), values)


def sleep_study() -> list[TrialStatistics]:
    """Reaction time, ms, of 18 people over ten days: Belenky et al. (2003); R package lme4."""
    rows = rows_of("lme4_sleepstudy.csv")
    days = np.array([float(row["Days"]) for row in rows])
    reaction = np.array([float(row["Reaction"]) for row in rows])
    return trials_of([row["Subject"] for row in rows], np.stack([np.ones_like(days), days], axis=1), reaction)
