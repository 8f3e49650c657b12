"""The regression core against certified values of the NIST Statistical Reference Datasets.

Longley, Wampler and Filip: NIST StRD, linear least squares, https://www.itl.nist.gov/div898/strd; data tables
of facts, from memory, certified values as published there. Sums of squares keep half the digits of what they
sum, so a badly scaled table is centred or mixed orthonormally first, as learning does with its features.
"""

from __future__ import annotations

import math
from dataclasses import replace

import made_priors as made
import numpy as np
import pytest

from sta_prior.checks import FloatArray
from sta_prior.prior.basis import Basis, Term, orthonormal
from sta_prior.prior.fitting import RESTRICTED, fit_hierarchy

# Employment against deflator, product, unemployed, armed forces, population, year: Longley (1967).
LONGLEY = """
60323 83.0 234289 2356 1590 107608 1947   61122 88.5 259426 2325 1456 108632 1948
60171 88.2 258054 3682 1616 109773 1949   61187 89.5 284599 3351 1650 110929 1950
63221 96.2 328975 2099 3099 112075 1951   63639 98.1 346999 1932 3594 113270 1952
64989 99.0 365385 1870 3547 115094 1953   63761 100.0 363112 3578 3350 116219 1954
66019 101.2 397469 2904 3048 117388 1955  67857 104.6 419180 2822 2857 118734 1956
68169 108.4 442769 2936 2798 120445 1957  66513 110.8 444546 4681 2637 121950 1958
68655 112.6 482704 3813 2552 123366 1959  69564 114.2 502601 3931 2514 125368 1960
69331 115.7 518173 4806 2572 127852 1961  70551 116.9 554894 4007 2827 130081 1962
"""
CERTIFIED = [
    -3482258.63459582,
    15.0618722713733,
    -0.0358191792925910,
    -2.02022980381683,
    -1.03322686717359,
    -0.0511041056535807,
    1829.15146461355,
]
# Pairs y, x: Filippelli (NIST), a polynomial of degree 10.
FILIP = """
0.8116 -6.860120914 0.9072 -4.324130045 0.9052 -4.358625055 0.9039 -4.358426747 0.8053 -6.955852379
0.8377 -6.661145254 0.8667 -6.355462942 0.8809 -6.118102026 0.7975 -7.115148017 0.8162 -6.815308569
0.8515 -6.519993057 0.8766 -6.204119983 0.8885 -5.853871964 0.8859 -6.109523091 0.8959 -5.79832982
0.8913 -5.482672118 0.8959 -5.171791386 0.8971 -4.851705903 0.9021 -4.517126416 0.909 -4.143573228
0.9139 -3.709075441 0.9199 -3.499489089 0.8692 -6.300769497 0.8872 -5.953504836 0.89 -5.642065153
0.891 -5.031376979 0.8977 -4.680685696 0.9035 -4.329846955 0.9078 -3.928486195 0.7675 -8.56735134
0.7705 -8.363211311 0.7713 -8.107682739 0.7736 -7.823908741 0.7775 -7.522878745 0.7841 -7.218819279
0.7971 -6.920818754 0.8329 -6.628932138 0.8641 -6.323946875 0.8804 -5.991399828 0.7668 -8.781464495
0.7633 -8.663140179 0.7678 -8.473531488 0.7697 -8.247337057 0.77 -7.971428747 0.7749 -7.676129393
0.7796 -7.352812702 0.7897 -7.072065318 0.8131 -6.774174009 0.8498 -6.478861916 0.8741 -6.159517513
0.8061 -6.835647144 0.846 -6.53165267 0.8751 -6.224098421 0.8856 -5.910094889 0.8919 -5.598599459
0.8934 -5.290645224 0.894 -4.974284616 0.8957 -4.64454848 0.9047 -4.290560426 0.9129 -3.885055584
0.9209 -3.408378962 0.9219 -3.13200249 0.7739 -8.726767166 0.7681 -8.66695597 0.7665 -8.511026475
0.7703 -8.165388579 0.7702 -7.886056648 0.7761 -7.588043762 0.7809 -7.283412422 0.7961 -6.995678626
0.8253 -6.691862621 0.8602 -6.392544977 0.8809 -6.067374056 0.8301 -6.684029655 0.8664 -6.378719832
0.8834 -6.065855188 0.8898 -5.752272167 0.8964 -5.132414673 0.8963 -4.811352704 0.9074 -4.098269308
0.9119 -3.66174277 0.9228 -3.2644011
"""
FILIP_SD = 0.00334801051324544


