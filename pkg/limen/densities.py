"""Densities: the law of a reading in one state."""

from __future__ import annotations

import math
import operator
from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np

from . import _core

__all__ = ["Density", "cauchy", "chi_square", "custom", "density", "exponential", "from_readings", "gamma", "gaussian",
           "laplace", "mixture", "point", "poisson", "student_t", "uniform"]

_FORMAT, _VERSION = "limen density", 1


class Density(_core.Density):
    """The law of a reading in one state; immutable, hashable, picklable, equal where made alike.

    Made by `gaussian`, `mixture`, `from_readings` and the other constructors. ``logpdf``, ``pdf``, ``cdf``, ``sf``,
    ``logcdf`` and ``logsf`` take readings, ``ppf`` and ``isf`` probabilities: scalars or arrays of any shape, and
    ``out=``. ``mean``, ``var``, ``sd``, ``support`` and ``discrete`` are attributes. ``d + 3.0`` is shifted and
    ``2.5 * d`` is scaled.

    Examples
    --------
    >>> d = 2.0 * lm.gaussian(0.5, 0.1) + 1.0
    >>> d.mean, d.sd
    (2.0, 0.2)
    >>> d.logsf(10.0)
    -804.608...
    """

    __slots__ = ()

    def __add__(self, shift: Any) -> Density:
        return self._moved(shift, 1.0) if isinstance(shift, (int, float, np.number)) else NotImplemented

    __radd__ = __add__

    def __sub__(self, shift: Any) -> Density:
        return self._moved(-shift, 1.0) if isinstance(shift, (int, float, np.number)) else NotImplemented

    def __rsub__(self, shift: Any) -> Density:
        return self._moved(shift, -1.0) if isinstance(shift, (int, float, np.number)) else NotImplemented

    def __mul__(self, scale: Any) -> Density:
        return self._moved(0.0, scale) if isinstance(scale, (int, float, np.number)) else NotImplemented

    __rmul__ = __mul__

    def __neg__(self) -> Density:
        return self._moved(0.0, -1.0)

    @property
    def fit_notes(self) -> str:
        """What `from_readings` found, in words: the lattice, the thresholds, the tails. Empty for other densities."""
        if self._recipe[0] != "from_readings":
            return ""
        knots, _, _, _, shapes, (readings, counts, errors, step) = self._recipe[1:]
        lattice = f"on a lattice of {step:.6g}" if step > 0 else "on no lattice"
        below, above = (f"{count:.0f} readings, shape {shape:.3f} (standard error {error:.3f})"
                        for count, shape, error in zip(counts, shapes, errors))
        return (f"{readings:.0f} readings {lattice}; {len(knots)} knots; tail below {knots[0]:.6g}: {below}; "
                f"tail above {knots[-1]:.6g}: {above}")

    def to_dict(self) -> dict[str, Any]:
        """Plain Python, for JSON; `limen.density` makes it a density again."""
        return {"format": _FORMAT, "version": _VERSION, **_plain(self._recipe)}

    def __reduce__(self) -> tuple:
        return _from_recipe, (self._recipe,)

    def __repr__(self) -> str:
        kind, *rest = self._recipe
        if kind == "moved":
            part, shift, scale = rest
            text = repr(part) if scale == 1 else f"{scale!r} * {part!r}"
            return text if shift == 0 else f"{text} + {shift!r}"
        if kind == "mixture":
            weights, parts = rest
            return f"mixture([{', '.join(map(repr, weights))}], [{', '.join(map(repr, parts))}])"
        if kind == "from_readings":
            return f"<from_readings: {rest[5][0]:.0f} readings, {len(rest[0])} knots>"
        if kind == "custom":
            return f"custom({getattr(rest[0], '__qualname__', rest[0])}, support={rest[1:]!r})"
        return f"{kind}({', '.join(map(repr, rest[0]))})"


def gaussian(mean: float, sd: float) -> Density:
    """The normal law.

    Parameters
    ----------
    mean : float
    sd : float
        Standard deviation, above 0.

    Raises
    ------
    ValueError
        A parameter outside its domain.

    Examples
    --------
    >>> lm.gaussian(1.3, 0.07).sf(1.3)
    0.5
    """
    return Density._make("gaussian", mean, sd)


def laplace(loc: float, scale: float) -> Density:
    """The Laplace law, ``exp(-abs(x - loc) / scale) / (2 scale)``.

    Parameters
    ----------
    loc : float
        Mean, median and mode.
    scale : float
        Mean distance from it, above 0.

    Raises
    ------
    ValueError
        A parameter outside its domain.

    Examples
    --------
    >>> lm.laplace(2.0, 0.5).var
    0.5
    """
    return Density._make("laplace", loc, scale)


