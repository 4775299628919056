"""Pictures: written, the same twice, with the panels that there is something to show in, whatever the model."""

from __future__ import annotations

import xml.etree.ElementTree as ElementTree
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from realize.errors import InputError, UsageError
from realize.models import (
    DeadTime,
    FrequencyResponse,
    Model,
    PoleResidue,
    Sections,
    Signal,
    StateSpace,
    TimeBase,
    TransferFunction,
    ZeroPoleGain,
)
from realize.reports.plots import draw, figure_of, page_settings
from realize.testing.scenario import bench_axis, bench_axis_truth

SAMPLED = TimeBase(domain="sampled", period=0.001)
LAG = TransferFunction(numerator=[1.0], denominator=[0.1, 1.0])
PAIR = StateSpace(A=[[0.0, 1.0], [-4.0, -0.2]], B=[[0.0], [1.0]], C=[[1.0, 0.0]])


def grown(outputs: int, inputs: int) -> StateSpace:
    random = np.random.default_rng(outputs * 10 + inputs)
    A = np.array([[-0.1, 3.0, 0, 0], [-3.0, -0.1, 0, 0], [0, 0, -20.0, 0], [0, 0, 0, -0.5]])
    return StateSpace(A=A, B=random.normal(size=(4, inputs)), C=random.normal(size=(outputs, 4)))


def data_at(frequency: list[float], unit: str = "Hz", **more: Any) -> FrequencyResponse:
    values = 1 / (1 + 1j * np.array(frequency))[:, None, None]
    return FrequencyResponse(frequency=frequency, frequency_unit=unit, response=values, **more)


def page(entries: list[tuple[str, Model]], **options: Any) -> Any:
    """Return the figure, not rendered."""
    with page_settings():
        return figure_of(entries, **options)


def titles(figure: Any) -> list[str]:
    return [axes.get_title(loc="left") for axes in figure.axes]


def panel(figure: Any, start: str) -> Any:
    return next(axes for axes in figure.axes if axes.get_title(loc="left").startswith(start))


CASES: dict[str, list[tuple[str, Model]]] = {
    "one channel": [("lag", LAG)],
    "one input, three outputs": [("plant", grown(3, 1))],
    "three by three": [("full", grown(3, 3))],
    "order 0": [("gain", StateSpace(A=np.zeros((0, 0)), B=np.zeros((0, 1)), C=np.zeros((1, 0)), D=[[-2.0]]))],
    "a constant": [("gain", TransferFunction(numerator=[3.0], denominator=[1.0]))],
    "zero": [("zero", TransferFunction(numerator=[0.0], denominator=[1.0, 1.0]))],
    "zero against something": [("zero", TransferFunction(numerator=[0.0], denominator=[1.0, 1.0])), ("lag", LAG)],
    "poles at zero": [("integrators", TransferFunction(numerator=[1.0, 2.0], denominator=[1.0, 3.0, 0.0, 0.0]))],
    "only integrators": [("integrators", TransferFunction(numerator=[1.0], denominator=[1.0, 0.0, 0.0]))],
    "improper": [("derivative", TransferFunction(numerator=[1.0, 0.0, 0.0], denominator=[1.0, 1.0]))],
    "undamped": [("osc", ZeroPoleGain(zeros=[5j, -5j], poles=[2j, -2j], gain=1.0))],
    "sampled": [("sampled", TransferFunction(numerator=[0.1], denominator=[1.0, -1.6, 0.9, 0.0], time=SAMPLED))],
    "sampled and continuous": [
        ("continuous", ZeroPoleGain(zeros=[], poles=[-10.0], gain=10.0)),
        ("sampled", ZeroPoleGain(zeros=[], poles=[0.99], gain=0.01, time=SAMPLED)),
    ],
    "far outside the circle": [("z", ZeroPoleGain(zeros=[], poles=[50.0, -0.5], gain=1.0, time=SAMPLED))],
    "a single line": [("line", data_at([10.0])), ("lag", LAG)],
    "a single line alone": [("line", data_at([10.0]))],
    "a line at zero": [("line", data_at([0.0])), ("lag", LAG)],
    "data in rad/s": [("data", data_at([1.0, 2.0, 5.0], "rad/s")), ("more", data_at([2.0, 5.0, 7.0], "rad/s"))],
    "data that share no line": [("data", data_at([1.0, 2.0])), ("more", data_at([3.0, 4.0]))],
    "noise-free deviation": [("data", data_at([1.0, 2.0], deviation=np.zeros((2, 1, 1)))), ("lag", LAG)],
    "sections": [("filter", Sections(sections=[[[0.0, 0.0, 1.0], [1.0, 0.1, 1.0]]], gain=2.0))],
    "repeated residues": [
        ("double", PoleResidue(poles=[-1.0, -1.0], powers=[1, 2], residues=[[[1.0]], [[2.0]]], direct=[[0.0]]))
    ],
    "the ends of the doubles": [("wide", ZeroPoleGain(zeros=[], poles=[-1e-300, -1e300], gain=1e300))],
    "tiny": [("tiny", TransferFunction(numerator=[1e-300], denominator=[1.0, 1e-300]))],
    "decimals beyond doubles": [
        (
            "exact",
            TransferFunction(
                numerator=[1.0], denominator=[np.inf, 1.0], decimals={"denominator": {(0, 0, 0): "1e400"}}
            ),
        )
    ],
    "dead time": [
        ("late", LAG.with_(dead_time=DeadTime(inputs=(2.0,), outputs=(0.0,), channels=((0.0,),)))),
        ("prompt", LAG),
    ],
    "many repeated poles": [("(s+1)^20", ZeroPoleGain(zeros=[], poles=[-1.0] * 20, gain=1.0))],
    "unstable": [("rocket", StateSpace(A=[[2.0, 0], [0, -3000.0]], B=[[1.0], [1.0]], C=[[1.0, 1.0]]))],
    "descriptor": [("rows", PAIR.with_(E=np.diag([1.0, 0.0])))],
    "equal models": [("a", LAG), ("b", LAG)],
    "twelve": [(f"model {k}", TransferFunction(numerator=[1.0], denominator=[1.0, 0.1 + k, 4.0])) for k in range(12)],
}


