"""Solutions against bone truth: error, offset apart from tracking, coverage, the rigid fit beside it."""

from __future__ import annotations

from sta_prior.compare.average import summarise
from sta_prior.compare.comparison import Comparison, compare_solutions, solution_paths
from sta_prior.compare.scores import (
    LEVELS,
    Errors,
    Score,
    binomial_range,
    effective_frames,
    normalised_square,
)
from sta_prior.compare.tables import format_comparison
from sta_prior.compare.truth import BoneTruth, bone_truth

__all__ = [
    "LEVELS",
    "BoneTruth",
    "Comparison",
    "Errors",
    "Score",
    "binomial_range",
    "bone_truth",
    "compare_solutions",
    "effective_frames",
    "format_comparison",
    "normalised_square",
    "solution_paths",
    "summarise",
]
