"""Tables, arrays and archives of data over time."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from realize import ImpulseResponse, TimeRecord, files
from realize.errors import InputError, UsageError
from realize.files.table_names import parse


@pytest.fixture
def read(tmp_path: Path) -> Callable[..., Any]:
    def made(text: str, name: str = "data.csv", **options: Any) -> Any:
        path = tmp_path / name
        path.write_text(text)
        return files.read(path, **options)

    return made


def test_a_record_with_names_and_units(read: Callable[..., Any]) -> None:
    model = read("sep=;\ntime [ms];input force [N];angle output [rad]\n0;1;2,5\n0,5;3;4\n1;1;2\n")
    assert isinstance(model, TimeRecord) and model.period == 0.0005
    assert [(s.name, s.unit) for s in (*model.inputs, *model.outputs)] == [("force", "N"), ("angle", "rad")]
    assert model.output[:, 0].tolist() == [2.5, 4, 2] and model.time.domain == "continuous"


@pytest.mark.parametrize(
    ("name", "role", "label", "unit"),
    [
        ("t", "time", "", "s"), ("Time (µs)", "time", "", "us"), ("time_ms", "time", "", "ms"), ("u", "input", "", ""),
        ("U1", "input", "U1", ""), ("y_2", "output", "y_2", ""), ("output_angle", "output", "angle", ""),
        ("input gain [V]", "input", "gain", ""), ("speed output", "output", "speed", ""), ("step", "step", "", ""),
        ("impulse_y1/u2", "impulse", "y1/u2", ""), ("step response", "step", "", ""), ("time [h]", "", "", ""),
    ],
)  # fmt: skip
def test_names_of_columns(name: str, role: str, label: str, unit: str) -> None:
    found = parse(name, over_time=True)
    assert (found.role, found.label, found.unit) == (role, label, unit)


def test_names_of_a_frequency_response_stay_what_they_were() -> None:
    for name, role, label in (("y1_real", "real", "y1"), ("output_phase", "phase", "output"), ("real_u", "real", "u")):
        assert (parse(name).role, parse(name).label) == (role, label)
    assert parse("speed_real [m/s]").quantity == "m/s"


@pytest.mark.parametrize("rate", [44100.0, 48000.0, 1000.0, 12345.0, 1 / 3])
@pytest.mark.parametrize("decimals", [6, 9])
def test_the_step_is_the_shortest_number_that_the_times_allow(
    read: Callable[..., Any], rate: float, decimals: int
) -> None:
    rows = "".join(f"{k / rate:.{decimals}f},{k % 7},{k % 5}\n" for k in range(3000))
    model = read("time_s,u,y\n" + rows)
    assert abs(model.period * rate - 1) < 2e-16


def test_without_times_the_rate_is_needed(read: Callable[..., Any]) -> None:
    text = "1 2\n3 4\n"
    with pytest.raises(InputError, match="--rate"):
        read(text, columns=["u", "y"])
    with pytest.raises(InputError, match="--columns input,output"):
        read(text)
    model = read(text, columns=["input_torque", "output_acceleration"], rate=500.0)
    assert model.period == 0.002 and model.inputs[0].name == "torque"


def test_a_rate_that_contradicts_the_times(read: Callable[..., Any]) -> None:
    text = "time,u,y\n0,1,2\n0.001,3,4\n0.002,1,2\n"
    assert read(text, rate=1000.1).period == 1 / 1000.1
    with pytest.raises(InputError, match="as the rate says"):
        read(text, rate=2000.0)


def test_a_rate_for_what_has_none(read: Callable[..., Any]) -> None:
    with pytest.raises(UsageError, match="over time"):
        read("frequency_hz,real,imaginary\n1,2,3\n", rate=10.0)
    with pytest.raises(UsageError, match="for tables"):
        read('{"realize": 1, "kind": "transfer-function", "numerator": [1], "denominator": [1, 1]}', rate=10.0)


@pytest.mark.parametrize(
    ("text", "place", "words"),
    [
        ("time,u,y\n0,1,2\n0.001,3,4\n0.0035,1,2\n0.0045,1,2\n0.0055,1,2\n", "line 4, column 1 (time)", "missing"),
        ("time,u,y\n0,1,2\n0.001,3,4\n0.001,1,2\n", "line 4, column 1 (time)", "increasing"),
        ("time,u,y\n0,1,2\n0.001,3,4\n0.0004,1,2\n", "line 4, column 1 (time)", "increasing"),
        ("time,u,y\n0,1,2\n0.01,3,4\n0.023,1,2\n0.030,1,2\n0.04,1,2\n", "line 4, column 1 (time)", "equal steps"),
        ("time,u,y\n0,1,2\n0.001,nan,4\n", "line 3, column 2 (u)", "finite"),
        ("time,u,y\n0,1,2\n", "line 2", "two or more"),
        ("time,y\n0,1\n1,2\n", "", "columns of output"),
        ("time,time_ms,u,y\n0,0,1,2\n1,1,3,4\n", "column 2", "two columns of time"),
        ("time,step_y1/u1,step_y1/u2,step_y2/u1\n0,1,2,3\n1,1,2,3\n", "", "each output with each input"),
        ("time,step_a,step_a\n0,1,2\n1,1,2\n", "column 3", "twice"),
        ("time,u,y,coherence\n0,1,2,3\n1,1,2,3\n", "column 4", "over time"),
    ],
)
def test_what_is_wrong_is_named(read: Callable[..., Any], text: str, place: str, words: str) -> None:
    with pytest.raises(InputError) as caught:
        read(text)
    assert caught.value.field == place and words in str(caught.value)


def test_times_that_jitter_get_a_remark(read: Callable[..., Any]) -> None:
    model = read("time,u,y\n" + "".join(f"{k * 0.1 + 0.002 * (-1) ** k:.4f},{k},{k}\n" for k in range(50)))
    assert "taken as equal" in model.remarks[0] and abs(model.period - 0.1) < 1e-4


def test_impulse_and_step_responses(read: Callable[..., Any]) -> None:
    model = read("time,impulse_a/u1,impulse_b/u1,impulse_a/u2,impulse_b/u2\n0,0,1,2,3\n0.5,4,5,6,7\n")
    assert isinstance(model, ImpulseResponse) and model.period == 0.5 and not model.time.sampled
    assert model.samples.tolist() == [[[0, 2], [1, 3]], [[4, 6], [5, 7]]]
    assert [s.name for s in model.inputs] == ["u1", "u2"] and [s.name for s in model.outputs] == ["a", "b"]
    model = read("time,step [V]\n0,0.25\n1,0.5\n2,0.75\n3,0.7\n")
    assert model.samples.ravel().tolist() == pytest.approx([0.25, 0.25, 0.25, -0.05], rel=1e-12)
    assert model.time.sampled and model.outputs[0].unit == "V"


def test_units_of_an_impulse_response_go_to_output_and_input(read: Callable[..., Any]) -> None:
    model = read("time [ms],impulse_x/force [m/N],impulse_y/force [rad/N]\n0,0,1\n1,4,5\n")
    assert [(s.name, s.unit) for s in model.outputs] == [("x", "m"), ("y", "rad")]
    assert [(s.name, s.unit) for s in model.inputs] == [("force", "N")]
    with pytest.raises(InputError, match="one unit for the parts of a signal"):
        read("time,impulse_x/force [m/N],impulse_y/force [m/lbf]\n0,0,1\n1,4,5\n")


def test_one_array(tmp_path: Path) -> None:
    path = tmp_path / "record.npy"
    values = np.arange(12.0).reshape(6, 2)
    np.save(path, values)
    model = files.read(path, columns=["u", "y"], rate=4.0)
    assert np.array_equal(model.input, values[:, :1]) and model.period == 0.25
    with pytest.raises(InputError, match="without names"):
        files.read(path)
    np.save(path, values.astype(np.int16))
    assert np.array_equal(files.read(path, columns=["u", "y"], rate=4.0).output, values[:, 1:])
    values[3, 1] = np.inf
    np.save(path, values)
    with pytest.raises(InputError) as caught:
        files.read(path, columns=["u", "y"], rate=4.0)
    assert caught.value.field == "row 3, column 2 (y)"
    for bad, words in (
        (np.array([1.0, 2.0]), "dimension"),
        (np.ones((2, 2), complex), "real"),
        (np.array([[None]]), "real"),
        (np.ones((0, 2)), "rows"),
    ):
        np.save(path, bad, allow_pickle=True)
        with pytest.raises(InputError, match=words):
            files.read(path, columns=["u", "y"], rate=4.0)
    path.write_bytes(path.read_bytes()[:20])
    with pytest.raises(InputError, match=r"damaged|format"):
        files.read(path, columns=["u", "y"], rate=4.0)


def test_archives_known_by_their_arrays(tmp_path: Path) -> None:
    path = tmp_path / "data.npz"
    np.savez(path, frequency=[1.0, 2.0], response=[1j, 2.0], deviation=[0.1, 0.1], frequency_unit="Hz")
    model = files.read(path)
    assert model.kind == "frequency-response" and model.response.shape == model.deviation.shape == (2, 1, 1)
    np.savez(path, frequency=[1.0, 2.0], response=[1j, 2.0])
    with pytest.raises(InputError, match="2 pi"):
        files.read(path)
    np.savez(path, input=[1.0, 2.0, 3.0], output=np.ones((3, 2)), period=0.5)
    model = files.read(path)
    assert model.kind == "time-record" and model.shape == (2, 1)
    np.savez(path, samples=[1.0, 2.0, 3.0], period=0.5)
    assert files.read(path).kind == "impulse-response"
    np.savez(path, input=[1.0, 2.0, 3.0], output=np.ones((2, 2)), period=0.5)
    with pytest.raises(InputError, match="2 samples; expected 3"):
        files.read(path)
    np.savez(path, A=[[-1.0]], B=[[1.0]], C=[[1.0]])
    assert files.read(path).kind == "state-space"


def test_units_of_a_frequency_response_are_kept(read: Callable[..., Any]) -> None:
    model = read("frequency_hz,x_real [m/N],x_imag [m/N]\n1,2,3\n2,3,4\n")
    assert (model.inputs[0].unit, model.outputs[0].unit, model.outputs[0].name) == ("N", "m", "x")
    with pytest.raises(InputError, match=r"'V' in 'imag .V.', and 'mV'"):
        read("frequency_hz,real [mV],imag [V]\n1,2,3\n2,3,4\n")


def test_decibels_that_would_become_zero(read: Callable[..., Any]) -> None:
    with pytest.raises(InputError, match="decibels within the doubles"):
        read("frequency_hz,mag_db,phase_deg\n1,-7000,3\n2,3,4\n")
    assert read("frequency_hz,mag_db,phase_deg\n1,-6000,0\n2,3,4\n").response[0, 0, 0] == pytest.approx(1e-300)
