"""Numpy archives, Matrix Market files, the registry, and replacing files whole."""

import io
import json
import os
import zipfile
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from realize import files
from realize.errors import InputError, Refused, UsageError
from realize.files import matrix_market
from realize.files.registry import Format, register
from realize.models import StateSpace, TransferFunction

MODELS = Path(__file__).resolve().parents[3] / "shared" / "data" / "models"
SS = {"A": np.array([[-1.0, 2.0], [0.0, -3.0]]), "B": np.array([1.0, 0.0]), "C": np.array([0.0, 1.0])}


@pytest.fixture
def npz(tmp_path):
    def read(**arrays):
        np.savez(tmp_path / "m.npz", **arrays)
        return files.read(tmp_path / "m.npz")

    return read


def sparse(name, row, col, data, shape):
    parts = {
        "row": np.array(row, dtype=int),
        "col": np.array(col, dtype=int),
        "data": np.array(data),
        "shape": np.array(shape),
    }
    return {f"{name}_{part}": value for part, value in parts.items()}


def test_bare_arrays_are_a_continuous_state_space_model(npz):
    model = npz(**SS, published_hsv=np.arange(3))
    assert model.kind == "state-space" and not model.time.sampled
    assert model.B.tolist() == [[1], [0]] and model.C.tolist() == [[0, 1]] and model.D.tolist() == [[0]]
    model = npz(**SS, D=np.array(3), E=np.eye(2))
    assert model.D.tolist() == [[3]] and model.E.tolist() == [[1, 0], [0, 1]]
    rest = {"B": SS["B"], "C": SS["C"]}
    assert npz(**sparse("A", [0, 1], [0, 1], [-1.0, -2.0], [2, 2]), **rest).A.tolist() == [[-1, 0], [0, -2]]


def test_fields_as_arrays_of_their_own(npz):
    model = npz(
        kind=np.array("transfer-function"),
        realize=np.array(1),
        numerator=np.array([1.0, 2.0]),
        denominator=np.array([[[1.0, 2.0, 3.0]]]),
        time=np.array('{"domain": "sampled", "rate": "44100"}'),
        inputs=np.array('[{"name": "u"}]'),
    )
    assert model.numerator[0][0].tolist() == [1, 2] and model.time.rate == "44100" and model.inputs[0].name == "u"


HEADER = {"realize": 1, "kind": "transfer-function"}


@pytest.mark.parametrize(
    ("arrays", "words"),
    [
        ({"A": np.eye(2)}, "B: missing"),
        ({"B": np.eye(2), "C": np.eye(2)}, "A: missing"),
        ({**SS, "X": np.eye(2)}, "X: an unknown array"),
        ({**SS, "A": np.array([["a"]])}, "A: an array of <U1"),
        ({**SS, "A": np.array([[True]])}, "A: an array of bool"),
        ({**SS, "A": np.array([[object()]])}, "A: an array of Python objects"),
        ({**SS, "A": np.array([[1, np.nan], [0, 1]])}, "A[0][1]: nan"),
        ({**SS, "A": np.array([[1j]])}, "A: complex"),
        ({**SS, "A": np.zeros(2, dtype=[("x", float)])}, "A: an array of records"),
        ({**SS, "A": np.zeros((2, 3))}, "A: 2 x 3"),
        ({**SS, **sparse("A", [0], [0], [1.0], [1, 1])}, "A: given both"),
        ({"A_row": np.array([0]), "B": SS["B"], "C": SS["C"]}, "A_col: missing"),
        (
            {**sparse("A", [2], [0], [1.0], [2, 2]), "B": SS["B"], "C": SS["C"]},
            "A_row[0]: 2; expected places from 0 to 1",
        ),
        ({**sparse("A", [-1], [0], [1.0], [2, 2]), "B": SS["B"], "C": SS["C"]}, "A_row[0]: -1"),
        ({**sparse("A", [1], [0], [np.inf], [2, 2]), "B": SS["B"], "C": SS["C"]}, "A_data[0]: inf"),
        ({**sparse("A", [1, 1], [0, 0], [1.0, 2.0], [2, 2]), "B": SS["B"], "C": SS["C"]}, "A[1][0]: two entries"),
        ({**sparse("A", [1], [0, 1], [1.0], [2, 2]), "B": SS["B"], "C": SS["C"]}, "A_col: shape [2]"),
        ({**sparse("A", [], [], [], [-1, 2]), "B": SS["B"], "C": SS["C"]}, "A_shape"),
        ({"model": np.array("{")}, "not JSON"),
        ({"model": np.array("[]")}, "model: JSON that is no object"),
        (
            {"model": np.array(json.dumps({**HEADER, "numerator": [1]})), "denominator": np.ones(1)},
            "numerator: an unknown field",
        ),
        ({"model": np.array(json.dumps(HEADER)), "numerator": np.ones(1)}, "denominator: missing"),
        ({"model": np.array(json.dumps(HEADER)), "kind": np.array("x")}, "kind: given in the array model too"),
        ({"model": np.array(json.dumps({**HEADER, "realize": 9}))}, "format version 9"),
        (
            {
                "model": np.array(json.dumps(HEADER)),
                "numerator_values": np.ones(2),
                "numerator_lengths": np.array([[3]]),
            },
            "numerator_lengths: lengths that add up to 3",
        ),
        (
            {
                "model": np.array(json.dumps({**HEADER, "decimals": {"numerator": [[[0, 0, 0], "0.2"]]}})),
                "numerator": np.array([0.1]),
                "denominator": np.ones(1),
            },
            "decimals.numerator[0]: '0.2' beside the double 0.1",
        ),
        (
            {
                "model": np.array(json.dumps({**HEADER, "decimals": {"numerator": [[[0, 0, 7], "0.2"]]}})),
                "numerator": np.array([0.1]),
                "denominator": np.ones(1),
            },
            "index [0, 0, 7]",
        ),
    ],
)
def test_archives_that_are_no_model(npz, arrays, words):
    with pytest.raises(InputError) as caught:
        npz(**arrays)
    assert words in str(caught.value)


