"""The short way to the claims about small plants: what it proves is what the general way proves."""

from __future__ import annotations

import random

import numpy as np
import pytest

from realize.models import TimeBase, TransferFunction, ZeroPoleGain
from realize.verification import conversion, small
from realize.verification.pair import Pair
from realize.verification.views import View


def plant(rng: random.Random) -> ZeroPoleGain:
    """Up to eight poles and zeros, some lightly damped, some right of the axis, over up to six decades, any gain."""
    spread, base = rng.choice([0.1, 1, 3]), rng.choice([0, 3, -6, 9])

    def roots(count: int) -> list[complex]:
        listed: list[complex] = []
        while len(listed) < count:
            w = 10 ** (base + rng.uniform(-spread, spread))
            sign = rng.choice([-1, -1, -1, 1])
            if count - len(listed) >= 2 and rng.random() < 0.6:
                pole = w * complex(sign * (ratio := rng.choice([1e-3, 0.02, 0.3, 0.9])), np.sqrt(1 - ratio**2))
                listed += [pole, pole.conjugate()]
            else:
                listed.append(complex(sign * w))
        return listed

    order = rng.randint(1, 8)
    gain = 10.0 ** rng.choice([0, 0, 90, -90]) * rng.choice([1, -1])
    return ZeroPoleGain(zeros=roots(rng.randint(0, order)), poles=roots(order), gain=gain)


@pytest.mark.parametrize("seed", range(60))
def test_both_ways_prove_the_same(seed: int) -> None:
    rng = random.Random(seed)
    source = plant(rng)
    size = 10 ** rng.uniform(-13, -1)
    kind = rng.choice(["gain", "zeros", "poles"])
    moved = {
        "gain": source.gain * (1 + size),
        "zeros": [[zeros * (1 + size) for zeros in row] for row in source.zeros],
        "poles": [[poles * (1 + size) for poles in row] for row in source.poles],
    }[kind]
    pair = Pair(View(source), View(source.with_(**{kind: moved})))
    found = small.small_claims(pair, 1e-9, 1e-9)
    if found is None:
        pytest.skip("the general way has to be taken")
    general = conversion.response_error(pair, 1e-9), conversion.peak_error(pair, 1e-9)
    for short, long in zip(found, general, strict=True):
        assert short.name == long.name and short.basis == "proved"
        assert short.value is not None and long.value is not None
        assert short.uncertainty is not None and long.uncertainty is not None
        # two proved intervals about one number
        assert max(short.value, long.value) <= min(short.value + short.uncertainty, long.value + long.uncertainty)


def test_most_small_plants_go_the_short_way() -> None:
    ways = []
    for seed in range(60):
        source = plant(random.Random(seed))
        pair = Pair(View(source), View(source.with_(gain=source.gain * (1 + 1e-10))))
        ways.append(small.small_claims(pair, 1e-9, 1e-9) is not None)
    assert sum(ways) >= 40


@pytest.mark.parametrize(
    "source",
    [
        TransferFunction(numerator=[1.0], denominator=[1.0, 0.0, 4.0]),
        TransferFunction(numerator=[1.0], denominator=[1.0, 1.0, 0.0]),
        TransferFunction(numerator=[1.0, 0.0, 4.0], denominator=[1.0, 2.0, 4.0]),
        TransferFunction(numerator=[1.0, 2.0, 3.0], denominator=[1.0, 2.0]),
        TransferFunction(numerator=[3.0], denominator=[2.0]),
        TransferFunction(numerator=[0.0], denominator=[1.0, 2.0]),
        TransferFunction(numerator=[1.0], denominator=[1.0, 0.5], time=TimeBase("sampled", period=0.1)),
        TransferFunction(numerator=[[[1.0], [2.0]]], denominator=[[[1.0, 1.0], [1.0, 2.0]]]),
        ZeroPoleGain(zeros=[-1e-290], poles=[-1e290, -1.0], gain=1.0),
    ],
    ids=["poles on axis", "integrator", "notch", "improper", "constant", "zero", "sampled", "two inputs", "far apart"],
)
def test_what_is_not_ordinary_is_left_to_the_general_way(source: TransferFunction) -> None:
    changed = source.with_(
        **(
            {"gain": source.gain * 1.5}
            if isinstance(source, ZeroPoleGain)
            else {"numerator": [[1.5 * n for n in row] for row in source.numerator]}
        )
    )
    assert small.small_claims(Pair(View(source), View(changed)), 1e-9, 1e-9) is None
