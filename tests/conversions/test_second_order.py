"""Second-order models: values, states with or without the inverse of the mass, and back to mass, damping, stiffness."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from realize.errors import InputError, Refused
from realize.files import read, write
from realize.models import SecondOrder, Signal, StateSpace, TimeBase, TransferFunction, digest
from realize.steps import convert, inspect

DATA = Path(__file__).parents[3] / "shared" / "data" / "models"
STIFF = np.array([[3.0, -2.0, 0.0], [-2.0, 5.0, -3.0], [0.0, -3.0, 3.0]])
DAMP = np.array([[0.25, -0.125, 0.0], [-0.125, 0.25, -0.125], [0.0, -0.125, 0.125]])


def chain(mass: Any, **more: Any) -> SecondOrder:
    given: dict[str, Any] = {
        "mass": mass,
        "damping": DAMP,
        "stiffness": STIFF,
        "input": [[1.0, 0.0], [0.0, 0.0], [0.0, 2.0]],
        "position_output": [[0.0, 0.0, 1.0], [0.0, 0.0, 0.0]],
        "velocity_output": [[0.0, 0.5, 0.0], [0.0, 0.0, 0.0]],
        "acceleration_output": [[0.0, 0.0, 0.0], [1.0, -1.0, 0.0]],
        "direct": [[0.0, 0.0], [0.0, 0.125]],
    }
    return SecondOrder(**{**given, **more})


FULL = np.array([[2.0, 1.0, 0.0], [1.0, 3.0, 1.0], [0.0, 1.0, 2.0]])
#: mass matrix, what it is, whether it may be inverted
MASSES: dict[str, tuple[Any, str, bool]] = {
    "identity": (np.eye(3), "identity", True),
    "diagonal over six decades": (np.diag([1e-3, 3.0, 1e3]), "diagonal", True),
    "full": (FULL, "well-conditioned", True),
    "rows that do not belong together": (np.diag([1e-6, 1.0, 1e6]) @ FULL, "ill-conditioned", False),
    "ill-conditioned": (np.array([[1.0, 1.0, 0.0], [1.0, 1.0 + 1e-9, 0.0], [0.0, 0.0, 1.0]]), "ill-conditioned", False),
    "singular": (np.diag([1.0, 0.0, 2.0]), "singular", False),
    "singular and full": (np.array([[1.0, 1.0, 0.0], [1.0, 1.0, 0.0], [0.0, 0.0, 1.0]]), "singular", False),
}
W = [0.0, 0.03, 0.5, 1.1, 2.0, 40.0]


@pytest.mark.parametrize("name", MASSES)
def test_states_keep_the_response_and_say_what_became_of_the_mass(name: str, oracle: Any) -> None:
    mass, verdict, inverted = MASSES[name]
    source = chain(mass)
    made = convert(source, "state-space")
    said = made.receipt.details["mass"]
    assert (said["is"], said["inverted"]) == (verdict, inverted)
    assert (made.model.E is None) == inverted
    # an acceleration is zero at rest, which the quotients K / M give to a rounding of their terms only
    assert oracle.error(source, made.model, W) < (0.0 if verdict == "identity" else 1e-12) + 1e-16
    said_so = any("accelerations" in text for text in made.receipt.cautions)
    assert said_so == (inverted and verdict != "identity")
    if not inverted:
        # nothing is computed: every entry is one of the model's own numbers
        assert oracle.error(source, made.model, W) == 0.0
        assert any("nothing was inverted" in text or "no digit is lost" in text for text in made.receipt.cautions)
    assert not made.receipt.failed
    claim = made.receipt.claim("peak-error")
    assert claim.basis == "proved" and claim.holds
    # the accelerations that an output reads become states only where the mass stays in E
    assert made.model.order == (6 if inverted else 8)


@pytest.mark.parametrize("name", MASSES)
@pytest.mark.parametrize("to", ["transfer-function", "zero-pole-gain"])
def test_other_kinds(name: str, to: str, oracle: Any) -> None:
    source = chain(MASSES[name][0])
    made = convert(source, to)
    assert made.receipt.route[0] == "exact-fractions"
    assert oracle.error(source, made.model, W[1:]) < 1e-13
    assert not made.receipt.failed


@pytest.mark.parametrize("name", MASSES)
def test_values_are_those_of_the_equations(name: str, oracle: Any) -> None:
    source = chain(MASSES[name][0])
    for w in W[1:]:
        exact = oracle.at(source, oracle.point(source, w))
        truth = np.array([[complex(float(z[0]), float(z[1])) for z in row] for row in exact])
        assert np.abs(source.evaluate(1j * w) - truth).max() <= 1e-13 * np.abs(truth).max()


@pytest.mark.parametrize("size", [1e-300, 1e300])
def test_any_unit_of_mass(size: float) -> None:
    """All of M, D, K and F times one number: the same response."""
    plain = chain(FULL)
    scaled = chain(size * FULL, damping=size * DAMP, stiffness=size * STIFF, input=size * np.array(plain.input))
    points = 1j * np.array([0.1, 1.0, 10.0])
    assert np.allclose(scaled.evaluate(points), plain.evaluate(points), rtol=1e-12, atol=0)
    assert not convert(scaled, "state-space").receipt.failed


@pytest.mark.parametrize("name", ["identity", "full", "ill-conditioned", "singular"])
def test_there_and_back(name: str) -> None:
    source = chain(MASSES[name][0], acceleration_output=None)
    states = convert(source, "state-space")
    back = convert(states, "second-order")
    assert isinstance(back.model, SecondOrder) and back.model.mass.shape == (3, 3)
    assert back.receipt.details["positions"] == ["q1", "q2", "q3"]
    # copied, not computed: against the state model nothing is lost
    assert back.receipt.claim("response-error").value == 0.0
    if not MASSES[name][2]:
        assert digest(back.model) == digest(source)


def test_positions_and_velocities_in_any_order_and_unit(oracle: Any) -> None:
    """q' = 4 v and shuffled states: the structure is still there."""
    states = convert(chain(np.diag([1.0, 2.0, 4.0]), acceleration_output=None), "state-space").model
    assert isinstance(states, StateSpace)
    shuffle = np.random.default_rng(3).permutation(6)
    scale = np.array([1.0, 1.0, 1.0, 4.0, 0.5, 1.0])
    A = (states.A * scale / scale[:, None])[np.ix_(shuffle, shuffle)]
    B, C = (states.B / scale[:, None])[shuffle], (states.C * scale)[:, shuffle]
    moved = StateSpace(A=A, B=B, C=C, D=states.D)
    back = convert(moved, "second-order")
    assert oracle.error(moved, back.model, W) == 0.0


