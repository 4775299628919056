"""What the ports of a network are travels with the model through every verb."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import realize
from realize import Ports


def _impedance(ports: Ports | None) -> realize.FrequencyResponse:
    """Two resonant branches that meet in a common resistor: a reciprocal impedance matrix, ohm."""
    w = np.linspace(0.2, 5.0, 60)
    s = 1j * w
    first, second = s + 1 / s + 0.1, 0.5 * s + 2 / s + 0.2
    response = np.array([[1 / (1 / first + 0.1), 0 * s + 1.0], [0 * s + 1.0, 1 / (1 / second + 0.1)]])
    return realize.FrequencyResponse(
        frequency=w, frequency_unit="rad/s", response=np.moveaxis(response, 2, 0), ports=ports
    )


def test_ports_travel_from_the_data_to_the_reduced_model(tmp_path: Path) -> None:
    ports = Ports("scattering", (50.0, 75.0))
    fitted = realize.fit(_impedance(ports), order=4)
    for made in (
        fitted,
        realize.convert(fitted, "transfer-function"),
        realize.convert(fitted, "state-space", form="modal"),
        realize.minimal(fitted),
        realize.reduce(fitted, order=2),
        realize.convert(fitted, "frequency-response", frequencies=[1.0]),
    ):
        assert made.model.ports == ports
        for suffix in (".json", ".npz"):
            realize.write(made, tmp_path / f"model{suffix}")
            assert realize.read(tmp_path / f"model{suffix}").ports == ports
    realize.write(_impedance(ports), tmp_path / "data.csv")
    assert realize.read(tmp_path / "data.csv").ports == ports


def test_ports_count_in_the_digest() -> None:
    from realize.models import digest

    made = [_impedance(p) for p in (None, Ports("impedance"), Ports("admittance"), Ports("impedance", (50.0, 50.0)))]
    assert len({digest(model) for model in made}) == 4


def test_inspect_shows_them(run: Callable[..., Any], tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    realize.write(_impedance(Ports("impedance", (1.0, 2.0))), "data.json")
    assert run("inspect", "data.json", "--json").record["ports"] == {"parameter": "impedance", "reference": [1.0, 2.0]}
    record = json.loads(Path("data.json").read_text())
    assert record["ports"] == {"parameter": "impedance", "reference": [1.0, 2.0]}
    record["ports"]["reference"] = [1.0, -2.0]
    Path("data.json").write_text(json.dumps(record))
    done = run("inspect", "data.json")
    assert done.status == 3 and "ports.reference[1]" in done.err and "greater than zero" in done.err


def test_another_parameter_of_the_same_network_is_fitted(tmp_path: Path, run: Callable[..., Any]) -> None:
    """One coil with a loss, 2 ohm + s 3 mH, as scattering parameters: its impedance grows with s."""
    w = np.linspace(1e3, 1e5, 50)
    z = 2 + 3e-3j * w
    gamma = (z - 50) / (z + 50)
    data = realize.FrequencyResponse(
        frequency=w,
        frequency_unit="rad/s",
        response=gamma[:, None, None],
        deviation=np.full((50, 1, 1), 1e-4),
        ports=Ports("scattering", (50.0,)),
    )
    made = realize.fit(data, order=1, parameter="admittance", to="pole-residue")
    assert made.model.ports == Ports("admittance", (50.0,))
    assert made.model.poles[0] == pytest.approx(-2 / 3e-3, rel=1e-9)
    assert made.model.residues[0, 0, 0] == pytest.approx(1 / 3e-3, rel=1e-9)
    realize.write(data, tmp_path / "coil.json")
    assert run("fit", tmp_path / "coil.json", "--parameter", "hybrid").status == 2
    plain = data.with_(ports=None)
    with pytest.raises(realize.UsageError, match="data of ports"):
        realize.fit(plain, parameter="impedance")
    through = data.with_(response=np.ones((50, 1, 1)))
    with pytest.raises(realize.InputError, match="without impedance parameters"):
        realize.fit(through, parameter="impedance")
