"""Exact response error of coefficients -> state space, side by side with scipy.signal, control and slycot's td04ad.

Run: python benchmarks/accuracy/coefficients_to_states.py [--sampled] [--all] [--alone] [--every N]
The others run in a child process with a time limit: "hang", "crash" and "error" are shown as such; a result of another
order than the plant's has its order behind the error. With --alone they are left out, with --every N only each N-th
plant is taken. The last lines are medians of the errors over ours, and how often each was right to 1e-6.
The error is measured against exact rational arithmetic on the dynamic band of the source (docs/methods/claims).
"""

from __future__ import annotations

import sys
import time
from typing import Any

import numpy as np
from families import continuous, sampled
from independent import Child, control_states, scipy_states, slycot_states

import realize
from realize.verification import Pair, View
from realize.verification.conversion import end_behaviour, response_error

EPS = np.finfo(float).eps


def limit_of(view: View) -> float:
    """Return max(1e-13, 8 eps / max(1e-4, smallest damping of poles and zeros)), sampled: 8 eps / min|1 - z| too."""
    zeros, poles = view.channel_roots[0][0]
    both = zeros.merged(poles)
    damping = float(both.damping.min()) if both.s.size else 1.0
    limit = max(1e-13, 8 * EPS / max(1e-4, damping))
    if view.period is not None:
        z = np.exp(both.s * view.period)
        limit = max(limit, 8 * EPS / float(np.abs(1 - z).min()))
    return limit


#: Name -> function in the child.
OTHERS = {"scipy": scipy_states, "control": control_states, "td04ad": slycot_states}


def plain_error(states: tuple[np.ndarray, ...], model: realize.TransferFunction, w: np.ndarray, exact: Any) -> float:
    """Return the error of C (sI - A)^-1 B + D solved as it stands in doubles, relative to the largest gain."""
    A, B, C, D = states
    with np.errstate(all="ignore"):
        try:
            pencil = model.time.points(w)[:, None, None] * np.eye(A.shape[0]) - A
            values = (C @ np.linalg.solve(pencil, np.broadcast_to(B.astype(complex), (w.size, *B.shape))) + D)[:, 0, 0]
        except np.linalg.LinAlgError:
            return np.inf
        error = float(np.abs(values - exact).max() / np.abs(exact).max())
    return error if np.isfinite(error) else np.inf


def other_error(
    child: Child, name: str, model: realize.TransferFunction, pair_source: View, w: np.ndarray, exact: Any
) -> tuple[float, float, str]:
    """Return response error and error in doubles of another library's conversion (infinite: none), and words."""
    happened, value = child.call(OTHERS[name], model.numerator[0][0], model.denominator[0][0])
    if happened != "done":
        return np.inf, np.inf, happened
    try:
        A, B, C, D = (np.asarray(part, dtype=float) for part in value)
        n = A.shape[0]
        theirs = realize.StateSpace(A=A, B=B.reshape(n, 1), C=C.reshape(1, n), D=np.reshape(D, (1, 1)), time=model.time)
    except (realize.InputError, ValueError):
        return np.inf, np.inf, "not finite"
    claim = response_error(Pair(pair_source, View(theirs)))
    error = np.inf if claim.value is None else claim.value
    plain = plain_error((theirs.A, theirs.B, theirs.C, theirs.D), model, w, exact)
    return error, plain, f"{error:.1e}" + (f" n={n}" if n != model.order else "")


def main() -> None:
    """Print one line a plant, and the worst ratio to the limit."""
    family = sampled() if "--sampled" in sys.argv else continuous()
    others = "".join(f"{name:>12} " for name in ("scipy", "control", "td04ad"))
    print(f"{'plant':44} {'order':>5} {'error':>9} {'limit':>9} {'double':>9} {'ends':>5} {others}{'ms':>7}")
    worst, bad, count = 0.0, 0, 0
    child = Child()
    names = [] if "--alone" in sys.argv else list(OTHERS)
    every = int(sys.argv[sys.argv.index("--every") + 1]) if "--every" in sys.argv else 1
    ours: list[float] = []
    theirs: dict[str, list[float]] = {name: [] for name in names}
    solved: dict[str, list[float]] = {name: [] for name in [*names, "realize"]}
    happenings: dict[str, list[str]] = {name: [] for name in names}
    for name, model in list(family)[::every]:
        start = time.perf_counter()
        made = realize.convert(model, "state-space")
        seconds = time.perf_counter() - start
        source = View(model)
        pair = Pair(source, View(made.model))
        claim = response_error(pair)
        error = np.inf if claim.value is None else claim.value
        end = end_behaviour(pair, 1e-9)
        limit = limit_of(source)
        w = np.geomspace(*_ends(source), 400)
        reference = source.response(w)[:, 0, 0]
        double = (
            np.abs(made.model.rational_part(made.model.time.points(w))[:, 0, 0] - reference).max()
            / np.abs(reference).max()
        )
        wrong_order = made.model.order != model.order
        over = error > limit or double > 1e-10 or wrong_order or not end.holds
        count, bad, worst = count + 1, bad + over, max(worst, error / limit)
        ours.append(error)
        made_states = (made.model.A, made.model.B, made.model.C, made.model.D)
        solved["realize"].append(plain_error(made_states, model, w, reference))
        columns = []
        for other in names:
            value, plain, words = other_error(child, other, model, source, w, reference)
            theirs[other].append(value)
            solved[other].append(plain)
            happenings[other].append(words.split()[0] if not np.isfinite(value) else "done")
            columns.append(words)
        if over or "--all" in sys.argv:
            words = ("  OVER" if over else "") + (" ORDER" if wrong_order else "")
            print(
                f"{name:44} {model.order:5d} {error:9.1e} {limit:9.1e} {double:9.1e} {end.holds!s:>5} "
                f"{''.join(f'{column:>12} ' for column in columns)}{1e3 * seconds:7.1f}{words}",
                flush=True,
            )
    child.close()
    print(f"{count} plants, {bad} over a limit, largest error / limit {worst:.3g}")
    floor = np.maximum(np.array(ours), EPS)
    for other in names:
        values = np.array(theirs[other])
        failed = {what: happenings[other].count(what) for what in sorted(set(happenings[other]) - {"done"})}
        right = [int(np.count_nonzero(values <= limit)) for limit in (1e-6, 1e-9)]
        ratio = float(np.median(values / floor))
        print(
            f"{other}: median error over ours {ratio:.1e}, right to 1e-6 in {right[0]}, to 1e-9 in {right[1]}, {failed}"
        )
    for other, errors in solved.items():
        right = [int(np.count_nonzero(np.array(errors) <= limit)) for limit in (1e-6, 1e-9)]
        print(f"{other} solved plainly in doubles: right to 1e-6 of the peak in {right[0]}, to 1e-9 in {right[1]}")


def _ends(view: View) -> tuple[float, float]:
    zeros, poles = view.channel_roots[0][0]
    size = zeros.merged(poles).frequency
    size = size[size > 0]
    top = np.pi / view.period if view.period is not None else np.inf
    return float(size.min()) / 10, min(float(size.max()) * 10, top)


if __name__ == "__main__":
    main()
