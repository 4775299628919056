"""Measured network parameters as others of the same network: scattering to impedance and back."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from realize.errors import InputError, UsageError
from realize.kernels.network_parameters import converted, variables_of
from realize.models import FrequencyResponse, Ports
from realize.schema import PORT_PARAMETERS

#: Units of inputs and outputs, of the first port and of the others.
UNITS = {
    "scattering": (("", ""), ("", "")),
    "impedance": (("A", "A"), ("V", "V")),
    "admittance": (("V", "V"), ("A", "A")),
    "hybrid": (("A", "V"), ("V", "A")),
    "inverse-hybrid": (("V", "A"), ("A", "V")),
}
#: Where the smallest singular value is below this share of the largest, a parameter is as good as infinite.
SINGULAR = 1e-12


def as_parameter(data: FrequencyResponse, parameter: str) -> FrequencyResponse:
    """Return the response of the same network in another parameter, deviation included.

    Raises
    ------
    UsageError
        For data without ports, or a parameter that does not exist.
    InputError
        Naming the line at which the network has no such parameters.
    """
    if parameter not in PORT_PARAMETERS:
        raise UsageError(f"no parameter {parameter!r}; there are: {', '.join(PORT_PARAMETERS)}")
    ports = data.ports
    if ports is None:
        raise UsageError('--parameter goes with data of ports: a Touchstone file, or a model file with "ports"')
    if parameter == ports.parameter:
        return data
    if data.dead_time is not None:
        raise UsageError("--parameter does not go with a dead time in the data")
    n = data.shape[0]
    if "hybrid" in parameter and n != 2:
        raise UsageError(f"{parameter} parameters are those of two ports, and there are {n}")
    if parameter == "scattering" and ports.reference is None:
        raise UsageError('scattering parameters need a reference: put it into "ports" of the data')
    reference = np.array(ports.reference if ports.reference is not None else (1.0,) * n)
    values, deviation, share = converted(
        data.response, data.deviation, variables_of(ports.parameter, reference), variables_of(parameter, reference)
    )
    bad = np.flatnonzero(share < SINGULAR)
    if bad.size:
        raise InputError(
            f"a network without {parameter} parameters at {data.frequency[bad[0]]:.6g} {data.frequency_unit}",
            "another parameter, or a band that leaves the line out",
            field=f"response[{bad[0]}]",
        )
    sides = []
    for side, units in zip((data.inputs, data.outputs), UNITS[parameter], strict=True):
        own = side or ()
        sides.append(tuple(replace(signal, unit=units[min(k, 1)]) for k, signal in enumerate(own)))
    return data.with_(
        response=values,
        deviation=deviation,
        coherence=None,
        inputs=sides[0],
        outputs=sides[1],
        ports=Ports(parameter, ports.reference),
    )
