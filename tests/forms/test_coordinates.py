"""Changes of coordinates: the transform, the way back, what travels along, what is refused."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import realize
from realize.errors import Refused, UsageError
from realize.forms.coordinates import Setting
from realize.forms.registry import TABLE
from realize.models import DeadTime, Offset, PoleResidue, Sections, Signal, StateSpace, TimeBase, ZeroPoleGain
from realize.schema import FORMS

SAMPLED = TimeBase("sampled", period=0.01)


def plants() -> dict[str, StateSpace]:
    """Stable minimal plants of order 0 to 6, one and several channels, both kinds of time, odd units."""
    rng = np.random.default_rng(7)
    A = np.array([[-1.0, 2.0, 0.0, 0.0], [-3.0, -0.2, 0.5, 0.0], [0.0, 0.1, -4.0, 6.0], [0.3, 0.0, -5.0, -0.4]])
    B, C = rng.standard_normal((4, 2)), rng.standard_normal((3, 4))
    units = np.ldexp(1.0, [40, -17, 3, -60])
    one = StateSpace(A=A, B=B[:, :1], C=C[:1])
    return {
        "order 0": StateSpace(A=np.zeros((0, 0)), B=np.zeros((0, 1)), C=np.zeros((1, 0)), D=[[2.0]]),
        "order 1": StateSpace(A=[[-3.0]], B=[[2e-7]], C=[[5e9]], D=[[1.0]]),
        "one channel": one,
        "several channels": StateSpace(A=A, B=B, C=C, D=rng.standard_normal((3, 2))),
        "odd units": StateSpace(A=A * units[:, None] / units, B=B * units[:, None], C=C / units),
        "sampled": StateSpace(A=0.15 * A, B=B, C=C, time=SAMPLED),
        "microseconds": StateSpace(A=1e6 * A, B=B, C=C),
    }


PLANTS = plants()


def changed(plant: StateSpace, form: str, **options: Any) -> Any:
    """The form of a plant, straight from its function."""
    setting = Setting(plant.time.seconds if plant.time.sampled else None, **options)
    return TABLE[form].apply(plant.A, plant.B, plant.C, plant.D, setting)


@pytest.mark.parametrize("name", PLANTS)
@pytest.mark.parametrize("form", TABLE)
def test_transform_and_way_back_belong_together(form: str, name: str) -> None:
    """T S = I and S A T, S B, C T are the new matrices, row by row in the units of the old states."""
    plant = PLANTS[name]
    try:
        new = changed(plant, form)
    except Refused:
        pytest.skip("the form does not exist for this plant")
    T, S = new.transform, new.back
    n = plant.A.shape[0]
    allowed = 1e-13 * n * max(new.condition, 1.0)
    size = np.linalg.norm(T, axis=1) if n else np.ones(0)
    assert np.all(np.abs(T @ S - np.eye(n)) <= allowed * size[:, None] / size[None, :])
    assert np.all(np.abs(S @ T - np.eye(n)) <= allowed)
    for ours, theirs in ((new.A, S @ plant.A @ T), (new.B, S @ plant.B), (new.C, plant.C @ T)):
        assert np.linalg.norm(ours - theirs) <= 10 * allowed * max(np.linalg.norm(theirs), np.linalg.norm(ours))
    assert np.array_equal(new.D, plant.D)
    assert new.condition >= 1 - 1e-12
    json.dumps(new.details, allow_nan=False)


@pytest.mark.parametrize("form", TABLE)
def test_every_kind_has_every_form(form: str) -> None:
    """The response stays, whatever the kind of the source; a transform appears against states only."""
    residues = np.array([[[1.0, 2.0]], [[3.0, -1.0]]])
    if form in ("controllable-companion", "controllability"):
        # these need one input
        residues = residues.transpose(0, 2, 1)
    sources = [
        realize.TransferFunction(numerator=[1, 3], denominator=[1, 4, 8, 6]),
        ZeroPoleGain(zeros=[-3.0], poles=[-1.0, -2 + 1j, -2 - 1j], gain=2.0, time=realize.TimeBase()),
        PoleResidue(poles=[-1.0, -2.0], residues=residues),
        Sections(sections=[[[0, 1, 3], [1, 0.5, 9]], [[0, 0, 1], [0, 1, 2]]]),
        PLANTS["one channel"],
    ]
    points = 1j * np.geomspace(0.1, 20, 9)
    for source in sources:
        done = realize.convert(source, "state-space", form=form).require()
        assert done.receipt.route[-1] == f"state-space:{form}" and done.receipt.details["form"] == form
        one, two = source.evaluate(points), done.model.evaluate(points)
        assert np.max(np.abs(one - two)) <= 1e-12 * np.max(np.abs(one))
        record = done.receipt.details.get("coordinates")
        if record is None:
            assert TABLE[form].from_states_only
            continue
        assert record["form"] == form and record["condition"] >= 1 - 1e-12
        assert ("transform" in record) == ("back" in record) == isinstance(source, StateSpace)
        # and back to where it came from
        again = realize.convert(done, source.kind).require()
        assert np.max(np.abs(one - again.model.evaluate(points))) <= 1e-11 * np.max(np.abs(one))


@pytest.mark.parametrize("form", TABLE)
def test_signals_dead_time_and_operating_point_travel(form: str) -> None:
    plant = PLANTS["one channel"].with_(
        inputs=(Signal("torque", "N*m"),),
        outputs=(Signal("angle", "rad"),),
        states=tuple(Signal(f"x{k}", "m") for k in range(4)),
        dead_time=DeadTime((0.25,), (0.0,), ((0.0,),)),
        offset=Offset((1.0,), (2.0,), (1.0, -2.0, 3.0, 0.5)),
    )
    done = realize.convert(plant, "state-space", form=form)
    new = done.model
    assert (new.inputs, new.outputs, new.dead_time, new.time) == (
        plant.inputs,
        plant.outputs,
        plant.dead_time,
        plant.time,
    )
    T, S = (np.array(done.receipt.details["coordinates"][name]) for name in ("transform", "back"))
    assert new.offset is not None and new.offset.inputs == (1.0,)
    assert np.allclose(T @ np.array(new.offset.states), plant.offset.states, rtol=1e-12, atol=1e-12)
    assert np.allclose(S @ np.array(plant.offset.states), new.offset.states, rtol=1e-12, atol=0)
    text = " ".join(done.receipt.cautions)
    assert "left behind" not in text or any(s.name for s in new.states) is False
    assert "operating point of the states is left behind" not in text


def test_scaled_is_exact_and_keeps_names() -> None:
    plant = PLANTS["odd units"].with_(states=tuple(Signal(f"x{k}", "m" if k else "") for k in range(4)))
    done = realize.convert(plant, "state-space", form="scaled")
    assert all(
        claim.value == 0 and claim.basis == "proved" for claim in done.receipt.claims if claim.unit == "relative"
    )
    record = done.receipt.details["coordinates"]
    k = record["exponents"]
    assert [s.name for s in done.model.states] == ["x0", "x1", "x2", "x3"]
    assert [s.unit for s in done.model.states] == ["", *(f"2^{e} m" if e else "m" for e in k[1:])]
    assert np.array_equal(np.array(record["transform"]), np.diag(np.ldexp(1.0, k)))
    assert record["spread"]["after"] < 1e4 < 1e20 < record["spread"]["before"]
    again = realize.convert(done, "state-space", form="scaled").receipt.details["coordinates"]
    assert again["spread"]["after"] <= record["spread"]["after"]


@pytest.mark.parametrize("ordering", ["speed", "damping", "stability"])
@pytest.mark.parametrize("sampled", [False, True])
def test_schur_blocks_come_in_the_order_asked_for(ordering: str, sampled: bool) -> None:
    rng = np.random.default_rng(3)
    poles = [(-1.0, 0), (-50.0, 0), (-0.2, 9.0), (-3.0, 1.0), (0.4, 2.0), (-0.01, 0), (-7.0, 0.1)]
    blocks = [np.array([[r, w], [-w, r]]) if w else np.array([[r]]) for r, w in poles]
    n = sum(b.shape[0] for b in blocks)
    A = np.zeros((n, n))
    at = 0
    for b in blocks:
        A[at : at + b.shape[0], at : at + b.shape[0]] = b
        at += b.shape[0]
    if sampled:
        import scipy.linalg

        A = scipy.linalg.expm(0.01 * A)
    Q, _ = np.linalg.qr(rng.standard_normal((n, n)))
    plant = StateSpace(
        A=Q @ A @ Q.T,
        B=rng.standard_normal((n, 2)),
        C=rng.standard_normal((2, n)),
        time=SAMPLED if sampled else TimeBase(),
    )
    done = realize.convert(plant, "state-space", form="schur", ordering=ordering)
    R = done.model.A
    assert not np.any(np.tril(R, -2)) and not np.any((np.diagonal(R, -1)[1:] != 0) & (np.diagonal(R, -1)[:-1] != 0))
    record = done.receipt.details["coordinates"]
    s = [
        (np.log(complex(*p)) / 0.01 if sampled else complex(*p)) for p in ((b["re"], b["im"]) for b in record["blocks"])
    ]
    key: Callable[[complex], Any] = {
        "speed": lambda z: (0.0, abs(z)),
        "damping": lambda z: (0.0, -z.real / abs(z)),
        "stability": lambda z: (float(z.real < 0), abs(z)),
    }[ordering]
    truth = sorted(key(complex(*p)) for p in poles)
    assert np.allclose([key(z) for z in s], truth, rtol=1e-9)
    if ordering == "stability":
        assert record["unstable"] == 2
    for block, z in zip(record["blocks"], s, strict=True):
        assert block["frequency"] == pytest.approx(abs(z), rel=1e-9)
        assert block["damping"] == pytest.approx(-z.real / abs(z), abs=1e-9)


def test_schur_says_which_order_is_undecided() -> None:
    """Two poles of one size to the last bit can change places; the third cannot."""
    A = np.array([[-1.0, 0.0, 1.0], [0.0, -1.0 - 1e-15, 2.0], [0.0, 0.0, -4.0]])
    new = changed(StateSpace(A=A, B=np.ones((3, 1)), C=np.ones((1, 3))), "schur")
    assert new.details["undecided"] == [[0, 1]]


def test_a_descriptor_is_solved_or_refused() -> None:
    rng = np.random.default_rng(1)
    plant = PLANTS["one channel"]
    E = rng.standard_normal((4, 4)) + 4 * np.eye(4)
    source = plant.with_(A=E @ plant.A, B=E @ plant.B, E=E)
    done = realize.convert(source, "state-space", form="schur").require()
    record = done.receipt.details["coordinates"]
    assert done.model.E is None and "E was solved for" in record["descriptor"]
    assert 1 <= record["descriptor_condition"] < 20
    T, S = np.array(record["transform"]), np.array(record["back"])
    assert np.allclose(E @ T @ done.model.A @ S, source.A, rtol=1e-12, atol=1e-12)
    with pytest.raises(Refused, match=r"E is singular within rounding.*cascade"):
        realize.convert(plant.with_(E=np.diag([1.0, 1.0, 1.0, 0.0])), "state-space", form="schur")


@pytest.mark.parametrize("form", TABLE)
def test_an_improper_plant_keeps_its_polynomial_part(form: str) -> None:
    source = realize.TransferFunction(numerator=[1, 2, 3, 4, 5], denominator=[1, 4, 8])
    done = realize.convert(source, "state-space", form=form).require()
    points = 1j * np.geomspace(0.1, 100, 9)
    one = source.evaluate(points)
    assert np.allclose(done.model.evaluate(points), one, rtol=1e-12)
    if "coordinates" in done.receipt.details:
        assert "polynomial part" in done.receipt.details["coordinates"]["descriptor"]


def test_a_form_that_ruins_the_model_is_refused_with_its_condition(run: Callable[..., Any], tmp_path: Path) -> None:
    # poles of very different size, mixed: no scaling tells them apart again
    n = 14
    Q = np.linalg.qr(np.random.default_rng(1).standard_normal((n, n)))[0]
    A = Q @ np.diag(-np.geomspace(1e-9, 1e9, n)) @ Q.T
    plant = StateSpace(A=A, B=np.ones((n, 1)), C=np.ones((1, n)))
    file, out = tmp_path / "plant.json", tmp_path / "out.json"
    realize.write(plant, file)
    arguments = ["convert", file, "--to", "state-space", "--form", "schur", "-o", out, "--no-second-opinion"]
    done = run(*arguments)
    assert done.status == 5 and "condition number 1.0e+00" in done.err and "--form scaled" in done.err
    assert "--force" in done.err and not out.exists()
    done = run(*arguments, "--force", "--json")
    assert done.status == 4 and out.exists()
    claim = next(claim for claim in done.record["claims"] if claim["name"] == "peak-error")
    assert claim["holds"] is False
    assert run(*arguments[:5], "scaled", *arguments[6:]).status == 0


def test_wrong_usage() -> None:
    plant = PLANTS["one channel"]
    with pytest.raises(UsageError, match="--ordering goes with"):
        realize.convert(plant, "state-space", form="scaled", ordering="speed")
    with pytest.raises(UsageError, match="no ordering"):
        realize.convert(plant, "state-space", form="schur", ordering="size")
    with pytest.raises(UsageError, match="goes with --to state-space"):
        realize.convert(plant, "transfer-function", form="schur")


def test_explain_names_realization_and_form(run: Callable[..., Any], tmp_path: Path) -> None:
    file = tmp_path / "plant.json"
    realize.write(realize.TransferFunction(numerator=[1], denominator=[1, 2, 3]), file)
    done = run("convert", file, "--to", "state-space", "--form", "schur", "--explain")
    assert (
        done.status == 0
        and "-> state-space:cascade" in done.out
        and "state-space:cascade -> state-space:schur" in done.out
    )


def test_large_transforms_stay_out_of_the_record() -> None:
    n = 201
    plant = StateSpace(A=np.diag(-np.arange(1.0, n + 1)) + 0.1 * np.eye(n, k=1), B=np.ones((n, 1)), C=np.ones((1, n)))
    record = realize.convert(plant, "state-space", form="scaled").receipt.details["coordinates"]
    assert "transform" not in record and "TABLE['scaled'].apply" in record["note"]


def test_the_table_is_part_of_the_schema() -> None:
    assert set(TABLE) <= set(FORMS)
    for name, form in TABLE.items():
        assert form.name == name and form.says and form.source and form.instead in FORMS and form.instead != name


@pytest.mark.parametrize("seed", range(30))
def test_scaling_a_scaled_model_changes_nothing(seed: int) -> None:
    rng = np.random.default_rng(seed)
    n, m, p = rng.integers(1, 12), rng.integers(1, 4), rng.integers(1, 4)
    spread = rng.choice([1, 6, 30, 150, 300])

    def drawn(rows: int, columns: int) -> Any:
        size = rng.standard_normal((rows, columns)) * 10.0 ** rng.uniform(-spread, spread, (rows, columns))
        return np.where(rng.random((rows, columns)) < rng.random(), 0.0, size)

    given = drawn(n, n), drawn(n, m), drawn(p, n), np.zeros((p, m))
    setting = Setting(period=None if seed % 2 else 1.0)
    with np.errstate(all="ignore"):
        one = TABLE["scaled"].apply(*given, setting)
        two = TABLE["scaled"].apply(one.A, one.B, one.C, one.D, setting)
    assert not any(two.details["exponents"]) and np.array_equal(one.A, two.A)
    k = np.array(one.details["exponents"])
    # nothing was rounded
    for new, old in ((np.ldexp(one.A, k[:, None] - k), given[0]), (np.ldexp(one.B, k[:, None]), given[1])):
        assert np.array_equal(new, old)


def test_a_filter_in_companion_form_far_from_1_has_every_form() -> None:
    """12th order at 1 kHz: coefficients up to 1e45, poles all of one size, a chain from a large B to a small C."""
    poles = 2e3 * np.pi * np.exp(1j * np.pi * (2 * np.arange(12) + 13) / 24)
    a = np.real(np.poly(poles))
    A = np.vstack([-a[1:], np.eye(12)[:-1]])
    plant = StateSpace(A=A, B=np.eye(12)[:, :1], C=a[-1] * np.eye(12)[-1:])
    for form in TABLE:
        done = realize.convert(plant, "state-space", form=form).require()
        assert done.receipt.claim("peak-error").value < 1e-12, form
        assert "transform" in done.receipt.details["coordinates"], form
