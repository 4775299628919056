"""Time records to frequency responses: one way of averaging a file."""

from realize.estimation.face import estimate_response
from realize.estimation.records import Estimate, Settings

__all__ = ["Estimate", "Settings", "estimate_response"]
