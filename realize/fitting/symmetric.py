"""Reciprocal responses: one function for both channels of a pair, so that the result is symmetric to the last bit."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.fitting.records import Factored, Fit, Worst
from realize.fitting.structure import Structure
from realize.models.checks import frozen

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

_NO_SHAPE, _NONE = np.zeros(0, complex), np.zeros(0)


def fit_symmetric(
    w: Array,
    H: ComplexArray,
    sigma: Array | None,
    gamma: Array | None,
    kept: Structure,
    options: dict[str, Any],
) -> Fit:
    """Fit the upper triangle, each pair of channels replaced by its weighted mean: the same least squares problem.

    sum over both of |(g - h)/sigma|^2 = |g - mean|^2 (1/sigma_1^2 + 1/sigma_2^2) + what no symmetric g can change.

    Parameters
    ----------
    w : [k] float
        rad/s.
    H : [k][ports][ports] complex
    sigma, gamma : [k][channels] float or None
        Deviations and coherence; a coherence makes the deviations of a pair in proportion to what it says.
    """
    from realize.fitting.face import fit_response

    p = H.shape[1]
    rows, columns = np.triu_indices(p)
    first, second = H[:, rows, columns], H[:, columns, rows]
    deviation = None if sigma is None else sigma.reshape(H.shape)
    coherence = None if gamma is None else gamma.reshape(H.shape)
    mean, spread = _mean(first, second, deviation, rows, columns)
    gain = kept.steady_state_gain
    whole = replace(kept, symmetric=False, steady_state_gain=None if gain is None else gain[rows, columns][:, None])
    together = None if coherence is None else np.minimum(coherence[:, rows, columns], coherence[:, columns, rows])
    fit = fit_response(
        w,
        mean[:, :, None],
        deviation=None if spread is None else spread[:, :, None],
        coherence=None if together is None or spread is not None else together[:, :, None],
        structure=whole,
        **options,
    )
    place = np.zeros((p, p), dtype=int)
    place[rows, columns] = place[columns, rows] = np.arange(rows.size)
    misfit = (fit.misfit[:, :, 0] + mean)[:, place] - H
    return _spread_out(fit, misfit, H, w, place)


def _mean(
    first: ComplexArray, second: ComplexArray, deviation: Array | None, rows: Any, columns: Any
) -> tuple[ComplexArray, Array | None]:
    """Return the weighted mean of both channels of each pair and its deviation; zero deviations are not known ones."""
    if deviation is None:
        return first / 2 + second / 2, None
    one, two = deviation[:, rows, columns], deviation[:, columns, rows]
    size = np.maximum(one, two)
    unit = np.where(size > 0, size, 1.0)
    a, b = one / unit, two / unit
    # one of them unknown (zero): the other one alone
    known = (a > 0) & (b > 0)
    below = np.where(known, a * a + b * b, 1.0)
    share = np.where(known, b * b / below, np.where(a > 0, 1.0, np.where(b > 0, 0.0, 0.5)))
    spread = np.where(known, a * b / np.sqrt(below), np.maximum(a, b)) * unit
    spread = np.where(size > 0, np.where(rows == columns, one, spread), 0.0)
    return share * first + (1 - share) * second, spread


def _spread_out(fit: Fit, misfit: ComplexArray, H: ComplexArray, w: Array, place: NDArray[np.int64]) -> Fit:
    top = float(np.max(np.abs(H))) or 1.0
    size = float(np.sqrt(np.sum(np.abs(H / top) ** 2)))
    rms = float(np.sqrt(np.sum(np.abs(misfit / top) ** 2))) / size if size > 0 else 0.0
    peak = np.max(np.abs(H), axis=0)
    relative = np.abs(misfit) / np.where(peak > 0, peak, 1.0)
    line, i, j = (int(n) for n in np.unravel_index(int(np.argmax(relative)), relative.shape))
    factors = fit.factors
    if factors is not None:
        chain = factors.chain
        if chain is not None:
            chain = replace(chain, residues=chain.residues[:, place.ravel()], direct=chain.direct[place.ravel()])
        gain = frozen(factors.gain[:, 0][place])
        factors = Factored(tuple(factors.zeros[k] for k in place.ravel()), gain, chain)

    def square(values: NDArray[Any]) -> NDArray[Any]:
        """Return [..][channels of the triangle][1] as [..][ports][ports]."""
        return values if values.size == 0 else frozen(values[..., 0][..., place])

    channels = tuple(
        replace(fit.channels[place[i, j]], output=i, input=j)
        for i in range(place.shape[0])
        for j in range(place.shape[1])
        if fit.channels
    )
    outliers = tuple(
        replace(row, output=int(i), input=int(j)) for row in fit.outliers for i, j in np.argwhere(place == row.output)
    )
    # shapes and ranks are those of the list of channels, not of the matrix
    table = tuple(
        replace(row, rank=0, output_shape=_NO_SHAPE, output_shape_deviation=_NONE, input_shape=_NO_SHAPE)
        for row in fit.pole_table
    )
    table = tuple(replace(row, input_shape_deviation=_NONE) for row in table)
    return replace(
        fit,
        pole_table=table,
        channels=channels,
        outliers=outliers,
        response_deviation=square(fit.response_deviation),
        residue_deviation=square(fit.residue_deviation),
        direct_deviation=square(fit.direct_deviation),
        gain=square(fit.gain),
        # both of a pair together have the deviation of their mean
        deviation=square(fit.deviation) * np.where(np.eye(place.shape[0], dtype=bool), 1.0, np.sqrt(2.0)),
        gain_deviation=square(fit.gain_deviation),
        residues=frozen(fit.residues[:, :, 0][:, place]),
        direct=frozen(fit.direct[:, 0][place]),
        misfit=frozen(misfit),
        rms=rms,
        worst=Worst(float(relative[line, i, j]), line, i, j, float(w[line])),
        factors=factors,
        dead_time=None if fit.dead_time is None else frozen(fit.dead_time[:, 0][place]),
    )
