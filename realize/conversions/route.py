"""The table of conversions, and the route from a kind to another.

Nodes are the kinds of models, state models in particular coordinates (``state-space:cascade``), and two exact
intermediates: ``exact-fractions`` (numerator and denominator of each channel over the rationals) and ``factors``
(poles, zeros and gain of each channel). Exact rows lose nothing; rounding rows round each number of their result once.
"""

from __future__ import annotations

import heapq
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from functools import cache, partial
from typing import TYPE_CHECKING, Any

from realize.conversions import builders
from realize.conversions.changed import Changed
from realize.errors import Refused, UsageError
from realize.forms.registry import TABLE
from realize.later import FunctionsOf, Later
from realize.models import MatrixFraction, Model, SecondOrder, StateSpace
from realize.verification.views import EXACT_BUDGET, forming_cost, predicted_cost

if TYPE_CHECKING:
    from realize.conversions import descriptor, doubles, matrix_fraction, minimal_states, second_order
else:
    # what a conversion does not use is not imported
    descriptor = FunctionsOf("realize.conversions.descriptor")
    doubles = FunctionsOf("realize.conversions.doubles")
    matrix_fraction = FunctionsOf("realize.conversions.matrix_fraction")
    minimal_states = FunctionsOf("realize.conversions.minimal_states")
    second_order = FunctionsOf("realize.conversions.second_order")


@dataclass(frozen=True)
class Task:
    """What is wanted: source, target kind, coordinates, one denominator or not, decimal digits if any, arithmetic.

    `ordering` is that of the blocks of a form that leaves it open; `force` gives a form even where it ruins the model.
    """

    model: Model
    to: str
    form: str | None = None
    common_denominator: bool = False
    digits: int | None = None
    arithmetic: str = "auto"
    ordering: str | None = None
    force: bool = False
    side: str | None = None
    #: The form is to come from the response of a state model, because there is no transform from its states.
    without_transform: bool = False
    #: What the rows have to say: sentences for people, and details of the receipt.
    notes: list[str] = field(default_factory=list, compare=False)
    details: dict[str, Any] = field(default_factory=dict, compare=False)

    @property
    def changes_coordinates(self) -> bool:
        """True where the form is a change of coordinates of a state model (`realize.forms.registry`)."""
        form = TABLE.get(self.form or "")
        if form is None or self.without_transform:
            return False
        return isinstance(self.model, StateSpace) or not form.from_states_only

    @property
    def target(self) -> str:
        """Name of the target node."""
        if self.to != "state-space":
            return self.to
        form = self.form or default_form(self.model)
        if form == "minimal" and choose_arithmetic(self).arithmetic == "double":
            form = "modal"
        return f"state-space:{form}" if form else "state-space"


@dataclass(frozen=True)
class Row:
    """One conversion: from node, to node, the function, whether it is exact, and what it does."""

    source: str
    target: str
    apply: Callable[[Any, Task], Any]
    exact: bool
    says: str


#: Rows that stand in both tables: the work is the same in either arithmetic.
GAIN_AS_IT_STANDS = Row(
    "factors", "zero-pole-gain", builders.zero_pole_gain, True, "poles, zeros and gain as they stand"
)
PAIRED_SECTIONS = Row(
    "factors", "sections", builders.sections, False, "zeros paired with poles, each coefficient rounded once"
)
SECTIONS_IN_SERIES = Row(
    "sections", "state-space:cascade", builders.cascade_of_sections, False, "the sections as they stand, in series"
)
MODAL_BLOCKS = Row("pole-residue", "state-space:modal", builders.modal, False, "one block for each pole or pair")

MINIMAL = "minimal states of each pole, exactly of the McMillan degree; modal, cascade or balanced as proves best"
MASS_AS_IT_STANDS = Row(
    "second-order",
    "state-space",
    second_order.states_from_second_order,
    False,
    "positions and velocities as states; the mass matrix inverted only where that is harmless",
)
BLOCKS_READ_OFF = Row(
    "state-space",
    "second-order",
    second_order.second_order_from_states,
    True,
    "mass, damping and stiffness where they stand as blocks in E and A",
)

MODES = Row(
    "pole-residue",
    "second-order",
    second_order.second_order_from_residues,
    False,
    "a coordinate for each mode: unit mass, diagonal damping and stiffness",
)

