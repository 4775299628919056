"""What every model has: signals, time base, dead time, operating point, ports, exact decimals, receipts."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from fractions import Fraction
from typing import Any, ClassVar, Self

import numpy as np
from numpy.typing import ArrayLike, NDArray

from realize.errors import InputError
from realize.models import checks
from realize.schema import KINDS, PORT_PARAMETERS, Receipt

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
Index = tuple[int, ...]
#: Arrays of up to this many numbers keep their integer ratios.
EXACT_KEPT = 400


@dataclass(frozen=True, slots=True)
class Signal:
    """Name and unit of an input, output or state; both may be empty."""

    name: str = ""
    unit: str = ""


@dataclass(frozen=True, slots=True)
class TimeBase:
    """Continuous time, or sampled with a period in seconds.

    A period or rate given as a decimal string stays exact.

    Parameters
    ----------
    domain : str
        "continuous" or "sampled".
    period : float or str, optional
        Sampling period, s.
    rate : float or str, optional
        Sampling rate, Hz; instead of the period.
    """

    domain: str = "continuous"
    period: float | str | None = None
    rate: float | str | None = None

    def __post_init__(self) -> None:
        given = [name for name in ("period", "rate") if getattr(self, name) is not None]
        if self.domain == "continuous":
            if given:
                raise InputError(f"a {given[0]} with domain continuous", "domain sampled", field=f"time.{given[0]}")
            return
        if self.domain != "sampled":
            raise InputError(f"domain {self.domain!r}", '"continuous" or "sampled"', field="time.domain")
        if len(given) != 1:
            found = "both period and rate" if given else "neither period nor rate"
            raise InputError(found, "one of period (seconds) and rate (Hz)", field="time")
        name = given[0]
        value = checks.rational(getattr(self, name), f"time.{name}")
        if value <= 0:
            raise InputError(f"{getattr(self, name)}", "a number greater than zero", field=f"time.{name}")
        if checks.nearest_double(1 / value) in (0.0, float("inf")) or checks.nearest_double(value) in (
            0.0,
            float("inf"),
        ):
            raise InputError(f"{getattr(self, name)}", "a number whose inverse is a double too", field=f"time.{name}")

    @property
    def sampled(self) -> bool:
        """True for sampled time."""
        return self.domain == "sampled"

    @property
    def exact_period(self) -> Fraction:
        """Sampling period in seconds as an exact fraction."""
        if self.period is not None:
            return checks.rational(self.period, "time.period")
        if self.rate is not None:
            return 1 / checks.rational(self.rate, "time.rate")
        raise ValueError("continuous time has no period")

    @property
    def seconds(self) -> float:
        """Sampling period in seconds, the nearest double."""
        return checks.nearest_double(self.exact_period)

    def points(self, frequency: ArrayLike) -> ComplexArray:
        """Return s = jw, or z = exp(jwT), for angular frequencies in rad/s."""
        w = np.asarray(frequency, dtype=float)
        if not self.sampled:
            return 1j * w
        return np.exp(1j * w * self.seconds)


CONTINUOUS = TimeBase()


@dataclass(frozen=True, slots=True)
class DeadTime:
    """Dead times in seconds: at the inputs [m], at the outputs [p], and in the channels [p][m]; they add up."""

    inputs: tuple[float, ...]
    outputs: tuple[float, ...]
    channels: tuple[tuple[float, ...], ...]

    @property
    def total(self) -> Array:
        """Dead time of each channel, [outputs][inputs], s."""
        return np.array(self.channels, dtype=float).reshape(len(self.outputs), len(self.inputs)) + np.add.outer(
            np.array(self.outputs, dtype=float), np.array(self.inputs, dtype=float)
        )


@dataclass(frozen=True, slots=True)
class Offset:
    """Operating point: values that the model's signals are deviations from; None where not given."""

    inputs: tuple[float, ...] | None = None
    outputs: tuple[float, ...] | None = None
    states: tuple[float, ...] | None = None


