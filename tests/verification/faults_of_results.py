"""Hand-made faults in conversions, forms and the kernels under them."""

from __future__ import annotations

from functools import partial
from typing import Any

import numpy as np
from faults import (
    PR,
    SS,
    TF,
    ZPK,
    Fault,
    after,
    block_diagonal,
    chain,
    dead_time_left,
    factored,
    fitted,
    improper,
    lost_zero,
    matrix,
    measured,
    method,
    not_multiplied,
    on,
    partial_fraction_model,
    plant,
    reduced,
    repeated,
    row,
    section_model,
    single,
    state_model,
    states_with,
    swapped_powers,
    to_six_digits,
    uncorrected,
    without_transpose,
    wrapped,
)

from realize.conversions import builders
from realize.forms import cascade, companion
from realize.kernels.exact import partial_fractions, polynomials, roots, states
from realize.models import DeadTime, TimeBase

POINT = "point check"
EXACT = "exact comparison"


def claim(name: str, *, open_: bool = False) -> str:
    return f"claim {name}" + (", open" if open_ else "")


def delayed_plant() -> Any:
    return plant(dead_time=DeadTime((0.1,), (0.0,), ((0.0,),)))


def sampled_plant() -> Any:
    return plant(time=TimeBase("sampled", period=0.01))


def large_chain() -> Any:
    model = chain()
    return model.with_(C=1e6 * model.C)


def clear_chain() -> Any:
    return chain(D=1.0)


NOISY = partial(fitted, partial(measured, sigma=20.0))


def unstable_kept() -> Any:
    model = chain()
    A = model.A.copy()
    A[-1, -1] = 3.0
    return reduced(lambda: model.with_(A=A), order=4)


def after_first(place: Any) -> Any:
    """The search returns the value at its first frequency."""

    def change(function: Any, error: Any, w: Any, band: Any, **more: Any) -> tuple[float, float]:
        values = error(w[:1])
        return float(values[0]), float(w[0])

    return wrapped(place, "largest", change)


def wrapped_method(place: Any, name: str, change: Any) -> Any:
    own = getattr(place, name)
    return method(place, name, lambda *a, **k: change(own, *a, **k))


BY_ERROR = partial(reduced, chain, error=0.01)

CONVERSIONS = [
    Fault(
        "sign of the numerator",
        "transfer-function row",
        on(factored, TF),
        row(TF, lambda m: m.with_(numerator=[[-n for n in r] for r in m.numerator])),
        claim("response-error"),
    ),
    Fault(
        "coefficients in the wrong order",
        "transfer-function row",
        on(factored, TF),
        row(TF, lambda m: m.with_(numerator=[[n[::-1] for n in r] for r in m.numerator])),
        claim("response-error"),
    ),
    Fault(
        "gain a power of two too large",
        "zero-pole-gain row",
        on(plant, ZPK),
        row(ZPK, lambda m: m.with_(gain=2 * m.gain)),
        claim("response-error"),
    ),
    Fault(
        "zeros moved by 1e-6",
        "zero-pole-gain row",
        on(plant, ZPK),
        row(ZPK, lambda m: m.with_(zeros=[[z * (1 + 1e-6) for z in r] for r in m.zeros])),
        claim("response-error"),
    ),
    Fault(
        "a pole dropped",
        "zero-pole-gain row",
        on(repeated, ZPK),
        row(ZPK, lambda m: m.with_(poles=[[z[1:] for z in r] for r in m.poles])),
        claim("response-error"),
    ),
    Fault(
        "hertz for rad/s",
        "zero-pole-gain row",
        on(plant, ZPK),
        row(ZPK, lambda m: m.with_(poles=[[z / (2 * np.pi) for z in r] for r in m.poles])),
        claim("response-error"),
    ),
    Fault(
        "real part of the residues only",
        "pole-residue row",
        on(plant, PR),
        row(PR, lambda m: m.with_(residues=m.residues.real)),
        claim("response-error"),
    ),
    Fault(
        "residues of the conjugate poles",
        "pole-residue row",
        on(plant, PR),
        row(PR, lambda m: m.with_(residues=m.residues.conj())),
        claim("response-error"),
    ),
    Fault(
        "direct part forgotten",
        "pole-residue row",
        on(plant, PR),
        row(PR, lambda m: m.with_(direct=0 * m.direct)),
        claim("response-error"),
    ),
    Fault(
        "powers of a repeated pole exchanged",
        "pole-residue row",
        on(repeated, PR),
        row(PR, swapped_powers),
        claim("response-error"),
    ),
    Fault(
        "channels transposed",
        "pole-residue row",
        on(matrix, PR),
        row(PR, lambda m: m.with_(residues=m.residues.transpose(0, 2, 1))),
        claim("response-error"),
    ),
    Fault(
        "coefficients of a section exchanged",
        "sections row",
        on(factored, "sections"),
        row("sections", lambda m: m.with_(sections=m.sections[:, :, [0, 2, 1]])),
        claim("response-error"),
    ),
    Fault(
        "gain of the sections forgotten",
        "sections row",
        on(factored, "sections"),
        row("sections", lambda m: m.with_(gain=1.0)),
        claim("response-error"),
    ),
    Fault(
        "D forgotten",
        "builders.state_model",
        on(plant, SS, "cascade"),
        states_with(lambda m: {"D": 0 * m.D}),
        claim("response-error"),
    ),
    Fault(
        "A transposed, B and C not",
        "builders.state_model",
        on(plant, SS, "cascade"),
        states_with(lambda m: {"A": m.A.T.copy()}),
        claim("response-error"),
    ),
    Fault(
        "E ignored",
        "builders.state_model",
        on(improper, SS, "cascade"),
        states_with(lambda m: {"E": None}),
        claim("response-error"),
    ),
    Fault(
        "channels swapped",
        "builders.state_model",
        on(matrix, SS, "modal"),
        states_with(lambda m: {"C": m.C[::-1]}),
        claim("peak-error"),
    ),
    Fault(
        "dead time dropped",
        "zero-pole-gain row",
        on(delayed_plant, ZPK),
        row(ZPK, dead_time_left),
        claim("response-error"),
    ),
    Fault(
        "period off by a rounding",
        "transfer-function row",
        on(sampled_plant, ZPK),
        row(ZPK, lambda m: m.with_(time=TimeBase("sampled", period=0.01 * (1 + 2**-52)))),
        claim("response-error"),
    ),
    Fault(
        "numerators not brought over the common denominator",
        "builders._over_common_denominator",
        on(matrix, TF, None, True),
        method(builders, "_over_common_denominator", not_multiplied),
        claim("response-error"),
    ),
    Fault(
        "coefficients in single precision",
        "builders.rounded",
        on(factored, TF),
        after(builders, "rounded", single),
        claim("response-error"),
    ),
]

