"""Simulation-based calibration of the smoother, a command: docs/calibration.md."""

from sta_prior.calibrate.command import Calibration, calibrate
from sta_prior.calibrate.draw import Recipe

__all__ = ["Calibration", "Recipe", "calibrate"]
