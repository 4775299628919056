"""The catalogue's answers, and every conversion of every plant in it."""

from __future__ import annotations

import pytest

import realize
from realize.schema import UNIVERSAL_KINDS
from realize.testing.catalogue import CATALOGUE, Known


@pytest.mark.parametrize("known", CATALOGUE.values(), ids=list(CATALOGUE))
def test_inspection_gives_the_known_answers(known: Known) -> None:
    record = realize.inspect(known.make())
    assert record["order"] == known.order and record["minimal_order"] == known.minimal_order
    assert record["stable"] is known.stable
    found = {(round(re, 12), round(im, 12)): count for re, im, count in record["poles"]}
    want = {(round(pole.real, 12), round(pole.imag, 12)): count for pole, count in known.poles}
    assert found == pytest.approx(want)


@pytest.mark.parametrize("to", UNIVERSAL_KINDS)
@pytest.mark.parametrize("known", CATALOGUE.values(), ids=list(CATALOGUE))
def test_every_conversion_holds_or_is_known_to_fail(known: Known, to: str) -> None:
    model = known.make()
    if to == "sections" and model.shape != (1, 1):
        with pytest.raises(realize.Refused):
            realize.convert(model, to)
        return
    made = realize.convert(model, to)
    assert bool(made.receipt.failed) == (to in known.fails)
    assert realize.inspect(made)["minimal_order"] == known.minimal_order
