"""State models of the true McMillan degree from exact fractions or partial fractions, in several coordinates.

The poles are separated exactly and each gets its minimal states (`realize.kernels.exact.local_states`), in high
precision; modal coordinates are these states rounded once. Other coordinates start from the same states: balanced ones
by Gramians and staircases (`realize.kernels.exact.gramians`, shared with the verb `minimal`), the poles at zero apart
as a strictly triangular block. Which candidate is best is for `realize.steps.candidates` to prove.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from realize.conversions.builders import Grid, fractions, rounded, state_model
from realize.errors import Refused
from realize.models import Model, PoleResidue, StateSpace, TransferFunction, ZeroPoleGain
from realize.models.fractions import form_fractions

if TYPE_CHECKING:
    from realize.conversions.route import Task

#: Largest order for which Gramians in high precision are tried (seconds), and largest sum of degrees in all minors.
LARGEST_DENSE, LARGEST_MINORS = 48, 400
#: Largest degree of a minor over the common denominator: where channels share poles it is far below that sum; and the
#: most inputs or outputs for which that limit counts.
LARGEST_COMMON, COMMON_SIDE = 200, 8
#: Numbers with at most this many significant digits were typed; longer ones were computed and rounded.
TYPED_DIGITS = 12
#: Units of rounding by which each number may be off, over the order.
ROUNDINGS = 4.0
#: Factor to the threshold within which a decision about a rank is called ambiguous.
AMBIGUOUS = 1e3


@dataclass(frozen=True)
class Parts:
    """What all candidates are made of.

    Attributes
    ----------
    blocks : list of `realize.kernels.exact.local_states.Block`
    direct : array [p][m]
    infinite : (N, B, C), optional
        The polynomial part beyond the direct term, sum s^k P_k = C (I - s N)^-1 B.
    infinite_degree : int
        Its McMillan degree.
    channel_orders : int
        Sum of the orders of the channels by themselves.
    details : dict
        How the degree was decided, for the receipt.
    """

    blocks: list[Any]
    direct: np.ndarray
    infinite: tuple[np.ndarray, np.ndarray, np.ndarray] | None
    infinite_degree: int
    channel_orders: int
    details: dict[str, Any] = field(default_factory=dict)
    notes: list[str] = field(default_factory=list)

    @property
    def order(self) -> int:
        """McMillan degree of the finite poles."""
        return sum(block.order for block in self.blocks)


def exactly_minimal(model: Model) -> bool:
    """Return whether the minors of a matrix are few and small enough for the exact degree."""
    p, m = model.shape
    if isinstance(model, PoleResidue):
        return True
    if max(p, m) > 12:
        return False
    if min(p, m) * (model.order or 0) <= LARGEST_MINORS:
        return True
    return max(p, m) <= COMMON_SIDE and min(p, m) * _common_degree(model) <= LARGEST_COMMON


def _common_degree(model: Model) -> int:
    """Return the degree of the least common denominator of all channels."""

    def degree() -> int:
        from realize.kernels.exact.polynomials import ONE, quotient, reduce_fraction

        common = ONE
        for row in form_fractions(model):
            for n, d in row:
                own = reduce_fraction(n, d)[1]
                common = common * quotient(own, common.gcd(own))
        return int(common.degree())

    return int(model.remembered("common degree", degree))


def minimal_modal(value: Any, task: Task) -> StateSpace:
    """Modal coordinates of the true McMillan degree: the first candidate."""
    if not exactly_minimal(task.model):
        from realize.conversions import builders

        value = value if isinstance(value, PoleResidue) else builders.pole_residue(value, task)
        return builders.modal(value, task)
    return modal_states(parts_of(task), task)


def decision(task: Task) -> dict[str, Any]:
    """Return how the McMillan degree was decided, for the receipt; nothing where it was not."""
    if not exactly_minimal(task.model):
        return {}
    parts = parts_of(task)
    task.notes.extend(parts.notes)
    return dict(parts.details)


def parts_of(task: Task) -> Parts:
    """Return the minimal states of each pole and the polynomial part, formed once for a model."""
    model = task.model
    return model.remembered("minimal states", lambda: _parts(model, task))


def _parts(model: Model, task: Task) -> Parts:
    from realize.kernels.exact.local_states import local_block

    if isinstance(model, PoleResidue):
        local, powers, channel_orders = _of_residues(model)
    else:
        local, powers, channel_orders = _of_fractions(fractions(model, task))
    direct = np.array([rounded(row)[0] for row in powers[0]])
    infinite, degree = None, 0
    if len(powers) > 1:
        from realize.kernels.exact.local_states import infinite_block

        infinite, degree = infinite_block(dict(enumerate(powers[1:], start=1)))
    total = sum(rank * (1 if expansion.real else 2) for expansion, rank in local)
    ranks, details, notes = _within_rounding(model, local, total)
    details["mcmillan_degree"] += degree
    blocks = [local_block(expansion, rank) for (expansion, _), rank in zip(local, ranks, strict=True) if rank]
    return Parts(blocks, direct, infinite, degree, channel_orders, details, notes)


def _of_fractions(grid: Grid) -> tuple[list[tuple[Any, int]], list[Any], int]:
    """Return expansion and degree of each pole, the exact polynomial part from the direct term up, and the sum of the
    orders of the channels."""
    from realize.kernels.exact.local_states import expansions, multiplicities
    from realize.kernels.exact.polynomials import reduce_fraction
    from realize.kernels.exact.smith import smith_mcmillan

    reduced = [[reduce_fraction(n, d) for n, d in row] for row in grid]
    found = expansions(reduced)
    ranks = multiplicities([root for root, _ in found], smith_mcmillan(reduced).poles)
    whole = [[n // d for n, d in row] for row in reduced]
    size = max(1, max(entry.length() for row in whole for entry in row))
    powers = [[[entry[k] for entry in row] for row in whole] for k in range(size)]
    orders = sum(d.degree() for row in reduced for _, d in row)
    return [(expansion, rank) for (_, expansion), rank in zip(found, ranks, strict=True)], powers, orders


def _of_residues(model: PoleResidue) -> tuple[list[tuple[Any, int]], list[Any], int]:
    """Return the same from partial fractions as they stand."""
    from realize.kernels.exact.local_states import expansion_of, hankel_rank
    from realize.kernels.exact.numbers import fraction

    poles, residues = model.exact("poles"), model.exact("residues")
    powers = [int(power) for power in model.powers]
    members: dict[Any, list[int]] = {}
    for k, pole in enumerate(model.poles.tolist()):
        if pole.imag >= 0:
            members.setdefault(poles[k] if isinstance(poles[k], tuple) else str(poles[k]), []).append(k)
    local, orders = [], 0
    for own in members.values():
        terms = {powers[k]: residues[k] for k in own}
        rank = hankel_rank(terms)
        expansion = expansion_of(poles[own[0]], terms)
        if rank:
            local.append((expansion, rank))
        highest = np.zeros(model.shape, dtype=int)
        for k in own:
            highest = np.maximum(highest, np.where(model.residues[k] != 0, powers[k], 0))
        orders += int(highest.sum()) * (1 if expansion.real else 2)
    powers_up = [[[fraction(entry) for entry in row] for row in matrix] for matrix in reversed(model.exact("direct"))]
    while len(powers_up) > 1 and not any(entry for row in powers_up[-1] for entry in row):
        powers_up.pop()
    return local, powers_up, orders


def typed(model: Model) -> bool:
    """Return whether all numbers of a model look typed: exact decimals, integers, doubles of few digits."""
    for name, value in model.parameters().items():
        places = model.decimals.get(name, {})
        for index, entry in _leaves(value):
            if index in places:
                continue
            for part in (complex(entry).real, complex(entry).imag):
                if part and np.isfinite(part) and float(f"{part:.{TYPED_DIGITS}g}") != part:
                    return False
    return True


def _leaves(value: Any, at: tuple[int, ...] = ()) -> Any:
    if value is None:
        return
    if isinstance(value, np.ndarray):
        for index, entry in np.ndenumerate(value):
            yield (*at, *index), entry
    elif isinstance(value, (list, tuple)):
        for k, entry in enumerate(value):
            yield from _leaves(entry, (*at, k))
    else:
        yield at, value


def _within_rounding(
    model: Model, local: list[tuple[Any, int]], total: int
) -> tuple[list[int], dict[str, Any], list[str]]:
    """Return the rank that each pole gets, the record of the decision, and words.

    Exact ranks hold where the numbers were typed. Numbers that were rounded before make every residue a full matrix:
    the rank of a simple pole then counts singular values above what 4 n eps of each number can make, rows and columns
    in units of their own.
    """
    exact = [rank for _, rank in local]
    details: dict[str, Any] = {"mcmillan_degree": total, "degree_decided": "exactly"}
    if typed(model):
        return exact, details, []
    from realize.kernels.exact.local_states import scaled_residue

    ranks, kept, left_out = [], np.inf, 0.0
    for expansion, rank in local:
        if expansion.multiplicity > 1 or rank <= 1:
            ranks.append(rank)
            continue
        values, sizes = scaled_residue(expansion)
        amplified = _amplification(model, expansion)
        threshold = ROUNDINGS * max(total, 1) * np.finfo(float).eps * float(np.linalg.norm(sizes * amplified))
        singular = np.linalg.svd(values, compute_uv=False)[:rank]
        chosen = max(int(np.sum(singular > threshold)), 1)
        ranks.append(chosen)
        kept = min(kept, float(singular[chosen - 1]) / threshold)
        if chosen < rank:
            left_out = max(left_out, float(singular[chosen]) / threshold)
    order = total - sum(
        (rank - own) * (1 if expansion.real else 2) for (expansion, rank), own in zip(local, ranks, strict=True)
    )
    # what is left out is roundings: near the threshold by nature
    ambiguous = kept < AMBIGUOUS
    details = {
        "mcmillan_degree": order,
        "degree_decided": "within rounding" if order < total else "exactly",
        "exact_degree": total,
        "degree_gap": {
            "kept": kept if np.isfinite(kept) else None,
            "left_out": left_out,
            "unit": "threshold of 4 n eps of each number",
            "ambiguous": ambiguous,
        },
    }
    notes = []
    if order < total:
        notes.append(
            f"The order {order} is the McMillan degree within the rounding of the model's numbers; "
            f"on the numbers as given it is {total}."
        )
    if ambiguous:
        notes.append("The McMillan degree is ambiguous: a residue is nearly of lower rank within rounding.")
    return ranks, details, notes


def _amplification(model: Model, expansion: Any) -> np.ndarray:
    """Return by how much relative changes of a model's own numbers move each entry of a residue, relative to it."""
    p, m = model.shape
    pole = expansion.rough
    factor = np.ones((p, m))
    for i in range(p):
        for j in range(m):
            if isinstance(model, TransferFunction):
                c = np.asarray(model.numerator[i][j], dtype=float)
                with np.errstate(all="ignore"):
                    value, size = abs(np.polyval(c, pole)), np.polyval(np.abs(c), abs(pole))
                    ratio = size / value
                factor[i, j] = ratio if np.isfinite(ratio) and ratio > 1 else 1.0
            elif isinstance(model, ZeroPoleGain):
                zeros = np.asarray(model.zeros[i][j])
                with np.errstate(all="ignore"):
                    ratio = 1 + float(np.sum(np.abs(zeros) / np.abs(pole - zeros)))
                factor[i, j] = ratio if np.isfinite(ratio) else 1.0
    return np.minimum(factor, 1 / np.finfo(float).eps)


