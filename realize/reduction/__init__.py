"""Smaller models with a known error: `reduce_states` and the table of its methods."""

from realize.reduction import balanced_truncation as _balanced_truncation  # each registers itself

from realize.reduction import singular_perturbation as _singular_perturbation  # isort: skip
from realize.reduction import modal as _modal  # isort: skip
from realize.reduction import frequency_weighted as _frequency_weighted  # isort: skip
from realize.reduction.plan import Loop, Plan, Request
from realize.reduction.prepare import Prepared, prepare
from realize.reduction.reduce import reduce_states
from realize.reduction.registry import Method, automatic, method_named, methods
from realize.reduction.result import Candidate, Projected, Reduction
