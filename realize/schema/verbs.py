"""Every verb, its inputs, its options and their spellings.

The command line is built from this table, the Python functions take the same names, and tests compare both with it.
"""

from __future__ import annotations

from dataclasses import dataclass

from realize.schema.kinds import PARAMETRIC_KINDS, PORT_PARAMETERS, TABULATED_KINDS, UNIVERSAL_KINDS

FORMS = (
    "cascade",
    "modal",
    "controllable-companion",
    "observable-companion",
    "scaled",
    "schur",
    "balanced",
    "input-normal",
    "output-normal",
    "linear-quadratic-balanced",
    "controller-hessenberg",
    "observer-hessenberg",
    "reachable-staircase",
    "observable-staircase",
    "kalman",
    "jordan",
    "multi-input-companion",
    "controllability",
    "observability",
)
ORDERINGS = ("speed", "damping", "stability")
REDUCTION_METHODS = ("balanced-truncation", "singular-perturbation", "modal", "frequency-weighted", "auto")
FIT_METHODS = ("vector-fitting", "barycentric", "loewner", "subspace", "ho-kalman", "auto")
#: Dead times that a fit can estimate: one for all channels, or one for each input, output or channel.
ESTIMATED_DEAD_TIMES = ("auto", "auto-per-input", "auto-per-output", "auto-per-channel")
AVERAGINGS = ("welch", "periodic", "stepped-sine", "auto")
ESTIMATORS = ("h1", "h2", "hv")
WINDOWS = ("rectangular", "hann", "hamming", "blackman", "flat-top")
#: What passive means: for impedance, admittance and hybrid parameters, and for scattering parameters.
PASSIVE_KINDS = ("positive-real", "bounded-real")
SIDES = ("left", "right")
ARITHMETICS = ("exact", "auto", "double")


@dataclass(frozen=True, slots=True)
class Option:
    """One option of a verb.

    ``takes`` is what the value is: ``flag``, ``choice``, ``text``, ``number``, ``integer``, ``error`` (0.01 or 1%),
    ``band`` (LOW,HIGH with unit suffixes), ``order`` (N, A..B or auto), ``time`` (seconds), ``columns`` (LIST),
    ``frequencies`` (LIST with unit suffixes), ``weights`` (numbers above zero), ``roots`` (complex numbers),
    ``matrix`` (rows with semicolons between them), ``delay`` (seconds, or one of `ESTIMATED_DEAD_TIMES`),
    ``rate`` (samples a second, with a suffix), ``share`` (0.5 or 50%, zero as well), ``path``,
    ``limit`` (NAME=VALUE, repeatable), or ``switch`` (NAME / no-NAME).
    """

    name: str
    takes: str
    says: str
    choices: tuple[str, ...] = ()
    default: str | float | bool | None = None
    metavar: str = ""

    @property
    def keyword(self) -> str:
        """The name as a Python keyword."""
        return self.name.replace("-", "_")


@dataclass(frozen=True, slots=True)
class Verb:
    """One verb: what it does, what its arguments are called (a trailing ``...`` takes several), and its options."""

    name: str
    says: str
    arguments: tuple[str, ...]
    options: tuple[Option, ...]
    #: True where the verb writes a model to ``-o OUTPUT``.
    makes_model: bool = True
    #: True where the verb produces a receipt, so that limits and second opinions apply.
    makes_receipt: bool = True


TO_KIND = Option("to", "choice", "kind of the result", choices=PARAMETRIC_KINDS + TABULATED_KINDS, metavar="KIND")
BAND = Option("band", "band", "use only these frequencies (120Hz, 2.4kHz, plain numbers are rad/s)", metavar="LOW,HIGH")
CERTIFY = Option("certify", "flag", "prove the claims whatever it costs; progress is shown, Ctrl-C ends it")
COLUMNS = Option(
    "columns",
    "columns",
    "names of the columns of a table without a header, such as frequency_hz,real,imaginary",
    metavar="LIST",
)
RATE = Option("rate", "rate", "sampling rate of a table of data over time without a column of times", metavar="X")
#: How a time record becomes a frequency response.
ESTIMATION: tuple[Option, ...] = (
    Option(
        "averaging",
        "choice",
        "time data: over windowed segments (welch), whole periods of the inputs, or dwells of a stepped sine; auto: "
        "periods where the inputs repeat, else welch",
        AVERAGINGS,
    ),
    Option(
        "estimator", "choice", "time data: noise on the outputs (h1), the inputs (h2) or both alike (hv)", ESTIMATORS
    ),
    Option("window", "choice", "time data: window of the segments", WINDOWS),
    Option("segment", "integer", "time data: samples of a segment, or of a dwell", metavar="N"),
    Option("overlap", "share", "time data: share of a segment that the next one repeats (0.5 or 50%)", metavar="X"),
    Option("excitation-period", "integer", "time data: samples of one period of the inputs", metavar="N"),
    Option("settling", "time", "time data: seconds at the start that are left out", metavar="X"),
    Option("sampled", "flag", "time data: the inputs are held between the samples; the plant is sampled"),
)
ARITHMETIC = Option(
    "arithmetic",
    "choice",
    "exact whatever it costs, double, or auto: exact where few enough operations are predicted",
    ARITHMETICS,
    "auto",
)

