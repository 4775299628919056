"""Matrix fractions: exact identities on a hundred matrices, indices, Bezout, states and back, what is refused."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from realize.conversions.matrix_fraction import bezout_identity
from realize.errors import InputError, Refused, UsageError
from realize.files import read, write
from realize.forms.coprime_factors import coprime_factors
from realize.models import MatrixFraction, Model, StateSpace, TimeBase, TransferFunction, digest
from realize.steps import convert, inspect

W = [0.05, 0.3, 1.0, 2.7, 20.0]
Poly = list[Fraction]


def plus(a: Poly, b: Poly) -> Poly:
    size = max(len(a), len(b))
    a, b = [Fraction(0)] * (size - len(a)) + a, [Fraction(0)] * (size - len(b)) + b
    return [x + y for x, y in zip(a, b, strict=True)]


def times(a: Poly, b: Poly) -> Poly:
    value = [Fraction(0)] * (len(a) + len(b) - 1)
    for i, x in enumerate(a):
        for j, y in enumerate(b):
            value[i + j] += x * y
    return value


def trimmed(a: Poly) -> Poly:
    while len(a) > 1 and a[0] == 0:
        a = a[1:]
    return a


def product(A: list[list[Poly]], B: list[list[Poly]]) -> list[list[Poly]]:
    rows = []
    for row in A:
        line = []
        for j in range(len(B[0])):
            value = [Fraction(0)]
            for k, entry in enumerate(row):
                value = plus(value, times(entry, B[k][j]))
            line.append(trimmed(value))
        rows.append(line)
    return rows


def determinant(A: list[list[Poly]]) -> Poly:
    if len(A) == 1:
        return trimmed(A[0][0])
    value = [Fraction(0)]
    for j, entry in enumerate(A[0]):
        minor = [row[:j] + row[j + 1 :] for row in A[1:]]
        value = plus(value, times([entry_k * (-1) ** j for entry_k in entry], determinant(minor)))
    return trimmed(value)


def polynomials(values: np.ndarray) -> list[list[Poly]]:
    return [
        [[Fraction(float(c)) for c in values[:, i, j]] for j in range(values.shape[2])] for i in range(values.shape[1])
    ]


def shared_poles(seed: int) -> tuple[TransferFunction, int]:
    """Poles 1/2, 1, 2, ... of given ranks: the McMillan degree is their sum, by Gilbert's formula for simple poles."""
    rng = np.random.default_rng(seed)
    p, m = (int(k) for k in rng.integers(2, 5, size=2))
    poles = rng.choice([-0.5, -1.0, -2.0, -4.0, -8.0], size=int(rng.integers(1, 4)), replace=False)
    ranks = rng.integers(1, min(p, m) + 1, size=poles.size)
    residues = []
    for rank in ranks:
        # identity on top: the rank is exact
        left = np.vstack([np.eye(rank), rng.integers(-3, 4, size=(p - rank, rank))])
        right = np.hstack([np.eye(rank), rng.integers(-3, 4, size=(rank, m - rank))])
        residues.append(left[rng.permutation(p)] @ right[:, rng.permutation(m)])
    below = np.poly(poles)
    direct = rng.integers(-1, 2, size=(p, m)).astype(float)
    numerator = [
        [
            sum(residues[k][i, j] * np.append(0.0, np.poly(np.delete(poles, k))) for k in range(poles.size))
            + direct[i, j] * below
            for j in range(m)
        ]
        for i in range(p)
    ]
    return TransferFunction(numerator=numerator, denominator=[[below] * m] * p), int(ranks.sum())


@pytest.mark.parametrize("side", ["left", "right"])
@pytest.mark.parametrize("block", range(5))
def test_the_identity_is_exact_and_the_degree_the_least(block: int, side: str) -> None:
    """A hundred matrices: N D^-1 = G as polynomials, and the degree of det D is the McMillan degree."""
    for seed in range(20 * block, 20 * block + 20):
        source, degree = shared_poles(seed)
        made = convert(source, "matrix-fraction", side=side)
        model = made.model
        assert isinstance(model, MatrixFraction) and model.side == side and not model.decimals
        N, D = polynomials(model.numerator), polynomials(model.denominator)
        below = [Fraction(float(c)) for c in source.denominator[0][0]]
        above = [[[Fraction(float(c)) for c in entry] for entry in row] for row in source.numerator]
        shown = made.receipt.details["matrix_fraction"]
        indices = shown["controllability_indices" if side == "right" else "observability_indices"]
        scaled = [[trimmed(times(entry, below)) for entry in row] for row in N]
        exact = all(c.denominator & (c.denominator - 1) == 0 for row in D for entry in row for c in entry)
        if made.receipt.claim("response-error").value == 0.0:
            assert exact
            assert (product(above, D) if side == "right" else product(D, above)) == scaled
        assert len(determinant(D)) - 1 == degree == sum(indices) == shown["degree"] == inspect(source)["minimal_order"]
        size = len(D)
        leading = np.zeros((size, size))
        for k in range(size):
            lines = [row[k] for row in D] if side == "right" else D[k]
            degrees = [len(trimmed(entry)) - 1 for entry in lines]
            assert max(degrees) == indices[k]
            leading[:, k] = [
                float(trimmed(entry)[0]) if d == indices[k] and any(entry) else 0.0
                for d, entry in zip(degrees, lines, strict=True)
            ]
        assert np.array_equal(np.tril(leading), np.eye(size)), "unit upper triangular: reduced"
        assert not made.receipt.failed


