"""Orders of minimal realizations: exact and within rounding, beside control's and slycot's answers.

Models of order 11 to 40 with hidden modes of every kind, repeated ones among them, whose order is known by construction
(`realize.testing.hidden_states`): integer shears up to a condition number of 1e6, units of states and channels changed
by 2^+-20, time by 1e+-6, a quarter of them sampled. Within rounding: the same in units that are no powers of two, each
number rounded once, without and with repeated poles. Run with the number of models, and of those within rounding:

    OMP_NUM_THREADS=1 python benchmarks/accuracy/minimal_orders.py 500 50
"""

from __future__ import annotations

import sys
import time
import warnings

import numpy as np

from realize.forms.within_rounding import hidden_within
from realize.kernels.exact.order import minimal_order
from realize.testing.hidden_states import exact_model, hidden_states, rounded_model

EPS = 2.0**-52
Array = np.ndarray


def libraries(A: Array, B: Array, C: Array) -> tuple[int | None, int | None]:
    """Return the orders by slycot TB01PD and by control's minreal, at their default tolerances."""
    answers: list[int | None] = []
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for which in ("slycot", "control"):
            try:
                if which == "slycot":
                    import slycot

                    n, m, p = A.shape[0], B.shape[1], C.shape[0]
                    b, c = np.zeros((n, max(m, p))), np.zeros((max(m, p), n))
                    b[:, :m], c[:p] = B, C
                    answers.append(int(slycot.tb01pd(n, m, p, A.copy(), b, c, job="M", equil="S", tol=0.0)[3]))
                else:
                    import control

                    made = control.minreal(control.ss(A, B, C, 0 * (C @ B)), verbose=False)
                    answers.append(int(made.nstates))
            except Exception:
                answers.append(None)
    return answers[0], answers[1]


def main(count: int, rounded: int) -> None:
    """Print one line a kind of question."""
    kinds = {"exact": count, "within rounding, simple poles": rounded, "within rounding, repeated poles": rounded}
    heads = ("models", "realize", "slycot", "control", "ambiguous", "silent", "s")
    print(f"{'right orders':<34}" + "".join(f"{head:>10}" for head in heads))
    for name, models in kinds.items():
        right, ambiguous, silent, spent = [0, 0, 0], 0, 0, 0.0
        for seed in range(models):
            known = hidden_states(seed, repeated="simple" not in name)
            n, doubtful = len(known.A), False
            if name == "exact":
                model = exact_model(known, seed, sampled=seed % 4 == 3)
                numbers = (model.A, model.B, model.C)
                started = time.process_time()
                own = minimal_order(*(model.exact(part) for part in "ABC")).order
            else:
                numbers = rounded_model(known, seed)
                started = time.process_time()
                hidden = hidden_within(*numbers, None, 4 * n * EPS, sampled=False)
                own = hidden.order
                change = max((mode.change for mode in hidden.modes), default=0.0)
                doubtful = hidden.doubtful or hidden.kept < 4e3 * n * EPS or change > n * EPS
            spent += time.process_time() - started
            for k, answer in enumerate((own, *libraries(*numbers))):
                right[k] += answer == known.order
            ambiguous += doubtful
            if own != known.order:
                silent += not doubtful
                print(f"seed {seed}: order {known.order}, found {own}, condition {known.condition:.0e}, {doubtful}")
        counts = (models, *right, ambiguous, silent)
        print(f"{name:<34}" + "".join(f"{value:>10}" for value in counts) + f"{spent / models:>10.2f}")


if __name__ == "__main__":
    main(*(int(text) for text in sys.argv[1:3])) if len(sys.argv) > 2 else main(20, 10)
