"""Reduction against sources outside the project, each named beside its check."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from scipy.linalg import block_diag

from realize.kernels.norms import gains, peak_gain, squared_norm
from realize.kernels.response import state_response
from realize.reduction import reduce_states

DATA = Path(__file__).parents[2] / ".." / "shared" / "data"


def data_file(name: str) -> Path:
    path = DATA / name
    if not path.exists():
        pytest.skip(f"{name} is not in ../shared/data")
    return path


def collection(name: str) -> tuple[dict, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Model and expected numbers: Chahlaoui & Van Dooren, SLICOT Working Note 2002-2, unless said otherwise."""
    expected = json.loads(data_file("models/expected.json").read_text())[name]
    with np.load(data_file(f"models/{name}.npz")) as archive:
        fields = {}
        for key in archive.files:
            stem = key.removesuffix("_data")
            if key.endswith("_data"):
                matrix = np.zeros(archive[f"{stem}_shape"])
                np.add.at(matrix, (archive[f"{stem}_row"], archive[f"{stem}_col"]), archive[key])
                fields[stem] = matrix
            elif not key.endswith(("_row", "_col", "_shape")):
                fields[key] = archive[key]
    A, B, C = fields["A"], fields["B"], fields["C"]
    if "E" in fields:
        solved = np.linalg.solve(fields["E"], np.hstack([A, B]))
        A, B = solved[:, : A.shape[0]], solved[:, A.shape[0] :]
    return expected | {"arrays": fields}, A, B, C, np.zeros((C.shape[0], B.shape[1]))


def companion(numerator, denominator):
    """Controllable companion form with feed-through of a proper transfer function, highest power first."""
    den = np.asarray(denominator, dtype=float)
    num = np.zeros(den.size)
    num[den.size - len(numerator) :] = numerator
    num, den = num / den[0], den / den[0]
    n = den.size - 1
    A = np.diag(np.ones(n - 1), -1)
    A[0] = -den[1:]
    return A, np.eye(n)[:, :1], (num[1:] - num[0] * den[1:])[None], np.array([[num[0]]])


def difference(model, small):
    A, B, C, D = model
    joined = block_diag(A, small.A), np.vstack([B, small.B]), np.hstack([C, -small.C]), D - small.D
    return peak_gain(*joined, sampled=False, tolerance=1e-10)


# B. C. Moore, IEEE Trans. Automatic Control 26 (1981) 17-32, section VI; example from memory, values recomputed with 50
# digits, the three printed digits agree.
MOORE_VALUES = [0.015938387521009855, 0.002724251898439185, 0.00012720366224391403, 8.005951481250727e-06]
MOORE_ERRORS = {1: 0.005218834326872587, 2: 0.00024802932750385664, 3: 1.6011902962530705e-05}


def test_moore_1981():
    model = companion([1, 4], [1, 19, 113, 245, 150])
    for order, error in MOORE_ERRORS.items():
        small = reduce_states(*model, sampled=False, order=order)
        assert small.hankel_singular_values == pytest.approx(MOORE_VALUES, rel=1e-11)
        assert np.all(np.abs(small.hankel_singular_values - MOORE_VALUES) <= small.hankel_errors * 2)
        assert difference(model, small).value == pytest.approx(error, rel=1e-8)
        assert small.tail_bound == pytest.approx(2 * sum(MOORE_VALUES[order:]), rel=1e-11)


# Closed forms, derived.
@pytest.mark.parametrize(
    ("numerator", "denominator", "values"),
    [
        ([1], [1, 1], [0.5]),
        ([1], [1, 2, 1], [(1 + 2**0.5) / 4, (2**0.5 - 1) / 4]),
        ([-1, 1], [1, 1], [1.0]),
        ([1, -3, 3], [1, 3, 3], [1.0, 1.0]),
        ([1, -6, 12], [1, 6, 12], [1.0, 1.0]),
    ],
)
def test_closed_forms(numerator, denominator, values):
    small = reduce_states(*companion(numerator, denominator), sampled=False, order=0)
    assert small.hankel_singular_values == pytest.approx(values, rel=2e-14)


def test_fourth_order_example():
    """(s^3 + 7 s^2 + 24 s + 24) / ((s+1)(s+2)(s+3)(s+4)), e.g. Mukherjee & Mishra 1987; from memory, recomputed."""
    model = companion([1, 7, 24, 24], [1, 10, 35, 50, 24])
    small = reduce_states(*model, sampled=False, order=2)
    expected = [0.5178709963842306, 0.03085793752861651, 0.012415490056088817, 0.0005714510882970243]
    assert small.hankel_singular_values == pytest.approx(expected, rel=1e-12)
    assert difference(model, small).value == pytest.approx(0.025973882288771618, rel=1e-9)
    assert state_response(*model, None, np.array([0j]))[0, 0, 0].real == pytest.approx(1.0, rel=1e-14)


