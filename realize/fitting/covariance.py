"""Roots of the covariance of what was fitted: poles, residues, direct terms, response; in units of the noise level.

All deviations are those of maximum likelihood with independent circular complex errors of mean square
(level/weight)^2; ``realize.fitting.bars`` says whether the data contradict that, and by how much.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from realize.fitting.slopes import Slopes
from realize.kernels.information import ChannelFactor, inverse_root, length
from realize.kernels.low_rank_residues import Unknowns

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


@dataclass(frozen=True, eq=False)
class Covariance:
    """Covariance of a fit by roots X: X X^T.

    Parameters
    ----------
    slopes : Slopes
    pole_root : [n][q] float
        Of the pole coordinates (``kernels.information``).
    own : list of [u][v] float
        Of each channel's own unknowns, with the poles known; empty where all channels are tied.
    tilt : list of [u][n] float
        How each channel's own unknowns follow a change of the poles.
    tied : list of [n + u][q] float
        Where residues have low rank: root of poles and own unknowns of each channel together.
    free : [n] bool
        Pole coordinates that the data leave undetermined.
    active : [channels] bool
    """

    slopes: Slopes
    pole_root: Array
    own: list[Array]
    tilt: list[Array]
    tied: list[Array]
    free: NDArray[np.bool_]
    active: NDArray[np.bool_]

    def pole_deviation(self) -> Array:
        """Return the deviation of each pole coordinate, infinite where undetermined: [n]."""
        return np.where(self.free, np.inf, length(self.pole_root))

    def channel_root(self, channel: int) -> Array:
        """Return the root of the poles and a channel's own unknowns: [n + u][q]."""
        if self.tied:
            return self.tied[channel]
        own, tilt = self.own[channel], self.tilt[channel]
        n = self.pole_root.shape[0]
        above = np.hstack([self.pole_root, np.zeros((n, own.shape[1]))])
        return np.vstack([above, np.hstack([-tilt @ self.pole_root, own])])

    def residue_root(self, index: int, paired: bool) -> Array:
        """Return the root of one pole's residue, real and imaginary part of each channel in turn: [(2) channels][q]."""
        rows = [self.slopes.residue(index, c) for c in range(self.active.size)]
        parts = [np.stack([row.real, row.imag]) if paired else row.real[None] for row in rows]
        if self.tied:
            return np.vstack([part @ root for part, root in zip(parts, self.tied, strict=True)])
        n, width = self.pole_root.shape[0], 2 if paired else 1
        shared, alone = [], np.zeros((width * len(parts), width * len(parts)))
        for c, (part, own, tilt) in enumerate(zip(parts, self.own, self.tilt, strict=True)):
            if not self.active[c]:
                shared.append(np.zeros((width, self.pole_root.shape[1])))
                continue
            shared.append((part[:, :n] - part[:, n:] @ tilt) @ self.pole_root)
            # two rows need two columns
            triangle: Array = np.linalg.qr((part[:, n:] @ own).T, mode="r")  # type: ignore[assignment]
            alone[c * width : (c + 1) * width, c * width : c * width + triangle.shape[0]] = triangle.T
        return np.hstack([np.vstack(shared), alone])

    def residue_metric(self, index: int, paired: bool) -> Array | None:
        """Return M with M^T M the inverse covariance of one pole's residue; None where it is not determined."""
        triangle: Array = np.linalg.qr(self.residue_root(index, paired).T, mode="r")  # type: ignore[assignment]
        size = np.abs(np.diagonal(triangle))
        if triangle.shape[0] < triangle.shape[1] or not np.all(size > np.finfo(float).eps * np.max(size, initial=0.0)):
            return None
        return np.asarray(np.linalg.solve(triangle.T, np.eye(size.size)))

    def response_deviation(self, points: ComplexArray) -> Array:
        """Return the deviation of the fitted response at any points: [k][channels], sqrt of the mean |error|^2."""
        result = np.zeros((points.size, self.active.size))
        for c in np.flatnonzero(self.active):
            slopes = self.slopes.at(points, int(c))
            root = self.channel_root(int(c))
            if root.shape[1] > root.shape[0]:
                triangle: Array = np.linalg.qr(root.T, mode="r")  # type: ignore[assignment]
                root = triangle.T
            result[:, c] = np.hypot(length(slopes.real @ root), length(slopes.imag @ root))
        return result


def free_covariance(factors: list[ChannelFactor], slopes: Slopes, active: NDArray[np.bool_]) -> Covariance:
    """Return the covariance where every channel has residues of its own: the channels meet in the poles alone."""
    n = slopes.poles.size
    left, rest, own, tilt = [], [], [], []
    for factor, used in zip(factors, active, strict=True):
        turned = np.hstack([factor.triangle[:, n:], factor.triangle[:, :n]])
        triangle: Array = np.linalg.qr(turned, mode="r")  # type: ignore[assignment]
        m = turned.shape[1] - n
        upper, across = triangle[:m, :m], triangle[:m, m:]
        left.append(upper)
        if used:
            rest.append(triangle[m:, m:])
        root, _ = inverse_root(upper) if used else (np.zeros((m, 0)), None)
        norm = np.linalg.norm(upper, axis=0)
        norm = np.where(norm > 0, norm, 1.0)
        own.append(root)
        tilt.append(np.linalg.lstsq(upper / norm, across, rcond=None)[0] / norm[:, None] if used else np.zeros((m, n)))
    if not rest:
        rest = [np.zeros((0, n))]
    pole_root, loose = inverse_root(np.vstack(rest))
    return Covariance(slopes, pole_root, own, tilt, [], _free(pole_root, loose), active)


def shaped_covariance(factors: list[ChannelFactor], slopes: Slopes, unknowns: Unknowns) -> Covariance:
    """Return the covariance where residues are products of shapes: all channels are tied."""
    n = slopes.poles.size
    root, loose = inverse_root(unknowns.jacobian(factors))
    tied = [unknowns.matrix(c) @ root for c in range(len(factors))]
    active = np.ones(len(factors), dtype=bool)
    return Covariance(slopes, root[:n], [], [], tied, _free(root[:n], loose[:n]), active)


def _free(root: Array, loose: Array) -> NDArray[np.bool_]:
    """Return which coordinates lie in a direction that is not determined (1e-6: more than rounding of the vectors)."""
    if loose.shape[1] == 0:
        return np.zeros(root.shape[0], dtype=bool)
    share = length(loose) / np.max(length(loose), initial=np.finfo(float).tiny)
    return np.asarray(share > 1e-6)
