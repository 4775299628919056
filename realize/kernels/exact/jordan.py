"""The Jordan structure of a rational matrix, decided exactly, and the transform to the real Jordan form in balls.

The minimal polynomial of a matrix over the rationals splits the state space into cyclic parts: over a power g^k of an
irreducible g, w, A w, ..., A^(k deg g - 1) w span one. Its Jordan chain for a root r of g is

    u_k = (g^k / (x - r)^k)(A) w,   u_(k-1) = (A - r) u_k,   ...,   u_1 = (A - r)^(k-1) u_k,

so that the blocks follow from exact ranks and the chains from exact vectors, with roots to any number of bits [1]_.

.. [1] F. R. Gantmacher, The Theory of Matrices, vol. 1, Chelsea 1959, chapter VII (from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np
from flint import acb, acb_mat, arb, arb_mat, fmpq, fmpq_mat, fmpq_poly, fmpz_poly
from numpy.typing import NDArray

from realize.kernels.exact.bases import BeyondRange, RationalStates, beside, krylov, modular_matrix
from realize.kernels.exact.isolation import integer_polynomial
from realize.kernels.exact.numbers import near_ball, nearest_ball, precision, prime, scaled_ball
from realize.kernels.exact.polynomials import monic, quotient, squarefree
from realize.kernels.exact.roots import Root, roots
from realize.kernels.exact.states import characteristic_polynomial

Array = NDArray[np.float64]
#: Working precision (bits) at the start, and where it ends.
FIRST_BITS, LAST_BITS = 256, 1 << 16
#: A number that is smaller by so many bits than its row and its column, and whose ball holds zero, counts as zero.
ZERO_BITS = 160
#: Bits to which an entry is known when no double is nearest to its whole ball: then it is one of the two next to it.
ENTRY_BITS = 90


class Unsettled(ArithmeticError):
    """The largest precision leaves a number of the transform undecided."""


class Cyclic(NamedTuple):
    """One cyclic part: its polynomial is factor^size, w its generator."""

    factor: fmpq_poly
    size: int
    generator: fmpq_mat


class Block(NamedTuple):
    """One Jordan block of a root with an imaginary part that is not negative."""

    root: Root
    size: int


class JordanForm(NamedTuple):
    """Blocks in order, and the doubles of transform, way back, inputs and outputs."""

    blocks: list[Block]
    A: Array
    B: Array
    C: Array
    T: Array
    S: Array


def polynomial_at(p: fmpq_poly, A: fmpq_mat, v: fmpq_mat) -> fmpq_mat:
    """Return p(A) v by Horner's rule."""
    result = v * fmpq(0)
    for c in reversed(p.coeffs()):
        result = A * result + v * c
    return result


def nullspace(matrix: fmpq_mat) -> list[fmpq_mat]:
    """Return a basis of the null space, one column each, from the reduced row echelon form."""
    n = matrix.ncols()
    reduced, rank = matrix.rref()
    table = reduced.tolist()[:rank]
    pivots = [next(j for j, x in enumerate(row) if x) for row in table]
    basis = []
    for free in (j for j in range(n) if j not in set(pivots)):
        v = [fmpq(0)] * n
        v[free] = fmpq(1)
        for row, pivot in zip(table, pivots, strict=True):
            v[pivot] = -row[free]
        basis.append(fmpq_mat(n, 1, v))
    return basis


def _rank(vectors: list[fmpq_mat], n: int) -> int:
    return int(beside(vectors, n).rank()) if vectors else 0


def _cyclic_vector(A: fmpq_mat, rest: fmpq_poly, degree: int) -> fmpq_mat:
    """Return w = rest(A) r whose first `degree` images are independent, proved modulo a prime."""
    n = A.nrows()
    for seed in range(1, 64):
        # small integers that no pattern of A knows of
        r = fmpq_mat(n, 1, [fmpq((k * k * 37 + (seed * 101 + k) * 61) % 17 - 8 or 1) for k in range(n)])
        w = polynomial_at(rest, A, r)
        chain = beside(krylov(A, w, degree), n)
        try:
            if modular_matrix(chain, prime(seed % 4)).rank() == degree:
                return w
        except ZeroDivisionError:
            continue
    raise ArithmeticError("no cyclic vector was found")


