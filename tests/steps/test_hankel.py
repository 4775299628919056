"""Hankel singular values of models: values, errors, basis, refusals."""

from __future__ import annotations

import numpy as np
import pytest

import realize
from realize import Refused, StateSpace, TimeBase, TransferFunction, ZeroPoleGain, hankel_singular_values
from realize.kernels.exact import cost
from realize.steps import hankel
from realize.testing.catalogue import CATALOGUE
from realize.testing.gramians import gramian_product, misplaced, rational


def states(A, B, C, **more):
    return StateSpace(A=np.atleast_2d(A), B=np.atleast_2d(B), C=np.atleast_2d(C), **more)


@pytest.mark.parametrize("name", list(CATALOGUE))
def test_catalogue(name):
    known = CATALOGUE[name]
    if not known.stable:
        with pytest.raises(Refused, match="not stable"):
            hankel_singular_values(known.make())
        return
    found = hankel_singular_values(known.make())
    assert found.basis == "proved"
    assert np.count_nonzero(found.values) == known.minimal_order
    assert found.values.size == known.order == found.errors.size
    present = found.values > 0
    assert np.all(found.errors[present] <= 1e-13 * found.values[present])
    assert np.all(found.errors[~present] == 0)
    assert np.all(np.diff(found.values) <= 0)


def test_every_kind_of_one_plant_has_the_same_values():
    plant = ZeroPoleGain(zeros=[-4.0], poles=[-1.0, -3.0, -5.0, -10.0], gain=1.0)
    first = hankel_singular_values(plant)
    for kind in ("transfer-function", "pole-residue", "state-space", "sections"):
        other = hankel_singular_values(realize.convert(plant, to=kind).model)
        np.testing.assert_allclose(other.values, first.values, rtol=1e-10)


def test_hidden_states_have_the_value_zero():
    found = hankel_singular_values(states([[-1.0, 0.0], [0.0, -1.0]], [[1.0], [1.0]], [[1.0, 1.0]]))
    assert found.values[0] == 1.0 and found.values[1] == found.errors[1] == 0.0
    nothing = hankel_singular_values(states([[-1.0, 0.0], [0.0, -2.0]], [[1.0], [0.0]], [[0.0, 1.0]]))
    assert nothing.values.tolist() == [0.0, 0.0]


def test_order_zero():
    found = hankel_singular_values(
        StateSpace(A=np.zeros((0, 0)), B=np.zeros((0, 2)), C=np.zeros((3, 0)), D=np.ones((3, 2)))
    )
    assert found.values.size == 0 and found.basis == "proved"


def test_decimals_count_as_typed(tmp_path):
    # (s + 0.1) cancels as typed; the doubles of 0.3 and 0.1 * 3 would leave a value near 1e-17
    path = tmp_path / "plant.json"
    path.write_text(
        """{"realize": 1, "kind": "transfer-function", "time": {"domain": "continuous"},
        "numerator": ["1", "0.1"], "denominator": ["1", "0.4", "0.03"]}"""
    )
    found = hankel_singular_values(realize.read(path))
    assert found.values[1] == found.errors[1] == 0.0
    # 1 / (s + 0.3)
    assert abs(found.values[0] - 1 / 0.6) <= found.errors[0] + 1e-15


def test_sampled_and_dead_time():
    A = np.array([[0.5, 0.2], [-0.1, 0.9]])
    plain = states(A, [[1.0], [0.3]], [[0.2, 1.0]], time=TimeBase("sampled", period=0.01))
    found = hankel_singular_values(plain)
    square = gramian_product(rational(plain.A), rational(plain.B), rational(plain.C), 300, sampled=True)
    assert misplaced(square, found.values.tolist(), found.errors.tolist(), 300) == []


def test_what_has_none_is_refused():
    with pytest.raises(Refused, match="improper"):
        hankel_singular_values(TransferFunction(numerator=[1.0, 0.0, 0.0], denominator=[1.0, 1.0]))
    with pytest.raises(Refused, match="not stable"):
        hankel_singular_values(ZeroPoleGain(zeros=[], poles=[1e-9], gain=1.0))
    with pytest.raises(Refused, match="too large"):
        hankel_singular_values(states([[-1.0]], [[1e200]], [[1e200]]))
    with pytest.raises(Refused, match="fit a model"):
        hankel_singular_values(
            realize.FrequencyResponse(frequency=[1.0, 2.0], frequency_unit="Hz", response=np.ones((2, 1, 1)))
        )


def test_value_below_the_doubles_keeps_an_honest_error():
    found = hankel_singular_values(states([[-1.0]], [[1e-200]], [[1e-200]]))
    assert found.values.tolist() == [0.0] and 0 < found.errors[0] < 1e-320


def test_gain_far_from_one_changes_nothing_but_the_unit():
    plain = hankel_singular_values(ZeroPoleGain(zeros=[-3.5], poles=[-1.0, -2.0, -3.0], gain=1.0))
    large = hankel_singular_values(ZeroPoleGain(zeros=[-3.5], poles=[-1.0, -2.0, -3.0], gain=2.0**900))
    np.testing.assert_array_equal(large.values, np.ldexp(plain.values, 900))


def test_too_costly_goes_to_doubles_with_errors_that_hold(monkeypatch):
    n = 12
    A = -2 * np.eye(n) + np.diag(np.ones(n - 1), 1) + np.diag(np.ones(n - 1), -1)
    model = states(A, np.eye(n)[:, :1], np.eye(n)[-1:])
    exact = hankel_singular_values(model)
    monkeypatch.setattr(hankel, "BUDGET", 0.0)
    found = hankel_singular_values(model)
    assert found.basis == "measured" and "double arithmetic" in found.note
    assert np.all(np.abs(found.values - exact.values) <= found.errors)
    fitted = realize.convert(model, to="zero-pole-gain").model
    through = hankel_singular_values(fitted)
    assert through.basis == "measured" and "states that" in through.note
    assert np.all(np.abs(through.values - exact.values) <= through.errors)


def test_predicted_operations_grow_with_size_and_bits():
    assert cost.hankel_operations(60, 1, 1, 60, 1000) < cost.hankel_operations(60, 3, 3, 60, 1000)
    assert cost.hankel_operations(60, 1, 1, 60, 1000) < cost.hankel_operations(60, 1, 1, 60, 4000)
    assert cost.affordable(cost.hankel_operations(60, 3, 3, 60, 4000))
