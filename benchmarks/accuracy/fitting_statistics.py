"""Monte Carlo of fits: order right, always stable, error against the stated deviation and the Cramer-Rao bound.

Run: OMP_NUM_THREADS=1 python benchmarks/accuracy/fitting_statistics.py [--seeds N] [--cases TEXT ...]
         [--processes N] [--results FILE] [--given] [--dry]

Each case is a truth of ``fitting_truth`` with noise of a level (relative to the RMS response of each channel, or to
each value), fitted with order ``auto`` through `realize.fit`; --given hands over the true deviations, otherwise they
are estimated. --cases picks those whose name contains one of the texts. --results keeps one JSON line a fit, and a
later run with the same file does only what is missing.

The table: fits; those whose every mode stands above the noise (bound of its damping under 10 % of its damping); how
many of these have the right order of poles and of states; how many of all are stable; RMS of error / stated deviation
and of error / bound over all frequencies and dampings of the fits with the right order, number of intervals, and
processor seconds of the middle fit. Exits with 1 if, over at least 2,000 intervals, a ratio is outside of 0.9 to 1.1
(deviation) or above 1.2 (bound), if a fit is not stable, or if, with 20 fits and more, less than 95 % of the orders at
1 % are right.
"""

from __future__ import annotations

import argparse
import json
import sys
import time
from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

import numpy as np
from fitting_truth import ABOVE, Truth, close, delayed, heavy, integrating, noisy, spread, uneven

import realize

SHAPES = {"1x1": (1, 1), "2x2": (2, 2), "4x4": (4, 4)}
MODAL: dict[str, Callable[[int, tuple[int, int]], Truth]] = {
    "ten modes": lambda seed, shape: spread(seed, shape, 10, 0.005),
    "close": close,
    "heavy": heavy,
    "integrator": integrating,
    "delayed": delayed,
    "uneven": uneven,
}


def cases() -> Iterator[tuple[str, str, str, float, str]]:
    """Yield (name, truth, shape, level, kind)."""
    for shape in SHAPES:
        for level, kind in ((0.001, "constant"), (0.01, "constant"), (0.05, "constant"), (0.01, "proportional")):
            yield f"ten modes {shape} {level:.1%} {kind}", "ten modes", shape, level, kind
    for truth in ("close", "heavy", "integrator", "delayed", "uneven"):
        for shape in ("1x1", "2x2"):
            yield f"{truth} {shape} 1.0% constant", truth, shape, 0.01, "constant"
        yield f"{truth} 1x1 1.0% proportional", truth, "1x1", 0.01, "proportional"


def one(task: tuple[str, str, str, float, str, int, bool]) -> dict:
    """Fit one noisy truth and return what the table needs."""
    name, truth_name, shape, level, kind, seed, given = task
    truth = MODAL[truth_name](seed, SHAPES[shape])
    H, deviation = noisy(truth, level, kind, seed)
    data = realize.FrequencyResponse(
        frequency=truth.w, frequency_unit="rad/s", response=H, deviation=deviation if given else None
    )
    start = time.process_time()
    fitted = realize.fit(data, dead_time=truth.dead_time or None)
    seconds = time.process_time() - start
    bounds = truth.bounds(deviation)
    zeta = -truth.pairs.real / np.abs(truth.pairs)
    details = fitted.receipt.details
    poles = np.array([complex(re, im) for re, im, _ in details["poles"]])
    listed = [mode for mode in details["modes"] if mode["pair"]]
    ratios = []
    if len(poles) == truth.order and len(listed) == truth.pairs.size:
        sizes = np.abs(truth.pairs)
        for k, j in enumerate(np.argsort(sizes, kind="stable")):
            mode = sorted(listed, key=lambda m: m["frequency"])[k]
            for error, stated, bound in (
                (mode["frequency"] - sizes[j], mode["frequency_deviation"], bounds[j, 0]),
                (mode["damping"] - zeta[j], mode["damping_deviation"], bounds[j, 1]),
            ):
                ratios.append([error / (stated or np.inf), error / bound])
    return {
        "case": name,
        "seed": seed,
        "given": given,
        "above": bool(np.all(bounds[:, 1] < ABOVE * zeta)),
        "order": len(poles),
        "truth": truth.order,
        "states": fitted.receipt.result.order,
        "stable": bool(np.all(poles.real < 0) and fitted.receipt.claim("stability").value),
        "ratios": ratios,
        "seconds": seconds,
    }


def done(path: Path | None, given: bool) -> list[dict]:
    if path is None or not path.exists():
        return []
    rows = [json.loads(line) for line in path.read_text().splitlines()]
    return [row for row in rows if row["given"] == given]


def table(rows: list[dict], names: list[str]) -> int:
    """Print the table and return how many promises were missed."""
    head = f"{'case':36} {'fits':>4} {'above':>5} {'poles':>6} {'states':>6} {'stable':>6}"
    print(head + f" {'error/stated':>12} {'error/bound':>11} {'intervals':>9} {'CPU s':>6}")
    missed = 0
    pooled: list[list[float]] = []
    for name in names:
        own = [row for row in rows if row["case"] == name]
        if not own:
            continue
        above = [row for row in own if row["above"]]
        ratios = np.array([r for row in above for r in row["ratios"]]).reshape(-1, 2)
        pooled += ratios.tolist()
        stated, bound = np.sqrt(np.mean(ratios**2, axis=0)) if ratios.size else (np.nan, np.nan)
        poles, states = (
            np.mean([row[key] == row["truth"] for row in above]) if above else np.nan for key in ("order", "states")
        )
        stable = np.mean([row["stable"] for row in own])
        print(
            f"{name:36} {len(own):4d} {len(above):5d} {poles:6.0%} {states:6.0%} {stable:6.0%}"
            f" {stated:12.3f} {bound:11.3f} {len(ratios):9d} {np.median([row['seconds'] for row in own]):6.2f}",
            flush=True,
        )
        missed += int(stable < 1) + int(len(above) >= 20 and "1.0%" in name and poles < 0.95)
    if len(pooled) >= 2000:
        stated, bound = np.sqrt(np.mean(np.array(pooled) ** 2, axis=0))
        print(f"pooled: error/stated {stated:.3f}, error/bound {bound:.3f} over {len(pooled)} intervals")
        missed += int(not 0.9 <= stated <= 1.1) + int(bound > 1.2)
    print("all promises kept" if not missed else f"{missed} MISSED")
    return missed


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seeds", type=int, default=40)
    parser.add_argument("--cases", nargs="*", default=[])
    parser.add_argument("--processes", type=int, default=1)
    parser.add_argument("--results", type=Path)
    parser.add_argument("--given", action="store_true", help="hand over the true deviations")
    parser.add_argument("--dry", action="store_true", help="only print the table of the results there are")
    options = parser.parse_args()
    wanted = [c for c in cases() if not options.cases or any(text in c[0] for text in options.cases)]
    rows = done(options.results, options.given)
    known = {(row["case"], row["seed"]) for row in rows}
    tasks = [(*c, seed, options.given) for seed in range(options.seeds) for c in wanted if (c[0], seed) not in known]
    if tasks and not options.dry:
        with ProcessPoolExecutor(max_workers=options.processes) as pool:
            for row in pool.map(one, tasks):
                rows.append(row)
                if options.results is not None:
                    with options.results.open("a") as stream:
                        stream.write(json.dumps(row) + "\n")
    return int(table(rows, [c[0] for c in wanted]) > 0)


if __name__ == "__main__":
    sys.exit(main())