def cyclic_parts(A: fmpq_mat, characteristic: fmpq_poly) -> list[Cyclic]:
    """Return cyclic parts whose direct sum is the whole space.

    Roots of multiplicity one are one part. A repeated factor is taken apart into irreducible ones; with
    W_k = ker g(A)^k, generators of parts of g^k are vectors of W_k that are independent, with their deg g images,
    modulo W_(k-1) + g(A) W_(k+1).
    """
    n = A.nrows()
    found: list[Cyclic] = []
    for factor, multiplicity in squarefree(characteristic):
        if multiplicity == 1:
            rest = quotient(monic(characteristic), factor)
            found.append(Cyclic(factor, 1, _cyclic_vector(A, rest, factor.degree())))
            continue
        for g, _ in fmpz_poly(integer_polynomial(factor).coeffs()).factor()[1]:
            found.extend(_parts_of(A, monic(fmpq_poly(g)), multiplicity, n))
    if sum(part.factor.degree() * part.size for part in found) != n:
        raise ArithmeticError("the cyclic parts do not make up the space")
    return found


def _parts_of(A: fmpq_mat, g: fmpq_poly, multiplicity: int, n: int) -> list[Cyclic]:
    degree = g.degree()
    identity = [fmpq_mat(n, 1, [fmpq(int(i == j)) for i in range(n)]) for j in range(n)]
    G = beside([polynomial_at(g, A, e) for e in identity], n)
    kernels: list[list[fmpq_mat]] = [[]]
    power = G
    while len(kernels[-1]) < degree * multiplicity:
        kernels.append(nullspace(power))
        power = power * G
    found: list[Cyclic] = []
    top = len(kernels) - 1
    for k in range(top, 0, -1):
        # sizes by Weyr's characteristic: parts of at least k are the steps of the dimensions
        at_least = (len(kernels[k]) - len(kernels[k - 1])) // degree
        more = (len(kernels[k + 1]) - len(kernels[k])) // degree if k < top else 0
        span = kernels[k - 1] + ([G * v for v in kernels[k + 1]] if k < top else [])
        rank = _rank(span, n)
        wanted = at_least - more
        for v in kernels[k]:
            if not wanted:
                break
            images = krylov(A, v, degree)
            larger = _rank([*span, *images], n)
            if larger == rank + degree:
                found.append(Cyclic(g, k, v))
                span, rank, wanted = [*span, *images], larger, wanted - 1
    return found


def _divided(c: list[acb], root: acb) -> list[acb]:
    """Return the quotient of a polynomial (lowest power first) by x - root."""
    result = [acb(0)] * (len(c) - 1)
    carry = acb(0)
    for k in range(len(c) - 1, 0, -1):
        carry = carry * root + c[k]
        result[k - 1] = carry
    return result


def _times(c: list[acb], root: acb) -> list[acb]:
    """Return the product with x - root."""
    return [(c[k - 1] if k else acb(0)) - (root * c[k] if k < len(c) else acb(0)) for k in range(len(c) + 1)]


def _chain_weights(part: Cyclic, root: acb) -> list[list[acb]]:
    """Return the polynomials of u_1..u_k, lowest power first, padded to k deg g."""
    power = part.factor**part.size
    c = [acb(arb(x)) for x in power.coeffs()]
    for _ in range(part.size):
        c = _divided(c, root)
    chain = [c]
    for _ in range(part.size - 1):
        chain.append(_times(chain[-1], root))
    length = part.size * part.factor.degree()
    return [weights + [acb(0)] * (length - len(weights)) for weights in reversed(chain)]


def _real_columns(chain: acb_mat, real: bool) -> list[list[arb]]:
    """Return the real basis vectors of a chain: u for a real root, Re u and -Im u of each for a pair."""
    table = chain.transpose().tolist()
    if real:
        return [[x.real for x in u] for u in table]
    return [part for u in table for part in ([x.real for x in u], [-x.imag for x in u])]


def _scaled_chain(u: list[list[arb]], real: bool, factor: acb) -> list[list[arb]]:
    if real:
        return [[x * factor.real for x in v] for v in u]
    a, b = factor.real, factor.imag
    # (Re - j (-Im)) (a + j b): columns are Re u and -Im u
    turned = []
    for first, second in zip(u[0::2], u[1::2], strict=True):
        turned.append([x * a + y * b for x, y in zip(first, second, strict=True)])
        turned.append([y * a - x * b for x, y in zip(first, second, strict=True)])
    return turned