def seventh_order():
    A = np.zeros((7, 7))
    A[0, [0, 2, 3]] = [-0.04165, 4.92, -4.92]
    A[1, [0, 1]] = [-5.21, -12.5]
    A[2, [1, 2]] = [3.33, -3.33]
    A[3, [0, 4]] = [0.545, -0.545]
    A[4, [3, 4, 6]] = [4.92, -0.04165, 4.92]
    A[5, [4, 5]] = [-5.21, -12.5]
    A[6, [5, 6]] = [3.33, -3.33]
    B = np.zeros((7, 2))
    B[1, 0] = B[5, 1] = 12.5
    C = np.zeros((3, 7))
    C[0, 0] = C[1, 3] = C[2, 4] = 1
    return A, B, C, np.zeros((3, 2))


# SLICOT Library 5.9.1, example program TAB09AD (BSD-3-Clause, The SLICOT Team): four printed decimals.
SEVENTH_ORDER_VALUES = [2.5139, 2.0846, 1.9178, 0.7666, 0.5473, 0.0253, 0.0246]
SEVENTH_ORDER_A = [
    [1.3451, 5.0399, 0, 0, 4.5315],
    [-4.0214, -3.6604, 0, 0, -0.9056],
    [0, 0, 0.5124, 1.7910, 0],
    [0, 0, -4.2167, -2.9900, 0],
    [1.2402, 1.6416, 0, 0, -0.0586],
]


def test_seventh_order_example_of_slicot():
    model = seventh_order()
    small = reduce_states(*model, sampled=False, order=5)
    assert np.abs(small.hankel_singular_values - SEVENTH_ORDER_VALUES).max() <= 5e-5
    expected = np.sort_complex(np.linalg.eigvals(SEVENTH_ORDER_A))
    assert np.abs(np.sort_complex(np.linalg.eigvals(small.A)) - expected).max() <= 3e-4
    # the example asks for values above 0.1
    assert reduce_states(*model, sampled=False, absolute_error=0.1).order == 5
    assert 0.0253 - 5e-5 <= difference(model, small).value <= 0.0998 + 2e-4


# Chahlaoui & Van Dooren 2002; norms and errors computed independently (models/expected.json).
@pytest.mark.parametrize(
    ("name", "leading", "limit"), [("build", 48, 1e-10), ("heat-cont", 12, 1e-8), ("iss1R", 200, 1e-8)]
)
def test_published_hankel_singular_values(name, leading, limit):
    expected, *model = collection(name)
    published = np.sort(expected["arrays"]["published_hsv"].ravel())[::-1]
    small = reduce_states(*model, sampled=False, order=4)
    error = np.abs(small.hankel_singular_values - published)[:leading]
    assert np.all(error <= limit * published[:leading])


def test_values_of_the_building_to_full_accuracy():
    """One input, one output: the values are the moduli of the cross Gramian's eigenvalues, here with 120 digits.

    The published ones are off by 6e-11, ours by 2e-13, and every estimated error covers the true one.
    """
    import flint

    _, A, B, C, D = collection("build")
    n = A.shape[0]
    before = flint.ctx.prec
    try:
        flint.ctx.prec = 400
        poles, right = flint.acb_mat(n, n, [float(x) for x in A.ravel()]).eig(right=True)
        b = right.inv() * flint.acb_mat(n, 1, [float(x) for x in B.ravel()])
        c = flint.acb_mat(1, n, [float(x) for x in C.ravel()]) * right
        cross = [-(b[i, 0] * c[0, j]) / (poles[i] + poles[j]) for i in range(n) for j in range(n)]
        exact = np.sort([abs(complex(value)) for value in flint.acb_mat(n, n, cross).eig()])[::-1]
    finally:
        flint.ctx.prec = before
    small = reduce_states(A, B, C, D, sampled=False, order=4)
    error = np.abs(small.hankel_singular_values - exact)
    assert np.all(error <= 2e-12 * exact) and np.all(error <= small.hankel_errors)