@dataclass(frozen=True, slots=True)
class Ports:
    """The inputs and outputs are those of the ports of a network: which parameter the response is, and its reference.

    Parameters
    ----------
    parameter : str
        A name of ``realize.schema.PORT_PARAMETERS``: "scattering", "impedance", "admittance", "hybrid",
        "inverse-hybrid".
    reference : sequence of float, optional
        Reference resistance of each port, ohm; a scattering matrix has one.
    """

    parameter: str
    reference: tuple[float, ...] | None = None

    def checked(self, p: int, m: int) -> Ports:
        """Return the same with plain floats; raises InputError where it does not fit p outputs and m inputs."""
        if self.parameter not in PORT_PARAMETERS:
            raise InputError(f"{self.parameter!r}", "one of " + ", ".join(PORT_PARAMETERS), field="ports.parameter")
        if p != m:
            raise InputError(f"ports with {p} outputs and {m} inputs", "as many outputs as inputs", field="ports")
        if "hybrid" in self.parameter and p != 2:
            raise InputError(f"{self.parameter} parameters of {p} ports", "two ports", field="ports.parameter")
        if self.reference is None:
            if self.parameter == "scattering":
                raise InputError("missing", "reference resistances, ohm", field="ports.reference")
            return self
        values = checks.array(list(self.reference), "ports.reference", 1)
        if values.size != p:
            raise InputError(f"{values.size} values", f"{p}, one for each port", field="ports.reference")
        for k in np.flatnonzero(values <= 0):
            raise InputError(f"{values[k]}", "a resistance greater than zero, ohm", field=f"ports.reference[{k}]")
        return Ports(self.parameter, tuple(values.tolist()))


def _freeze(value: Any) -> None:
    """Make the arrays of a copied model read-only again, also those in nested tuples."""
    if isinstance(value, np.ndarray):
        value.flags.writeable = False
    elif isinstance(value, tuple) and value and isinstance(value[0], (tuple, np.ndarray)):
        for entry in value:
            _freeze(entry)


