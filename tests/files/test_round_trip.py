"""Every kind of model survives JSON and .npz bit by bit, and a frequency response survives CSV."""

import io
import json

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from realize import files
from realize.errors import InputError
from realize.models import (
    DeadTime,
    FrequencyResponse,
    Offset,
    PoleResidue,
    Sections,
    Signal,
    StateSpace,
    TimeBase,
    TransferFunction,
    ZeroPoleGain,
    digest,
    mark,
)
from realize.schema import KINDS, Receipt, judge

QUICK = settings(max_examples=25, deadline=None, suppress_health_check=list(HealthCheck))
REALS = st.floats(allow_nan=False, allow_infinity=False)
NONZERO = REALS.filter(lambda value: value != 0)
DECIMALS = st.from_regex(r"-?[0-9]{1,25}\.[0-9]{0,25}(e[+-]?[0-9]{1,3})?", fullmatch=True)
NUMBERS = st.one_of(REALS, st.integers(-(2**60), 2**60), DECIMALS)
SAFE = st.text(st.characters(codec="utf-8"), max_size=6)
SIZES = st.tuples(st.integers(1, 3), st.integers(1, 3))


def matrix(rows, columns, entries=NUMBERS):
    return st.lists(st.lists(entries, min_size=columns, max_size=columns), min_size=rows, max_size=rows)


@st.composite
def roots(draw):
    """A list closed under conjugation, as pairs and plain reals."""
    real = draw(st.lists(NUMBERS, max_size=3))
    pairs = draw(st.lists(st.tuples(REALS, NONZERO), max_size=2))
    return real + [[re, sign * im] for re, im in pairs for sign in (1, -1)]


