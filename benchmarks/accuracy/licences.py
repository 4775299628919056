"""Random loops: whenever a receipt licenses a controller, the loop with the full plant is stable, by its eigenvalues.

Plants stable and unstable, 1 x 1 and 2 x 2, continuous and sampled, reduced with stated weights; the controllers come
from observers and state feedback for the reduced plant, random ones beside them.
"""

from __future__ import annotations

import sys
import time
from collections import Counter

import numpy as np
import scipy.linalg

from realize.models import StateSpace, TimeBase
from realize.steps import reduce
from realize.verification.closed_loop import loop_record

LOOPS = 300


def random_plant(rng: np.random.Generator) -> StateSpace:
    """Return a plant of 4 to 14 states in random coordinates, with an unstable pole now and then."""
    sampled = bool(rng.integers(2))
    channels = int(rng.integers(1, 3))
    pairs = int(rng.integers(2, 7))
    blocks = []
    for w in 10.0 ** rng.uniform(-1, 1, pairs):
        damping = 10.0 ** rng.uniform(-1.5, 0)
        s = complex(-damping * w, w)
        z = np.exp(0.1 * s) if sampled else s
        blocks.append([[z.real, z.imag], [-z.imag, z.real]])
    if rng.random() < 0.4:
        blocks.append([[1.05 if sampled else 0.5]])
    A = scipy.linalg.block_diag(*blocks)
    n = A.shape[0]
    S = rng.standard_normal((n, n))
    size = (10.0 ** rng.uniform(-2.5, 0, n))[:, None]
    B, C = size * rng.standard_normal((n, channels)), rng.standard_normal((channels, n))
    base = TimeBase("sampled", 0.1) if sampled else TimeBase("continuous")
    return StateSpace(A=S @ A @ np.linalg.inv(S), B=S @ B, C=C @ np.linalg.inv(S), time=base)


def observer_controller(plant: StateSpace, effort: float) -> StateSpace:
    """Return state feedback with an observer for a plant without feed-through, as u = -K y."""
    riccati = scipy.linalg.solve_discrete_are if plant.time.sampled else scipy.linalg.solve_continuous_are
    A, B, C = plant.A, plant.B, plant.C
    m, p = B.shape[1], C.shape[0]
    X = riccati(A, B, C.T @ C, effort * np.eye(m))
    Y = riccati(A.T, C.T, B @ B.T, effort * np.eye(p))
    if plant.time.sampled:
        F = np.linalg.solve(effort * np.eye(m) + B.T @ X @ B, B.T @ X @ A)
        H = np.linalg.solve(effort * np.eye(p) + C @ Y @ C.T, C @ Y @ A.T).T
    else:
        F, H = B.T @ X / effort, Y @ C.T / effort
    return StateSpace(A=A - B @ F - H @ C, B=H, C=F, time=plant.time)


def one_loop(seed: int) -> str:
    """Return "licensed", "not licensed" or "no licence", or "VIOLATED" where a licensed loop is unstable."""
    rng = np.random.default_rng(seed)
    plant = random_plant(rng)
    p, m = plant.shape
    weights = {"input_weight": 10.0 ** rng.uniform(-0.5, 0.5, m), "output_weight": 10.0 ** rng.uniform(-0.5, 0.5, p)}
    made = reduce(plant, error=float(10.0 ** rng.uniform(-3, -0.5)), **weights)
    permit = made.receipt.details["licence"]
    if not permit["given"]:
        return "no licence"
    small = made.model
    try:
        controller = observer_controller(small, float(10.0 ** rng.uniform(-2, 1)))
    except (np.linalg.LinAlgError, ValueError):
        return "no controller"
    wi, wo = weights["input_weight"], weights["output_weight"]
    scaled = small.with_(B=small.B * wi, C=wo[:, None] * small.C, D=wo[:, None] * small.D * wi, receipts=())
    inner = controller.with_(B=controller.B / wo, C=controller.C / wi[:, None])
    margin = loop_record(scaled, inner)["lower"]
    if margin is None or not margin > permit["margin"]:
        return "not licensed"
    A = np.block([[plant.A, -plant.B @ controller.C], [controller.B @ plant.C, controller.A]])
    poles = np.linalg.eigvals(A)
    stable = np.all(np.abs(poles) < 1) if plant.time.sampled else np.all(poles.real < 0)
    return "licensed" if stable else "VIOLATED"


def main(count: int = LOOPS) -> int:
    """Print how the loops came out; 1 if a licensed one is unstable."""
    started = time.process_time()
    outcomes = Counter(one_loop(seed) for seed in range(count))
    for outcome, number in sorted(outcomes.items()):
        print(f"{outcome:14s} {number:5d}")
    print(f"{count} loops, {time.process_time() - started:.1f} s of processor time")
    return int(outcomes["VIOLATED"] > 0)


if __name__ == "__main__":
    sys.exit(main(int(sys.argv[1]) if len(sys.argv) > 1 else LOOPS))