VERBS: dict[str, Verb] = {
    verb.name: verb
    for verb in (
        Verb(
            "fit",
            "Turn measured data into a model: a frequency or impulse response, a time record, or several runs of one.",
            ("DATA...",),
            (
                Option("to", "choice", "kind of the result", UNIVERSAL_KINDS, "state-space", "KIND"),
                Option(
                    "order", "order", "number of poles: N, a range A..B, or auto", default="auto", metavar="N|A..B|auto"
                ),
                Option("method", "choice", "method", FIT_METHODS, "auto"),
                Option(
                    "dead-time",
                    "delay",
                    "known dead time of every channel, seconds; or estimated with the fit: "
                    + ", ".join(ESTIMATED_DEAD_TIMES),
                    metavar="X|auto",
                ),
                Option(
                    "relative-degree",
                    "integer",
                    "every channel falls off at least like s^-N; 1: no feed-through",
                    metavar="N",
                ),
                Option("integrators", "integer", "so many poles exactly at 0 (sampled: at z = 1)", metavar="N"),
                Option(
                    "fixed-poles",
                    "roots",
                    "poles that the model has exactly, rad/s (sampled: z): -1,-2+3j,-2-3j",
                    metavar="LIST",
                ),
                Option(
                    "fixed-zeros",
                    "roots",
                    "zeros that every channel has exactly, rad/s (sampled: z)",
                    metavar="LIST",
                ),
                Option(
                    "steady-state-gain",
                    "matrix",
                    "gain at frequency 0: a number, or rows of outputs such as '1,2;3,4'",
                    metavar="X",
                ),
                Option("symmetric", "flag", "reciprocal: the response is a symmetric matrix, exactly"),
                Option(
                    "passive",
                    "choice",
                    "make the model passive: positive-real (impedance, admittance), bounded-real (scattering), or "
                    "auto: as the ports of the data say",
                    (*PASSIVE_KINDS, "auto"),
                ),
                Option("allow-unstable", "flag", "poles may be unstable where the data ask for it"),
                BAND,
                COLUMNS,
                RATE,
                Option(
                    "parameter",
                    "choice",
                    "data of ports: fit another parameter of the same network",
                    tuple(PORT_PARAMETERS),
                ),
                *ESTIMATION,
            ),
        ),
        Verb(
            "convert",
            "Write the same model as another kind, or in other coordinates; or a time record as a frequency response.",
            ("MODEL",),
            (
                TO_KIND,
                Option("form", "choice", "coordinates of a state-space result", FORMS),
                Option(
                    "ordering",
                    "choice",
                    "order of the blocks of --form schur: slowest, least damped or unstable first; speed unless given",
                    ORDERINGS,
                ),
                Option("force", "flag", "give a form even where it ruins the model; the claim then fails (status 4)"),
                Option("common-denominator", "flag", "one denominator for all channels of a transfer function"),
                Option(
                    "digits", "integer", "decimals with N correct digits in place of doubles, up to 2000", metavar="N"
                ),
                Option(
                    "frequencies",
                    "frequencies",
                    "grid of a frequency response (120Hz, 2.4kHz, plain numbers are rad/s)",
                    metavar="LIST",
                ),
                Option("band", "band", "range of the grid of a frequency response", metavar="LOW,HIGH"),
                Option("count", "integer", "points of the grid, or samples of an impulse response", metavar="N"),
                Option("period", "time", "step of an impulse response, seconds", metavar="X"),
                Option("side", "choice", "side of the denominator of a matrix fraction; right unless said", SIDES),
                ARITHMETIC,
                CERTIFY,
                Option("explain", "flag", "print the route and why, and stop"),
                COLUMNS,
                RATE,
                *ESTIMATION,
            ),
        ),
        Verb(
            "minimal",
            "Remove what no input reaches and no output sees.",
            ("MODEL",),
            (
                Option("exact", "flag", "decide on the numbers as given; otherwise within their rounding"),
                CERTIFY,
            ),
        ),
        Verb(
            "reduce",
            "Find a smaller model, with the error known.",
            ("MODEL",),
            (
                Option("order", "integer", "number of states of the result", metavar="N"),
                Option("error", "error", "largest error, relative to the largest gain (0.01 or 1%)", metavar="X"),
                Option("absolute-error", "number", "largest error, in the units of the response", metavar="X"),
                Option("measured", "flag", "choose the order by the error found, not by the guaranteed bound"),
                Option("method", "choice", "method", REDUCTION_METHODS, "auto"),
                Option(
                    "band",
                    "band",
                    "the error counts at these frequencies only, and is measured there (120Hz, 2.4kHz, plain: rad/s)",
                    metavar="LOW,HIGH",
                ),
                Option("keep-steady-state", "flag", "the gain at zero frequency stays as it is"),
                Option(
                    "keep-states",
                    "columns",
                    "names or numbers (from 0) of states that stay states",
                    metavar="LIST",
                ),
                Option("controller", "path", "controller around the plant, u = -K y", metavar="FILE"),
                Option("plant", "path", "plant around the model, which is the controller K", metavar="FILE"),
                Option("input-weight", "weights", "one factor for each input, or one for all", metavar="LIST"),
                Option("output-weight", "weights", "one factor for each output, or one for all", metavar="LIST"),
                CERTIFY,
            ),
        ),
        Verb(
            "inspect",
            "Say what the plant is and what is wrong with it.",
            ("MODEL",),
            (Option("history", "flag", "show the steps that led to this model instead"), COLUMNS, RATE),
            False,
            False,
        ),
        Verb(
            "compare",
            "Measure the discrepancy between models, or between models and data.",
            ("A", "B..."),
            (CERTIFY, BAND, COLUMNS),
            False,
            False,
        ),
        Verb(
            "report",
            "Draw magnitude and phase, error, poles and Hankel singular values as PNG or SVG.",
            ("MODEL...",),
            (BAND, COLUMNS),
            False,
            False,
        ),
        Verb(
            "run",
            "Do the steps of a job file with many files.",
            ("JOBS",),
            (
                Option("processes", "integer", "worker processes; one a core unless given", metavar="N"),
                Option("cluster", "text", "do the work on the cluster of this scheduler address", metavar="ADDRESS"),
                Option("retry", "flag", "try again what was set aside before"),
                Option("allow-outside", "flag", "allow inputs and an output folder outside the job file's folder"),
            ),
            False,
            False,
        ),
        Verb(
            "demo",
            "Do the whole job on an invented example, in a fresh folder.",
            (),
            (Option("seed", "integer", "seed of the invented measurement noise", default=1, metavar="N"),),
            False,
            False,
        ),
    )
}

