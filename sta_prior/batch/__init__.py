"""Solve many trials: workers, resuming, and what is left on disk."""

from sta_prior.batch.job import Job, Outcome, solution_path, solve_job
from sta_prior.batch.output import write_angles
from sta_prior.batch.run import Run, solve_study

__all__ = ["Job", "Outcome", "Run", "solution_path", "solve_job", "solve_study", "write_angles"]
