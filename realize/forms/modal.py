"""Modal coordinates from partial fractions: one block for each pole or conjugate pair (Gilbert 1963)."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


def _exponents(sizes: Array | np.float64) -> NDArray[np.int64]:
    """Return e with 2^(e-1) <= size < 2^e, 0 for 0."""
    return np.where(sizes > 0, np.frexp(sizes)[1], 0).astype(np.int64)


def _powers(exponents: NDArray[np.int64]) -> Array:
    return np.ldexp(1.0, exponents)


def factor(residue: ComplexArray) -> tuple[ComplexArray, ComplexArray]:
    """Return columns c and rows b with residue = c b, of the numerical rank of the residue, balanced in size.

    Rows and columns are first scaled by powers of two, so that the rank does not depend on units.
    """
    p, m = residue.shape
    size = np.maximum(np.abs(residue.real), np.abs(residue.imag))
    if not np.any(size):
        return np.zeros((p, 0), dtype=complex), np.zeros((0, m), dtype=complex)
    if p == 1 or m == 1:
        root_size = float(_powers(_exponents(size.max()) // 2))
        one = np.full((1, 1), root_size, dtype=complex)
        return (residue / root_size, one) if m == 1 else (one, residue / root_size)
    rows, columns = np.zeros(p, dtype=np.int64), np.zeros(m, dtype=np.int64)
    scaled = size
    for _ in range(3):
        step = _exponents(scaled.max(axis=1))
        rows, scaled = rows + step, np.ldexp(scaled, -step[:, None])
        step = _exponents(scaled.max(axis=0))
        columns, scaled = columns + step, np.ldexp(scaled, -step[None, :])
    shift = -(rows[:, None] + columns[None, :])
    even = np.ldexp(residue.real, shift) + 1j * np.ldexp(residue.imag, shift)
    u, s, vh = np.linalg.svd(even)
    # one rounding of the entries moves the small singular values by at most eps times the norm
    rank = int(np.sum(s > max(p, m) * 4 * np.finfo(float).eps * s[0]))
    root = np.sqrt(s[:rank])
    left, right = u[:, :rank] * root, root[:, None] * vh[:rank]
    # the powers of two are put back half and half where the two sides are of very different size
    half = (int(rows.max()) - int(columns.max())) // 2
    return left * _powers(rows - half)[:, None], right * _powers(columns + half)[None, :]


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
            c, b = factor(residues[members[0]])
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
    """Return a = pole I + shift, b = last unit vector, c = residues: sum laurent[k]/(s - pole)^(k+1) for one input."""
    filled = [k for k in range(laurent.shape[0]) if np.any(laurent[k] != 0)]
    size = filled[-1] + 1 if filled else 0
    a = pole * np.eye(size, dtype=complex) + np.eye(size, k=1)
    b = np.zeros((size, 1), dtype=complex)
    if size:
        b[-1] = 1.0
    # state k from the end is 1/(s - pole)^(k+1)
    c = (
        np.stack([laurent[size - 1 - k][:, 0] for k in range(size)], axis=1)
        if size
        else np.zeros((laurent.shape[1], 0), complex)
    )
    return a, b, c
