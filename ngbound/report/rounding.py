"""Numbers as people read them: rounded by their uncertainty; imports ngbound.rounding only.

An uncertainty keeps two digits when its first three lie below 355, else one (the habit of the
Particle Data Group), and its value ends at the same digit. Bounds are rounded outward
(`ngbound.rounding`).
"""

from ngbound.rounding import (
    is_number,
    length_text,
    mass_text,
    over_power,
    percent,
    power_of_ten,
    rounded,
)

MINUS = "-"


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


def with_asymmetric_error(value: float, lower: float, upper: float) -> str:
    """A value with unequal uncertainties: "2.6 (+0.4, -0.2)"; both given as positive numbers."""
    if is_number(lower) and is_number(upper) and abs(lower - upper) <= 0.05 * max(lower, upper):
        return with_error(value, 0.5 * (lower + upper))
    if not (is_number(lower) and is_number(upper)):
        return rounded(value, 3)
    return f"{rounded(value, 3)} (+{rounded(upper, 2)}, {MINUS}{rounded(lower, 2)})"


def counted(number: int, singular: str, plural: str = "") -> str:
    """ "1 night", "1 401 nights": a count with its noun."""
    noun = singular if number == 1 else (plural or singular + "s")
    text = f"{number:,}".replace(",", " ") if number >= 10000 else str(number)
    return f"{text} {noun}"


__all__ = [
    "MINUS",
    "counted",
    "is_number",
    "length_text",
    "mass_text",
    "percent",
    "rounded",
    "with_asymmetric_error",
    "with_error",
]