def _with_polynomial(task: Task, A: Any, B: Any, C: Any, parts: Parts) -> StateSpace:
    """Put the direct term in D, and the polynomial part in a descriptor block: C (s N - I)^-1 (-B)."""
    if parts.infinite is None:
        return state_model(task, A, B, C, parts.direct)
    N, b, c = parts.infinite
    if not all(np.all(np.isfinite(part)) for part in parts.infinite):
        raise Refused("a coefficient of the polynomial part lies beyond the range of doubles; scale time or gain first")
    n, k = A.shape[0], N.shape[0]
    a, e = np.eye(n + k), np.eye(n + k)
    a[:n, :n], e[n:, n:] = A, N
    return state_model(task, a, np.vstack([B, -b]), np.hstack([C, c]), parts.direct, e)


def modal_states(parts: Parts, task: Task) -> StateSpace:
    """The minimal states of each pole side by side."""
    from realize.kernels.exact.local_states import modal_matrices

    return _with_polynomial(task, *modal_matrices(parts.blocks, *task.model.shape), parts)


def dense_states(parts: Parts, task: Task) -> list[tuple[str, StateSpace]]:
    """Balanced and staircase coordinates, dearer: name and model of each; none where they do not exist."""
    from realize.kernels.exact.gramians import NoCoordinates, balanced_projection, balanced_states, staircase_states
    from realize.kernels.exact.local_states import modal_matrices, rational_matrices

    p, m = task.model.shape
    # integrators, and memory without dynamics: strictly triangular, and no scale of time to balance
    edges = (0, 1) if task.model.time.sampled else (0,)
    still = [block for block in parts.blocks if block.real and any(block.pole.real == edge for edge in edges)]
    moving = [block for block in parts.blocks if block not in still]
    n = sum(block.order for block in moving)
    if not 0 < n <= LARGEST_DENSE:
        return []
    try:
        rationals = rational_matrices(moving, p, m)
        found = balanced_projection(
            rationals[0], rationals[1], rationals[2], n, (n, n, n), sampled=task.model.time.sampled
        )
    except NoCoordinates:
        return []
    rest = modal_matrices(still, p, m)

    def joined(part: tuple[Any, Any, Any]) -> StateSpace:
        A, B, C = part
        k = rest[0].shape[0]
        whole = np.block([[A, np.zeros((n, k))], [np.zeros((k, n)), rest[0]]])
        return _with_polynomial(task, whole, np.vstack([B, rest[1]]), np.hstack([C, rest[2]]), parts)

    return [
        ("balanced", joined(balanced_states(found))),
        ("reachable-staircase", joined(staircase_states(found, outputs=False))),
        ("observable-staircase", joined(staircase_states(found, outputs=True))),
    ]
