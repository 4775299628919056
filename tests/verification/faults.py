"""Hand-made faults, one place each, and the steps that have to show them; `test_faults` asserts what catches each."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import partial
from typing import Any

import numpy as np
import pytest
from flint import fmpq

from realize import reduction
from realize.conversions import builders, route
from realize.kernels.exact import states
from realize.models import (
    DeadTime,
    FrequencyResponse,
    Model,
    PoleResidue,
    Sections,
    StateSpace,
    TimeBase,
    TransferFunction,
    ZeroPoleGain,
)
from realize.schema import Claim
from realize.steps import convert, fit, reduce
from realize.verification import Pair, View, bands, conversion, conversion_claims, small, views

Patch = pytest.MonkeyPatch
Inject = Callable[[Patch], None]


@dataclass(frozen=True)
class Step:
    """A step that was made: source and result (or data and result), its claims, what error was asked."""

    source: Model
    result: Model
    claims: list[Claim]
    asked: float | None = None


Scenario = Callable[[], list[Step]]


class Inconsistent(AssertionError):
    """Two ways to the same number disagree."""


@dataclass(frozen=True)
class Fault:
    """What is wrong, where, the steps that show it, how it is injected, and what catches it."""

    says: str
    where: str
    scenario: Scenario
    inject: Inject
    caught: str


# plants


def plant(**more: Any) -> TransferFunction:
    """3 (s + 2)(s^2 + 0.2 s + 9) / ((s + 1)(s^2 + 0.5 s + 4)(s + 10)) + 0.5."""
    numerator = 3 * np.polymul([1.0, 2.0], [1.0, 0.2, 9.0])
    denominator = np.polymul(np.polymul([1.0, 1.0], [1.0, 0.5, 4.0]), [1.0, 10.0])
    return TransferFunction(
        numerator=np.polyadd(numerator, 0.5 * denominator).tolist(), denominator=denominator.tolist(), **more
    )


def factored() -> ZeroPoleGain:
    return ZeroPoleGain(zeros=[-2.0, -0.1 + 3j, -0.1 - 3j], poles=[-1.0, -10.0, -0.25 + 2j, -0.25 - 2j], gain=3.0)


def repeated() -> TransferFunction:
    return TransferFunction(numerator=[1.0, 5.0], denominator=np.polymul([1.0, 2.0, 1.0], [1.0, 3.0]).tolist())


def matrix() -> TransferFunction:
    return TransferFunction(
        numerator=[[[1.0], [2.0, 1.0]], [[3.0], [4.0]]],
        denominator=[[[1.0, 1.0], [1.0, 5.0, 6.0]], [[1.0, 2.0], [1.0, 1.0]]],
    )


def improper() -> TransferFunction:
    return TransferFunction(numerator=[1.0, 3.0, 5.0], denominator=[1.0, 1.0])


def partial_fraction_model() -> PoleResidue:
    return PoleResidue(
        poles=[-1.0, -0.5 + 2j, -0.5 - 2j],
        residues=np.array([1.0, 0.5 + 1j, 0.5 - 1j]).reshape(3, 1, 1),
        direct=[[0.25]],
    )


def section_model() -> Sections:
    return Sections(sections=[[[0.0, 1.0, 2.0], [1.0, 0.5, 4.0]], [[1.0, 0.2, 9.0], [1.0, 11.0, 10.0]]], gain=3.0)


def state_model(p: int = 1, m: int = 1, E: bool = False) -> StateSpace:
    rng = np.random.default_rng(5)
    A = rng.normal(size=(4, 4)) - 3 * np.eye(4)
    more = {"E": np.eye(4) + 0.3 * rng.normal(size=(4, 4))} if E else {}
    return StateSpace(A=A, B=rng.normal(size=(4, m)), C=rng.normal(size=(p, 4)), D=rng.normal(size=(p, m)), **more)


def chain(n: int = 6, D: float = 0.0) -> StateSpace:
    """A line of equal masses of heat, in and out at one end: symmetric, so that a cut costs exactly twice its tail."""
    A = -2 * np.eye(n) + np.eye(n, k=1) + np.eye(n, k=-1)
    B = np.zeros((n, 1))
    B[0] = 1.0
    return StateSpace(A=A, B=B, C=B.T.copy(), D=[[D]])


def not_well_conditioned() -> StateSpace:
    """E nearly singular: what dividing by it costs is far more than rounding."""
    return StateSpace(
        E=[[0.15390211954438654, -0.29972492291791253], [0.4300719849599151, -0.8375662337595998]],
        A=[[69.42090251533902, 35.649205855732205], [193.993223179139, 99.61997124692815]],
        B=[[0.4063040031276605], [1.1353964974882431]],
        C=[[-1.5507257423456264, 0.33616301398916754]],
        D=[[-2.4265226890631]],
    )


def measured(unit: str = "rad/s", dead: float = 0.0, sigma: float = 0.0) -> FrequencyResponse:
    model = partial_fraction_model()
    w = np.geomspace(0.1, 30.0, 40)
    values = model.rational_part(1j * w) * np.exp(-1j * w * dead)[:, None, None]
    more: dict[str, Any] = {}
    if dead:
        more["dead_time"] = DeadTime((0.0,), (0.0,), ((dead,),))
    if sigma:
        noise = np.random.default_rng(3).normal(size=(2, 40, 1, 1))
        values = 1e3 * (values + 0.01 * (noise[0] + 1j * noise[1]))
        more["deviation"] = np.full(values.shape, sigma)
    return FrequencyResponse(
        frequency=w / (2 * np.pi) if unit == "Hz" else w, frequency_unit=unit, response=values, **more
    )


# steps


def converted(make: Callable[[], Model], to: str, form: str | None = None, common: bool = False) -> list[Step]:
    source = make()
    made = convert(source, to, form=form, common_denominator=common)
    return [Step(source, made.model, made.receipt.claims)]


def on(make: Callable[[], Model], to: str, form: str | None = None, common: bool = False) -> Scenario:
    return partial(converted, make, to, form, common)


def reduced(make: Callable[[], Model], **options: Any) -> list[Step]:
    source = make()
    made = reduce(source, **options)
    return [Step(source, made.model, made.receipt.claims, options.get("error"))]


def fitted(data: Callable[[], FrequencyResponse], limits: dict[str, float] | None = None) -> list[Step]:
    source = data()
    made = fit(source, order=3, to="pole-residue", limits=limits)
    return [Step(source, made.model, made.receipt.claims)]


FIT = partial(fitted, measured, {"rms-misfit": 1e-6})
LOOSE = {"response-error": 2.0, "peak-error": 2.0, "end-behaviour": 2.0}


def compared(source: Model, result: Model, limit: float = 2.0) -> list[Step]:
    """Claims about two models that differ; limits that they keep."""
    return [Step(source, result, conversion_claims(source, result, True, dict.fromkeys(LOOSE, limit)))]


def differing() -> list[Step]:
    """A coefficient off by 1e-6."""
    good, bad = factored(), replace(factored(), gain=[[3.0 * (1 + 1e-6)]], zeros=[[[-2.0001, -0.1 + 3j, -0.1 - 3j]]])
    return compared(good, bad)


def differing_sampled() -> list[Step]:
    """The relative error 1e-4 / |z + 0.3| is largest at z = -1."""
    time = TimeBase("sampled", period=0.01)
    a = TransferFunction(numerator=[1.0, 0.3], denominator=[1.0, -1.9, 0.95], time=time)
    return compared(a, a.with_(numerator=[1.0, 0.3001]))


def differing_at_the_edge() -> list[Step]:
    """(s + 5) against (1.1 s + 5): |dG|/|G| = 0.1 |s| / |s + 5| grows up to the edge of the band, 50 rad/s."""
    source = TransferFunction(numerator=[1.0, 5.0], denominator=[1.0, 3.0, 2.0])
    return compared(source, source.with_(numerator=[1.1, 5.0]))


def differing_matrix() -> list[Step]:
    """The channels differ in the second row only."""
    source = matrix()
    return compared(source, source.with_(numerator=[[[1.0], [2.0, 1.0]], [[3.03], [4.0]]]))


def notch() -> list[Step]:
    """A pole with damping 1e-6 at the zero on the axis: 1e-9 / 2e-6 over |G| at 1 - 1e-4 rad/s, 2e-4."""
    source = TransferFunction(numerator=[1.0, 0.0, 1.0], denominator=[1.0, 1.0, 1.0])
    light = [1.0, 2e-6, 1.0]
    numerator = np.polyadd(np.polymul([1.0, 0.0, 1.0], light), 1e-9 * np.array([1.0, 1.0, 1.0]))
    result = TransferFunction(numerator=numerator.tolist(), denominator=np.polymul([1.0, 1.0, 1.0], light).tolist())
    return compared(source, result, 100.0)


def differentiator() -> list[Step]:
    """A zero leaves the origin: infinite, whatever the response says."""
    return must_fail(
        TransferFunction(numerator=[1.0, 0.0], denominator=[1.0, 1.0]),
        TransferFunction(numerator=[1.0, 1e-12], denominator=[1.0, 1.0]),
        "end-behaviour",
    )


def axis_pole() -> list[Step]:
    return must_fail(
        TransferFunction(numerator=[1.0], denominator=[1.0, 0.0, 4.0]),
        TransferFunction(numerator=[1.0], denominator=[1.0, 2.0**-60, 4.0]),
        "end-behaviour",
    )


def must_fail(source: Model, result: Model, name: str, limit: float = 1e-9) -> list[Step]:
    """A wrong result whose claim has to fail: a worked example of the definitions."""
    claims = conversion_claims(source, result, True, dict.fromkeys(LOOSE, limit))
    if next(claim for claim in claims if claim.name == name).holds is not False:
        raise Inconsistent(f"{name} of a worked example does not fail")
    return []


def delayed() -> list[Step]:
    dead = DeadTime((0.1,), (0.0,), ((0.0,),))
    return must_fail(plant(dead_time=dead), plant(), "response-error")


def twice() -> list[Step]:
    return must_fail(factored(), replace(factored(), gain=[[6.0]]), "response-error")


def less_than(bound: float | None, truth: float) -> bool:
    return bound is not None and bound < truth * (1 - 1e-9)


def proof_of_less() -> list[Step]:
    """A bound far below the truth is not proved: at one interval, and over the band."""
    pair = Pair(View(factored()), View(replace(factored(), gain=[[3.3]])))
    band = bands.channel_band(pair.source, 0, 0)
    proof, intervals = pair.proof(None), bands.intervals_of(pair, band, [], None)
    if less_than(proof.bound(0.01, intervals), 0.1):
        raise Inconsistent("a relative error of 0.1 is proved to be less")
    # the difference is largest where s is large: the bound has to hold there too
    a, b = plant(), plant().with_(numerator=np.polyadd(plant().numerator[0][0], [0.01, 0, 0, 0, 0]).tolist())
    late = Pair(View(a), View(b))
    low = conversion.largest_error(late, bands.Band(0.001, 0.01), [], None)[0]
    band = bands.channel_band(late.source, 0, 0)
    whole = bands.intervals_of(late, band, [], None)
    if less_than(late.proof(None).bound(low, whole), float(late.sizes(np.array([50.0]))[0][0, 0, 0]) / 10):
        raise Inconsistent("the error at the low end is proved for the whole band")
    return []


def small_proof_of_less() -> list[Step]:
    """A bound far below the truth is not proved in the short way for small plants either."""
    pair = Pair(View(factored()), View(replace(factored(), gain=[[3.3]])))
    assert pair.source.fractions is not None and pair.result.fractions is not None
    squares = small._Squares(*pair.source.fractions[0][0], *pair.result.fractions[0][0])
    if less_than(small._bound(squares.relative, squares.M, 0.01, fmpq(0), None, [], []), 0.1):
        raise Inconsistent("a relative error of 0.1 is proved to be less")
    return []


def halved(make: Callable[..., None], squares: Any, *fractions: Any) -> None:
    """Make the squares of a small plant, with half the error."""
    make(squares, *fractions)
    squares.relative, squares.absolute = 4 * squares.relative, 4 * squares.absolute


def both_units() -> list[Step]:
    """The same data in Hz and in rad/s."""
    one, two = fitted(measured)[0], fitted(partial(measured, "Hz"))[0]
    first, second = (np.sort(np.abs(step.result.poles)) for step in (one, two))  # type: ignore[attr-defined]
    if not np.allclose(first, second, rtol=1e-6):
        raise Inconsistent("data in Hz and in rad/s have different poles")
    return [one, two]


# injections


def row(target: str, change: Callable[[Any], Any]) -> Inject:
    """Change what every row of the table with this target makes."""

    def inject(patch: Patch) -> None:
        changed = tuple(
            replace(r, apply=lambda value, task, r=r: change(r.apply(value, task))) if r.target == target else r
            for r in route.ROWS
        )
        patch.setitem(route.TABLES, "exact", changed)
        # the routes that are remembered hold the rows as they were
        patch.setattr(route, "_path", route._path.__wrapped__)

    return inject


def at_length(inject: Inject) -> Inject:
    """Inject where the claims about small plants take the general way too."""

    def both(patch: Patch) -> None:
        patch.setattr(small, "LARGEST", 0)
        inject(patch)

    return both


def wrapped(place: Any, name: str, change: Callable[..., Any]) -> Inject:
    """Replace a function by change(function, *its arguments)."""

    def inject(patch: Patch) -> None:
        patch.setattr(place, name, partial(change, getattr(place, name)))

    return inject


def after(place: Any, name: str, change: Callable[[Any], Any]) -> Inject:
    """Change what a function returns."""
    return wrapped(place, name, lambda function, *a, **k: change(function(*a, **k)))


def method(place: Any, name: str, value: Any) -> Inject:
    return lambda patch: patch.setattr(place, name, value)


def states_with(change: Callable[[StateSpace], dict[str, Any]]) -> Inject:
    """Change the state models that conversions make."""
    return after(builders, "state_model", lambda model: model.with_(**change(model)))


def fit_with(change: Callable[[Any], dict[str, Any]]) -> Inject:
    import realize.fitting

    return after(realize.fitting, "fit_response", lambda found: replace(found, **change(found)))


def reduced_with(change: Callable[[Any], dict[str, Any]]) -> Inject:
    return after(reduction, "reduce_states", lambda found: replace(found, **change(found)))


def uncorrected(numerators: Any, denominator: Any) -> Any:
    """`companion._normal` without b0 a in the output row."""
    n, lead = len(denominator) - 1, denominator[0]
    a = [value / lead for value in denominator[1:]]
    full = [[0] * (n + 1 - len(b)) + [value / lead for value in b] for b in numerators]
    return a, [b[1:] for b in full], [b[0] for b in full]


def not_multiplied(grid: Any) -> Any:
    common = grid[0][0][1]
    for line in grid:
        for _, d in line:
            common = common * (d // common.gcd(d))
    return [[(n, common) for n, _ in line] for line in grid]


def without_transpose(parts: Any) -> Any:
    A, B, C, D = parts[:4]
    return (A.T.copy(), B, C, D, *parts[4:])


def block_diagonal(parts: Any) -> Any:
    A, B, C, D = parts[:4]
    A = A.copy()
    A[2:, :2] = 0.0
    return A, B, C, D


def no_point_check(patch: Patch) -> None:
    patch.setattr(views, "check_at_a_point", lambda model, fractions: None)
    wrapped(states, "transfer_matrix", lambda f, A, B, C, D, E: f(A, B, C, [[(0, 1)] * len(r) for r in D], E))(patch)


def swapped_powers(model: PoleResidue) -> PoleResidue:
    residues = model.residues.copy()
    k = next(i for i, power in enumerate(model.powers) if power == 2)
    residues[[k - 1, k]] = residues[[k, k - 1]]
    return model.with_(residues=residues)


def last_states(function: Any, factors: Any, order: int) -> Any:
    return function(
        replace(factors, values=factors.values[::-1], left=factors.left[:, ::-1], right=factors.right[:, ::-1]), order
    )


def scaled_time(prepared: Any) -> Any:
    return replace(prepared, scaled=replace(prepared.scaled, input=prepared.scaled.input + 2))


def tenfold(peak: Any) -> Any:
    return replace(peak, value=10 * peak.value, upper=10 * peak.upper)


def first_channel(function: Any, self: Any, polynomials_: Any, degree: int) -> Any:
    return function(self, list(polynomials_)[:1], degree)


def to_six_digits(found: Any) -> Any:
    def short(value: complex) -> complex:
        return complex(float(f"{value.real:.6g}"), float(f"{value.imag:.6g}"))

    return [replace(root, value=short(root.value)) for root in found]


def narrow(function: Any, zeros: Any, poles: Any, period: Any, finite: bool) -> Any:
    band = function(zeros, poles, period, finite)
    return replace(band, low=10 * band.low, high=band.high / 10)


def single(found: Any) -> Any:
    doubles, strings = found
    return [float(np.float32(value)) for value in doubles], strings


def lost_zero(found: Any) -> Any:
    return [replace(section, zeros=()) for section in found]


def dead_time_left(model: Any, **_: Any) -> Any:
    return model.with_(dead_time=None)


TF, ZPK, PR, SS = "transfer-function", "zero-pole-gain", "pole-residue", "state-space"