def test_most_of_the_hundred_are_exact_in_doubles() -> None:
    """The check above has something to check: coefficients that are doubles exactly."""
    count = 0
    for seed in range(20):
        made = convert(shared_poles(seed)[0], "matrix-fraction")
        count += made.receipt.claim("response-error").value == 0.0
    assert count >= 5


def test_the_identity_of_rational_coefficients() -> None:
    """Before any rounding: the kernel's fraction against the transfer matrix, over the rationals."""
    from realize.kernels.exact.matrix_fractions import bezout, coprime_right, multiplied_out
    from realize.kernels.exact.polynomials import ONE, ZERO, reduce_fraction
    from realize.models.fractions import form_fractions

    for seed in range(100):
        source, degree = shared_poles(seed)
        grid = [[reduce_fraction(n, d) for n, d in row] for row in form_fractions(source)]
        found = coprime_right(grid)
        numerators, det = multiplied_out(found.N, found.D, "right")
        assert det.degree() == degree == sum(found.indices)
        for row, line in zip(grid, numerators, strict=True):
            for (n, d), above in zip(row, line, strict=True):
                assert n * det == d * above
        if seed < 25:
            X, Y = bezout(found.N, found.D) or ([], [])
            m = len(found.D)
            for i in range(m):
                for j in range(m):
                    value = sum((X[i][k] * found.N[k][j] for k in range(len(found.N))), ZERO)
                    value += sum((Y[i][k] * found.D[k][j] for k in range(m)), ZERO)
                    assert value == (ONE if i == j else ZERO)


def test_a_common_factor_has_no_bezout_identity() -> None:
    common = MatrixFraction(
        side="right",
        numerator=[[[1.0, 0.0]], [[1.0, 1.0]]],
        denominator=[[[1.0, 0.0], [0.0, 1.0]], [[3.0, 0.0], [0.0, 2.0]], [[2.0, 0.0], [0.0, 1.0]]],
    )
    assert bezout_identity(common) is None
    assert inspect(common)["order"] == 4 and inspect(common)["minimal_order"] == 3
    reduced = convert(common, "matrix-fraction", side="right").model
    found = bezout_identity(reduced)
    assert found is not None and isinstance(reduced, MatrixFraction) and reduced.order == 3
    X, Y = found
    N, D = polynomials(reduced.numerator), polynomials(reduced.denominator)
    for i in range(2):
        for j in range(2):
            assert trimmed(plus(product(X, N)[i][j], product(Y, D)[i][j])) == [Fraction(int(i == j))]
    left = convert(common, "matrix-fraction", side="left").model
    X, Y = bezout_identity(left) or ([], [])
    N, D = polynomials(left.numerator), polynomials(left.denominator)
    assert trimmed(plus(product(N, X)[0][0], product(D, Y)[0][0])) == [Fraction(1)]


@pytest.mark.parametrize("side", ["left", "right"])
@pytest.mark.parametrize("seed", range(6))
def test_states_in_controller_or_observer_form(side: str, seed: int, oracle: Any) -> None:
    source, degree = shared_poles(seed)
    fraction = convert(source, "matrix-fraction", side=side)
    made = convert(fraction, "state-space")
    assert made.model.order == degree and made.model.E is None
    assert oracle.error(fraction.model, made.model, W) < 1e-13 and not made.receipt.failed
    again = convert(made, "matrix-fraction", side=side)
    name = "controllability_indices" if side == "right" else "observability_indices"
    assert again.receipt.details["matrix_fraction"][name] == fraction.receipt.details["matrix_fraction"][name]
    assert oracle.error(source, again.model, W) < 1e-12


def test_an_improper_plant(oracle: Any) -> None:
    source = TransferFunction(
        numerator=[[[1.0, 0.0], [1.0, 0.0, 0.0]], [[2.0, 0.0], [2.0, 0.0, 1.0]]],
        denominator=[[[1.0], [1.0]], [[1.0], [1.0, 1.0]]],
    )
    for side in ("left", "right"):
        made = convert(source, "matrix-fraction", side=side)
        assert made.model.order == 1 and oracle.error(source, made.model, W) == 0.0
        states = convert(made, "state-space")
        assert states.model.E is not None and oracle.error(source, states.model, W) < 1e-16


