"""Modal truncation: the dominant poles are kept as they are."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from itertools import pairwise

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from realize.errors import Refused
from realize.kernels.norms import peak_gain
from realize.kernels.spectral_blocks import Block, spectral_blocks
from realize.reduction.plan import Plan, Request
from realize.reduction.prepare import Prepared
from realize.reduction.registry import Method, register
from realize.reduction.result import Projected
from realize.reduction.rounding import effect, spectral_errors

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Mode:
    """A block of poles, its measure of dominance, and the most it adds to the gain at any frequency."""

    block: Block
    dominance: float
    gain: float


def modes_of(prepared: Prepared) -> list[Mode]:
    """Return the modes of the stable part, the dominant ones first.

    A pole p with residue R counts |R|_2 / |Re p|, sampled |R|_2 / (1 - |p|): the largest gain of R / (s - p). A cluster
    that cannot be told apart counts with the largest gain of its block.
    """
    T, B, C = prepared.split.stable
    try:
        blocks = spectral_blocks(T)
    except ValueError as reason:
        raise Refused(f"the modes of this model cannot be separated: {reason}; use another method") from None
    found = []
    for block in blocks:
        into, out = block.W.T @ B, C @ block.V
        first = complex(block.poles[0])
        if block.poles.size == 1:
            residue = float(np.linalg.norm(out) * np.linalg.norm(into))
        elif block.poles.size == 2 and first.imag != 0:
            # x = v1 + i v2 and y = (w1 + i w2) / 2 are the eigenvectors
            residue = float(np.linalg.norm(out @ [1, 1j]) * np.linalg.norm(np.array([1, -1j]) @ into)) / 2
        else:
            peak = peak_gain(
                block.W.T @ T @ block.V,
                into,
                out,
                np.zeros((C.shape[0], B.shape[1])),
                sampled=prepared.sampled,
                tolerance=1e-10,
            )
            found.append(Mode(block, peak.value, max(peak.upper, peak.value)))
            continue
        dominance = residue / (1 - abs(first) if prepared.sampled else -first.real)
        found.append(Mode(block, dominance, dominance * block.poles.size))
    # real parts and moduli break ties, so that the order does not hang on rounding alone
    return sorted(found, key=lambda mode: (-mode.dominance, abs(complex(mode.block.poles[0]))))


def _projection(modes: list[Mode], n: int, B: Array, C: Array) -> tuple[Array, Array]:
    """Return (W, V) onto the modes, each block scaled so that its rows of B and columns of C have the same size."""
    left, right = [np.zeros((n, 0))], [np.zeros((n, 0))]
    for mode in modes:
        into, out = np.linalg.norm(mode.block.W.T @ B), np.linalg.norm(C @ mode.block.V)
        ratio = float(np.sqrt(into / out)) if into > 0 and out > 0 else 1.0
        power = np.ldexp(1.0, int(np.frexp(ratio)[1])) if np.isfinite(ratio) and ratio > 0 else 1.0
        left.append(mode.block.W / power)
        right.append(mode.block.V * power)
    return np.hstack(left), np.hstack(right)


def plan(prepared: Prepared, request: Request) -> Plan:
    """Return the orders of modal truncation."""
    T, B, C = prepared.split.stable
    n = T.shape[0]
    modes = modes_of(prepared)
    sizes = np.concatenate([[0], np.cumsum([mode.block.poles.size for mode in modes])]).astype(int)
    allowed = np.zeros(n + 1, dtype=bool)
    allowed[sizes] = True
    rest = np.concatenate([np.cumsum([mode.gain for mode in reversed(modes)])[::-1], [0.0]])
    # a cut inside a block is never made; it would be charged with the whole block
    tails = np.array([rest[np.searchsorted(sizes, k, side="right") - 1] for k in range(n + 1)])
    W, V = _projection(modes, n, B, C)
    blocks = [mode.block.W.T @ T @ mode.block.V for mode in modes]
    A = scipy.linalg.block_diag(*blocks).reshape(n, n) if blocks else np.zeros((0, 0))
    for k, (low, high) in enumerate(pairwise(sizes)):
        poles = modes[k].block.poles
        if high - low == 2 and poles[0].imag != 0:
            # the pair with exactly one real part and opposite off-diagonal entries
            a, b = poles[0].real, poles[0].imag
            A[low:high, low:high] = [[a, b], [-b, a]]
        elif high - low == 1:
            A[low, low] = poles[0].real
    into, out = W.T @ B, C @ V
    none = np.zeros((C.shape[0], B.shape[1]))
    whole = Projected(A, into, out, none, W, V)

    def project(count: int) -> Projected:
        return Projected(A[:count, :count], into[:count], out[:, :count], none, W[:, :count], V[:, :count])

    @lru_cache(maxsize=1)
    def rounding() -> float:
        # of the model in modal coordinates, whole: what leaks between the modes counts as well
        return prepared.in_gain(effect(whole, spectral_errors(T, B, C, W, V), sampled=prepared.sampled))

    return Plan(
        available=n,
        allowed=allowed,
        tails=tails,
        project=project,
        rounding=lambda order, part: rounding() if n else 0.0,
        whole="a complex pair or a cluster of poles",
        algorithm=lambda order: (
            "real modal coordinates, the poles sorted by |residue| / |real part|"
            if not prepared.sampled
            else "real modal coordinates, the poles sorted by |residue| / (1 - |pole|)"
        ),
    )


METHOD = register(
    Method(
        name="modal",
        says="Keeps the dominant poles exactly as they are; error guaranteed by what the others add at most.",
        source=(
            "J. Rommes, N. Martins, Efficient computation of transfer function dominant poles using subspace "
            "acceleration, IEEE Trans. Power Systems 21 (2006) 1218-1226 (dominance)",
            "E. J. Davison, A method for simplifying linear dynamic systems, IEEE Trans. Automatic Control 11 (1966) "
            "93-101",
        ),
        claim="sum over the poles that are cut of |residue| / |real part| (sampled: / (1 - |pole|))",
        keeps_steady_state=False,
        plan=plan,
    )
)
