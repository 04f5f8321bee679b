"""Packed designations of minor planets, comets and satellites; imports only the standard library.

The forms are those that the Minor Planet Center documents for its 80-column format: five characters
for a permanent number (base-62 leading digit above 99,999, a tilde and four base-62 digits from
620,000), seven for a provisional designation (century letter, half-month, two-character cycle
count), and from 2024 an underscore form for half-months with more than 15,500 discoveries (written
from memory).
"""

import string

BASE62 = string.digits + string.ascii_uppercase + string.ascii_lowercase
_CENTURY = {"I": 18, "J": 19, "K": 20, "L": 21}
_ORDER = "ABCDEFGHJKLMNOPQRSTUVWXYZ"
_PLANET = {"J": "Jupiter", "S": "Saturn", "U": "Uranus", "N": "Neptune", "M": "Mars"}
_SURVEY = {"PLS": "P-L", "T1S": "T-1", "T2S": "T-2", "T3S": "T-3"}
_COMET_TYPES = "PDCXAI"


def base62(text: str) -> int:
    """Value of base-62 digits (0-9, A-Z, a-z); ValueError for any other character."""
    value = 0
    for character in text:
        value = 62 * value + BASE62.index(character)
    return value


def to_base62(value: int, width: int) -> str:
    """Base-62 digits of a non-negative number, ``width`` characters."""
    digits = ""
    for _ in range(width):
        value, rest = divmod(value, 62)
        digits = BASE62[rest] + digits
    if value:
        raise ValueError("the number does not fit the width")
    return digits


def unpack_permanent(text: str) -> str:
    """Permanent designation from columns 1-5 (``A0001`` -> ``100001``); ValueError when it is not
    one."""
    if len(text) != 5:
        raise ValueError(f"{text!r} has not five characters")
    if text[0] == "~":
        return str(620_000 + base62(text[1:]))
    if text.isdigit():
        return str(int(text))
    if text[0].isalpha() and text[1:].isdigit():
        return str(base62(text[0]) * 10_000 + int(text[1:]))
    if text[:4].isdigit() and text[4] in "PDI":
        return f"{int(text[:4])}{text[4]}"
    if text[0] in _PLANET and text[1:4].isdigit() and text[4] == "S":
        return f"{_PLANET[text[0]]} {int(text[1:4])}"
    raise ValueError(f"{text!r} is not a packed permanent designation")