@st.composite
def records(draw, kind):
    p, m = draw(SIZES)
    n = draw(st.integers(0, 3))
    record = {"realize": 1, "kind": kind}
    if draw(st.booleans()):
        number = st.one_of(st.floats(1e-300, 1e300), st.just("44100"), st.just("0.1"))
        record["time"] = {"domain": "sampled", draw(st.sampled_from(["period", "rate"])): draw(number)}
    nonzero = st.one_of(NONZERO, st.just("0.1"), st.just("1e-400"), st.just("1e400"))
    if kind == "sections":
        p = m = 1
        record["gain"] = draw(st.one_of(REALS, st.just("0.1")))
        three = st.lists(NUMBERS, min_size=3, max_size=3)
        bottom = st.tuples(NUMBERS, NUMBERS, NONZERO).map(list)
        record["sections"] = draw(
            st.lists(st.fixed_dictionaries({"numerator": three, "denominator": bottom}), max_size=3)
        )
    elif kind == "transfer-function":
        record["numerator"] = draw(matrix(p, m, st.lists(NUMBERS, min_size=1, max_size=4)))
        bottom = st.tuples(st.lists(NUMBERS, max_size=3), nonzero).map(lambda parts: [*parts[0], parts[1]])
        record["denominator"] = draw(st.one_of(matrix(p, m, bottom), bottom))
    elif kind == "zero-pole-gain":
        record["zeros"] = draw(matrix(p, m, roots()))
        record["poles"] = draw(matrix(p, m, roots()))
        record["gain"] = draw(matrix(p, m))
    elif kind == "pole-residue":
        poles = draw(st.lists(REALS, min_size=n, max_size=n, unique=True))
        record["poles"] = [[pole, 0.0] for pole in poles] + [[1.5, 2.5], [1.5, -2.5]]
        first = draw(matrix(p, m, st.tuples(REALS, REALS)))
        real = [draw(matrix(p, m)) for _ in poles]
        mirrored = [[[re, -im] for re, im in row] for row in first]
        record["residues"] = real + [[[list(pair) for pair in row] for row in first], mirrored]
        record["direct"] = draw(st.one_of(matrix(p, m), st.lists(matrix(p, m), min_size=1, max_size=3)))
    elif kind == "state-space":
        record.update(A=draw(matrix(n, n)), B=draw(matrix(n, m)), C=draw(matrix(p, n)), D=draw(matrix(p, m)))
        if n and draw(st.booleans()):
            record["E"] = draw(matrix(n, n))
        if draw(st.booleans()):
            record["states"] = [{"name": f"x{k}", "unit": draw(SAFE)} for k in range(n)]
    elif kind == "matrix-fraction":
        side = record["side"] = draw(st.sampled_from(["left", "right"]))
        size = m if side == "right" else p
        record["numerator"] = draw(st.lists(matrix(p, m), min_size=1, max_size=3))
        # a leading zero matrix would be dropped
        record["denominator"] = [np.eye(size).tolist(), *draw(st.lists(matrix(size, size), max_size=2))]
        record["numerator"][0][0][0] = 1.5
    elif kind == "impulse-response":
        record["period"] = draw(st.floats(1e-300, 1e300))
        record.pop("time", None)
        record["samples"] = draw(st.lists(matrix(p, m, REALS), min_size=1, max_size=4))
    elif kind == "time-record":
        record["period"] = draw(st.floats(1e-300, 1e300))
        record.pop("time", None)
        k = draw(st.integers(1, 4))
        record["input"], record["output"] = draw(matrix(k, m)), draw(matrix(k, p))
    elif kind == "second-order":
        n = max(n, 1)
        record.update({name: draw(matrix(n, n)) for name in ("mass", "damping", "stiffness")}, input=draw(matrix(n, m)))
        outputs = ("position_output", "velocity_output", "acceleration_output")
        for name in draw(st.sets(st.sampled_from(outputs), min_size=1)):
            record[name] = draw(matrix(p, n))
        record["direct"] = draw(matrix(p, m))
        record.pop("time", None)
    else:
        frequency = sorted(draw(st.sets(st.floats(0, 1e300), min_size=1, max_size=4)))
        record["frequency"] = frequency
        record["frequency_unit"] = draw(st.sampled_from(["Hz", "rad/s"]))
        record.pop("time", None)
        k = len(frequency)
        record["response"] = draw(st.lists(matrix(p, m, st.tuples(REALS, REALS).map(list)), min_size=k, max_size=k))
        if draw(st.booleans()):
            record["deviation"] = draw(st.lists(matrix(p, m, st.floats(0, 1e300)), min_size=k, max_size=k))
            record["coherence"] = draw(st.lists(matrix(p, m, st.floats(0, 1)), min_size=k, max_size=k))
    if draw(st.booleans()):
        record["inputs"] = [{"name": f"u{k}" + draw(SAFE), "unit": draw(SAFE)} for k in range(m)]
        record["outputs"] = [{"name": f"y{k}" + draw(SAFE)} for k in range(p)]
    if draw(st.booleans()):
        record["offset"] = {"inputs": draw(st.lists(REALS, min_size=m, max_size=m))}
    if p == m and draw(st.booleans()):
        record["ports"] = {"parameter": draw(st.sampled_from(["scattering", "impedance", "admittance"]))}
        record["ports"]["reference"] = draw(st.lists(st.floats(1e-3, 1e9), min_size=p, max_size=p))
    if draw(st.booleans()) and "time" not in record:
        record["dead_time"] = {"channels": draw(matrix(p, m, st.floats(0, 1e9)))}
    return record


def bits(value):
    """Everything in a value that a file could lose, negative zeros included."""
    if isinstance(value, np.ndarray):
        return (value.dtype.str, value.shape, value.tobytes())
    if isinstance(value, (tuple, list)):
        return [bits(entry) for entry in value]
    return repr(value)


def assert_same(left, right):
    assert type(left) is type(right)
    for name, value in left.parameters().items():
        assert bits(getattr(right, name)) == bits(value), name
    for name in ("time", "inputs", "outputs", "dead_time", "offset", "ports", "receipts"):
        assert repr(getattr(left, name)) == repr(getattr(right, name)), name
    assert left.decimals == right.decimals
    assert digest(left) == digest(right)