def test_archives_too_large(npz, tmp_path):
    n = 1 << 20
    large = sparse("A", [0], [0], [1.0], [n, n])
    with pytest.raises(Refused, match="GiB"):
        npz(**large, B=np.ones(2), C=np.ones(2))
    # a member that declares more than it has: a header for 6 GiB of doubles, and a directory that agrees
    header = io.BytesIO()
    np.lib.format.write_array_header_1_0(header, {"descr": "<f8", "fortran_order": False, "shape": (3 << 28,)})
    with zipfile.ZipFile(tmp_path / "bomb.npz", "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("A.npy", header.getvalue())
        archive.writestr("B.npy", header.getvalue())
        archive.writestr("C.npy", header.getvalue())
    with pytest.raises(InputError, match=r"as many bytes as the shape needs"):
        files.read(tmp_path / "bomb.npz")
    with zipfile.ZipFile(tmp_path / "other.npz", "w") as archive:
        archive.writestr("word/document.xml", b"x")
    with pytest.raises(InputError, match=r"a zip archive with 'word/document.xml'"):
        files.read(tmp_path / "other.npz")


@settings(max_examples=60, deadline=None, suppress_health_check=list(HealthCheck))
@given(
    st.lists(st.tuples(st.integers(0, 3000), st.binary(min_size=1, max_size=4)), min_size=1, max_size=4), st.booleans()
)
def test_damaged_archives_are_read_or_refused(tmp_path_factory, changes, cut):
    stream = io.BytesIO()
    np.savez_compressed(stream, **SS)
    data = bytearray(stream.getvalue())
    for at, piece in changes:
        at %= len(data)
        data[at : at + len(piece)] = piece
    path = tmp_path_factory.getbasetemp() / "damaged.npz"
    path.write_bytes(bytes(data[: len(data) // 2] if cut else data))
    try:
        files.read(path)
    except (InputError, Refused):
        pass


@pytest.mark.skipif(not MODELS.is_dir(), reason="model data are not beside the project")
def test_published_archives():
    assert files.read(MODELS / "build.npz").order == 48
    rail = files.read(MODELS / "rail_1357.npz")
    assert rail.order == 1357 and rail.shape == (6, 7) and rail.E is not None
    with pytest.raises(InputError, match="C: missing"):
        files.read(MODELS / "MNA_1.npz")


MTX = "%%MatrixMarket matrix {} {} {}\n% remark\n{}\n"


@pytest.mark.parametrize(
    ("layout", "number", "symmetry", "body", "expected"),
    [
        ("coordinate", "real", "general", "2 2 2\n1 2 1.5\n2 1 -2", [[0, 1.5], [-2, 0]]),
        ("coordinate", "integer", "symmetric", "2 2 2\n1 1 3\n2 1 4", [[3, 4], [4, 0]]),
        ("coordinate", "real", "skew-symmetric", "2 2 1\n2 1 4", [[0, -4], [4, 0]]),
        ("array", "real", "general", "2 2\n1\n2\n3\n4", [[1, 3], [2, 4]]),
        ("array", "real", "symmetric", "2 2\n1\n2\n3", [[1, 2], [2, 3]]),
        ("array", "real", "skew-symmetric", "2 2\n5", [[0, -5], [5, 0]]),
        ("coordinate", "real", "general", "2 2 0", [[0, 0], [0, 0]]),
    ],
)
def test_matrix_market(layout, number, symmetry, body, expected):
    scipy_io = pytest.importorskip("scipy.io")
    text = MTX.format(layout, number, symmetry, body).encode()
    assert matrix_market.parse(text).tolist() == expected
    reference = scipy_io.mmread(io.BytesIO(text), spmatrix=False)
    assert np.array_equal(reference.toarray() if hasattr(reference, "toarray") else reference, expected)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (b"", "header"),
        (b"%%MatrixMarket matrix coordinate complex general\n1 1 1\n1 1 1 1\n", "'complex'"),
        (b"%%MatrixMarket matrix coordinate pattern general\n1 1 1\n1 1\n", "'pattern'"),
        (b"%%MatrixMarket matrix coordinate real hermitian\n", "'hermitian'"),
        (b"%%MatrixMarket matrix coordinate real general\n", "sizes"),
        (b"%%MatrixMarket matrix coordinate real general\n1 1\n", "rows, columns, entries"),
        (b"%%MatrixMarket matrix coordinate real general\n2 2 999999999\n1 1 1\n", "announced"),
        (b"%%MatrixMarket matrix array real general\n999999 999999\n1\n", "announced"),
        (b"%%MatrixMarket matrix coordinate real general\n2 2 1\n3 1 1\n", "(3, 1)"),
        (b"%%MatrixMarket matrix coordinate real general\n2 2 1\n0 1 1\n", "(0, 1)"),
        (b"%%MatrixMarket matrix coordinate real general\n2 2 1\n1 1 nan\n", "'n'"),
        (b"%%MatrixMarket matrix coordinate real general\n2 2 1\n1 1 1e999\n", "largest double"),
        (b"%%MatrixMarket matrix coordinate real general\n2 2 1\n1 1 1e\n", "no number"),
        (b"%%MatrixMarket matrix coordinate real general\n2 2 2\n1 1 1\n1 1 2\n", "two entries"),
        (b"%%MatrixMarket matrix coordinate real general\n2 2 1\n1 1 1\n1 2 2\n", "6 numbers"),
        (b"%%MatrixMarket matrix coordinate real symmetric\n2 3 1\n1 1 1\n", "square"),
        (b"%%MatrixMarket matrix coordinate real skew-symmetric\n2 2 1\n1 1 1\n", "diagonal"),
    ],
)
def test_matrix_market_refusals(text, words):
    with pytest.raises(InputError) as caught:
        matrix_market.parse(text)
    assert words in str(caught.value)


def test_matrix_market_too_large():
    with pytest.raises(Refused, match="GiB"):
        matrix_market.parse(b"%%MatrixMarket matrix coordinate real general\n999999 999999 0\n")


def test_matrix_files_stay_in_the_folder(tmp_path):
    folder = tmp_path / "models"
    folder.mkdir()
    text = MTX.format("array", "real", "general", "1 1\n-2")
    (folder / "A.mtx").write_text(text)
    (tmp_path / "A.mtx").write_text(text)
    (folder / "link.mtx").symlink_to(tmp_path / "A.mtx")
    path = folder / "m.json"

    def read(name, **options):
        path.write_text(json.dumps({"realize": 1, "kind": "state-space", "A": {"file": name}, "B": [[1]], "C": [[1]]}))
        return files.read(path, **options)

    assert read("A.mtx").A.tolist() == [[-2]]
    assert read("../models/A.mtx").A.tolist() == [[-2]]
    for name in ("../A.mtx", str(tmp_path / "A.mtx"), "link.mtx", "/dev/zero"):
        with pytest.raises(InputError, match=r"A\.file: .* outside the folder"):
            read(name)
        if name != "/dev/zero":
            assert read(name, allow_outside=True).A.tolist() == [[-2]]
    with pytest.raises(InputError, match="no regular file"):
        read("/dev/zero", allow_outside=True)
    with pytest.raises(InputError, match=r"A: none.mtx: no such file"):
        read("none.mtx")
    for name in ("a\0b", "", "."):
        with pytest.raises(InputError):
            read(name)
    with pytest.raises(InputError, match="does not come from a file"):
        files.model_from_record({"realize": 1, "kind": "state-space", "A": {"file": "A.mtx"}, "B": [[1]], "C": [[1]]})


def test_registry_refuses_duplicates():
    row = files.FORMATS["json"]
    with pytest.raises(ValueError, match="registered already"):
        register(row)
    with pytest.raises(ValueError, match="belongs to"):
        register(Format("other", "", (".json",), row.sniff))
    with pytest.raises(ValueError, match="dot"):
        register(Format("other", "", ("json",), row.sniff))
    assert set(files.FORMATS) == {"json", "npy", "npz", "table", "touchstone"}
    assert all(row.can_read and (row.can_write or row.name in ("touchstone", "npy")) for row in files.FORMATS.values())


MODEL = TransferFunction(numerator=[1], denominator=[1, 2])


def left_behind(folder):
    return [name for name in os.listdir(folder) if name.endswith(".part")]


def test_replacing_is_all_or_nothing(tmp_path):
    path = tmp_path / "out.json"
    path.write_text("old")
    for error in (KeyboardInterrupt, ValueError, MemoryError):
        with pytest.raises(error), files.replacing(path) as stream:
            stream.write(b"half")
            raise error
        assert path.read_text() == "old" and not left_behind(tmp_path)
    files.replace_file(path, b"new")
    assert path.read_bytes() == b"new" and not left_behind(tmp_path)


def test_replacing_keeps_permissions_and_links(tmp_path):
    files.replace_file(tmp_path / "fresh", b"1")
    plain = tmp_path / "plain"
    plain.touch()
    assert (tmp_path / "fresh").stat().st_mode == plain.stat().st_mode
    plain.chmod(0o640)
    files.replace_file(plain, b"2")
    assert plain.stat().st_mode & 0o777 == 0o640
    (tmp_path / "link").symlink_to(plain)
    files.replace_file(tmp_path / "link", b"3")
    assert (tmp_path / "link").is_symlink() and plain.read_bytes() == b"3"
    files.replace_file(os.devnull, b"4")
    assert not Path(os.devnull).is_file()


def test_places_that_cannot_be_written(tmp_path):
    with pytest.raises(InputError, match="does not exist"):
        files.write(MODEL, tmp_path / "none" / "m.json")
    with pytest.raises(InputError, match="a directory"):
        files.replace_file(tmp_path, b"")
    with pytest.raises(InputError, match="cannot be written"):
        files.replace_file("a\0b", b"")
    with pytest.raises(InputError):
        files.replace_file(tmp_path / ("x" * 300), b"")
    assert not left_behind(tmp_path)
    with pytest.raises(UsageError, match=r"suffix '\.xyz'.*\.json"):
        files.write(MODEL, tmp_path / "m.xyz")
    with pytest.raises(UsageError, match="without suffix"):
        files.write(MODEL, tmp_path / "m")
    with pytest.raises(UsageError, match="frequency-response only"):
        files.write(MODEL, tmp_path / "m.csv")
    broken = StateSpace(A=[[-1]], B=[[1]], C=[[1]], inputs=(files.record.Signal("\ud800"),))
    with pytest.raises(InputError, match="surrogate"):
        files.write(broken, tmp_path / "m.json")
    assert not (tmp_path / "m.json").exists() and not left_behind(tmp_path)
    if os.geteuid() != 0:
        tmp_path.chmod(0o500)
        with pytest.raises(InputError, match="permission"):
            files.write(MODEL, tmp_path / "m.json")
        tmp_path.chmod(0o700)
