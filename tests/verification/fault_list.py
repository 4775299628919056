"""The list of hand-made faults; `docs/methods/faults.rst` is the same list for readers."""

from __future__ import annotations

from faults_of_claims import FITTING, REDUCTION, VERIFICATION
from faults_of_results import CONVERSIONS, FORMS, KERNELS

FAULTS = [*CONVERSIONS, *FORMS, *KERNELS, *REDUCTION, *FITTING, *VERIFICATION]
