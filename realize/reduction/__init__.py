"""Smaller models with a guaranteed error: `reduce_states` and the table of its methods."""

from realize.reduction import balanced_truncation as _balanced_truncation  # registers itself
from realize.reduction.prepare import Prepared, prepare
from realize.reduction.reduce import reduce_states
from realize.reduction.registry import Method, automatic, method_named, methods
from realize.reduction.result import Candidate, Projected, Reduction
