"""Tables: the facts are in them, within 80 columns, without control codes, on any stream."""

from __future__ import annotations

import io
import json
import subprocess
import sys
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import realize.reports
from realize.reports import compare_table, fit_table, inspect_table, page_for, poles_table, receipt_table
from realize.reports.look import Page
from realize.reports.numbers import channel_name, channel_unit, clean, hertz, prefixed, short
from realize.schema import Claim, ModelMark, Receipt, SecondOpinion, judge, receipt_to_record
from realize.testing.scenario import bench_axis

CAUTION = "Check the closed loop on the full model and on hardware with limits in place."


def receipt(claims: list[Claim], **more: Any) -> Receipt:
    values: dict[str, Any] = {
        "step": "reduce",
        "method": "balanced-truncation",
        "route": ["state-space", "balanced", "state-space"],
        "source": ModelMark("state-space", 60, "sha256:0"),
        "result": ModelMark("state-space", 12, "sha256:1"),
        "claims": claims,
    }
    return Receipt(**{**values, **more})


FULL = receipt(
    [
        judge(
            "reduction-error",
            0.0012345,
            limit=0.01,
            unit="absolute",
            basis="bounded",
            where={"frequency": 41.7, "output": 1, "input": 2},
            uncertainty=2e-5,
            relative=0.00345,
        ),
        judge("reduction-bound", 0.1, limit=0.02, unit="absolute", basis="bounded"),
        judge("peak-error", 1e-12, limit=1e-9),
        judge("stability", 1.0, unit="1", basis="proved"),
        judge("order", 12.0, unit="states", basis="proved"),
        judge("linf-error", float("inf"), unit="absolute"),
        judge("h2-error", None, unit="absolute", note="the difference has a feed-through"),
    ],
    fragility={"source": 2e-12, "result": None},
    second_opinion=SecondOpinion(by="control 0.10", agreement=2e-13, status="agrees", note="same order"),
    cautions=[CAUTION, "x" * 300],
    seconds=0.0312,
)


def check(text: str, width: int = 80) -> str:
    assert text.endswith("\n") and not text.endswith("\n\n")
    for line in text.split("\n"):
        assert len(line) <= width, line
        assert line == line.rstrip()
        assert all(sign.isprintable() for sign in line), line
    return " ".join(text.split())


def test_a_receipt_says_everything_it_holds() -> None:
    text = check(receipt_table(FULL))
    for fact in (
        "reduce by balanced-truncation",
        "from state-space, order 60",
        "to state-space, order 12",
        "state-space → balanced → state-space",
        "reduction-error 0.00123 ± 2e-5 absolute 0.01 bounded yes",
        "reduction-bound 0.1 absolute 0.02 bounded NO",
        "peak-error 1e-12 relative 1e-9 measured open",
        "stability stable - proved -",
        "order 12 - proved -",
        "linf-error infinite",
        "h2-error not available",
        "the difference has a feed-through",
        "0.00345 relative to the largest gain",
        "41.7 rad/s (6.637 Hz)",
        "output 1, input 2",
        "source 2e-12, result -",
        "control 0.10 agrees, difference 2e-13; same order",
        "31.2 ms",
        CAUTION,
        "FAILED: reduction-bound beyond the limit.",
    ):
        assert fact in text, fact


def test_the_verdict_is_in_words() -> None:
    kept = judge("peak-error", 1e-12, limit=1e-9, basis="proved")
    unbounded = judge("response-error", 1e-12, limit=1e-9)
    missing = judge("reduction-bound", None, limit=1.0, unit="absolute")
    free = judge("order", 3.0, unit="states")
    unstable = judge("stability", 0.0, unit="1", basis="proved")
    assert "The limit is kept." in receipt_table(receipt([kept, free]))
    assert "All 2 limits are kept." in receipt_table(receipt([kept, kept]))
    assert "OPEN: response-error within the limit where measured" in receipt_table(receipt([kept, unbounded]))
    assert "OPEN: reduction-bound could not be decided." in receipt_table(receipt([missing]))
    assert "No limits were set" in receipt_table(receipt([free]))
    assert "No limits were set" in receipt_table(receipt([]))
    assert "UNSTABLE" in receipt_table(receipt([unstable]))


def test_second_opinions_are_told_apart() -> None:
    texts = {
        status: receipt_table(receipt([], second_opinion=SecondOpinion(by="other", status=status)))  # type: ignore[arg-type]
        for status in ("agrees", "disagrees", "failed", "not-applicable", "not-asked")
    }
    assert len(set(texts.values())) == 5
    assert "other DISAGREES" in texts["disagrees"] and "the result stands" in texts["failed"]
    assert "not asked for" in texts["not-asked"] and "other" not in texts["not-asked"]


