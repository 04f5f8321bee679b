"""How sure an assumed number is: small frozen distributions, and their reading from text or TOML.

May import: constants, errors and rounding only (with numpy and scipy).

Every distribution is defined by its quantile function ``ppf``; a draw is ``ppf(uniform)``. That
makes truncation, one-at-a-time tables and variance decompositions use one and the same definition.
"""

import difflib
import math
import re
import warnings
from abc import ABC, abstractmethod
from collections.abc import Mapping
from dataclasses import asdict, dataclass, fields
from typing import Any, ClassVar, TypeAlias

import astropy.units as u
import numpy as np
from astropy.units import Quantity
from scipy import special

from ngbound.errors import CaseError
from ngbound.rounding import rounded


def number_text(value: float, digits: int = 3) -> str:
    """A number to so many significant digits, as "517", "0.47" or "3.9e10"."""
    return rounded(value, digits) if math.isfinite(value) else f"{value:g}"


def _short(value: float, digits: int = 4) -> str:
    """`number_text` without trailing zeros after the point."""
    mantissa, e, exponent = number_text(value, digits).partition("e")
    if "." in mantissa:
        mantissa = mantissa.rstrip("0").rstrip(".")
    return mantissa + e + exponent


def _with_errors(value: float, errors: Mapping[str, float]) -> str:
    """A value and its errors by sign, with one power of ten: "5 +2 -1", "(3 +- 0.8)e26"."""
    power = int(f"{value:.3e}".split("e")[1]) if value else 0
    scale = 1.0 if -4 < power < 5 or power < -300 else float(f"1e{power}")
    told = " ".join(
        [
            _short(value / scale),
            *(f"{sign}{_short(error / scale, 3)}" for sign, error in errors.items()),
        ]
    )
    return told if scale == 1.0 else f"({told})e{power}"


