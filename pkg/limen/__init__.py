"""Decision levels for scalar readings: found exactly, assessed in both tails, applied at the speed of memory."""

from ._core import __version__
from .slicing import build_info, decide
from .streaming import stream, tally_stream
from .tallies import Tally

__all__ = ["Tally", "__version__", "build_info", "decide", "stream", "tally_stream"]
