"""Constrained fits: what a constraint costs, whether it is exact, and what passivity changes.

    OMP_NUM_THREADS=1 python benchmarks/accuracy/constrained_fits.py

First table: invented plants with noise of 1 % (seeds 0 to 4, the worst of each). Misfit is the RMS over the deviation,
with the constraint and without; the next column is the claim on the returned state model. Second table: stability by
reflecting the poles of an unstable relocation alone, against the fit over stable poles. Third table: dead times, error
over stated deviation, root mean square. Fourth table: measured networks, passive or not.
"""

from __future__ import annotations

import time
from pathlib import Path

import numpy as np

from realize.files import read
from realize.fitting import Structure, fit_response
from realize.kernels.vector_fitting import ordered_poles, relocated, residues_of
from realize.models import FrequencyResponse
from realize.steps import fit

W = np.geomspace(0.05, 200, 300)
S = 1j * W
SEEDS = range(5)
FOLDER = Path(__file__).resolve().parents[3] / "shared" / "data" / "measured"
if not FOLDER.is_dir():
    FOLDER = Path("/work/shared/data/measured")


def noisy(values: np.ndarray, seed: int, level: float = 0.01) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    deviation = level * np.abs(values)
    noise = rng.normal(size=values.shape) + 1j * rng.normal(size=values.shape)
    return values + deviation * noise / np.sqrt(2), deviation


def constraints() -> None:
    drive = 150 * (S**2 + 0.1 * S + 9) / (S * (S + 2) * (S**2 + 0.2 * S + 25) * (S + 50))
    one = 3 / ((S + 1) * (S / 50 + 1))
    two = np.stack([one, one / (S + 3), one / (S + 3), 2 * one], axis=1).reshape(-1, 2, 2)
    cases = [
        ("integrator", drive, {"order": 5, "integrators": 1}, "fixed-poles"),
        ("relative degree 3", drive, {"order": 5, "integrators": 1, "relative_degree": 3}, "relative-degree"),
        ("fixed zeros", drive, {"order": 5, "fixed_zeros": list(np.roots([1, 0.1, 9]))}, "fixed-zeros"),
        ("steady-state gain", one, {"order": 2, "steady_state_gain": 3.0}, "steady-state-gain"),
        ("symmetric 2x2", two, {"order": 3, "symmetric": True}, "symmetry"),
        ("relative degree 2, 2x2", two, {"order": 3, "relative_degree": 2}, "relative-degree"),
    ]
    print(f"{'constraint':<26}{'misfit with':>12}{'without':>10}{'claim':>12}  kept")
    for name, truth, options, claim in cases:
        rows = []
        for seed in SEEDS:
            values, deviation = noisy(truth if truth.ndim == 3 else truth[:, None, None], seed)
            data = FrequencyResponse(frequency=W, frequency_unit="rad/s", response=values, deviation=deviation)
            done = fit(data, **options).receipt
            plain = fit(data, order=options["order"]).receipt
            found = done.claim(claim)
            rows.append(
                (done.claim("weighted-misfit").value, plain.claim("weighted-misfit").value, found.value, found.holds)
            )
        print(
            f"{name:<26}{max(r[0] for r in rows):>12.4f}{max(r[1] for r in rows):>10.4f}"
            f"{max(r[2] for r in rows):>12.1e}  {all(r[3] for r in rows)}"
        )


def stability() -> None:
    truth = 2 / ((S - 1) * (S + 10)) + 1 / (S**2 + 0.1 * S + 16)
    values, deviation = noisy(truth, 0)
    flat, weights = values[:, None], 1 / deviation[:, None]
    poles = ordered_poles(np.array([-1.0, -10.0, -0.05 + 4j, -0.05 - 4j]))
    for _ in range(12):
        poles = relocated(S, poles, flat, weights, True, reflect=False)
    rows = []
    for name, used in (("unstable poles kept", poles), ("reflected, residues again", ordered_poles(poles))):
        rows.append((name, residues_of(S, used, flat, weights, True)[2]))
    found = fit_response(W, values, deviation=deviation, order=4)
    rows.append(("fitted over stable poles", found.misfit[:, :, 0]))
    print(f"\n{'an unstable plant':<26}{'misfit / deviation':>20}")
    for name, misfit in rows:
        print(f"{name:<26}{np.sqrt(np.mean(np.abs(weights * misfit) ** 2)):>20.3f}")


def dead_times() -> None:
    print(f"\n{'dead time':<26}{'error / deviation':>20}{'seconds a fit':>16}")
    for delay in (0.05, 0.5):
        errors, start = [], time.process_time()
        for seed in range(10):
            values, deviation = noisy(2 / ((S + 1) * (S / 10 + 1)) * np.exp(-delay * S), seed)
            structure = Structure(relative_degree=2, dead_time="auto")
            (row,) = fit_response(W, values, deviation=deviation, order=2, structure=structure).dead_times
            errors.append((row.seconds - delay) / (row.deviation or np.nan))
        spent = (time.process_time() - start) / 10
        print(f"{delay:<26}{np.sqrt(np.mean(np.square(errors))):>20.2f}{spent:>16.2f}")


def passivity() -> None:
    print(f"\n{'network':<36}{'before':>10}{'misfit':>10}{'after':>8}{'misfit':>10}{'change':>10}  basis")
    cases = (
        ("ring_slot_measured.s1p", (3, 5)),
        ("resonator_36mm.s2p", (4, 12)),
        ("bandpass_450_550MHz_simulated.s2p", (4, 8)),
    )
    for name, order in cases:
        data = read(FOLDER / name)
        square = data.shape[0] > 1
        plain = fit(data, order=order, symmetric=square).receipt
        done = fit(data, order=order, symmetric=square, passive="auto").receipt
        claim = done.claim("passivity")
        print(
            f"{name:<36}{plain.claim('passivity').value:>10.1e}{plain.claim('rms-misfit').value:>10.1e}"
            f"{claim.value:>8.0e}{done.claim('rms-misfit').value:>10.1e}"
            f"{done.details['passivity']['rms']:>10.1e}  {claim.basis}"
        )


if __name__ == "__main__":
    constraints()
    stability()
    dead_times()
    passivity()
