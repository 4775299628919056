"""Every kind of model and every field of a model file.

The file reader, the checks of the models, the documentation and the tests all iterate these tables; a field that is
not here does not exist.
"""

from __future__ import annotations

from dataclasses import dataclass

FORMAT_VERSION = 1

#: What a field can hold: the name used in `Field.holds`, and its shape in words.
HOLDS = {
    "polynomials": "one polynomial, or outputs x inputs x polynomial; real, highest power first",
    "roots": "one list, or outputs x inputs x list; complex numbers [re, im], closed under conjugation",
    "gains": "one number, or outputs x inputs; real",
    "pole-list": "[n]; complex numbers [re, im], closed under conjugation",
    "residue-list": "[n][outputs][inputs]; complex numbers [re, im]",
    "power-list": "[n]; positive integers",
    "direct": "[outputs][inputs], or a polynomial part [power][outputs][inputs], highest power first; real",
    "section-list": '[k] of {"numerator": [b2, b1, b0], "denominator": [a2, a1, a0]}; real',
    "number": "one real number",
    "side": '"left" or "right"',
    "polynomial-matrix": "[power][rows][columns]; real, highest power first",
    "matrix": "[rows][columns]; real",
    "signal-list": '[n] of {"name": text, "unit": text}',
    "frequency-list": "[k]; real, not negative, strictly increasing",
    "frequency-unit": '"Hz" or "rad/s"',
    "response": "[k][outputs][inputs]; complex numbers [re, im]",
    "samples": "[k][outputs][inputs]; real",
    "record": "[k][signals]; real",
    "real-response": "[k][outputs][inputs]; real, not negative",
}


@dataclass(frozen=True, slots=True)
class Field:
    """One field of a kind: its name, what it holds (a key of `HOLDS`), whether it must be there, and what it means."""

    name: str
    holds: str
    required: bool
    says: str

    def __post_init__(self) -> None:
        assert self.holds in HOLDS, self.holds


@dataclass(frozen=True, slots=True)
class Kind:
    """One kind of model: its name, its fields, whether it has parameters that determine a response at any frequency."""

    name: str
    says: str
    fields: tuple[Field, ...]
    parametric: bool = True
    #: False where only plants of a certain structure can be written in this kind.
    universal: bool = True


