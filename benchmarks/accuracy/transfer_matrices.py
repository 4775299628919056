"""Transfer matrices -> states: McMillan degree, peak and response error, zeros; side by side with control and slycot.

Run: python benchmarks/accuracy/transfer_matrices.py [--count N] [--alone]
500 generated matrices (2 x 2 to 4 x 4, 3 to 8 shared poles, integers, six decades, lightly damped, repeated, gains down
to 1e-13 of each other) have a degree known by construction; every 10th goes to the other libraries too, in a child
process with a time limit. Then the textbook matrices of ../shared/data where they are: poles and zeros.
"""

from __future__ import annotations

import json
import sys
import time
from collections import Counter
from pathlib import Path
from typing import Any

import numpy as np
from independent import Child

import realize
from realize.testing.matrices import FAMILIES, known_matrix
from realize.verification import View, conversion_claims

EPS = np.finfo(float).eps
TEXTBOOKS = Path(__file__).parents[2].parent / "shared" / "data" / "papers" / "mimo_minimal_zeros.json"


def control_states(numerator: Any, denominator: Any) -> Any:
    """Return A, B, C, D of control's conversion to minimal states."""
    import control

    made = control.minreal(control.tf2ss(control.TransferFunction(numerator, denominator)), verbose=False)
    return made.A, made.B, made.C, made.D


