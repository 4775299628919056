"""Claims about models beyond exact arithmetic: held against ball arithmetic at single frequencies.

    python benchmarks/accuracy/honesty_large.py --count 12 --seed 1

The exact error at any frequency is a lower bound of the largest. State models of 160 to 260 states, where claims come
from doubles, are reduced and converted; at the frequency that a claim names, and at some of the least damped poles, the
difference is computed in balls of 160 bits.
"""

from __future__ import annotations

import argparse
import time
from collections import Counter
from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
from flint import acb, acb_mat, arb, fmpq
from honesty_models import _clock, _random_states
from honesty_oracle import bits, quotient, rational, singular

from realize.errors import RealizeError
from realize.models import Model, StateSpace, ZeroPoleGain
from realize.steps import convert, reduce

#: Frequencies looked at for each result.
POINTS = 4


def _light(rng: np.random.Generator, n: int) -> tuple[Any, ...]:
    """Lightly damped modes in rotated coordinates."""
    w = np.sort(10.0 ** rng.uniform(-1, 3, n // 2))
    A = np.zeros((n, n))
    for k, f in enumerate(w.tolist()):
        damping = 10.0 ** rng.uniform(-4, -1)
        A[2 * k : 2 * k + 2, 2 * k : 2 * k + 2] = [[-damping * f, f], [-f, -damping * f]]
    Q = np.linalg.qr(rng.normal(size=(n, n)))[0]
    return Q @ A @ Q.T, Q @ rng.normal(size=(n, 1)), rng.normal(size=(1, n)) @ Q.T, np.zeros((1, 1))


def model_of(index: int, seed: int) -> tuple[StateSpace, np.random.Generator]:
    rng = np.random.default_rng([seed, index])
    n = 2 * int(rng.integers(80, 131))
    if index % 3 == 0:
        A, B, C, D = _light(rng, n)
        return StateSpace(A=A, B=B, C=C, D=D), rng
    sampled = index % 3 == 2
    p, m = (1, 1) if index % 2 else (2, 2)
    A, B, C, D = _random_states(rng, n, p, m, sampled)
    return StateSpace(A=A, B=B, C=C, D=D, **({"time": _clock(rng)} if sampled else {})), rng


def response(model: Model, w: float) -> list[Any]:
    """Return the channels at one frequency (sampled: at exp(jwT)) as balls."""
    with bits(160):
        s = acb(0, arb(rational(w)))
        if model.time.sampled:
            period = model.time.exact_period
            s = (s * arb(fmpq(period.numerator, period.denominator))).exp()
        p, m = model.shape
        if isinstance(model, ZeroPoleGain):
            return [_product(model, s, i, j) for i in range(p) for j in range(m)]
        assert isinstance(model, StateSpace) and model.E is None
        n = model.A.shape[0]
        if n == 0:
            return [acb(float(model.D[i, j])) for i in range(p) for j in range(m)]
        rows = [[acb(-value) for value in row] for row in model.A.tolist()]
        for k in range(n):
            rows[k][k] += s
        X = acb_mat(rows).solve(acb_mat([[acb(value) for value in row] for row in model.B.tolist()]))
        value = acb_mat([[acb(value) for value in row] for row in model.C.tolist()]) * X
        return [value[i, j] + acb(float(model.D[i, j])) for i in range(p) for j in range(m)]


def _product(model: ZeroPoleGain, s: acb, i: int, j: int) -> acb:
    value = acb(float(model.gain[i, j]))
    for zero in model.zeros[i][j].tolist():
        value *= s - acb(zero.real, zero.imag)
    for pole in model.poles[i][j].tolist():
        value /= s - acb(pole.real, pole.imag)
    return value


def frequencies(model: StateSpace, claims: list[Any]) -> list[float]:
    poles = np.linalg.eigvals(model.A).astype(complex)
    if model.time.sampled:
        poles = np.log(poles[poles != 0]) / model.time.seconds
    light = poles[np.argsort(np.abs(poles.real) / np.abs(poles))][: 2 * POINTS]
    chosen = [c.where["frequency"] for c in claims if c.where.get("frequency")]
    return list(dict.fromkeys([*chosen, *np.abs(light.imag).tolist()]))[:POINTS]


def findings(
    source: StateSpace, result: Model, claims: list[Any], known: dict[float, list[Any]]
) -> Iterator[tuple[str, str, float | None, bool, str]]:
    """Yield name, basis, log10 of the ratio, whether false, and words of each claim with a bound."""
    difference, relative = arb(0), arb(0)
    for w in frequencies(source, claims):
        if w not in known:
            known[w] = response(source, w)
        one, two = known[w], response(result, w)
        with bits(160):
            gap = singular([b - a for a, b in zip(one, two, strict=True)], source.shape)
            difference = gap if gap > difference else difference
            if len(one) == 1:
                ratio = quotient(gap, abs(one[0]))
                relative = ratio if ratio > relative else relative
    for claim in claims:
        truth = {"reduction-error": difference, "reduction-bound": difference, "response-error": relative}.get(
            claim.name
        )
        if truth is None or claim.value is None or not truth > 0:
            continue
        bounded = claim.uncertainty is not None or claim.basis != "measured"
        top = rational(claim.value) + rational(claim.uncertainty or 0.0)
        with bits(128):
            false = (bounded or claim.holds is True) and bool(arb(top) * (1 + 1e-12) < truth)
            level = float((arb(top) / truth).log().mid()) / np.log(10) if top > 0 else None
        says = f"{claim.name} {claim.value} + {claim.uncertainty} ({claim.basis}); at least {truth.mid().str(12)}"
        yield claim.name, claim.basis if bounded else "measured, open", level, false, says


def main(arguments: list[str] | None = None) -> int:
    """Run it; the status is 1 if a claim was false."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--count", type=int, default=12)
    parser.add_argument("--seed", type=int, default=1)
    options = parser.parse_args(arguments)
    started, false, counts, least = time.perf_counter(), 0, Counter[str](), dict[str, float]()
    for index in range(options.count):
        source, rng = model_of(index, options.seed)
        known: dict[float, list[Any]] = {}
        steps: list[tuple[str, Callable[[], Any]]] = [
            ("reduce by order", lambda s=source, r=rng: reduce(s, order=int(r.integers(2, 60)))),
            ("reduce by error", lambda s=source, r=rng: reduce(s, error=float(10.0 ** r.uniform(-8, -1)))),
            ("convert to modal", lambda s=source: convert(s, "state-space", form="modal")),
        ]
        for name, make in steps:
            try:
                made = make()
            except RealizeError as error:
                print(f"model {index}, {name}: {type(error).__name__}: {error}"[:150])
                continue
            for claim, basis, level, wrong, says in findings(source, made.model, made.receipt.claims, known):
                counts[f"{claim}, {basis}"] += 1
                if level is not None:
                    key = f"{claim}, {basis}"
                    least[key] = min(least.get(key, np.inf), level)
                if wrong:
                    false += 1
                    print(f"FALSE model {index} (order {source.order}), {name}: {says}", flush=True)
    for key, count in sorted(counts.items()):
        print(f"{key:34s} {count:4d}   least (value + uncertainty) / truth: 1 + {10 ** least.get(key, 0.0) - 1:.1e}")
    print(f"{false} violations, {time.perf_counter() - started:.0f} s")
    return 1 if false else 0


if __name__ == "__main__":
    raise SystemExit(main())
