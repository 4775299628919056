"""What is not a model is refused by file, field and index as the user wrote it, quickly, and never with a traceback."""

import json
import os
import random
import time

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from realize import files
from realize.errors import InputError, RealizeError, Refused, UsageError

QUICK = settings(max_examples=80, deadline=None, suppress_health_check=list(HealthCheck))
TF = {"realize": 1, "kind": "transfer-function", "numerator": [1, 2], "denominator": [1, 2, 3]}
SS = {"realize": 1, "kind": "state-space", "A": [[1, 2], [3, 4]], "B": [[1], [2]], "C": [[1, 2]]}
SECTION = {"numerator": [0, 0, 1], "denominator": [0, 1, 2]}
SOS = {"realize": 1, "kind": "sections", "sections": [SECTION, SECTION]}
ZPG = {"realize": 1, "kind": "zero-pole-gain", "zeros": [], "poles": [-1], "gain": 1}
PR = {"realize": 1, "kind": "pole-residue", "poles": [-1], "residues": [[[1]]]}


def text_of(base, **changes):
    return json.dumps({**base, **changes})


CASES = [
    # text, place as the user wrote it, words of the message
    (text_of(TF, numerator=[1, 2, None]), "numerator[2]", "null"),
    (text_of(TF, numerator=[1, True]), "numerator[1]", "true"),
    (text_of(TF, numerator=[1, {}]), "numerator[1]", "an empty object"),
    (text_of(TF, numerator=[1, float("nan")]), "numerator[1]", "NaN"),
    (text_of(TF, numerator=[1, float("-inf")]), "numerator[1]", "-Infinity"),
    (text_of(TF).replace("[1, 2]", "[1, 1e999]"), "numerator[1]", "largest double"),
    (text_of(TF, numerator=["1e999999999"]), "numerator[0]", "exponent within +-5000"),
    (text_of(TF, numerator=["1e5001"]), "numerator[0]", "exponent within +-5000"),
    (text_of(TF, numerator=["1" * 2001]), "numerator[0]", "2001 digits"),
    (text_of(TF, numerator=["0x10"]), "numerator[0]", "decimal string"),
    (text_of(TF, numerator=[" 1"]), "numerator[0]", "decimal string"),
    (text_of(TF, numerator=["1_0"]), "numerator[0]", "decimal string"),
    (text_of(TF, numerator=["١"]), "numerator[0]", "decimal string"),
    (text_of(TF, numerator=["nan"]), "numerator[0]", "decimal string"),
    (text_of(TF, numerator=[10**400]), "numerator[0]", "integer of 401 digits"),
    (text_of(TF).replace("[1, 2]", "[1, " + "7" * 5000 + "]"), "numerator[1]", "integer of 5000 digits"),
    (text_of(TF, numerator=[[[1], [2]], [[1]]]), "numerator[1]", "1 entries; expected 2, as in numerator[0]"),
    (text_of(TF, numerator=[[[1], [2]], [[1], [2, []]]]), "numerator[1][1][1]", "empty list"),
    (text_of(TF, numerator=[1, [2]]), "numerator[1]", "list of 1"),
    (text_of(TF, numerator=[[1]]), "numerator[0][0]", "expected a list"),
    (text_of(TF, numerator=[]), "numerator", "empty polynomial"),
    (text_of(TF, numerator=3), "numerator", "one polynomial"),
    (text_of(TF, denominator=[0, 0]), "denominator", "not zero"),
    (text_of(SS, A=[[1, 2], [3]]), "A[1]", "1 entries; expected 2, as in A[0]"),
    (text_of(SS, A=[[1, 2], [3, "x"]]), "A[1][1]", "'x'"),
    (text_of(SS, A=[[1, 2], [3, 4], [5, 6]]), "A", "3 x 2"),
    (text_of(SS, B=[1, 2]), "B[0]", "[[1.0], [2.0]]"),
    (text_of(SS, B=[[1]]), "B", "1 rows; expected 2"),
    (text_of(SS, inputs=[{"name": "u", "unit": 3}]), "inputs[0].unit", "a text"),
    (text_of(SS, inputs=[{"name": "u", "units": "V"}]), "inputs[0].units", "'unit'"),
    (text_of(SS, inputs=["u"]), "inputs[0]", "an object"),
    (text_of(SS, inputs=[{}, {}]), "inputs", "2 entries; expected 1"),
    (text_of(SS, outputs=[{"name": "\ud800"}]), "outputs[0].name", "surrogate"),
    (text_of(SS, a=1), "a", "did you mean 'A'"),
    (text_of(SS, recepts=[]), "recepts", "did you mean 'receipts'"),
    (text_of(SS, states=[{}]), "states", "1 entries; expected 2"),
    (text_of(SS, A={"file": "A.mtx", "x": 1}), "A.x", "unknown"),
    (text_of(SS, time={"domain": "sampled"}), "time", "neither period nor rate"),
    (text_of(SS, time={"domain": "sampled", "period": 0}), "time.period", "greater than zero"),
    (text_of(SS, time={"domain": "sampled", "period": "1e-400"}), "time.period", "double"),
    (text_of(SS, time={"domain": "sampled", "period": None}), "time.period", "null"),
    (text_of(SS, time={"domain": "discrete", "period": 1}), "time.domain", "continuous"),
    (text_of(SS, time=1), "time", "domain"),
    (text_of(SS, dead_time={"inputs": [-1]}), "dead_time.inputs[0]", "not negative"),
    (text_of(SS, dead_time={"inputs": [1, 2]}), "dead_time.inputs", "expected shape [1]"),
    (text_of(SS, dead_time={"channels": [[0], []]}), "dead_time.channels[1]", "0 entries"),
    (text_of(SS, offset={"states": [1]}), "offset.states", "1 values; expected 2"),
    (text_of(SS, offset={"states": [1, "1e999"]}), "offset.states[1]", "within the doubles"),
    (text_of(SS, ports={"parameter": "impedances"}), "ports.parameter", "one of scattering, impedance"),
    (text_of(SS, ports={"reference": [50]}), "ports.parameter", "missing"),
    (text_of(SS, ports={"parameter": "scattering"}), "ports.reference", "reference resistances, ohm"),
    (text_of(SS, ports={"parameter": "scattering", "reference": [50, 50]}), "ports.reference", "2 values; expected 1"),
    (text_of(SS, ports={"parameter": "impedance", "reference": [0]}), "ports.reference[0]", "greater than zero"),
    (text_of(SS, ports={"parameter": "impedance", "reference": ["1e999"]}), "ports.reference[0]", "within the doubles"),
    (text_of(SS, ports={"parameter": "hybrid"}), "ports.parameter", "two ports"),
    (text_of(SS, ports="scattering"), "ports", "one of scattering"),
    (text_of(SS, receipts=[{}]), "receipts[0]", "step"),
    (text_of(SS, receipts=[{"step": float("nan")}]), "receipts[0].step", "NaN"),
    (text_of(SS, receipts={}), "receipts", "a list"),
    (
        text_of(SOS, sections=[{"numerator": [1, 2, 3], "denominator": ["x", 0, 1]}]),
        "sections[0].denominator[0]",
        "'x'",
    ),
    (
        text_of(SOS, sections=[SECTION, {"numerator": [1, 2, 3], "denominator": [0, 0, 0]}]),
        "sections[1].denominator",
        "zero",
    ),
    (text_of(SOS, sections=[{"numerator": [1, 2], "denominator": [0, 0, 1]}]), "sections[0].numerator", "2 numbers"),
    (text_of(SOS, sections=[{"numerator": [1, 2, 3]}]), "sections[0].denominator", "missing"),
    (text_of(SOS, gain="1e999"), "gain", "within the doubles"),
    (text_of(SOS, gain=[1]), "gain", "list"),
    (text_of(ZPG, poles=[-1, [-1, 2]]), "poles[1]", "without its conjugate"),
    (text_of(ZPG, poles=[[[[-1, 2]]]]), "poles[0][0][0]", "without its conjugate"),
    (text_of(ZPG, poles=[[1, 2, 3]]), "poles[0]", "list of 3"),
    (text_of(ZPG, gain=[[1, 2], [3]]), "gain[1]", "1 entries"),
    (text_of(PR, powers=[0]), "powers[0]", "integer from 1"),
    (text_of(PR, powers=["1.5"]), "powers[0]", "positive integer"),
    (text_of(PR, powers=[10**9]), "powers[0]", "integer from 1"),
    (text_of(PR, residues=[[1]]), "residues[0][0]", "a list"),
    (text_of(PR, direct=[[1, 2]]), "direct", "1 x 2"),
    (text_of(PR, residues=[[[[1, 2]]]]), "residues[0]", "conjugate"),
    ("{}", "", "an empty object"),
    ("[1, 2]", "", "expected one JSON object"),
    ("", "", "an empty file"),
    (" \n", "", "blanks"),
    ("null", "", "null"),
    ('{"kind": "state-space"}', "realize", "missing"),
    ('{"realize": 2, "kind": "state-space"}', "realize", "format version 2; expected 1"),
    ('{"realize": true, "kind": "state-space"}', "realize", "true"),
    ('{"realize": "1"}', "realize", "format version"),
    ('{"realize": 1}', "kind", "transfer-function, zero-pole-gain"),
    ('{"realize": 1, "kind": "transfer-fonction"}', "kind", "did you mean 'transfer-function'"),
    ('{"realize": 1, "kind": ["state-space"]}', "kind", "list of 1"),
    ('{"realize": 1, "kind": "state-space"}', "A", "missing"),
    ('{"realize": 1, "kind": "state-space", "A": 1, "A": 2}', "A", "twice"),
    ('{"realize": 1, "kind": "state-space", "A": [], "time": {"domain": 1, "domain": 2}}', "A", ""),
    (text_of(TF)[:-1] + ', "time": {"domain": "x", "domain": "y"}}', "time.domain", "twice"),
    (text_of(TF) + "x", "line 1, column", "more text"),
    (text_of(TF)[:-1], "line 1, column", "not JSON"),
    ('{"realize": 1,\n "kind" 3}', "line 2, column 9", "not JSON"),
    ("[" * 100000, "", "nested too deeply"),
    ('{"realize": 1, "a":' * 100000, "", "nested too deeply"),
]