@dataclass(frozen=True)
class Distribution(ABC):
    """Base of all distributions; values are floats in whatever unit the owner keeps."""

    kind: ClassVar[str] = ""

    @abstractmethod
    def ppf(self, u: np.ndarray) -> np.ndarray:
        """Quantile function: value below which the fraction ``u`` (any shape, 0..1) lies."""

    def draw(self, rng: np.random.Generator, n: int) -> np.ndarray:
        """``n`` independent draws, shape (n,)."""
        return self.ppf(rng.random(n))

    @property
    def median(self) -> float:
        """Median."""
        return float(self.ppf(np.asarray(0.5)))

    def scaled(self, factor: float) -> "Distribution":
        """The distribution of ``factor`` times the quantity (a change of unit); factor > 0."""
        values = {f.name: getattr(self, f.name) for f in fields(self)}
        unscaled = {"factor", "confidence"}
        return type(self)(
            **{k: v if k in unscaled or v is None else v * factor for k, v in values.items()}
        )

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description, readable again by `parse_distribution`."""
        items = {k: v for k, v in asdict(self).items() if v is not None and math.isfinite(v)}
        return {"distribution": self.kind, **items}


@dataclass(frozen=True)
class Fixed(Distribution):
    """A number taken as exactly known."""

    kind: ClassVar[str] = "fixed"
    value: float

    def ppf(self, u: np.ndarray) -> np.ndarray:
        return np.full(np.shape(u), float(self.value))

    def __str__(self) -> str:
        return f"{_short(self.value)}"


@dataclass(frozen=True)
class Normal(Distribution):
    """Gaussian, cut to [lower, upper] and renormalised there."""

    kind: ClassVar[str] = "normal"
    value: float
    sigma: float
    lower: float = -math.inf
    upper: float = math.inf

    def __post_init__(self) -> None:
        _require(self.sigma > 0, "sigma", self.sigma, "positive")

    def ppf(self, u: np.ndarray) -> np.ndarray:
        low = special.ndtr((self.lower - self.value) / self.sigma)
        high = special.ndtr((self.upper - self.value) / self.sigma)
        return self.value + self.sigma * special.ndtri(low + (high - low) * np.asarray(u))

    def __str__(self) -> str:
        return _with_errors(self.value, {"+- ": self.sigma})


@dataclass(frozen=True)
class SplitNormal(Distribution):
    """A value quoted with unequal errors, value +plus -minus, cut to [lower, upper].

    Half of the probability lies on each side of ``value``, each side half a Gaussian of its own
    width: the quoted 16th, 50th and 84th percentiles are met exactly. This is the piecewise-linear
    model of R. Barlow 2003, arXiv:physics/0401042 (reference from memory). The two-piece normal,
    whose mode is ``value`` and whose density is continuous there, is another distribution and
    would not return the quoted percentiles.
    """

    kind: ClassVar[str] = "split-normal"
    value: float
    minus: float
    plus: float
    lower: float = -math.inf
    upper: float = math.inf

    def __post_init__(self) -> None:
        _require(self.minus > 0, "minus", self.minus, "positive (write the size of the error)")
        _require(self.plus > 0, "plus", self.plus, "positive")

    def _cdf(self, x: float) -> float:
        width = self.minus if x < self.value else self.plus
        return float(special.ndtr((x - self.value) / width))

    def ppf(self, u: np.ndarray) -> np.ndarray:
        low, high = self._cdf(self.lower), self._cdf(self.upper)
        z = special.ndtri(low + (high - low) * np.asarray(u))
        return self.value + np.where(z < 0, self.minus, self.plus) * z

    def __str__(self) -> str:
        return _with_errors(self.value, {"+": self.plus, "-": self.minus})


@dataclass(frozen=True)
class Uniform(Distribution):
    """Equally likely anywhere between ``low`` and ``high``."""

    kind: ClassVar[str] = "uniform"
    low: float
    high: float

    def __post_init__(self) -> None:
        _require(self.high > self.low, "high", self.high, f"above low = {self.low:g} (swap them)")

    def ppf(self, u: np.ndarray) -> np.ndarray:
        return self.low + (self.high - self.low) * np.asarray(u)

    def __str__(self) -> str:
        return f"{_short(self.low)} to {_short(self.high)}"


@dataclass(frozen=True)
class LogUniform(Distribution):
    """Equally likely per decade between ``low`` and ``high``."""

    kind: ClassVar[str] = "log-uniform"
    low: float
    high: float

    def __post_init__(self) -> None:
        _require(self.low > 0, "low", self.low, "positive")
        _require(self.high > self.low, "high", self.high, f"above low = {self.low:g} (swap them)")

    def ppf(self, u: np.ndarray) -> np.ndarray:
        return self.low * (self.high / self.low) ** np.asarray(u)

    def __str__(self) -> str:
        return f"{_short(self.low)} to {_short(self.high)} (per decade)"


@dataclass(frozen=True)
class Triangular(Distribution):
    """Most likely at ``mode``, falling linearly to nothing at ``low`` and ``high``."""

    kind: ClassVar[str] = "triangular"
    low: float
    mode: float
    high: float

    def __post_init__(self) -> None:
        _require(self.high > self.low, "high", self.high, f"above low = {self.low:g} (swap them)")
        _require(
            self.low <= self.mode <= self.high,
            "mode",
            self.mode,
            f"between low = {self.low:g} and high = {self.high:g}",
        )

    def ppf(self, u: np.ndarray) -> np.ndarray:
        u = np.asarray(u)
        span, rise, fall = self.high - self.low, self.mode - self.low, self.high - self.mode
        return np.where(
            u < rise / span,
            self.low + np.sqrt(u * span * rise),
            self.high - np.sqrt((1 - u) * span * fall),
        )

    def __str__(self) -> str:
        return f"{_short(self.mode)} ({_short(self.low)} to {_short(self.high)})"


@dataclass(frozen=True)
class LogNormal(Distribution):
    """Gaussian in the logarithm: median ``value``, and ``factor`` > 1 is one sigma (value */
    factor)."""

    kind: ClassVar[str] = "log-normal"
    value: float
    factor: float

    def __post_init__(self) -> None:
        _require(self.value > 0, "value", self.value, "positive")
        _require(self.factor > 1, "factor", self.factor, "above 1")

    def ppf(self, u: np.ndarray) -> np.ndarray:
        return self.value * np.exp(math.log(self.factor) * special.ndtri(np.asarray(u)))

    def __str__(self) -> str:
        return f"{_short(self.value)} */ {_short(self.factor, 3)}"


@dataclass(frozen=True)
class AtMost(Distribution):
    """Known only to lie below ``limit`` (at ``confidence`` if that was quoted).

    `ppf` spreads it uniformly from 0 to the limit; who needs a lower bound must count it as zero
    instead, which is what `Outgassing.draw` does unless told otherwise.
    """

    kind: ClassVar[str] = "upper-limit"
    limit: float
    confidence: float | None = None

    def __post_init__(self) -> None:
        _require(self.limit > 0, "limit", self.limit, "positive")
        if self.confidence is not None:
            _require(0 < self.confidence < 1, "confidence", self.confidence, "between 0 and 1")

    def ppf(self, u: np.ndarray) -> np.ndarray:
        return self.limit * np.asarray(u)

    def __str__(self) -> str:
        quoted = "" if self.confidence is None else f" ({100 * self.confidence:g} %)"
        return f"< {_short(self.limit)}{quoted}"


def _require(condition: bool, name: str, value: float, allowed: str) -> None:
    if not condition:
        raise CaseError(f"In a distribution, {name} = {value!r} must be {allowed}.", value=value)


KINDS: dict[str, type[Distribution]] = {
    cls.kind: cls
    for cls in (Fixed, Normal, SplitNormal, Uniform, LogUniform, Triangular, LogNormal, AtMost)
}
"""Distribution names as a case file writes them."""

_KEYS = {
    "distribution",
    "unit",
    "value",
    "sigma",
    "minus",
    "plus",
    "low",
    "high",
    "mode",
    "factor",
    "limit",
    "confidence",
    "lower",
    "upper",
}

_NUMBER = r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?"
_ABS = r"(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?"
_PM = r"(?:\+-|\+/-|±)"
_PATTERNS = (
    (
        rf"\(\s*(?P<value>{_NUMBER})\s*{_PM}\s*(?P<sigma>{_ABS})\s*\)\s*(?P<scale>[eE][+-]?\d+)?",
        "normal",
    ),
    (
        rf"\(\s*(?P<value>{_NUMBER})\s*\+\s*(?P<plus>{_ABS})\s*[,/]?\s*-\s*(?P<minus>{_ABS})\s*\)"
        r"\s*(?P<scale>[eE][+-]?\d+)?",
        "split-normal",
    ),
    (rf"(?P<value>{_NUMBER})\s*{_PM}\s*(?P<sigma>{_ABS})", "normal"),
    (
        rf"(?P<value>{_NUMBER})\s*\+\s*(?P<plus>{_ABS})\s*[,/]?\s*-\s*(?P<minus>{_ABS})",
        "split-normal",
    ),
    (
        rf"(?P<value>{_NUMBER})\s*-\s*(?P<minus>{_ABS})\s*[,/]?\s*\+\s*(?P<plus>{_ABS})",
        "split-normal",
    ),
    (rf"(?P<value>{_NUMBER})\s*\*/\s*(?P<factor>{_ABS})", "log-normal"),
    (rf"(?P<low>{_NUMBER})\s*(?:\.\.|to)\s*(?P<high>{_NUMBER})", "uniform"),
    (rf"<\s*=?\s*(?P<limit>{_ABS})", "upper-limit"),
    (rf"(?P<value>{_NUMBER})", "fixed"),
)
_TEXT_FORMS = (
    '"5", "5 +- 1", "5 +2 -1", "(5 +- 1)e26", "5 */ 1.5" (log-normal, factor), "3 to 7", "< 5", '
    "each followed by a unit where one is needed"
)

DistributionSpec: TypeAlias = Distribution | Quantity | Mapping[str, Any] | str | float | int


def parse_distribution(
    spec: DistributionSpec, name: str, *, lower: float = -math.inf, upper: float = math.inf
) -> tuple[Distribution, str]:
    """Read a distribution and its unit.

    Parameters
    ----------
    spec : Distribution, Quantity, mapping, str or number
        ``{value=.., sigma=..}``, ``{value=.., minus=.., plus=..}``, ``{low=.., high=..}``, ``{low,
        mode, high}``, ``{value=.., factor=..}``, ``{limit=.., confidence=..}``, each with optional
        ``unit`` and ``distribution`` (a name of `KINDS`); or text such as "1e25 +- 2e24
        molecules/s".
    name : str
        What the number is, for error messages.
    lower, upper : float
        Open range of allowed values, in the unit of the spec: Gaussian tails are cut there,
        centres outside refused.

    Returns
    -------
    (Distribution, str)
        The distribution and the unit text, "" where none was given.
    """
    unit = ""
    if isinstance(spec, Distribution):
        found = spec
    elif isinstance(spec, Quantity):
        if not spec.isscalar:
            raise CaseError(
                f"{name} must be one number with a unit, not an array of shape {spec.shape}."
            )
        found, unit = Fixed(float(spec.value)), str(spec.unit)
    elif isinstance(spec, Mapping):
        found, unit = _from_mapping(spec, name, lower, upper)
    elif isinstance(spec, str):
        found, unit = _from_text(spec, name, lower, upper)
    elif isinstance(spec, (int, float, np.integer, np.floating)) and not isinstance(spec, bool):
        found = Fixed(float(spec))
    else:
        raise CaseError(
            f"{name} = {spec!r} is neither a number, a quantity, a text nor a table; write for "
            f"instance {_TEXT_FORMS}."
        )
    _check_range(found, name, lower, upper)
    return found, unit


def unit_named(text: str) -> u.UnitBase:
    """The unit of a text such as "m/s/day" or "m/s per day"; ValueError or TypeError for none."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", u.UnitsWarning)  # it dislikes two strokes
        return u.Unit(re.sub(r"\s+per\s+", "/", text))


