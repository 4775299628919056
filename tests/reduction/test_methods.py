"""Singular perturbation, modal truncation, kept states and loops: the properties that define each."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import block_diag

from realize.errors import Refused, UsageError
from realize.kernels.algebraic_states import without_descriptor
from realize.kernels.residualisation import steady_state_gain
from realize.kernels.response import state_response
from realize.kernels.spectral_blocks import spectral_blocks
from realize.reduction import Loop, Request, automatic, reduce_states


def chain(n: int = 12, sampled: bool = False, seed: int = 0):
    """Lightly damped pairs in random coordinates, 2 inputs and 3 outputs."""
    rng = np.random.default_rng(seed)
    w = np.geomspace(0.3, 2.5, n // 2)
    A = block_diag(*[[[-0.05 * x, x], [-x, -0.05 * x]] for x in w])
    if sampled:
        A = block_diag(*[0.9 * np.array([[np.cos(x), np.sin(x)], [-np.sin(x), np.cos(x)]]) for x in w])
    S = rng.standard_normal((n, n))
    weights = np.repeat(np.geomspace(1, 1e-3, n // 2), 2)[:, None]
    B = weights * rng.standard_normal((n, 2))
    return S @ A @ np.linalg.inv(S), S @ B, rng.standard_normal((3, n)) @ np.linalg.inv(S), rng.standard_normal((3, 2))


@pytest.mark.parametrize("sampled", [False, True])
@pytest.mark.parametrize("method", ["singular-perturbation", "balanced-truncation", "modal"])
def test_the_steady_state_is_kept(method: str, sampled: bool) -> None:
    model = chain(sampled=sampled)
    small = reduce_states(*model, sampled=sampled, order=4, method=method, keep_steady_state=True)
    here, there = (steady_state_gain(*m, sampled=sampled) for m in (model, (small.A, small.B, small.C, small.D)))
    assert np.abs(here - there).max() <= 1e-12 * np.abs(here).max()
    plain = reduce_states(*model, sampled=sampled, order=4, method=method)
    assert (np.abs(plain.D - model[3]).max() == 0) == (method != "singular-perturbation")


@pytest.mark.parametrize("sampled", [False, True])
def test_modal_keeps_dominant_pairs_whole_and_where_they_are(sampled: bool) -> None:
    model = chain(sampled=sampled)
    small = reduce_states(*model, sampled=sampled, order=3, method="modal")
    assert small.order == 4 and any("complex pair" in note for note in small.notes)
    full, kept = np.linalg.eigvals(model[0]), np.linalg.eigvals(small.A)
    assert np.abs(full[:, None] - kept[None, :]).min(axis=0).max() <= 1e-12
    # dominance from residues found without the blocks
    p, X = np.linalg.eig(model[0])
    Y = np.linalg.inv(X)
    residue = [np.linalg.norm(np.outer(model[2] @ X[:, k], Y[k] @ model[1]), 2) for k in range(p.size)]
    measure = np.array(residue) / (1 - np.abs(p) if sampled else -p.real)
    best = p[np.argsort(-measure)[:4]]
    assert np.abs(best[:, None] - kept[None, :]).min(axis=1).max() <= 1e-12


def test_a_cluster_is_one_block() -> None:
    A = block_diag([[-4.0, 1, 0], [0, -4, 1], [0, 0, -4]], [[-1.0, 5], [-5, -1]], [[-2.0]])
    from scipy.linalg import schur

    S = np.random.default_rng(3).standard_normal((6, 6))
    T = schur(S @ A @ np.linalg.inv(S))[0]
    blocks = spectral_blocks(T)
    assert sorted(block.poles.size for block in blocks) == [1, 2, 3]
    assert np.abs(sum(b.V @ (b.W.T @ T @ b.V) @ b.W.T for b in blocks) - T).max() <= 1e-11 * np.abs(T).max()


@pytest.mark.parametrize("sampled", [False, True])
def test_kept_states_are_the_first_and_keep_their_units(sampled: bool) -> None:
    model = chain(sampled=sampled)
    small = reduce_states(*model, sampled=sampled, order=8, keep_states=(7, 2))
    assert small.method == "singular-perturbation" and small.bound is None
    # where order 8 comes out unstable a larger one is taken, and the notes say so
    assert small.order == 8 or any("next order without" in note for note in small.notes)
    assert np.array_equal(small.left[:, :2], np.eye(12)[:, [7, 2]])
    units = np.ldexp(1.0, np.random.default_rng(1).integers(-30, 30, 12))
    A, B, C, D = model
    other = reduce_states(
        units[:, None] * A / units, units[:, None] * B, C / units, D, sampled=sampled, order=8, keep_states=(7, 2)
    )
    factor = units[[7, 2]]
    assert other.A[:2, :2] == pytest.approx(factor[:, None] * small.A[:2, :2] / factor, rel=1e-8)
    assert other.B[:2] == pytest.approx(factor[:, None] * small.B[:2], rel=1e-8)
    w = np.exp(1j * np.array([0.1, 1.0, 2.0])) if sampled else 1j * np.array([0.1, 1.0, 2.0])
    one, two = (state_response(s.A, s.B, s.C, s.D, None, w) for s in (small, other))
    assert np.abs(one - two).max() <= 1e-8 * np.abs(one).max()


def test_kept_states_of_a_plant_with_integrators() -> None:
    A = block_diag([[0.0, 1], [0, 0]], [[0.4]], np.diag([-1.0, -2, -3, -40]))
    S = np.random.default_rng(5).standard_normal((7, 7))
    A = S @ A @ np.linalg.inv(S)
    rng = np.random.default_rng(6)
    model = A, rng.standard_normal((7, 1)), rng.standard_normal((1, 7)), np.zeros((1, 1))
    small = reduce_states(*model, sampled=False, order=6, keep_states=(0,))
    poles = np.sort_complex(np.linalg.eigvals(small.A))
    assert np.count_nonzero(poles.real > -1e-4) == 3 and poles[-1].real == pytest.approx(0.4, rel=1e-9)
    with pytest.raises(Refused, match="ask for 4 or more"):
        reduce_states(*model, sampled=False, order=3, keep_states=(0,))


@pytest.mark.parametrize("option", [{"measured": True}, {"band": (0.2, 0.9)}])
def test_measured_orders_are_the_smallest(option: dict) -> None:
    model = chain()
    small = reduce_states(*model, sampled=False, relative_error=0.02, **option)
    w = np.linspace(*option.get("band", (0.0, 30.0)), 4000)
    full = state_response(*model, None, 1j * w)
    size = np.linalg.norm(full, 2, axis=(1, 2)).max()

    def error(order: int) -> float:
        other = reduce_states(*model, sampled=False, order=order)
        return np.linalg.norm(
            full - state_response(other.A, other.B, other.C, other.D, None, 1j * w), 2, axis=(1, 2)
        ).max()

    assert error(small.order) <= 0.0201 * size
    assert all(error(k) > 0.0199 * size for k in range(small.order))
    assert small.order <= reduce_states(*model, sampled=False, relative_error=0.02).order


def loop_poles(plant, controller):
    A, B, C, D = plant
    Ak, Bk, Ck, Dk = controller
    assert not np.any(D)
    return np.linalg.eigvals(np.block([[A - B @ Dk @ C, -B @ Ck], [Bk @ C, Ak]]))


@pytest.mark.parametrize("seed", range(4))
def test_weights_of_the_loop_serve_the_loop(seed: int) -> None:
    A, B, C, _ = chain(12, seed=seed)
    plant = A, B[:, :1], C[:1], np.zeros((1, 1))
    gain = 0.4 / np.abs(state_response(*plant, None, 1j * np.linspace(0, 5, 500))).max()
    controller = np.array([[-3.0]]), np.array([[3.0]]), np.array([[gain]]), np.zeros((1, 1))
    assert loop_poles(plant, controller).real.max() < 0
    small = reduce_states(*plant, sampled=False, order=4, loop=Loop(*controller))
    assert small.method == "frequency-weighted" and small.bound is None
    assert loop_poles((small.A, small.B, small.C, small.D), controller).real.max() < 0
    # the other way round: what the loop leaves of the plant's roles
    other = reduce_states(*plant, sampled=False, order=4, loop=Loop(*controller, controller=False))
    assert other.order == 4
    strong = *controller[:2], 1e4 * controller[2], controller[3]
    backwards = *controller[:2], -1e4 * controller[2], controller[3]
    unstable = [k for k in (strong, backwards) if loop_poles(plant, k).real.max() > 0]
    assert unstable
    with pytest.raises(Refused, match="not stable"):
        reduce_states(*plant, sampled=False, order=4, loop=Loop(*unstable[0]))


def test_descriptor_of_index_one() -> None:
    rng = np.random.default_rng(0)
    n, rank = 9, 6
    U, V = rng.standard_normal((n, n)), rng.standard_normal((n, n))
    E = U[:, :rank] @ V[:rank]
    A, B, C, D = rng.standard_normal((n, n)), rng.standard_normal((n, 2)), rng.standard_normal((1, n)), np.ones((1, 2))
    found = without_descriptor(A, B, C, D, E)
    assert found.algebraic == n - rank and found.A.shape == (rank, rank)
    for s in (0.3j, 5j, 2.0 + 1j):
        truth = C @ np.linalg.solve(s * E - A, B) + D
        own = found.C @ np.linalg.solve(s * np.eye(rank) - found.A, found.B) + found.D
        assert np.abs(truth - own).max() <= 1e-11 * np.abs(truth).max()


def test_the_automatic_choice_can_be_asked() -> None:
    loop = Loop(*(np.zeros((1, 1)),) * 4)
    assert automatic(Request(order=3))[0] == "balanced-truncation"
    assert automatic(Request(order=3, keep_steady_state=True))[0] == "singular-perturbation"
    assert automatic(Request(order=3, keep_states=(1,)))[0] == "singular-perturbation"
    assert automatic(Request(order=3, loop=loop))[0] == "frequency-weighted"
    assert automatic(Request(relative_error=0.1, loop=loop))[0] == "balanced-truncation"
    with pytest.raises(UsageError, match="not by modal"):
        reduce_states(*chain(), sampled=False, order=4, method="modal", keep_states=(1,))
    with pytest.raises(UsageError, match="--measured"):
        reduce_states(*chain(), sampled=False, relative_error=0.1, keep_states=(1,))