@pytest.mark.parametrize(
    "model",
    [
        StateSpace(A=[[0.0, 1.0], [-2.0, -3.0]], B=[[1.0], [1.0]], C=[[1.0, 0.0]]),
        StateSpace(A=[[-1.0, 0.0], [0.0, -2.0]], B=[[1.0], [1.0]], C=[[1.0, 1.0]]),
        StateSpace(A=[[-1.0]], B=[[1.0]], C=[[1.0]]),
        StateSpace(A=[[0.0, 3.0], [-2.0, -3.0]], B=[[0.0], [1.0]], C=[[1.0, 0.0]]),
    ],
)
def test_no_structure_is_refused(model: StateSpace) -> None:
    with pytest.raises(Refused, match=r"no second-order structure: . of . states are positions"):
        convert(model, "second-order")


def test_other_sources_are_refused_with_a_way_out() -> None:
    with pytest.raises(Refused, match="form modal"):
        convert(TransferFunction(numerator=[1.0], denominator=[1.0, 1.0]), "second-order")
    with pytest.raises(Refused, match="continuous"):
        convert(
            StateSpace(
                A=[[0.0, 1.0], [-0.5, 0.1]], B=[[0.0], [1.0]], C=[[1.0, 0.0]], time=TimeBase("sampled", period=1.0)
            ),
            "second-order",
        )


