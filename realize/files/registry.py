"""The formats of files: one row each, registered by the module that reads it.

Content is sniffed before the suffix counts. Rows register themselves when their module is imported; a second row with
the same name or suffix is a programming error.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import BinaryIO

from realize.files.sources import Source
from realize.models import Model


@dataclass(frozen=True, slots=True)
class ReadOptions:
    """What the caller may say about a file.

    Names of table columns, the sampling rate of data over time (Hz), and whether matrix files may lie elsewhere.
    """

    columns: tuple[str, ...] | None = None
    rate: float | None = None
    allow_outside: bool = False


@dataclass(frozen=True, slots=True)
class Format:
    """One format: its name, its suffixes, how it is recognised, read and written.

    ``sniff`` takes the first bytes of the content. ``writes_kinds`` is empty where every kind can be written.
    """

    name: str
    says: str
    suffixes: tuple[str, ...]
    sniff: Callable[[bytes], bool]
    read: Callable[[Source, ReadOptions], Model] | None = None
    write: Callable[[Model, BinaryIO], None] | None = None
    writes_kinds: tuple[str, ...] = ()

    @property
    def can_read(self) -> bool:
        """True where files of this format can be read."""
        return self.read is not None

    @property
    def can_write(self) -> bool:
        """True where files of this format can be written."""
        return self.write is not None


FORMATS: dict[str, Format] = {}


def register(row: Format) -> Format:
    """Add a format to `FORMATS`; raises ValueError for a name or suffix that is taken."""
    if row.name in FORMATS:
        raise ValueError(f"the format {row.name!r} is registered already")
    for other in FORMATS.values():
        taken = set(other.suffixes) & set(row.suffixes)
        if taken:
            raise ValueError(f"the suffix {sorted(taken)[0]!r} belongs to {other.name!r}")
    if any(not suffix.startswith(".") or suffix != suffix.lower() for suffix in row.suffixes):
        raise ValueError("a suffix starts with a dot and is in lower case")
    FORMATS[row.name] = row
    return row


def by_suffix(suffix: str) -> Format | None:
    """Return the format of a suffix such as ``.json``, or None."""
    for row in FORMATS.values():
        if suffix.lower() in row.suffixes:
            return row
    return None
