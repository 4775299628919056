"""Receipt and Claim: the records that come with every result."""

from __future__ import annotations

import math
from typing import Any, Literal

import msgspec

Basis = Literal["proved", "bounded", "measured"]
OpinionStatus = Literal["agrees", "disagrees", "failed", "not-applicable", "not-asked"]


class Claim(msgspec.Struct, frozen=True, omit_defaults=False, forbid_unknown_fields=True):
    """One line of a receipt.

    Attributes
    ----------
    name : str
        A key of `realize.schema.claims.CLAIMS`.
    value : float or None
        What is claimed; None with ``infinite`` true stands for an infinite value, None alone for "not available".
    limit : float or None
        What the value may be at most.
    unit, basis : str
        Unit of value, limit and uncertainty; how the value is known (`realize.schema.claims.BASES`).
    where : dict
        Where the value was found: ``frequency`` (rad/s), ``output``, ``input``.
    uncertainty : float or None
        ``value + uncertainty`` is never below the truth; None: nothing is known about what hides between samples.
    holds : bool or None
        True, False, or None: no limit, or measured without a bound on what hides.
    infinite : bool
    relative : float or None
        The same value relative to the source's largest gain, where the claim is absolute.
    note : str
    """

    name: str
    value: float | None
    limit: float | None = None
    unit: str = "relative"
    basis: Basis = "measured"
    where: dict[str, Any] = {}
    uncertainty: float | None = None
    holds: bool | None = None
    infinite: bool = False
    relative: float | None = None
    note: str = ""


def judge(
    name: str,
    value: float | None,
    *,
    limit: float | None = None,
    unit: str = "relative",
    basis: Basis = "measured",
    where: dict[str, Any] | None = None,
    uncertainty: float | None = None,
    relative: float | None = None,
    note: str = "",
) -> Claim:
    """Return a `Claim` with ``holds`` decided from value, uncertainty and limit.

    A value that is infinite or not a number becomes ``value: None, infinite: True`` and fails any limit.
    """
    infinite = value is not None and not math.isfinite(value)
    if limit is None or (value is None and not infinite):
        holds = None
    elif infinite or value > limit:  # type: ignore[operator]
        holds = False
    elif uncertainty is None and basis == "measured":
        holds = None
    else:
        worst = value + (uncertainty or 0.0)  # type: ignore[operator]
        holds = True if worst <= limit else None
    if relative is not None and not math.isfinite(relative):
        relative = None
    if uncertainty is not None and not math.isfinite(uncertainty):
        uncertainty = None
        holds = None if holds else holds
    return Claim(
        name=name,
        value=None if infinite else value,
        limit=limit,
        unit=unit,
        basis=basis,
        where=where or {},
        uncertainty=uncertainty,
        holds=holds,
        infinite=infinite,
        relative=relative,
        note=note,
    )


class ModelMark(msgspec.Struct, frozen=True, forbid_unknown_fields=True):
    """What a receipt keeps of a model: kind, order (None for data) and digest."""

    kind: str
    order: int | None
    digest: str


class SecondOpinion(msgspec.Struct, frozen=True, forbid_unknown_fields=True):
    """What an independent library says of the same step."""

    by: str = ""
    agreement: float | None = None
    status: OpinionStatus = "not-asked"
    note: str = ""


class Receipt(msgspec.Struct, frozen=True, forbid_unknown_fields=True):
    """The record of one step: where from, where to, what it cost, who agrees."""

    step: str
    method: str
    route: list[str]
    source: ModelMark
    result: ModelMark
    claims: list[Claim]
    fragility: dict[str, float | None] = {}
    second_opinion: SecondOpinion = SecondOpinion()
    cautions: list[str] = []
    details: dict[str, Any] = {}
    versions: dict[str, str] = {}
    seconds: float = 0.0

    def claim(self, name: str) -> Claim:
        """Return the claim of that name; raises KeyError if the receipt has none."""
        for claim in self.claims:
            if claim.name == name:
                return claim
        raise KeyError(name)

    @property
    def failed(self) -> list[Claim]:
        """The claims whose limit is not kept."""
        return [claim for claim in self.claims if claim.holds is False]

    @property
    def open(self) -> list[Claim]:
        """The claims with a limit that could not be decided: measured, with no bound on what hides."""
        return [claim for claim in self.claims if claim.holds is None and claim.limit is not None]


def receipt_to_record(receipt: Receipt) -> dict[str, Any]:
    """Return the receipt as plain dictionaries and lists, ready for JSON: null for numbers that JSON does not have."""
    try:
        return msgspec.json.decode(msgspec.json.encode(receipt))  # type: ignore[no-any-return]
    except (ValueError, OverflowError):
        # halves of surrogate pairs, and integers of more than 64 bits
        return finite(msgspec.to_builtins(receipt))  # type: ignore[no-any-return]


def finite(value: Any) -> Any:
    """Return plain data with null for numbers that JSON does not have."""
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, dict):
        return {name: finite(entry) for name, entry in value.items()}
    return [finite(entry) for entry in value] if isinstance(value, (list, tuple)) else value


def receipt_from_record(record: Any) -> Receipt:
    """Return the receipt of a plain record; raises `msgspec.ValidationError` with the path of what is wrong."""
    return msgspec.convert(record, Receipt)
