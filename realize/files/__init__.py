"""Reading and writing models: JSON, numpy archives, Touchstone files, tables of frequency responses."""

from realize.files import json_model, npy_table, npz_model, table, touchstone
from realize.files.access import format_for_writing, read, write
from realize.files.json_model import dumps
from realize.files.record import model_from_record, model_to_record
from realize.files.registry import FORMATS, Format
from realize.files.replacing import replace_file, replacing

__all__ = [
    "FORMATS",
    "Format",
    "dumps",
    "format_for_writing",
    "model_from_record",
    "model_to_record",
    "read",
    "replace_file",
    "replacing",
    "write",
]
