"""One-sided Jacobi rotations with columns in units of their own."""

from __future__ import annotations

import numpy as np
from flint import arb, arb_mat

from realize.kernels.exact.numbers import precision
from realize.kernels.jacobi import orthogonal_columns, tournament


def cosines(X, exponents):
    W = orthogonal_columns(X, exponents)
    n = X.shape[1]
    with precision(300):
        D = [arb(2) ** int(e) for e in exponents]
        V = arb_mat([[arb(float(W[i, j])) * D[j] / D[i] for j in range(n)] for i in range(n)])
        M = arb_mat([[arb(float(entry)) * D[j] for j, entry in enumerate(row)] for row in X])
        Z = M * V
        G, I = (Z.transpose() * Z).tolist(), (V.transpose() * V).tolist()
        worst = max(abs(float((G[i][j] / (G[i][i] * G[j][j]).sqrt()).mid())) for i in range(n) for j in range(i))
        turn = max(abs(float((I[i][j] - int(i == j)).mid())) for i in range(n) for j in range(n))
        lengths = sorted((float(G[k][k].sqrt().log().mid()) for k in range(n)), reverse=True)
    return worst, turn, lengths


def test_columns_of_like_length():
    X = np.random.default_rng(2).standard_normal((9, 7))
    worst, turn, lengths = cosines(X, np.zeros(7, dtype=int))
    assert worst < 1e-14 and turn < 1e-14
    np.testing.assert_allclose(np.exp(lengths), np.linalg.svd(X)[1], rtol=1e-13)


def test_lengths_far_beyond_the_range_of_doubles():
    X = np.random.default_rng(3).standard_normal((6, 6))
    exponents = np.array([0, -3, -900, -1500, -1501, -4000])
    worst, turn, lengths = cosines(X, exponents)
    # rounding of the columns counts by the condition of X
    assert worst < np.finfo(float).eps * np.linalg.cond(X) and turn < 1e-14
    assert lengths[-1] < -3990 * np.log(2)


def test_order_of_units_does_not_matter():
    X = np.random.default_rng(4).standard_normal((5, 5))
    exponents = np.array([-40, 10, 0, -600, 300])
    order = np.array([4, 1, 2, 0, 3])
    np.testing.assert_allclose(cosines(X, exponents)[2], cosines(X[:, order], exponents[order])[2], rtol=1e-13)


def test_no_column_one_column_zero_column():
    assert orthogonal_columns(np.zeros((3, 0)), np.zeros(0, dtype=int)).shape == (0, 0)
    assert orthogonal_columns(np.ones((3, 1)), np.zeros(1, dtype=int)).tolist() == [[1.0]]
    W = orthogonal_columns(np.array([[1.0, 0.0], [1.0, 0.0]]), np.zeros(2, dtype=int))
    assert np.all(np.isfinite(W))


def test_every_pair_meets_once():
    for n in (2, 3, 6, 7):
        met = [(int(a), int(b)) for first, second in tournament(n) for a, b in zip(first, second, strict=True)]
        assert sorted(met) == [(a, b) for a in range(n) for b in range(a + 1, n)]