def test_a_receipt_is_found_in_a_pair_and_in_a_conversion() -> None:
    class Conversion:
        model = None
        receipt = FULL

    assert receipt_table(FULL) == receipt_table((None, FULL)) == receipt_table(Conversion())


def test_poles_have_frequency_in_both_units_and_damping() -> None:
    poles = [(complex(-0.04, 3), 1), (complex(-0.04, -3), 1), (0j, 2), (-1e6 + 0j, 1), (2 + 0j, 1), (5j, 1), (-5j, 1)]
    text = poles_table(poles)
    check(text)
    rows = {line.split("  ")[0]: " ".join(line.split()) for line in text.splitlines()[1:]}
    assert rows["-0.04 ± 3j"].endswith("3 478 mHz 0.0133")
    assert "integrator" in rows["0"] and "2×" in rows["0"]
    assert rows["2"].endswith("2 318 mHz -1 UNSTABLE")
    assert rows["-1e6"].endswith("1e6 159 kHz 1")
    assert rows["0 ± 5j"].endswith("5 796 mHz 0 on the boundary")
    assert len(rows) == 5


def test_sampled_poles_are_read_through_the_logarithm() -> None:
    period = 0.001
    s = complex(-3.0, 400.0)
    z = complex(np.exp(s * period))
    rows = poles_table([(z, 1), (z.conjugate(), 1), (0j, 3), (1 + 0j, 1), (1.5 + 0j, 1), (-1 + 0j, 1)], period)
    check(rows)
    lines = [" ".join(line.split()) for line in rows.splitlines()]
    assert f"400 63.7 Hz {3 / abs(s):.3g}" in next(line for line in lines if "±" in line)
    assert any(line.startswith("0 - - - delay 3×") for line in lines)
    assert any(line.startswith("1 0 0 Hz - integrator") for line in lines)
    assert any(line.startswith("-1 3142 500 Hz") and "on the boundary" in line for line in lines)
    assert any(line.startswith("1.5") and "UNSTABLE" in line for line in lines)


def test_zeros_and_long_and_empty_lists() -> None:
    assert poles_table([]) == "no poles\n"
    assert "non-minimum phase" in poles_table([(3 + 0j, 1)], name="zero")
    assert "UNSTABLE" not in poles_table([(3 + 0j, 1)], name="zero")
    many = poles_table([(complex(-k), 1) for k in range(1, 201)])
    assert "and 176 more rows" in many and len(many.splitlines()) == 26
    twice = poles_table([(1j - 1, 1), (1j - 1, 1), (-1j - 1, 1), (-1j - 1, 1)])
    assert twice.count("±") == 2
    assert "-1 - 1j" in poles_table([(-1 - 1j, 1)])


RECORD: dict[str, Any] = {
    "kind": "state-space",
    "order": 12,
    "minimal_order": 10,
    "time": {"domain": "sampled", "rate": "44100"},
    "inputs": [{"name": "motor torque", "unit": "N*m"}, {"name": "", "unit": ""}],
    "outputs": [{"name": "angle", "unit": "rad"}],
    "stable": False,
    "poles": [[0.5, 0.25, 1], [0.5, -0.25, 1], [1.25, 0.0, 2]],
    "zeros": [[0.1, 0.0, 1]],
    "hankel_singular_values": [10.0**-k for k in range(20)],
    "fragility": 3e-12,
    "cautions": ["The model is unstable.", CAUTION],
}


def test_inspect_says_what_the_plant_is() -> None:
    text = check(inspect_table(RECORD))
    for fact in (
        "kind state-space",
        "order 12, of which 10 are needed",
        "sampled, 22.68 µs (44.1 kHz)",
        "2: motor torque (N*m), number 1",
        "1: angle (rad)",
        "stable NO",
        "fragility 3e-12",
        "1, 0.1, 0.01",
        "1e-19 (20 in all)",
        "0.5 ± 0.25j",
        "UNSTABLE 2×",
        "The model is unstable.",
        CAUTION,
    ):
        assert fact in text, fact
    assert inspect_table(json.loads(json.dumps(RECORD))) == inspect_table(RECORD)


