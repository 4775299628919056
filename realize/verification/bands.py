"""Bands of frequencies of a view: dynamic bands, what is left out, light zeros and their intervals."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from realize.verification.pair import Pair
from realize.verification.search import LIGHT, Band, dynamic_band, few_seeds
from realize.verification.views import NO_DYNAMICS, Dynamics, View

#: Low end, high end (rad/s), and the gain to divide by; None: the source's own at each frequency.
Interval = tuple[float, float, float | None]


#: A steady-state gain below this share of the largest one is what rounding leaves of zero.
ROUNDING = 1e-9


def finite_at_zero(view: View) -> bool:
    """True where every channel is finite at zero frequency and some channel is not zero there."""
    poles = view.poles
    if 0 in poles.s.tolist():
        return False
    if view.fractions is None:
        return bool(np.any(_above_rounding(view)))
    point = 0 if view.period is None else 1
    return any(n(point) != 0 for row in view.fractions for n, _ in row)


def _above_rounding(view: View) -> NDArray[np.bool_]:
    """Return which channels have a steady-state gain that doubles can tell from zero."""

    def found() -> NDArray[np.bool_]:
        sizes = view.poles.frequency[view.poles.frequency > 0]
        w = np.unique(np.concatenate([[0.0], sizes]))[:200]
        with np.errstate(all="ignore"):
            values = np.abs(view.response(w))
        values[~np.isfinite(values)] = 0.0
        return values[0] > ROUNDING * values.max(axis=0)

    return view.model.remembered("steady", found)


def channel_band(view: View, i: int, j: int) -> Band:
    zeros, poles = view.channel_roots[i][j]
    at_origin = 0 in poles.s.tolist()
    if view.fractions is not None:
        finite = not at_origin and view.fractions[i][j][0](0 if view.period is None else 1) != 0
    else:
        finite = not at_origin and bool(_above_rounding(view)[i, j])
    return dynamic_band(zeros, poles, view.period, finite)


def all_bands(view: View) -> list[Band]:
    """Return the dynamic band of every channel that is not identically zero."""
    p, m = view.model.shape
    return view.model.remembered(
        "bands", lambda: [channel_band(view, i, j) for i in range(p) for j in range(m) if not zero_channel(view, i, j)]
    )


def light_zeros(zeros: Dynamics) -> list[float]:
    light = (zeros.damping < LIGHT) & (zeros.frequency > 0)
    return sorted(set(zeros.frequency[light].tolist()))


def common_zeros(view: View) -> Dynamics:
    """Zeros shared by every channel that is not identically zero."""
    p, m = view.model.shape
    lists = [view.channel_roots[i][j][0] for i in range(p) for j in range(m) if not zero_channel(view, i, j)]
    if not lists:
        return NO_DYNAMICS
    if len(lists) == 1:
        return lists[0]
    shared = set(lists[0].s.tolist()).intersection(*(set(zeros.s.tolist()) for zeros in lists[1:]))
    keep = np.array([value in shared for value in lists[0].s.tolist()], dtype=bool)
    return Dynamics(lists[0].s[keep], lists[0].on_axis[keep])


def zero_channel(view: View, i: int, j: int) -> bool:
    """True where a channel is identically zero (exactly, or at every seed in doubles)."""
    if view.fractions is not None:
        return view.fractions[i][j][0].degree() < 0
    return not np.any(view.response(10.0 ** np.linspace(-3, 3, 7) * 1.0375)[:, i, j])


def intervals_of(pair: Pair, band: Band, lines: list[float], channel: tuple[int, int] | None) -> list[Interval]:
    """Return the pieces of a band between what is left out, with the divisor of light zeros from their edges."""
    pieces: list[Interval] = [(0.0, 0.0, None)] if band.zero else []
    cuts = sorted(
        (max(low, band.low), min(high, band.high)) for low, high in band.left_out if high > band.low and low < band.high
    )
    start = band.low
    spans = []
    for low, high in cuts:
        if low > start:
            spans.append((start, low))
        start = max(start, high)
    if start < band.high:
        spans.append((start, band.high))
    for low, high in spans:
        begin = low
        for line in lines:
            left, right = line * (1 - LIGHT), line * (1 + LIGHT)
            if right <= begin or left >= high:
                continue
            if left > begin:
                pieces.append((begin, left, None))
            gain = pair.edge_gain(left, right, channel)
            pieces.append((max(left, begin), min(right, high), gain * (1 - 2.0**-30)))
            begin = right
        if begin < high:
            pieces.append((begin, high, None))
    return pieces


def channel_zeros(view: View) -> list[Dynamics]:
    return [zeros for row in view.channel_roots for zeros, _ in row]


def whole_band(view: View, margin: float = 1e2, other: View | None = None) -> Band:
    """Return the dynamic band of all channels together, widened by a factor; zero included, axis poles left out.

    Parameters
    ----------
    other : View, optional
        The band covers the poles and zeros of this model too.
    """
    if other is None:
        return view.model.remembered(f"whole band {margin}", lambda: _whole_band(view, margin, None))
    return _whole_band(view, margin, other)


def thin_grid(view: View) -> NDArray[np.float64]:
    """Return the thin grid over the widened band, beside all poles and zeros, made once for a model."""
    return view.model.remembered("thin grid", lambda: few_seeds(whole_band(view), view.poles, *channel_zeros(view)))  # type: ignore[no-any-return]


def _whole_band(view: View, margin: float, other: View | None) -> Band:
    poles = view.poles
    at_origin = 0 in poles.s.tolist()
    if view.model.shape == (1, 1):
        band = dynamic_band(view.channel_roots[0][0][0], poles, view.period, not at_origin)
    else:
        zeros = NO_DYNAMICS
        for part in channel_zeros(view):
            zeros = part if zeros is NO_DYNAMICS else zeros.merged(part)
        band = dynamic_band(zeros, poles, view.period, not at_origin)
    low, high = band.low, band.high
    if other is not None:
        extra = dynamic_band(NO_DYNAMICS, other.rough_poles, view.period, True)
        if np.any(other.rough_poles.frequency > 0):
            # a pole at the origin leaves out what is below the source's own band, wherever doubles put the result's
            low, high = low if at_origin else min(low, extra.low), max(high, extra.high)
    top = np.pi / view.period if view.period is not None else np.inf
    low = low / margin if not at_origin else low
    return Band(max(low, 1e-300), min(high * margin, top, 1e300), not at_origin, band.left_out)