@pytest.mark.parametrize(("text", "field", "words"), CASES, ids=[f"{k}-{case[1]}" for k, case in enumerate(CASES)])
def test_json_that_is_no_model(text, field, words, tmp_path):
    path = tmp_path / "m.json"
    path.write_text(text, encoding="utf-8", errors="surrogatepass")
    with pytest.raises(InputError) as caught:
        files.read(path)
    error = caught.value
    assert error.file == str(path)
    if field.startswith("line"):
        assert error.field.startswith(field)
    elif words:
        assert error.field == field
    assert words in str(error)


def test_invalid_utf8_is_placed(tmp_path):
    path = tmp_path / "m.json"
    path.write_bytes(b'{"realize": 1,\n"kind": "\xff"}')
    with pytest.raises(InputError, match="line 2, byte 24: byte 0xff"):
        files.read(path)


@pytest.mark.parametrize(
    ("data", "words"),
    [
        (b"\x89PNG\r\n\x1a\n", "PNG"),
        (b"\x89HDF\r\n\x1a\n", "HDF5"),
        (b"PK\x03\x04rubbish", "damaged"),
        (b"\x1f\x8b123", "gzip"),
        (b"\x93NUMPY\x01", "numpy.save"),
        (b"%%MatrixMarket matrix array real general\n1 1\n1\n", "Matrix Market"),
        (b"\x00" * 1000, "binary"),
        (b"hello world", "neither"),
    ],
)
def test_other_files_are_named_for_what_they_look_like(data, words, tmp_path):
    path = tmp_path / "thing"
    path.write_bytes(data)
    with pytest.raises(InputError, match=words):
        files.read(path)