@pytest.mark.parametrize("name", CASES)
def test_every_kind_of_plant_has_a_picture(name: str, tmp_path: Path) -> None:
    path = tmp_path / "page.svg"
    draw(CASES[name], path, title=name)
    root = ElementTree.parse(path).getroot()
    assert root.tag == "{http://www.w3.org/2000/svg}svg"
    text = path.read_text(encoding="utf-8")
    assert "nan" not in text.lower().split("<defs>")[-1] and " inf" not in text


def test_png_is_a_png_and_the_same_twice(tmp_path: Path) -> None:
    entries = [("line", data_at([1.0, 2.0, 3.0])), ("lag", LAG)]
    first, second = tmp_path / "one.png", tmp_path / "two.PNG"
    draw(entries, first, title="Bench")
    draw(entries, second, title="Bench")
    content = first.read_bytes()
    assert content[:8] == b"\x89PNG\r\n\x1a\n" and content[-8:-4] == b"IEND"
    assert content == second.read_bytes()
    assert b"Software" not in content and b"tEXt" not in content
    assert sorted(entry.name for entry in tmp_path.iterdir()) == ["one.png", "two.PNG"]


def test_svg_is_the_same_twice_and_carries_no_date(tmp_path: Path) -> None:
    for name in ("one.svg", "two.svg"):
        draw([("pair", PAIR), ("lag", LAG)], tmp_path / name)
    content = (tmp_path / "one.svg").read_bytes()
    assert content == (tmp_path / "two.svg").read_bytes()
    assert b"<dc:date>" not in content and b"matplotlib.org" not in content.split(b"<defs>")[-1]


def test_the_settings_of_the_caller_neither_matter_nor_change(tmp_path: Path) -> None:
    import matplotlib

    draw([("lag", LAG)], tmp_path / "plain.svg")
    with matplotlib.rc_context({"lines.linewidth": 9.0, "axes.facecolor": "red", "svg.hashsalt": "other"}):
        before = dict(matplotlib.rcParams)
        draw([("lag", LAG)], tmp_path / "theirs.svg")
        assert dict(matplotlib.rcParams) == before
    assert (tmp_path / "plain.svg").read_bytes() == (tmp_path / "theirs.svg").read_bytes()


def test_no_global_figure_manager_is_used() -> None:
    import subprocess
    import sys

    code = (
        "import sys, realize.reports, realize.reports.plots as p\n"
        "assert 'matplotlib' not in sys.modules and 'rich' not in sys.modules\n"
        "from realize.models import TransferFunction as T\n"
        "with p.page_settings(): p.rendered(p.figure_of([('a', T(numerator=[1.0], denominator=[1.0, 1.0]))]), 'svg')\n"
        "assert 'matplotlib.pyplot' not in sys.modules"
    )
    subprocess.run([sys.executable, "-W", "error", "-c", code], check=True, timeout=60)


