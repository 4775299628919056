"""The schema: kinds, fields, verbs, options, spellings, claims and records, in one place."""

from realize.schema.claims import BASES, CLAIMS, STRUCTURED, ClaimDefinition
from realize.schema.kinds import COMMON_FIELDS, FORMAT_VERSION, HOLDS, KINDS, PARAMETRIC_KINDS, Field, Kind
from realize.schema.records import (
    Claim,
    ModelMark,
    Receipt,
    SecondOpinion,
    judge,
    receipt_from_record,
    receipt_to_record,
)
from realize.schema.verbs import (
    ARITHMETICS,
    COMMON_OPTIONS,
    EXIT_STATUSES,
    FIT_METHODS,
    FORMS,
    RECEIPT_OPTIONS,
    REDUCTION_METHODS,
    VERBS,
    Option,
    Verb,
    options_of,
)

__all__ = [
    "ARITHMETICS",
    "BASES",
    "CLAIMS",
    "COMMON_FIELDS",
    "COMMON_OPTIONS",
    "EXIT_STATUSES",
    "FIT_METHODS",
    "FORMAT_VERSION",
    "FORMS",
    "HOLDS",
    "KINDS",
    "PARAMETRIC_KINDS",
    "RECEIPT_OPTIONS",
    "REDUCTION_METHODS",
    "STRUCTURED",
    "VERBS",
    "Claim",
    "ClaimDefinition",
    "Field",
    "Kind",
    "ModelMark",
    "Option",
    "Receipt",
    "SecondOpinion",
    "Verb",
    "judge",
    "options_of",
    "receipt_from_record",
    "receipt_to_record",
]