def test_content_counts_before_the_suffix(tmp_path):
    for name, data in (
        ("m.csv", text_of(TF).encode()),
        ("m.json", b"f_hz,re,im\n1,2,3\n"),
        ("m.npz", text_of(TF).encode()),
    ):
        (tmp_path / name).write_bytes(data)
        assert files.read(tmp_path / name).shape == (1, 1)
    with pytest.raises(UsageError):
        files.read(tmp_path / "m.csv", columns=["a"])


def test_places_that_cannot_be_read(tmp_path):
    with pytest.raises(InputError, match="directory"):
        files.read(tmp_path)
    with pytest.raises(InputError, match="no such file"):
        files.read(tmp_path / "none.json")
    with pytest.raises(InputError, match="cannot be opened"):
        files.read("a\0b")
    with pytest.raises(InputError, match="cannot be opened"):
        files.read("x" * 5000)
    loop = tmp_path / "loop"
    loop.symlink_to(loop)
    with pytest.raises(InputError, match="cannot be opened"):
        files.read(loop)
    if os.geteuid() != 0:
        closed = tmp_path / "closed.json"
        closed.write_text("{}")
        closed.chmod(0)
        with pytest.raises(InputError, match="permission"):
            files.read(closed)


@pytest.mark.skipif(not os.path.exists("/dev/zero"), reason="no /dev/zero here")
def test_endless_inputs_end(tmp_path, monkeypatch):
    with pytest.raises(InputError, match="binary"):
        files.read("/dev/zero")
    monkeypatch.setattr("realize.files.sources.PIPE_PATIENCE", 0.1)
    os.mkfifo(tmp_path / "pipe")
    with pytest.raises(InputError, match="empty"):
        files.read(tmp_path / "pipe")
    big = tmp_path / "big.json"
    with open(big, "wb") as stream:
        stream.write(b"{")
        stream.truncate((512 << 20) + 1)
    monkeypatch.setattr("realize.files.access.recognise", lambda source: files.FORMATS["json"])
    with pytest.raises(InputError, match=r"512 MiB.*npz"):
        files.read(big)


