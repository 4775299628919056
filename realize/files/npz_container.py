"""Reading the arrays of an ``.npz`` file without trusting it: nothing is unpickled, sizes are checked first."""

from __future__ import annotations

import math
import warnings
import zipfile
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from realize.errors import InputError, RealizeError, Refused
from realize.files.matrix_market import DENSE_LIMIT, require_dense
from realize.files.sources import require_memory

#: Largest declared content of an archive, bytes.
ARCHIVE_LIMIT = 8 << 30
MAX_ARRAYS = 1000


@contextmanager
def _container(what: str) -> Iterator[None]:
    """Turn whatever a damaged archive makes the zip and array readers raise into an InputError."""
    try:
        yield
    except RealizeError:
        raise
    except MemoryError:
        raise Refused(f"{what} does not fit in memory") from None
    except Exception as error:
        words = str(error).strip() or type(error).__name__
        raise InputError(f"{what} is damaged ({words[:120]})", "an .npz archive as numpy writes it") from None


class Arrays:
    """The arrays of an archive by name: declared shapes first, data on demand."""

    def __init__(self, stream: BinaryIO) -> None:
        with _container("the archive"):
            self._zip = zipfile.ZipFile(stream)
            members = self._zip.infolist()
        if len(members) > MAX_ARRAYS:
            raise InputError(f"{len(members)} arrays", f"at most {MAX_ARRAYS}")
        declared = sum(member.file_size for member in members)
        if declared > ARCHIVE_LIMIT:
            raise Refused(
                f"the arrays would take {declared / 2**30:.1f} GiB, and the limit is {ARCHIVE_LIMIT >> 30} GiB: "
                "store large matrices as NAME_row, NAME_col, NAME_data, NAME_shape"
            )
        require_memory(declared, "reading the arrays")
        strange = [member.filename for member in members if not member.filename.endswith(".npy")]
        if strange or not members:
            raise InputError(
                f"a zip archive with {strange[0][:60]!r}" if strange else "an archive without arrays",
                "an .npz archive of numpy arrays",
            )
        self._members: dict[str, zipfile.ZipInfo] = {}
        for member in members:
            name = member.filename[: -len(".npy")]
            if name in self._members:
                raise InputError("the array is there twice", "each name once", field=name[:60])
            self._members[name] = member

    def __contains__(self, name: str) -> bool:
        return name in self._members

    @property
    def names(self) -> list[str]:
        """Names of all arrays."""
        return list(self._members)

    def raw(self, name: str) -> NDArray[np.generic]:
        """Return one array; refuses objects, and headers that do not fit the stored size."""
        member = self._members[name]
        what = f"the array {name[:60]}"
        with _container(what), warnings.catch_warnings():
            warnings.simplefilter("ignore")
            with self._zip.open(member) as stream:
                version = np.lib.format.read_magic(stream)
                readers = {(1, 0): np.lib.format.read_array_header_1_0, (2, 0): np.lib.format.read_array_header_2_0}
                if version not in readers:
                    raise InputError(f"array format {version[0]}.{version[1]}", "array format 1.0 or 2.0", field=name)
                shape, _, dtype = readers[version](stream)
                if dtype.hasobject:
                    raise InputError("an array of Python objects", "an array of numbers or texts", field=name)
                if dtype.names is not None or dtype.subdtype is not None:
                    raise InputError("an array of records", "an array of numbers or texts", field=name)
                size = math.prod(shape) * dtype.itemsize
                if any(side < 0 for side in shape) or size != member.file_size - stream.tell():
                    found = f"shape {list(shape)} of {dtype} in {member.file_size} bytes"
                    raise InputError(found, "as many bytes as the shape needs", field=name)
                if size > DENSE_LIMIT:
                    raise Refused(f"{name}: over {DENSE_LIMIT >> 30} GiB in one array; store it as a sparse matrix")
            with self._zip.open(member) as stream:
                return np.lib.format.read_array(stream, allow_pickle=False)  # type: ignore[no-any-return]

    def numbers(self, name: str, *, whole: bool = False) -> NDArray[Any]:
        """Return an array of numbers (``whole``: of integers)."""
        values = self.raw(name)
        if values.dtype.kind not in ("iu" if whole else "iufc"):
            raise InputError(f"an array of {values.dtype}", "integers" if whole else "numbers", field=name)
        return values

    def text(self, name: str) -> str:
        """Return the only text of an array."""
        values = self.raw(name)
        if values.size != 1 or values.dtype.kind not in "US":
            raise InputError(f"an array of {values.dtype}, shape {list(values.shape)}", "one text", field=name)
        entry = values.reshape(-1)[0]
        if isinstance(entry, bytes):
            with _container(f"the text {name}"):
                return entry.decode("utf-8")
        return str(entry)

    def has_sparse(self, name: str) -> bool:
        """True where any of the four arrays of a sparse matrix is there."""
        return any(f"{name}_{part}" in self for part in SPARSE_PARTS)

    def sparse(self, name: str) -> NDArray[np.float64]:
        """Return a matrix stored as NAME_row, NAME_col, NAME_data, NAME_shape as a dense array."""
        for part in SPARSE_PARTS:
            if f"{name}_{part}" not in self:
                raise InputError("missing", "NAME_row, NAME_col, NAME_data and NAME_shape", field=f"{name}_{part}")
        size = self.numbers(f"{name}_shape", whole=True)
        if size.shape != (2,) or int(size.min()) < 0 or int(size.max()) > 1 << 40:
            raise InputError(f"{size.tolist()!r:.40}", "two sizes: rows, columns", field=f"{name}_shape")
        rows, columns = (int(entry) for entry in size)
        data = self.numbers(f"{name}_data")
        place = [self.numbers(f"{name}_{part}", whole=True) for part in ("row", "col")]
        if data.dtype.kind == "c":
            raise InputError("complex numbers", "real numbers", field=f"{name}_data")
        if data.ndim != 1:
            raise InputError(f"{data.ndim} dimensions", "one dimension", field=f"{name}_data")
        for part, values, limit in zip(("row", "col"), place, (rows, columns), strict=True):
            if values.shape != data.shape:
                raise InputError(
                    f"shape {list(values.shape)}", f"shape {list(data.shape)}, as {name}_data", field=f"{name}_{part}"
                )
            bad = np.flatnonzero((values < 0) | (values >= limit))
            if bad.size:
                k = int(bad[0])
                raise InputError(f"{values[k]}", f"places from 0 to {limit - 1}", field=f"{name}_{part}[{k}]")
        bad = np.flatnonzero(~np.isfinite(data))
        if bad.size:
            raise InputError(f"{data[bad[0]]}", "a finite number", field=f"{name}_data[{bad[0]}]")
        require_dense(rows, columns, name)
        keys = place[0].astype(np.int64) * columns + place[1].astype(np.int64)
        unique, counts = np.unique(keys, return_counts=True)
        if np.any(counts > 1):
            key = int(unique[counts > 1][0])
            raise InputError("two entries for one place", "one", field=f"{name}[{key // columns}][{key % columns}]")
        matrix = np.zeros((rows, columns))
        matrix.reshape(-1)[keys] = data
        return matrix


SPARSE_PARTS = ("row", "col", "data", "shape")
