"""A fitted model made passive by the smallest change of its response at the lines of the data.

With fixed poles, both properties are convex in residues and direct term: for every frequency and every vector,

    Re v^* G(jw) v >= 0  (positive real),        Re u^* G(jw) v <= 1, |u| = |v| = 1  (bounded real)

is one linear inequality. The change of least weighted size over the data's lines that satisfies the inequalities found
so far is a least distance problem; where the result still violates, at frequencies from a grid and from the Hamiltonian
pencil, the eigenvectors there give new inequalities. Since each of them holds for every passive model with these poles,
the limit is the smallest change there is.

Sources
-------
1. S. Boyd, V. Balakrishnan, P. Kabamba, A bisection method for computing the H-infinity norm of a transfer matrix,
   Math. Control Signals Systems 2 (1989) 207-219.
2. S. Grivet-Talocia, Passivity enforcement via perturbation of Hamiltonian matrices, IEEE Transactions on Circuits and
   Systems I 51(9) (2004) 1755-1769 (from memory).
3. J. E. Kelley, The cutting-plane method for solving convex programs, Journal of the Society for Industrial and Applied
   Mathematics 8 (1960) 703-712.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.errors import Refused, UsageError
from realize.fitting.passive_network import MARGIN, Metric, Network, grid_of
from realize.fitting.records import Fit, PoleRow, Worst
from realize.kernels.least_distance import shortest
from realize.kernels.passive_frequencies import between, violation
from realize.kernels.vector_fitting import residues_of
from realize.models.checks import frozen

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: The same in roundings of the largest terms that cancel in the response, and the largest margin that is of use.
ROUNDINGS, LARGEST_MARGIN = 256.0, 0.05
#: Rounds of new inequalities, and those of which each must lower the violation.
MOST_ROUNDS = 80
#: States up to which the Hamiltonian pencil confirms the result.
CONFIRMED_STATES = 240
#: Peaks looked at in one round.
MOST_PEAKS = 60
#: Stands for the residue of a pole at the origin in a list of frequencies.
AT_ORIGIN = -1.0
#: Points of a zoom into a peak of the violation, and zooms.
ZOOM, ZOOMS = 9, 4


@dataclass(frozen=True)
class PassiveChange:
    """What was changed to make a model passive.

    Parameters
    ----------
    kind : str
    before, after : float
        Largest violation (a negative one is a margin), positive real: over the largest gain.
    rounds, inequalities : int
    rms, largest : float
        Change of the response: RMS over the lines relative to that of the model; largest anywhere, over the largest
        gain.
    """

    kind: str
    before: float
    after: float
    rounds: int
    inequalities: int
    rms: float
    largest: float


def made_passive(
    fit: Fit,
    w: Array,
    kind: str,
    *,
    period: float | None,
    symmetric: bool,
    pinned: bool,
) -> tuple[Fit, PassiveChange]:
    """Return the fit with residues and direct term moved as little as passivity needs.

    Minimises sum |weights (G_new - G)|^2 over the data's lines with the poles as they are. A fit that is passive with
    the margin stays as it is.

    Parameters
    ----------
    fit : Fit
        Stable, simple poles at the origin aside; partial fractions.
    w : [k] float
        The data's lines, rad/s.
    kind : str
        "positive-real" or "bounded-real".
    period : float or None
    symmetric : bool
        Whether the model stays a symmetric matrix.
    pinned : bool
        Whether the gain at frequency 0 stays.

    Raises
    ------
    UsageError
        A structure that partial fractions cannot hold.
    Refused
        No passive model with these poles.
    """
    _checked(fit, kind, period, symmetric)
    direct = bool(np.any(fit.direct)) or fit.order == 0
    network = Network(fit, w, kind, period, symmetric, direct)
    change = Metric(network, fit, pinned)
    grid = grid_of(network)
    network.margin = max(MARGIN, ROUNDINGS * network.rounding(grid))
    if network.margin > LARGEST_MARGIN:
        raise Refused(
            "the fit has poles so far outside of the data that rounding decides whether it is passive; lower the order"
        )
    here = network.base
    rows: list[Array] = []
    bounds: list[float] = []
    before: float | None = None
    for count in range(MOST_ROUNDS):
        found, worst = _violations(network, here, grid)
        if not found and (extra := _confirmed(network, here)).size:
            found, more = _violations(network, here, extra)
            worst = max(worst, more)
        before = worst if before is None else before
        if not found:
            return _changed(fit, network, here, w), _report(network, kind, here, grid, before, worst, count, len(rows))
        for frequency in found:
            _cuts(network, change, here, frequency, rows, bounds)
        move = shortest(np.array(rows), np.array(bounds))
        if move is None:
            raise Refused(
                f"no {kind} model has these poles and what else is fixed; allow a feed-through, another order, or more "
                "freedom"
            )
        here = network.base + change.coefficients(move)
    raise Refused(f"the fit did not become {kind} in {MOST_ROUNDS} rounds; try another order")


#: Pairs of poles outside of the data that give room for passivity: factor on the lowest or highest line, damping ratio.
OUTSIDE: tuple[tuple[float | None, float, float], ...] = ((None, 2.0, 0.5), (0.5, 2.0, 0.5), (0.7, 1.4, 0.3))
#: Damping ratio that poles outside of the band get at least: the data say little of it, and passivity pays for a peak.
CALM = 0.3
#: Poles outside of the band stay this near to it then.
FAR = 30.0
#: A misfit this much larger than that of the fit makes poles outside of the band worth trying.
SPOILT = 1.1


def passive_with_room(
    fit: Fit, w: Array, kind: str, *, period: float | None, symmetric: bool, pinned: bool
) -> tuple[Fit, PassiveChange, int]:
    """Return the fit made passive, with one or two pairs of poles outside of the band where they spare the response.

    A fit may violate where nothing was measured; bending the response there with the poles of the band alone bends it
    within the band too. Returns how many poles were added as well. Other parameters as in ``made_passive``.
    """
    options: dict[str, Any] = {"period": period, "symmetric": symmetric, "pinned": pinned}
    best: tuple[Fit, PassiveChange, int] | None = None
    try:
        best = (*made_passive(fit, w, kind, **options), 0)
    except Refused:
        if period is not None:
            raise
    if period is not None or (best is not None and best[0].rms <= SPOILT * fit.rms):
        assert best is not None
        return best
    calm = _calmed(fit, w)
    for base, place in [(calm, None), *[(base, place) for base in dict.fromkeys((fit, calm)) for place in OUTSIDE]]:
        if base is fit and place is None:
            continue
        wider = base if place is None else _with_poles(base, w, place)
        try:
            trial = made_passive(wider, w, kind, **options)
        except Refused:
            continue
        if best is None or trial[0].rms < best[0].rms:
            best = (*trial, wider.order - fit.order)
    if best is None:
        raise Refused(f"no {kind} model was found near this fit; try another order")
    return best


def _calmed(fit: Fit, w: Array) -> Fit:
    """Return the fit with lightly damped or far poles outside of the band drawn in, residues fitted to its response."""
    size = np.abs(fit.poles)
    low, high = float(w[w > 0][0]), float(w[-1])
    outside = ((size < low) | (size > high)) & (size > 0)
    near = np.clip(size, low / FAR, high * FAR)
    damping = -fit.poles.real / np.where(size > 0, size, 1.0)
    paired = fit.poles.imag != 0
    loud = outside & ((near != size) | (paired & (damping < CALM)))
    if not np.any(loud):
        return fit
    ratio = np.where(paired, np.maximum(damping, CALM), 1.0)
    turned = near * (-ratio + 1j * np.sign(fit.poles.imag) * np.sqrt(np.maximum(1 - ratio**2, 0.0)))
    poles = np.where(loud, turned, fit.poles)
    if np.unique(poles).size < poles.size:
        return fit
    points = 1j * w
    keep = ~np.any(points[:, None] == fit.poles[None, :], axis=1)
    unit = max(float(np.max(size)), high)
    shape = fit.direct.shape
    values = np.einsum("kn,npm->kpm", 1 / (points[keep, None] - fit.poles), fit.residues) + fit.direct
    with np.errstate(divide="ignore"):
        weights = np.where(np.isfinite(fit.deviation), 1 / fit.deviation, 0.0)[keep]
    if not np.all(np.isfinite(weights)):
        weights = np.ones(weights.shape)
    flat = values.reshape(values.shape[0], -1)
    residues, direct, missed = residues_of(
        points[keep] / unit,
        np.asarray(poles / unit, dtype=complex),
        flat,
        weights.reshape(flat.shape),
        bool(np.any(fit.direct)),
    )
    misfit = fit.misfit.copy()
    misfit[keep] += missed.reshape(values.shape)
    return replace(
        fit,
        poles=frozen(poles),
        residues=frozen(residues.reshape(-1, *shape) * unit),
        direct=frozen(direct.reshape(shape)),
        misfit=frozen(misfit),
        pole_table=tuple(
            replace(row, frequency=float(near[row.index]), damping=float(ratio[row.index])) if loud[row.index] else row
            for row in fit.pole_table
        ),
        **_figures(fit, misfit, w),
    )


def _with_poles(fit: Fit, w: Array, place: tuple[float | None, float, float]) -> Fit:
    """Return the fit with pairs of poles below and above the band whose residues are zero."""
    below, above, damping = place
    sizes = [above * float(w[-1])] + ([] if below is None else [below * float(w[w > 0][0])])
    poles: list[complex] = []
    rows = list(fit.pole_table)
    for size in sizes:
        pole = size * complex(-damping, np.sqrt(1 - damping**2))
        rows.append(PoleRow(size, damping, 0.0, fit.order + len(poles), True, strength=0.0))
        poles += [pole, pole.conjugate()]
    n = len(poles)
    shape = fit.direct.shape
    deviation = fit.residue_deviation
    if deviation.size:
        deviation = np.concatenate([deviation, np.full((n, *shape), np.inf)])
    return replace(
        fit,
        poles=np.concatenate([fit.poles, poles]),
        residues=np.concatenate([fit.residues, np.zeros((n, *shape), dtype=complex)]),
        powers=np.concatenate([fit.powers, np.ones(n, dtype=np.int64)]),
        order=fit.order + n,
        pole_table=tuple(sorted(rows, key=lambda row: row.frequency)),
        residue_deviation=deviation,
    )


def _checked(fit: Fit, kind: str, period: float | None, symmetric: bool) -> None:
    if fit.factors is not None or np.any(fit.powers > 1):
        raise UsageError(
            "a passive model with fixed zeros, repeated integrators or a relative degree above 1 is not made here"
        )
    ports = fit.direct.shape
    if ports[0] != ports[1]:
        raise UsageError(f"{ports[0]} outputs and {ports[1]} inputs: passivity is a property of square responses")
    margin = -fit.poles.real if period is None else 1 - np.abs(fit.poles)
    origin = fit.poles == (0 if period is None else 1)
    if np.any(margin[~origin] <= 0):
        raise UsageError("a passive model has no unstable poles; drop those that are fixed or allowed")
    if np.any(origin) and kind == "bounded-real":
        raise UsageError("a bounded real model has no integrators")
    lossless = bool(np.any(origin)) or (period is None and not np.any(fit.direct))
    if kind == "positive-real" and lossless and ports[0] > 1 and not symmetric:
        raise UsageError(
            "a positive real matrix with an integrator, or without feed-through, has to be symmetric: add --symmetric"
        )


def _violations(network: Network, coefficients: Array, grid: Array) -> tuple[list[float], float]:
    """Return the frequencies of the peaks that violate, and the largest violation relative to the local gain."""

    def excess(w: Array) -> Array:
        size = network.size(w)
        found = violation(network.response(w, coefficients), network.kind)
        # a network that is zero there is passive
        return np.where((size > 0) | (found > 0), found / np.maximum(size, 1e-300), -1.0)

    values = excess(grid)
    padded = np.concatenate([[-np.inf], values, [-np.inf]])
    peaks = np.flatnonzero((values >= padded[:-2]) & (values >= padded[2:]) & (values > -2 * network.margin))
    if peaks.size > MOST_PEAKS:
        # a lossless network is at the boundary everywhere: some of it at a time, evenly
        peaks = peaks[np.unique(np.rint(np.linspace(0, peaks.size - 1, MOST_PEAKS)).astype(int))]
    found: list[float] = []
    worst = float(np.max(values))
    for k in peaks.tolist():
        w, value = float(grid[k]), float(values[k])
        low, high = float(grid[max(k - 1, 0)]), float(grid[min(k + 1, grid.size - 1)])
        if np.isfinite(w):
            high = high if np.isfinite(high) else 2 * w
            for _ in range(ZOOMS):
                near = np.linspace(low, high, ZOOM)
                there = excess(near)
                best = int(np.argmax(there))
                if there[best] > value:
                    w, value = float(near[best]), float(there[best])
                low, high = float(near[max(best - 1, 0)]), float(near[min(best + 1, ZOOM - 1)])
        worst = max(worst, value)
        if value > -network.margin / 2:
            found.append(w)
    # a pole at the origin: its residue by itself
    if network.kind == "positive-real" and _origin_excess(network, coefficients) > -network.margin / 2:
        found.append(AT_ORIGIN)
    return found, worst


def _origin_place(network: Network) -> int | None:
    place = np.flatnonzero(network.poles == (0 if network.period is None else 1))
    return int(place[0]) if place.size else None


def _residue(network: Network, coefficients: Array, place: int) -> Array:
    full = np.zeros((network.ports, network.ports))
    full[network.rows, network.columns] = coefficients[place]
    full[network.columns, network.rows] = coefficients[place]
    return full


def _origin_excess(network: Network, coefficients: Array) -> float:
    place = _origin_place(network)
    if place is None:
        return -np.inf
    size = float(np.linalg.norm(_residue(network, network.base, place), ord=2))
    return float(-np.linalg.eigvalsh(_residue(network, coefficients, place))[0]) / max(size, 1e-300)


def _cuts(
    network: Network, metric: Metric, coefficients: Array, frequency: float, rows: list[Array], bounds: list[float]
) -> None:
    """Append the inequalities of the eigenvectors that violate at a frequency (-1: of the residue at the origin)."""
    if frequency < 0:
        place = _origin_place(network)
        assert place is not None
        values, vectors = np.linalg.eigh(_residue(network, coefficients, place))
        size = float(np.linalg.norm(_residue(network, network.base, place), ord=2))
        function = np.zeros(network.base.shape[0], dtype=complex)
        function[place] = 1.0
        pairs = [(v, v) for value, v in zip(values, vectors.T, strict=True) if value < size * network.margin / 2]
        sign = 1.0
    else:
        at = np.array([frequency])
        response = network.response(at, coefficients)[0]
        size = float(network.size(at)[0])
        function = network.basis(at)[0]
        if network.kind == "positive-real":
            values, vectors = np.linalg.eigh((response + response.conj().T) / 2)
            limit = size * network.margin / 2
            pairs = [(v, v) for value, v in zip(values, vectors.T, strict=True) if value < limit]
            sign = 1.0
        else:
            left, values, right = np.linalg.svd(response)
            pairs = [(left[:, k], right[k].conj()) for k in range(values.size) if values[k] > 1 - network.margin / 2]
            sign = -1.0
    goal = size * network.margin if network.kind == "positive-real" else -(1 - network.margin)
    for u, v in pairs:
        shares = u.conj()[network.rows] * v[network.columns]
        if network.symmetric:
            other = u.conj()[network.columns] * v[network.rows]
            shares = np.where(network.rows == network.columns, shares, shares + other)
        now = float(np.sum(shares * (function @ network.base)).real)
        rows.append(sign * metric.row(function, shares))
        bounds.append(goal - sign * now)


def _confirmed(network: Network, coefficients: Array) -> Array:
    """Return more frequencies to look at, from the Hamiltonian pencil: none where the sign cannot change."""
    if network.poles.size * network.ports > CONFIRMED_STATES or network.poles.size == 0:
        return np.zeros(0)
    found = network.singular(coefficients)
    if network.period is not None:
        found = found[found < np.pi / network.period]
    places = between(found)
    points = network.points(places)
    return places[~np.any(points[:, None] == network.poles[None, :], axis=1)]


def _changed(fit: Fit, network: Network, coefficients: Array, w: Array) -> Fit:
    """Return the fit with new coefficients, in the units of the data, and its misfit."""
    move = coefficients - network.base
    if not np.any(move):
        return fit
    n, p = network.poles.size, network.ports
    residues = coefficients[:n].astype(complex)
    first = np.flatnonzero(network.poles.imag > 0)
    residues[first] += 1j * coefficients[first + 1]
    residues[first + 1] = residues[first].conj()
    full = np.zeros((n, p, p), dtype=complex)
    full[:, network.rows, network.columns] = residues
    constant = np.zeros((p, p))
    if network.direct:
        constant[network.rows, network.columns] = coefficients[n]
    if network.symmetric:
        full[:, network.columns, network.rows] = residues
        constant[network.columns, network.rows] = coefficients[n] if network.direct else 0.0
    with np.errstate(divide="ignore", invalid="ignore"):
        moved = network.response(network.w, move) * float(np.ldexp(1.0, network.lift))
    misfit = fit.misfit + np.where(np.isfinite(moved), moved, 0.0)
    scale = float(np.ldexp(1.0, network.lift))
    per_second = float(np.ldexp(1.0, network.shift)) if network.period is None else 1.0
    return replace(
        fit,
        residues=frozen(full * scale * per_second),
        direct=frozen(constant * scale),
        misfit=frozen(misfit),
        **_figures(fit, misfit, w),
    )


def _figures(fit: Fit, misfit: ComplexArray, w: Array) -> dict[str, Any]:
    """Return rms, weighted and worst of a new misfit; the data are known through the old ones."""
    ratio = float(np.linalg.norm(misfit)) / max(float(np.linalg.norm(fit.misfit)), 1e-300)
    known = np.isfinite(fit.deviation) & (fit.deviation > 0)
    weighted = fit.weighted
    if np.any(known):
        weighted = float(np.sqrt(np.mean(np.abs(misfit[known] / fit.deviation[known]) ** 2)))
    line, i, j = (int(k) for k in np.unravel_index(int(np.argmax(np.abs(misfit))), misfit.shape))
    peak = abs(fit.misfit[fit.worst.line, fit.worst.output, fit.worst.input])
    value = fit.worst.value * float(np.abs(misfit[line, i, j])) / float(peak) if peak > 0 else np.inf
    return {
        "rms": fit.rms * ratio,
        "weighted": weighted,
        "worst": Worst(value, line, i, j, float(w[line])),
    }


def _report(
    network: Network, kind: str, here: Array, grid: Array, before: float, after: float, rounds: int, cuts: int
) -> PassiveChange:
    move = here - network.base
    keep = ~np.any(network.points(network.w)[:, None] == network.poles[None, :], axis=1)
    old = network.response(network.w[keep], network.base)
    new = network.response(network.w[keep], move)
    finite = grid[np.isfinite(grid)]
    gain = max(float(np.max(np.abs(old))), 1e-300)
    largest = float(np.max(np.linalg.norm(network.response(finite, move), ord=2, axis=(1, 2))))
    return PassiveChange(
        kind,
        before,
        after,
        rounds,
        cuts,
        float(np.linalg.norm(new)) / max(float(np.linalg.norm(old)), 1e-300),
        largest / gain,
    )