def rows_of(model: realize.TransferFunction) -> tuple[Any, Any, Any]:
    """Return degrees, denominators [p][k] and numerators [p][m][k] over the exact common denominator of each row."""
    grid = View(model).fractions
    assert grid is not None
    p, m = model.shape
    commons = []
    for row in grid:
        common = row[0][1]
        for _, d in row[1:]:
            common = common * (d // common.gcd(d))
        commons.append(common)
    size = max(common.degree() for common in commons) + 1
    bottom, top = np.zeros((p, size)), np.zeros((p, m, size))
    for i, common in enumerate(commons):
        degree = common.degree()
        bottom[i, : degree + 1] = [float(common[degree - k]) for k in range(degree + 1)]
        for j, (n, d) in enumerate(grid[i]):
            whole = n * (common // d)
            top[i, j, : degree + 1] = [float(whole[degree - k]) for k in range(degree + 1)]
    return [common.degree() for common in commons], bottom, top


def slycot_states(index: Any, bottom: Any, top: Any) -> Any:
    """Return A, B, C, D of slycot's td04ad, each row over its common denominator."""
    import slycot

    p, m, _ = top.shape
    order, A, B, C, D = slycot.td04ad("R", m, p, index, bottom, top, tol=0.0)
    return A[:order, :order], B[:order, :m], C[:p, :order], D[:p, :m]


def slycot_zeros(A: Any, B: Any, C: Any, D: Any) -> Any:
    """Return the finite invariant zeros by slycot's ab08nd."""
    import scipy.linalg
    import slycot

    n, m, p = A.shape[0], B.shape[1], C.shape[0]
    found = slycot.ab08nd(n, m, p, A, B, C, D)
    count = found[0]
    return scipy.linalg.eigvals(found[8][:count, :count], found[9][:count, :count]) if count else np.zeros(0)


OTHERS = {"control": control_states, "td04ad": slycot_states}


def errors(source: realize.TransferFunction, result: realize.StateSpace) -> dict[str, float]:
    """Return the errors claimed of a result, infinite where there is no value."""
    claims = conversion_claims(source, result, False)
    return {c.name: np.inf if c.infinite or c.value is None else c.value + (c.uncertainty or 0.0) for c in claims}


def generated(count: int, alone: bool) -> None:
    """Print one line a family, and what the other libraries made of every 10th matrix."""
    child = Child()
    right, worst_peak, worst_ratio, spent = Counter(), {}, {}, Counter()
    forms: Counter[str] = Counter()
    theirs: dict[str, list[tuple[bool, float]]] = {name: [] for name in OTHERS}
    for seed in range(count):
        known = known_matrix(seed)
        started = time.process_time()
        made = realize.convert(known.model, "state-space")
        spent[known.family] += time.process_time() - started
        found = errors(known.model, made.model)
        damping = max(1e-4, float(View(known.model).poles.damping.min()))
        right[known.family] += made.model.order == known.degree
        forms[made.receipt.details["form"]] += 1
        worst_peak[known.family] = max(worst_peak.get(known.family, 0.0), found["peak-error"])
        ratio = found["response-error"] / max(1e-13, 8 * EPS / damping)
        worst_ratio[known.family] = max(worst_ratio.get(known.family, 0.0), ratio)
        if (seed + 1) % 50 == 0:
            print(
                f"{seed + 1} of {count}: degree right in {sum(right.values())}, peak error up to "
                f"{max(worst_peak.values()):.1e}, response / limit up to {max(worst_ratio.values()):.2e}, "
                f"{sum(spent.values()):.0f} s CPU",
                flush=True,
            )
        if alone or seed % 10 >= len(FAMILIES) or seed // 10 % len(FAMILIES) != seed % len(FAMILIES):
            continue
        plain = [[np.array(c) for c in row] for row in known.model.numerator]
        below = [[np.array(c) for c in row] for row in known.model.denominator]
        given = {"control": (plain, below), "td04ad": rows_of(known.model)}
        for name, function in OTHERS.items():
            happened, value = child.call(function, *given[name])
            try:
                A, B, C, D = (np.asarray(part, dtype=float) for part in value) if happened == "done" else (None,) * 4
                other = realize.StateSpace(A=A, B=B, C=C, D=D)
                theirs[name].append((other.order == known.degree, errors(known.model, other)["peak-error"]))
            except (realize.InputError, ValueError, TypeError):
                theirs[name].append((False, np.inf))
    child.close()
    print(f"{'family':16} {'degree right':>13} {'peak error':>11} {'response / limit':>17} {'CPU ms each':>12}")
    for k, family in enumerate(FAMILIES):
        number = len(range(k, count, len(FAMILIES)))
        print(
            f"{family:16} {right[family]:6}/{number:<6} {worst_peak[family]:11.1e} {worst_ratio[family]:17.2e} "
            f"{1e3 * spent[family] / number:12.0f}"
        )
    print("coordinates:", dict(forms))
    for name, results in theirs.items():
        if results:
            peaks = np.array([peak for _, peak in results])
            print(
                f"{name}: degree right in {sum(ok for ok, _ in results)} of {len(results)}, "
                f"peak error median {np.median(peaks):.1e}, worst {peaks.max():.1e}"
            )


def textbooks() -> None:
    """Print degree, poles and zeros of the textbook matrices, and the zeros of ab08nd."""
    if not TEXTBOOKS.is_file():
        print("no textbook matrices here")
        return
    child = Child()
    for name, case in json.loads(TEXTBOOKS.read_text(encoding="utf-8"))["cases"].items():
        model = realize.TransferFunction(
            numerator=[[entry["num"] for entry in row] for row in case["tf"]],
            denominator=[[entry["den"] for entry in row] for row in case["tf"]],
        )
        record = realize.inspect(model)
        states = realize.convert(model, "state-space").model
        happened, value = child.call(slycot_zeros, states.A, states.B, states.C, states.D)
        theirs = np.round(value, 12).tolist() if happened == "done" else happened
        print(
            f"{name:28} degree {states.order} of {case['minimal_order']}, poles {record['poles']}, "
            f"zeros {record['zeros']} of {case['invariant_zeros']}, ab08nd {theirs}"
        )
    child.close()


def main() -> None:
    """Run both parts."""
    count = int(sys.argv[sys.argv.index("--count") + 1]) if "--count" in sys.argv else 500
    generated(count, "--alone" in sys.argv)
    textbooks()


if __name__ == "__main__":
    main()
