"""Numbers as people read them: rounded by their uncertainty; imports the standard library only.

Rounding rules, the same in sentence, report, tables and figures: an uncertainty keeps two digits
when its first three lie below 355, else one (the habit of the Particle Data Group), and its value
ends at the same digit. Thresholds, limits and bounds keep two digits and are rounded outward (`up`,
`down`), so that the printed statement is never stronger than the computed one. In text a power of
ten is written 3.2e-10 and a unit au/d2; figures write both as mathematics.
"""

import math
from collections.abc import Iterable
from numbers import Real
from typing import TypeGuard

MINUS = "-"


def is_number(value: object) -> TypeGuard[float]:
    """Whether ``value`` is a finite real number (not a bool)."""
    return isinstance(value, Real) and not isinstance(value, bool) and math.isfinite(value)


def _exponent(value: float) -> int:
    return math.floor(math.log10(abs(value))) if value else 0


def _scaled(value: float, exponent: int) -> float:
    if exponent > -300:
        return value / 10.0**exponent
    return value * 1e300 * 10.0 ** (-exponent - 300)


def rounded(value: float, digits: int = 2, *, outward: str = "") -> str:
    """A number to so many significant digits, as "0.031", "241" or "8.4e-10".

    Parameters
    ----------
    value : float
    digits : int
        Significant digits kept.
    outward : str
        "up" or "down" rounds that way (for limits); "" to the nearest.
    """
    if not is_number(value):
        return "not available"
    if value == 0:
        return "0"
    exponent = _exponent(value)
    mantissa = _scaled(value, exponent)
    step = 10.0 ** (1 - digits)
    steps = mantissa / step
    if outward == "up":
        steps = math.ceil(steps - 1e-9)
    elif outward == "down":
        steps = math.floor(steps + 1e-9)
    else:
        steps = math.floor(steps + 0.5)
    mantissa = steps * step
    if abs(mantissa) >= 10.0:
        mantissa, exponent = mantissa / 10.0, exponent + 1
    if -4 <= exponent < 6:
        return f"{mantissa * 10.0**exponent:.{max(digits - 1 - exponent, 0)}f}"
    return f"{mantissa:.{digits - 1}f}e{exponent}"


def up(value: float) -> str:
    """A detection threshold or an upper limit: two digits, rounded up."""
    return rounded(value, 2, outward="up")


def down(value: float) -> str:
    """A lower bound: two digits, rounded down."""
    return rounded(value, 2, outward="down")


def only_along(components: str) -> str:
    """In which directions a thrust was looked for: "along R alone", "in the plane of R and T
    alone"; "" for all three, and where it is not known."""
    if not 0 < len(components) < 3:
        return ""
    if len(components) == 1:
        return f"along {components} alone"
    return f"in the plane of {' and '.join(components)} alone"


def along(components: str, vector: Iterable[float]) -> str:
    """A direction as "(+0.44 R, +0.89 T, -0.15 N)"."""
    parts = (
        f"{round(float(x), 2) + 0.0:+.2f} {c}" for x, c in zip(vector, components, strict=True)
    )
    return f"({', '.join(parts)})"


def with_error(value: float, error: float) -> str:
    """A value with its 1-sigma uncertainty: "2.60 +- 0.17" or "(2.60 +- 0.17)e-10"."""
    if not is_number(value):
        return "not available"
    if not is_number(error) or error <= 0:
        return rounded(value, 3)
    lead = _exponent(error)
    mantissa = _scaled(error, lead)
    if mantissa >= 9.5:
        lead, mantissa = lead + 1, 1.0
    last = lead - (1 if mantissa < 3.55 else 0)
    exponent = max(_exponent(value), lead) if value else lead
    if -4 <= exponent < 6:
        places = max(-last, 0)
        return f"{value:.{places}f} +- {error:.{places}f}"
    places = max(exponent - last, 0)
    return (
        f"({_scaled(value, exponent):.{places}f} +- {_scaled(error, exponent):.{places}f})"
        f"e{exponent}"
    )


def with_asymmetric_error(value: float, lower: float, upper: float) -> str:
    """A value with unequal uncertainties: "2.6 (+0.4, -0.2)"; both given as positive numbers."""
    if is_number(lower) and is_number(upper) and abs(lower - upper) <= 0.05 * max(lower, upper):
        return with_error(value, 0.5 * (lower + upper))
    if not (is_number(lower) and is_number(upper)):
        return rounded(value, 3)
    return f"{rounded(value, 3)} (+{rounded(upper, 2)}, {MINUS}{rounded(lower, 2)})"


def percent(fraction: float) -> str:
    """A probability as per cent: 0.95 -> "95 %", 0.0027 -> "0.27 %"; never 100 % by rounding."""
    if not is_number(fraction):
        return "not available"
    value = 100.0 * fraction
    for places in range(6):
        text = f"{value:.{places}f}"
        if abs(float(text) - value) <= 0.005 * min(value, 100.0 - value) + 1e-12:
            return f"{text} %"
    return f"{value:.5g} %"


def counted(number: int, singular: str, plural: str = "") -> str:
    """ "1 night", "1 401 nights": a count with its noun."""
    noun = singular if number == 1 else (plural or singular + "s")
    text = f"{number:,}".replace(",", " ") if number >= 10000 else str(number)
    return f"{text} {noun}"


def mass_text(kilogram: float, *, outward: str = "down") -> str:
    """A mass bound in kg, rounded outward."""
    return f"{rounded(kilogram, 2, outward=outward)} kg"


def length_text(metre: float, *, outward: str = "down") -> str:
    """A diameter bound in m or km, rounded outward."""
    if is_number(metre) and abs(metre) >= 1000.0:
        return f"{rounded(metre / 1000.0, 2, outward=outward)} km"
    return f"{rounded(metre, 2, outward=outward)} m"
