"""Fits of one channel side by side: every method here, scipy's AAA with clean-up, slycot's SB10YD.

    OMP_NUM_THREADS=1 python benchmarks/accuracy/fitting_methods.py [--quick]

Synthetic truth (10 modes at 0.5 % damping, 2,000 lines, noise 0.1, 1 and 5 % of the RMS response), a smooth response
that is not rational, and measured data of ../shared/data where they are at hand. Everyone gets the same order. For AAA
(degree as asked, lines and their conjugates): spurious poles cleaned up by its own rule, poles on the right mirrored,
residues by least squares. SB10YD runs in a child process of its own with a time limit. ``misfit`` is relative to the
RMS of the data; ``to truth`` the error of the model against the response without noise; ``stable`` before anything was
mirrored; ``real`` whether the poles come in pairs. Processor seconds; SB10YD: wall seconds of the call in the child.
"""

from __future__ import annotations

import argparse
import json
import subprocess
import sys
import time
import warnings
from pathlib import Path

import numpy as np

from realize.fitting import fit_response

MEASURED = Path(__file__).resolve().parents[3] / "shared" / "data" / "measured"
TIME_LIMIT = 120.0
METHODS = ("auto", "vector-fitting", "subspace", "loewner", "barycentric")

CHILD = """
import json, sys, time
import numpy as np
import slycot
job = json.load(sys.stdin)
w, H = np.array(job["w"]), np.array(job["re"]) + 1j * np.array(job["im"])
start = time.perf_counter()
n, A, B, C, D = slycot.sb10yd(0, 0, w.size, H.real.copy(), H.imag.copy(), w, job["order"], 0.0)[:5]
seconds = time.perf_counter() - start
A = A[:n, :n]
value = [complex((C[:, :n] @ np.linalg.solve(1j * x * np.eye(n) - A, B[:n]) + D).item()) for x in w]
poles = np.linalg.eigvals(A)
print(json.dumps({"seconds": seconds, "order": int(n), "right": int(np.sum(poles.real >= 0)),
                  "re": [v.real for v in value], "im": [v.imag for v in value]}))
"""


def row(name: str, order: object, H: np.ndarray, truth: np.ndarray, model: np.ndarray, stable: object, real: object,
        seconds: float) -> None:  # fmt: skip
    size = np.linalg.norm(H)
    print(
        f"  {name:16s} order {order!s:>3s}  misfit {np.linalg.norm(model - H) / size:9.2e}  to truth "
        f"{np.linalg.norm(model - truth) / size:9.2e}  stable {stable!s:>5s}  real {real!s:>5s}  {seconds:7.2f} s",
        flush=True,
    )


def ours(w: np.ndarray, H: np.ndarray, truth: np.ndarray, order: int | str, method: str) -> None:
    start = time.process_time()
    fit = fit_response(w, H, order=order, method=method)  # type: ignore[arg-type]
    seconds = time.process_time() - start
    stable = bool(np.all(fit.poles.real < 0))
    name = method if order != "auto" else f"{method}, order"
    row(name, fit.order, H, truth, fit.misfit[:, 0, 0] + H, stable, True, seconds)


def aaa(w: np.ndarray, H: np.ndarray, truth: np.ndarray, order: int) -> None:
    from scipy.interpolate import AAA

    start = time.process_time()
    scale = float(np.sqrt(w[w > 0][0] * w[-1]))
    s = 1j * w / scale
    both = np.concatenate([s, s[w > 0].conj()]), np.concatenate([H, H[w > 0].conj()])
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        found = AAA(*both, max_terms=order + 1, rtol=1e-13)
        poles = np.asarray(found.poles())
    right = int(np.sum(poles.real >= 0))
    pairs = all(np.min(np.abs(poles - p.conjugate())) < 1e-8 * abs(p) for p in poles)
    poles = -np.abs(poles.real) + 1j * poles.imag
    basis = np.hstack([1 / (s[:, None] - poles), np.ones((s.size, 1))])
    mirrored = np.hstack([1 / (s.conj()[:, None] - poles), np.ones((s.size, 1))])
    matrix = np.vstack([basis, mirrored])
    residues = np.linalg.lstsq(matrix, np.concatenate([H, H.conj()]), rcond=None)[0]
    row("scipy AAA", poles.size, H, truth, basis @ residues, right == 0, pairs, time.process_time() - start)


