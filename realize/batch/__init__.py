"""Steps over many files: job file, runner, records, cluster."""

from realize.batch.jobs import Job, Step, read_job
from realize.batch.runner import run
from realize.batch.summary import Summary

__all__ = ["Job", "Step", "Summary", "read_job", "run"]