def test_inspect_needs_no_field_and_takes_null() -> None:
    check(inspect_table({}))
    check(inspect_table(dict.fromkeys(RECORD)))
    data = {"kind": "frequency-response", "order": None, "inputs": 1, "outputs": 2, "lines": 400, "largest gain": 1e300}
    text = check(inspect_table(data))
    assert "lines 400" in text and "largest gain 1e300" in text and "order" not in text
    several = {"channel_zeros": [[[[3.0, 0.0, 1]]], [[]]], "dead_time": [[0.0], [0.002]], "steps": ["fit", "reduce"]}
    text = check(inspect_table({**several, "lowest_frequency": 628.3185307}))
    for fact in (
        "output 0, input 0 zero rad/s frequency damping 3 3",
        "non-minimum phase",
        "output 1, input 0 no zeros",
        "dead time output 1, input 0: 2 ms",
        "steps fit → reduce",
        "lowest frequency 628.3 rad/s (100 Hz)",
    ):
        assert fact in text, fact
    many = inspect_table({"channel_zeros": [[[[1.0, 0.0, 2]], [], []], [[], [], []]]})
    assert "0 to 2 in each of 6 channels" in many
    assert "order 3 (minimal)" in check(inspect_table({"order": 3, "minimal_order": 3}))


def test_compare_takes_claims_and_plain_records() -> None:
    claims = {"peak-error": judge("peak-error", 0.25, basis="proved"), "h2-error": judge("h2-error", float("inf"))}
    plain = {name: receipt_to_record(receipt([claim]))["claims"][0] for name, claim in claims.items()}
    without_name = {name: {k: v for k, v in claim.items() if k != "name"} for name, claim in plain.items()}
    text = check(compare_table(claims))
    assert "peak-error 0.25 relative - proved" in text and "h2-error infinite" in text
    assert compare_table(plain) == compare_table(without_name) == compare_table(claims)
    several = {
        "comparisons": [{"a": "one.json", "b": f"{k}.json", **plain} for k in (2, 3)],
        "cautions": ["mind the gap"],
    }
    text = check(compare_table(several))
    assert "2.json against one.json" in text and "3.json against one.json" in text and "mind the gap" in text
    assert "nothing could be compared" in compare_table({})


def test_fit_marks_the_order_that_was_kept() -> None:
    candidates = [
        {
            "order": order,
            "rms": 0.1 / order,
            "weighted": 12 / order,
            "criterion": -1234.5678 / order,
            "kept": order == 10,
        }
        for order in (8, 10, 12)
    ]
    lines = [" ".join(line.split()) for line in fit_table(candidates).splitlines()]
    assert lines[2] == "10 0.01 1.2 -123.457 kept"
    assert sum("kept" in line for line in lines) == 1
    candidates[0]["note"] = "one pole moved to the edge of the band and stayed there, so this order was left out"
    candidates[0]["rms"] = None
    assert "left out" in check(fit_table(candidates))
    text = check(fit_table([{"order": 3, "bound": 0.125}, {"order": 4, "bound": 0.0}]))
    assert text == "order error bound 3 0.125 4 0"
    assert fit_table([]) == "no order was tried\n"


ALL = [
    lambda page: receipt_table(FULL, page=page),
    lambda page: inspect_table(RECORD, page=page),
    lambda page: poles_table([(complex(-1.23456e-300, 9.87654e-300), 1), (complex(-1e300, 0), 12)], page=page),
    lambda page: compare_table({"peak-error": FULL.claims[0]}, page=page),
    lambda page: fit_table([{"order": 3, "rms": 1e-9, "weighted": 1.0, "criterion": -1e9, "kept": True}], page=page),
]


@pytest.mark.parametrize("width", [40, 60, 80, 110])
@pytest.mark.parametrize("table", ALL)
def test_no_line_is_wider_than_the_page(table: Any, width: int) -> None:
    check(table(Page(width=width)), width)


@pytest.mark.parametrize("table", ALL)
def test_styles_add_nothing_but_styles(table: Any) -> None:
    import re

    styled = table(Page(styled=True))
    assert "\x1b[" in styled
    bare = "\n".join(line.rstrip() for line in re.sub(r"\x1b\[[0-9;]*m", "", styled).split("\n"))
    assert bare == table(Page())


@pytest.mark.parametrize("table", ALL)
def test_streams_without_unicode_get_ascii(table: Any) -> None:
    text = table(Page(ascii_only=True))
    text.encode("ascii")
    assert "?" not in text