def _from_text(text: str, name: str, lower: float, upper: float) -> tuple[Distribution, str]:
    for pattern, kind in _PATTERNS:
        match = re.match(rf"\s*{pattern}(?![\d.])\s*(?P<unit>.*)$", text)
        if match is None:
            continue
        unit = match["unit"].strip()
        if unit and not re.match(r"[A-Za-z/%]|1\s*/", unit):
            continue
        scale = float("1" + match["scale"]) if match.groupdict().get("scale") else 1.0
        values = {
            k: float(v) * (1.0 if k == "factor" else scale)
            for k, v in match.groupdict().items()
            if v is not None and k not in ("unit", "scale")
        }
        return _build(kind, values, name, lower, upper), unit
    raise CaseError(
        f"{name} = {text!r} cannot be read as a number with an uncertainty; write {_TEXT_FORMS}.",
        value=text,
    )


def _from_mapping(
    table: Mapping[str, Any], name: str, lower: float, upper: float
) -> tuple[Distribution, str]:
    for key in table:
        if key not in _KEYS:
            near = difflib.get_close_matches(str(key), sorted(_KEYS), 1)
            hint = (
                f" Did you mean {near[0]!r}?" if near else f" Allowed: {', '.join(sorted(_KEYS))}."
            )
            raise CaseError(f"{name} has the unknown key {key!r}.{hint}", key=key)
    values = {k: v for k, v in table.items() if k not in ("distribution", "unit")}
    for key, value in values.items():
        if isinstance(value, bool) or not isinstance(value, (int, float)):
            raise CaseError(
                f"{name}.{key} = {value!r} must be a number; the unit goes into {name}.unit.",
                key=key,
            )
    kind = table.get("distribution") or _guess_kind(set(values), name)
    if kind not in KINDS:
        near = difflib.get_close_matches(str(kind), sorted(KINDS), 1)
        hint = f" Did you mean {near[0]!r}?" if near else ""
        raise CaseError(
            f"{name}.distribution = {kind!r} is not known; allowed: "
            f"{', '.join(sorted(KINDS))}.{hint}"
        )
    return _build(kind, {k: float(v) for k, v in values.items()}, name, lower, upper), str(
        table.get("unit", "")
    )


