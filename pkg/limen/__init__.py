"""Decision levels for scalar readings: found exactly, assessed in both tails, applied at the speed of memory."""

from ._core import __version__

__all__ = ["__version__"]
