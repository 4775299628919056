"""Time records to frequency responses: one way of averaging a file."""

from realize.estimation.face import AVERAGINGS, ESTIMATORS, estimate_response
from realize.estimation.records import Estimate, Settings

__all__ = ["AVERAGINGS", "ESTIMATORS", "Estimate", "Settings", "estimate_response"]