@pytest.mark.parametrize("suffix", ["json", "npz"])
def test_files(suffix: str, tmp_path: Path, run: Callable[..., Any]) -> None:
    source = convert(shared_poles(3)[0], "matrix-fraction", side="left").model
    write(source, tmp_path / f"plant.{suffix}")
    assert digest(read(tmp_path / f"plant.{suffix}")) == digest(source)
    done = run("convert", tmp_path / f"plant.{suffix}", "--to", "matrix-fraction", "--side", "right")
    assert done.status == 0 and done.record["side"] == "right"


GOOD: dict[str, Any] = {"side": "right", "numerator": [[[1.0]]], "denominator": [[[1.0]], [[2.0]]]}


@pytest.mark.parametrize(
    ("change", "place"),
    [
        ({"side": "top"}, "side"),
        ({"denominator": [[[1.0, 2.0]]]}, "denominator"),
        ({"denominator": [[1.0]]}, "denominator"),
        ({"numerator": []}, "numerator"),
        ({"numerator": [[[np.inf]]]}, "numerator"),
    ],
)
def test_shapes(change: dict[str, Any], place: str) -> None:
    with pytest.raises(InputError, match=place):
        MatrixFraction(**{**GOOD, **change})


def test_a_zero_determinant_is_no_model() -> None:
    """s^2 - s^2 = 0: found when the fraction is multiplied out, not in doubles."""
    model = MatrixFraction(
        side="right", numerator=[[[1.0, 1.0]]], denominator=[[[1.0, 1.0], [1.0, 1.0]], [[0.0, 0.0], [0.0, 0.0]]]
    )
    with pytest.raises(InputError, match="determinant that is zero"):
        convert(model, "transfer-function")


def test_usage() -> None:
    source = shared_poles(0)[0]
    with pytest.raises(UsageError, match="--side"):
        convert(source, "state-space", side="left")
    with pytest.raises(UsageError, match="--side"):
        convert(source, "matrix-fraction", side="top")
    with pytest.raises(Refused, match="Bezout"):
        bezout_identity(source)


UNSTABLE = StateSpace(
    A=[[1.0, 2.0, 0.0], [0.0, -3.0, 1.0], [1.0, 0.0, 0.5]],
    B=[[1.0, 0.0], [0.0, 1.0], [1.0, 1.0]],
    C=[[1.0, 0.0, 1.0]],
    D=[[0.5, 0.0]],
)


def at(model: Model, points: np.ndarray) -> np.ndarray:
    return model.evaluate(points)


@pytest.mark.parametrize("sampled", [False, True])
@pytest.mark.parametrize("placed", [False, True])
def test_coprime_factors(sampled: bool, placed: bool) -> None:
    model = UNSTABLE if not sampled else UNSTABLE.with_(time=TimeBase("sampled", period=1.0))
    points = np.exp(1j * np.array([0.1, 1.0, 2.5])) if sampled else 1j * np.array([0.0, 0.7, 3.0, 50.0])
    poles = np.array([0.1, 0.2, -0.3]) if sampled else np.array([-1.0, -2.0, -3.0])
    found = coprime_factors(model, **({"feedback_poles": poles, "observer_poles": poles} if placed else {}))
    G = at(model, points)
    N, M, left_N, left_M, U, V = (at(getattr(found, name), points) for name in ("N", "M", "left_N", "left_M", "U", "V"))
    assert np.abs(N - G @ M).max() < 1e-11 * np.abs(N).max()
    assert np.abs(left_M @ G - left_N).max() < 1e-11 * np.abs(left_N).max()
    assert np.abs(U @ N + V @ M - np.eye(2)).max() < 1e-10
    assert found.identity_error < 1e-10 and found.return_error < 1e-11
    for factor in (found.N, found.left_N, found.U):
        values = np.linalg.eigvals(factor.A)
        assert np.all(np.abs(values) < 1) if sampled else np.all(values.real < 0)
        if placed:
            assert np.sort(values.real) == pytest.approx(np.sort(poles), rel=1e-6)
    if not placed:
        star = lambda X: np.conj(np.swapaxes(X, 1, 2))  # noqa: E731
        assert np.abs(star(M) @ M + star(N) @ N - np.eye(2)).max() < 1e-11
        assert np.abs(left_M @ star(left_M) + left_N @ star(left_N) - np.eye(1)).max() < 1e-11


def test_coprime_factors_that_do_not_exist() -> None:
    hidden = StateSpace(A=np.diag([1.0, -1.0]), B=[[0.0], [1.0]], C=[[1.0, 1.0]])
    with pytest.raises(Refused, match=r"Riccati|stabilisable"):
        coprime_factors(hidden)
    with pytest.raises(Refused, match="state model"):
        coprime_factors(TransferFunction(numerator=[1.0], denominator=[1.0, 1.0]))
    with pytest.raises(UsageError, match="go together"):
        coprime_factors(UNSTABLE, feedback_poles=np.array([-1.0, -2.0, -3.0]))
    with pytest.raises(UsageError, match="3, all stable"):
        coprime_factors(UNSTABLE, feedback_poles=np.array([1.0]), observer_poles=np.array([1.0]))
