"""Balanced, input-normal, output-normal and linear-quadratic balanced coordinates."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import realize
from realize.errors import Refused
from realize.forms.coordinates import Setting
from realize.forms.registry import TABLE
from realize.models import StateSpace, TimeBase

NORMAL = ("balanced", "input-normal", "output-normal")
SAMPLED = TimeBase("sampled", period=0.01)


def invented(sampled: bool, n: int = 8, m: int = 2, p: int = 3) -> StateSpace:
    """A stable plant with units that are all over the place."""
    rng = np.random.default_rng(n + sampled)
    A = rng.standard_normal((n, n))
    A = 0.3 * A if sampled else A - (np.max(np.linalg.eigvals(A).real) + 0.2) * np.eye(n)
    units = np.ldexp(1.0, rng.integers(-30, 30, n))
    B, C = rng.standard_normal((n, m)), rng.standard_normal((p, n))
    speed = 1.0 if sampled else 3e5
    return StateSpace(
        A=speed * A * units[:, None] / units,
        B=B * units[:, None],
        C=1e-4 * C / units,
        D=rng.standard_normal((p, m)) * 1e-6,
        time=SAMPLED if sampled else TimeBase(),
    )


def mismatch(A: Any, B: Any, gramian: Any, sampled: bool) -> float:
    """Residual of the equation of a diagonal Gramian, each entry relative to the terms that meet in it."""
    G = np.diag(gramian)
    terms = [A @ G @ A.T, -G, B @ B.T] if sampled else [A @ G, G @ A.T, B @ B.T]
    size = sum(np.linalg.norm(term / np.sqrt(np.outer(gramian, gramian))) for term in terms)
    return float(np.linalg.norm(sum(terms) / np.sqrt(np.outer(gramian, gramian))) / size)


@pytest.mark.parametrize("sampled", [False, True])
@pytest.mark.parametrize("form", NORMAL)
def test_the_gramians_are_what_the_form_says(form: str, sampled: bool) -> None:
    plant = invented(sampled)
    done = realize.convert(plant, "state-space", form=form).require()
    new, record = done.model, done.receipt.details["coordinates"]
    s = np.array(record["hankel_singular_values"])
    one = np.ones(s.size)
    into, seen = {"balanced": (s, s), "input-normal": (one, s**2), "output-normal": (s**2, one)}[form]
    assert mismatch(new.A, new.B, into, sampled) < 1e-13
    assert mismatch(new.A.T, new.C.T, seen, sampled) < 1e-13
    assert np.all(np.diff(s) <= 0) and np.all(np.array(record["hankel_errors"]) < 1e-11 * s[0])
    for row in new.B:
        assert row[np.argmax(np.abs(row) >= 0.999 * np.max(np.abs(row)))] > 0


@pytest.mark.parametrize("sampled", [False, True])
def test_units_of_states_and_time_change_nothing(sampled: bool) -> None:
    plant = invented(sampled)
    speed = 1.0 if sampled else 2.0**15
    units = np.ldexp(1.0, [5, -9, 20, 0, -31, 2, 7, 11])
    other = plant.with_(
        A=speed * plant.A * units[:, None] / units, B=speed * plant.B * units[:, None], C=plant.C / units
    )
    for form in NORMAL:
        one, two = (realize.convert(x, "state-space", form=form) for x in (plant, other))
        a, b = (x.receipt.details["coordinates"]["hankel_singular_values"] for x in (one, two))
        assert np.allclose(a, b, rtol=1e-13)
        assert np.allclose(speed * one.model.A, two.model.A, rtol=1e-9, atol=1e-10 * np.max(np.abs(two.model.A)))


def test_input_and_output_normal_are_rescaled_balanced_states() -> None:
    plant = invented(False)
    balanced, inside, outside = (realize.convert(plant, "state-space", form=form) for form in NORMAL)
    s = np.sqrt(balanced.receipt.details["coordinates"]["hankel_singular_values"])
    assert np.allclose(inside.model.B, balanced.model.B / s[:, None], rtol=1e-9, atol=0)
    assert np.allclose(outside.model.C, balanced.model.C / s, rtol=1e-9, atol=0)


def test_what_cannot_be_balanced_is_refused(run: Callable[..., Any], tmp_path: Path) -> None:
    unstable = StateSpace(A=[[1.0, 0.0], [0.0, -2.0]], B=[[1.0], [1.0]], C=[[1.0, 1.0]])
    hidden = StateSpace(A=[[-1.0, 0.0], [0.0, -2.0]], B=[[1.0], [0.0]], C=[[1.0, 1.0]])
    file = tmp_path / "plant.json"
    for form in NORMAL:
        realize.write(unstable, file)
        done = run("convert", file, "--to", "state-space", "--form", form, "-o", tmp_path / "out.json")
        assert done.status == 5 and "linear-quadratic-balanced" in done.err
        realize.write(hidden, file)
        done = run("convert", file, "--to", "state-space", "--form", form, "-o", tmp_path / "out.json")
        assert done.status == 5 and "minimal" in done.err and "1 of 2" in done.err
    marginal = StateSpace(A=[[0.0]], B=[[1.0]], C=[[1.0]])
    with pytest.raises(Refused, match="linear-quadratic-balanced"):
        realize.convert(marginal, "state-space", form="balanced")
    realize.convert(marginal, "state-space", form="linear-quadratic-balanced").require()


def test_equal_values_are_said() -> None:
    """An all-pass has all Hankel singular values equal."""
    done = realize.convert(
        realize.TransferFunction(numerator=[1, -3, 2], denominator=[1, 3, 2]), "state-space", form="balanced"
    ).require()
    assert np.allclose(done.receipt.details["coordinates"]["hankel_singular_values"], 1.0, rtol=1e-13)
    assert any("up to a rotation" in note for note in done.receipt.cautions)


@pytest.mark.parametrize("scale", [1e-120, 1e120])
def test_gains_at_the_ends_of_the_range(scale: float) -> None:
    plant = invented(False)
    done = realize.convert(plant.with_(B=plant.B * scale, D=plant.D * scale), "state-space", form="balanced").require()
    plain = realize.convert(plant, "state-space", form="balanced")
    a, b = (x.receipt.details["coordinates"]["hankel_singular_values"] for x in (done, plain))
    assert np.allclose(np.array(a) / scale, b, rtol=1e-12)


# --- linear-quadratic balanced --------------------------------------------------------------------------------------


@pytest.mark.parametrize("a", [-3.0, 0.0, 0.5, 7.0])
@pytest.mark.parametrize(("b", "c", "d"), [(1.0, 1.0, 0.0), (2.0, -0.25, 0.0), (1e-3, 5e2, 0.0), (3.0, 2.0, 0.75)])
def test_one_state_in_closed_form(a: float, b: float, c: float, d: float) -> None:
    """With D = 0: mu = (a + sqrt(a^2 + b^2 c^2)) / |b c|; a feed-through moves a to a - b c d / (1 + d^2)."""
    r = 1 + d * d
    moved, gain = a - b * c * d / r, b * c / r
    mu = (moved + np.sqrt(moved**2 + gain**2)) / abs(gain)
    plant = StateSpace(A=[[a]], B=[[b]], C=[[c]], D=[[d]])
    done = realize.convert(plant, "state-space", form="linear-quadratic-balanced").require()
    record = done.receipt.details["coordinates"]
    assert record["characteristic_values"] == pytest.approx([mu], rel=1e-13)
    assert record["riccati_residual"] < 1e-13


@pytest.mark.parametrize("sampled", [False, True])
@pytest.mark.parametrize("n", [2, 5, 9])
def test_both_riccati_solutions_are_equal_and_diagonal(n: int, sampled: bool) -> None:
    """Unstable plants with feed-through; the equations are formed here anew, sampled and continuous."""
    rng = np.random.default_rng(n)
    A = rng.standard_normal((n, n)) * (1.0 if sampled else 300.0)
    units = np.ldexp(1.0, rng.integers(-20, 20, n))
    B, C, D = rng.standard_normal((n, 2)), rng.standard_normal((3, n)), rng.standard_normal((3, 2))
    plant = StateSpace(
        A=A * units[:, None] / units,
        B=B * units[:, None],
        C=C / units,
        D=D,
        time=SAMPLED if sampled else TimeBase(),
    )
    done = realize.convert(plant, "state-space", form="linear-quadratic-balanced").require()
    mu = done.receipt.details["coordinates"]["characteristic_values"]
    X = np.diag(mu)
    for a, b, c, d in (
        (done.model.A, done.model.B, done.model.C, done.model.D),
        (done.model.A.T, done.model.C.T, done.model.B.T, done.model.D.T),
    ):
        R = np.eye(b.shape[1]) + d.T @ d
        if sampled:
            F = np.linalg.solve(R + b.T @ X @ b, b.T @ X @ a + d.T @ c)
            left = a.T @ X @ a - X + c.T @ c - (a.T @ X @ b + c.T @ d) @ F
            assert np.max(np.abs(np.linalg.eigvals(a - b @ F))) < 1
        else:
            F = np.linalg.solve(R, b.T @ X + d.T @ c)
            left = a.T @ X + X @ a + c.T @ c - (X @ b + c.T @ d) @ F
            assert np.max(np.linalg.eigvals(a - b @ F).real) < 0
        assert np.linalg.norm(left) < 1e-11 * (np.linalg.norm(a) ** (1 + sampled) * np.linalg.norm(X) + 1)


def test_a_mode_that_no_feedback_reaches_is_refused() -> None:
    plant = StateSpace(A=np.diag([0.0, -1.0]), B=[[0.0], [1.0]], C=[[1.0, 1.0]])
    with pytest.raises(Refused, match="minimal realization first"):
        realize.convert(plant, "state-space", form="linear-quadratic-balanced")


def test_order_zero_is_a_model_too() -> None:
    for form in (*NORMAL, "linear-quadratic-balanced"):
        new = TABLE[form].apply(np.zeros((0, 0)), np.zeros((0, 2)), np.zeros((1, 0)), np.ones((1, 2)), Setting())
        assert new.A.shape == (0, 0) and new.B.shape == (0, 2) and new.condition == 1.0


def test_a_coupling_beyond_precision_is_refused_in_words() -> None:
    """-1 beside a loop of 1e300 is zero to working precision: no coordinates from Gramians, and no traceback."""
    plant = realize.StateSpace(A=[[-1.0, 1e300], [-1e300, -1.0]], B=[[0.0], [1.0]], C=[[1.0, 0.0]])
    for form in ("balanced", "input-normal", "output-normal"):
        with pytest.raises(realize.Refused, match="ruin this model"):
            realize.convert(plant, "state-space", form=form)


@pytest.mark.parametrize("coupling", [1e300, 1e-300, 1e40])
def test_a_coupling_in_no_loop_is_a_matter_of_units(coupling: float) -> None:
    """Of 1 / (s + 1)^2 the Hankel singular values are (sqrt(2) + 1) / 4 and (sqrt(2) - 1) / 4."""
    plant = realize.StateSpace(A=[[-1.0, coupling], [0.0, -1.0]], B=[[0.0], [1.0]], C=[[1.0, 0.0]])
    made = realize.convert(plant, "state-space", form="balanced")
    assert max(claim.value for claim in made.receipt.claims if claim.name == "peak-error") < 1e-14
    small = realize.reduce(plant, order=1)
    values = np.array(small.receipt.details["hankel_singular_values"])
    assert values == pytest.approx(coupling * np.array([np.sqrt(2) + 1, np.sqrt(2) - 1]) / 4, rel=1e-13)
