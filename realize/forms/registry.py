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

from realize.forms.balanced import balanced_form, input_normal_form, output_normal_form
from realize.forms.coordinates import Array, Coordinates, Setting
from realize.forms.hessenberg import controller_hessenberg_states, observer_hessenberg_states
from realize.forms.linear_quadratic_balanced import linear_quadratic_balanced_form
from realize.forms.scaled import scaled_states
from realize.forms.schur import real_schur
from realize.forms.staircase import kalman_states, observable_staircase, reachable_staircase


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
    """

    name: str
    apply: Callable[[Array, Array, Array, Array, Setting], Coordinates]
    source: str
    says: str
    instead: str = "scaled"
    from_states_only: bool = False

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
}

TABLE: dict[str, Form] = {
    form.name: form
    for form in (
        Form(
            "scaled",
            scaled_states,
            "Parlett & Reinsch 1969",
            "each state in a unit of its own, a power of two",
            "cascade",
        ),
        Form(
            "schur",
            real_schur,
            "Golub & Van Loan, Matrix Computations; Bai & Demmel 1993",
            "orthogonal rotation to real Schur form, blocks ordered",
        ),
        Form(
            "controller-hessenberg",
            controller_hessenberg_states,
            "Van Dooren & Verhaegen 1985",
            "orthogonal rotation: B a triangle on top of zeros, A block Hessenberg",
        ),
        Form(
            "observer-hessenberg",
            observer_hessenberg_states,
            "Van Dooren & Verhaegen 1985",
            "orthogonal rotation: C a triangle behind zeros, A block Hessenberg",
        ),
        Form(
            "reachable-staircase",
            reachable_staircase,
            "Varga 1981; Van Dooren 1981; Rosenbrock 1970",
            "orthogonal rotation by what inputs reach in steps, unreachable states last",
        ),
        Form(
            "observable-staircase",
            observable_staircase,
            "Varga 1981; Van Dooren 1981; Rosenbrock 1970",
            "orthogonal rotation by what outputs see in steps, unobservable states last",
        ),
        Form(
            "kalman",
            kalman_states,
            "Kalman 1963",
            "four parts: reachable and observable, reachable only, observable only, neither",
        ),
        Form(
            "balanced",
            balanced_form,
            "Moore 1981; Tombs & Postlethwaite 1987",
            "both Gramians equal and diagonal, from their square roots",
            "schur",
        ),
        Form(
            "input-normal",
            input_normal_form,
            "Moore 1981",
            "controllability Gramian I, observability Gramian diagonal",
            "schur",
        ),
        Form(
            "output-normal",
            output_normal_form,
            "Moore 1981",
            "observability Gramian I, controllability Gramian diagonal",
            "schur",
        ),
        Form(
            "linear-quadratic-balanced",
            linear_quadratic_balanced_form,
            "Jonckheere & Silverman 1983",
            "both Riccati solutions equal and diagonal; unstable models too",
            "schur",
        ),
    )
}