def test_a_singular_pencil_is_refused() -> None:
    source = SecondOrder(
        mass=np.diag([1.0, 0.0]), stiffness=np.diag([1.0, 0.0]), input=[[1.0], [1.0]], position_output=[[1.0, 1.0]]
    )
    for verb in (lambda: convert(source, "state-space"), lambda: inspect(source)):
        with pytest.raises(Refused, match="singular"):
            verb()


@pytest.mark.parametrize(
    ("field", "value", "place"),
    [
        ("mass", np.zeros((0, 0)), "mass"),
        ("damping", np.eye(2), "damping"),
        ("stiffness", np.ones((3, 2)), "stiffness"),
        ("input", np.ones((2, 1)), "input"),
        ("velocity_output", np.ones((1, 3)), "velocity_output"),
        ("direct", np.ones((1, 1)), "direct"),
        ("mass", np.full((3, 3), np.nan), r"mass\[0\]\[0\]"),
    ],
)
def test_shapes(field: str, value: Any, place: str) -> None:
    with pytest.raises(InputError, match=place):
        chain(FULL if field != "mass" else value, **({} if field == "mass" else {field: value}))


def test_an_output_is_needed_and_time_is_continuous() -> None:
    with pytest.raises(InputError, match="position_output"):
        SecondOrder(mass=[[1.0]], stiffness=[[1.0]], input=[[1.0]])
    with pytest.raises(InputError, match="continuous"):
        SecondOrder(
            mass=[[1.0]],
            stiffness=[[1.0]],
            input=[[1.0]],
            position_output=[[1.0]],
            time=TimeBase("sampled", period=1.0),
        )


@pytest.mark.parametrize("suffix", ["json", "npz"])
def test_files(suffix: str, tmp_path: Path) -> None:
    source = chain(FULL, inputs=(Signal("force", "N"), Signal("", "")))
    write(source, tmp_path / f"chain.{suffix}")
    assert digest(read(tmp_path / f"chain.{suffix}")) == digest(source)


def test_matrix_market_and_sparse_arrays(tmp_path: Path, run: Callable[..., Any]) -> None:
    (tmp_path / "K.mtx").write_text(
        "%%MatrixMarket matrix coordinate real symmetric\n2 2 3\n1 1 5.0\n2 1 -1.0\n2 2 4.0\n"
    )
    (tmp_path / "plant.json").write_text(
        '{"realize": 1, "kind": "second-order", "mass": [["0.1", 0], [0, 2]], "stiffness": {"file": "K.mtx"}, '
        '"input": [[1], [0]], "position_output": [[0, 1]]}'
    )
    model = read(tmp_path / "plant.json")
    assert isinstance(model, SecondOrder)
    assert model.stiffness.tolist() == [[5.0, -1.0], [-1.0, 4.0]] and model.decimals["mass"] == {(0, 0): "0.1"}
    np.savez(
        tmp_path / "plant.npz",
        kind="second-order",
        realize=1,
        mass=np.eye(2),
        input=np.array([[1.0], [0.0]]),
        position_output=np.array([[0.0, 1.0]]),
        stiffness_row=[0, 1],
        stiffness_col=[0, 1],
        stiffness_data=[5.0, 4.0],
        stiffness_shape=[2, 2],
    )
    sparse = read(tmp_path / "plant.npz")
    assert isinstance(sparse, SecondOrder) and sparse.stiffness.tolist() == [[5.0, 0.0], [0.0, 4.0]]
    done = run("inspect", tmp_path / "plant.json", "--json")
    assert done.status == 0
    # exact decimals count: det((0.1 s^2 + 5)(2 s^2 + 4) - 1) = 0
    squares = np.sort(np.roots([0.2, 10.4, 19.0]).real)[::-1]
    assert [mode["frequency"] for mode in done.record["modes"]] == pytest.approx(np.sqrt(-squares), rel=1e-12)
    assert [mode["damping"] for mode in done.record["modes"]] == [0.0, 0.0]


