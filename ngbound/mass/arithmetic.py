"""Arithmetic of a set of quoted numbers: do they agree, and if not, which slip explains it?

May import: constants, errors, and from its own room distributions, outgassing and size.

Every relation between the quantities of a momentum balance is a product of powers, so it is linear
in the logarithms:

    local acceleration = acceleration x g(r)          velocity change = local acceleration x 1 day
    mass loss = rate x molecular mass                 fraction of gravity = local acceleration r^2
    / GM mass x local acceleration = collimation x mass loss x speed (= force)
    mass = pi/6 density diameter^3                    diameter = 2 radius
    diameter = 1329 km 10^(-H/5) / sqrt(albedo)       acceleration = z(confidence) x its sigma

Quantities that are not quoted are eliminated: a set of relations whose unquoted quantities cancel
is one test. If a test fails, the smallest sets of quoted numbers are sought whose change makes all
the rest agree, with the value each would need, and the ratio is compared with the usual slips of
unit and factor.
"""

import itertools
import math
import re
from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import astropy.units as u
import numpy as np
from astropy.units import Quantity
from scipy.special import ndtri

from ngbound.constants import AU_D2_TO_M_S2, AU_KM, AU_M, DAY_S, GM_KM3_S2
from ngbound.errors import CaseError, MassError

from .distributions import AtMost, Normal, SplitNormal, number_text, parse_distribution
from .outgassing import AVOGADRO, MOLAR_MASS_G, molecule_mass_kg
from .size import ASTEROID_DIAMETER_KM

_M_S2 = u.m / u.s**2
UNITS: dict[str, tuple[u.UnitBase, u.UnitBase]] = {
    "acceleration": (u.au / u.day**2, _M_S2),
    "acceleration_sigma": (u.au / u.day**2, _M_S2),
    "local_acceleration": (_M_S2, _M_S2),
    "velocity_change": (u.m / u.s / u.day, _M_S2),
    "gravity_fraction": (u.dimensionless_unscaled, u.dimensionless_unscaled),
    "rate": (u.s**-1, u.s**-1),
    "mass_loss": (u.kg / u.s, u.kg / u.s),
    "speed": (u.km / u.s, u.m / u.s),
    "collimation": (u.dimensionless_unscaled, u.dimensionless_unscaled),
    "force": (u.N, u.N),
    "mass": (u.kg, u.kg),
    "density": (u.kg / u.m**3, u.kg / u.m**3),
    "diameter": (u.m, u.m),
    "radius": (u.m, u.m),
    "albedo": (u.dimensionless_unscaled, u.dimensionless_unscaled),
    "absolute_magnitude": (u.mag, u.mag),
}
"""Quantities by name: the unit of a bare number, and the unit used inside (and in the results)."""

_PLAUSIBLE = {
    "speed": (50.0, 3000.0),
    "collimation": (0.05, 1.0),
    "density": (50.0, 3500.0),
    "rate": (1e20, 1e33),
    "albedo": (0.005, 1.0),
    "acceleration": (1e-16 * AU_D2_TO_M_S2, 1e-5 * AU_D2_TO_M_S2),
    "gravity_fraction": (1e-12, 1.0),
}
"""Generous ranges (internal units) outside which a number of a comet or asteroid is suspect."""


@dataclass(frozen=True)
class RelationTest:
    """One testable relation: ``ratio`` of its two sides (1 if they agree) and the ratio allowed by
    rounding."""

    relations: tuple[str, ...]
    quantities: tuple[str, ...]
    ratio: float
    allowed: float

    @property
    def holds(self) -> bool:
        """True if the two sides agree within rounding."""
        return abs(math.log(self.ratio)) <= math.log(self.allowed)

    def __str__(self) -> str:
        verdict = "holds" if self.holds else "FAILS"
        return (
            f"{verdict}: {' with '.join(self.relations)} ({', '.join(self.quantities)}): ratio "
            f"{number_text(self.ratio)}, rounding allows {number_text(self.allowed)}"
        )

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        return {
            "relations": list(self.relations),
            "quantities": list(self.quantities),
            "ratio": self.ratio,
            "allowed": self.allowed,
            "holds": self.holds,
        }


