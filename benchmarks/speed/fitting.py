"""Seconds of whole fits: one channel of 2,000 lines at order 20, sixteen channels at order 60, impulse responses.

    OMP_NUM_THREADS=1 python benchmarks/speed/fitting.py           one channel and impulse responses
    OMP_NUM_THREADS=1 python benchmarks/speed/fitting.py --large   also 20,000 lines of 4 x 4 channels

Processor time of this process, and the largest memory it held; the truth has modes at 0.5 % damping and noise of 1 %.
"""

from __future__ import annotations

import argparse
import resource
import time
from collections.abc import Callable
from typing import Any

import numpy as np

import realize
from realize.fitting import fit_samples
from realize.kernels.exponentials import powers


def truth(modes: int, shape: tuple[int, int], lines: int, noise: float, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Return frequencies and a noisy response of modes with residues of rank one."""
    rng = np.random.default_rng(seed)
    w = np.linspace(1, 100, lines)
    size = np.sort(np.exp(rng.uniform(np.log(1.2), np.log(85), modes)))
    poles = size * (-0.005 + 1j)
    left, right = rng.normal(size=(modes, shape[0], 1)), rng.normal(size=(modes, 1, shape[1]))
    residues = ((left @ right) * (size * 0.005 * (0.1 - 1j))[:, None, None]).reshape(modes, -1)
    s = 1j * w[:, None]
    H = (1 / (s - poles)) @ residues + (1 / (s - poles.conj())) @ residues.conj()
    rms = np.sqrt(np.mean(np.abs(H) ** 2))
    H = H + noise * rms * (rng.normal(size=H.shape) + 1j * rng.normal(size=H.shape)) / np.sqrt(2)
    return w, H.reshape(lines, *shape)


def impulse(modes: int, shape: tuple[int, int], count: int, noise: float) -> np.ndarray:
    """Return samples of modes with residues of rank one."""
    rng = np.random.default_rng(20)
    z = (1 - 10 ** rng.uniform(-3, -1, modes)) * np.exp(1j * np.sort(rng.uniform(0.02, 3, modes)))
    left, right = rng.normal(size=(modes, shape[0], 1)), rng.normal(size=(modes, 1, shape[1]))
    h = 2 * np.einsum("kn,npm->kpm", powers(z, 0, count), left @ right * (1 + 1j)).real
    h = np.concatenate([np.zeros((1, *shape)), h[:-1]])
    return h + noise * np.sqrt(np.mean(h**2)) * rng.normal(size=h.shape)


def timed(name: str, work: Callable[[], Any], found: Callable[[Any], str]) -> None:
    start, wall = time.process_time(), time.perf_counter()
    result = work()
    seconds, passed = time.process_time() - start, time.perf_counter() - wall
    memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"{name:58s} {seconds:8.2f} {passed:8.2f} {memory:8.0f}   {found(result)}", flush=True)


def claims(result: Any) -> str:
    return f"order {result.receipt.claim('order').value:.0f}, misfit {result.receipt.claim('rms-misfit').value:.3g}"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--large", action="store_true")
    large = parser.parse_args().large
    print(f"{'':58s} {'cpu s':>8s} {'wall s':>8s} {'MB':>8s}")
    w, H = truth(10, (1, 1), 2000, 0.01, 1)
    data = realize.FrequencyResponse(frequency=w, frequency_unit="rad/s", response=H)
    realize.fit(data, order=2)  # imports
    for order in (20, "auto"):
        for method in ("auto", "vector-fitting", "subspace", "loewner", "barycentric"):
            timed(
                f"2,000 lines, one channel, order {order}, {method}: step fit",
                lambda order=order, method=method: realize.fit(data, order=order, method=method),
                claims,
            )
    for noise in (0.0, 0.01):
        h = impulse(10, (2, 2), 4000, noise)
        for order in (20, "auto"):
            timed(
                f"4,000 samples, 2 x 2, order {order}, noise {noise:g}: fit_samples",
                lambda h=h, order=order: fit_samples(h, 0.001, order=order),
                lambda fit: f"order {fit.order}, misfit {fit.rms:.3g}",
            )
    if large:
        w, H = truth(30, (4, 4), 20000, 0.01, 2)
        data = realize.FrequencyResponse(frequency=w, frequency_unit="rad/s", response=H)
        timed("20,000 lines, 4 x 4, order 60: step fit", lambda: realize.fit(data, order=60), claims)


if __name__ == "__main__":
    main()
