"""Claims, from two models and kernels alone."""

from realize.verification.conversion import conversion_claims
from realize.verification.fragility import fragility
from realize.verification.pair import Pair
from realize.verification.views import View, view_of

__all__ = ["Pair", "View", "conversion_claims", "fragility", "view_of"]