def test_panels_appear_only_where_there_is_something_to_show() -> None:
    data, truth = ("data", bench_axis(2)), ("truth", bench_axis_truth())
    assert len(page([data]).axes) == 4  # magnitude and phase of two channels
    assert len(page([truth]).axes) == 5  # and the poles
    both = page([data, truth])
    assert len(both.axes) == 6 and "Difference from data" in titles(both)
    assert len(page([("pair", PAIR)]).axes) == 4
    assert "Hankel singular values" in titles(page([("pair", PAIR)]))
    assert "Hankel singular values" not in titles(page(CASES["unstable"]))
    assert "Hankel singular values" not in titles(page(CASES["poles at zero"]))
    assert len(page(CASES["order 0"]).axes) == 2
    mixed = titles(page(CASES["sampled and continuous"]))
    assert any("s-plane" in title for title in mixed) and any("z-plane" in title for title in mixed)


def test_more_than_six_channels_are_counted_in_words() -> None:
    figure = page(CASES["three by three"])
    assert sum("→" in title for title in titles(figure)) == 6
    assert "6 of 9 channels are drawn" in figure.get_supxlabel()


def test_names_and_units_stand_on_the_axes() -> None:
    figure = page([("data", bench_axis(1))])
    assert titles(figure)[0] == "motor torque → motor speed"
    assert "(rad/s)/(N*m)" in figure.axes[0].get_ylabel()
    assert "(m/s^2)/(N*m)" in figure.axes[2].get_ylabel()


def test_names_that_no_font_or_formula_parser_would_like(tmp_path: Path) -> None:
    model = LAG.with_(inputs=[Signal("$\\frac{", "--\u0007>")], outputs=[Signal("名前 ]]> & <b>\n", "1")])
    draw([("$x_{\u200b\x1b[31m", model), ("x" * 300, LAG)], tmp_path / "odd.svg", title="$\\bad{ -- 题")
    ElementTree.parse(tmp_path / "odd.svg")


def test_the_hankel_singular_values_are_right_and_given_ones_win() -> None:
    # 1/(s + 1) with b = c = 1: Gramians 1/2, Hankel singular value 1/2
    lag = StateSpace(A=[[-1.0]], B=[[1.0]], C=[[1.0]])
    line = panel(page([("lag", lag)]), "Hankel").lines[0]
    assert line.get_ydata()[0] == pytest.approx(np.log10(0.5), rel=1e-12)
    line = panel(page([("lag", lag)], hankel={"lag": [100.0, 10.0, 0.0]}), "Hankel").lines[0]
    assert line.get_ydata().tolist() == [2.0, 1.0]
    sampled = StateSpace(A=[[0.5]], B=[[1.0]], C=[[1.0]], time=SAMPLED)  # b c / (1 - a^2) = 4/3
    line = panel(page([("lag", sampled)]), "Hankel").lines[0]
    assert line.get_ydata()[0] == pytest.approx(np.log10(4 / 3), rel=1e-12)


def test_magnitude_phase_and_band_are_those_of_the_model() -> None:
    figure = page([("lag", LAG)], band=(1.0, 100.0))
    x, level = figure.axes[0].lines[0].get_data()
    w = 2 * np.pi * 10**x
    assert w[0] == pytest.approx(1.0) and w[-1] == pytest.approx(100.0)
    assert np.allclose(level, -10 * np.log10(1 + (0.1 * w) ** 2), atol=1e-9)
    assert np.allclose(figure.axes[1].lines[0].get_ydata(), -np.degrees(np.arctan(0.1 * w)), atol=1e-9)
    assert figure.axes[0].get_xlim() == pytest.approx((np.log10(1 / 2 / np.pi), np.log10(100 / 2 / np.pi)))


def test_peaks_are_found_however_narrow() -> None:
    for damping in (1e-2, 1e-5, 1e-8):
        model = TransferFunction(numerator=[1.0], denominator=[1.0, 2 * damping, 1.0])
        level = page([("light", model)]).axes[0].lines[0].get_ydata()
        assert np.max(level) == pytest.approx(-20 * np.log10(2 * damping), abs=0.1)


def test_sampled_models_end_at_half_the_rate() -> None:
    x = page(CASES["sampled"]).axes[0].lines[0].get_xdata()
    assert 10 ** x[-1] == pytest.approx(500.0, rel=1e-9)


def test_phase_with_dead_time_is_a_straight_line_on_top() -> None:
    figure = page(CASES["dead time"])
    late, prompt = figure.axes[1].lines
    w = 2 * np.pi * 10 ** late.get_xdata()
    assert np.allclose(late.get_ydata(), -np.degrees(np.arctan(0.1 * w)) - np.degrees(2.0 * w), rtol=1e-9)
    w = 2 * np.pi * 10 ** prompt.get_xdata()
    assert np.allclose(prompt.get_ydata(), -np.degrees(np.arctan(0.1 * w)), atol=1e-9)


