"""What verification sees of a model: exact channel fractions where affordable, doubles otherwise.

The exact fractions are checked at one random rational point against the model's own structure (an exact solve, a
product, a sum), so that a fault in forming them cannot vouch for itself: two different fractions of degree n agree at a
point drawn from 2^61 with probability at most 2n/2^61 (Schwartz 1980; Zippel 1979).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from contextvars import ContextVar
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.errors import Refused
from realize.models import (
    MatrixFraction,
    Model,
    PoleResidue,
    SecondOrder,
    Sections,
    StateSpace,
    TransferFunction,
    ZeroPoleGain,
)
from realize.models.fractions import form_fractions
from realize.models.impulse_response import is_data
from realize.verification.formation import check_at_a_point

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Predicted operations (about nanoseconds) above which doubles are used.
EXACT_BUDGET = 5e9
#: The integers of larger state models are not looked at: their bits are counted from exponents alone.
LARGEST_COUNTED = 160
#: The integers of smaller ones are not looked at either: they are never longer than the range of doubles.
SMALL, DOUBLE_BITS = 12, 2100
#: Predicted operations of isolating the roots of degree n, over n^3: long coefficients of dense state models.
ROOT_COST = 5.0e2
#: The same for other kinds, whose roots may be clustered.
CLUSTERED = 1.5e3
#: Predicted operations of the claims about one channel, over its degree.
CHANNEL_COST = 2e6
#: State models whose channels have a larger degree get approximate roots: they only say where to look.
LARGE_DEGREE = 30
#: The finite eigenvalues of descriptors are counted exactly up to this many states.
LARGEST_DESCRIPTOR = 1000


#: Predicted operations that views of models may take; lifted where exact arithmetic is asked for whatever it costs.
_allowed: ContextVar[float] = ContextVar("allowed", default=EXACT_BUDGET)


@contextmanager
def whatever_it_costs(lifted: bool = True) -> Iterator[None]:
    """Inside, views of models are exact without regard to the budget."""
    token = _allowed.set(np.inf if lifted else _allowed.get())
    try:
        yield
    finally:
        _allowed.reset(token)


def budget_lifted() -> bool:
    """True inside `whatever_it_costs`: proofs of any degree are tried too."""
    return _allowed.get() == np.inf


#: Called with words while long proofs go on.
_listener: ContextVar[Callable[[str], None] | None] = ContextVar("listener", default=None)


@contextmanager
def telling(listener: Callable[[str], None] | None) -> Iterator[None]:
    """Inside, the progress of proofs and of other long work is told to a listener."""
    token = _listener.set(listener)
    try:
        yield
    finally:
        _listener.reset(token)


def tell(text: str) -> None:
    """Say how far a proof, or other work that may take long, is."""
    listener = _listener.get()
    if listener is not None:
        listener(text)


def view_of(model: Model) -> View:
    """Return the view of a model, made once: exact fractions and roots are not formed twice."""
    if is_data(model):
        raise Refused(f"the data of a model of kind {model.kind} say nothing between their points; fit a model first")
    budget = _allowed.get()
    if budget != EXACT_BUDGET and predicted_cost(model) > EXACT_BUDGET:
        # kept apart, so that what other steps choose does not depend on this one
        return model.remembered("view without budget", lambda: View(model, budget))
    return model.remembered("view", lambda: View(model))


@dataclass(frozen=True)
class Dynamics:
    """Poles or zeros as equivalent continuous numbers s (rad/s), those exactly on the axis marked."""

    s: ComplexArray
    on_axis: NDArray[np.bool_]

    def merged(self, other: Dynamics) -> Dynamics:
        """Return both lists together."""
        return Dynamics(np.concatenate([self.s, other.s]), np.concatenate([self.on_axis, other.on_axis]))

    @cached_property
    def frequency(self) -> Array:
        """|s| in rad/s."""
        return np.abs(self.s)

    @cached_property
    def damping(self) -> Array:
        """Damping ratio |Re s| / |s|; 1 at the origin, 0 where exactly on the axis."""
        size = np.abs(self.s)
        ratio = np.divide(np.abs(self.s.real), size, out=np.ones(size.shape), where=size > 0)
        return np.where(self.on_axis & (size > 0), 0.0, ratio)


NO_DYNAMICS = Dynamics(np.zeros(0, dtype=complex), np.zeros(0, dtype=bool))


def dynamics_of(values: ComplexArray, exact_axis: NDArray[np.bool_], period: float | None) -> Dynamics:
    """Return roots as continuous equivalents: ln(z)/T for a sampled model; roots at z = 0 have none."""
    values = np.asarray(values, dtype=complex)
    keep = np.isfinite(values)
    if not keep.all():
        values, exact_axis = values[keep], exact_axis[keep]
    if period is None:
        return Dynamics(values, exact_axis)
    keep = values != 0
    z = values[keep]
    # ln z with the real part from |z|^2 - 1, which does not cancel near the unit circle
    radius = (z.real - 1) * (z.real + 1) + z.imag * z.imag
    real = np.where(np.abs(radius) < 0.5, 0.5 * np.log1p(np.maximum(radius, -0.999)), np.log(np.abs(z)))
    s = (real + 1j * np.angle(z)) / period
    return Dynamics(s, exact_axis[keep])


class View:
    """One parametric model, prepared for verification: exact where the predicted cost allows it."""

    def __init__(self, model: Model, budget: float = EXACT_BUDGET) -> None:
        self.model = model
        self.budget = budget
        self.period = model.time.seconds if model.time.sampled else None

    @cached_property
    def fractions(self) -> list[list[tuple[Any, Any]]] | None:
        """Exact (numerator, denominator) of each channel, common factors cancelled; None where too costly."""
        if predicted_cost(self.model) > self.budget:
            return None
        return exact_fractions(self.model)

    @cached_property
    def channel_roots(self) -> list[list[tuple[Dynamics, Dynamics]]]:
        """(zeros, poles) of each channel as continuous equivalents; zeros are empty where only doubles are affordable.

        They say where to look and what the dynamic band is; no proof rests on their last digits. Those exactly on the
        axis are found by exact tests.
        """
        p, m = self.model.shape
        if self.fractions is not None:
            known: dict[Any, Dynamics] = {}

            def of(polynomial: Any, channel: tuple[int, int] | None) -> Dynamics:
                key = id(polynomial)
                if key not in known:
                    known[key] = self.dynamics(polynomial, channel)
                return known[key]

            grid = self.fractions
            return [[(of(grid[i][j][0], (i, j)), of(grid[i][j][1], None)) for j in range(m)] for i in range(p)]
        poles = double_poles(self.model)
        size = np.abs(poles)
        axis = np.abs(poles.real) <= 4 * np.finfo(float).eps * size
        if self.period is not None:
            axis = np.abs(size - 1) <= 4 * np.finfo(float).eps
        shared = dynamics_of(poles, axis, self.period)
        return [[(NO_DYNAMICS, shared) for _ in range(m)] for _ in range(p)]

    def dynamics(self, polynomial: Any, channel: tuple[int, int] | None = None) -> Dynamics:
        """Return the roots of an exact polynomial, axis membership decided exactly.

        Parameters
        ----------
        channel : (output, input), optional
            The channel whose zeros they are; poles without one.
        """
        from realize.kernels.exact.polynomials import bilinear_image, even_odd
        from realize.kernels.exact.roots import roots, unit_circle

        if polynomial.degree() < 1:
            return NO_DYNAMICS
        if isinstance(self.model, (StateSpace, SecondOrder, MatrixFraction)) and polynomial.degree() > LARGE_DEGREE:
            image = polynomial if self.period is None else bilinear_image(polynomial)
            even, odd = even_odd(image)
            common = even.gcd(odd) if odd else even
            if common.degree() < 1:
                # nothing on the axis: approximate roots do
                values = self._near_roots(polynomial, channel)
                if values is not None:
                    return dynamics_of(values, np.zeros(values.size, dtype=bool), self.period)
        distinct = roots(polynomial)
        if self.period is None:
            each = [root for root in distinct for _ in range(root.multiplicity)]
            values = np.array([root.value for root in each], dtype=complex)
            return dynamics_of(values, np.array([root.on_axis for root in each], dtype=bool), None)
        flags = unit_circle(polynomial, distinct)
        counts = [root.multiplicity for root in distinct]
        axis = np.repeat(np.array(flags, dtype=bool), counts)
        # a root at z = 0 has no continuous equivalent
        keep = np.repeat(np.array([root.value != 0 for root in distinct], dtype=bool), counts)
        s = np.repeat(np.array([logarithm(root) if root.value else 0j for root in distinct], dtype=complex), counts)
        s = s[keep] / self.period
        return Dynamics(np.where(axis[keep], 1j * s.imag, s), axis[keep])

    def _near_roots(self, polynomial: Any, channel: tuple[int, int] | None) -> ComplexArray | None:
        """Return approximate roots of a polynomial of a large model, none missing: from doubles where they do."""
        from realize.kernels.exact.isolation import roots_near

        model = self.model
        if isinstance(model, StateSpace) and model.E is None and not model.beyond_doubles:
            if channel is None:
                starts = double_poles(model)
            else:
                from realize.kernels.zeros import zeros

                i, j = channel
                starts = zeros(model.A, model.B[:, j : j + 1], model.C[i : i + 1], model.D[i : i + 1, j : j + 1])
            found = roots_near(polynomial, starts.tolist())
            if found is not None:
                return np.array(found, dtype=complex)
        return approximate_roots(polynomial)

    @cached_property
    def poles(self) -> Dynamics:
        """The poles of all channels together, each as often as the channel with the most has it."""
        if self.model.shape == (1, 1):
            return self.channel_roots[0][0][1]
        seen: dict[complex, int] = {}
        axis: dict[complex, bool] = {}
        for row in self.channel_roots:
            for _, poles in row:
                here: dict[complex, int] = {}
                for value, on in zip(poles.s.tolist(), poles.on_axis.tolist(), strict=True):
                    here[value] = here.get(value, 0) + 1
                    axis[value] = on
                for value, count in here.items():
                    seen[value] = max(seen.get(value, 0), count)
        values = [value for value, count in seen.items() for _ in range(count)]
        return Dynamics(np.array(values, dtype=complex), np.array([axis[v] for v in values], dtype=bool))

    @cached_property
    def rough_poles(self) -> Dynamics:
        """The poles in doubles, good enough to look beside; exact ones where doubles cannot hold the model."""
        if self.model.beyond_doubles:
            return self.poles
        values = double_poles(self.model)
        return dynamics_of(values, np.zeros(values.size, dtype=bool), self.period)

    @cached_property
    def cancelled_unstable(self) -> int:
        """How many poles of a single channel, not strictly stable, cancel exactly with zeros."""
        if self.fractions is None or self.model.shape != (1, 1):
            return 0
        from realize.kernels.exact.roots import roots

        full = exact_fractions(self.model, cancel=False)[0][0][1]
        hidden = full // self.fractions[0][0][1]
        if hidden.degree() < 1:
            return 0
        edge = 0 if self.period is None else 1
        return sum(
            root.multiplicity
            for root in roots(hidden)
            if (root.value.real >= 0 if not edge else abs(root.value) >= 1 - 4 * np.finfo(float).eps)
        )

    def response(self, frequency: Array) -> ComplexArray:
        """Return the response [k][p][m] at angular frequencies (rad/s), dead time left out."""
        if self.fractions is not None:
            from realize.kernels.exact.evaluation import evaluate

            p, m = self.model.shape
            values = np.empty((frequency.size, p, m), dtype=complex)
            for i in range(p):
                for j in range(m):
                    n, d = self.fractions[i][j]
                    values[:, i, j] = evaluate(n, d, frequency, self.exact_period)[0]
            return values
        return self.model.rational_part(self.model.time.points(frequency))

    @cached_property
    def exact_period(self) -> Any:
        """Sampling period as an exact rational, None in continuous time."""
        if self.period is None:
            return None
        from realize.kernels.exact.numbers import fraction

        period = self.model.time.exact_period
        return fraction((period.numerator, period.denominator))


def logarithm(root: Any) -> complex:
    """Return ln z of an exact root other than 0 to full relative accuracy, however near to 1 it is."""
    from realize.kernels.exact.numbers import precision

    if root.exact is not None and root.exact == 1:
        return 0j
    bits = 128
    while True:
        with precision(bits + 32):
            logarithm = root.at(bits).log()
        if logarithm.rel_accuracy_bits() >= 53 or bits > 1 << 14:
            return complex(float(logarithm.real), float(logarithm.imag))
        bits *= 2


def predicted_cost(model: Model) -> float:
    """Return the predicted operations of forming exact fractions and their roots (from sizes and bit lengths alone)."""
    return model.remembered("cost", lambda: _predicted_cost(model))


def _bits_of(model: StateSpace) -> int:
    """Return about how long the integers of a large model are: a mantissa and the range of the balanced exponents."""
    from realize.kernels.response import balanced_states

    exponents = np.frexp(balanced_states(model.A, model.B, model.C, model.E)[0])
    used = exponents[1][exponents[0] != 0]
    return 53 + (int(used.max()) - int(used.min()) if used.size else 0)


def forming_cost(model: StateSpace) -> float:
    """Return the predicted operations of forming the exact transfer matrix of a state model, its roots left alone."""
    from realize.kernels.exact import cost

    (p, m), order = model.shape, model.order
    if order <= SMALL and not model.decimals:
        bits = DOUBLE_BITS
    elif order <= LARGEST_COUNTED:
        bits = model.remembered("bits of A", lambda: cost.matrix_bits(model.exact("A")))
    else:
        bits = _bits_of(model)
    return cost.transfer_operations(order, m, p, bits, descriptor=model.E is not None)


def _predicted_cost(model: Model) -> float:
    p, m = model.shape
    order = model.order or 0
    if isinstance(model, StateSpace):
        # each channel has its own numerator, whose roots are sought
        roots = (1 + p * m) * ROOT_COST * order**3
        # beyond the budget already: entries need not be looked at
        return roots if roots > EXACT_BUDGET else forming_cost(model) + roots
    if isinstance(model, SecondOrder):
        pencil = model.pencil
        largest = StateSpace(A=pencil.A, B=pencil.B, C=pencil.C, D=pencil.D, E=pencil.E)
        return predicted_cost(largest)
    if isinstance(model, TransferFunction):
        degrees = [
            n.size + d.size
            for a, b in zip(model.numerator, model.denominator, strict=True)
            for n, d in zip(a, b, strict=True)
        ]
    elif isinstance(model, ZeroPoleGain):
        degrees = [
            z.size + q.size for a, b in zip(model.zeros, model.poles, strict=True) for z, q in zip(a, b, strict=True)
        ]
    elif isinstance(model, PoleResidue):
        present = np.count_nonzero(model.residues, axis=0) + model.direct.shape[0]
        degrees = (2 * present).reshape(-1).tolist()
    else:
        degrees = [2 * order] * (p * m)
    return float(sum(CLUSTERED * (degree / 2) ** 3 + CHANNEL_COST * (1 + degree) for degree in degrees))


def approximate_roots(polynomial: Any) -> ComplexArray | None:
    """Return roots to about ten digits by ball arithmetic of rising precision, or None where that does not end."""
    from flint import acb_poly

    from realize.kernels.exact.numbers import precision

    degree = polynomial.degree()
    for bits in (4 * degree + 64, 16 * degree + 128):
        with precision(bits):
            try:
                found = acb_poly(polynomial).roots()
            except ValueError:
                continue
            return np.array([complex(float(root.real), float(root.imag)) for root in found])
    return None


def double_poles(model: Model) -> ComplexArray:
    """Return the poles in double arithmetic, for models whose exact fractions are too costly."""
    if isinstance(model, StateSpace):
        from realize.kernels.response import balanced_states

        large = model.large_response()
        if large is not None:
            return large.poles
        A, _, _, E = balanced_states(model.A, model.B, model.C, model.E)
        if E is None:
            return np.linalg.eigvals(A).astype(complex)
        import scipy.linalg

        values = scipy.linalg.eigvals(A, E)
        return finite_ones(model, values[np.isfinite(values)])
    if isinstance(model, MatrixFraction):
        determinant = form_fractions(model)[0][0][1]
        roots = approximate_roots(determinant) if determinant.degree() > 0 else None
        return np.zeros(0, dtype=complex) if roots is None else roots
    if isinstance(model, SecondOrder):
        pencil = model.pencil
        n = model.order
        return double_poles(StateSpace(A=pencil.A[:n, :n], B=pencil.B[:n], C=np.zeros((1, n)), E=pencil.E[:n, :n]))
    if isinstance(model, PoleResidue):
        return np.asarray(model.poles)
    if isinstance(model, ZeroPoleGain):
        return np.unique(np.concatenate([roots for row in model.poles for roots in row]))
    if isinstance(model, TransferFunction):
        from realize.kernels.factored import polynomial_roots

        p, m = model.shape
        found = [polynomial_roots(model.exact_or_double("denominator", i, j)) for i in range(p) for j in range(m)]
        return np.unique(np.concatenate(found))
    if isinstance(model, Sections):
        return np.concatenate([np.roots(section[1]) for section in model.sections] or [np.zeros(0)])
    raise TypeError(model.kind)


def finite_ones(model: StateSpace, values: ComplexArray) -> ComplexArray:
    """Return the smallest eigenvalues of a pencil, as many as are finite by an exact count: the others are rounding."""
    from realize.kernels.exact.descriptor import structure

    if model.order > LARGEST_DESCRIPTOR:
        return values
    # the same memory as that of the conversions: the count takes seconds at some hundred states
    found = model.remembered("structure", lambda: structure(model.exact("A"), model.exact("E")))
    count: int = found.finite
    return values[np.argsort(np.abs(values))[:count]]


def exact_fractions(model: Model, cancel: bool = True) -> list[list[tuple[Any, Any]]]:
    """Return the exact (numerator, denominator) of each channel, checked at a random point.

    Parameters
    ----------
    cancel : bool
        Cancel common factors (the denominator is then monic).
    """
    from realize.kernels.exact import polynomials

    fractions = form_fractions(model)
    check_at_a_point(model, fractions)
    if cancel:
        return [[polynomials.reduce_fraction(n, d) for n, d in row] for row in fractions]
    return fractions
