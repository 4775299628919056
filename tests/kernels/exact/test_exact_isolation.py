"""All roots of a polynomial from approximate ones, with a certificate that none is missing."""

from __future__ import annotations

import numpy as np
import pytest
from flint import fmpq, fmpq_poly

from realize.kernels.exact.isolation import roots_near
from realize.kernels.exact.polynomials import from_roots
from realize.kernels.exact.roots import roots


def exact(root: complex) -> tuple[fmpq, fmpq]:
    return fmpq(*root.real.as_integer_ratio()), fmpq(*root.imag.as_integer_ratio())


def scattered(count: int) -> list[complex]:
    rng = np.random.default_rng(count)
    upper = 10 ** rng.uniform(-2, 2, count) * np.exp(1j * rng.uniform(1.7, 3.0, count))
    return [z for root in upper.tolist() for z in (root, root.conjugate())] + [-1e3, -1e-4]


@pytest.mark.parametrize("count", [2, 10, 30])
def test_what_comes_back_are_the_roots(count: int) -> None:
    true = scattered(count)
    p = from_roots([exact(complex(root)) for root in true])
    rng = np.random.default_rng(0)
    shaken = []
    for root in true:
        if complex(root).imag >= 0:
            moved = root * (1 + 1e-9 * rng.standard_normal())
            shaken += [moved, np.conj(moved)] if complex(root).imag else [moved]
    found = roots_near(p, [complex(z) for z in shaken])
    assert found is not None
    known = np.array([root.value for root in roots(p) for _ in range(root.multiplicity)])
    order = [int(np.argmin(np.abs(known - z))) for z in found]
    assert sorted(order) == list(range(len(true)))
    np.testing.assert_allclose(found, known[order], rtol=1e-15)


def test_a_root_named_twice_and_one_left_out_is_noticed() -> None:
    p = from_roots([exact(complex(z)) for z in (-1.0, -2.0, -3.0)])
    assert roots_near(p, [-1.0 + 0j, -1.0 - 0j, -3.0 + 0j]) is None
    assert roots_near(p, [-1.0 + 0j, -1.0 - 1e-9, -3.0 + 0j]) is None


def test_too_few_starts_repeated_roots_and_bad_starts_have_no_certificate() -> None:
    p = from_roots([exact(complex(z)) for z in (-1.0, -2.0, -3.0)])
    assert roots_near(p, [-1.0 + 0j, -2.0 + 0j]) is None
    assert roots_near(p, [-1.1 + 0j, -2.0 + 0j, -3.0 + 0j]) is None
    double = from_roots([exact(complex(z)) for z in (-1.0, -1.0, -3.0)])
    assert roots_near(double, [-1.0 + 1e-8j, -1.0 - 1e-8j, -3.0 + 0j]) is None
    # a start where the slope is zero
    assert roots_near(fmpq_poly([1, 0, 1]), [0j, 0j]) is None