def test_data_points_lie_on_the_branch_of_the_model() -> None:
    figure = page([("data", bench_axis(3)), ("truth", bench_axis_truth())])
    for below in (figure.axes[1], figure.axes[3]):
        points, line = below.lines
        distance = points.get_ydata() - np.interp(points.get_xdata(), *line.get_data())
        assert np.max(np.abs(distance)) <= 181


def test_the_difference_is_relative_to_the_first_entry() -> None:
    larger = LAG.with_(numerator=[1.25])
    assert 10 ** panel(page([("a", LAG), ("b", larger)]), "Difference").lines[0].get_ydata() == pytest.approx(0.25)
    assert 10 ** panel(page([("b", larger), ("a", LAG)]), "Difference").lines[0].get_ydata() == pytest.approx(0.2)
    truth = bench_axis_truth()
    data = bench_axis(1)
    line = panel(page([("data", data), ("truth", truth)]), "Difference").lines[0]
    gap = np.linalg.norm(data.response - truth.evaluate(1j * data.radians), axis=(1, 2))
    assert 10 ** line.get_ydata() == pytest.approx(gap / np.linalg.norm(data.response, axis=(1, 2)), rel=1e-9)


def test_what_cannot_be_drawn_is_said() -> None:
    assert "no frequency in common" in page(CASES["data that share no line"]).get_supxlabel()
    assert "no difference" in page(CASES["equal models"]).get_supxlabel()
    assert "0 Hz" in page(CASES["a line at zero"]).get_supxlabel()
    assert any("identically zero" in t.get_text() for t in page(CASES["zero"]).axes[0].texts)
    assert "2 of 3 lines" in page([("data", data_at([1.0, 2.0, 3.0]))], band=(5.0, 7.0)).get_supxlabel()
    units = [("a", LAG.with_(inputs=[Signal("u", "V")])), ("b", LAG.with_(inputs=[Signal("u", "mV")]))]
    assert "Units differ: V in a, mV in b" in page(units).get_supxlabel()


@pytest.mark.parametrize("name", ["page", "page.pdf", "page.png.txt", ".png", "-", ""])
def test_other_suffixes_are_wrong_usage(name: str, tmp_path: Path) -> None:
    with pytest.raises(UsageError, match=r"\.png or \.svg"):
        draw([("lag", LAG)], str(tmp_path / name) if name not in ("-", "") else name)
    assert not list(tmp_path.iterdir())


def test_wrong_requests_are_refused_in_words(tmp_path: Path) -> None:
    path = tmp_path / "page.svg"
    with pytest.raises(UsageError, match="at least one model"):
        draw([], path)
    with pytest.raises(UsageError, match="at most 12"):
        draw([("lag", LAG)] * 13, path)
    with pytest.raises(UsageError, match="1 inputs and 2 outputs"):
        draw([("lag", LAG), ("two", bench_axis_truth())], path)
    for band in ((2.0, 1.0), (0.0, 1.0), (1.0, np.inf), (np.nan, 1.0)):
        with pytest.raises(UsageError, match="band"):
            draw([("lag", LAG)], path, band=band)
    with pytest.raises(UsageError, match="half the sampling rate"):
        draw(CASES["sampled"], path, band=(1e4, 1e5))
    with pytest.raises(InputError, match="folder"):
        draw([("lag", LAG)], tmp_path / "nowhere" / "page.svg")
    assert not list(tmp_path.iterdir())


def test_no_label_lies_on_another() -> None:
    """Titles, legend and notes of a full page, measured after the layout: no two of them overlap."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg

    entries = [(f"a model with a long name, number {k}", grown(1, 3)) for k in range(5)]
    entries.append(("sweep", FrequencyResponse(frequency=[0.0, 1.0], frequency_unit="Hz", response=np.ones((2, 1, 3)))))
    with page_settings():
        figure = figure_of(entries, title="A page with everything on it")
        canvas = FigureCanvasAgg(figure)
        canvas.draw()
        renderer = canvas.get_renderer()
        boxes = [figure.legends[0].get_window_extent(renderer)]
        boxes += [axes._left_title.get_window_extent(renderer) for axes in figure.axes if axes.get_title(loc="left")]
        boxes += [text.get_window_extent(renderer) for text in (figure._supxlabel,) if text is not None]
        for k, box in enumerate(boxes):
            assert not any(box.overlaps(other) for other in boxes[k + 1 :])
        assert boxes[0].x1 <= figure.bbox.x1 and boxes[0].y1 <= figure.bbox.y1
