"""The coupling of two states that makes a rounded constant term right to several bits more."""

from __future__ import annotations

import random

import pytest
from flint import fmpq

from realize.forms.tuned_coupling import BeyondDoubles, to_double, tuned
from realize.kernels.exact.numbers import exact, nearest


def missed(k: fmpq, d0: fmpq, n0: fmpq) -> float:
    """Return what k (s + c) misses of n0, s = d0/k and c = n0/k - s each rounded once, in units of |n0 - d0| 2^-53."""
    s = exact(to_double(d0 / k))
    c = exact(to_double(n0 / k - s))
    return abs(nearest(k * (s + c) - n0)) / (abs(nearest(n0 - d0)) * 2.0**-53)


@pytest.mark.parametrize("seed", range(40))
def test_ten_bits_are_gained(seed: int) -> None:
    rng = random.Random(seed)
    d0 = fmpq(rng.getrandbits(107), 1 << 107) * int(10 ** rng.uniform(0, 6) + 1)
    n0 = d0 * fmpq(rng.getrandbits(60), 1 << 60) + fmpq(rng.getrandbits(53), 1 << 120)
    k = fmpq(2) ** rng.randint(-3, 8)
    found = tuned(k, d0, n0)
    assert exact(to_double(found)) == found and 0.4 < nearest(found / k) < 2.2
    assert missed(found, d0, n0) < 2.0**-6


def test_numbers_near_the_ends_of_the_doubles_are_left_alone() -> None:
    k = fmpq(4)
    for d0, n0 in ((fmpq(1, 1 << 500), fmpq(1)), (fmpq(1), fmpq(1 << 600)), (fmpq(1), fmpq(0))):
        assert tuned(k, d0, n0) == k


def test_a_double_has_full_accuracy_or_there_is_none() -> None:
    assert to_double(fmpq(1, 3)) == 1 / 3 and to_double(fmpq(1, 1 << 1070)) == 2.0**-1070
    for value in (fmpq(1 << 1100), fmpq((1 << 60) + 1, 1 << 1110)):
        with pytest.raises(BeyondDoubles):
            to_double(value)