def jordan_form(states: RationalStates) -> JordanForm:
    """Return the real Jordan form of a rational model: multiplicities exact, every number rounded from narrow balls.

    Each chain is scaled, by a power of two and for a pair by a phase, so that its inputs and outputs are of like size
    and the largest entry of its last complex row of B is positive (of its first column of C where that row is zero).

    Raises
    ------
    BeyondRange
        If a number lies beyond the range of doubles.
    Unsettled
        If 65,536 bits do not settle a number.
    """
    n = states.A.nrows()
    if n == 0:
        nothing = np.zeros((0, 0))
        return JordanForm(
            [], nothing, np.zeros((0, states.B.ncols())), np.zeros((states.C.nrows(), 0)), nothing, nothing
        )
    table = [[(int(x.p), int(x.q)) for x in row] for row in states.A.tolist()]
    characteristic = characteristic_polynomial(table)
    parts = cyclic_parts(states.A, characteristic)
    chosen: list[tuple[Block, Cyclic, fmpq_mat]] = []
    for part in parts:
        images = beside(krylov(states.A, part.generator, part.size * part.factor.degree()), n)
        for root in roots(part.factor):
            if root.value.imag >= 0 and (root.real or root.ball.imag > 0):
                chosen.append((Block(root, part.size), part, images))
    chosen.sort(key=lambda item: (abs(item[0].root.value), item[0].root.value.real, -item[0].size))
    blocks = [block for block, _, _ in chosen]
    if not all(np.isfinite(block.root.value) for block in blocks):
        raise BeyondRange("an eigenvalue beyond the largest double")
    bits = FIRST_BITS
    while bits <= LAST_BITS:
        with precision(bits):
            found = _at_precision(states, chosen, bits)
        if found is not None:
            B, C, T, S = found
            return JordanForm(blocks, real_jordan(blocks), B, C, T, S)
        bits *= 2
    raise Unsettled(f"{LAST_BITS} bits do not settle the transform to the Jordan form")


def real_jordan(blocks: list[Block]) -> Array:
    """Return the block diagonal matrix: ones (2 x 2 identities) above the diagonal, [[a, -b], [b, a]] for a pair."""
    n = sum(block.size * (1 if block.root.real else 2) for block in blocks)
    A = np.zeros((n, n))
    start = 0
    for root, size in blocks:
        width = 1 if root.real else 2
        a, b = root.value.real, root.value.imag
        own = np.array([[a]]) if root.real else np.array([[a, -b], [b, a]])
        end = start + width * size
        A[start:end, start:end] = np.kron(np.eye(size), own) + np.kron(np.eye(size, k=1), np.eye(width))
        start = end
    return A


def _at_precision(
    states: RationalStates, chosen: list[tuple[Block, Cyclic, fmpq_mat]], bits: int
) -> tuple[Array, Array, Array, Array] | None:
    n = states.A.nrows()
    B, C = _balls(states.B), _balls(states.C)
    chains: list[list[list[arb]]] = []
    for block, part, images in chosen:
        weights = _chain_weights(part, block.root.at(bits + 32))
        length = len(weights[0])
        coefficients = acb_mat(length, block.size, [weights[j][i] for i in range(length) for j in range(block.size)])
        chains.append(_real_columns(acb_mat(_balls(images)) * coefficients, block.root.real))
    T = _joined(chains, n)
    try:
        S = T.inv()
    except ZeroDivisionError:
        return None
    inputs, outputs = (S * B).tolist(), (C * T).tolist()
    start = 0
    for k, (block, _, _) in enumerate(chosen):
        width = 1 if block.root.real else 2
        end = start + width * block.size
        factor = _factor_of(inputs[start:end], [row[start:end] for row in outputs], width)
        if factor is None:
            return None
        chains[k] = _scaled_chain(chains[k], block.root.real, factor)
        start = end
    T = _joined(chains, n)
    try:
        S = T.inv()
    except ZeroDivisionError:
        return None
    doubles_T, doubles_S = _doubles(T, _sizes(T)), _doubles(S, _sizes(S))
    if doubles_T is None or doubles_S is None:
        return None
    right = _doubles(S * B, _absolute_product(_settled(doubles_S), B))
    out = _doubles(C * T, _absolute_product(C, _settled(doubles_T)))
    if right is None or out is None:
        return None
    return right, out, doubles_T, doubles_S


def _balls(matrix: fmpq_mat) -> arb_mat:
    return arb_mat(matrix.nrows(), matrix.ncols(), [arb(x) for x in matrix.entries()])