#: From a state model to one in the same or fewer states: used by itself, never on the way to anything else.
SMALLEST_DESCRIPTOR = Row(
    "state-space",
    "state-space",
    descriptor.smallest_descriptor,
    False,
    "algebraic states eliminated, E divided out where that is harmless, a polynomial part by itself",
)

ROWS: tuple[Row, ...] = (
    Row("matrix-fraction", "exact-fractions", builders.fractions, True, "exact N adj(D) (or adj(D) N) over det(D)"),
    Row(
        "exact-fractions",
        "matrix-fraction",
        matrix_fraction.matrix_fraction,
        False,
        "coprime and reduced, from the dependent columns of the Hankel matrix; each coefficient rounded once",
    ),
    Row(
        "matrix-fraction",
        "state-space",
        matrix_fraction.states_from_fraction,
        False,
        "controller form (right) or observer form (left) of the coprime, reduced fraction",
    ),
    MASS_AS_IT_STANDS,
    BLOCKS_READ_OFF,
    MODES,
    Row(
        "second-order",
        "exact-fractions",
        builders.fractions,
        True,
        "exact C adj(P) F + G det(P) over det(P), P = s^2 M + s D + K",
    ),
    Row("transfer-function", "exact-fractions", builders.fractions, True, "coefficients as exact rationals"),
    Row("zero-pole-gain", "exact-fractions", builders.fractions, True, "exact products of the factors"),
    Row("pole-residue", "exact-fractions", builders.fractions, True, "exact sum of the partial fractions"),
    Row("sections", "exact-fractions", builders.fractions, True, "exact product of the sections"),
    Row(
        "state-space",
        "exact-fractions",
        builders.fractions,
        True,
        "exact C adj(sE - A) B + D det(sE - A) over det(sE - A)",
    ),
    Row("zero-pole-gain", "factors", builders.factors_as_given, True, "poles, zeros and gain as they stand"),
    Row(
        "exact-fractions",
        "factors",
        builders.factors_from_fractions,
        False,
        "certified poles and zeros, each rounded once",
    ),
    Row("exact-fractions", "transfer-function", builders.transfer_function, False, "each coefficient rounded once"),
    Row(
        "exact-fractions",
        "pole-residue",
        builders.pole_residue,
        False,
        "certified poles and residues, each rounded once",
    ),
    GAIN_AS_IT_STANDS,
    PAIRED_SECTIONS,
    Row("factors", "state-space:cascade", builders.cascade, False, "sections in series, each entry rounded once"),
    SECTIONS_IN_SERIES,
    MODAL_BLOCKS,
    Row(
        "exact-fractions",
        "state-space:controllable-companion",
        builders.controllable,
        False,
        "coefficients as entries, each rounded once",
    ),
    Row(
        "exact-fractions",
        "state-space:observable-companion",
        builders.observable,
        False,
        "coefficients as entries, each rounded once",
    ),
    Row("exact-fractions", "state-space:minimal", minimal_states.minimal_modal, False, MINIMAL),
    Row("pole-residue", "state-space:minimal", minimal_states.minimal_modal, False, MINIMAL),
)

#: Forms of exact matrices, from exact fractions; the companion forms have rows of their own.
EXACT_FORMS = ("jordan", "multi-input-companion", "controllability", "observability")
ROWS += tuple(
    Row(
        "exact-fractions",
        f"state-space:{name}",
        partial(Later("realize.conversions.exact_coordinates", "form_of_fractions"), name=name),
        False,
        f"exact realization; {TABLE[name].says}",
    )
    for name in EXACT_FORMS
)

#: Rows in double arithmetic: nothing exact is formed.
DOUBLE_ROWS: tuple[Row, ...] = (
    MASS_AS_IT_STANDS,
    BLOCKS_READ_OFF,
    MODES,
    Row("zero-pole-gain", "factors", doubles.factors_as_given, True, "poles, zeros and gain as they stand"),
    Row(
        "transfer-function",
        "factors",
        doubles.factors_from_coefficients,
        False,
        "eigenvalues of balanced companion matrices",
    ),
    Row("sections", "factors", doubles.factors_from_sections, False, "roots of each section by the quadratic formula"),
    Row(
        "state-space",
        "factors",
        doubles.factors_from_states,
        False,
        "eigenvalues, and finite zeros channel by channel after deflation of those at infinity",
    ),
    Row("pole-residue", "factors", doubles.factors_from_residues, False, "finite zeros of the modal state model"),
    Row("state-space", "pole-residue", doubles.residues_from_states, False, "eigenvalues and eigenvectors"),
    GAIN_AS_IT_STANDS,
    Row("factors", "transfer-function", doubles.transfer_function, False, "factors multiplied out"),
    Row("factors", "pole-residue", doubles.pole_residue, False, "products of differences of poles and zeros"),
    PAIRED_SECTIONS,
    Row("factors", "state-space:cascade", doubles.cascade, False, "sections in series"),
    SECTIONS_IN_SERIES,
    MODAL_BLOCKS,
    Row(
        "transfer-function",
        "state-space:controllable-companion",
        doubles.controllable,
        False,
        "coefficients as entries",
    ),
    Row("transfer-function", "state-space:observable-companion", doubles.observable, False, "coefficients as entries"),
)