def student_t(loc: float, scale: float, dof: float) -> Density:
    """Student's t: a bell with power tails, for noise with outliers.

    Parameters
    ----------
    loc : float
        Median and mode; the mean where ``dof > 1``.
    scale : float
        Above 0; ``scale ** 2 * dof / (dof - 2)`` is the variance where ``dof > 2``.
    dof : float
        Degrees of freedom, above 0; far out the density falls like ``abs(x) ** -(dof + 1)``.

    Raises
    ------
    ValueError
        A parameter outside its domain.

    Notes
    -----
    Tails after M. Abramowitz, I. A. Stegun, Handbook of Mathematical Functions, 1964, 26.7.

    Examples
    --------
    >>> d = lm.student_t(0.0, 1.0, 4)
    >>> round(d.isf(0.025), 4), d.var        # the tabulated quantile
    (2.7764, 2.0)
    """
    return Density._make("student_t", loc, scale, dof)


def cauchy(loc: float, scale: float) -> Density:
    """The Cauchy law, Student's t of one degree of freedom; it has no mean.

    Parameters
    ----------
    loc : float
        Median and mode.
    scale : float
        Half the distance between the quartiles, above 0.

    Raises
    ------
    ValueError
        A parameter outside its domain.

    Examples
    --------
    >>> d = lm.cauchy(2.0, 0.5)
    >>> round(d.ppf(0.75), 12), d.mean
    (2.5, nan)
    """
    return Density._make("cauchy", loc, scale)


def uniform(low: float, high: float) -> Density:
    """All readings between two alike.

    Parameters
    ----------
    low, high : float
        ``low < high``; both belong to the support.

    Raises
    ------
    ValueError
        Bounds out of order.

    Examples
    --------
    >>> lm.uniform(1.0, 3.0).cdf([0.0, 1.5, 3.0]).tolist()
    [0.0, 0.25, 1.0]
    """
    return Density._make("uniform", low, high)


def exponential(scale: float, low: float = 0.0) -> Density:
    """The exponential law from `low` up, ``exp(-(x - low) / scale) / scale``.

    Parameters
    ----------
    scale : float
        Mean distance from `low`, above 0.
    low : float
        Where it starts.

    Raises
    ------
    ValueError
        A parameter outside its domain.

    Examples
    --------
    >>> lm.exponential(2.0).logsf(20.0)
    -10.0
    """
    return Density._make("exponential", scale, low)


def gamma(shape: float, scale: float) -> Density:
    """The gamma law: waiting times for several events, energies, squared noise.

    Parameters
    ----------
    shape : float
        Above 0; the mean is ``shape * scale``.
    scale : float
        Above 0, in the units of the readings.

    Raises
    ------
    ValueError
        A parameter outside its domain.

    Notes
    -----
    Tails after M. Abramowitz, I. A. Stegun, Handbook of Mathematical Functions, 1964, 6.5, in C. Loader's saddle-point
    form. They take longer for larger shapes: some microseconds a reading at 1e6.

    Examples
    --------
    >>> d = lm.gamma(3.0, 2.0) + 1.0
    >>> d.mean, d.var
    (7.0, 12.0)
    """
    return Density._make("gamma", shape, scale)


def chi_square(dof: float) -> Density:
    """The sum of `dof` squared standard normal variables: the gamma law of shape ``dof / 2`` and scale 2.

    Parameters
    ----------
    dof : float
        Degrees of freedom, above 0.

    Raises
    ------
    ValueError
        A parameter outside its domain.

    Examples
    --------
    >>> round(lm.chi_square(4).isf(0.05), 4)        # the tabulated quantile
    9.4877
    """
    return Density._make("chi_square", dof)


def poisson(mean: float) -> Density:
    """Counts of independent events, ``mean ** k * exp(-mean) / k!``; ``logpdf`` and ``pdf`` are masses.

    Parameters
    ----------
    mean : float
        Above 0.

    Raises
    ------
    ValueError
        A parameter outside its domain.

    Examples
    --------
    >>> dark, lit = lm.poisson(3.0), lm.poisson(12.0)
    >>> lm.bayes(lm.States({"dark": dark, "lit": lit})).levels.tolist()
    [7.0]
    """
    return Density._make("poisson", mean)


