"""Convert, minimise, reduce and fit linear plant models, with a receipt for every result."""

from realize._version import __version__

__all__ = ["__version__"]
