"""A single numpy array, ``.npy``: rows of a table whose columns are named by the caller. Nothing is unpickled."""

from __future__ import annotations

import math

import numpy as np

from realize.errors import InputError, RealizeError, Refused
from realize.files import table
from realize.files.registry import Format, ReadOptions, register
from realize.files.sources import Source, require_memory
from realize.files.table_text import MAX_NUMBERS, MAX_WIDTH, Table
from realize.models import Model

MAGIC = b"\x93NUMPY"


def sniff(head: bytes) -> bool:
    """True for an array as ``numpy.save`` writes it."""
    return head.startswith(MAGIC)


def read(source: Source, options: ReadOptions) -> Model:
    """Return the data of an array [rows][columns]; raises InputError naming what is wrong with it."""
    stream = source.random_access()
    try:
        version = np.lib.format.read_magic(stream)
        readers = {(1, 0): np.lib.format.read_array_header_1_0, (2, 0): np.lib.format.read_array_header_2_0}
        if version not in readers:
            raise InputError(f"array format {version[0]}.{version[1]}", "array format 1.0 or 2.0")
        shape, _, dtype = readers[version](stream)
        if dtype.hasobject or dtype.names is not None or dtype.subdtype is not None or dtype.kind not in "iuf":
            raise InputError(f"an array of {dtype}", "an array of real numbers")
        if len(shape) != 2:
            raise InputError(f"an array of {len(shape)} dimension(s)", "two: rows x columns")
        if math.prod(shape) > MAX_NUMBERS or shape[1] > MAX_WIDTH:
            raise Refused(f"more than {MAX_NUMBERS:,} numbers or {MAX_WIDTH:,} columns; thin the data out")
        require_memory(math.prod(shape) * 100, "reading the array")
        stream.seek(0)
        values = np.lib.format.read_array(stream, allow_pickle=False)
    except RealizeError:
        raise
    except Exception as error:
        words = str(error).strip() or type(error).__name__
        raise InputError(f"the array is damaged ({words[:120]})", "an array as numpy.save writes it") from None
    if 0 in shape:
        raise InputError(f"an array of shape {list(shape)}", "rows of numbers")
    if options.columns is None:
        raise InputError(
            f"{shape[1]} columns without names",
            "their names: pass --columns, such as --columns input,output with --rate 1kHz",
        )
    rows = Table(rows=[[repr(entry) for entry in row] for row in values.astype(float).tolist()])
    rows.lines = list(range(len(rows.rows)))
    rows.separator = ","
    try:
        return table.interpret(rows, options)
    except InputError as error:
        raise InputError(error.found, error.expected, field=error.field.replace("line ", "row ")) from None


NPY = register(Format("npy", "an array of numbers, columns named by --columns", (".npy",), sniff, read))
