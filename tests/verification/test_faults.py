"""Every hand-made fault is caught: by a claim, by the point check, or by a test that holds the claims to account."""

from __future__ import annotations

import re
from collections.abc import Iterator
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest
from fault_list import FAULTS
from faults import Fault, Inconsistent, Inject, Scenario, Step, after, differing
from faults_of_claims import after_first

from realize.models import FrequencyResponse
from realize.verification import conversion
from realize.verification.formation import FormationFault

PAGE = Path(__file__).resolve().parents[2] / "docs" / "methods" / "faults.rst"


@pytest.fixture(autouse=True)
def nothing_remembered() -> Iterator[None]:
    """Roots are remembered by their polynomial: those of a fault must not be found by others, nor the other way."""
    from realize.kernels.exact import roots

    roots._known.cache_clear()
    yield
    roots._known.cache_clear()


def at_run_time(scenario: Scenario) -> tuple[str, list[Step]]:
    """Return what a receipt or an exception says is wrong, and the steps that were made."""
    try:
        steps = scenario()
    except FormationFault:
        return "point check", []
    except Inconsistent as error:
        return "worked example" if "worked example" in str(error) else "consistency", []
    for step in steps:
        for claim in step.claims:
            if claim.limit is not None and claim.holds is not True:
                return f"claim {claim.name}" + ("" if claim.holds is False else ", open"), steps
    return "", steps


def by_comparison(steps: list[Step], honesty: ModuleType) -> str:
    """Return what the suite's exact comparison finds wrong with claims that the receipt is content with."""
    for step in steps:
        if isinstance(step.source, FrequencyResponse):
            truths = honesty.misfits(step.source, honesty.Side(step.result), step.result)
            found = [honesty.held("", c, *truths[c.name], 1e-13) for c in step.claims if c.name in truths]
        else:
            report = honesty.Report(0, "")
            examination = honesty.Examination(report, step.source, np.random.default_rng(0), lambda text: None, 1.0)
            examination.judged("", step.source, step.result, step.claims)
            found = report.findings
        if any(finding is not None and finding.false for finding in found):
            return "exact comparison"
        error = next((c for c in step.claims if c.name == "reduction-error"), None)
        if step.asked is not None and error is not None and error.relative is not None and error.relative > step.asked:
            return "relative error"
    return ""


def caught(scenario: Scenario, honesty: ModuleType) -> str:
    said, steps = at_run_time(scenario)
    return said or by_comparison(steps, honesty)


@pytest.mark.parametrize("fault", FAULTS, ids=lambda fault: f"{fault.says}, {fault.where}")
def test_a_fault_is_caught_where_the_list_says(
    fault: Fault, honesty: ModuleType, monkeypatch: pytest.MonkeyPatch
) -> None:
    fault.inject(monkeypatch)
    assert caught(fault.scenario, honesty) == fault.caught


SCENARIOS = list({str(fault.scenario): fault.scenario for fault in FAULTS}.values())


@pytest.mark.parametrize("scenario", SCENARIOS, ids=[f"scenario {k}" for k in range(len(SCENARIOS))])
def test_without_a_fault_nothing_is_found(scenario: Scenario, honesty: ModuleType) -> None:
    assert caught(scenario, honesty) == ""


def tenth(found: tuple[float, float]) -> tuple[float, float]:
    return found[0] / 10, found[1]


@pytest.mark.parametrize(
    "change", [after_first(conversion), after(conversion, "largest_error", tenth)], ids=["first frequency", "a tenth"]
)
def test_a_search_that_misses_the_peak_is_made_good_by_the_proof(
    change: Inject, honesty: ModuleType, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Peak taken at the first frequency, or a tenth of it: the proof raises the bound, or leaves the claim open."""
    change(monkeypatch)
    said = caught(differing, honesty)
    assert said == "" or said.endswith(", open")


def test_the_page_lists_the_same_faults() -> None:
    rows = re.findall(r"^   \* - (.+)\n     - (.+)\n     - (.+)$", PAGE.read_text(encoding="utf-8"), re.MULTILINE)
    assert rows[0] == ("Fault", "Where", "Caught by")
    assert rows[1:] == [(fault.says, f"``{fault.where}``", fault.caught) for fault in FAULTS]
    assert len(FAULTS) >= 30