@dataclass(frozen=True)
class Change:
    """A smallest set of quoted numbers whose change makes all the rest agree.

    ``needed`` and ``ratios`` (quoted over needed) by quantity, in internal units; empty for sets of
    several numbers that the rest does not fix. ``slips``: usual slips that explain the ratio.
    """

    quantities: tuple[str, ...]
    needed: Mapping[str, float]
    ratios: Mapping[str, float]
    slips: tuple[str, ...]
    plausibility: int

    def __str__(self) -> str:
        parts = []
        for name in self.quantities:
            if name in self.needed:
                unit = str(UNITS[name][1])
                parts.append(
                    f"{_label(name)} {number_text(self.needed[name])}{' ' + unit if unit else ''} "
                    f"(quoted / needed = {number_text(self.ratios[name])})"
                )
            else:
                parts.append(_label(name))
        text = " and ".join(parts)
        return text + (f": {'; or '.join(self.slips)}" if self.slips else "")

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        return {
            "quantities": list(self.quantities),
            "needed": dict(self.needed),
            "ratios": dict(self.ratios),
            "units": {name: str(UNITS[name][1]) for name in self.quantities},
            "slips": list(self.slips),
        }


@dataclass(frozen=True)
class NumberAudit:
    """Verdict on a set of quoted numbers.

    ``verdict``: "sound" (every testable relation holds), "slip" (they disagree and the best single
    change is a usual slip), "inconsistent" (they disagree otherwise), "untestable" (no relation
    among them). ``changes``: best explanation first.
    """

    verdict: str
    quoted: Mapping[str, float]
    tests: tuple[RelationTest, ...]
    changes: tuple[Change, ...]

    def __str__(self) -> str:
        lines = [f"Quoted numbers: {self.verdict}."]
        lines += [f"  {test}" for test in self.tests]
        if self.changes:
            number = len(self.changes[0].quantities)
            lines.append(
                f"Changing {'one number' if number == 1 else f'{number} numbers'} is enough; any "
                "of:"
            )
            lines += [f"  {change}" for change in self.changes]
        return "\n".join(lines)

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description; quoted numbers in internal units."""
        return {
            "verdict": self.verdict,
            "quoted": dict(self.quoted),
            "units": {name: str(UNITS[name][1]) for name in self.quoted},
            "tests": [test.to_dict() for test in self.tests],
            "changes": [change.to_dict() for change in self.changes],
        }


@dataclass(frozen=True)
class _Relation:
    """sum of power x ln(quantity) = constant."""

    name: str
    powers: Mapping[str, float]
    constant: float


@dataclass(frozen=True)
class _Setting:
    """What the relations need besides the quantities."""

    r_au: float | None
    g: float | None
    species: str
    confidence: float | None


def audit_numbers(
    *,
    at: float | str | Quantity | None = None,
    g_at_r: float | None = None,
    species: str = "H2O",
    confidence: float | None = None,
    tolerance: float = 0.02,
    **quoted: Any,
) -> NumberAudit:
    """Test every relation between quoted numbers, and name the slip if they disagree.

    Parameters
    ----------
    at : heliocentric distance of the rate, the local acceleration and the fraction of gravity, au
    g_at_r : float
        Thrust law at ``at`` (g = 1 where ``acceleration`` is meant); default r^-2.
    species : str
    confidence : float
        Makes ``acceleration`` = z ``acceleration_sigma`` with the two-sided z of this confidence.
    tolerance : float
        Relative disagreement always forgiven, besides the rounding of the digits written and any
        "+-" given. Numbers given as text carry the rounding of their last digit; floats
        and Quantities are taken as exact.
    **quoted
        Keys of `UNITS`: a number in the default unit, a Quantity, or text such as "4.92e-6 m/s2",
        "> 500 m". A limit counts as its edge.

    Returns
    -------
    NumberAudit
    """
    if "H" in quoted:
        quoted["absolute_magnitude"] = quoted.pop("H")
    unknown = [name for name in quoted if name not in UNITS]
    if unknown:
        raise CaseError(
            f"{unknown[0]!r} is not a quantity of the audit; known: {', '.join(UNITS)}."
        )
    r_au = None if at is None else _read("at", at, u.au, u.au)[0]
    setting = _Setting(r_au, _law(g_at_r, r_au), species, confidence)
    values, errors = {}, {}
    for name, spec in quoted.items():
        if spec is None:
            continue
        value, error = _read(name, spec, *UNITS[name])
        if name == "absolute_magnitude":
            # as the factor 10^(-H/5); its error from the digits, not from H itself
            value, error = 10 ** (-value / 5), 0.2 * math.log(10) * error * abs(value)
        values[name], errors[name] = value, error
    relations = _relations(setting)
    tests = _tests(relations, values, errors, tolerance)
    if all(test.holds for test in tests):
        return NumberAudit("sound" if tests else "untestable", _plain(values), tests, ())
    changes = _changes(relations, values, errors, tolerance, setting)
    slip = bool(changes and len(changes[0].quantities) == 1 and changes[0].slips)
    return NumberAudit("slip" if slip else "inconsistent", _plain(values), tests, changes)


def _plain(values: Mapping[str, float]) -> dict[str, float]:
    return {
        name: -5 * math.log10(value) if name == "absolute_magnitude" else value
        for name, value in values.items()
    }


def _law(g_at_r: float | None, r_au: float | None) -> float | None:
    if g_at_r is not None:
        if not g_at_r > 0:
            raise MassError(f"g_at_r = {g_at_r!r} must be positive: the thrust is off there.")
        return float(g_at_r)
    return None if r_au is None else r_au**-2


def _read(name: str, spec: Any, default: u.UnitBase, inside: u.UnitBase) -> tuple[float, float]:
    """Value in the inner unit, and its relative error from "+-" or from the digits written."""
    positive = -math.inf if name == "absolute_magnitude" else 0.0
    text = spec
    if isinstance(spec, str):
        text = re.sub(r"^\s*[<>~≤≥≈]+\s*=?\s*", "", spec)
    found, unit = parse_distribution(text, name, lower=positive)
    unit = re.sub(r"\b(molecules?|molec\.?)(?=\W|$)", "", unit).strip()
    try:
        parsed = u.Unit(re.sub(r"^/", "1/", unit)) if unit else default
        if parsed.is_equivalent(u.mol / u.s):
            factor = float(parsed.to(u.mol / u.s)) * AVOGADRO
        else:
            factor = float(parsed.to(inside))
    except (ValueError, TypeError, u.UnitConversionError) as problem:
        raise CaseError(
            f"{name} has the unit {unit!r}, which is no unit of it; use for instance "
            f"{default or 'none'}.",
            unit=unit,
        ) from problem
    middle = found.limit if isinstance(found, AtMost) else found.median
    if isinstance(found, Normal):
        error = found.sigma / abs(middle)
    elif isinstance(found, SplitNormal):
        error = max(found.minus, found.plus) / abs(middle)
    else:
        error = written_rounding(spec)
    return middle * factor, error


def written_rounding(spec: Any) -> float:
    """Half a unit of the last digit of a number written as text, relative; else 0: taken as
    exact."""
    match = re.search(r"\d[\d.]*", spec) if isinstance(spec, str) else None
    if match is None:
        return 0.0
    digits = match[0].replace(".", "").lstrip("0")
    if not digits:
        return 0.0
    mantissa = float(f"{digits[0]}.{digits[1:] or '0'}")
    return 0.5 * 10.0 ** (1 - len(digits)) / mantissa


def _relations(setting: _Setting) -> tuple[_Relation, ...]:
    found = [
        _Relation(
            "momentum balance",
            {"force": 1, "mass": -1, "local_acceleration": -1},
            0.0,
        ),
        _Relation(
            "recoil force",
            {"force": 1, "collimation": -1, "mass_loss": -1, "speed": -1},
            0.0,
        ),
        _Relation("sphere", {"mass": 1, "density": -1, "diameter": -3}, math.log(math.pi / 6)),
        _Relation("diameter and radius", {"diameter": 1, "radius": -1}, math.log(2)),
        _Relation("velocity change", {"velocity_change": 1, "local_acceleration": -1}, 0.0),
        _Relation(
            "photometric size",
            {"diameter": 1, "absolute_magnitude": -1, "albedo": 0.5},
            math.log(1e3 * ASTEROID_DIAMETER_KM),
        ),
    ]
    if setting.species in MOLAR_MASS_G:
        found.append(
            _Relation(
                "molecular mass",
                {"mass_loss": 1, "rate": -1},
                math.log(molecule_mass_kg(setting.species)),
            )
        )
    if setting.g is not None:
        found.append(
            _Relation(
                "thrust law", {"local_acceleration": 1, "acceleration": -1}, math.log(setting.g)
            )
        )
    if setting.r_au is not None:
        gravity = GM_KM3_S2["sun"] * 1e9 / (setting.r_au * AU_M) ** 2
        found.append(
            _Relation(
                "solar gravity",
                {"local_acceleration": 1, "gravity_fraction": -1},
                math.log(gravity),
            )
        )
    if setting.confidence is not None:
        if not 0 < setting.confidence < 1:
            raise CaseError(f"confidence = {setting.confidence!r} must be between 0 and 1.")
        z = float(ndtri(0.5 + setting.confidence / 2))
        found.append(
            _Relation("limit and sigma", {"acceleration": 1, "acceleration_sigma": -1}, math.log(z))
        )
    return tuple(found)


def _tests(
    relations: tuple[_Relation, ...],
    values: Mapping[str, float],
    errors: Mapping[str, float],
    tolerance: float,
) -> tuple[RelationTest, ...]:
    """Every minimal combination of relations in which all quantities but quoted ones cancel."""
    found: list[RelationTest] = []
    for size in range(1, len(relations) + 1):
        for subset in itertools.combinations(relations, size):
            weights = _combination(subset, values)
            if weights is None:
                continue
            powers: dict[str, float] = {}
            for weight, relation in zip(weights, subset, strict=True):
                for name, power in relation.powers.items():
                    powers[name] = powers.get(name, 0.0) + weight * power
            powers = {n: p for n, p in powers.items() if abs(p) > 1e-9 and n in values}
            if not powers:
                continue
            scale = 1.0 / min(abs(p) for p in powers.values())
            constant = sum(w * r.constant for w, r in zip(weights, subset, strict=True))
            left = sum(p * math.log(values[n]) for n, p in powers.items())
            allowed = scale * sum(abs(p) * errors[n] for n, p in powers.items()) + tolerance
            found.append(
                RelationTest(
                    tuple(r.name for r in subset),
                    tuple(powers),
                    math.exp(scale * (left - constant)),
                    math.exp(allowed),
                )
            )
    return tuple(found)


def _combination(subset: tuple[_Relation, ...], values: Mapping[str, float]) -> np.ndarray | None:
    """Weights, all non-zero and unique up to scale, that cancel the unquoted quantities; else
    None."""
    uses = Counter(n for r in subset for n in r.powers if n not in values)
    hidden = sorted(uses)
    if not hidden:
        return np.ones(1) if len(subset) == 1 else None
    if min(uses.values()) < 2:
        return None
    matrix = np.array([[r.powers.get(n, 0.0) for r in subset] for n in hidden])
    _, singular, rows = np.linalg.svd(matrix)
    rank = int((singular > 1e-9).sum())
    if rank != len(subset) - 1:
        return None
    weights = rows[-1]
    if np.abs(weights).min() < 1e-9:
        return None
    return weights / weights[0]


def _changes(
    relations: tuple[_Relation, ...],
    values: Mapping[str, float],
    errors: Mapping[str, float],
    tolerance: float,
    setting: _Setting,
) -> tuple[Change, ...]:
    for size in range(1, len(values) + 1):
        found = []
        for names in itertools.combinations(values, size):
            kept = {n: v for n, v in values.items() if n not in names}
            if all(t.holds for t in _tests(relations, kept, errors, tolerance)):
                found.append(_change(names, relations, values, kept, errors, tolerance, setting))
        if found:
            found.sort(key=lambda c: (-c.plausibility, not c.slips))
            return tuple(found)
    return ()


def _change(
    names: tuple[str, ...],
    relations: tuple[_Relation, ...],
    values: Mapping[str, float],
    kept: Mapping[str, float],
    errors: Mapping[str, float],
    tolerance: float,
    setting: _Setting,
) -> Change:
    needed = _solve(names, relations, kept)
    ratios = {n: values[n] / v for n, v in needed.items()}
    slips: list[str] = []
    plausibility = 0
    spread = sum(errors.values()) + tolerance
    for name, value in needed.items():
        slips += _slips(name, ratios[name], value, min(spread, 0.2), values, setting)
        if name in _PLAUSIBLE:
            low, high = _PLAUSIBLE[name]
            plausibility += 2 * (low <= value <= high) - 2 * (low <= values[name] <= high)
    if "absolute_magnitude" in needed:
        quoted, wanted = values["absolute_magnitude"], needed["absolute_magnitude"]
        needed["absolute_magnitude"] = -5 * math.log10(wanted)
        ratios["absolute_magnitude"] = math.log(quoted) / math.log(wanted)
    return Change(names, needed, ratios, tuple(slips), plausibility + 2 * bool(slips))


def _solve(
    names: tuple[str, ...], relations: tuple[_Relation, ...], kept: Mapping[str, float]
) -> dict[str, float]:
    """Values that the kept numbers fix, least squares in the logarithm; those not fixed are left
    out."""
    unknown = sorted({n for r in relations for n in r.powers if n not in kept})
    matrix = np.array([[r.powers.get(n, 0.0) for n in unknown] for r in relations])
    right = np.array(
        [
            r.constant - sum(p * math.log(kept[n]) for n, p in r.powers.items() if n in kept)
            for r in relations
        ]
    )
    _, singular, rows = np.linalg.svd(matrix)
    rank = int((singular > 1e-9).sum())
    free = rows[rank:]
    solution = np.linalg.lstsq(matrix, right, rcond=None)[0]
    return {
        n: math.exp(solution[unknown.index(n)])
        for n in names
        if n in unknown and (not len(free) or np.abs(free[:, unknown.index(n)]).max() < 1e-9)
    }


def _slips(
    name: str,
    ratio: float,
    needed: float,
    spread: float,
    values: Mapping[str, float],
    setting: _Setting,
) -> list[str]:
    """Usual slips whose factor (quoted over needed) is ``ratio``, best match first."""
    found = []
    for factor, words in _factors(name, values, setting):
        if factor > 0 and abs(math.log(factor)) > 2 * spread:
            miss = abs(math.log(ratio / factor))
            if miss <= spread:
                found.append((miss, words))
    if name == "collimation" and abs(math.log(needed)) <= spread:
        found.append((abs(math.log(needed)), "the collimation was left out (as if it were 1)"))
    return [words for _, words in sorted(found, key=lambda item: item[0])][:3]


UNIT_SLIPS: dict[str, tuple[tuple[float, str], ...]] = {
    "acceleration": (
        (AU_D2_TO_M_S2, "au/d2 and m/s2 exchanged"),
        (100.0, "cm/s2 and m/s2 exchanged"),
        (1000.0, "km and m exchanged (factor 1000)"),
        (100.0 * AU_D2_TO_M_S2, "au/d2 and cm/s2 exchanged"),
        (AU_M, "au and m exchanged"),
        (AU_KM, "au and km exchanged"),
        (DAY_S, "days and seconds exchanged once"),
        (DAY_S**2, "days and seconds exchanged (squared)"),
    ),
    "rate": (
        (AVOGADRO, "moles and molecules exchanged"),
        (1000.0, "factor 1000"),
        (DAY_S, "per day and per second exchanged"),
    ),
    "mass_loss": (
        (1000.0, "g/s and kg/s exchanged (factor 1000)"),
        (DAY_S, "per day and per second exchanged"),
    ),
    "speed": (
        (1000.0, "km/s and m/s exchanged (factor 1000)"),
        (100.0, "cm/s and m/s exchanged"),
    ),
    "mass": (
        (1000.0, "g, kg or t exchanged (factor 1000)"),
        (8.0, "radius and diameter exchanged in the volume (factor 8)"),
    ),
    "density": (
        (1000.0, "g/cm3 and kg/m3 exchanged (factor 1000)"),
        (8.0, "radius and diameter exchanged in the volume (factor 8)"),
    ),
    "diameter": ((2.0, "radius and diameter exchanged"), (1000.0, "km and m exchanged")),
    "radius": ((2.0, "radius and diameter exchanged"), (1000.0, "km and m exchanged")),
    "force": ((1e5, "dyn and N exchanged"), (1000.0, "factor 1000")),
    "velocity_change": (
        (DAY_S, "per day and per second exchanged"),
        (365.25, "per day and per year exchanged"),
        (1000.0, "km/s and m/s exchanged (factor 1000)"),
        (100.0, "cm/s and m/s exchanged"),
    ),
    "albedo": ((100.0, "per cent and fraction exchanged"),),
    "gravity_fraction": ((100.0, "per cent and fraction exchanged"),),
}
_SAME_SLIPS = {"acceleration_sigma": "acceleration", "local_acceleration": "acceleration"}


def _factors(name: str, values: Mapping[str, float], setting: _Setting) -> list[tuple[float, str]]:
    """(quoted over needed, words) of the usual slips of one quantity, both ways round."""
    both = list(UNIT_SLIPS.get(_SAME_SLIPS.get(name, name), ()))
    far = setting.r_au is not None or setting.g is not None
    if name in ("acceleration", "acceleration_sigma", "local_acceleration") and setting.g and far:
        both.append((setting.g, "value at the distance of the rate and value at 1 au exchanged"))
    if name in ("rate", "mass_loss", "force") and setting.g and far:
        both.append((setting.g, "rate at its distance and rate at 1 au exchanged (wrong distance)"))
    if name == "gravity_fraction" and setting.r_au:
        both.append((setting.r_au**2, "solar gravity at 1 au and at the distance exchanged"))
    if name in ("mass", "rate", "mass_loss", "force", "acceleration") and "collimation" in values:
        both.append((values["collimation"], "the collimation was left out or applied twice"))
    if name in ("acceleration", "acceleration_sigma") and setting.confidence:
        two = float(ndtri(0.5 + setting.confidence / 2))
        one = float(ndtri(setting.confidence))
        if one > 0:
            both.append((one / two, "one-sided and two-sided limits exchanged"))
    single = [(1.0 / factor, words) for factor, words in both]
    tens = [(10.0**k, f"a slip of 10^{k:+d}") for k in (-9, -6, -3, -2, -1, 1, 2, 3, 6, 9)]
    named = both + single
    return named + [t for t in tens if all(abs(math.log(t[0] / f)) > 1e-6 for f, _ in named)]


def _label(name: str) -> str:
    return name.replace("_", " ")
