"""Decision levels for scalar readings: found exactly, assessed in both tails, applied at the speed of memory."""

from . import plot
from ._core import __version__
from .densities import (
    Density,
    cauchy,
    chi_square,
    custom,
    density,
    exponential,
    from_readings,
    gamma,
    gaussian,
    laplace,
    mixture,
    point,
    poisson,
    student_t,
    uniform,
)
from .evidence import error_bounds
from .reports import report
from .rules import Assessment, Rule, bayes, load, rule
from .slicing import build_info, decide
from .soft import Soft
from .states import States
from .streaming import stream, tally_stream
from .tallies import Tally

__all__ = [
    "Assessment",
    "Density",
    "Rule",
    "Soft",
    "States",
    "Tally",
    "__version__",
    "bayes",
    "build_info",
    "cauchy",
    "chi_square",
    "custom",
    "decide",
    "density",
    "error_bounds",
    "exponential",
    "from_readings",
    "gamma",
    "gaussian",
    "laplace",
    "load",
    "mixture",
    "plot",
    "point",
    "poisson",
    "report",
    "rule",
    "stream",
    "student_t",
    "tally_stream",
    "uniform",
]
