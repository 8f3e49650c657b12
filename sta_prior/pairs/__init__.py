"""Pairing skin markers with bone truth: displacement in the bone frame, with quality figures."""

from sta_prior.pairs.belonging import Belonging, check_belonging, distance_misfit
from sta_prior.pairs.pairing import PairingReport, input_digests, pair, pair_with_report

__all__ = [
    "Belonging",
    "PairingReport",
    "check_belonging",
    "distance_misfit",
    "input_digests",
    "pair",
    "pair_with_report",
]
