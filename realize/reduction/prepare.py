"""What every balancing method starts from: the model scaled, its stable part split off, its Gramian factors."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from realize.errors import InputError, Refused
from realize.kernels.balancing import HankelFactors, balanced_part, equal_groups, hankel_factors, tail_bounds
from realize.kernels.hankel_estimates import estimated_values
from realize.kernels.low_rank_balancing import low_rank_factors
from realize.kernels.norms import Peak, peak_gain
from realize.kernels.schur_response import Basis
from realize.kernels.splitting import Split, split_stable, whole
from realize.kernels.unit_scaling import Scaled, scale_model
from realize.verification.views import tell

Array = NDArray[np.float64]

EPS = float(np.finfo(float).eps)
#: Up to this order the error of each value is measured by computing it several times, which costs about as often.
DRAWN_ORDER = 200
#: Blocks longer than this on the diagonal of a basis are made shorter by a real Schur form.
LONGEST_BLOCK = 64


@dataclass(frozen=True)
class Prepared:
    """A model ready to be reduced: everything here is in the scaled units of `scaled`, except D.

    Attributes
    ----------
    scaled : Scaled
    split : Split
    factors : HankelFactors
        Of the stable part.
    D : array
        Feed-through in the model's own unit.
    sampled : bool
    low_rank : bool
        The factors are narrow and came without a Schur form.
    """

    scaled: Scaled
    split: Split
    factors: HankelFactors
    D: Array
    sampled: bool
    low_rank: bool = False

    @property
    def kept_order(self) -> int:
        return self.split.kept_poles.size

    @property
    def stable_order(self) -> int:
        return self.split.stable[0].shape[0]

    @cached_property
    def available(self) -> int:
        """How many Hankel singular values stand clear of rounding: above their own error and n eps of the first."""
        values, errors = self.factors.values, self.factors.errors
        if values.size == 0 or values[0] == 0:
            return 0
        clear = (values > errors) & (values > values.size * EPS * values[0])
        return int(values.size if clear.all() else np.argmin(clear))

    @cached_property
    def tails(self) -> Array:
        """Twice the sum of the distinct values beyond the first r, r = 0..n (scaled unit).

        Values that drown in rounding are too small by their error at most: it comes from one backward error, and so is
        added once for all of them.
        """
        bounds = tail_bounds(self.factors.values)
        if self.available < self.factors.values.size:
            bounds = bounds + self.factors.errors[self.available]
        return bounds

    @cached_property
    def groups(self) -> NDArray[np.int64]:
        """The group of equal values each value belongs to."""
        return equal_groups(self.factors.values)

    def basis(self) -> Basis | None:
        """Return invariant bases of the model, by which its response is quick to evaluate; None where none are at hand.

        They are those that the Gramian factors span, or real Schur form; not where poles were put onto the axis.
        """
        scaled, split = self.scaled, self.split
        if self.split.marginal.any() or scaled.A.shape[0] == 0:
            return None
        if self.low_rank:
            part = balanced_part(self.factors, self.available)
            poles = np.linalg.eigvals(part.A).astype(complex)
            roots = self.factors.roots
            L, N, F = _triangular(roots.L, roots.N, roots.input)
            left = _triangular(roots.R.T, roots.M.T, roots.output.T)
            R, M, H = (part.T for part in left)
        else:
            (T, B, C), (kept, more_b, more_c) = split.stable, split.kept
            poles = np.concatenate([split.stable_poles, split.kept_poles])
            N = M = scipy.linalg.block_diag(T, kept) if kept.size else T
            L, F = split.right, np.vstack([B, more_b])
            R, H = split.left, np.hstack([C, more_c])
        with np.errstate(over="ignore", under="ignore"):
            N, M = np.ldexp(N, scaled.time), np.ldexp(M, scaled.time)
            F, H = np.ldexp(F, scaled.input), np.ldexp(H, scaled.output)
            poles = np.ldexp(poles.real, scaled.time) + 1j * np.ldexp(poles.imag, scaled.time)
        return Basis(scaled.states, (L, N, F), (R, M, H), poles)

    def in_gain(self, value: float) -> float:
        """Return a scaled gain in the model's own unit; refuses what a double cannot hold."""
        try:
            return math.ldexp(value, self.scaled.gain)
        except OverflowError:
            raise Refused("the gain of this model is too large for a double; use smaller units") from None

    def cut_allowed(self, order: int) -> bool:
        """True unless a cut after `order` stable states would divide equal values."""
        return order <= 0 or order >= self.groups.size or self.groups[order - 1] != self.groups[order]

    def largest_gain(self) -> Peak:
        """Return the largest gain of the stable part with its feed-through, in the model's own unit."""
        T, B, C = self.split.stable
        scaled = np.ldexp(self.D, -self.scaled.gain)
        found = peak_gain(T, B, C, scaled, sampled=self.sampled, tolerance=1e-10)
        upper = self.in_gain(found.upper) if math.isfinite(found.upper) else math.inf
        frequency = math.ldexp(found.frequency, self.scaled.time) if math.isfinite(found.frequency) else math.inf
        return Peak(self.in_gain(found.value), frequency, upper, found.basis)


