"""Model files in JSON: UTF-8, one object (DESIGN 3.2)."""

from __future__ import annotations

from typing import BinaryIO

from realize.errors import InputError
from realize.files import json_text
from realize.files.record import model_from_record, model_to_record
from realize.files.registry import Format, ReadOptions, register
from realize.files.sources import Source
from realize.models import Model
from realize.schema import KINDS


def sniff(head: bytes) -> bool:
    """True where the first character opens an object, or a list (which is then refused with the right words)."""
    text = head.removeprefix(b"\xef\xbb\xbf").lstrip(b" \t\r\n")
    # a Touchstone file of version 2 begins with a keyword in brackets
    return text[:1] == b"{" or (text[:1] == b"[" and not text[1:20].lstrip().lower().startswith(b"version"))


def read(source: Source, options: ReadOptions) -> Model:
    """Return the model of a JSON file; raises InputError naming field and index."""
    return model_from_record(
        json_text.parse(source.everything()), folder=source.folder, allow_outside=options.allow_outside
    )


def dumps(model: Model) -> str:
    """Return the model as the text of a JSON file."""
    matrices = [f.name for f in KINDS[model.kind].fields if f.holds == "matrix"]
    return json_text.write(model_to_record(model), matrices)


def write(model: Model, stream: BinaryIO) -> None:
    """Write the text of `dumps` as UTF-8."""
    try:
        data = dumps(model).encode("utf-8")
    except UnicodeEncodeError:
        raise InputError("a name or unit with half of a surrogate pair", "names of Unicode characters") from None
    stream.write(data)


JSON = register(Format("json", "a model in JSON, any kind", (".json",), sniff, read, write))
