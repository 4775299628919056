"""One verb a file: plan, do, verify, second opinion."""

from realize.steps.compare import compare
from realize.steps.conversion import Conversion, model_of
from realize.steps.convert import convert, explain
from realize.steps.fit import fit
from realize.steps.inspect import inspect
from realize.steps.reduce import reduce

__all__ = ["Conversion", "compare", "convert", "explain", "fit", "inspect", "model_of", "reduce"]
