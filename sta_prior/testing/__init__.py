"""Help for those who write a family of priors: invented paired data, and a battery of checks.

A plug-in's test is three lines::

    pairs = example_pairs(seed=1)
    prior = learn(pairs, family="my-family")
    check_prior(prior, pairs)

How to write a family: docs/extend.md.
"""

from sta_prior.testing.battery import check_prior
from sta_prior.testing.case import FailedCheckError
from sta_prior.testing.example import example_pairs

__all__ = ["FailedCheckError", "check_prior", "example_pairs"]
