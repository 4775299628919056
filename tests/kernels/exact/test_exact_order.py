"""Exact minimal order and predicted operations."""

import json
from pathlib import Path

import numpy as np
import pytest

from realize.kernels.exact.cost import (
    BUDGET,
    affordable,
    evaluation_operations,
    matrix_bits,
    polynomial_bits,
    rank_operations,
    residues_operations,
    roots_operations,
    solve_operations,
    transfer_operations,
)
from realize.kernels.exact.order import mcmillan_degree, minimal_order
from realize.kernels.exact.polynomials import polynomial

HARD = Path(__file__).parents[4] / "shared" / "data" / "hard-inputs.json"
S, ONE, ZERO = polynomial([1, 0]), polynomial([1]), polynomial([])


def ratios(matrix):
    return [[float(x).as_integer_ratio() for x in row] for row in matrix]


@pytest.mark.skipif(not HARD.exists(), reason="shared/data/hard-inputs.json is absent")
def test_hard_inputs():
    compared = 0
    for case in json.loads(HARD.read_text())["cases"]:
        given, oracle = case["input"], case["oracle"]
        if "minimal_order" not in oracle:
            continue
        if "A" in given:
            found = minimal_order(*(ratios(given[name]) for name in "ABC"))
        elif "den_common" in given:
            n = [[polynomial([float(x).as_integer_ratio() for x in e]) for e in row] for row in given["num"]]
            d = polynomial([float(x).as_integer_ratio() for x in given["den_common"]])
            found = mcmillan_degree(n, [[d] * len(row) for row in n])
        else:
            n, d = (polynomial([float(x).as_integer_ratio() for x in given[k]]) for k in ("num", "den"))
            found = mcmillan_degree([[n]], [[d]])
        assert found.order == oracle["minimal_order"], case["id"]
        compared += 1
    assert compared >= 10


def hidden(seed, n, r, m, p):
    """A model of order n whose reachable and observable part has order r, mixed by integer shears."""
    rng = np.random.default_rng(seed)
    A = rng.integers(-3, 4, (n, n)).astype(object)
    B, C = rng.integers(-3, 4, (n, m)).astype(object), rng.integers(-3, 4, (p, n)).astype(object)
    A[r:, :r] = 0
    B[r:] = 0
    for _ in range(3 * n):
        i, j = rng.choice(n, 2, replace=False)
        k = int(rng.integers(-2, 3))
        A[i] += k * A[j]
        B[i] += k * B[j]
        A[:, j] -= k * A[:, i]
        C[:, j] -= k * C[:, i]
    pair = lambda rows: [[(int(x), 1) for x in row] for row in rows]  # noqa: E731
    return pair(A), pair(B), pair(C)


@pytest.mark.parametrize(("n", "r", "m", "p"), [(5, 3, 1, 1), (8, 5, 2, 2), (9, 4, 1, 3), (6, 6, 2, 1)])
def test_hidden_modes(n, r, m, p):
    model = hidden(n * 10 + r, n, r, m, p)
    assert minimal_order(*model) == (r, True)
    bound = minimal_order(*model, budget=0)
    assert bound.order == r and bound.proved == (r == n)


@pytest.mark.parametrize("size", [1e-300, 1e-12, 1.0, 1e300])
def test_units_do_not_change_the_order(size):
    A = ratios([[-1, 0, 0], [0, -2, 0], [0, 0, -1]])
    assert minimal_order(A, ratios([[1], [size], [1]]), ratios([[1, 1 / size, 1]])) == (2, True)


def test_ordinary_small_models():
    assert minimal_order([], [], [[]]) == (0, True)
    assert minimal_order([[(0, 1)]], [[(0, 1)]], [[(1, 1)]]) == (0, True)
    # paths exist but their sum vanishes identically
    A = ratios([[-1, 0], [0, -1]])
    assert minimal_order(A, ratios([[1], [1]]), ratios([[1, -1]])) == (0, True)


def test_mcmillan_degree():
    one = [[ONE, ONE], [ONE, ONE]]
    below = [[S + 1, S + 1], [S + 1, S + 1]]
    assert mcmillan_degree(one, below).order == 1
    assert mcmillan_degree([[ONE, ZERO], [ZERO, ONE]], below).order == 2
    # [[s^2, 1/(s+1)], [1/(s+1), s]]: three poles at infinity and a residue of rank two
    assert mcmillan_degree([[S * S, ONE], [ONE, S]], [[ONE, S + 1], [S + 1, ONE]]) == (5, True)
    assert mcmillan_degree([[S**3 + 1]], [[S + 1]]) == (2, True)
    assert mcmillan_degree([[ZERO]], [[S]]) == (0, True)
    assert mcmillan_degree([[3 * ONE, ZERO]], [[ONE, S]]) == (0, True)


def test_cost_depends_on_sizes_alone_and_grows():
    for cost in (
        lambda k: transfer_operations(10 * k, 1, 1, 64),
        lambda k: transfer_operations(10 * k, 2, 3, 64, descriptor=True),
        lambda k: solve_operations(10 * k, 1, 64, False),
        lambda k: roots_operations(10 * k, 64),
        lambda k: residues_operations(10 * k, 64),
        lambda k: evaluation_operations(10 * k, 200, True),
        lambda k: rank_operations(10 * k, 64),
    ):
        values = [cost(k) for k in range(1, 6)]
        assert values == sorted(values) and values == [cost(k) for k in range(1, 6)]
    assert affordable(BUDGET) and not affordable(BUDGET + 1)
    assert affordable(transfer_operations(100, 1, 1, 80))
    assert not affordable(transfer_operations(1000, 1, 1, 80))


def test_bits_see_through_units():
    plain = ratios([[1, 3], [5, 7]])
    far = [[(1, 1), (3 * 2**900, 1)], [(5, 2**900), (7, 1)]]
    assert matrix_bits(plain) == matrix_bits(far) == 3
    assert matrix_bits([]) == matrix_bits([[(0, 1)]]) == 0
    assert polynomial_bits(polynomial([(1, 3), 5])) == 6
