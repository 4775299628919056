"""Hankel singular values against sources outside the project, each named beside its check."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from realize import StateSpace, TransferFunction, hankel_singular_values, read
from realize.testing.gramians import gramian_product, misplaced, rational

DATA = Path(__file__).parents[2] / ".." / "shared" / "data"


def data_file(name: str) -> Path:
    path = DATA / name
    if not path.exists():
        pytest.skip(f"{name} is not in ../shared/data")
    return path


def test_moore_1981():
    """B. C. Moore, IEEE Trans. Automat. Control 26 (1981), section VI: (s+4)/((s+1)(s+3)(s+5)(s+10)), from memory."""
    found = hankel_singular_values(TransferFunction(numerator=[1.0, 4.0], denominator=[1.0, 19.0, 113.0, 245.0, 150.0]))
    # printed with three digits
    np.testing.assert_allclose(found.values, [0.0159, 0.00272, 0.000127, 8e-6], rtol=5e-3)
    # computed beforehand with 50 digits
    computed = [0.015938387521009855, 0.002724251898439185, 0.00012720366224391403, 8.005951481250727e-06]
    np.testing.assert_allclose(found.values, computed, rtol=4e-16)
    assert found.basis == "proved"


@pytest.mark.parametrize(
    ("numerator", "denominator", "values"),
    [
        ([1.0], [1.0, 1.0], [0.5]),
        ([1.0], [1.0, 2.0, 1.0], [(1 + 2**0.5) / 4, (2**0.5 - 1) / 4]),
        ([-1.0, 1.0], [1.0, 1.0], [1.0]),
        ([1.0, -3.0, 3.0], [1.0, 3.0, 3.0], [1.0, 1.0]),
        ([1.0, -6.0, 12.0], [1.0, 6.0, 12.0], [1.0, 1.0]),
    ],
)
def test_closed_forms(numerator, denominator, values):
    """Lag, double pole and all-passes: the Hankel operator of an all-pass is unitary where it is not zero."""
    found = hankel_singular_values(TransferFunction(numerator=numerator, denominator=denominator))
    np.testing.assert_allclose(found.values, values, rtol=4e-16)
    # the formulas are evaluated in doubles
    assert np.all(np.abs(found.values - values) <= found.errors + 2**-51 * np.array(values))


def test_slicot_example_ab13ad():
    """SLICOT library 5.9.1, example program TAB13AD (BSD-3, The SLICOT Team), printed with four decimals."""
    A = np.zeros((7, 7))
    A[0, [0, 2, 3]] = -0.04165, 4.92, -4.92
    A[1, :2] = -5.21, -12.5
    A[2, 1:3] = 3.33, -3.33
    A[3, [0, 4]] = 0.545, -0.545
    A[4, [3, 4, 6]] = 4.92, -0.04165, 4.92
    A[5, 4:6] = -5.21, -12.5
    A[6, 5:7] = 3.33, -3.33
    B = np.zeros((7, 2))
    B[1, 0] = B[5, 1] = 12.5
    C = np.eye(7)[[0, 3, 4]]
    found = hankel_singular_values(StateSpace(A=A, B=B, C=C))
    np.testing.assert_allclose(found.values, [2.5139, 2.0846, 1.9178, 0.7666, 0.5473, 0.0253, 0.0246], atol=5.1e-5)
    assert round(found.values[0], 5) == 2.51388
    assert found.basis == "proved" and np.all(found.errors < 1e-13 * found.values)


def test_all_48_values_of_the_building():
    """Y. Chahlaoui, P. Van Dooren, SLICOT Working Note 2002-2: the authors' own values, computed in doubles.

    The largest agree to 4e-12. The farthest apart, number 43, is 6e-11 off: high-precision Gramians side with ours.
    """
    path = data_file("models/build.npz")
    with np.load(path) as archive:
        published = np.sort(np.abs(archive["published_hsv"].ravel()))[::-1]
    model = read(path)
    found = hankel_singular_values(model)
    assert found.values.size == published.size == 48
    np.testing.assert_allclose(found.values, published, rtol=1e-10)
    np.testing.assert_allclose(found.values[:10], published[:10], rtol=5e-12)
    square = gramian_product(rational(model.A), rational(model.B), rational(model.C), 600)
    assert misplaced(square, found.values.tolist(), found.errors.tolist(), 600, [0, 43]) == []
    assert misplaced(square, published.tolist(), (1e-11 * published).tolist(), 600, [43]) == [43]
    assert found.basis == "proved" and np.all(found.errors < 1e-13 * found.values)


@pytest.mark.parametrize("name", ["heat-cont", "iss1R"])
def test_leading_values_of_the_collection(name):
    """Chahlaoui & Van Dooren 2002: ten values computed beforehand in doubles (``expected.json`` of the check data)."""
    expected = json.loads(data_file("models/expected.json").read_text())[name]["computed_here"]["hsv_top10"]
    found = hankel_singular_values(read(data_file(f"models/{name}.npz")))
    tolerance = 1e-9 * found.values[0] if name == "heat-cont" else 0.0
    np.testing.assert_allclose(found.values[:10], expected, rtol=1e-9, atol=tolerance)
    assert found.basis == "measured"
    # far below the first, doubles know nothing, and the errors say so
    assert found.errors[-1] > found.values[-1]