def test_plain_text_when_the_stream_is_no_terminal(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("FORCE_COLOR", "1")
    monkeypatch.setenv("COLUMNS", "200")
    for stream in (io.StringIO(), io.TextIOWrapper(io.BytesIO(), encoding="utf-8"), object()):
        page = page_for(stream)
        assert not page.styled and page.width == 80
        assert "\x1b" not in receipt_table(FULL, page=page)
    assert page_for(io.TextIOWrapper(io.BytesIO(), encoding="ascii")).ascii_only
    assert page_for(io.TextIOWrapper(io.BytesIO(), encoding="latin-1")).ascii_only


def test_a_terminal_gets_styles_unless_they_are_declined(monkeypatch: pytest.MonkeyPatch) -> None:
    import os

    main, other = os.openpty()
    try:
        with os.fdopen(other, "w", encoding="utf-8") as stream:
            monkeypatch.delenv("NO_COLOR", raising=False)
            monkeypatch.setenv("TERM", "xterm")
            assert page_for(stream).styled
            monkeypatch.setenv("NO_COLOR", "1")
            assert not page_for(stream).styled
            monkeypatch.delenv("NO_COLOR")
            monkeypatch.setenv("TERM", "dumb")
            assert not page_for(stream).styled
    finally:
        os.close(main)


def test_names_from_files_cannot_steer_the_terminal() -> None:
    nasty = "\x1b[2J\x07[red]name[/red]\r\n:smile:\u202e"
    record = {**RECORD, "kind": "state-space", "inputs": [{"name": nasty, "unit": nasty}], "cautions": [nasty]}
    text = check(inspect_table(record))
    assert "[red]name[/red]" in text and ":smile:" in text
    check(receipt_table(receipt([], method=nasty, step=nasty, cautions=[nasty], route=[nasty] * 3)))


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0, "0"),
        (0.0, "0"),
        (-0.0, "0"),
        (1234.5, "1230"),
        (999999.0, "1e6"),
        (0.000123456, "0.000123"),
        (1.5e-12, "1.5e-12"),
        (1e300, "1e300"),
        (-2.5, "-2.5"),
        (float("inf"), "infinite"),
        (float("nan"), "undefined"),
        (None, "-"),
        (True, "yes"),
        (12, "12"),
        (10**400, "beyond doubles"),
    ],
)
def test_short_numbers(value: Any, text: str) -> None:
    assert short(value) == text


def test_prefixes() -> None:
    assert hertz(2 * np.pi * 2400) == "2.4 kHz"
    assert hertz(2 * np.pi * 0.0312) == "31.2 mHz"
    assert hertz(0.0) == "0 Hz"
    assert prefixed(999.96, "Hz") == "1 kHz"
    assert prefixed(1e-300, "s") == "1e-300 s"
    assert prefixed(1e40, "Hz") == "1e40 Hz"
    assert prefixed(float("inf"), "Hz") == "infinite Hz"


@given(st.floats(-1e307, 1e307), st.integers(1, 6))
@settings(max_examples=200, deadline=None)
def test_short_numbers_are_near_the_number(value: float, digits: int) -> None:
    text = short(value, digits)
    assert len(text) <= digits + 8
    assert float(text) == pytest.approx(value, rel=0.5 * 10.0 ** (1 - digits) * 1.01, abs=1e-323)


@given(st.text(max_size=200), st.integers(5, 60))
@settings(max_examples=100, deadline=None)
def test_clean_text_is_short_and_printable(text: str, longest: int) -> None:
    line = clean(text, longest)
    assert len(line) <= longest and (not line or line.isprintable())


def test_channel_names_and_units() -> None:
    data = bench_axis(1, lines=3)
    assert channel_name(data, 1, 0) == "motor torque → payload acceleration"
    assert channel_unit(data, 1, 0) == "(m/s^2)/(N*m)"
    bare = data.with_(inputs=(), outputs=())
    assert channel_name(bare, 1, 0) == "input 0 → output 1" and channel_unit(bare, 1, 0) == ""


def test_a_table_does_not_pay_for_pictures() -> None:
    code = (
        "import sys, realize.reports.tables; from realize.reports import receipt_table\n"
        "assert not {'realize.reports.' + name for name in ('plots', 'panels', 'curves')} & set(sys.modules)"
    )
    subprocess.run([sys.executable, "-W", "error", "-c", code], check=True, timeout=60)


def test_every_name_of_the_package_is_there() -> None:
    assert dir(realize.reports) == sorted(realize.reports.__all__)
    for name in realize.reports.__all__:
        assert getattr(realize.reports, name) is not None
    with pytest.raises(AttributeError, match="nothing"):
        getattr(realize.reports, "no" + "thing")
