"""The report page of a folder of solutions: figures, tables and cautions in one file."""

from __future__ import annotations

from sta_prior.report.page import build_report

__all__ = ["build_report"]