@pytest.mark.parametrize("name", ["build", "heat-cont", "iss1R"])
def test_errors_of_the_collection(name):
    expected, *model = collection(name)
    expected = expected["computed_here_bt"]
    found = peak_gain(*model, sampled=False, tolerance=1e-10)
    assert found.basis == "bounded" and found.value == pytest.approx(expected["hinf"], rel=1e-10)
    assert found.frequency == pytest.approx(expected["peak"], rel=1e-6)
    assert squared_norm(*model, sampled=False) == pytest.approx(expected["h2"], rel=1e-10)
    for order, case in expected["bt"].items():
        small = reduce_states(*model, sampled=False, order=int(order))
        assert small.tail_bound == pytest.approx(case["bound"], rel=2e-8)
        A, B, C, D = model
        joined = block_diag(A, small.A), np.vstack([B, small.B]), np.hstack([C, -small.C]), D - small.D
        tolerance = 1e-10 if joined[0].shape[0] <= 60 else 1e-6
        error = peak_gain(*joined, sampled=False, tolerance=tolerance)
        # the expected values are the largest on a grid: never above the peak, and close below it
        assert case["hinf_error"] * (1 - 1e-7) <= error.value <= case["hinf_error"] * (1 + 1e-3)
        assert case["lower"] * (1 - 1e-8) <= error.value <= small.bound


def test_heat_conductor_where_rounding_used_to_rule():
    """Order 10 of 200 (heat-cont): the error is 1e-8 of the gain, and still between its bounds."""
    _, *model = collection("heat-cont")
    small = reduce_states(*model, sampled=False, order=10)
    w = np.array([0.0, 0.3, 3.0, 29.3, 100.0])
    one = state_response(*model, None, 1j * w)
    two = state_response(small.A, small.B, small.C, small.D, None, 1j * w)
    assert small.rounding <= 1e-10
    assert small.lower_bound * 0.1 <= gains(one - two).max() <= small.bound


def test_published_response_of_the_building():
    """Magnitudes printed with the collection."""
    expected, *model = collection("build")
    w, magnitude = (expected["arrays"][key].ravel() for key in ("published_w", "published_mag"))
    own = gains(state_response(*model, None, 1j * w))
    assert np.abs(own / magnitude - 1).max() <= 1e-11


def test_penzl_1006_states():
    """Penzl 2006 (formula from memory): six nearly equal leading values."""
    expected, *model = collection("fom")
    small = reduce_states(*model, sampled=False, order=10)
    values = expected["computed_here"]["hsv_top20"]
    assert small.hankel_singular_values[:12] == pytest.approx(values[:12], rel=1e-9)
    assert squared_norm(*model, sampled=False) == pytest.approx(expected["computed_here"]["h2"], rel=1e-9)


def test_aircraft_and_column_poles():
    """CTDSX collection (Kressner, Mehrmann, Penzl, SLICOT Working Note 1998-9): which ones are stable."""
    for name in ("ctdsx_1_03", "ctdsx_1_04", "ctdsx_1_05", "ctdsx_1_07", "ctdsx_1_08"):
        expected, *model = collection(name)
        small = reduce_states(*model, sampled=False, order=model[0].shape[0])
        assert (small.kept_order == 0) == expected["computed_here"]["stable"], name


def slycot_truncation(model, order, sampled):
    slycot = pytest.importorskip("slycot")
    A, B, C, _ = model
    n, m, p = A.shape[0], B.shape[1], C.shape[0]
    return slycot.ab09ad("D" if sampled else "C", "B", "N", n, m, p, A.copy(), B.copy(), C.copy(), nr=order, tol=0.0)


@pytest.mark.parametrize("sampled", [False, True])
@pytest.mark.parametrize(("n", "m", "p", "order"), [(6, 1, 1, 3), (20, 2, 3, 8), (60, 1, 3, 10)])
def test_slycot_agrees(n, m, p, order, sampled):
    """ab09ad of slycot (SLICOT): same values, same response."""
    rng = np.random.default_rng(n)
    A = rng.standard_normal((n, n))
    poles = np.linalg.eigvals(A)
    A = A / np.abs(poles).max() * 0.9 if sampled else A - (poles.real.max() + 0.5) * np.eye(n)
    model = A, rng.standard_normal((n, m)), rng.standard_normal((p, n)), np.zeros((p, m))
    count, a, b, c, values = slycot_truncation(model, order, sampled)
    small = reduce_states(*model, sampled=sampled, order=order)
    assert count == order == small.order
    assert np.abs(values - small.hankel_singular_values).max() <= 1e-11 * values[0]
    w = np.linspace(0, 3, 50)
    points = np.exp(1j * w) if sampled else 1j * w
    one = state_response(a, b, c, model[3], None, points)
    two = state_response(small.A, small.B, small.C, small.D, None, points)
    assert np.abs(one - two).max() <= 1e-8 * np.abs(two).max()