def _joined(chains: list[list[list[arb]]], n: int) -> arb_mat:
    vectors = [v for chain in chains for v in chain]
    return arb_mat(n, n, [vectors[j][i] for i in range(n) for j in range(n)])


def _factor_of(inputs: list[list[arb]], outputs: list[list[arb]], width: int) -> acb | None:
    """Return the factor of a chain: phase from the last row of B (else the first column of C), size from both."""
    m, p = len(inputs[0]), len(outputs)
    if width == 1:
        rows = [[acb(x) for x in row] for row in inputs]
        outs = [[acb(x) for x in row] for row in outputs]
    else:
        rows = [[acb(inputs[i][j], inputs[i + 1][j]) for j in range(m)] for i in range(0, len(inputs), 2)]
        outs = [[acb(row[j], row[j + 1]) for j in range(0, len(row), 2)] for row in outputs]
    last, first = rows[-1], [outs[i][0] for i in range(p)]

    def size(values: list[acb]) -> list[float]:
        return [_logarithm(x.abs_lower()) if x.is_finite() else float("nan") for x in values]

    all_in, all_out = size([x for row in rows for x in row]), size([x for row in outs for x in row])
    if np.any(np.isnan(all_in + all_out)):
        return None
    none = float("-inf")
    from_input = max(size(last), default=none) > none
    values = last if from_input else first
    sizes = size(values)
    phase = acb(1)
    if max(sizes, default=none) > none:
        # within a thousandth of the largest one counts as largest
        lead = next(k for k, x in enumerate(sizes) if x >= max(sizes) - 0.0015)
        unit = values[lead] / abs(values[lead])
        # z = T^-1 x: the rows of B are divided by the factor, the columns of C multiplied; -Im turns the sense there
        phase = unit if from_input else (1 / unit if width == 1 else unit)
    into, out = max(all_in, default=none), max(all_out, default=none)
    if into > none and out > none:
        exponent = int(np.floor((into - out) / 2))
    elif into > none:
        exponent = int(np.floor(into))
    else:
        exponent = -int(np.floor(out)) if out > none else 0
    return phase * acb(arb(2) ** exponent)


def _sizes(matrix: arb_mat) -> Callable[[int, int], arb]:
    table = [[abs(x) for x in row] for row in matrix.tolist()]
    rows = [_largest(row) for row in table]
    across = [_largest([row[j] for row in table]) for j in range(matrix.ncols())]
    return lambda i, j: rows[i] if rows[i] < across[j] else across[j]


def _largest(values: list[arb]) -> arb:
    best = arb(0)
    for value in values:
        if value.mid() > best:
            best = value.mid()
    return best


def _logarithm(value: arb) -> float:
    """Return the binary logarithm of the midpoint, minus infinity for zero."""
    mantissa, exponent = scaled_ball(value)
    return float(np.log2(abs(mantissa))) + exponent if mantissa else float("-inf")


def _absolute_product(left: arb_mat, right: arb_mat) -> Callable[[int, int], arb]:
    """Sizes of the sums behind the entries of a product; zero where every term is."""
    parts = [arb_mat(m.nrows(), m.ncols(), [abs(x).mid() for x in m.entries()]) for m in (left, right)]
    table = (parts[0] * parts[1]).tolist()
    return lambda i, j: table[i][j].mid()


def _settled(matrix: Array) -> arb_mat:
    return arb_mat(matrix.shape[0], matrix.shape[1], [arb(x) for x in matrix.reshape(-1).tolist()])


def _doubles(matrix: arb_mat, size: Callable[[int, int], Any]) -> Array | None:
    """Return doubles: nearest where the ball decides, within one rounding where it is known to 90 bits, zero where the
    ball holds zero and is 160 bits below `size`; None where more precision is needed."""
    result = np.zeros((matrix.nrows(), matrix.ncols()))
    for i, row in enumerate(matrix.tolist()):
        for j, x in enumerate(row):
            value = nearest_ball(x)
            if value is None:
                if not x.is_finite():
                    return None
                if x.rel_accuracy_bits() >= ENTRY_BITS:
                    value = near_ball(x)
                elif x.contains(0) and (size(i, j).is_zero() or abs(x).upper() * (arb(2) ** ZERO_BITS) <= size(i, j)):
                    value = 0.0
                else:
                    return None
            if not np.isfinite(value) or (value != 0 and abs(value) < 2.0**-1022):
                raise BeyondRange("an entry beyond the range of doubles")
            result[i, j] = value
    return result
