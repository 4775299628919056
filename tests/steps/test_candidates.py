"""Several channels to state space: the degree by construction, the claims, the choice of coordinates, rounding."""

from __future__ import annotations

import numpy as np
import pytest

from realize import PoleResidue, StateSpace, TimeBase, TransferFunction, convert
from realize.conversions import Task, minimal_states
from realize.testing.matrices import FAMILIES, known_matrix
from realize.verification import conversion_claims


def value(claim: object) -> float:
    found = claim.value  # type: ignore[attr-defined]
    return np.inf if found is None else float(found)


#: Many channels that share few poles: the sum of their orders says nothing about the degree.
SHARED = [207, 219, 351, 459, 482, 490]


@pytest.mark.parametrize("seed", [*range(3 * len(FAMILIES)), *SHARED])
def test_degree_and_errors_of_generated_matrices(seed: int) -> None:
    known = known_matrix(seed)
    made = convert(known.model, "state-space")
    assert made.model.order == known.degree
    details = made.receipt.details
    assert (details["mcmillan_degree"], details["degree_decided"]) == (known.degree, "exactly")
    assert value(made.receipt.claim("peak-error")) <= 1e-14
    assert value(made.receipt.claim("response-error")) <= 1e-13
    assert made.receipt.claim("peak-error").basis == "proved"


def matrix(numerator: list, denominator: list, **more: object) -> TransferFunction:
    return TransferFunction(numerator=numerator, denominator=denominator, **more)


def test_crowded_poles_leave_modal_coordinates() -> None:
    """Eight poles within 0.7 %: residues of 1e20 cancel, and another candidate wins with the order kept."""
    crowd = np.poly(-1 - np.arange(8) / 1e3).tolist()
    made = convert(matrix([[[1.0], [2.0]], [[3.0], [1.0]]], [[crowd] * 2] * 2), "state-space")
    tried = made.receipt.details["candidates"]
    assert made.receipt.details["form"] != "modal"
    assert tried["modal"] is None or tried["modal"] > 1e6
    assert made.model.order == 16
    assert value(made.receipt.claim("response-error")) < 1e-13


def test_channels_of_their_own_become_cascades_where_residues_cancel() -> None:
    """A sharp low-pass on the diagonal beside a slow pole: orders add up, and cascades keep both to the end."""
    crowd = np.poly(-1 - np.arange(8) / 1e3).tolist()
    made = convert(matrix([[[1.0], [0.0]], [[0.0], [1.0]]], [[crowd, [1.0]], [[1.0], [1.0, 2.0]]]), "state-space")
    assert made.receipt.details["form"] == "cascade"
    assert made.model.order == 9
    assert value(made.receipt.claim("channel-error")) < 1e-13


def test_every_candidate_is_the_same_model() -> None:
    """Balanced and staircase coordinates of the same minimal states, an integrator apart as an exact zero."""
    source = matrix(
        [[[1.0, 3.0], [2.0]], [[1.0], [1.0, 5.0]]], [[[1.0, 3.0, 2.0, 0.0], [1.0, 2.0]], [[1.0, 1.0], [1.0, 0.0, 0.0]]]
    )
    task = Task(source, "state-space")
    parts = minimal_states.parts_of(task)
    models = dict(minimal_states.dense_states(parts, task))
    assert list(models) == ["balanced", "reachable-staircase", "observable-staircase"]
    for model in models.values():
        assert model.order == parts.order == 5
        claims = {claim.name: claim for claim in conversion_claims(source, model, False)}
        assert value(claims["peak-error"]) < 1e-13
        assert claims["end-behaviour"].note != "the multiplicity of poles or zeros at the origin changed"
        # three states of the pole at the origin, strictly triangular
        assert not np.any(np.tril(model.A[2:, 2:]))
        assert not np.any(model.A[2:, :2]) and not np.any(model.A[:2, 2:])


