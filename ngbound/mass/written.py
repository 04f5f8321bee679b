"""A number as it stands in a paper: its value, how far its digits round, its quoted error.

May import: errors, and from its own room distributions and outgassing.

Rounding is the interval of half a unit of the last digit written, no more. Zeros that end a whole
number without a point are not counted as digits ("500" is one digit, "500." and "5.00e2" three).
Numbers not given as text are taken as exact. A bound may have been rounded to its safe side, so its
rounding reaches a whole unit there ("> 5 km" may stand for more than 5.9 km).
"""

import math
import re
from dataclasses import dataclass
from typing import Any

import astropy.units as u
import numpy as np

from ngbound.errors import CaseError

from .distributions import (
    AtMost,
    Distribution,
    Fixed,
    Normal,
    SplitNormal,
    parse_distribution,
    unit_named,
)
from .outgassing import AVOGADRO

COARSEST = 0.25
"""Rounding is never taken larger than this share of a number: a single 1 would reach from 0.5 to
1.5, but nobody writes 1 for 1.4."""
BEYOND = 60.0
"""No quoted number, in SI units, lies beyond 10 to this power, or below its reciprocal."""
STATED_SIGMAS = 2.0
"""A quoted "+-" is let reach so many times its size."""


@dataclass(frozen=True)
class Written:
    """A quoted number in the natural logarithm (of 10^(-H/5) for a magnitude H).

    Attributes
    ----------
    log : float
    down, up : float
        How far the digits written let it reach below and above, not negative.
    sigma : float
        Quoted error, one standard deviation.
    exact : bool
        It was not given as text, nor with an error: it carries no rounding.
    bound : {-1, 0, 1}
        The true logarithm lies at or below it (-1), at or above it (1), or is it (0).
    """

    log: float
    down: float
    up: float
    sigma: float
    exact: bool
    bound: int = 0


def half_unit(spec: Any) -> tuple[float, float]:
    """Half a unit of the last digit of the first number in a text, and that number; (0, 1) for what
    is not text or holds no digits."""
    number = r"(\d+\.?\d*|\.\d+)(?:[eE]([+-]?\d{1,3}))?"
    match = re.search(number, spec) if isinstance(spec, str) else None
    if match is None:
        return 0.0, 1.0
    whole, _, decimals = match[1].partition(".")
    zeros = 0
    if "." not in match[1] and whole.strip("0"):
        zeros = len(whole) - len(whole.rstrip("0"))
    # a power of ten beyond the floating-point range is refused where the number is read
    scale = 10.0 ** max(min(int(match[2] or 0), 200), -200)
    return 0.5 * 10.0 ** (zeros - len(decimals)) * scale, float(match[1]) * scale


def written_rounding(spec: Any) -> float:
    """How far the digits of a number written as text reach, as a share of it, `COARSEST` at most;
    0 for what is not text: it is taken as exact."""
    half, value = half_unit(spec)
    return min(half / value, COARSEST) if value > 0 else 0.0


def rounding(spec: Any) -> Written:
    """The rounding of a number written as text, its value left out."""
    half = written_rounding(spec)
    return Written(0.0, -math.log1p(-half), math.log1p(half), 0.0, not isinstance(spec, str))


def without_sign(spec: Any) -> tuple[Any, int]:
    """A spec without the "<", ">=" or "~" before it, and which bound that makes it: -1 an upper, 1
    a lower one, 0 none."""
    sign = re.match(r"\s*([<>~≤≥≲≳≈]*)\s*=?\s*", spec) if isinstance(spec, str) else None
    if sign is None:
        return spec, 0
    bound = bool(re.search("[>≥≳]", sign[1])) - bool(re.search("[<≤≲]", sign[1]))
    return spec[sign.end() :], bound


