"""The invented bench: reproducible, stable, of the stated order, and as noisy as it says."""

from __future__ import annotations

import ast
from pathlib import Path

import numpy as np
import pytest

from realize.testing import scenario
from realize.testing.scenario import DAMPING_RATIOS, INERTIAS, STIFFNESSES, bench_axis, bench_axis_truth


def test_the_same_seed_gives_the_same_data_and_another_seed_does_not() -> None:
    first, again, other = bench_axis(3), bench_axis(3), bench_axis(4)
    assert np.array_equal(first.response, again.response)
    assert np.array_equal(first.deviation, other.deviation)
    assert not np.any(first.response == other.response)


def test_the_global_generator_is_left_alone() -> None:
    before = np.random.get_state()[1].copy()  # noqa: NPY002 - the state that must not move
    bench_axis(5)
    assert np.array_equal(before, np.random.get_state()[1])  # noqa: NPY002


def test_the_truth_is_stable_with_the_stated_order_and_damping() -> None:
    truth = bench_axis_truth()
    assert truth.order == 10
    assert truth.shape == (2, 1)
    assert np.all(truth.poles.real < 0)
    upper = truth.poles[truth.poles.imag > 0]
    assert np.allclose(-upper.real / np.abs(upper), DAMPING_RATIOS, rtol=1e-12)
    hertz = np.abs(upper) / (2 * np.pi)
    assert np.all(np.diff(hertz) > 0) and hertz[0] > 1 and hertz[-1] < 1000
    assert np.all(np.abs(truth.residues) > 0)


def test_the_truth_is_the_chain_of_inertias() -> None:
    """Modal superposition against a solve with the matrices, damping rebuilt as 2 M F diag(z w) F^T M."""
    n = len(INERTIAS)
    M = np.diag(INERTIAS)
    links = np.eye(n) - np.eye(n, k=-1)  # twist of each spring: row k is q_k - q_(k-1)
    K = links.T @ np.diag(STIFFNESSES) @ links
    squares, shapes = np.linalg.eig(np.linalg.solve(M, K))
    order = np.argsort(squares)
    squares, shapes = squares[order], shapes[:, order]
    shapes = shapes / np.sqrt(np.einsum("ik,ij,jk->k", shapes, M, shapes))
    D = M @ shapes @ np.diag(2 * np.array(DAMPING_RATIOS) * np.sqrt(squares)) @ shapes.T @ M
    drive = np.zeros(n)
    drive[:2] = -1, 1
    for hertz in (0.5, 3.0, 22.0, 133.0, 900.0):
        s = 2j * np.pi * hertz
        q = np.linalg.solve(s**2 * M + s * D + K, drive)
        expected = np.array([s * (q[1] - q[0]), scenario.SENSOR_RADIUS * s**2 * q[4]])
        assert np.allclose(bench_axis_truth().evaluate(s)[:, 0], expected, rtol=1e-8)


def test_the_noise_is_as_large_as_the_deviation_says() -> None:
    truth = bench_axis_truth()
    scaled = []
    for seed in range(8):
        data = bench_axis(seed)
        scaled.append((data.response - truth.evaluate(1j * data.radians)) / data.deviation)
    # 6400 samples with mean square 1 and variance 1: five standard deviations of the mean are 0.0625
    assert np.mean(np.abs(scaled) ** 2) == pytest.approx(1.0, abs=0.0625)
    assert np.mean(np.real(scaled) ** 2) == pytest.approx(0.5, abs=0.05)
    assert abs(np.mean(scaled)) < 0.0625


def test_the_noise_level_is_believable_and_varies() -> None:
    data = bench_axis(1)
    relative = data.deviation / np.abs(bench_axis_truth().evaluate(1j * data.radians))
    for channel in (0, 1):
        assert 0.005 <= np.median(relative[:, channel]) <= 0.03
        quiet = relative[(data.frequency > 2) & (data.frequency < 10), channel]
        assert relative[-1, channel, 0] > 4 * np.median(quiet), "worse at high frequency"
    dip = np.argmin(np.abs(data.response[:, 0, 0]))
    assert relative[dip, 0, 0] > 4 * np.median(relative[:, 0]), "worse at the antiresonance"


def test_names_units_lines_and_coherence() -> None:
    data = bench_axis(1)
    assert data.response.shape == (400, 2, 1)
    assert data.frequency_unit == "Hz" and data.frequency[0] == 1.0 and data.frequency[-1] == 1000.0
    for signal in data.inputs + data.outputs:
        assert signal.name and signal.unit
    assert data.inputs == bench_axis_truth().inputs and data.outputs == bench_axis_truth().outputs
    assert np.all((data.coherence > 0) & (data.coherence < 1))
    assert bench_axis(1, coherence=False).coherence is None
    assert bench_axis(1, lines=57).response.shape[0] == 57


def test_the_scenario_needs_nothing_but_arrays_and_models() -> None:
    tree = ast.parse(Path(scenario.__file__).read_text(encoding="utf-8"))
    modules = {node.module for node in ast.walk(tree) if isinstance(node, ast.ImportFrom)}
    modules |= {alias.name for node in ast.walk(tree) if isinstance(node, ast.Import) for alias in node.names}
    assert modules <= {"__future__", "numpy", "numpy.typing", "realize.models"}
