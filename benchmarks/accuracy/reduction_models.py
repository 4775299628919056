"""Open benchmark models: order, bound, true error, H2 error, nu-gap, seconds; and the same under random units.

Usage: OMP_NUM_THREADS=1 python benchmarks/accuracy/reduction_models.py [model ...]

A line for each model, method and error that is asked for (relative to the largest gain). The true error is what the
receipt says; here it is checked once more at the poles of the source, by one solution of the full equations a
frequency. Neither may exceed the bound. Then the model is reduced in random orthogonal coordinates, with random scales
of its states, and in random units of time, inputs and outputs: the order must not change, and the error is the same.
Where reference values are known (`expected.json`), errors and Hankel singular values are compared with them.
Exits with 1 if a bound is violated, an order moves or a reference is missed.
"""

from __future__ import annotations

import json
import sys
import time
from pathlib import Path

import numpy as np

import realize
from realize.steps import reduce
from realize.steps.ordinary import states_of
from realize.verification.difference import h2_error

MODELS = Path(__file__).parents[2] / ".." / "shared" / "data" / "models"
NAMES = (
    "build",
    "heat-cont",
    "iss1R",
    "ctdsx_1_03",
    "ctdsx_1_04",
    "ctdsx_1_05",
    "ctdsx_1_07",
    "ctdsx_1_08",
    "fom",
    "rail_1357",
)
METHODS = ("balanced-truncation", "singular-perturbation")
ERRORS = (0.1, 0.01)
#: Models of more states are changed in one way only.
LARGE = 500


def orthogonal(model: realize.StateSpace, rng: np.random.Generator) -> realize.StateSpace:
    """Return the model in random orthogonal coordinates."""
    Q = np.linalg.qr(rng.standard_normal((model.order, model.order)))[0]
    return model.with_(A=Q @ model.A @ Q.T, B=Q @ model.B, C=model.C @ Q.T, states=())


def scaled(model: realize.StateSpace, rng: np.random.Generator) -> realize.StateSpace:
    """Return the model with its states in units that are 2^-40 to 2^40 apart."""
    units = np.ldexp(1.0, rng.integers(-40, 41, model.order))
    return model.with_(A=units[:, None] * model.A / units, B=units[:, None] * model.B, C=model.C / units, states=())


def in_units(model: realize.StateSpace, rng: np.random.Generator) -> realize.StateSpace:
    """Return the model with another unit of time, and one more for all inputs and for all outputs."""
    time_, input_, output = (float(x) for x in np.ldexp(1.0, rng.integers(-60, 61, 3)))
    return model.with_(
        A=model.A * time_, B=model.B * (input_ * time_), C=model.C * output, D=model.D * (input_ * output)
    )


WAYS = {"orthogonal": orthogonal, "scaled": scaled, "units": in_units}


def largest_at_poles(model: realize.StateSpace, small: realize.StateSpace) -> float:
    """Return the largest singular value of the difference at frequencies of the source's poles, solved one by one."""
    n = model.order
    w = np.unique(np.abs(np.linalg.eigvals(model.A).imag))
    w = np.unique(np.concatenate([w, np.abs(np.linalg.eigvals(small.A).imag), [0.0]]))
    w = w[np.unique(np.linspace(0, w.size - 1, 24 if n > LARGE else 200).astype(int))]
    largest = 0.0
    for point in 1j * w:
        with np.errstate(all="ignore"):
            values = [
                part.C @ np.linalg.solve(point * np.eye(part.order) - part.A, part.B.astype(complex)) + part.D
                for part in (model, small)
            ]
        if all(np.isfinite(value).all() for value in values):
            largest = max(largest, float(np.linalg.norm(values[1] - values[0], 2)))
    return largest


def number(value: float | None) -> str:
    return "        -" if value is None else f"{value:9.2e}"


