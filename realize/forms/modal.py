"""Modal coordinates from partial fractions: one block for each pole or conjugate pair (Gilbert 1963)."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


def _factor(residue: ComplexArray) -> tuple[ComplexArray, ComplexArray]:
    """Return columns c and rows b with residue = c b, of the numerical rank of the residue, balanced in size."""
    p, m = residue.shape
    if p == 1 or m == 1:
        size = np.linalg.norm(residue)
        if size == 0:
            return np.zeros((p, 0), dtype=complex), np.zeros((0, m), dtype=complex)
        root = 2.0 ** (np.frexp(size)[1] // 2)
        one = np.full((1, 1), root, dtype=complex)
        return (residue / root, one) if m == 1 else (one, residue / root)
    u, s, vh = np.linalg.svd(residue)
    # one rounding of the entries moves the small singular values by at most eps times the norm
    rank = int(np.sum(s > max(p, m) * 4 * np.finfo(float).eps * s[0])) if s[0] > 0 else 0
    root = np.sqrt(s[:rank])
    return u[:, :rank] * root, root[:, None] * vh[:rank]


def modal_states(
    poles: ComplexArray, residues: ComplexArray, powers: NDArray[np.int64], direct: Array
) -> tuple[Array, Array, Array, Array]:
    """Return A, B, C, D with one real block for each pole or conjugate pair.

    Simple poles: blocks [[re, im], [-im, re]] (Kronecker the rank of the residue). Repeated poles: a chain with ones
    beside the diagonal for each input (or each output, if there are fewer), so that the multiplicity is exact; the
    order can then exceed the McMillan degree.

    Parameters
    ----------
    poles : [n], residues : [n][p][m], powers : [n]
        As in a pole-residue model, closed under conjugation.
    direct : [p][m]
    """
    p, m = direct.shape
    blocks: list[tuple[ComplexArray, ComplexArray, ComplexArray]] = []
    distinct = [pole for pole in dict.fromkeys(poles.tolist()) if pole.imag >= 0]
    for pole in sorted(distinct, key=lambda z: (abs(z), z.real, z.imag)):
        members = np.flatnonzero(poles == pole)
        highest = int(powers[members].max())
        if highest == 1:
            c, b = _factor(residues[members[0]])
            blocks.append((pole * np.eye(c.shape[1]), b, c))
            continue
        laurent = np.zeros((highest, p, m), dtype=complex)
        for k in members:
            laurent[powers[k] - 1] += residues[k]
        chains = [_chain(pole, laurent[:, :, j : j + 1]) for j in range(m)]
        if p < m:
            rows = [_chain(pole, laurent[:, i : i + 1, :].transpose(0, 2, 1)) for i in range(p)]
            for i, (a, b, c) in enumerate(rows):
                out = np.zeros((p, a.shape[0]), dtype=complex)
                out[i] = b[:, 0]
                blocks.append((a.T.copy(), c.T.copy(), out))
        else:
            for j, (a, b, c) in enumerate(chains):
                into = np.zeros((a.shape[0], m), dtype=complex)
                into[:, j] = b[:, 0]
                blocks.append((a, into, c))
    sizes = [a.shape[0] * (1 if np.all(a.imag == 0) else 2) for a, _, _ in blocks]
    n = sum(sizes)
    A, B, C = np.zeros((n, n)), np.zeros((n, m)), np.zeros((p, n))
    start = 0
    for (a, b, c), size in zip(blocks, sizes, strict=True):
        part = slice(start, start + size)
        r = a.shape[0]
        if size == r:
            A[part, part], B[part], C[:, part] = a.real, b.real, c.real
        else:
            # x = [Re, Im] of twice the complex state, interleaved so that each oscillation is one 2 x 2 block
            A[part, part] = np.kron(a.real, np.eye(2)) + np.kron(a.imag, np.array([[0.0, -1.0], [1.0, 0.0]]))
            B[part] = np.stack([b.real, b.imag], axis=1).reshape(size, m)
            C[:, part] = 2 * np.stack([c.real, -c.imag], axis=2).reshape(p, size)
        start += size
    return A, B, C, np.array(direct, dtype=float)


def _chain(pole: complex, laurent: ComplexArray) -> tuple[ComplexArray, ComplexArray, ComplexArray]:
    """Return the chain a = pole I + shift, b = last unit vector, c = residues, for one input: sum laurent[k]/(s-pole)^(k+1)."""
    filled = [k for k in range(laurent.shape[0]) if np.any(laurent[k] != 0)]
    size = filled[-1] + 1 if filled else 0
    a = pole * np.eye(size, dtype=complex) + np.eye(size, k=1)
    b = np.zeros((size, 1), dtype=complex)
    if size:
        b[-1] = 1.0
    # state k from the end is 1/(s - pole)^(k+1)
    c = np.stack([laurent[size - 1 - k][:, 0] for k in range(size)], axis=1) if size else np.zeros((laurent.shape[1], 0), complex)
    return a, b, c