def read_written(name: str, spec: Any, default: u.UnitBase, inside: u.UnitBase) -> Written:
    """Read a quoted number.

    Parameters
    ----------
    name : str
        What it is, for messages.
    spec : number, Quantity, mapping or text
        As `parse_distribution`, and with ">", ">=", "<" or "<=" before it, which makes it a bound,
        or "~", which counts as "=".
    default, inside : Unit
        Of a bare number, and of the result.

    Raises
    ------
    CaseError
    """
    magnitude = inside == u.mag
    text, bound = without_sign(spec)
    found, unit = parse_distribution(text, name, lower=-math.inf if magnitude else 0.0)
    if isinstance(found, AtMost):
        bound = -1
    factor = unit_factor(name, unit, default, inside)
    middle = found.limit if isinstance(found, AtMost) else found.median
    half = half_unit(spec)[0] if magnitude else written_rounding(spec)
    if magnitude:
        if not -100.0 < middle < 100.0:
            raise CaseError(f"{name} = {spec!r} must be a magnitude between -100 and 100.")
        per = 0.2 * math.log(10.0)
        log, scale = -per * middle, per
        down = up = per * half
    else:
        value = middle * factor
        if not 10.0**-BEYOND < value < 10.0**BEYOND:
            raise CaseError(
                f"{name} = {spec!r} is {value:g} {inside}, which is nothing in nature; look at its "
                "power of ten and its unit."
            )
        log, scale = math.log(value), 1.0 / middle
        down, up = -math.log1p(-half), math.log1p(half)
    bound = -bound if magnitude else bound
    if bound < 0:
        down = 2.0 * down if magnitude else -math.log1p(-2.0 * half)
    elif bound > 0:
        up = 2.0 * up if magnitude else math.log1p(2.0 * half)
    sigma = 0.0
    if isinstance(found, Normal):
        sigma = found.sigma * scale
    elif isinstance(found, SplitNormal):
        sigma = max(found.minus, found.plus) * scale
    elif not isinstance(found, Fixed | AtMost):
        down, up = _reach(found, middle, magnitude, scale)
    exact = not isinstance(spec, str) and sigma == 0.0 and down == up == 0.0
    return Written(log, down, up, min(sigma, 100.0), exact, bound)


def _reach(
    found: Distribution, middle: float, magnitude: bool, scale: float
) -> tuple[float, float]:
    """How far a range such as "3 to 7" reaches below and above its middle; central 95 % of those
    without ends."""
    low, high = found.ppf(np.array([0.0, 1.0])).tolist()
    if not (math.isfinite(high) and (magnitude or low > 0)):
        low, high = found.ppf(np.array([0.025, 0.975])).tolist()
    if magnitude:
        return (high - middle) * scale, (middle - low) * scale
    return math.log(middle / low), math.log(high / middle)


def unit_factor(name: str, unit: str, default: u.UnitBase, inside: u.UnitBase) -> float:
    """What a number in a unit, given as text, is to be multiplied by; molecules count as 1."""
    bare = re.sub(r"\b(molecules?|molec\.?)(?=\W|$)", "", unit).strip()
    try:
        parsed = unit_named(re.sub(r"^/", "1/", bare)) if bare else default
        if inside == u.mag and parsed != u.mag:
            raise ValueError(unit)
        if parsed.is_equivalent(u.mol / u.s):
            return float(parsed.to(u.mol / u.s)) * AVOGADRO
        return float(parsed.to(inside))
    except (ValueError, TypeError, OverflowError, ZeroDivisionError, u.UnitsError) as problem:
        wanted = f"use for instance {default}" if str(default) else "leave it out"
        if name == "rate":
            wanted += ", or give a rate in kg/s as mass_loss"
        raise CaseError(
            f"{name} has the unit {unit!r}, which is no unit of it; {wanted}.", unit=unit
        ) from problem


def spread_allowed(terms: list[tuple[float, Written]], tolerance: float) -> tuple[float, float]:
    """How far sum(power x log) of quoted numbers may lie from zero, below and above.

    Rounding errors are independent and even over their interval: their sum is let reach three of
    its standard deviations, but never farther than all of them together. Quoted errors are let
    reach `STATED_SIGMAS`; ``tolerance`` is added at the end.
    """
    below = sum(p * (w.down if p > 0 else -w.up) for p, w in terms)
    above = sum(p * (w.up if p > 0 else -w.down) for p, w in terms)
    centre, farthest = 0.5 * (above - below), 0.5 * (above + below)
    likely = 3.0 * math.sqrt(sum((p * (w.down + w.up)) ** 2 for p, w in terms) / 12.0)
    stated = STATED_SIGMAS * math.sqrt(sum((p * w.sigma) ** 2 for p, w in terms))
    reach = math.hypot(min(farthest, likely), stated) + tolerance
    return reach - centre, reach + centre