def pack_permanent(number: int) -> str:
    """Five characters for the number of a minor planet (1 to 15,396,335)."""
    if number < 1:
        raise ValueError("a minor planet number is at least 1")
    if number < 620_000:
        return BASE62[number // 10_000] + f"{number % 10_000:04d}"
    return "~" + to_base62(number - 620_000, 4)


def unpack_provisional(text: str) -> str:
    """Provisional designation from seven characters (``K07Tf8A`` -> ``2007 TA418``); ValueError
    when it is not one."""
    if len(text) != 7:
        raise ValueError(f"{text!r} has not seven characters")
    if text[:3] in _SURVEY and text[3:].isdigit():
        return f"{int(text[3:])} {_SURVEY[text[:3]]}"
    if text[0] == "_":
        if text[2] not in _ORDER[:-1]:
            raise ValueError(f"{text!r} names no half-month")
        count = base62(text[3:])
        return f"{2000 + base62(text[1])} {text[2]}{_ORDER[count % 25]}{620 + count // 25}"
    if text[0] not in _CENTURY or not text[1:3].isdigit() or text[3] not in _ORDER[:-1]:
        raise ValueError(f"{text!r} is not a packed provisional designation")
    if not text[5].isdigit() or text[6] not in _ORDER:
        raise ValueError(f"{text!r} is not a packed provisional designation")
    cycle = base62(text[4]) * 10 + int(text[5])
    return f"{_CENTURY[text[0]]}{text[1:3]} {text[3]}{text[6]}{cycle or ''}"


def pack_provisional(text: str) -> str:
    """Seven characters for the provisional designation of a minor planet; ValueError when it is not
    one."""
    first, _, second = text.partition(" ")
    for packed, survey in _SURVEY.items():
        if second == survey and first.isdigit():
            return f"{packed}{int(first):04d}"
    if not (len(first) == 4 and first.isdigit() and len(second) >= 2 and second[:2].isalpha()):
        raise ValueError(f"{text!r} is not a provisional designation of a minor planet")
    if second[0] not in _ORDER[:-1] or second[1] not in _ORDER:
        raise ValueError(f"{text!r} is not a provisional designation of a minor planet")
    century = {v: k for k, v in _CENTURY.items()}[int(first[:2])]
    cycle = int(second[2:] or 0)
    if cycle >= 620:
        count = (cycle - 620) * 25 + _ORDER.index(second[1])
        return f"_{BASE62[int(first) - 2000]}{second[0]}{to_base62(count, 4)}"
    return f"{century}{first[2:]}{second[0]}{BASE62[cycle // 10]}{cycle % 10}{second[1]}"


def unpack_comet(orbit_type: str, text: str) -> str:
    """Provisional designation of a comet or an A/, I/ object from column 5 and columns 6-12 (``C``,
    ``J95O010``)."""
    if orbit_type not in _COMET_TYPES or len(text) != 7:
        raise ValueError(f"{orbit_type + text!r} is not a packed comet designation")
    if text[6] in _ORDER and text[6].isupper():
        return f"{orbit_type}/{unpack_provisional(text)}"
    if text[0] not in _CENTURY or not text[1:3].isdigit() or text[3] not in _ORDER[:-1]:
        raise ValueError(f"{orbit_type + text!r} is not a packed comet designation")
    if not text[5].isdigit() or not (text[6] == "0" or text[6].islower()):
        raise ValueError(f"{orbit_type + text!r} is not a packed comet designation")
    number = base62(text[4]) * 10 + int(text[5])
    fragment = "" if text[6] == "0" else f"-{text[6].upper()}"
    return f"{orbit_type}/{_CENTURY[text[0]]}{text[1:3]} {text[3]}{number}{fragment}"


def unpack_satellite(text: str) -> str:
    """Provisional designation of a natural satellite from columns 6-12 (``J99U030`` -> ``S/1999 U
    3``)."""
    good = len(text) == 7 and text[0] in _CENTURY and text[1:3].isdigit() and text[3] in _PLANET
    if not good or not text[5].isdigit() or text[6] != "0":
        raise ValueError(f"{text!r} is not a packed satellite designation")
    return f"S/{_CENTURY[text[0]]}{text[1:3]} {text[3]} {base62(text[4]) * 10 + int(text[5])}"


def unpack_columns(text: str) -> dict[str, str]:
    """ADES identification (permID, provID, trkSub as far as present) from columns 1-12 of an
    80-column record.

    Raises ValueError when columns 1-5 are filled with something that is no permanent designation.
    """
    first, second = text[:5], text[5:12]
    found: dict[str, str] = {}
    temporary = second.strip()
    if first.strip() == "":
        if temporary:
            found.update(_provisional_or_label(temporary, second))
        return found
    if first[:4].strip() == "" and first[4] in _COMET_TYPES:
        return {"provID": unpack_comet(first[4], second)}
    if first[:4].strip() == "" and first[4] == "S":
        return {"provID": unpack_satellite(second)}
    found["permID"] = unpack_permanent(first)
    if first[4] in "PDI" and temporary:
        if len(temporary) <= 2 and temporary.isalpha() and temporary.islower():
            found["permID"] += f"-{temporary.upper()}"
        else:
            found["provID"] = unpack_comet(first[4], second)
    elif temporary:
        found.update(_provisional_or_label(temporary, second))
    return found


def _provisional_or_label(label: str, field: str) -> dict[str, str]:
    try:
        return {"provID": unpack_provisional(field)}
    except ValueError:
        return {"trkSub": label}