FORMS = [
    Fault(
        "coupling between sections dropped",
        "forms.cascade_states",
        on(plant, SS, "cascade"),
        after(builders, "cascade_states", block_diagonal),
        claim("response-error"),
    ),
    Fault(
        "sign of the output row",
        "forms.cascade_states",
        on(plant, SS, "cascade"),
        after(builders, "cascade_states", lambda p: (p[0], p[1], -p[2], p[3])),
        claim("response-error"),
    ),
    Fault(
        "a zero lost in pairing",
        "forms.group_roots",
        on(plant, SS, "cascade"),
        after(builders, "group_roots", lost_zero),
        claim("response-error"),
    ),
    Fault(
        "factor 2 of a pair forgotten",
        "forms.cascade.monic",
        on(plant, SS, "cascade"),
        after(cascade, "monic", lambda c: [c[0], c[1] / 2, c[2]] if len(c) == 3 else c),
        claim("response-error"),
    ),
    Fault(
        "factor 2 of a conjugate pair forgotten",
        "forms.modal_states",
        on(plant, SS, "modal"),
        after(builders, "modal_states", lambda p: (p[0], p[1], p[2] / 2, p[3])),
        claim("peak-error"),
    ),
    Fault(
        "blocks of pairs transposed",
        "forms.modal_states",
        on(plant, SS, "modal"),
        after(builders, "modal_states", without_transpose),
        claim("peak-error"),
    ),
    Fault(
        "output row without - b0 a",
        "forms.companion",
        on(plant, SS, "controllable-companion"),
        method(companion, "_normal", uncorrected),
        claim("response-error"),
    ),
    Fault(
        "sign of the polynomial part",
        "forms.append_polynomial_part",
        on(improper, SS, "cascade"),
        after(builders, "append_polynomial_part", lambda p: (*p[:1], -p[1], *p[2:])),
        claim("response-error"),
    ),
]

KERNELS = [
    Fault(
        "D dropped from the fractions of a state model",
        "kernels.exact.states.transfer_matrix",
        on(state_model, TF),
        wrapped(states, "transfer_matrix", lambda f, A, B, C, D, E: f(A, B, C, [[(0, 1)] * len(r) for r in D], E)),
        POINT,
    ),
    Fault(
        "channels of a state model transposed",
        "kernels.exact.states.transfer_matrix",
        on(partial(state_model, 2, 2), TF),
        after(states, "transfer_matrix", lambda found: ([list(r) for r in zip(*found[0], strict=True)], found[1])),
        POINT,
    ),
    Fault(
        "E ignored in the fractions",
        "kernels.exact.states.transfer_matrix",
        on(partial(state_model, E=True), TF),
        wrapped(states, "transfer_matrix", lambda f, A, B, C, D, E: f(A, B, C, D, None)),
        POINT,
    ),
    Fault(
        "imaginary parts of roots dropped",
        "kernels.exact.polynomials.from_roots",
        on(factored, TF),
        wrapped(polynomials, "from_roots", lambda f, r: f([(z[0], (0, 1)) for z in r])),
        POINT,
    ),
    Fault(
        "factor 2 in a sum of partial fractions",
        "kernels.exact.polynomials.from_partial_fractions",
        on(partial_fraction_model, TF),
        after(polynomials, "from_partial_fractions", lambda p: (2 * p[0], p[1])),
        POINT,
    ),
    Fault(
        "gain left out of a product of sections",
        "kernels.exact.polynomials.from_sections",
        on(section_model, TF),
        wrapped(polynomials, "from_sections", lambda f, s, g: f(s, (1, 1))),
        POINT,
    ),
    Fault(
        "residues halved",
        "kernels.exact.partial_fractions.residues",
        on(plant, PR),
        after(partial_fractions, "residues", lambda p: ([(r, [v / 2 for v in x]) for r, x in p[0]], p[1])),
        claim("response-error"),
    ),
    Fault(
        "roots to six digits",
        "kernels.exact.roots.roots",
        on(plant, ZPK),
        after(roots, "roots", to_six_digits),
        claim("response-error"),
    ),
]
