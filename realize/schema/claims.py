"""Every claim name, its definition, its unit and its default limits."""

from __future__ import annotations

from dataclasses import dataclass, field

BASES = {
    "proved": "exact or ball arithmetic over all frequencies of the definition",
    "bounded": "a theorem whose hypotheses were checked in floating point, rounding included",
    "measured": "the largest value found, seeded at every known pole and zero; "
    "uncertainty bounds what can hide, or is null",
}

#: Coordinates and kinds that keep every channel accurate everywhere: judged by the response error too.
STRUCTURED = (
    "transfer-function",
    "zero-pole-gain",
    "pole-residue",
    "sections",
    "cascade",
    "controllable-companion",
    "observable-companion",
)


@dataclass(frozen=True, slots=True)
class ClaimDefinition:
    """A claim: what it says, its unit, and its default limit by verb (`convert:structured` = kinds in `STRUCTURED`)."""

    name: str
    unit: str
    says: str
    limits: dict[str, float] = field(default_factory=dict)


CLAIMS: dict[str, ClaimDefinition] = {
    claim.name: claim
    for claim in (
        ClaimDefinition(
            "response-error",
            "relative",
            "largest ||dG|| / ||G_source|| over the dynamic band, Frobenius norms over the channels",
            {"convert:structured": 1e-9},
        ),
        ClaimDefinition(
            "channel-error",
            "relative",
            "response error channel by channel, the worst one; an identically zero channel must stay so, else the "
            "difference counts relative to the largest gain of the matrix",
        ),
        ClaimDefinition(
            "peak-error",
            "relative",
            "largest ||dG|| over all frequencies, relative to the largest ||G_source||",
            {"convert": 1e-9},
        ),
        ClaimDefinition(
            "end-behaviour",
            "relative",
            "relative degree, multiplicity of poles and zeros at the origin (z = 1) and axis poles, compared exactly; "
            "the value is the largest relative error of a channel's leading coefficient, or infinite if a degree or "
            "multiplicity differs",
            {"convert:structured": 1e-9},
        ),
        ClaimDefinition("order", "states", "order of the result"),
        ClaimDefinition("stability", "1", "1 if every pole of the result is inside the stability region, else 0"),
        ClaimDefinition(
            "reduction-error",
            "absolute",
            "L-infinity norm of the difference (largest singular value); relative to the largest gain beside it",
        ),
        ClaimDefinition(
            "reduction-bound",
            "absolute",
            "the method's bound on the reduction error plus the rounding term; null for methods without one",
        ),
        ClaimDefinition("steady-state-error", "relative", "difference at zero frequency relative to the source there"),
        ClaimDefinition(
            "weighted-misfit", "1", "root mean square of misfit / standard deviation; 1 = as large as the noise"
        ),
        ClaimDefinition("rms-misfit", "relative", "root mean square misfit relative to the root mean square response"),
        ClaimDefinition(
            "worst-misfit",
            "relative",
            "largest misfit of one channel at one frequency, relative to that channel's peak",
        ),
        ClaimDefinition("linf-error", "absolute", "L-infinity norm of the difference"),
        ClaimDefinition("h2-error", "absolute", "H2 norm of the difference"),
    )
}