def _triangular(L: Array, N: Array, F: Array) -> tuple[Array, Array, Array]:
    """Return L, N, F with A L = L N and B = L F in coordinates with N block triangular, blocks short."""
    if min(np.count_nonzero(np.tril(N, -LONGEST_BLOCK)), np.count_nonzero(np.triu(N, LONGEST_BLOCK))) == 0:
        return L, N, F
    T, Z = scipy.linalg.schur(N, output="real", check_finite=False)
    return L @ Z, T, Z.T @ F


def _drawn(factors: HankelFactors, scaled: Scaled, split: Split, sampled: bool) -> HankelFactors:
    """Return the factors with each value's error from drawing its rounding errors anew, several times."""
    model = scaled.A, scaled.B, scaled.C
    if split.kept_poles.size:
        # the Schur form of the whole model had full matrices to round: so does that of the turned stable part
        T, B, C = split.stable
        turn = np.linalg.qr(np.random.default_rng(T.shape[0]).standard_normal(T.shape))[0]
        model = turn.T @ T @ turn, turn.T @ B, C @ turn
    values, errors, exponent = estimated_values(*model, sampled=sampled)
    with np.errstate(under="ignore"):
        values, errors = np.ldexp(values, exponent), np.ldexp(errors, exponent)
    return replace(factors, errors=errors + np.abs(values - factors.values))


def prepare(A: Array, B: Array, C: Array, D: Array, *, sampled: bool, triangular: bool = True) -> Prepared:
    """Scale a state model, separate its stable part and factor the Gramians of that.

    Parameters
    ----------
    A, B, C, D : arrays (n, n), (n, m), (p, n), (p, m)
    sampled : bool
    triangular : bool
        The stable part is wanted in real Schur form; else a large model whose Gramians have a low rank goes without,
        and its stable part is the scaled model itself.

    Returns
    -------
    Prepared

    Raises
    ------
    InputError
        If shapes do not match or an entry is not finite.
    Refused
        If the stable part cannot be separated.
    """
    A, B, C, D = (np.asarray(matrix, dtype=float) for matrix in (A, B, C, D))
    n = A.shape[0]
    if A.ndim != 2 or A.shape != (n, n):
        raise InputError("a matrix that is not square", "n x n", field="A")
    for name, matrix, shape in (("B", B, (n, D.shape[1])), ("C", C, (D.shape[0], n))):
        if matrix.shape != shape:
            raise InputError(f"{matrix.shape}", f"{shape}", field=name)
    for name, matrix in zip("ABCD", (A, B, C, D), strict=True):
        if not np.all(np.isfinite(matrix)):
            raise InputError("an entry that is not a finite number", "finite numbers", field=name)
    tell(f"{n} states: units taken out")
    scaled = scale_model(A, B, C, sampled=sampled)
    if not triangular:
        tell(f"{n} states: Gramians of low rank sought")
        found = low_rank_factors(scaled.A, scaled.B, scaled.C, sampled=sampled)
        if found is not None:
            return Prepared(scaled, whole(scaled.A, scaled.B, scaled.C), found, D, sampled, low_rank=True)
    try:
        tell(f"{n} states: real Schur form")
        split = split_stable(scaled.A, scaled.B, scaled.C, sampled=sampled)
        tell(f"{n} states: Gramian factors and Hankel singular values")
        factors = hankel_factors(*split.stable, sampled=sampled)
        if 0 < split.stable[0].shape[0] <= DRAWN_ORDER:
            factors = _drawn(factors, scaled, split, sampled)
    except ValueError as reason:
        raise Refused(f"the stable part cannot be separated from the poles on or beyond the axis: {reason}") from None
    return Prepared(scaled, split, factors, D, sampled)
