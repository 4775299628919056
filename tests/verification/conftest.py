"""The honesty benchmark's exact comparison, for tests that hold claims against it."""

from __future__ import annotations

import importlib
import sys
from pathlib import Path
from types import ModuleType

import pytest

PLACE = Path(__file__).resolve().parents[2] / "benchmarks" / "accuracy"


@pytest.fixture(scope="session")
def honesty() -> ModuleType:
    """benchmarks/accuracy/honesty.py as a module; skipped where the benchmarks are not installed beside the tests."""
    if not (PLACE / "honesty.py").is_file():
        pytest.skip("benchmarks/accuracy/honesty.py is not beside the tests")
    if str(PLACE) not in sys.path:
        sys.path.insert(0, str(PLACE))
    return importlib.import_module("honesty")