def point(value: float) -> Density:
    """All probability at one reading: a stuck sensor, a clipped converter.

    Parameters
    ----------
    value : float

    Raises
    ------
    ValueError
        A value that is not finite.

    Examples
    --------
    >>> clipped = lm.mixture([0.25, 0.75], [lm.point(0.0), lm.exponential(2.0)])
    >>> clipped.cdf([-1.0, 0.0]).tolist()
    [0.0, 0.25]
    """
    return Density._make("point", value)


def mixture(weights: Sequence[float], densities: Sequence[Density]) -> Density:
    """One of several laws, drawn anew for each reading.

    Parameters
    ----------
    weights : sequence of float
        How often each; at least 0, with sum 1 within 1e-9.
    densities : sequence of Density
        As many, all of readings or all of counts.

    Raises
    ------
    ValueError
        Weights that do not fit.
    TypeError
        Something that is no density.

    Examples
    --------
    >>> lm.mixture([0.9, 0.1], [lm.gaussian(0.0, 1.0), lm.gaussian(0.0, 10.0)]).support
    (-inf, inf)
    """
    return Density._mix(tuple(float(w) for w in weights), tuple(densities))


def from_readings(readings: Any, tails: str = "pareto") -> Density:
    """The density of recorded readings: a smooth body, and generalized Pareto tails.

    Parameters
    ----------
    readings : array_like of float, shape (n,)
        Finite, at least 20, of which 3 are distinct. Readings on a lattice (clock ticks, converter codes) count as
        spread evenly over their cells.
    tails : "pareto"

    Returns
    -------
    Density
        Its body is a log-spline whose knots the Bayes information criterion chooses (Stone, Hansen, Kooperberg and
        Truong, Ann. Statist. 25 (1997) 1371; Schwarz, Ann. Statist. 6 (1978) 461); so are the thresholds of its tails.
        ``fit_notes`` tells thresholds, shapes and their standard errors. Shapes stay from 0 (exponential: no reading is
        impossible) to 2 (so that one wild reading does not carry the tail away). Far beyond the last reading it is an
        extrapolation: hold it against the standards of your field before anybody's safety hangs on it.

    Raises
    ------
    ValueError
        Too few readings, one that is not finite, or readings no further apart than doubles round.

    Examples
    --------
    >>> readings = lm.gaussian(20.0, 3.0).ppf((np.arange(5000) + 0.5) / 5000)
    >>> d = lm.from_readings(readings)
    >>> print(f"{d.mean:.1f} {d.sd:.1f}")
    20.0 3.0
    >>> print(d.fit_notes)
    5000 readings on no lattice; ... knots; tail below ...: ... readings, shape 0.000 (standard error ...); ...
    """
    if tails != "pareto":
        raise ValueError(f"tails is {tails!r}; expected 'pareto'")
    array = np.asarray(readings)
    if array.ndim != 1 or array.dtype.kind not in "iuf":
        raise ValueError(f"readings has shape {array.shape} and type {array.dtype}; expected a list of real numbers")
    return _core.from_readings(Density, array.astype(np.float64))