@dataclass(frozen=True, eq=False, kw_only=True)
class Model:
    """Base of every kind of model: frozen, validated, with read-only arrays.

    Parameters
    ----------
    time : TimeBase
    inputs, outputs : sequence of Signal
        Names and units; empty means unnamed.
    dead_time : DeadTime, optional
    offset : Offset, optional
    ports : Ports, optional
        Where inputs and outputs are those of the ports of a network: the parameter and its reference.
    receipts : sequence of Receipt
        The steps that led here, oldest first.
    decimals : mapping of field name to {index: decimal string}
        Numbers that are given as exact decimals; the float arrays hold their nearest doubles.
    remarks : sequence of str
        What the reader of a file has to say about it; the next step takes them among its cautions. Not a part of the
        model: no file, no digest and no other model has them.
    """

    kind: ClassVar[str]

    time: TimeBase = CONTINUOUS
    inputs: tuple[Signal, ...] = ()
    outputs: tuple[Signal, ...] = ()
    dead_time: DeadTime | None = None
    offset: Offset | None = None
    ports: Ports | None = None
    receipts: tuple[Receipt, ...] = ()
    decimals: Mapping[str, Mapping[Index, str]] = field(default_factory=dict)
    remarks: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        self._normalise()
        p, m = self.shape
        put = self._put
        put("inputs", checks.signals(self.inputs, m, "inputs", Signal))
        put("outputs", checks.signals(self.outputs, p, "outputs", Signal))
        put("receipts", tuple(self.receipts))
        put("remarks", tuple(self.remarks))
        put("decimals", {name: dict(rows) for name, rows in self.decimals.items() if rows})
        if self.dead_time is not None:
            put("dead_time", self._checked_dead_time(self.dead_time, p, m))
        if self.ports is not None:
            put("ports", self.ports.checked(p, m))
        if self.offset is not None:
            sizes = {"inputs": m, "outputs": p, "states": self.state_count}
            for name, size in sizes.items():
                values = getattr(self.offset, name)
                if values is not None and len(values) != size:
                    raise InputError(f"{len(values)} values", f"{size}, one for each", field=f"offset.{name}")

    def _checked_dead_time(self, dead: DeadTime, p: int, m: int) -> DeadTime | None:
        shapes = {"inputs": (m,), "outputs": (p,), "channels": (p, m)}
        for name, shape in shapes.items():
            values = np.array(getattr(dead, name), dtype=float)
            if values.shape != shape:
                raise InputError(f"shape {list(values.shape)}", f"shape {list(shape)}", field=f"dead_time.{name}")
            bad = np.argwhere(~(np.isfinite(values) & (values >= 0)))
            if bad.size:
                index = "".join(f"[{i}]" for i in bad[0])
                raise InputError(
                    f"{values[tuple(bad[0])]}",
                    "a finite number of seconds, not negative",
                    field=f"dead_time.{name}{index}",
                )
        if self.time.sampled:
            ratio = dead.total / self.time.seconds
            whole = np.rint(ratio)
            bad = np.argwhere(np.abs(ratio - whole) > 8 * np.finfo(float).eps * np.maximum(whole, 1))
            if bad.size:
                i, j = bad[0]
                raise InputError(
                    f"{dead.total[i, j]} s from input {j} to output {i}",
                    f"a multiple of the sampling period {self.time.seconds} s",
                    field="dead_time",
                )
        return dead if np.any(dead.total) else None

    def _put(self, name: str, value: Any) -> None:
        object.__setattr__(self, name, value)

    def _normalise(self) -> None:
        """Turn the kind's own fields into checked read-only arrays."""
        raise NotImplementedError

    @property
    def shape(self) -> tuple[int, int]:
        """(number of outputs, number of inputs)."""
        raise NotImplementedError

    @property
    def order(self) -> int | None:
        """Number of poles or states as given, infinite ones included; None for data."""
        raise NotImplementedError

    @property
    def state_count(self) -> int:
        """Number of states that an operating point may list."""
        return 0

    def rational_part(self, points: ComplexArray) -> ComplexArray:
        """Return the rational part at complex points [k]: array [k][outputs][inputs], without dead time."""
        raise NotImplementedError

    def evaluate(self, s: ArrayLike) -> ComplexArray:
        """Return the response at complex points, dead time included.

        Parameters
        ----------
        s : array_like of complex, any shape
            Points of the Laplace variable (rad/s); of z for a sampled model.

        Returns
        -------
        ndarray of complex, shape of ``s`` + (outputs, inputs)
            Infinite where a point is exactly a pole.
        """
        points = np.asarray(s, dtype=complex)
        flat = points.reshape(-1)
        return self.delayed(self.rational_part(flat), flat).reshape(points.shape + self.shape)

    def delayed(self, values: ComplexArray, points: ComplexArray) -> ComplexArray:
        """Return values [k][outputs][inputs] at complex points [k] with the dead time of each channel put in."""
        if self.dead_time is None:
            return values
        total = self.dead_time.total
        if self.time.sampled:
            return values * points[:, None, None] ** -np.rint(total / self.time.seconds)
        return values * np.exp(-points[:, None, None] * total)

    def remembered(self, key: str, make: Callable[[], Any]) -> Any:
        """Return what was made before for this model under a key, or make it now; models never change."""
        memory = self.__dict__.setdefault("_memory", {})
        if key not in memory:
            memory[key] = make()
        return memory[key]

    def __getstate__(self) -> dict[str, Any]:
        return {name: value for name, value in self.__dict__.items() if name != "_memory"}

    def __setstate__(self, state: dict[str, Any]) -> None:
        for value in state.values():
            _freeze(value)
        self.__dict__.update(state)

    def parameters(self) -> dict[str, Any]:
        """Return the kind's own fields by name, in the order of the schema, None for those not given."""
        return {f.name: getattr(self, f.name) for f in KINDS[self.kind].fields}

    def exact(self, name: str) -> Any:
        """Return the numbers of a field as nested lists of integer ratios (numerator, denominator).

        Decimals count as typed, doubles as the binary fractions they are; a complex number is a pair of ratios.
        """
        value = getattr(self, name)
        if isinstance(value, np.ndarray) and value.size > EXACT_KEPT:
            return checks.exact_tree(value, self.decimals.get(name, {}))
        return self.remembered("exact " + name, lambda: checks.exact_tree(value, self.decimals.get(name, {})))

    @property
    def beyond_doubles(self) -> list[str]:
        """Places of exact decimals whose nearest double is infinite, or zero although they are not."""
        places = []
        for name, rows in self.decimals.items():
            for index, text in rows.items():
                value = checks.rational(text, name)
                if not np.isfinite(checks.nearest_double(value)) or (
                    value != 0 and checks.nearest_double(value) == 0.0
                ):
                    places.append(name + "".join(f"[{i}]" for i in index))
        return places

    def with_(self, **changes: Any) -> Self:
        """Return a copy with some fields changed."""
        return replace(self, **changes)

    def with_receipts(self, receipts: tuple[Receipt, ...]) -> Self:
        """Return the same model with another chain of receipts; what is remembered of its numbers stays."""
        self.__dict__.setdefault("_memory", {})
        copy = object.__new__(type(self))
        copy.__dict__.update(self.__dict__, receipts=receipts)
        return copy

    def common(self) -> dict[str, Any]:
        """Return what every step hands on: time, signals, dead time, operating point of signals, ports, receipts."""
        offset = self.offset
        if offset is not None and offset.states is not None:
            offset = Offset(offset.inputs, offset.outputs)
        return {
            "time": self.time,
            "inputs": self.inputs,
            "outputs": self.outputs,
            "dead_time": self.dead_time,
            "offset": offset,
            "ports": self.ports,
            "receipts": self.receipts,
        }

    def __repr__(self) -> str:
        p, m = self.shape
        order = "" if self.order is None else f", order {self.order}"
        time = f", period {self.time.seconds:g} s" if self.time.sampled else ""
        return f"<{self.kind}: {m} in, {p} out{order}{time}>"