def sb10yd(w: np.ndarray, H: np.ndarray, truth: np.ndarray, order: int) -> None:
    scale = float(np.sqrt(w[w > 0][0] * w[-1]))
    keep = w > 0
    job = {"w": (w[keep] / scale).tolist(), "re": H[keep].real.tolist(), "im": H[keep].imag.tolist(), "order": order}
    try:
        done = subprocess.run(
            [sys.executable, "-c", CHILD], input=json.dumps(job), capture_output=True, text=True, timeout=TIME_LIMIT
        )
    except subprocess.TimeoutExpired:
        print(f"  {'slycot SB10YD':16s} no answer within {TIME_LIMIT:.0f} s")
        return
    if done.returncode:
        last = done.stderr.strip().splitlines()[-1:] or ["no message"]
        print(f"  {'slycot SB10YD':16s} status {done.returncode}: {last[0][:80]}")
        return
    answer = json.loads(done.stdout)
    model = np.array(answer["re"]) + 1j * np.array(answer["im"])
    row("slycot SB10YD", answer["order"], H[keep], truth[keep], model, answer["right"] == 0, True, answer["seconds"])


def modes(noise: float, seed: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return frequencies, response and noisy response of ten modes at 0.5 % damping."""
    rng = np.random.default_rng(seed)
    w = np.linspace(1, 100, 2000)
    size = np.sort(np.exp(rng.uniform(np.log(3), np.log(85), 10)))
    poles, residues = size * (-0.005 + 1j), size * 0.005 * (rng.normal(size=10) - 1j)
    s = 1j * w[:, None]
    H = (1 / (s - poles)) @ residues + (1 / (s - poles.conj())) @ residues.conj()
    error = (rng.normal(size=w.size) + 1j * rng.normal(size=w.size)) / np.sqrt(2)
    return w, H, H + noise * np.sqrt(np.mean(np.abs(H) ** 2)) * error


def smooth() -> tuple[np.ndarray, np.ndarray]:
    """Return a diffusion with dead time, tanh(sqrt s)/sqrt s exp(-s/10): not rational, falling off."""
    w = np.geomspace(1e-2, 1e2, 400)
    root = np.sqrt(1j * w)
    return w, np.tanh(root) / root * np.exp(-0.1j * w)


def compared(title: str, w: np.ndarray, H: np.ndarray, truth: np.ndarray, order: int) -> None:
    print(f"{title}: {w.size} lines, order {order}")
    for method in METHODS:
        ours(w, H, truth, order, method)
    ours(w, H, truth, "auto", "auto")
    aaa(w, H, truth, order)
    sb10yd(w, H, truth, order)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--quick", action="store_true", help="one synthetic case and the smooth one")
    quick = parser.parse_args().quick
    for noise in (0.01,) if quick else (0.001, 0.01, 0.05):
        w, truth, H = modes(noise, 7)
        compared(f"ten modes, noise {100 * noise:g} %", w, H, truth, 20)
    w, H = smooth()
    compared("diffusion with dead time", w, H, H, 10)
    if quick or not MEASURED.is_dir():
        return
    from realize.files import read

    measured = (
        ("mechanical_points_1_to_3.csv", None, 16),
        ("EIS_battery_exampleData.csv", ["frequency_hz", "real", "imaginary"], 10),
        ("ring_slot_measured.s1p", None, 8),
    )
    for name, columns, order in measured:
        data = read(MEASURED / name, columns=columns)
        H = data.response[:, 0, 0]
        compared(f"{name}, first channel", data.radians, H, H, order)


if __name__ == "__main__":
    main()