def custom(logpdf: Callable[[np.ndarray], Any], support: tuple[float, float] = (-math.inf, math.inf),
           cdf: Callable[[np.ndarray], Any] | None = None) -> Density:
    """The law of a function of yours.

    Parameters
    ----------
    logpdf : callable
        Takes a float64 array of shape (n,) and returns as many natural logarithms of the density, -inf where there is
        none. It is asked inside `support` alone, as far out as doubles go; NumPy's warnings of overflow are silent
        meanwhile. The density must integrate to 1 within 1e-6. It must always answer alike.
    support : (float, float)
        Where readings can be. Name finite ends where the density has them: a jump elsewhere is found by halving, but
        a narrow law between long stretches of -inf is not found at all.
    cdf : callable, optional
        P(X <= x) as you know it: a second opinion, asked once at 9 readings from end to end of the law. Tails come from
        `logpdf` all the same, as ``1 - cdf(x)`` has no digits left where levels are proven.

    Returns
    -------
    Density
        Tails and moments come from adaptive Gauss-Kronrod quadrature in the log domain (R. Piessens et al., QUADPACK,
        1983), to rounding where `logpdf` is smooth. It can be pickled if `logpdf` can; `to_dict` cannot hold it.

    Raises
    ------
    ValueError
        A density that does not integrate to 1; a `cdf` that differs from its integral by more than 1e-6; NaN or another
        shape from `logpdf`; a support that is no interval.
    TypeError
        A `logpdf` that is no callable or does not return real numbers.
    Exception
        Whatever `logpdf` raises, here and wherever the density is evaluated.

    Notes
    -----
    Caution: nothing bounds a function that is only called. The search for levels samples it, 512 times between any two
    of its landmarks (modes, and distances around them), and can miss a pair of levels closer than that; ``rule.search``
    says ``sampled`` and how finely. Where a wrong level can hurt someone, take a family with bounds, such as a
    mixture, or prove the levels in another way. Every evaluation holds the GIL.

    Examples
    --------
    >>> def logpdf(x):      # the logistic law
    ...     return -np.abs(x) - 2 * np.log1p(np.exp(-np.abs(x)))
    >>> d = lm.custom(logpdf)
    >>> print(f"{d.sf(3.0):.12f} {d.var:.9f}")
    0.047425873178 3.289868134
    >>> lm.bayes(lm.States({"low": d, "high": d + 5.0})).search
    'sampled at ...'
    """
    if not callable(logpdf):
        raise TypeError(f"logpdf is {logpdf!r}; expected a function of an array")
    try:
        low, high = map(float, support)
    except (TypeError, ValueError) as bad:
        raise TypeError(f"support is {support!r}; expected two numbers") from bad
    law = _core.custom(Density, logpdf, low, high, np.errstate(all="ignore")(logpdf))
    if cdf is not None:
        if not callable(cdf):
            raise TypeError(f"cdf is {cdf!r}; expected a function of an array")
        x = law.ppf([1e-6, 1e-3, 0.05, 0.25, 0.5, 0.75, 0.95, 1 - 1e-3, 1 - 1e-6])
        for at, got, wanted in zip(x, np.broadcast_to(cdf(x), x.shape), law.cdf(x)):
            if not abs(got - wanted) <= 1e-6:
                raise ValueError(f"cdf is {float(got)!r} at the reading {float(at)!r}; expected the integral of "
                                 f"exp(logpdf) up to there, {float(wanted):.9g}")
    return law


def density(description: Mapping[str, Any]) -> Density:
    """The density that `Density.to_dict` described.

    Parameters
    ----------
    description : dict

    Raises
    ------
    ValueError
        Another format, a newer version, or an entry that is missing or does not fit.

    Examples
    --------
    >>> d = lm.gaussian(0.8, 0.05)
    >>> lm.density(d.to_dict()) == d
    True
    """
    if not isinstance(description, Mapping) or description.get("format") != _FORMAT:
        raise ValueError(f"format is not {_FORMAT!r}; expected what Density.to_dict gives")
    if description.get("version") != _VERSION:
        raise ValueError(f"version is {description.get('version')!r}; expected {_VERSION}")
    try:
        return _from_plain(description)
    except (KeyError, TypeError, AttributeError) as bad:
        raise ValueError(f"a density of family {description.get('family')!r} cannot be read: {bad!r}") from bad


def _plain(recipe: tuple) -> dict[str, Any]:
    """A recipe as a dict of plain lists, with the names of the parameters."""
    kind, *rest = recipe
    if kind == "moved":
        return {"family": kind, "density": _plain(rest[0]._recipe), "shift": rest[1], "scale": rest[2]}
    if kind == "mixture":
        return {"family": kind, "weights": list(rest[0]), "densities": [_plain(part._recipe) for part in rest[1]]}
    if kind == "from_readings":
        return {"family": kind, **dict(zip(_SPLINE, rest))}
    if kind == "custom":
        raise TypeError(f"a density of the function {rest[0]!r} cannot be written down as a dict; "
                        "expected densities that are made of numbers")
    return {"family": kind, **dict(zip(_core._families()[kind], rest[0]))}


_SPLINE = ("knots", "log_densities", "slopes", "tail_scales", "tail_shapes", "about")


def _from_plain(plain: Mapping[str, Any]) -> Density:
    kind = plain["family"]
    if kind == "moved":
        return _from_plain(plain["density"])._moved(plain["shift"], plain["scale"])
    if kind == "mixture":
        return mixture(plain["weights"], [_from_plain(part) for part in plain["densities"]])
    if kind == "from_readings":
        return _from_recipe((kind, *(_tuples(plain[name]) for name in _SPLINE)))
    return Density._make(kind, *operator.itemgetter(*_core._families()[kind])(plain))


def _tuples(value: Any) -> Any:
    return tuple(map(_tuples, value)) if isinstance(value, (list, tuple)) else value


def _from_recipe(recipe: tuple) -> Density:
    kind, *rest = recipe
    if kind == "moved":
        return rest[0]._moved(rest[1], rest[2])
    if kind == "mixture":
        return Density._mix(*rest)
    if kind == "from_readings":
        return _core.spline(Density, *rest)
    if kind == "custom":
        return custom(rest[0], rest[1:])
    return Density._make(kind, *rest[0])