def through_npz(model, folder):
    path = folder / "model.npz"
    files.write(model, path)
    return files.read(path)


@pytest.mark.parametrize("kind", KINDS)
def test_round_trip_of_invented_models(kind, tmp_path):
    accepted = []

    @QUICK
    @given(records(kind))
    def check(record):
        try:
            model = files.model_from_record(record)
        except InputError as error:
            # invented numbers may be beyond the doubles, cancel to zero, or name a signal twice
            assert any(
                part in str(error) for part in ("finite", "zero", "doubles", "inverse", "different names", "again")
            )
            return
        accepted.append(model)
        assert_same(model, files.model_from_record(json.loads(files.dumps(model))))
        assert_same(model, files.model_from_record(files.model_to_record(model)))
        assert_same(model, through_npz(model, tmp_path))

    check()
    assert len(accepted) >= 5


def receipt():
    model = StateSpace(A=[[-1.0]], B=[[1.0]], C=[[1.0]])
    claims = [judge("response-error", 3.1e-15, limit=1e-9, basis="proved", where={"frequency": 41.7, "output": 0})]
    return Receipt(
        step="convert",
        method="cascade",
        route=["transfer-function", "state-space"],
        source=mark(model),
        result=mark(model),
        claims=[*claims, judge("peak-error", float("inf"), limit=1.0)],
        fragility={"source": 2e-12, "result": None},
        cautions=["ä § \u2028"],
        details={"count": 3, "size": 3.0, "list": [1, None, "x"]},
        seconds=0.03,
    )


FULL = {
    "inputs": (Signal("torque", "N*m"),),
    "outputs": (Signal("angle °", "rad"), Signal("", "V")),
    "dead_time": DeadTime((0.125,), (0.0, 0.25), ((0.0,), (0.1,))),
    "receipts": (receipt(), receipt()),
}


@pytest.mark.parametrize(
    "model",
    [
        StateSpace(
            A=[[-1.0, -0.0], [5e-324, 1.7976931348623157e308]],
            B=[[1], [0.1]],
            C=[[1, 2], [3, 4]],
            states=(Signal("x", "m"), Signal("", "m/s")),
            offset=Offset((1.5,), None, (-0.0, 3.0)),
            **FULL,
        ),
        TransferFunction(numerator=[[[1.0, 2]], [[3.0]]], denominator=[1, -0.0, 3], **FULL),
        ZeroPoleGain(zeros=[[[]], [[1j, -1j]]], poles=[[[-1.0]], [[-2, -3]]], gain=[[1.0], [-0.0]], **FULL),
        PoleResidue(poles=[-1, -1], powers=[1, 2], residues=np.ones((2, 2, 1)), direct=np.ones((2, 2, 1)), **FULL),
        PoleResidue(poles=[], residues=[], direct=[[1.0], [2.0]], **FULL),
        StateSpace(A=[], B=[], C=[], D=[[1.0], [2.0]], **FULL),
        FrequencyResponse(
            frequency=[0, 1e-3], frequency_unit="rad/s", response=np.ones((2, 2, 1)) * (1 - 0.0j), **FULL
        ),
        Sections(sections=[], gain=-0.0, time=TimeBase("sampled", rate="44100")),
        Sections(sections=[[[0, 0, 1], [0, 1, 2]]], time=TimeBase("sampled", period=0.001)),
        TransferFunction(
            numerator=[0.1],
            denominator=[1, float("inf")],
            decimals={"numerator": {(0, 0, 0): "0.1"}, "denominator": {(0, 0, 1): "1e999"}},
        ),
    ],
    ids=lambda model: model.kind,
)
def test_round_trip_of_everything_a_model_carries(model, tmp_path):
    for suffix in (".json", ".npz"):
        path = tmp_path / f"model{suffix}"
        files.write(model, path)
        assert_same(model, files.read(path))


