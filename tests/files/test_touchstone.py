"""Touchstone files: every layout of the data, versions 1 and 2, and words where a file is not one."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from realize import Ports, files
from realize.errors import InputError


@pytest.fixture
def read(tmp_path: Path) -> Callable[..., Any]:
    def made(text: str, name: str = "data.ts", **options: Any) -> Any:
        path = tmp_path / name
        path.write_text(text)
        return files.read(path, **options)

    return made


def _matrix(n: int, k: int) -> np.ndarray:
    """A matrix of n ports that is not symmetric, with two-digit entries RC.k - jCR."""
    row, column = np.mgrid[1 : n + 1, 1 : n + 1]
    return (10 * row + column) + k / 10 - 1j * (10 * column + row)


def _pairs(values: Any) -> list[str]:
    return [f"{float(v.real)!r} {float(v.imag)!r}" for v in np.ravel(values)]


def _wrapped(n: int, wide: int = 4) -> str:
    """A version 1 file: row by row, four pairs a line, a row on a new line."""
    lines = ["! comment", "# mhz s ri r 75"]
    for k in range(3):
        matrix = _matrix(n, k)
        if n <= 2:
            lines.append(f"{k + 1} " + " ".join(_pairs(matrix.T)))
            continue
        for i, row in enumerate(matrix):
            entries = _pairs(row)
            for j in range(0, n, wide):
                head = f"{k + 1} " if i == j == 0 else "  "
                lines.append(head + " ".join(entries[j : j + wide]) + f" ! row {i + 1}")
    return "\n".join(lines) + "\n"


@pytest.mark.parametrize("n", [1, 2, 3, 4, 5, 8, 9])
@pytest.mark.parametrize("suffix", ["s{n}p", "txt"])
def test_version_1_of_any_number_of_ports(read: Callable[..., Any], n: int, suffix: str) -> None:
    """With and without a suffix that says how many ports there are."""
    model = read(_wrapped(n), "data." + suffix.format(n=n))
    assert model.frequency.tolist() == [1e6, 2e6, 3e6] and model.frequency_unit == "Hz"
    assert np.array_equal(model.response, [_matrix(n, k) for k in range(3)])
    assert model.ports == Ports("scattering", (75.0,) * n)
    assert [s.name for s in model.inputs] == [s.name for s in model.outputs] == [f"port{k + 1}" for k in range(n)]


def _version_2(n: int, form: str, order: str = "", body: str = "", extra: str = "") -> str:
    order = f"[Two-Port Data Order] {order}\n" if n == 2 else ""
    return (
        f"[Version] 2.0\n# Hz Z RI R 50\n[Number of Ports] {n}\n{order}[Number of Frequencies] 2\n"
        f"{extra}[Matrix Format] {form}\n[Network Data]\n{body}[End]\n"
    )


@pytest.mark.parametrize("form", ["Full", "Lower", "Upper"])
@pytest.mark.parametrize("n", [1, 2, 3, 5])
@pytest.mark.parametrize("order", ["12_21", "21_12"])
def test_version_2_of_any_layout(read: Callable[..., Any], n: int, form: str, order: str) -> None:
    """Not normalised; lower and upper triangles make a symmetric matrix; references one by one, on two lines."""
    matrices = [_matrix(n, k) for k in range(2)]
    if form != "Full":
        matrices = [(m + m.T) / 2 for m in matrices]
    body = ""
    for k, matrix in enumerate(matrices):
        listed = matrix.T if form == "Full" and n == 2 and order == "21_12" else matrix
        place = {"Full": np.indices((n, n)).reshape(2, -1), "Lower": np.tril_indices(n), "Upper": np.triu_indices(n)}
        entries = _pairs(listed[tuple(place[form])])
        body += f"{k + 1}\n" + "\n".join(entries) + "\n"
    reference = [25.0 + k for k in range(n)]
    extra = "[Reference]" + " 25\n" + " ".join(map(str, reference[1:])) + "\n" if n > 1 else "[Reference] 25\n"
    model = read(_version_2(n, form, order, body, extra).replace("21_12", order).replace("12_21", order) if n == 2
                 else _version_2(n, form, order, body, extra))  # fmt: skip
    assert np.array_equal(model.response, matrices)
    assert model.ports == Ports("impedance", tuple(reference))
    assert model.inputs[0].unit == "A" and model.outputs[-1].unit == "V" and not model.remarks


def test_formats_and_units(read: Callable[..., Any]) -> None:
    """Angles in degrees, exact at the quarters; the nearest double of the frequency; defaults GHz S MA R 50."""
    model = read("#\n0.1 2 90\n0.2 3 -180 ! end\n")
    assert model.frequency.tolist() == [1e8, 2e8]
    assert model.response[:, 0, 0].tolist() == [2j, -3]
    assert model.ports == Ports("scattering", (50.0,))
    model = read("# khz S DB R 50\n75.3499999999 20 0\n76 -40 45\n")
    assert model.frequency[0] == 75349.9999999
    assert model.response[0, 0, 0] == 10
    assert model.response[1, 0, 0] == pytest.approx(0.01 * np.exp(0.25j * np.pi), rel=1e-15)
    model = read("# r 1 ri Z hz\n+1.5D0 .5e+1 -5.\n")
    assert model.frequency.tolist() == [1.5] and model.response[0, 0, 0] == 5 - 5j


@pytest.mark.parametrize(
    ("letter", "name", "factors"),
    [
        ("Z", "impedance", [[50, 50], [50, 50]]),
        ("Y", "admittance", [[0.02, 0.02], [0.02, 0.02]]),
        ("H", "hybrid", [[50, 1], [1, 0.02]]),
        ("G", "inverse-hybrid", [[0.02, 1], [1, 50]]),
    ],
)
def test_version_1_is_relative_to_the_reference(
    read: Callable[..., Any], letter: str, name: str, factors: list[list[float]]
) -> None:
    model = read(f"# Hz {letter} RI R 50\n1 1 0 1 0 1 0 1 0\n2 1 0 1 0 1 0 1 0\n")
    assert np.array_equal(model.response[0], factors)
    assert model.ports == Ports(name, (50.0, 50.0))
    assert "relative to the reference resistance" in model.remarks[0]
    units = {"impedance": "AAVV", "admittance": "VVAA", "hybrid": "AVVA", "inverse-hybrid": "VAAV"}[name]
    assert "".join(s.unit for s in (*model.inputs, *model.outputs)) == units


def test_hybrid_parameters_are_what_they_say(read: Callable[..., Any]) -> None:
    """A resistor of 100 ohm between the ports: Y = [[1, -1], [-1, 1]]/100, h11 = 1/y11, h12 = -y12/y11, ..."""
    model = read("# Hz H RI R 50\n1 2 0 -1 0 1 0 0 0\n")
    assert np.array_equal(model.response[0], [[100, 1], [-1, 0]])


NOISY = "# GHz S RI R 50\n1 1 0 2 0 3 0 4 0\n2 1 0 2 0 3 0 4 0\n! noise\n1 2.5 0.4 90 0.3\n2 2.6 0.4 90 0.3\n"


def test_noise_is_left_out_with_a_remark(read: Callable[..., Any]) -> None:
    model = read(NOISY, "amplifier.s2p")
    assert model.frequency.size == 2 and "noise parameters from line 5 on" in model.remarks[0]
    model = read(_version_2(1, "Full", "", "1 1 0\n2 1 0\n").replace(
        "[End]", "[Noise Data]\n1 1 1 1 1\n[End]").replace(
        "[Matrix", "[Number of Noise Frequencies] 1\n[Matrix"))  # fmt: skip
    assert model.frequency.size == 2 and "noise" in model.remarks[0]


def test_a_two_port_over_two_lines_is_no_noise(read: Callable[..., Any]) -> None:
    text = "# GHz S RI R 50\n1 1 0 2 0\n 3 0 4 0\n2 1 0 2 0\n 3 0 4 0\n"
    model = read(text, "two.s2p")
    assert np.array_equal(model.response[1], [[1, 3], [2, 4]]) and not model.remarks


def test_unsorted_lines_are_sorted_with_a_remark(read: Callable[..., Any]) -> None:
    model = read("# Hz S RI R 50\n3 30 0\n1 10 0\n2 20 0\n")
    assert model.response[:, 0, 0].tolist() == [10, 20, 30] and "sorted" in model.remarks[0]


def test_information_and_later_option_lines_are_passed_over(read: Callable[..., Any]) -> None:
    text = _version_2(1, "Full", "", "1 1 0\n2 1 0\n")
    text = text.replace(
        "[Network", "[Begin Information]\nanything [x] 1 2\n[End Information]\n# GHz S DB R 1\n[Network"
    )
    assert read(text).frequency.tolist() == [1, 2]


@pytest.mark.parametrize(
    ("text", "name", "place", "words"),
    [
        ("# GHz S RI R 50\n1 2 x\n", "a.s1p", "line 2", "'x'"),
        ("# GHz S RI R 50\n1 2 nan\n", "a.s1p", "line 2", "finite"),
        ("# GHz S RI R 50\n1 2\n", "a.s1p", "line 2", "3: the frequency and 1 pairs"),
        ("# GHz S RI R 50\n1 2 3 4\n", "a.s1p", "line 2", "4 numbers"),
        ("# GHz S RI R 50\n1 2 3\n1 2 3\n", "a.s1p", "line 3", "each frequency once"),
        ("# GHz S RI R 50\n-1 2 3\n", "a.s1p", "line 2", "not negative"),
        ("# GHz S RI R 50\n1e400 2 3\n", "a.s1p", "line 2", "finite"),
        ("# GHz S MA R 50\n1 -2 3\n", "a.s1p", "line 2", "not negative"),
        ("# GHz S DB R 50\n1 -7000 3\n", "a.s1p", "line 2", "decibels"),
        ("# GHz S DB R 50\n1 7000 3\n", "a.s1p", "line 2", "decibels"),
        ("# GHz S RI R 0\n1 2 3\n", "a.s1p", "line 1", "greater than zero"),
        ("# GHz S RI R\n1 2 3\n", "a.s1p", "line 1", "R without a number"),
        ("# GHz S RI R 50\n", "a.s1p", "", "no line of numbers"),
        ("# GHz S RI R 50\n! nothing\n", "a", "", "no line of numbers"),
        ("# GHz S RI R 50\n1 2 3 4 5 6\n", "a", "line 2", "sNp"),
        ("# GHz H RI R 50\n1 2 3\n", "a.s1p", "line 1", "two ports"),
        ("# GHz S RI R 50\n1 2 3\n", "a.s99999p", "number of ports", "1 to"),
        ("# GHz S RI R 50\n[Reference] 50\n1 2 3\n", "a.s1p", "line 2", "[Version] 2.0"),
        ("[Version] 3.0\n# GHz S RI R 50\n1 2 3\n", "a.ts", "line 1", "2.0 or 2.1"),
        (_version_2(2, "Full", "", "1 1 0 1 0 1 0 1 0\n"), "a.ts", "line 4", "12_21 or 21_12"),
        (_version_2(1, "Full", "", "1 1 0\n"), "a.ts", "[Network Data]", "2, as [Number of Frequencies]"),
        (_version_2(1, "Fool", "", "1 1 0\n"), "a.ts", "line 5", "full or lower or upper"),
        (_version_2(1, "Full", "", "1 1 0\n", "[Reference] 1 2\n"), "a.ts", "line 5", "2 resistances"),
        (_version_2(3, "Full", "", "1 1 0\n", "[Reference] 1 2\n"), "a.ts", "line 6", "too few resistances"),
        (_version_2(1, "Full", "", "1 1 0\n", "[Mixed-Mode Order] D2,3\n"), "a.ts", "line 5", "mixed-mode"),
        (_version_2(1, "Full", "", "1 1 0\n", "[Bogus] 1\n"), "a.ts", "line 5", "[bogus]"),
        (_version_2(1, "Full", "", "1 1 0\n", "1 2 3\n"), "a.ts", "line 5", "before [Network Data]"),
        ("[Version] 2.0\n# Hz S RI R 50\n[Network Data]\n1 2 3\n", "a.ts", "[Number of Ports]", "missing"),
        ("[Version] 2.0\n[Number of Ports] 1\n[Network Data]\n1 2 3\n", "a.ts", "line 4", "option line"),
    ],
)  # fmt: skip
def test_what_is_wrong_is_named(read: Callable[..., Any], text: str, name: str, place: str, words: str) -> None:
    with pytest.raises(InputError) as caught:
        read(text, name)
    assert caught.value.field == place or not place
    assert words in str(caught.value)


def test_tables_with_hashes_stay_tables(read: Callable[..., Any]) -> None:
    assert read("#\n# bench\nfrequency_hz,real,imaginary\n1,2,3\n").ports is None
    assert read("# Hz, real, imaginary\n1,2,3\n", columns=["frequency_hz", "real", "imaginary"]).ports is None


def test_columns_are_for_tables(read: Callable[..., Any]) -> None:
    from realize.errors import UsageError

    with pytest.raises(UsageError, match="names of columns are for tables"):
        read("# GHz S RI R 50\n1 2 3\n", columns=["frequency_hz", "real", "imaginary"])