def test_modes_of_a_rigid_body() -> None:
    """A free mass, and an oscillator of 2 rad/s with damping ratio 0.05."""
    source = SecondOrder(
        mass=np.eye(2),
        damping=np.diag([0.0, 0.2]),
        stiffness=np.diag([0.0, 4.0]),
        input=[[1.0], [1.0]],
        position_output=[[1.0, 1.0]],
    )
    modes = inspect(source)["modes"]
    assert [mode["multiplicity"] for mode in modes] == [2, 1]
    assert modes[0]["frequency"] == 0.0 and modes[1]["frequency"] == 2.0
    assert modes[1]["damping"] == pytest.approx(0.05, rel=1e-15)
    assert inspect(convert(source, "state-space"))["poles"] == inspect(source)["poles"]


@pytest.mark.skipif(not DATA.exists(), reason="the large models are not part of the repository")
def test_a_hospital_building() -> None:
    """Chahlaoui & Van Dooren 2002: 24 degrees of freedom; the published state model has the same response."""
    given = np.load(DATA / "build_second_order.npz")
    source = SecondOrder(
        mass=given["M"],
        damping=given["D"],
        stiffness=given["K"],
        input=given["B"],
        position_output=given["C_pos"],
        velocity_output=given["C_vel"],
    )
    made = convert(source, "state-space")
    assert made.receipt.claim("peak-error").value == 0.0
    published = read(DATA / "build.npz")
    points = 1j * np.array([1.0, 5.2, 10.0, 30.0, 100.0])
    assert np.abs(source.evaluate(points) - published.evaluate(points)).max() < 1e-12
    assert digest(convert(made, "second-order").model) == digest(source)


@pytest.mark.skipif(not DATA.exists(), reason="the large models are not part of the repository")
def test_three_coupled_chains() -> None:
    """Truhar & Veselic 2009: 151 degrees of freedom, in doubles; poles against the eigenvalues of the state model."""
    given = np.load(DATA / "triple_chain_l50.npz")

    def dense(name: str) -> np.ndarray:
        matrix = np.zeros(given[f"{name}_shape"])
        np.add.at(matrix, (given[f"{name}_row"], given[f"{name}_col"]), given[f"{name}_data"])
        return matrix

    M, D, K = dense("M"), dense("D"), dense("K")
    source = SecondOrder(mass=M, damping=D, stiffness=K, input=given["B"], position_output=given["C_pos"])
    A = np.block([[np.zeros((151, 151)), np.eye(151)], [-np.linalg.solve(M, K), -np.linalg.solve(M, D)]])
    modes = inspect(source)["modes"]
    expected = np.sort(np.abs(np.linalg.eigvals(A)[lambda_upper(np.linalg.eigvals(A))]))
    assert [mode["frequency"] for mode in modes] == pytest.approx(expected, rel=1e-9)


def lambda_upper(values: np.ndarray) -> np.ndarray:
    """Return which eigenvalues are listed: one of each pair."""
    return np.asarray(values.imag >= 0)