KINDS: dict[str, Kind] = {
    kind.name: kind
    for kind in (
        Kind(
            "transfer-function",
            "Ratio of polynomials, channel by channel.",
            (
                Field("numerator", "polynomials", True, "numerator coefficients"),
                Field(
                    "denominator", "polynomials", True, "denominator coefficients; one polynomial serves all channels"
                ),
            ),
        ),
        Kind(
            "zero-pole-gain",
            "Gain times product of (s - zero) over product of (s - pole), channel by channel.",
            (
                Field("zeros", "roots", True, "zeros"),
                Field("poles", "roots", True, "poles; one list serves all channels"),
                Field("gain", "gains", True, "ratio of the leading coefficients"),
            ),
        ),
        Kind(
            "pole-residue",
            "Partial fractions: sum of residue / (s - pole)^power, plus a polynomial part.",
            (
                Field("poles", "pole-list", True, "poles, both members of each conjugate pair"),
                Field("residues", "residue-list", True, "one matrix of residues for each entry of poles"),
                Field(
                    "powers", "power-list", False, "power of (s - pole) below each residue; 1 unless the pole repeats"
                ),
                Field("direct", "direct", False, "feed-through, or polynomial part"),
            ),
        ),
        Kind(
            "sections",
            "Gain times product of second-order sections; one input, one output.",
            (
                Field("sections", "section-list", True, "the sections in the order of the signal"),
                Field("gain", "number", False, "factor in front of the product; 1 unless given"),
            ),
        ),
        Kind(
            "matrix-fraction",
            "numerator times inverse of denominator (right), or inverse of denominator times numerator (left).",
            (
                Field("side", "side", True, "side of the denominator"),
                Field("numerator", "polynomial-matrix", True, "outputs x inputs for each power"),
                Field("denominator", "polynomial-matrix", True, "square: inputs (right) or outputs (left)"),
            ),
        ),
        Kind(
            "state-space",
            "E dx/dt = A x + B u, y = C x + D u (sampled: E x[k+1] = A x[k] + B u[k]).",
            (
                Field("A", "matrix", True, "states x states"),
                Field("B", "matrix", True, "states x inputs"),
                Field("C", "matrix", True, "outputs x states"),
                Field("D", "matrix", False, "outputs x inputs; zero unless given"),
                Field("E", "matrix", False, "states x states; identity unless given"),
                Field("states", "signal-list", False, "names and units of the states"),
            ),
        ),
        Kind(
            "second-order",
            "M q'' + D q' + K q = F u, y = P q + V q' + W q'' + G u: mass, damping and stiffness; continuous time.",
            (
                Field("mass", "matrix", True, "M, coordinates x coordinates; may be singular"),
                Field("damping", "matrix", False, "D, coordinates x coordinates; zero unless given"),
                Field("stiffness", "matrix", True, "K, coordinates x coordinates"),
                Field("input", "matrix", True, "F, coordinates x inputs"),
                Field("position_output", "matrix", False, "P, outputs x coordinates; zero unless given"),
                Field("velocity_output", "matrix", False, "V, outputs x coordinates; zero unless given"),
                Field("acceleration_output", "matrix", False, "W, outputs x coordinates; zero unless given"),
                Field("direct", "matrix", False, "G, outputs x inputs; zero unless given"),
            ),
            universal=False,
        ),
        Kind(
            "frequency-response",
            "Response at listed frequencies: measured or computed data.",
            (
                Field("frequency", "frequency-list", True, "frequencies, increasing"),
                Field("frequency_unit", "frequency-unit", True, "unit of the frequencies"),
                Field("response", "response", True, "complex response"),
                Field("deviation", "real-response", False, "one standard deviation of the response (of its distance)"),
                Field("coherence", "real-response", False, "coherence, 0 to 1"),
            ),
            parametric=False,
        ),
        Kind(
            "impulse-response",
            "Impulse response at 0, period, 2 period, ...; Markov parameters where time is sampled.",
            (
                Field("period", "number", True, "step of time, s; the sampling period where time is sampled"),
                Field("samples", "samples", True, "values, real"),
            ),
            parametric=False,
        ),
        Kind(
            "time-record",
            "Inputs and outputs recorded at equal steps of time; the time base is that of the plant.",
            (
                Field("period", "number", True, "sampling period of the record, s"),
                Field("input", "record", True, "samples of the inputs"),
                Field("output", "record", True, "samples of the outputs"),
            ),
            parametric=False,
        ),
    )
}

#: What the response of a network with ports is: name, and what it relates, output by input.
PORT_PARAMETERS: dict[str, str] = {
    "scattering": "waves out of the ports by waves into them",
    "impedance": "voltages by currents into the ports, ohm",
    "admittance": "currents into the ports by voltages, siemens",
    "hybrid": "two ports: voltage of the first and current of the second by current of the first and voltage of the "
    "second",
    "inverse-hybrid": "two ports: the inverse of hybrid",
}

PARAMETRIC_KINDS = tuple(name for name, kind in KINDS.items() if kind.parametric)
#: Kinds that hold data.
DATA_KINDS = tuple(name for name, kind in KINDS.items() if not kind.parametric)
#: Kinds of data that a model can be converted to.
TABULATED_KINDS = ("frequency-response", "impulse-response")
#: Kinds that can hold every rational plant.
UNIVERSAL_KINDS = tuple(name for name, kind in KINDS.items() if kind.parametric and kind.universal)

#: Fields that every kind has, beside its own.
COMMON_FIELDS: dict[str, str] = {
    "realize": "version of the file format; this is version 1",
    "kind": "one of: " + ", ".join(KINDS),
    "time": '{"domain": "continuous"}, or {"domain": "sampled", "period": seconds} or '
    '{"domain": "sampled", "rate": Hz}; continuous unless given',
    "inputs": '[m] of {"name": text, "unit": text}',
    "outputs": '[p] of {"name": text, "unit": text}',
    "dead_time": '{"inputs": [m], "outputs": [p], "channels": [p][m]} in seconds, all optional',
    "offset": '{"inputs": [m], "outputs": [p], "states": [n]}: the operating point, carried along, all optional',
    "ports": '{"parameter": one of '
    + ", ".join(PORT_PARAMETERS)
    + ', "reference": [p] in ohm}, for inputs and outputs that are the ports of a network; carried along; '
    "scattering needs the reference",
    "receipts": "receipts of the steps that led to this model, oldest first",
}
