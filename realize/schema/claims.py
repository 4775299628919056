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
        ClaimDefinition(
            "band-error",
            "absolute",
            "largest singular value of the difference over the band that was asked for; relative to the source's "
            "largest there beside it",
        ),
        ClaimDefinition(
            "weighted-error",
            "absolute",
            "L-infinity norm of the difference with the stated input and output weights, or the weights of a loop",
        ),
        ClaimDefinition(
            "relative-degree",
            "1",
            "by how much the smallest relative degree of a channel falls short of the one asked; 0 = kept",
            {"fit": 0.0},
        ),
        ClaimDefinition(
            "fixed-poles",
            "relative",
            "largest distance of a fixed pole or integrator from the poles of the result, multiplicities counted; an "
            "integrator is exact or missing",
            {"fit": 1e-12},
        ),
        ClaimDefinition(
            "fixed-zeros",
            "relative",
            "largest distance of a fixed zero from the zeros of any channel, multiplicities counted",
            {"fit": 1e-12},
        ),
        ClaimDefinition(
            "steady-state-gain",
            "relative",
            "largest difference of the gain at frequency 0 from the one asked",
            {"fit": 1e-12},
        ),
        ClaimDefinition(
            "symmetry", "relative", "peak error of the result against its own transpose; 0 = reciprocal", {"fit": 1e-12}
        ),
        ClaimDefinition(
            "passivity",
            "relative",
            "how far from passive: largest singular value less 1 (scattering), or the most negative eigenvalue of the "
            "Hermitian part over the largest gain (impedance, admittance, hybrid); 0 = passive",
            {"fit": 0.0},
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
        ClaimDefinition(
            "nu-gap",
            "relative",
            "nu-gap between two plants, 0 to 1: a controller whose stability margin exceeds it suits both; it depends "
            "on the units of inputs and outputs",
        ),
        ClaimDefinition("largest-gain", "absolute", "L-infinity norm: largest singular value over all frequencies"),
        ClaimDefinition("h2-norm", "absolute", "H2 norm, the feed-through of a sampled model included"),
        ClaimDefinition("hankel-norm", "absolute", "largest Hankel singular value of the stable part"),
        ClaimDefinition(
            "stability-margin",
            "relative",
            "b(P, K) of the loop u = -K y, 0 (not stable) to 1, a lower bound; it depends on the units",
        ),
        ClaimDefinition("gain-margin", "1", "smallest factor above 1 on the loop gain that puts it on -1"),
        ClaimDefinition("gain-reduction-margin", "1", "largest factor below 1 on the loop gain that puts it on -1"),
        ClaimDefinition("phase-margin", "degrees", "least change of phase that puts the loop gain on -1"),
        ClaimDefinition("delay-margin", "s", "least dead time that puts the loop gain on -1"),
        ClaimDefinition("largest-sensitivity", "1", "largest |1 / (1 + L)| of a loop L over all frequencies"),
        ClaimDefinition(
            "largest-complementary-sensitivity", "1", "largest |L / (1 + L)| of a loop L over all frequencies"
        ),
    )
}