#: Options that every verb takes.
COMMON_OPTIONS: tuple[Option, ...] = (
    Option("json", "flag", "print the record on standard output"),
    Option("log", "path", "append the record to this file as one JSON line", metavar="FILE"),
)

#: Options of every verb that makes a receipt.
RECEIPT_OPTIONS: tuple[Option, ...] = (
    Option("strict", "flag", "write no output, and end with status 4, unless every limited claim holds"),
    Option("limit", "limit", "limit of a claim; may be given several times", metavar="NAME=VALUE"),
    Option(
        "second-opinion",
        "switch",
        "ask an independent library for the same step; unless said otherwise, where a limited claim is not proved",
    ),
    Option("lines", "flag", "read one model in JSON a line, and write one a line; a bad line gives an error record"),
)

EXIT_STATUSES = {
    0: "done and verified",
    1: "internal fault (a bug)",
    2: "wrong usage",
    3: "the input is not acceptable",
    4: "done, but a claim failed its limit (output written unless --strict)",
    5: "refused: the answer would be meaningless or cannot fit in memory",
    130: "interrupted; nothing half-written",
}


def options_of(verb: Verb) -> tuple[Option, ...]:
    """Return all options of a verb, common ones included (``-o OUTPUT`` aside)."""
    return verb.options + (RECEIPT_OPTIONS if verb.makes_receipt else ()) + COMMON_OPTIONS