#: Changes of coordinates: from the states of the source, and from the realizations that stand for other kinds.
COORDINATE_ROWS: tuple[Row, ...] = tuple(
    Row(
        source,
        f"state-space:{name}",
        partial(Later("realize.conversions.coordinates", "change"), name=name, of_source=source == "state-space"),
        False,
        form.says,
    )
    for name, form in TABLE.items()
    for source in ("state-space", "state-space:cascade", "state-space:modal", "state-space:minimal")
    if source == "state-space" or not form.from_states_only
)

#: Kinds and coordinates that doubles cannot carry at an order beyond the budget: used in doubles only when asked for.
COEFFICIENTS = ("transfer-function", "state-space:controllable-companion", "state-space:observable-companion")


@dataclass(frozen=True)
class Choice:
    """Which arithmetic a conversion uses, and the numbers that decided."""

    arithmetic: str
    asked: str
    predicted: float
    budget: float
    note: str = ""

    @property
    def over(self) -> bool:
        """True where the predicted operations exceed the budget."""
        return self.predicted > self.budget

    @property
    def words(self) -> str:
        """The choice and why, as one sentence."""
        if self.note:
            return f"{self.arithmetic} arithmetic: {self.note}"
        numbers = f"about {self.predicted:.1e} predicted operations, budget {self.budget:.1e}"
        return f"{self.arithmetic} arithmetic, {'chosen' if self.asked == 'auto' else 'as asked'}: {numbers}"


def choose_arithmetic(task: Task) -> Choice:
    """Return the arithmetic of a conversion, from sizes and bit lengths alone, never from the clock."""
    if task.changes_coordinates and isinstance(task.model, StateSpace):
        if TABLE[task.form or ""].exact:
            from realize.conversions.exact_coordinates import exact_cost, in_doubles

            predicted = exact_cost(task.model, task.form or "")
            if in_doubles(task.model, task.form or "", task.arithmetic):
                return Choice("double", task.arithmetic, predicted, EXACT_BUDGET)
            return Choice("exact", task.arithmetic, predicted, EXACT_BUDGET, "the numbers as given, each rounded once")
        operations = 30.0 * task.model.A.shape[0] ** 3
        return Choice("double", task.arithmetic, operations, EXACT_BUDGET, "new coordinates have no exact entries")
    predicted = predicted_cost(task.model)
    if task.to == "transfer-function" and isinstance(task.model, StateSpace):
        # coefficients need no roots; what the claims need is their own affair
        predicted = min(predicted, forming_cost(task.model))
    auto = "exact" if predicted <= EXACT_BUDGET else "double"
    return Choice(auto if task.arithmetic == "auto" else task.arithmetic, task.arithmetic, predicted, EXACT_BUDGET)


def default_form(model: Model) -> str:
    """Return the coordinates that are used unless others are asked for ('' = leave a state model as it is).

    State models stay as they are, and second-order ones keep positions and velocities. Partial fractions of one channel
    become modal, and any other single channel a cascade; several channels get the McMillan degree in the coordinates
    that prove best ("minimal"; modal in double arithmetic).
    """
    if isinstance(model, (StateSpace, SecondOrder, MatrixFraction)):
        return ""
    if model.shape != (1, 1):
        return "minimal"
    return "modal" if model.kind == "pole-residue" else "cascade"


