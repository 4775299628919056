"""How well each form of a state model keeps the response: worst peak error, refusals and failed claims by form.

The sources are the cascades of the single-channel plants of `families`. ``python benchmarks/accuracy/forms.py [EVERY]``
takes each EVERYth plant (1 unless given).
"""

from __future__ import annotations

import itertools
import sys
import time

from families import continuous, sampled

import realize
from realize.errors import Refused
from realize.forms.registry import TABLE


def main(every: int) -> None:
    """Print one row for each form."""
    plants = list(itertools.islice(itertools.chain(continuous(), sampled()), 0, None, every))
    sources = []
    for name, plant in plants:
        try:
            sources.append((name, realize.convert(plant, "state-space", form="cascade").model))
        except Refused as reason:
            print(f"{name}: no cascade: {reason}")
    print(f"{len(sources)} plants")
    print(f"{'form':28s} {'worst':>9s} {'where':28s} {'refused':>7s} {'failed':>6s} {'condition':>10s} {'CPU s':>6s}")
    for form in TABLE:
        worst, where, refused, failed, condition = 0.0, "", 0, 0, 1.0
        started = time.process_time()
        for name, source in sources:
            try:
                done = realize.convert(source, "state-space", form=form)
            except Refused:
                refused += 1
                continue
            failed += any(claim.holds is False for claim in done.receipt.claims)
            claim = done.receipt.claim("peak-error")
            value = float("inf") if claim.value is None else claim.value + (claim.uncertainty or 0.0)
            if value > worst:
                worst, where = value, name
            condition = max(condition, done.receipt.details["coordinates"]["condition"] or 0.0)
        used = time.process_time() - started
        print(f"{form:28s} {worst:9.1e} {where:28s} {refused:7d} {failed:6d} {condition:10.1e} {used:6.1f}", flush=True)


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 1)
