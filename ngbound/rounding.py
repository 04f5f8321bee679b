"""Rounding of numbers and bounds, one rule for every room; imports the standard library only.

A bound keeps two digits and is rounded outward, lower bounds down, upper limits and thresholds up,
so that the printed statement is never stronger than the computed one, and every printing of it is
the same. An uncertainty keeps two digits when its first three lie below 355, else one (the habit of
the Particle Data Group), and its value ends at the same digit.
"""

import math
from numbers import Real
from typing import TypeGuard


def is_number(value: object) -> TypeGuard[float]:
    """Whether ``value`` is a finite real number (not a bool)."""
    return isinstance(value, Real) and not isinstance(value, bool) and math.isfinite(value)


def power_of_ten(value: float) -> int:
    """Power of ten of the first digit; 0 for zero."""
    return math.floor(math.log10(abs(value))) if value else 0


def over_power(value: float, exponent: int) -> float:
    """``value`` / 10^exponent, without overflow."""
    return value / 10.0**exponent if exponent > -300 else value * 10.0 ** (-exponent)


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
    exponent = power_of_ten(value)
    mantissa = over_power(value, exponent)
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


def with_error(value: float, error: float) -> str:
    """A value with its 1-sigma uncertainty: "2.60 +- 0.17" or "(2.60 +- 0.17)e-10"."""
    if not is_number(value):
        return "not available"
    if not is_number(error) or error <= 0:
        return rounded(value, 3)
    lead = power_of_ten(error)
    mantissa = over_power(error, lead)
    if mantissa >= 9.5:
        lead, mantissa = lead + 1, 1.0
    last = lead - (1 if mantissa < 3.55 else 0)
    exponent = max(power_of_ten(value), lead) if value else lead
    if -4 <= exponent < 6:
        places = max(-last, 0)
        return f"{value:.{places}f} +- {error:.{places}f}"
    places = max(exponent - last, 0)
    return (
        f"({over_power(value, exponent):.{places}f} +- {over_power(error, exponent):.{places}f})"
        f"e{exponent}"
    )


def mass_text(kilogram: float, *, outward: str = "down") -> str:
    """A mass bound in kg, rounded outward."""
    return f"{rounded(kilogram, 2, outward=outward)} kg"


def length_text(metre: float, *, outward: str = "down") -> str:
    """A diameter bound in m or km, rounded outward."""
    if is_number(metre) and abs(metre) >= 1000.0:
        return f"{rounded(metre / 1000.0, 2, outward=outward)} km"
    return f"{rounded(metre, 2, outward=outward)} m"
