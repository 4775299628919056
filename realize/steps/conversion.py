"""Conversion: the one result type of every verb."""

from __future__ import annotations

from dataclasses import dataclass
from importlib import import_module
from typing import Any, Self

from realize.errors import ClaimFailed
from realize.models import Model
from realize.schema import Claim, Receipt


@dataclass(frozen=True)
class Conversion:
    """A result: the model, and the receipt of the step that made it.

    Attributes
    ----------
    model : Model
        Carries the whole chain of receipts, this step's last.
    receipt : Receipt
    """

    model: Model
    receipt: Receipt

    @property
    def history(self) -> tuple[Receipt, ...]:
        """Receipts of all steps that led here, oldest first."""
        return self.model.receipts

    def require(self, *, strict: bool = False) -> Self:
        """Return itself, or raise `ClaimFailed` if a claim failed its limit.

        Parameters
        ----------
        strict : bool
            Count claims that could not be decided as failed.
        """
        bad = list(self.receipt.failed) + (list(self.receipt.open) if strict else [])
        if bad:
            words = "; ".join(
                f"{claim.name} is {_worded(claim)}, limit {claim.limit:.3g}"
                + ("" if claim.holds is False or claim.value is None else " (measured, not bounded)")
                for claim in bad
            )
            raise ClaimFailed(f"{self.receipt.step}: {words}")
        return self


def _worded(claim: Claim) -> str:
    if claim.infinite:
        return "infinite"
    return "not available" if claim.value is None else f"{claim.value:.3g}"


#: Reads what is neither a model nor a conversion: objects of other libraries, and arrays. It stands in a layer above
#: the verbs, and is looked up by name when it is needed.
OTHERS = ("realize.interop", "from_library")


def model_of(value: Any) -> Model:
    """Return the model of a model, a conversion, an object of another library, or a tuple of arrays."""
    if isinstance(value, Conversion):
        return value.model
    if isinstance(value, Model):
        return value
    home, name = OTHERS
    return getattr(import_module(home), name)(value)  # type: ignore[no-any-return]
