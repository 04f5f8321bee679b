"""Numbers and counts as people read them, beside those of `ngbound.rounding`; imports that only."""

from ngbound.rounding import is_number, length_text, mass_text, percent, rounded, with_error

MINUS = "-"


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
