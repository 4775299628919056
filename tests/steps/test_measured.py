"""The verb `fit` with data of every kind, and what it says about data that are wrong."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy import signal

import realize
from realize import FrequencyResponse, ImpulseResponse, Signal, TimeRecord
from realize.errors import InputError, UsageError

RNG = np.random.default_rng(4)
W = np.linspace(1.0, 100.0, 120)


def _true(w: np.ndarray) -> np.ndarray:
    s = 1j * w
    return 400 / (s**2 + 4 * s + 400) + 0.5


def _run(sigma: float = 0.01, **more: Any) -> FrequencyResponse:
    error = sigma * (RNG.standard_normal(W.size) + 1j * RNG.standard_normal(W.size)) / np.sqrt(2)
    return FrequencyResponse(frequency=W, frequency_unit="rad/s", response=(_true(W) + error)[:, None, None], **more)


def test_runs_are_merged_into_mean_and_deviation() -> None:
    runs = [_run() for _ in range(4)]
    fitted = realize.fit(runs, order=2)
    claim = fitted.receipt.claim("weighted-misfit")
    assert claim.value is not None and 0.8 < claim.value < 1.2
    assert len(fitted.receipt.details["runs"]) == 4
    one = realize.fit(runs[0], order=2)
    assert fitted.receipt.claim("rms-misfit").value < 0.7 * one.receipt.claim("rms-misfit").value


def test_runs_that_do_not_agree_are_refused() -> None:
    first = _run(inputs=(Signal("u", "V"),))
    other = first.with_(inputs=(Signal("u", "mV"),))
    with pytest.raises(InputError, match="'mV'"):
        realize.fit([first, other])
    with pytest.raises(InputError, match="'w'"):
        realize.fit([first, first.with_(inputs=(Signal("w", "V"),))])
    with pytest.raises(InputError, match="2 pi times"):
        realize.fit([first, first.with_(frequency_unit="Hz")])
    with pytest.raises(InputError, match=r"frequency\[7\]"):
        moved = W.copy()
        moved[7] += 0.01
        realize.fit([first, first.with_(frequency=moved)])
    with pytest.raises(InputError, match="119 lines"):
        realize.fit([first, FrequencyResponse(frequency=W[1:], frequency_unit="rad/s", response=first.response[1:])])
    with pytest.raises(UsageError, match="different kinds"):
        realize.fit([first, ImpulseResponse(period=1.0, samples=[[[1.0]]])])
    with pytest.raises(UsageError, match="no data"):
        realize.fit([])


def test_copies_of_one_run_get_a_caution() -> None:
    first = _run()
    assert any("copies of one run" in text for text in realize.fit([first, first], order=2).receipt.cautions)


def _record(samples: int = 8192, noise: float = 0.02) -> TimeRecord:
    u = RNG.standard_normal(samples + 200)
    y = signal.lfilter([0.0, 0.2, 0.1], [1.0, -1.6, 0.81], u) + noise * RNG.standard_normal(u.size)
    return TimeRecord(
        period=0.01,
        input=u[200:, None],
        output=y[200:, None],
        inputs=(Signal("force", "N"),),
        outputs=(Signal("x", "m"),),
    )


def test_a_time_record_becomes_a_sampled_model() -> None:
    fitted = realize.fit(_record(), sampled=True)
    assert fitted.model.time.seconds == 0.01 and fitted.model.order == 2
    z = np.exp(1j * np.linspace(0.1, 3, 7))
    true = (0.2 / z + 0.1 / z**2) / (1 - 1.6 / z + 0.81 / z**2)
    assert np.allclose(fitted.model.evaluate(z)[:, 0, 0], true, rtol=0.05, atol=0.01 * np.abs(true).max())
    assert fitted.model.inputs == (Signal("force", "N"),)
    assert [receipt.step for receipt in fitted.history] == ["convert", "fit"]
    assert fitted.receipt.details["estimate"]["averaging"] == "welch"


def test_the_estimate_itself_is_a_conversion() -> None:
    record = _record()
    made = realize.convert(record, "frequency-response", segment=256, window="blackman")
    assert isinstance(made.model, FrequencyResponse) and made.model.coherence is not None
    assert made.receipt.details["estimate"]["segment"] == 256
    again = realize.fit(made, order=2)
    assert [receipt.step for receipt in again.history] == ["convert", "fit"]
    with pytest.raises(realize.Refused, match="estimates the response"):
        realize.convert(record, "state-space")
    with pytest.raises(UsageError, match="time data"):
        realize.convert(realize.fit(made, order=2), "frequency-response", segment=256)
    with pytest.raises(UsageError, match="time data"):
        realize.fit(made, averaging="welch")


def test_time_records_of_other_signals_or_rates_are_refused() -> None:
    record = _record(512)
    with pytest.raises(InputError, match="period"):
        realize.fit([record, record.with_(period=0.02)])
    with pytest.raises(InputError, match="'mm'"):
        realize.fit([record, record.with_(outputs=(Signal("x", "mm"),))])


def test_impulse_and_step_responses() -> None:
    k = np.arange(300)
    h = np.exp(-0.02 * k) * np.cos(0.3 * k) + 0.5 * np.exp(-0.05 * k) + 1e-3 * RNG.standard_normal(k.size)
    data = ImpulseResponse(period=0.01, samples=h[:, None, None], outputs=(Signal("x", "m"),))
    fitted = realize.fit(data)
    assert fitted.model.order == 3 and not fitted.model.time.sampled and fitted.model.outputs[0].unit == "m"
    poles = np.array([complex(re, im) for re, im, _ in fitted.receipt.details["poles"]])
    assert np.min(np.abs(poles - (-2 + 30j))) < 0.1 and np.min(np.abs(poles + 5)) < 0.3
    # the claim is about the samples of the model that was made, in any kind
    for to in ("state-space", "transfer-function"):
        made = realize.fit(data, order=3, to=to)
        assert made.receipt.claim("rms-misfit").value == pytest.approx(1e-3 * np.sqrt(300 / np.sum(h**2)), rel=0.15)
    sampled = realize.fit(data, sampled=True, method="ho-kalman")
    assert sampled.model.time.seconds == 0.01 and sampled.model.order == 3
    true = np.exp(-0.02 * k) * np.cos(0.3 * k) + 0.5 * np.exp(-0.05 * k)
    runs = [data.with_(samples=(true + 1e-3 * RNG.standard_normal(300))[:, None, None]) for _ in range(4)]
    several = realize.fit(runs)
    assert several.model.order == 3 and several.receipt.details["noise"]["basis"] == "given"
    with pytest.raises(UsageError, match="--integrators"):
        realize.fit(data, integrators=1)
    with pytest.raises(UsageError, match="frequency response"):
        realize.fit(data, method="loewner")


# ---- garbage, through the command ----


def _table(tmp_path: Path, values: Any, head: str = "frequency_hz,real,imaginary", first: Any = None) -> str:
    f = np.arange(1, len(values) + 1.0) if first is None else first
    rows = "".join(
        f"{x!r},{z.real!r},{z.imag!r}\n" for x, z in zip(f.tolist(), np.asarray(values).tolist(), strict=True)
    )
    path = tmp_path / "data.csv"
    path.write_text(head + "\n" + rows)
    return str(path)


F = np.arange(1.0, 101.0)
PLANT = 1 / (1 + 1j * F / 20)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("frequency_hz,real,imaginary\n1,2,3\n", "1 line"),
        ("frequency_hz,real,imaginary\n0,2,0\n", "frequency 0 alone"),
        ("frequency_hz,real,imaginary\n1,2,3\n2,3,4\n2,3,4\n", "each frequency once"),
        ("frequency_hz,real,imaginary\n1,2,3\n-2,3,4\n", "not negative"),
        ("frequency_hz,real,imaginary,deviation\n1,2,3,0.1\n2,3,4,-0.1\n", "not negative"),
        ("frequency_hz,real,imaginary,coherence\n1,2,3,0.1\n2,3,4,1.1\n", "between 0 and 1"),
        ("frequency_hz,real,imaginary\n1,2,3\n2,nan,nan\n", "finite"),
        ("frequency,real,imaginary\n1,2,3\n2,3,4\n", "unit"),
        ("time,u,y\n0,1,2\n1,2,3\n2,1,2\n", "3 samples"),
        ("time,u,y\n" + "".join(f"{k},5,{k % 3}\n" for k in range(200)), "an input that moves"),
        ("time,u,y\n" + "".join(f"{k},{k % 2},nan\n" for k in range(200)), "finite"),
        ("time,u1,u2,y\n" + "".join(f"{k},{k * k % 17},{k * k % 17},{k % 3}\n" for k in range(400)), "inputs that"),
    ],
)
def test_garbage_is_refused(text: str, words: str, run: Callable[..., Any], tmp_path: Path) -> None:
    path = tmp_path / "data.csv"
    path.write_text(text)
    done = run("fit", path)
    assert done.status == 3 and words in done.err and "Traceback" not in done.err


@pytest.mark.parametrize(
    ("values", "head", "first", "words"),
    [
        (
            RNG.standard_normal(100) + 1j * RNG.standard_normal(100),
            "frequency_hz,real,imaginary",
            None,
            "nothing in common",
        ),
        (np.full(100, 2 + 1j), "frequency_hz,real,imaginary", None, "complex constant"),
        (np.full(100, 2.0 + 0j), "frequency_hz,real,imaginary", None, "one real constant"),
        (
            np.concatenate([[abs(PLANT[0]) * (1 + 0.2j)], PLANT[1:]]),
            "frequency_hz,real,imaginary",
            np.concatenate([[0.0], F[1:]]),
            "of a real plant is real",
        ),
        (PLANT[::-1], "frequency_hz,real,imaginary", F[::-1], "sorted"),
        (PLANT, "frequency_rad/s,real,imaginary", None, "they look like Hz"),
        (PLANT, "frequency_hz,real,imaginary", F / (2 * np.pi), "they look like rad/s"),
    ],
)
def test_doubtful_data_get_a_caution(
    values: Any, head: str, first: Any, words: str, run: Callable[..., Any], tmp_path: Path
) -> None:
    if words == "they look like rad/s":
        first = F * (2 * np.pi)
    path = _table(tmp_path, values, head, first)
    done = run("fit", path, "--order", "0..2", "--json", "-o", tmp_path / "out.json")
    assert done.status == 0
    assert any(words in text for text in done.record["cautions"]), done.record["cautions"]
    looked = run("inspect", path, "--json").record
    assert any(words in text for text in looked["cautions"])


def test_a_dead_time_off_by_two_pi(run: Callable[..., Any], tmp_path: Path) -> None:
    path = _table(tmp_path, 3 * np.exp(-2j * np.pi * F * 0.001))
    options = ["--order", "0", "--json", "-o", tmp_path / "out.json"]
    right = run("fit", path, "--dead-time", "1ms", *options).record["cautions"]
    assert not any("taken for each other" in text for text in right)
    for wrong in (0.001 * 2 * np.pi, 0.001 / (2 * np.pi)):
        told = run("fit", path, "--dead-time", repr(wrong), *options).record["cautions"]
        assert any("taken for each other" in text for text in told)


def test_lines_beyond_half_the_sampling_rate_that_would_fit_as_radians() -> None:
    with pytest.raises(InputError, match=r"in rad/s, they would fit"):
        FrequencyResponse(
            frequency=[1.0, 300.0],
            frequency_unit="Hz",
            response=[[[1.0]], [[1.0]]],
            time=realize.TimeBase("sampled", period=0.01),
        )


def test_two_files_off_by_two_pi(run: Callable[..., Any], tmp_path: Path) -> None:
    first = _table(tmp_path, PLANT)
    other = tmp_path / "other.csv"
    other.write_text(Path(first).read_text().replace("frequency_hz", "omega"))
    for verb in ("fit", "compare"):
        done = run(verb, first, other)
        assert done.status == 3 and "(2 pi)" in done.err


def test_a_record_through_the_command(run: Callable[..., Any], tmp_path: Path) -> None:
    record = _record(2048)
    np.save(tmp_path / "record.npy", np.column_stack([record.input, record.output]))
    reading = ["--columns", "input_force,output_x", "--rate", "100Hz"]
    looked = run("inspect", tmp_path / "record.npy", *reading, "--json").record
    assert looked["kind"] == "time-record" and looked["samples"] == 2048 and looked["step_of_time"] == 0.01
    done = run("convert", tmp_path / "record.npy", *reading, "--to", "frequency-response", "--segment", "128",
               "--overlap", "75%", "--estimator", "hv", "--json", "-o", tmp_path / "estimate.csv")  # fmt: skip
    assert done.status == 0 and done.record["details"]["estimate"]["estimator"] == "hv"
    done = run("fit", tmp_path / "estimate.csv", "--order", "2", "--json")
    assert done.status == 0 and done.record["result"]["order"] == 2
    done = run("fit", tmp_path / "record.npy", *reading, "--sampled", "--settling", "1s", "-o", tmp_path / "model.json")
    assert done.status == 0 and json.loads((tmp_path / "model.json").read_text())["time"]["period"] == 0.01
    assert run("fit", tmp_path / "record.npy", *reading, "--overlap", "100%").status == 2
    assert run("fit", tmp_path / "record.npy", *reading, "--averaging", "periodic", "--segment", "64").status == 2