def _guess_kind(keys: set[str], name: str) -> str:
    forms = {
        frozenset({"value"}): "fixed",
        frozenset({"value", "sigma"}): "normal",
        frozenset({"value", "minus", "plus"}): "split-normal",
        frozenset({"low", "high"}): "uniform",
        frozenset({"low", "mode", "high"}): "triangular",
        frozenset({"value", "factor"}): "log-normal",
        frozenset({"limit"}): "upper-limit",
        frozenset({"limit", "confidence"}): "upper-limit",
    }
    kind = forms.get(frozenset(keys - {"lower", "upper"}))
    if kind is None:
        raise CaseError(
            f"{name} gives {', '.join(sorted(keys)) or 'nothing'}, which fits no distribution; "
            "give value; value, sigma; value, minus, plus; value, factor; low, high; low, mode, "
            "high; or limit."
        )
    return kind


def _build(
    kind: str, values: dict[str, float], name: str, lower: float, upper: float
) -> Distribution:
    cls = KINDS[kind]
    allowed = {f.name for f in fields(cls)}
    if "lower" in allowed:
        values = {
            **values,
            "lower": max(values.get("lower", -math.inf), lower),
            "upper": min(values.get("upper", math.inf), upper),
        }
    spare = set(values) - allowed
    if spare:
        raise CaseError(
            f"{name}: a {kind} distribution does not take {', '.join(sorted(spare))}; it takes "
            f"{', '.join(sorted(allowed))}."
        )
    try:
        return cls(**values)
    except TypeError as error:
        raise CaseError(
            f"{name}: a {kind} distribution needs {', '.join(sorted(allowed))}."
        ) from error
    except CaseError as error:
        raise CaseError(f"{name}: {error}", **error.data) from error


def _check_range(found: Distribution, name: str, lower: float, upper: float) -> None:
    for f in fields(found):
        value = getattr(found, f.name)
        if value is None or f.name in (
            "lower",
            "upper",
            "sigma",
            "minus",
            "plus",
            "factor",
            "confidence",
        ):
            continue
        at_edge = f.name in ("low", "high") and lower <= value <= upper
        if not math.isfinite(value) or not (lower < value < upper or at_edge):
            edges = (
                f"between {lower:g} and {upper:g}"
                if math.isfinite(upper)
                else f"finite and above {lower:g}"
            )
            raise CaseError(f"{name}: {f.name} = {value:g} must be {edges}.", value=value)