def least_squares(
    angles: FloatArray, reference: FloatArray, outputs: FloatArray, terms: tuple[Term, ...]
) -> tuple[FloatArray, float]:
    """Coefficients of 1 and the raw terms, and residual SD, through mixed features, sums and messages.

    A mixed model in which no feature differs between subjects is least squares; REML divides by N − p.
    """
    frames = len(outputs)
    angles, reference = angles.reshape(frames, 2, 3), reference.reshape(2, 3)
    basis = orthonormal(Basis(terms, np.eye(len(terms))), [angles], [reference])
    features = basis.values(angles, reference)
    none = np.zeros((frames, 1, 1))
    trial = made.MadeTrial("S", "t", features, outputs[:, None], np.ones(frames), none).statistics()
    relative, nothing = np.ones(basis.size), np.zeros((basis.size, basis.size))
    start = fit_hierarchy([trial], relative, settings=replace(RESTRICTED, maximum_iterations=0))
    start = replace(start, subject_features=nothing)
    fit = fit_hierarchy([trial], relative, start=start, settings=replace(RESTRICTED, tolerance=1e-12))
    assert fit.stop_reason == "relative change of the covariances below 1e-12"
    mixed = fit.population.mean[:, 0]
    raw = basis.mixing.T @ mixed[1:]
    at_reference = np.array([reference[term.joint, term.dof] ** term.power for term in terms])
    return np.concatenate([[mixed[0] - at_reference @ raw], raw]), math.sqrt(fit.observed_residual[0, 0])


def test_longley() -> None:
    """Six nearly collinear regressors, cond(X) 4.9e9: 1e-7 can be asked in double precision."""
    table = np.array(LONGLEY.split(), dtype=np.float64).reshape(16, 7)
    angles = table[:, 1:]
    terms = tuple(Term(index // 3, index % 3, 1) for index in range(6))
    coefficients, sd = least_squares(angles, angles.mean(axis=0), table[:, 0], terms)
    np.testing.assert_allclose(coefficients, CERTIFIED, rtol=1e-7)
    assert sd == pytest.approx(304.854073561965, rel=1e-7)
    explained = 1.0 - 9 * sd**2 / ((table[:, 0] - table[:, 0].mean()) ** 2).sum()
    assert explained == pytest.approx(0.995479004577296, rel=1e-9)


def test_filip() -> None:
    """Degree 10 over a short range: cond(X) 1.8e15 in raw powers, harmless in a centred, scaled variable."""
    table = np.array(FILIP.split(), dtype=np.float64).reshape(-1, 2)
    assert len(table) == 82
    x = table[:, 1]
    middle, half = 0.5 * (x.max() + x.min()), 0.5 * (x.max() - x.min())
    angles = np.zeros((82, 6))
    angles[:, 0] = (x - middle) / half
    terms = tuple(Term(0, 0, power) for power in range(1, 11))
    _, sd = least_squares(angles, np.zeros(6), table[:, 0], terms)
    assert sd == pytest.approx(FILIP_SD, rel=1e-6)
    explained = 1.0 - 71 * sd**2 / ((table[:, 0] - table[:, 0].mean()) ** 2).sum()
    assert explained == pytest.approx(0.996727416185620, rel=1e-8)


@pytest.mark.parametrize(("name", "base"), [("Wampler1", 1.0), ("Wampler2", 0.1)])
def test_wampler(name: str, base: float) -> None:
    """An exact polynomial of degree 5 in x = 0 … 20; coefficients 1, 1, … and 1, 0.1, 0.01, …."""
    x, expected = np.arange(21.0), base ** np.arange(6)
    outputs = (x[:, None] ** np.arange(6)) @ expected
    angles = np.zeros((21, 6))
    angles[:, 0] = x
    terms = tuple(Term(0, 0, power) for power in range(1, 6))
    coefficients, sd = least_squares(angles, np.zeros(6), outputs, terms)
    np.testing.assert_allclose(coefficients, expected, rtol=1e-7, err_msg=name)
    # An exact fit ends at the floor of rounding, 1e-7 of the outputs' root mean square.
    assert sd == pytest.approx(1e-7 * math.sqrt((outputs**2).mean()), rel=1e-6)
