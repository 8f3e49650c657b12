"""Pairing skin markers with bone truth: displacement in the bone frame, with quality figures."""

from sta_prior.pairs.belonging import Belonging, check_belonging, distance_misfit
from sta_prior.pairs.pairing import PairingReport, pair, pair_with_report

__all__ = ["Belonging", "PairingReport", "check_belonging", "distance_misfit", "pair", "pair_with_report"]