MODAL: dict[str, tuple[TransferFunction, int]] = {
    "oscillator": (TransferFunction(numerator=[1.0], denominator=[1.0, 0.125, 4.0]), 1),
    "position and velocity": (TransferFunction(numerator=[2.0, 1.0], denominator=[1.0, 0.125, 4.0]), 1),
    "rigid body": (TransferFunction(numerator=[1.0, 3.0], denominator=[1.0, 0.0, 0.0]), 1),
    "two real poles": (TransferFunction(numerator=[1.0], denominator=[1.0, 3.0, 2.0]), 1),
    "feed-through": (TransferFunction(numerator=[1.0, 0.0, 1.0], denominator=[1.0, 0.125, 4.0]), 1),
    "huge": (TransferFunction(numerator=[1e300], denominator=[1.0, 1e150, 1e300]), 1),
    "two modes, a zero channel": (
        TransferFunction(
            numerator=[[[1.0], [0.0]], [[2.0, 1.0], [5.0]]],
            denominator=[[[1.0, 0.125, 4.0], [1.0]], [[1.0, 0.125, 4.0], [1.0, 0.0, 9.0]]],
        ),
        2,
    ),
}


@pytest.mark.parametrize("name", MODAL)
def test_modes_as_coordinates(name: str, oracle: Any) -> None:
    source, modes = MODAL[name]
    made = convert(source, "second-order")
    model = made.model
    assert isinstance(model, SecondOrder) and made.receipt.details["modes"] == modes == model.mass.shape[0]
    assert np.array_equal(model.mass, np.eye(modes))
    for matrix in (model.damping, model.stiffness):
        assert np.array_equal(matrix, np.diag(np.diag(matrix)))
    scale = 1e150 if name == "huge" else 1.0
    error = oracle.error(source, model, [scale * w for w in (0.03, 0.5, 1.1, 2.0, 3.3)])
    claim = made.receipt.claim("peak-error")
    assert error < 1e-13 and claim.holds and claim.value < 1e-14
    if name == "oscillator":
        assert not model.velocity_output.any()
    if name == "two modes, a zero channel":
        assert np.all(model.evaluate(1j)[0, 1] == 0)


def test_a_structure_in_other_coordinates_comes_back_as_its_modes(oracle: Any) -> None:
    source = chain(FULL, damping=0.0625 * STIFF, velocity_output=None, acceleration_output=None, direct=None)
    turn = np.array([[1.0, 2.0, 0.0], [0.0, 1.0, 3.0], [1.0, 0.0, 1.0]])
    states = convert(source, "state-space").model
    T = np.kron(np.eye(2), turn) + np.eye(6, k=3)
    mixed = StateSpace(A=np.linalg.solve(T, states.A @ T), B=np.linalg.solve(T, states.B), C=states.C @ T)
    with pytest.raises(Refused, match="pole-residue"):
        convert(mixed, "second-order")
    back = convert(convert(mixed, "pole-residue"), "second-order")
    assert back.model.mass.shape == (3, 3)
    assert oracle.error(source, back.model, W[1:5]) < 1e-11
    modes = inspect(source)["modes"]
    assert np.sqrt(np.sort(np.diag(back.model.stiffness))) == pytest.approx(
        [mode["frequency"] for mode in modes], rel=1e-12, abs=1e-7
    )
    # damping that is not proportional: the mode shapes are complex, and each mode takes two coordinates
    general = convert(convert(chain(FULL), "pole-residue"), "second-order")
    assert general.model.mass.shape[0] > 3
    assert any("mode shape is not real" in text for text in general.receipt.cautions)
    assert oracle.error(chain(FULL), general.model, W[1:5]) < 1e-11


@pytest.mark.parametrize(
    ("numerator", "denominator", "match"),
    [
        ([1.0], [1.0, 1.0], "real poles are no pairs"),
        ([1.0], [1.0, 4.0, 6.0, 4.0, 1.0], "repeats 4 times"),
        ([1.0, 0.0, 0.0, 1.0], [1.0, 0.125, 4.0], "polynomial part of degree 1"),
        ([3.0], [2.0], "at least one coordinate"),
        ([1e-300], [1.0, 1e-160, 1e-320], "scale time"),
    ],
)
def test_what_has_no_modes_in_pairs_is_refused(numerator: Any, denominator: Any, match: str) -> None:
    with pytest.raises(Refused, match=match):
        convert(TransferFunction(numerator=numerator, denominator=denominator), "second-order")