def test_repeated_poles_keep_their_multiplicity() -> None:
    """Degree 4 at -1 from 1/(s+1)^3 and 1/(s+1): the chain is strictly triangular about the exact pole."""
    source = matrix([[[1.0], [1.0]], [[1.0], [1.0]]], [[[1.0, 3.0, 3.0, 1.0], [1.0, 1.0]], [[1.0, 1.0], [1.0, 1.0]]])
    made = convert(source, "state-space")
    assert made.model.order == 4
    assert np.array_equal(np.diag(made.model.A), -np.ones(4))
    assert np.array_equal(np.tril(made.model.A, -1), np.zeros((4, 4)))
    assert value(made.receipt.claim("response-error")) < 1e-15


def test_resonances_are_not_moved_by_the_rounding_of_their_frequency() -> None:
    """Damping 1e-5: one rounding of the frequency alone would be 1e-11 of the peak."""
    pairs = [[1.0, 2e-5 * w, w * w] for w in (1.1, 3.3, 7.7)]
    source = matrix([[[1.0], [2.0]], [[3.0], [4.0]]], [[pairs[0], pairs[1]], [pairs[2], pairs[0]]])
    made = convert(source, "state-space")
    assert value(made.receipt.claim("peak-error")) < 5e-13


def test_polynomial_part_has_as_many_states_as_it_needs() -> None:
    one = [1.0]
    source = matrix([[[1.0, 0.0], one], [[2.0, 0.0], [1.0, 1.0]]], [[one, [1.0, 1.0]], [one, [1.0, 2.0]]])
    made = convert(source, "state-space")
    assert isinstance(made.model, StateSpace)
    # s [1; 2] for one input: two descriptor states; poles at -1 and -2
    assert made.model.order == 4
    assert np.linalg.matrix_rank(made.model.E) == 3
    assert made.receipt.details["mcmillan_degree"] == 3
    assert value(made.receipt.claim("response-error")) < 1e-14


def test_rounded_residues_have_the_rank_within_their_rounding() -> None:
    rng = np.random.default_rng(2)
    column, row = rng.standard_normal((3, 1)), rng.standard_normal((1, 3))
    source = PoleResidue(poles=[-1.0, -2.0], residues=[column @ row, np.diag([0.1, 0.2, 0.3])])
    made = convert(source, "state-space")
    details = made.receipt.details
    assert (made.model.order, details["exact_degree"]) == (4, 6)
    assert details["degree_decided"] == "within rounding"
    assert details["degree_gap"]["kept"] > 1e10
    assert 0 < details["degree_gap"]["left_out"] <= 1
    assert any("within the rounding" in caution for caution in made.receipt.cautions)
    assert value(made.receipt.claim("peak-error")) < 1e-15


def test_typed_residues_are_exact_however_small_the_difference() -> None:
    source = PoleResidue(poles=[-1.0], residues=[[[1.0, 1.0], [1.0, 1.00000000001]]])
    made = convert(source, "state-space")
    assert made.model.order == 2
    assert made.receipt.details["degree_decided"] == "exactly"


def test_sampled_and_zero_and_constant() -> None:
    clock = TimeBase("sampled", period=0.5)
    source = matrix(
        [[[1.0], [1.0]], [[1.0], [1.0, 0.2]]], [[[1.0, -1.0], [1.0, -0.5, 0.0]], [[1.0, -1.0], [1.0, -1.0]]], time=clock
    )
    made = convert(source, "state-space")
    assert made.model.order == 4
    assert made.model.time == clock
    assert value(made.receipt.claim("response-error")) < 1e-14
    nothing = convert(matrix([[[0.0], [0.0]]], [[[1.0, 1.0], [1.0]]]), "state-space")
    assert nothing.model.order == 0
    constant = convert(matrix([[[3.0]], [[4.0]]], [[[2.0]], [[1.0]]]), "state-space")
    assert constant.model.D.tolist() == [[1.5], [4.0]]


def test_forms_by_name_stay_as_they_are() -> None:
    source = matrix([[[1.0], [1.0]], [[1.0], [1.0]]], [[[1.0, 1.0]] * 2] * 2)
    assert convert(source, "state-space").model.order == 1
    assert convert(source, "state-space", form="cascade").model.order == 4
