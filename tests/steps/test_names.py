"""The verbs are functions, however and in whatever order their files are imported, and cost nothing until used."""

from __future__ import annotations

import subprocess
import sys

import pytest

import realize
import realize.steps
from realize.steps import __all__ as names


@pytest.mark.parametrize("name", names)
def test_every_name_is_there(name: str) -> None:
    assert callable(getattr(realize.steps, name))
    if name != "model_of":
        assert getattr(realize, name) is getattr(realize.steps, name)


def test_a_file_imported_first_does_not_hide_its_verb() -> None:
    code = (
        "import sys, realize.steps.compare, realize.steps.demo; from realize.steps import compare, convert, fit;"
        "assert all(type(verb).__name__ == 'function' for verb in (compare, convert, fit));"
        "import realize; assert realize.reduce.__module__ == 'realize.steps.reduce'"
    )
    subprocess.run([sys.executable, "-c", code], check=True, timeout=60)


def test_convert_does_not_load_the_other_verbs() -> None:
    code = (
        "import sys; from realize.steps import convert;"
        "others = {'realize.fitting', 'realize.reduction', 'realize.steps.fit', 'realize.steps.inspect'};"
        "assert not others & set(sys.modules)"
    )
    subprocess.run([sys.executable, "-c", code], check=True, timeout=60)


def test_an_unknown_name_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match="nothing"):
        realize.steps.nothing  # noqa: B018
