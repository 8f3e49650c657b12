"""Run the calibration: ``python -m sta_prior.calibrate``."""

from __future__ import annotations

from sta_prior.calibrate.command import main

if __name__ == "__main__":
    raise SystemExit(main())