def test_sparse_matrices_are_stored_sparse(tmp_path):
    A = np.diag(np.full(40, -1.0))
    A[3, 7] = -0.0
    model = StateSpace(A=A, B=np.ones((40, 1)), C=np.ones((1, 40)))
    files.write(model, tmp_path / "m.npz")
    assert "A_row" in np.load(tmp_path / "m.npz").files
    assert_same(model, files.read(tmp_path / "m.npz"))


def test_text_is_readable_and_keeps_decimals_and_time():
    model = files.model_from_record(
        {
            "realize": 1,
            "kind": "transfer-function",
            "time": {"domain": "sampled", "rate": "44100"},
            "numerator": ["0.1", -0.0, 1],
            "denominator": [1, "2.50"],
        }
    )
    text = files.dumps(model)
    assert '"numerator": ["0.1", -0.0, 1.0]' in text
    assert '"denominator": [1.0, "2.50"]' in text
    assert '"time": {"domain": "sampled", "rate": "44100"}' in text
    assert model.exact("denominator")[0][0][1] == (5, 2)
    rows = files.dumps(StateSpace(A=np.eye(2), B=np.ones((2, 1)), C=np.ones((1, 2))))
    assert "    [1.0, 0.0],\n    [0.0, 1.0]\n" in rows


def test_standard_streams(monkeypatch, tmp_path):
    model = TransferFunction(numerator=[1], denominator=[1, 2])

    class Stream:
        buffer = io.BytesIO()

    monkeypatch.setattr("sys.stdout", Stream)
    files.write(model, "-")
    for data in (Stream.buffer.getvalue(), b"\xef\xbb\xbf" + Stream.buffer.getvalue()):
        Stream.buffer = io.BytesIO(data)
        monkeypatch.setattr("sys.stdin", Stream)
        assert_same(model, files.read("-"))
    files.write(model, tmp_path / "m.npz")
    Stream.buffer = io.BytesIO((tmp_path / "m.npz").read_bytes())
    assert_same(model, files.read("-"))
    Stream.buffer = io.BytesIO(b"omega,re,im\n1,2,3\n")
    assert files.read("-").shape == (1, 1)


@QUICK
@given(records("frequency-response"))
def test_table_keeps_every_bit(record):
    try:
        model = files.model_from_record(record)
    except InputError:
        return
    stream = io.BytesIO()
    files.FORMATS["table"].write(model, stream)
    source = files.table.Source("t", None, io.BytesIO(stream.getvalue()), True)
    back = files.FORMATS["table"].read(source, files.table.ReadOptions())
    for name in ("frequency", "response", "deviation", "coherence"):
        assert bits(getattr(back, name)) == bits(getattr(model, name))
    if "inputs" in record:
        assert_same(model.with_(decimals={}), back)


def test_table_of_one_and_of_several_channels(tmp_path):
    one = FrequencyResponse(frequency=[0.1, 3], frequency_unit="Hz", response=[[[1 + 2j]], [[3 - 0.0j]]])
    files.write(one, tmp_path / "one.csv")
    assert (tmp_path / "one.csv").read_text().splitlines()[:2] == ["frequency_hz,real,imaginary", "0.1,1.0,2.0"]
    assert_same(one, files.read(tmp_path / "one.csv"))
    more = FrequencyResponse(
        frequency=[1.0],
        frequency_unit="rad/s",
        response=[[[1, 2], [3, 4]]],
        outputs=(Signal("a"), Signal("b")),
        inputs=(Signal("c"), Signal("d")),
        receipts=(receipt(),),
    )
    files.write(more, tmp_path / "more.csv")
    assert "frequency_rad/s,a/c_real,a/c_imaginary,a/d_real" in (tmp_path / "more.csv").read_text()
    assert_same(more, files.read(tmp_path / "more.csv"))
