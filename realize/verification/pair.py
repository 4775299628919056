"""Two models side by side: the size of their difference at any frequency, exact where affordable."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from realize.verification.glance import Glance
from realize.verification.proof import LARGEST_DEGREE, Proof
from realize.verification.quick import Moduli
from realize.verification.search import Band, seeds
from realize.verification.views import View, budget_lifted

Array = NDArray[np.float64]


#: Sizes below this, in units of the source's gain, are replaced by their quotient.
_LOW = 1e-280
#: Quick values with a larger bound on their relative error are replaced by exact ones.
_DOUBTFUL = 0.01


class _Rows(NamedTuple):
    """Rows of the moduli of each channel's M, N1, D1, D2, which channels are zero, and the rows that must be good."""

    M: NDArray[np.int64]
    n1: NDArray[np.int64]
    d1: NDArray[np.int64]
    d2: NDArray[np.int64]
    zero: NDArray[np.bool_]
    always: NDArray[np.int64]


#: The rows of one channel by itself.
_ONE = _Rows(np.array([0]), np.array([1]), np.array([2]), np.array([3]), np.zeros(1, dtype=bool), np.array([0, 2, 3]))


@dataclass(frozen=True)
class Pair:
    """Source and result, with their difference evaluated where needed."""

    source: View
    result: View
    _proofs: dict[Any, Any] = field(default_factory=dict, repr=False, compare=False)

    def proof(self, channel: tuple[int, int] | None) -> Proof:
        """Return the exact polynomials of all channels together, or of one."""
        if self.source.model.shape == (1, 1):
            channel = None
        if channel not in self._proofs:
            self._proofs[channel] = Proof(*self.scaled, self.source.exact_period, channel)
        return self._proofs[channel]

    def provable(self, channel: tuple[int, int] | None) -> bool:
        """True where an inequality over common denominators is of a degree that can be proved."""
        if not self.exact:
            return False
        degree = 0
        for view in (self.source, self.result):
            assert view.fractions is not None
            rows = view.fractions if channel is None else [[view.fractions[channel[0]][channel[1]]]]
            flat = [pair for row in rows for pair in row]
            distinct: dict[str, int] = {}
            for _, d in flat:
                if d.degree() > 0:
                    distinct[str(d) if len(flat) > 1 else ""] = d.degree()
            degree += sum(distinct.values())
        return 2 * degree <= LARGEST_DEGREE or budget_lifted()

    @cached_property
    def exact(self) -> bool:
        """True where both are compared in exact arithmetic."""
        return self.source.fractions is not None and self.result.fractions is not None

    @cached_property
    def exponent(self) -> int:
        """Power of two near the source's gain: sizes are counted in it, so that none leaves the range of doubles."""
        if not self.exact:
            return 0
        from realize.kernels.exact.numbers import binary_exponent

        assert self.source.fractions is not None
        found = []
        for row in self.source.fractions:
            for n, d in row:
                if n:
                    # the gain at a point of the size of the dynamics, from coefficients alone
                    e = binary_exponent(self._unit)
                    top = max(binary_exponent(c) + k * e for k, c in enumerate(n.coeffs()) if c)
                    bottom = max(binary_exponent(c) + k * e for k, c in enumerate(d.coeffs()) if c)
                    found.append(top - bottom)
        return max(found, default=0)

    @cached_property
    def _unit(self) -> Any:
        from realize.kernels.exact.numbers import fraction

        if self.source.period is not None:
            return fraction(1)
        sizes = [size for size in self.source.poles.frequency.tolist() if 0 < size < math.inf]
        middle = math.exp(sum(map(math.log, sizes)) / len(sizes)) if sizes else 1.0
        return fraction(middle.as_integer_ratio())

    @cached_property
    def scaled(self) -> tuple[list[list[Any]], list[list[Any]]]:
        """The exact fractions of both, numerators divided by 2^exponent."""
        from realize.kernels.exact.numbers import power_of_two

        assert self.source.fractions is not None and self.result.fractions is not None
        factor = power_of_two(-self.exponent)
        first, second = (
            [[(n * factor, d) for n, d in row] for row in grid]
            for grid in (self.source.fractions, self.result.fractions)
        )
        return first, second

    def sizes(self, w: Array, channel: tuple[int, int] | None = None) -> tuple[Array, Array]:
        """Return |dG| and |G_source| of each channel, in units of 2^exponent: two arrays [k][p][m], or [k][1][1]."""
        p, m = self.source.model.shape if channel is None else (1, 1)
        if self.exact:
            difference, size = np.empty((w.size, p, m)), np.empty((w.size, p, m))
            from realize.kernels.exact.evaluation import difference as exact_difference

            one, two = self.scaled
            if channel is not None:
                one, two = ([[grid[channel[0]][channel[1]]]] for grid in (one, two))
            for i in range(p):
                for j in range(m):
                    (n1, d1), (n2, d2) = one[i][j], two[i][j]
                    found = exact_difference(n1, d1, n2, d2, w, self.source.exact_period)
                    value, reference = found.value, found.reference
                    # where both leave the range of doubles, their quotient is still known
                    lost = (reference < _LOW) & (found.relative > 0) & np.isfinite(found.relative)
                    reference = np.where(lost, _LOW, reference)
                    value = np.where(lost, np.minimum(found.relative * _LOW, 1e300), value)
                    difference[:, i, j], size[:, i, j] = value, reference
            return difference, size
        first, second = self.source.response(w), self.result.response(w)
        return of_channel(np.abs(first - second), channel), of_channel(np.abs(first), channel)

    @cached_property
    def band(self) -> Band:
        """The dynamics of both models and two decades beyond."""
        from realize.verification.bands import whole_band

        return whole_band(self.source, other=self.result)

    @cached_property
    def grid(self) -> tuple[Array, Array, Array]:
        """Frequencies over the dynamics of both models and beyond, with `quick_sizes` there; one for all claims."""
        from realize.verification.bands import all_bands, channel_zeros

        band = self.band
        edges = [edge for part in all_bands(self.source) for edge in part.edges]
        w = seeds(band, self.source.poles, self.result.rough_poles, *channel_zeros(self.source))
        w = np.unique(np.concatenate([w, np.array(edges), np.zeros(1)]))
        difference, size = self.quick_sizes(w)
        return w, difference, size

    def glance(self, channel: tuple[int, int] | None) -> Glance:
        """Return the quick look at all channels together, or at one, over `band` without the result's own poles."""
        from realize.verification.bands import all_bands, thin_grid

        if self.source.model.shape == (1, 1):
            channel = None
        key = ("glance", channel)
        if key not in self._proofs:
            edges = [edge for part in all_bands(self.source) for edge in part.edges]
            self._proofs[key] = Glance(self.proof(channel), thin_grid(self.source), edges)
        return self._proofs[key]

    def edge_gain(self, low: float, high: float, channel: tuple[int, int] | None) -> float:
        """Return the larger gain of the source at the two ends of an interval, in units of 2^exponent."""
        key = (low, high, channel)
        if key not in self._proofs:
            if self.provable(channel):
                proof = self.proof(channel)
                self._proofs[key] = max(proof.gain_at(low), proof.gain_at(high))
            else:
                self._proofs[key] = float(frobenius(self.sizes(np.array([low, high]), channel)[1]).max())
        return self._proofs[key]

    @cached_property
    def _quick(self) -> tuple[Moduli, _Rows]:
        """Moduli of M, N1, D1, D2 of each channel, and the rows where they stand."""
        from realize.kernels.exact.polynomials import bilinear_image

        rows: dict[int, int] = {}
        kept: list[Any] = []

        def row(polynomial: Any, degree: int) -> int:
            key = id(polynomial)
            if key not in rows:
                rows[key] = len(kept)
                images.append(polynomial if self.source.period is None else bilinear_image(polynomial, degree))
                kept.append(polynomial)
            return rows[key]

        images: list[Any] = []
        first, second = self.scaled
        degree = max(p.degree() for grid in (first, second) for line in grid for pair in line for p in pair)
        degree = max(degree, 0)
        listed = [
            (row(n2 * d1 - n1 * d2, 2 * degree), row(n1, degree), row(d1, degree), row(d2, degree), n1.degree() < 0)
            for one, two in zip(first, second, strict=True)
            for (n1, d1), (n2, d2) in zip(one, two, strict=True)
        ]
        M, n1s, d1s, d2s, zero = (np.array(column) for column in zip(*listed, strict=True))
        table = _Rows(M, n1s, d1s, d2s, zero, np.unique(np.concatenate([M, d1s, d2s])))
        unit = 1.0 if self.source.period is not None else float(2.0 ** np.rint(np.log2(float(self._unit))))
        return Moduli(images, unit), table

    def quick_sizes(self, w: Array, channel: tuple[int, int] | None = None) -> tuple[Array, Array]:
        """Return |dG| and |G_source| as `sizes` does, to about 1 %: in doubles where their rounding bound allows it."""
        if not self.exact:
            return self.sizes(w, channel)
        moduli, table = self._quick
        p, m = self.source.model.shape
        rows = None
        if channel is not None:
            place = channel[0] * m + channel[1]
            p, m = 1, 1
            rows = np.array([table.M[place], table.n1[place], table.d1[place], table.d2[place]])
            table = _ONE._replace(zero=table.zero[place : place + 1])
        with np.errstate(over="ignore", invalid="ignore"):
            x = w / moduli.unit if self.source.period is None else np.abs(np.tan(w * self.source.period / 2))
        logarithm, bound = moduli(x, rows)
        with np.errstate(over="ignore", under="ignore", invalid="ignore"):
            above = np.exp2(logarithm[table.M] - logarithm[table.d1] - logarithm[table.d2])
            below = np.exp2(logarithm[table.n1] - logarithm[table.d1])
            total = above + below
        poor = bound > _DOUBTFUL
        doubtful = ~np.isfinite(x) | poor[table.always].any(axis=0) | ~np.isfinite(total).all(axis=0)
        doubtful |= (poor[table.n1] | (below < _LOW))[~table.zero].any(axis=0)
        difference, size = above.T.reshape(w.size, p, m), below.T.reshape(w.size, p, m)
        if doubtful.any():
            difference[doubtful], size[doubtful] = self.sizes(w[doubtful], channel)
        return difference, size

    @property
    def identical(self) -> bool:
        """True where both are one model."""
        return self.source is self.result


def of_channel(values: Array, channel: tuple[int, int] | None) -> Array:
    """Return the values [k][1][1] of one channel, or all of them."""
    if channel is None:
        return values
    i, j = channel
    return values[:, i : i + 1, j : j + 1]


def frobenius(values: Array) -> Array:
    """Return the Frobenius norm over the channels, safe against overflow."""
    if values.shape[1:] == (1, 1):
        return values[:, 0, 0]
    largest_entry = values.max(axis=(1, 2), keepdims=True)
    scale = np.where((largest_entry > 0) & np.isfinite(largest_entry), largest_entry, 1.0)
    return np.sqrt(np.sum((values / scale) ** 2, axis=(1, 2))) * scale[:, 0, 0]
