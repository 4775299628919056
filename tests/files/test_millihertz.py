"""mHz is milli, MHz and mhz are mega: a factor of 1e9 that case alone decides."""

import pytest

from realize.files import read


@pytest.mark.parametrize(("unit", "factor"), [("mHz", 1e-3), ("MHz", 1e6), ("mhz", 1e6), ("MHZ", 1e6)])
@pytest.mark.parametrize("pattern", ["frequency_{}", "Frequency ({})", "f [{}]"])
def test_milli_and_mega(tmp_path, unit, factor, pattern):
    path = tmp_path / "sweep.csv"
    path.write_text(f"{pattern.format(unit)},real,imaginary\n1,1,0\n2,1,0\n")
    assert read(path).frequency.tolist() == pytest.approx([factor, 2 * factor])