def line(name: str, plain: realize.StateSpace, error: float, method: str) -> tuple[realize.Conversion | None, int]:
    """Print one line; return the conversion, and 1 where its bound is violated."""
    started = time.process_time()
    try:
        made = reduce(plain, error=error, method=method)
    except realize.Refused as reason:
        print(f"{name:12s} {method:22s} {error:6.3g} refused: {reason}")
        return None, 0
    seconds = time.process_time() - started
    claims = {claim.name: claim for claim in made.receipt.claims}
    found, bound = claims["reduction-error"], claims["reduction-bound"]
    h2 = h2_error(plain, made.model)
    kept = made.receipt.details["kept_order"]
    again = largest_at_poles(plain, made.model) if kept == 0 else found.value
    # both evaluations round: by less than 1e-9 of the largest gain
    room = 1e-9 * (found.value / found.relative if found.relative else 0.0)
    violated = bound.value is None or found.value > bound.value or again > bound.value + room
    missed = found.uncertainty is not None and again > found.value + found.uncertainty + room
    values = [bound.value, found.value, h2.value if h2 else None, claims["nu-gap"].value]
    marks = (" VIOLATED" if violated else "") + (" MISSED" if missed else "")
    order = f"{plain.order}>{made.model.order}"
    print(
        f"{name:12s} {method:22s} {error:6.3g} {order:>9s} {' '.join(map(number, values))} {seconds:7.2f}{marks}",
        flush=True,
    )
    return made, int(violated or missed)


def changed(name: str, plain: realize.StateSpace, error: float, made: realize.Conversion) -> int:
    """Print what becomes of a reduction in other coordinates and units; return how often it is not the same."""
    rng = np.random.default_rng(1)
    failures, words = 0, []
    claims = {claim.name: claim for claim in made.receipt.claims}
    for way in ("orthogonal",) if plain.order > LARGE else tuple(WAYS):
        other = reduce(WAYS[way](plain, rng), error=error, method=made.receipt.method)
        found = {claim.name: claim for claim in other.receipt.claims}
        pairs = [(found[key].relative, claims[key].relative) for key in ("reduction-error", "reduction-bound")]
        apart = [abs(one / two - 1) for one, two in pairs if one is not None and two]
        # rounding may put a pole that is on the axis to working precision to either side
        same = other.receipt.details["kept_order"] == made.receipt.details["kept_order"]
        value, bound = found["reduction-error"].value, found["reduction-bound"].value
        wrong = same and (other.model.order != made.model.order or value is None or bound is None or value > bound)
        failures += wrong
        mark = " WRONG" if wrong else "" if same else " (a pole on the axis)"
        words.append(f"{way} {other.model.order}, {max(apart, default=np.nan):.0e} apart{mark}")
    print(f"{'':12s} changed: {'; '.join(words)}", flush=True)
    return failures


def references(name: str, plain: realize.StateSpace, known: dict) -> int:
    """Compare errors, bounds and Hankel singular values with reference values; return how many are missed."""
    missed, words = 0, []
    for order, values in known.get("computed_here_bt", {}).get("bt", {}).items():
        made = reduce(plain, order=int(order), method="balanced-truncation")
        claims = {claim.name: claim for claim in made.receipt.claims}
        apart = abs(claims["reduction-error"].value / values["hinf_error"] - 1)
        wrong = made.model.order == int(order) and apart > 1e-3
        missed += wrong
        words.append(f"{order}: {apart:.0e}{' WRONG' if wrong else ''}")
    own = known.get("computed_here", {})
    singular = np.array(own.get("hsv_top10", own.get("hsv_top20", [])))
    if singular.size:
        made = reduce(plain, order=4 if plain.order < LARGE else 20, method="balanced-truncation")
        found = np.array(made.receipt.details["hankel_singular_values"][: singular.size])
        # references far below the first value carry their own rounding
        apart = float(np.abs(found - singular).max() / singular[0])
        missed += apart > 1e-9
        words.append(f"Hankel singular values {apart:.0e} of the first apart")
    if words:
        print(f"{'':12s} against references, relative: {'; '.join(words)}", flush=True)
    return missed


def main(names: list[str]) -> int:
    """Print the table; 1 if anything is wrong."""
    known = json.loads((MODELS / "expected.json").read_text())
    failures = 0
    head = f"{'model':12s} {'method':22s} {'asked':>6s} {'order':>9s}"
    print(head + "".join(f" {title:>9s}" for title in ("bound", "L-inf", "H2", "nu-gap")) + " seconds")
    for name in names:
        plain = states_of(realize.read(MODELS / f"{name}.npz"))[0]
        last = None
        for error in ERRORS:
            for method in METHODS:
                made, wrong = line(name, plain, error, method)
                failures += wrong
                last = made if made is not None and method == METHODS[0] else last
        if last is not None:
            failures += changed(name, plain, ERRORS[-1], last)
        failures += references(name, plain, known.get(name, {}))
    return int(failures > 0)


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:] or list(NAMES)))
