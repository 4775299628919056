"""A sample of benchmarks/accuracy/honesty.py: 200 steps on generated models, each claim against the exact error."""

from __future__ import annotations

from types import ModuleType

import pytest

SEED = 20
#: Steps of each of the twenty families.
EACH = 10


@pytest.mark.parametrize("family", range(20))
def test_no_claim_is_below_the_exact_error(family: int, honesty: ModuleType) -> None:
    """One step a model: a conversion, a reduction or a fit; share 0 stands for one."""
    name = list(honesty.FAMILIES)[family]
    reports = [honesty.examine(index, SEED, name, 0.0) for index in range(EACH)]
    assert [finding.says for report in reports for finding in report.findings if finding.false] == []
    assert [text for report in reports for text in report.crashed] == []


def test_the_sample_is_of_all_families_and_most_steps_make_claims(honesty: ModuleType) -> None:
    assert len(honesty.FAMILIES) == 20
    reports = [honesty.examine(index, SEED, None, 0.0) for index in range(10)]
    assert sum(bool(report.findings) for report in reports) >= 5


def test_a_false_claim_is_found(honesty: ModuleType) -> None:
    """1/(s+1) against 1.001/(s+1), said to be off by 1e-4: the comparison must not agree."""
    from flint import arb

    from realize.schema import judge

    claim = judge("response-error", 1e-4, basis="proved", uncertainty=1e-6, limit=1e-3)
    finding = honesty.held("convert", claim, arb("0.001"), 1.0)
    assert finding.false and finding.ratio < 0
    right = judge("response-error", 1e-3, basis="proved", uncertainty=1e-6, limit=1e-2)
    assert not honesty.held("convert", right, arb("0.001"), 1.0).false


def test_the_oracle_agrees_with_the_fractions_of_python(honesty: ModuleType, oracle: type) -> None:
    """Two oracles that share nothing: polynomials over python-flint, and elimination over Python's fractions."""
    from fractions import Fraction

    from honesty_oracle import _at, fractions_of, rational

    for index in range(0, 40, 3):
        _, model, _ = honesty.generated(index, SEED)
        if model.time.sampled:
            s = Fraction(3, 5), Fraction(4, 5)
        else:
            s = Fraction(0), Fraction(7, 8)
        point = rational(s[0]), rational(s[1])
        for one, two in zip(fractions_of(model), oracle.at(model, s), strict=True):
            for (n, d), value in zip(one, two, strict=True):
                above, below = _at(n, point), _at(d, point)
                x, y = rational(value[0]), rational(value[1])
                assert (below[0] * x - below[1] * y, below[0] * y + below[1] * x) == above
