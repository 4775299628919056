"""Defining properties of a fit, on invented systems with known poles."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from realize.errors import InputError, Refused, UsageError
from realize.fitting import METHODS, Fit, choose_method, fit_response


def value(fit: Fit, s: np.ndarray) -> np.ndarray:
    return np.einsum("kn,npm->kpm", 1 / (s[:, None] - fit.poles), fit.residues) + fit.direct


def assert_consistent(fit: Fit) -> None:
    """Pairs exactly conjugate and adjacent, residues alike, real poles real, stable, counts right."""
    assert fit.order == fit.poles.size == fit.residues.shape[0]
    k = 0
    while k < fit.order:
        if fit.poles[k].imag == 0:
            assert not np.any(fit.residues[k].imag)
            k += 1
        else:
            assert fit.poles[k].imag > 0
            assert fit.poles[k + 1] == fit.poles[k].conjugate()
            assert np.array_equal(fit.residues[k + 1], fit.residues[k].conj())
            k += 2
    assert sum(2 if row.pair else 1 for row in fit.pole_table) == fit.order
    assert np.all(np.isfinite(fit.misfit))


@pytest.mark.parametrize("order", [1, 2, 5, 12])
@pytest.mark.parametrize("shape", [(1, 1), (3, 1), (2, 2)])
def test_exact_data_give_order_poles_and_residues(invented: Callable, order: int, shape: tuple[int, int]) -> None:
    system = invented(order, shape, seed=order)
    w = np.concatenate([[0.0], np.geomspace(0.03, 30, 250)])
    fit = fit_response(w, system.at(1j * w))
    assert_consistent(fit)
    assert fit.order == order
    assert fit.rms < 1e-12
    for pole, residue in zip(system.poles, system.residues, strict=True):
        j = int(np.argmin(np.abs(fit.poles - pole)))
        assert abs(fit.poles[j] - pole) < 1e-8 * abs(pole)
        assert np.max(np.abs(fit.residues[j] - residue)) < 1e-6 * np.max(np.abs(system.residues))
    # between the lines as well
    between = 1j * np.sqrt(w[2:] * w[1:-1])
    assert np.max(np.abs(value(fit, between) - system.at(between))) < 1e-9 * np.max(np.abs(system.at(between)))


def test_six_decades_and_twenty_poles(invented: Callable) -> None:
    system = invented(20, (2, 1), seed=4, band=(1e-3, 1e3))
    w = np.geomspace(5e-4, 2e3, 600)
    fit = fit_response(w, system.at(1j * w), order=20)
    assert fit.rms < 1e-11


@pytest.mark.parametrize("exponent", [-990, -40, 37, 990])
def test_units_of_the_response_by_powers_of_two_change_nothing(invented: Callable, exponent: int) -> None:
    system = invented(4, seed=8)
    w = np.geomspace(0.03, 30, 150)
    H = system.at(1j * w) * (1 + 1e-3 * np.cos(40 * w))[:, None, None]
    one, two = fit_response(w, H, order=4), fit_response(w, H * 2.0**exponent, order=4)
    assert np.array_equal(one.poles, two.poles)
    assert np.array_equal(one.residues * 2.0**exponent, two.residues)
    assert one.rms == two.rms


@pytest.mark.parametrize("exponent", [-600, -30, 32, 600])
def test_units_of_frequency_by_powers_of_two_change_nothing(invented: Callable, exponent: int) -> None:
    system = invented(4, seed=8)
    w = np.geomspace(0.03, 30, 150)
    H = system.at(1j * w) * (1 + 1e-3 * np.cos(40 * w))[:, None, None]
    one, two = fit_response(w, H, order=4), fit_response(w * 2.0**exponent, H, order=4)
    assert np.array_equal(one.poles * 2.0**exponent, two.poles)
    assert np.array_equal(one.direct, two.direct)


@pytest.mark.parametrize("size", [1e-300, 1e-12, 1e12, 1e300])
def test_responses_of_any_size(invented: Callable, size: float) -> None:
    system = invented(4, seed=8)
    w = np.geomspace(0.03, 30, 100)
    fit = fit_response(w, system.at(1j * w) * size)
    assert fit.order == 4
    assert fit.rms < 1e-12


def test_a_narrow_band_at_gigahertz() -> None:
    pole = 2 * np.pi * 4e9 * (-1 / 15000 + 1j)
    w = 2 * np.pi * np.linspace(3.999e9, 4.001e9, 201)
    H = 1e5 * (1 + 2j) / (1j * w - pole) + 1e5 * (1 - 2j) / (1j * w - pole.conjugate()) + 0.01
    fit = fit_response(w, H)
    assert fit.order == 2
    assert abs(fit.poles[0] - pole) < 1e-9 * abs(pole)
    assert fit.pole_table[0].damping == pytest.approx(1 / 15000, rel=1e-6)


def test_a_weak_channel_is_fitted_as_well_as_a_strong_one(invented: Callable) -> None:
    system = invented(4, (2, 1), seed=5)
    w = np.geomspace(0.03, 30, 150)
    H = system.at(1j * w) * np.array([[1e9], [1e-9]])
    fit = fit_response(w, H)
    assert fit.order == 4
    relative = np.max(np.abs(fit.misfit), axis=0) / np.max(np.abs(H), axis=0)
    assert np.max(relative) < 1e-12


def test_a_zero_channel_stays_exactly_zero(invented: Callable) -> None:
    H = invented(4, (2, 2), seed=6).at(1j * np.geomspace(0.03, 30, 120)).copy()
    H[:, 0, 1] = 0
    fit = fit_response(np.geomspace(0.03, 30, 120), H)
    assert fit.order == 4
    assert not np.any(fit.residues[:, 0, 1])
    assert fit.direct[0, 1] == 0


@pytest.mark.parametrize("power", [2, 3, 4])
def test_repeated_poles(power: int) -> None:
    w = np.geomspace(0.01, 100, 200)
    fit = fit_response(w, 1 / (1j * w + 1) ** power)
    assert fit.order == power
    assert fit.rms < 1e-7


def test_real_poles_over_six_decades() -> None:
    poles = -np.geomspace(1e-2, 1e4, 5)
    w = np.geomspace(1e-3, 1e5, 120)
    fit = fit_response(w, np.sum(-poles / (1j * w[:, None] - poles), axis=1))
    assert fit.order == 5
    assert np.allclose(np.sort(fit.poles.real), np.sort(poles), rtol=1e-8)
    assert not np.any(fit.poles.imag)


@pytest.mark.parametrize("power", [1, 2])
def test_integrators_get_a_stable_stand_in(power: int) -> None:
    w = np.geomspace(0.01, 100, 200)
    s = 1j * w
    fit = fit_response(w, 1 / s**power + 1e-2 / (s**2 + 0.4 * s + 100))
    assert_consistent(fit)
    assert fit.order == power + 2
    assert fit.rms < 1e-6
    assert any("integrator" in text for text in fit.cautions)
    assert any(abs(row.frequency - 10) < 1e-3 for row in fit.pole_table)


def test_a_growing_response_is_said_to_grow() -> None:
    w = np.geomspace(0.1, 10, 100)
    fit = fit_response(w, 1j * w)
    assert fit.rms < 1e-5
    assert any("grows" in text for text in fit.cautions)


def test_an_unstable_response_is_said_to_be_one() -> None:
    w = np.geomspace(0.1, 10, 100)
    fit = fit_response(w, 1 / (1j * w - 1))
    assert_consistent(fit)
    assert np.all(fit.poles.real < 0)
    assert any("unstable" in text for text in fit.cautions)


def test_without_direct_term() -> None:
    w = np.geomspace(0.1, 10, 100)
    H = 1 / (1j * w + 1)
    for direct in (False, "auto"):
        fit = fit_response(w, H, direct=direct)
        assert fit.direct[0, 0] == 0
        assert fit.order == 1
    assert fit_response(w, H + 0.5, direct="auto").direct[0, 0] == pytest.approx(0.5)


def test_given_deviations_are_used(invented: Callable, complex_noise: Callable) -> None:
    system = invented(4, seed=8)
    w = np.geomspace(0.03, 30, 300)
    sigma = np.where(w > 1, 1e-4, 0.3)[:, None, None] * np.ones((300, 1, 1))
    H = system.at(1j * w) + sigma * complex_noise((300, 1, 1), 1)
    fit = fit_response(w, H, deviation=sigma)
    assert fit.order == 4
    assert fit.noise.basis == "given"
    assert 0.85 < fit.weighted < 1.1
    assert fit.weighted == pytest.approx(np.sqrt(np.mean(np.abs(fit.misfit / sigma) ** 2)))
    plain = fit_response(w, H, order=4, deviation=np.ones((300, 1, 1)))
    assert np.sum(np.abs(fit.misfit / sigma) ** 2) < np.sum(np.abs(plain.misfit / sigma) ** 2)


def test_a_zero_deviation_is_an_unknown_one(invented: Callable, complex_noise: Callable) -> None:
    system = invented(4, seed=8)
    w = np.geomspace(0.03, 30, 200)
    H = system.at(1j * w) + 0.01 * complex_noise((200, 1, 1), 2)
    sigma = np.full((200, 1, 1), 0.01)
    sigma[0] = 0
    assert fit_response(w, H, deviation=sigma).order == 4
    fit = fit_response(w, H, deviation=np.zeros((200, 1, 1)))
    assert fit.noise.basis == "estimated"
    assert any("deviation" in text for text in fit.cautions)


@pytest.mark.parametrize("coherence", [0.0, 0.5, 1.0])
def test_coherence_gives_the_shape_of_the_noise(invented: Callable, complex_noise: Callable, coherence: float) -> None:
    system = invented(4, seed=8)
    w = np.geomspace(0.03, 30, 200)
    H = system.at(1j * w) * (1 + 0.01 * complex_noise((200, 1, 1), 3))
    fit = fit_response(w, H, coherence=np.full(H.shape, coherence))
    assert fit.noise.basis == "coherence"
    assert fit.noise.level == pytest.approx(0.01, rel=0.25)
    assert fit.order == 4


def test_the_record(invented: Callable, complex_noise: Callable) -> None:
    system = invented(4, (2, 1), seed=9)
    w = np.geomspace(0.03, 30, 200)
    H = system.at(1j * w) + 0.01 * complex_noise((200, 2, 1), 4)
    fit = fit_response(w, H)
    assert_consistent(fit)
    assert np.max(np.abs(value(fit, 1j * w) - H - fit.misfit)) < 1e-12
    assert fit.rms == pytest.approx(np.linalg.norm(fit.misfit) / np.linalg.norm(H))
    relative = np.abs(fit.misfit) / np.max(np.abs(H), axis=0)
    assert fit.worst.value == pytest.approx(np.max(relative))
    assert relative[fit.worst.line, fit.worst.output, fit.worst.input] == np.max(relative)
    assert [c.order for c in fit.candidates if c.kept] == [fit.order]
    assert fit.method in METHODS
    assert not fit.poles.flags.writeable
    for row in fit.pole_table:
        pole = fit.poles[row.index]
        assert row.frequency == pytest.approx(abs(pole))
        assert row.damping == pytest.approx(-pole.real / abs(pole))


def test_inputs_are_not_changed_and_the_result_repeats(invented: Callable, complex_noise: Callable) -> None:
    w = np.geomspace(0.03, 30, 100)
    H = invented(4, seed=2).at(1j * w) + 0.01 * complex_noise((100, 1, 1), 5)
    sigma = np.full(H.shape, 0.01)
    kept = [a.copy() for a in (w, H, sigma)]
    one, two = (fit_response(w, H, deviation=sigma) for _ in range(2))
    assert all(np.array_equal(a, b) for a, b in zip(kept, (w, H, sigma), strict=True))
    assert np.array_equal(one.poles, two.poles)
    assert np.array_equal(one.residues, two.residues)


@pytest.mark.parametrize("shape", [(1, 1), (2, 3)])
def test_zero_and_constant_responses_have_order_zero(shape: tuple[int, int]) -> None:
    w = np.geomspace(0.1, 10, 20)
    zero = fit_response(w, np.zeros((20, *shape)))
    assert zero.order == 0
    assert np.array_equal(zero.direct, np.zeros(shape))
    constant = fit_response(w, np.full((20, *shape), 0.3), order=4)
    assert constant.order == 0
    assert np.array_equal(constant.direct, np.full(shape, 0.3))
    assert constant.rms == 0
    assert any("order 0" in text for text in constant.cautions)


def test_order_zero_asked() -> None:
    w = np.geomspace(0.1, 10, 20)
    fit = fit_response(w, 1 / (1j * w + 1), order=0)
    assert fit.order == 0
    assert fit.residues.shape == (0, 1, 1)
    assert 0 < fit.direct[0, 0] < 1


def test_more_unknowns_than_data_is_refused_with_the_largest_order() -> None:
    w = np.geomspace(0.1, 10, 5)
    with pytest.raises(InputError, match="at most 4"):
        fit_response(w, 1 / (1j * w + 1), order=5)
    assert fit_response(w, 1 / (1j * w + 1), order=4).order == 4
    with pytest.raises(InputError, match="1 line"):
        fit_response([1.0], [1 + 1j])


H3 = [1.0, 0.5j, 0.25]


@pytest.mark.parametrize(
    ("arguments", "options", "text"),
    [
        (([1, 2, 3], [1, 2]), {}, "2 lines"),
        (([1, 3, 2], H3), {}, r"frequency\[2\]"),
        (([-1, 2, 3], H3), {}, r"frequency\[0\]"),
        (([1, 2, np.inf], H3), {}, r"frequency\[2\]"),
        (([1, 2, 3], [1, np.nan, 1]), {}, r"response\[1\]"),
        (([0], [1]), {}, "frequency"),
        (([], []), {}, "frequency"),
        ((["a"], [1]), {}, "frequency"),
        (([1, 2, 3], H3), {"order": -1}, "order"),
        (([1, 2, 3], H3), {"order": (3, 2)}, "order"),
        (([1, 2, 3], H3), {"order": 1.5}, "order"),
        (([1, 2, 3], H3), {"order": True}, "order"),
        (([1, 2, 3], H3), {"order": "many"}, "order"),
        (([1, 2, 3], H3), {"deviation": [1, -1, 1]}, r"deviation\[1\]"),
        (([1, 2, 3], H3), {"deviation": [1, 1]}, "deviation"),
        (([1, 2, 3], H3), {"coherence": [1, 2, 1]}, r"coherence\[1\]"),
        (([1, 2, 3], H3), {"period": 0.0}, "period"),
        (([1, 2, 3], H3), {"period": 2.0}, "half the sampling rate"),
        (([1, 2, 3], H3), {"direct": 3}, "direct"),
    ],
)
def test_bad_input_is_named(arguments: tuple, options: dict, text: str) -> None:
    with pytest.raises(InputError, match=text):
        fit_response(*arguments, **options)


def test_a_residue_beyond_double_precision_is_refused() -> None:
    w = np.geomspace(1e200, 1e203, 50)
    with pytest.raises(Refused, match="units"):
        fit_response(w, 1e200 / (1j * w / 1e201 + 1))


def test_methods() -> None:
    with pytest.raises(UsageError, match="vector-fitting"):
        fit_response([1, 2, 3], H3, method="guess")
    for name, method in METHODS.items():
        assert name == method.name
        assert method.source
        assert method.says
    assert choose_method("auto", None).name == "auto"  # type: ignore[arg-type]


@pytest.mark.parametrize("case", ["step", "spike", "signs", "imaginary", "two lines", "near lines"])
def test_strange_data_give_a_stable_answer(case: str) -> None:
    w = np.geomspace(0.01, 100, 60)
    H = {
        "step": np.where(w < 1, 1.0, 0.0),
        "spike": np.where(np.arange(60) == 20, 1.0, 0.0),
        "signs": np.random.default_rng(0).integers(0, 2, 60) * 2.0 - 1,
        "imaginary": np.full(60, 1j),
        "two lines": np.array([1.0, 1j]),
        "near lines": 1 / (1j * w + 1),
    }[case]
    if case == "two lines":
        w = w[:2]
    if case == "near lines":
        w = 1 + np.arange(60) * 4e-16
        w = np.unique(w)
        H = np.ones(w.size) + 0.1j
    fit = fit_response(w, H)
    assert_consistent(fit)
    assert fit.rms <= 1.001


@pytest.mark.parametrize("noise", [0.0, 0.01])
@pytest.mark.parametrize("order", [2, 4, "auto"])
def test_two_ports_that_grow_with_frequency_keep_their_misfit(
    complex_noise: Callable, order: int | str, noise: float
) -> None:
    """Two coils and a capacitor: far above the lines, residues of rank 2 and the direct term nearly cancel."""
    w = np.geomspace(1e2, 1e6, 200)
    s = 1j * w
    common = 1 / (1e-8 * s + 1e-4)
    first, second = 5 + 1e-3 * s + common, 10 + 2e-3 * s + common
    H = np.stack([np.stack([first, common], axis=-1), np.stack([common, second], axis=-1)], axis=-2)
    H = H * (1 + noise * complex_noise(H.shape, 3))
    fit = fit_response(w, H, order=order)
    assert fit.rms < max(1.1 * noise, 1e-5)
    assert np.max(np.abs(value(fit, s) - H - fit.misfit)) < 1e-7 * np.max(np.abs(H))


def test_modes_keep_rank_one_beside_a_response_that_grows(complex_noise: Callable) -> None:
    """The far pole that stands for the growth has all ranks, the modes have one."""
    w = np.geomspace(10, 1e4, 300)
    s = 1j * w
    rng = np.random.default_rng(0)
    H = 1e-5 * s[:, None, None] * rng.normal(size=(3, 3)) + 0.1 * rng.normal(size=(3, 3))
    for f in (50, 300, 2000):
        shape = np.outer(rng.normal(size=3), rng.normal(size=3))
        H = H + (f * f / (s**2 + 0.02 * f * s + f * f))[:, None, None] * shape
    noise = 0.01 * np.sqrt(np.mean(np.abs(H) ** 2))
    fit = fit_response(w, H + noise * complex_noise(H.shape, 4))
    assert [row.rank for row in fit.pole_table if row.pair] == [1, 1, 1]
    assert np.sqrt(np.mean(np.abs(value(fit, s) - H) ** 2)) < 0.3 * noise
