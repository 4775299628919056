"""Modal coordinates of a state model: one block for each oscillation, clusters kept together."""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.forms.coordinates import Array, Coordinates, Setting, modes, take_units_out
from realize.kernels.block_diagonal import Block, block_diagonal

#: Largest coupling that is decoupled: it costs as many digits of the response as it has.
COUPLING = 1e4


def modal_form(A: Array, B: Array, C: Array, D: Array, setting: Setting) -> Coordinates:
    """Return block diagonal coordinates: 1 x 1 for a real eigenvalue, [[a, -b], [b, a]] for a pair, clusters together.

    The scaled A is split by ordered Schur forms and Sylvester equations [1]_; eigenvalues that only a transform beyond
    1e4 would tell apart share an upper quasi-triangular block. The columns of each block are orthonormal before each
    block is scaled until its largest column of B is as long as its largest row of C. The first large entry of a row of
    B is positive; of a pair, where its second entry is zero.

    Parameters
    ----------
    A : (n, n), B : (n, m), C : (p, n), D : (p, m) arrays
    setting : Setting

    Returns
    -------
    Coordinates
        `details` holds ``blocks``: first state, size, modes (eigenvalue, frequency in rad/s, damping ratio), and for a
        cluster its ``separation`` (1/s; sampled: 1), the estimated smallest change of A that makes eigenvalues of the
        cluster meet.

    References
    ----------
    .. [1] C. A. Bavely, G. W. Stewart, An algorithm for computing reducing subspaces by block diagonalization, SIAM J.
           Numer. Anal. 16 (1979) 359-367.
    """
    units = take_units_out(A, B, C, setting)
    n = A.shape[0]
    found = block_diagonal(units.A, COUPLING)
    order = sorted(found.blocks, key=lambda block: _rank(block, setting.sampled))
    places = (
        np.concatenate([np.arange(b.start, b.start + b.size) for b in order]).astype(int) if n else np.zeros(0, int)
    )
    new_A = found.A[np.ix_(places, places)]
    right, left = found.right[:, places], found.left[places]
    new_B, new_C = left @ units.B, units.C @ right
    listed: list[dict[str, Any]] = []
    start = 0
    for block in order:
        part = slice(start, start + block.size)
        turn = _turn(new_B[part], new_C[:, part], block)
        into = float(np.max(np.linalg.norm(new_B[part], axis=0)))
        out = float(np.max(np.linalg.norm(new_C[:, part], axis=1)))
        # lengths that no rotation inside the block changes, so that units of states leave nothing behind
        size = float(np.sqrt(into) / np.sqrt(out)) if into > 0 and out > 0 else 1.0
        factor, inverse = turn * size, turn.T / size
        right[:, part], left[part] = right[:, part] @ factor, inverse @ left[part]
        new_B[part], new_C[:, part] = inverse @ new_B[part], new_C[:, part] @ factor
        if block.size > 2 or (block.size == 2 and np.all(block.eigenvalues.imag == 0)):
            # signs only: a cluster stays upper quasi-triangular
            new_A[part, part] = turn.T @ new_A[part, part] @ turn
        values = np.ldexp(block.eigenvalues.real, units.time) + 1j * np.ldexp(block.eigenvalues.imag, units.time)
        entry: dict[str, Any] = {"first": start, "size": block.size, "modes": modes(values, setting.period)}
        if np.isfinite(block.separation):
            entry["separation"] = float(np.ldexp(block.separation, units.time))
        listed.append(entry)
        start += block.size
    condition = float(np.linalg.norm(right, 2) * np.linalg.norm(left, 2)) if n else 1.0
    clusters = [entry for entry in listed if "separation" in entry]
    cautions = tuple(
        f"{entry['size']} states from {entry['first']} on form one block: their eigenvalues are too close to be told "
        f"apart in doubles (separation {entry['separation']:.1e})."
        for entry in clusters[:3]
    )
    return units.restored(new_A, new_B, new_C, D, right, left, condition, {"blocks": listed}, cautions)


def listed_blocks(A: Array, period: float | None) -> list[dict[str, Any]]:
    """Return first state, size and mode of each block of a modal form that was made from partial fractions."""
    n = A.shape[0]
    listed: list[dict[str, Any]] = []
    start = 0
    while start < n:
        end = start + 1
        while end < n and (np.any(A[start:end, end:]) or np.any(A[end:, start:end])):
            end += 1
        pair = end - start > 1 and A[start + 1, start] != 0
        value = complex(A[start, start], abs(A[start + 1, start]) if pair else 0.0)
        listed.append({"first": start, "size": end - start, "modes": modes(np.array([value]), period)})
        start = end
    return listed


def _rank(block: Block, sampled: bool) -> tuple[float, float, float]:
    """Slowest blocks first, by the slowest of their eigenvalues (sampled: the one nearest to z = 1)."""
    values = block.eigenvalues
    speed = np.abs(values - 1) if sampled else np.abs(values)
    first = int(np.argmin(speed))
    return float(speed[first]), float(values[first].real), float(abs(values[first].imag))


def _turn(B: Array, C: Array, block: Block) -> Array:
    """Return the rotation of a pair, or the signs of other blocks, that makes the first large entry of B positive."""
    size = block.size
    if size == 2 and np.all(block.eigenvalues.imag != 0):
        # the block [[a, -b], [b, a]] commutes with rotations: beta = b1 + j b2 turns in the plane
        entries = B[0] + 1j * B[1] if np.any(B) else C[0] - 0j
        if not np.any(B):
            entries = C[:, 0] + 1j * C[:, 1]
        largest = np.max(np.abs(entries), initial=0.0)
        if largest == 0:
            return np.eye(2)
        unit = entries[int(np.argmax(np.abs(entries) >= 0.999 * largest))]
        cosine, sine = unit.real / abs(unit), unit.imag / abs(unit)
        return np.array([[cosine, -sine], [sine, cosine]])
    sign = np.ones(size)
    for k in range(size):
        row = B[k] if np.any(B[k]) else C[:, k]
        large = np.max(np.abs(row), initial=0.0)
        if large > 0 and np.sign(row[int(np.argmax(np.abs(row) >= 0.999 * large))]) < 0:
            sign[k] = -1.0
    return np.diag(sign)
