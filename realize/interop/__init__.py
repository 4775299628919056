"""Objects of other libraries, in and out: `control`, `scipy.signal`, and plain arrays."""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from realize.interop.arrays import to_arrays
    from realize.interop.objects import from_library, to_library

_HOME_OF = {
    "from_library": "realize.interop.objects",
    "to_arrays": "realize.interop.arrays",
    "to_library": "realize.interop.objects",
}

__all__ = ["from_library", "to_arrays", "to_library"]


def __getattr__(name: str) -> Any:
    home = _HOME_OF.get(name)
    if home is None:
        raise AttributeError(f"module 'realize.interop' has no attribute {name!r}")
    return getattr(import_module(home), name)
