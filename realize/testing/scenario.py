"""An invented bench: a rotary positioning table, swept by its motor, with the truth known.

A belt stage turns a table that carries a payload on a flexible coupling; its light frame stands on rubber feet.
Five inertias in a chain (kg m^2) and the springs between them (N m/rad)::

    floor --feet-- base --position hold-- rotor --coupling-- pulley --belt-- table --coupling-- payload

The motor torque acts between base and rotor. While the sweep runs, a soft position hold keeps the table in place, which
gives the well damped mode at the low end. Two sensors: the encoder (speed of the rotor against the base) and an
accelerometer on the payload, 120 mm off the axis. Nothing here was measured anywhere, and nothing here knows how a
model is fitted.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from realize.models import FrequencyResponse, PoleResidue, Signal

#: base, rotor, pulley, table, payload; kg m^2
INERTIAS = (0.03, 4.2e-4, 1.6e-4, 2.9e-3, 1.3e-3)
#: feet, position hold, motor coupling, belt, payload coupling; N m/rad
STIFFNESSES = (640.0, 1.9, 1.05e3, 410.0, 78.0)
#: damping ratio of each mode, from the lowest frequency up
DAMPING_RATIOS = (0.38, 0.03, 0.021, 0.012, 0.007)
#: distance of the accelerometer from the axis, m
SENSOR_RADIUS = 0.12
#: averages behind each line of the estimate
AVERAGES = 24

TORQUE = Signal("motor torque", "N*m")
SPEED = Signal("motor speed", "rad/s")
ACCELERATION = Signal("payload acceleration", "m/s^2")


def bench_axis_truth() -> PoleResidue:
    """Return the model behind `bench_axis`: order 10, torque (N m) to speed (rad/s) and acceleration (m/s^2).

    With mass-normalised mode shapes f_k of M q'' + K q = b u, undamped frequencies w_k and damping ratios z_k, the
    outputs are c_1 q' and c_2 q'':

    G_1(s) = sum c_1 f_k f_k^T b s / (s^2 + 2 z_k w_k s + w_k^2),  G_2(s) = sum c_2 f_k f_k^T b s^2 / (the same).

    Returns
    -------
    PoleResidue
        2 outputs, 1 input, continuous; no feed-through, because no inertia couples the rotor to the payload.
    """
    inertia = np.array(INERTIAS)
    size = inertia.size
    stiffness = np.zeros((size, size))
    stiffness[0, 0] = STIFFNESSES[0]
    for k, spring in enumerate(STIFFNESSES[1:]):
        pair = np.ix_((k, k + 1), (k, k + 1))
        stiffness[pair] += spring * np.array([[1.0, -1.0], [-1.0, 1.0]])
    root = np.sqrt(inertia)
    squares, vectors = np.linalg.eigh(stiffness / np.outer(root, root))
    shapes = vectors / root[:, None]

    drive = np.array([-1.0, 1.0, 0.0, 0.0, 0.0])
    encoder = drive
    accelerometer = np.array([0.0, 0.0, 0.0, 0.0, SENSOR_RADIUS])
    natural = np.sqrt(squares)
    ratio = np.array(DAMPING_RATIOS)
    upper = natural * (-ratio + 1j * np.sqrt(1 - ratio**2))

    poles: list[complex] = []
    residues: list[NDArray[np.complex128]] = []
    for k, pole in enumerate(upper):
        excited = shapes[:, k] @ drive
        share = excited / (pole - pole.conjugate())
        residue = np.array(
            [[(encoder @ shapes[:, k]) * share * pole], [(accelerometer @ shapes[:, k]) * share * pole**2]]
        )
        poles += [pole, pole.conjugate()]
        residues += [residue, residue.conj()]
    return PoleResidue(
        poles=np.array(poles),
        residues=np.array(residues),
        direct=np.zeros((2, 1)),
        inputs=(TORQUE,),
        outputs=(SPEED, ACCELERATION),
    )


def sensor_deviation(frequency: NDArray[np.float64], response: NDArray[np.complex128]) -> NDArray[np.float64]:
    """Return one standard deviation of the distance between an averaged estimate and the response.

    Three parts, added in squares: a share of the response itself (leakage and drift of the drive's gain), a floor of
    the sensor, and a part that grows with frequency (the encoder's steps are differentiated; the accelerometer nears
    the resonance of its mount). The floor is what is left at an antiresonance.

    Parameters
    ----------
    frequency : (k,) array
        Hz.
    response : (k, 2, 1) complex array

    Returns
    -------
    (k, 2, 1) array
        In the units of the response.
    """
    share = np.array([0.006, 0.008])
    floor = np.array([0.006, 0.005])
    corner = np.array([250.0, 400.0])  # Hz
    growth = floor * (1 + (frequency[:, None] / corner) ** 2) ** 0.5
    # below 4 Hz the accelerometer's own drift takes over
    growth[:, 1] *= np.hypot(1.0, 4.0 / frequency)
    return np.hypot(share * np.abs(response[:, :, 0]), growth)[:, :, None]


def bench_axis(seed: int, *, lines: int = 400, coherence: bool = True) -> FrequencyResponse:
    """Return the invented sweep of the bench: the truth plus circular complex Gaussian noise of known deviation.

    response = truth + deviation * (x + jy) / sqrt(2), x and y standard normal; the coherence belongs to the same
    deviation with n averages: deviation^2 / |truth|^2 = (1 - coherence) / (n coherence) [1]_.

    Parameters
    ----------
    seed : int
        Seed of the generator; the same seed gives the same data.
    lines : int, optional
        Number of frequencies, spread evenly on a logarithmic scale from 1 Hz to 1 kHz and rounded to 5 digits.
    coherence : bool, optional
        Whether the coherence is included.

    Returns
    -------
    FrequencyResponse
        2 outputs, 1 input, frequencies in Hz, deviation included.

    References
    ----------
    .. [1] J. S. Bendat, A. G. Piersol, Random Data: Analysis and Measurement Procedures, 4th ed., 2010, section 9.2
       (from memory).
    """
    random = np.random.default_rng(seed)
    frequency = np.array([float(f"{value:.5g}") for value in np.geomspace(1.0, 1000.0, lines)])
    truth = bench_axis_truth().evaluate(2j * np.pi * frequency)
    deviation = sensor_deviation(frequency, truth)
    noise = random.standard_normal(truth.shape) + 1j * random.standard_normal(truth.shape)
    share = (deviation / np.abs(truth)) ** 2
    return FrequencyResponse(
        frequency=frequency,
        frequency_unit="Hz",
        response=truth + deviation * noise / np.sqrt(2),
        deviation=deviation,
        coherence=1 / (1 + AVERAGES * share) if coherence else None,
        inputs=(TORQUE,),
        outputs=(SPEED, ACCELERATION),
    )