def plan_route(task: Task) -> list[Row]:
    """Return the rows from the source to the target: fewest roundings first, then fewest rows.

    Raises
    ------
    Refused
        If the only routes are beyond exact arithmetic's budget, or doubles are to hold a source that is beyond them.
    UsageError
        If the form does not go with the kind.
    """
    if task.form is not None and task.to != "state-space":
        raise UsageError(f"--form {task.form} goes with --to state-space, not with --to {task.to}")
    if task.changes_coordinates:
        if isinstance(task.model, StateSpace):
            return [coordinate_row("state-space", task)]
        base = plan_route(replace(task, form=None))
        return [*base, coordinate_row(base[-1].target, task)]
    start, goal = task.model.kind, task.target
    if start == goal and getattr(task.model, "E", None) is not None and descriptor.has_descriptor(task.model):
        return [SMALLEST_DESCRIPTOR]
    if start == goal and not task.common_denominator and task.digits is None and task.side is None:
        return []
    path = _path(_table(task), start, goal)
    if path is not None:
        return list(path)
    if task.to == "second-order":
        from realize.conversions.second_order import STRUCTURE_NEEDED

        raise Refused(STRUCTURE_NEEDED.format(kind=f"a {start} model"))
    if task.arithmetic != "auto":
        raise Refused(f"there is no way from {start} to {goal} in {task.arithmetic} arithmetic")
    raise Refused(
        f"order {task.model.order} with {task.model.shape[1]} inputs and {task.model.shape[0]} outputs is beyond what "
        f"exact arithmetic can do in seconds, and a {task.to} of that size could not be trusted in doubles; "
        + (
            "leave out --digits, or reduce the model first"
            if task.digits is not None
            else "ask for pole-residue, zero-pole-gain or state-space --form modal, or reduce the model first"
            if isinstance(task.model, (StateSpace, SecondOrder))
            else "split it into smaller plants, or give it as a state model"
        )
        + f"; --arithmetic exact{'' if task.digits is not None else ' or double'} does it all the same"
    )


def coordinate_row(source: str, task: Task) -> Row:
    """Return the row from a state model (`state-space`, or a realization by its form) to the form of the task."""
    return next(row for row in COORDINATE_ROWS if (row.source, row.target) == (source, f"state-space:{task.form}"))


def _table(task: Task) -> str:
    """Return the name of the table of rows that the arithmetic of the task allows."""
    if choose_arithmetic(task).arithmetic == "exact":
        return "exact"
    if task.model.beyond_doubles:
        raise Refused(
            f"{task.model.beyond_doubles[0]} lies beyond the range of doubles, and the conversion is in doubles; "
            "use --arithmetic exact, or scale time and gain first"
        )
    # nothing that is computed in doubles has more digits than they have
    return "digits" if task.digits is not None else "double" if task.arithmetic == "double" else "careful"


#: Rows by name of the table: a source beyond exact arithmetic keeps clear of coefficients unless doubles are asked for.
TABLES = {
    "exact": ROWS,
    "double": DOUBLE_ROWS,
    "careful": tuple(row for row in DOUBLE_ROWS if row.source not in COEFFICIENTS and row.target not in COEFFICIENTS),
}
TABLES["digits"] = tuple(row for row in TABLES["careful"] if row in ROWS)


@cache
def _path(table: str, start: str, goal: str) -> tuple[Row, ...] | None:
    """Return the rows from one kind to another: fewest roundings first, then fewest rows; None without a way."""
    rows = TABLES[table]
    queue: list[tuple[tuple[int, int], int, str, tuple[Row, ...]]] = [((0, 0), 0, start, ())]
    done: set[str] = set()
    count = 0
    while queue:
        cost, _, node, path = heapq.heappop(queue)
        if node == goal and path:
            return path
        if node in done:
            continue
        done.add(node)
        for row in rows:
            # the way back to the source's own kind goes through the fractions (a new common denominator)
            if row.source == node and (row.target not in done or row.target == goal):
                count += 1
                heapq.heappush(queue, ((cost[0] + (not row.exact), cost[1] + 1), count, row.target, (*path, row)))
    return None


def convert_model(task: Task, route: list[Row]) -> Model:
    """Follow a route and return the model at its end, without receipts."""
    value = follow(task, route)
    return value.model if isinstance(value, Changed) else value


def follow(task: Task, route: list[Row]) -> Model | Changed:
    """Follow a route and return what stands at its end: a model, or one with the record of a change of coordinates."""
    value: Any = task.model
    for row in route:
        apply = row.apply
        if task.digits is not None:
            from realize.conversions import digits

            apply = digits.BUILDERS.get((row.source, row.target), row.apply)
        value = apply(value, task)
    return value  # type: ignore[no-any-return]
