"""The forms that are changes of coordinates of a state model, in one table.

A form that is not in the table (`cascade`, the companion forms of coefficients) is built from poles, zeros and
coefficients by rows of `realize.conversions.route`. A form in the table starts from matrices A, B, C, D: those of a
state-space source, or those of the default realization of any other kind.

How a form is added
-------------------
1. Write a function ``(A, B, C, D, setting) -> Coordinates`` in a module of its own beside this one. `setting`
   (`realize.forms.coordinates.Setting`) has the sampling period, the ordering asked for, and whether the form was asked
   for by force. `coordinates.take_units_out` gives the matrices in units of their own, and its `restored` puts the
   units back and returns the `Coordinates`; `coordinates.modes` lists eigenvalues with frequency and damping. What the
   form has to say goes into `details` as it will stand in the receipt, beside form, condition, transform and way back.
   Order 0 is a model too. A function raises `Refused` where the form does not exist, and where its transform is beyond
   doubles unless ``setting.force``; it never checks the response: the claims of the conversion do that, and
   `convert` refuses a result that is worse than the default limit of peak-error.
2. Add a row to ``TABLE`` below: spelling, function, source, what it says (shown in the documentation), the form to use
   ``instead`` where this one is refused. ``from_states_only`` leaves other kinds to the rows of the conversion table.
3. Add the spelling to ``FORMS`` in `realize.schema.verbs`: the command line and the rows of the conversion table appear
   by themselves. ``STRUCTURED`` in `realize.schema.claims` is for forms whose entries keep every channel accurate far
   above its poles; dense coordinates do not.
4. Write ``docs/methods/NAME.rst`` (or name a shared page in ``PAGES``) with ``--form NAME`` in it, tests in
   ``tests/forms``, a check in ``tests/published``.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from realize.later import Later

if TYPE_CHECKING:
    from realize.forms.coordinates import Array, Coordinates, Setting


@dataclass(frozen=True)
class Form:
    """One form: spelling, function, source, one sentence, what to use where it is refused.

    Attributes
    ----------
    name : str
    apply : function (A, B, C, D, setting) -> Coordinates
    source : str
        Where the method was published.
    says : str
        What it does, as a row of the conversion table.
    instead : str
        The form that is named where this one is refused.
    from_states_only : bool
        True where other kinds reach the form by a row of the conversion table.
    exact : bool
        True where the function takes exact matrices (nested lists of integer ratios, or rational ones) as well.
    otherwise : bool
        True where a state model that has no transform to the form (`NoTransform`) still gets it from its response, by
        the rows of the conversion table.
    in_doubles : function, optional
        The same form in doubles, for matrices beyond the budget of exact arithmetic.
    """

    name: str
    apply: Callable[[Any, Any, Any, Any, Setting], Coordinates]
    source: str
    says: str
    instead: str = "scaled"
    from_states_only: bool = False
    exact: bool = False
    otherwise: bool = False
    in_doubles: Callable[[Array, Array, Array, Array, Setting], Coordinates] | None = None

    @property
    def page(self) -> str:
        """Name of the page under ``docs/methods`` that describes the form."""
        return PAGES.get(self.name, self.name)


#: Pages of forms that share one.
PAGES: dict[str, str] = {
    "input-normal": "balanced",
    "output-normal": "balanced",
    "controller-hessenberg": "hessenberg",
    "observer-hessenberg": "hessenberg",
    "reachable-staircase": "staircase",
    "observable-staircase": "staircase",
    "controllable-companion": "companion",
    "observable-companion": "companion",
    "observability": "controllability",
}

TABLE: dict[str, Form] = {
    form.name: form
    for form in (
        Form(
            "scaled",
            Later("realize.forms.scaled", "scaled_states"),
            "Parlett & Reinsch 1969",
            "each state in a unit of its own, a power of two",
            "cascade",
        ),
        Form(
            "schur",
            Later("realize.forms.schur", "real_schur"),
            "Golub & Van Loan, Matrix Computations; Bai & Demmel 1993",
            "orthogonal rotation to real Schur form, blocks ordered",
        ),
        Form(
            "controller-hessenberg",
            Later("realize.forms.hessenberg", "controller_hessenberg_states"),
            "Van Dooren & Verhaegen 1985",
            "orthogonal rotation: B a triangle on top of zeros, A block Hessenberg",
        ),
        Form(
            "observer-hessenberg",
            Later("realize.forms.hessenberg", "observer_hessenberg_states"),
            "Van Dooren & Verhaegen 1985",
            "orthogonal rotation: C a triangle behind zeros, A block Hessenberg",
        ),
        Form(
            "reachable-staircase",
            Later("realize.forms.staircase", "reachable_staircase"),
            "Varga 1981; Van Dooren 1981; Rosenbrock 1970",
            "orthogonal rotation by what inputs reach in steps, unreachable states last",
        ),
        Form(
            "observable-staircase",
            Later("realize.forms.staircase", "observable_staircase"),
            "Varga 1981; Van Dooren 1981; Rosenbrock 1970",
            "orthogonal rotation by what outputs see in steps, unobservable states last",
        ),
        Form(
            "kalman",
            Later("realize.forms.staircase", "kalman_states"),
            "Kalman 1963",
            "four parts: reachable and observable, reachable only, observable only, neither",
        ),
        Form(
            "balanced",
            Later("realize.forms.balanced", "balanced_form"),
            "Moore 1981; Tombs & Postlethwaite 1987",
            "both Gramians equal and diagonal, from their square roots",
            "schur",
        ),
        Form(
            "input-normal",
            Later("realize.forms.balanced", "input_normal_form"),
            "Moore 1981",
            "controllability Gramian I, observability Gramian diagonal",
            "schur",
        ),
        Form(
            "output-normal",
            Later("realize.forms.balanced", "output_normal_form"),
            "Moore 1981",
            "observability Gramian I, controllability Gramian diagonal",
            "schur",
        ),
        Form(
            "linear-quadratic-balanced",
            Later("realize.forms.linear_quadratic_balanced", "linear_quadratic_balanced_form"),
            "Jonckheere & Silverman 1983",
            "both Riccati solutions equal and diagonal; unstable models too",
            "schur",
        ),
        Form(
            "modal",
            Later("realize.forms.modal_blocks", "modal_form"),
            "Bavely & Stewart 1979; from partial fractions Gilbert 1963",
            "one block for each oscillation, clusters kept together",
            "schur",
            from_states_only=True,
            otherwise=True,
        ),
        Form(
            "jordan",
            Later("realize.forms.jordan", "jordan_form"),
            "Gantmacher 1959, The Theory of Matrices",
            "real Jordan form, multiplicities decided exactly",
            "modal",
            from_states_only=True,
            exact=True,
        ),
        Form(
            "controllable-companion",
            Later("realize.forms.controllability", "controllable_companion_form"),
            "Kailath 1980, Linear Systems",
            "coefficients as entries, each rounded once; one input",
            "cascade",
            from_states_only=True,
            exact=True,
            otherwise=True,
        ),
        Form(
            "observable-companion",
            Later("realize.forms.controllability", "observable_companion_form"),
            "Kailath 1980, Linear Systems",
            "coefficients as entries, each rounded once; one output",
            "cascade",
            from_states_only=True,
            exact=True,
            otherwise=True,
        ),
        Form(
            "multi-input-companion",
            Later("realize.forms.controllability", "multi_input_companion_form"),
            "Luenberger 1967; Kailath 1980",
            "a companion block for each input, sizes are the controllability indices",
            "schur",
            from_states_only=True,
            exact=True,
            otherwise=True,
            in_doubles=Later("realize.forms.luenberger", "luenberger_form"),
        ),
        Form(
            "controllability",
            Later("realize.forms.controllability", "controllability_form"),
            "Kailath 1980, Linear Systems",
            "basis B, A B, ...: Markov parameters in C; one input",
            "cascade",
            from_states_only=True,
            exact=True,
            otherwise=True,
        ),
        Form(
            "observability",
            Later("realize.forms.controllability", "observability_form"),
            "Kailath 1980, Linear Systems",
            "basis dual to C, C A, ...: Markov parameters in B; one output",
            "cascade",
            from_states_only=True,
            exact=True,
            otherwise=True,
        ),
    )
}
