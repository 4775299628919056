"""The screen of `inspect`: one screen, whole lines, what is wrong before the lists."""

from __future__ import annotations

import numpy as np
import pytest

from realize import Signal, StateSpace, TransferFunction, ZeroPoleGain, inspect
from realize.reports import inspect_table
from realize.reports.look import Page


def ladder(n):
    A = -2 * np.eye(n) + np.diag(np.ones(n - 1), 1) + np.diag(np.ones(n - 1), -1)
    return StateSpace(A=1e3 * A, B=1e3 * np.eye(n)[:, :1], C=np.eye(n)[-1:])


def many_modes():
    rng = np.random.default_rng(8)
    w, n = 10 ** rng.uniform(1, 3, 12), 24
    A = np.zeros((n, n))
    for k in range(12):
        A[2 * k : 2 * k + 2, 2 * k : 2 * k + 2] = [[0, 1], [-(w[k] ** 2), -1e-3 * w[k]]]
    B, C = np.zeros((n, 3)), np.zeros((2, n))
    B[1::2], C[:, ::2] = rng.standard_normal((12, 3)), rng.standard_normal((2, 12))
    B[23] *= 1e-9
    names = [Signal("a rather long name of a motor torque at the base", "N*m"), Signal("", ""), Signal("brake", "N*m")]
    return StateSpace(A=A, B=B, C=C, inputs=tuple(names))


PLANTS = {
    "modes": many_modes(),
    "ladder": ladder(30),
    "unstable": TransferFunction(numerator=[2.0, 1.0], denominator=[1.0, 0.2, -3.0, 4.0]),
    "near": ZeroPoleGain(zeros=[-1.0000000003, -5.0], poles=[-1.0, -2.0, -700.0, -1e9], gain=3e3),
    "constant": TransferFunction(numerator=[3.0], denominator=[2.0]),
}


@pytest.mark.parametrize("width", [80, 110])
@pytest.mark.parametrize("name", list(PLANTS))
def test_one_screen(name, width):
    text = inspect_table(inspect(PLANTS[name]), page=Page(width=width))
    lines = text.splitlines()
    assert max(len(line) for line in lines) <= width
    assert len(lines) <= 50
    assert "None" not in text and "nan" not in text


def test_advice_stands_under_what_was_found_and_before_the_lists():
    text = inspect_table(inspect(PLANTS["near"]))
    lines = [line.strip() for line in text.splitlines()]
    found = next(k for k, line in enumerate(lines) if line.startswith("! 1 zero lies within"))
    advice = next(k for k, line in enumerate(lines) if k > found and line.startswith("→"))
    assert advice - found <= 3
    assert advice < next(k for k, line in enumerate(lines) if line.startswith("pole "))


def test_hankel_values_say_how_good_they_are_and_how_many_count():
    text = " ".join(inspect_table(inspect(PLANTS["ladder"])).split())
    assert "(30 in all)" in text and "proved within" in text
    values = inspect(PLANTS["ladder"])["hankel_singular_values"]
    assert f"{sum(v >= 0.01 * values[0] for v in values)} above 1 %" in text


def test_long_lists_are_cut_and_say_so():
    text = inspect_table(inspect(PLANTS["ladder"]))
    assert "and 22 more rows" in text


def test_structure_and_dynamics_in_a_line():
    text = " ".join(inspect_table(inspect(PLANTS["modes"])).split())
    assert "controllability indices 8, 8, 8" in text and "observability indices 12, 12" in text
    assert "lightest damping 0.0005" in text
    zero = inspect(StateSpace(A=[[-1.0]], B=[[1.0, 0.0]], C=[[1.0]]))
    assert "1 channel is identically zero" in " ".join(inspect_table(zero).split())
