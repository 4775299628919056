"""Open benchmark models: order, bound, true error, H2 error, nu-gap, seconds; and the same under random units.

The true error is found by a search that shares nothing with the balancing; it must never exceed the bound.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np

import realize
from realize.steps import reduce
from realize.steps.ordinary import states_of
from realize.verification.difference import h2_error

MODELS = Path(__file__).parents[2] / ".." / "shared" / "data" / "models"
NAMES = ("build", "heat-cont", "iss1R", "ctdsx_1_03", "ctdsx_1_04", "ctdsx_1_05", "ctdsx_1_07", "ctdsx_1_08", "fom")
METHODS = ("balanced-truncation", "singular-perturbation")
ERRORS = (0.1, 0.01)


def in_other_units(model: realize.StateSpace, seed: int) -> realize.StateSpace:
    """Return the model in random orthogonal coordinates and random units of its states."""
    rng = np.random.default_rng(seed)
    n = model.order
    Q = np.linalg.qr(rng.standard_normal((n, n)))[0]
    units = np.ldexp(1.0, rng.integers(-20, 21, n))
    A = units[:, None] * (Q @ model.A @ Q.T) / units
    return model.with_(A=A, B=units[:, None] * (Q @ model.B), C=model.C @ Q.T / units, states=())


def main(names: list[str]) -> int:
    """Print the table; 1 if a bound is violated or random coordinates change an order."""
    failures = 0
    head = f"{'model':12s} {'method':22s} {'asked':>6s} {'order':>9s}"
    print(head + "".join(f" {title:>9s}" for title in ("bound", "L-inf", "H2", "nu-gap", "seconds")))
    for name in names:
        plain = states_of(realize.read(MODELS / f"{name}.npz"))[0]
        for error in ERRORS:
            for method in METHODS:
                started = time.process_time()
                try:
                    made = reduce(plain, error=error, method=method)
                except realize.Refused as reason:
                    print(f"{name:12s} {method:22s} {error:6.3g} refused: {reason}")
                    continue
                seconds = time.process_time() - started
                claims = {claim.name: claim for claim in made.receipt.claims}
                found, bound = claims["reduction-error"], claims["reduction-bound"]
                h2 = h2_error(plain, made.model)
                other = reduce(in_other_units(plain, 1), error=error, method=method)
                violated = found.value is None or bound.value is None or found.value > bound.value
                moved = other.model.order != made.model.order
                failures += violated + moved
                values = [bound.value, found.value, h2.value if h2 else None, claims["nu-gap"].value]
                texts = " ".join("        -" if value is None else f"{value:9.2e}" for value in values)
                marks = (" VIOLATED" if violated else "") + (f" MOVED to {other.model.order}" if moved else "")
                order = f"{plain.order}>{made.model.order}"
                print(f"{name:12s} {method:22s} {error:6.3g} {order:>9s} {texts} {seconds:5.2f}{marks}", flush=True)
    return int(failures > 0)


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:] or list(NAMES)))
