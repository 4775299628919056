"""The exceptions of the package and the exit statuses they stand for.

::

    RealizeError                 exit status
    ├── UsageError               2   wrong usage: unknown verb, option or spelling
    ├── InputError               3   an input is not acceptable: file, field, index, found, expected
    ├── ClaimFailed              4   done, but a claim of the receipt failed its limit
    └── Refused                  5   the answer would be meaningless or cannot be held

Any other exception that leaves the package is a bug (exit status 1).
"""

from __future__ import annotations


class RealizeError(Exception):
    """Base of every exception that this package raises on purpose."""

    exit_status = 1


class UsageError(RealizeError):
    """A verb, option or spelling that does not exist, or options that contradict each other."""

    exit_status = 2


class InputError(RealizeError):
    """An input that cannot be accepted.

    Parameters
    ----------
    found : str
        What was found, as close to the input's own characters as is useful.
    expected : str
        What would have been accepted, and what to do next.
    field : str
        Name of the field with its index, such as ``numerator[0][1][3]`` or ``column 4, line 17``; empty if it is the
        input as a whole.
    file : str
        The file as the user named it; empty when the input did not come from a file.
    """

    exit_status = 3

    def __init__(self, found: str, expected: str = "", *, field: str = "", file: str = "") -> None:
        self.found, self.expected, self.field, self.file = found, expected, field, file
        super().__init__(str(self))

    def __str__(self) -> str:
        place = ": ".join(part for part in (self.file, self.field) if part)
        text = f"{place}: {self.found}" if place else self.found
        return f"{text}; expected {self.expected}" if self.expected else text

    def inside(self, *, file: str = "", field: str = "") -> InputError:
        """Return the same error with the file (or an outer field) named, keeping what is already known."""
        joined = f"{field}{self.field}" if self.field.startswith("[") else (self.field or field)
        return InputError(self.found, self.expected, field=joined, file=self.file or file)


class ClaimFailed(RealizeError):
    """Raised by ``Conversion.require()`` when a claim of the receipt does not hold."""

    exit_status = 4


class Refused(RealizeError):
    """The answer would be meaningless or cannot fit: the message says why and what to do instead."""

    exit_status = 5