@pytest.mark.parametrize("suffix", [".json", ".csv", ".npz", ""])
def test_megabytes_of_garbage_are_refused_quickly(suffix, tmp_path):
    size = 4_000_000
    head = text_of(TF)[: -len("[1, 2, 3]}")]
    kinds = [
        bytes(size),
        random.Random(1).randbytes(size),
        b"[" * size,
        b"1" * size,
        b"," * size,
        b'"' * size,
        b"\n" * size,
        b"{" * size,
        b"#" * size,
        (head + "[" + "[]," * (size // 12) + "1]}").encode(),
        (head + '"' + "1" * size + '"}').encode(),
        b"PK\x03\x04" + random.Random(2).randbytes(size),
    ]
    path = tmp_path / f"garbage{suffix}"
    for data in kinds:
        path.write_bytes(data)
        start = time.monotonic()
        with pytest.raises(RealizeError) as caught:
            files.read(path)
        assert isinstance(caught.value, (InputError, Refused))
        assert time.monotonic() - start < 5
        assert len(str(caught.value)) < 1000


BASES = [json.dumps(base).encode() for base in (TF, SS, SOS, ZPG, PR)]
JSON_VALUES = st.recursive(
    st.one_of(st.none(), st.booleans(), st.floats(), st.integers(), st.text(max_size=5), st.just("0.1")),
    lambda inner: st.one_of(st.lists(inner, max_size=4), st.dictionaries(st.text(max_size=5), inner, max_size=3)),
    max_leaves=12,
)


def only_refusals(call):
    try:
        call()
    except (InputError, Refused):
        pass


@QUICK
@given(st.sampled_from(BASES), st.lists(st.tuples(st.integers(0, 200), st.binary(max_size=3)), max_size=4))
def test_mutated_text_is_read_or_refused(tmp_path_factory, base, changes):
    data = bytearray(base)
    for at, piece in changes:
        data[at : at + len(piece)] = piece
    path = tmp_path_factory.getbasetemp() / "mutated.json"
    path.write_bytes(bytes(data))
    only_refusals(lambda: files.read(path))


@QUICK
@given(st.binary(max_size=300), st.sampled_from([".json", ".npz", ".csv", ""]))
def test_random_bytes_are_refused(tmp_path_factory, data, suffix):
    path = tmp_path_factory.getbasetemp() / f"random{suffix}"
    path.write_bytes(data)
    only_refusals(lambda: files.read(path))


@QUICK
@given(st.sampled_from([TF, SS, SOS, ZPG, PR]), st.data())
def test_any_value_in_any_field_is_read_or_refused(base, data):
    fields = [
        *base,
        "time",
        "inputs",
        "outputs",
        "dead_time",
        "offset",
        "ports",
        "receipts",
        "direct",
        "D",
        "E",
        "states",
        "powers",
    ]
    name = data.draw(st.sampled_from(fields))
    value = data.draw(JSON_VALUES)
    only_refusals(lambda: files.model_from_record({**base, name: value}))
