"""Arithmetic of a set of quoted numbers: do they agree, and if not, which slip explains it?

May import: constants, errors, and from its own room distributions, frames, notebook, outgassing,
size, slips and written.

Every relation between the quantities of a momentum balance is a product of powers, so it is linear
in the logarithms:

    local acceleration = acceleration x g(r)          velocity change = local acceleration x 1 day
    mass loss = rate x molecular mass                 fraction of gravity = local acceleration r^2
    / GM mass x local acceleration = collimation x mass loss x speed (= force)
    mass = pi/6 density diameter^3                    diameter = 2 radius
    diameter = 1329 km 10^(-H/5) / sqrt(albedo)       acceleration = z(confidence) x its sigma

Quantities that are not quoted are eliminated: a set of relations whose unquoted quantities cancel
is one test. A test holds if the two sides agree within the rounding of the digits written
(`written`). A bound ("> 5 km") is held to its side only: what the other numbers give must lie on
the side it allows. Where two bounds in one test pull opposite ways, one follows from the other (a
limit on the thrust and the lower bound on the mass, and on the diameter), and they are compared at
their edges. Where they pull the same way neither follows from the other, although both may be true:
edges that agree are then doubted (a lower bound on the mass "from" an upper limit on the rate).

If a usual slip would hold as well, the digits cannot tell. If a test fails, the
smallest sets of quoted numbers are sought whose change makes all the rest agree, with the value
each would need, and the usual slips that would do it.
"""

import difflib
import itertools
import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import astropy.units as u
import numpy as np
import pandas as pd
from astropy.units import Quantity
from numpy.typing import NDArray
from scipy.special import ndtri

from ngbound.constants import AU_M, GM_KM3_S2
from ngbound.errors import CaseError, MassError

from .distributions import number_text
from .frames import text_rows
from .notebook import as_html
from .outgassing import DUST, molecule_mass_kg
from .size import ASTEROID_DIAMETER_KM
from .slips import Setting, powers_of_ten, usual_slips
from .written import Written, read_written, spread_allowed

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
    "at": (u.au, u.au),
}
"""Quantities by name: the unit of a bare number, and the unit used inside (and in the results)."""
_LABELS = {"at": "distance", "absolute_magnitude": "H"}
_OPTIONS = ("at", "g_at_r", "species", "confidence", "tolerance", "H")

_PLAUSIBLE = {
    "speed": (50.0, 3000.0),
    "collimation": (0.05, 1.0),
    "density": (50.0, 3500.0),
    "rate": (1e20, 1e33),
    "albedo": (0.005, 1.0),
    "acceleration": (2e-15, 2e-4),
    "gravity_fraction": (1e-12, 1.0),
    "at": (0.05, 60.0),
}
"""Generous ranges (internal units) outside which a number of a comet or asteroid is suspect."""
MOST_CHANGES = 12
"""So many changes are told at most, the best first."""
_LARGEST_LOG = 690.0
_LIMIT = "limit and sigma"


@dataclass(frozen=True)
class RelationTest:
    """One testable relation between quoted numbers.

    Attributes
    ----------
    relations : tuple of str
        The relations that make it.
    powers : mapping
        Of each quoted quantity in left side over right side.
    ratio : float
        Left side over right side; 1 if they agree.
    low, high : float
        Ratios that the digits (and quoted errors) allow, bounds taken at their edges.
    bound : {-1, 0, 1}
        Bounds quoted allow the ratio to lie anywhere above (-1) or below (1); 0 neither.
    bounds : tuple of str
        The quantities in it that were quoted as bounds.
    """

    relations: tuple[str, ...]
    powers: Mapping[str, float]
    ratio: float
    low: float
    high: float
    bound: int = 0
    bounds: tuple[str, ...] = ()

    @property
    def quantities(self) -> tuple[str, ...]:
        """The quoted numbers in it."""
        return tuple(self.powers)

    @property
    def formula(self) -> str:
        """The two sides, constants left out, the left one with the first quantity."""
        first = next(iter(self.powers.values()))
        sides: tuple[list[str], list[str]] = ([], [])
        for name, power in self.powers.items():
            size = "" if abs(abs(power) - 1.0) < 1e-6 else f"{abs(power):.3g}"
            shown = f"{_label(name)}{size and '^' + size}"
            if name == "absolute_magnitude":
                shown = f"10^(-{size}H/5)"
            sides[int(power * first < 0)].append(shown)
        left, right = (" x ".join(side) for side in sides)
        return f"{left} against {right or 'a constant'}"

    @property
    def lowest(self) -> float | None:
        """Lowest ratio allowed; None where a bound leaves it open."""
        return None if self.bound > 0 else self.low

    @property
    def highest(self) -> float | None:
        """Highest ratio allowed; None where a bound leaves it open."""
        return None if self.bound < 0 else self.high

    @property
    def holds(self) -> bool:
        """True if the two sides agree within the digits quoted, or a bound has its side."""
        return (self.lowest or 0.0) <= self.ratio <= (self.highest or math.inf)

    @property
    def slack(self) -> bool:
        """True if it holds only because a bound is one: at its edge the sides disagree."""
        return self.holds and not self.low <= self.ratio <= self.high

    def __str__(self) -> str:
        allowed = f"{number_text(self.low)} to {number_text(self.high)}"
        source = "the digits quoted"
        if self.bound:
            edge = f"most {number_text(self.high)}"
            allowed = f"at {edge if self.bound > 0 else f'least {number_text(self.low)}'}"
            several = "s" * (len(self.bounds) > 1)
            source += f" and the bound{several} on {' and '.join(map(_label, self.bounds))}"
        return (
            f"{'holds' if self.holds else 'FAILS'}: {self.formula} ({', '.join(self.relations)}): "
            f"the two sides are in the ratio {number_text(self.ratio)}, and {source} "
            f"allow {allowed}"
        )

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        return {
            "relations": list(self.relations),
            "quantities": list(self.quantities),
            "formula": self.formula,
            "ratio": self.ratio,
            "allowed": [self.lowest, self.highest],
            "bounds": list(self.bounds),
            "holds": self.holds,
        }


@dataclass(frozen=True)
class Change:
    """A smallest set of quoted numbers whose change makes all the rest agree.

    ``needed`` and ``ratios`` (quoted over needed; quoted less needed for a magnitude) by quantity,
    in internal units; empty for sets of several numbers that the rest does not fix. ``slips``:
    usual slips that explain the ratio, all within the digits quoted, the closest first.
    ``plausibility`` ranks changes: those of equal plausibility cannot be told apart.
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
                ratio = number_text(self.ratios[name])
                told = f"{ratio} times that"
                if name == "absolute_magnitude":
                    told = f"that {float(ratio):+g}"
                parts.append(
                    f"{_label(name)} to {_amount_text(name, self.needed[name])} (quoted: {told})"
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
            "plausibility": self.plausibility,
        }


VERDICTS = {
    "sound": "they agree, within the digits quoted.",
    "sound in part": "those that could be tested agree, within the digits quoted.",
    "cannot tell": "they agree, but would with a usual slip too: the digits cannot tell.",
    "slip": "they disagree, and a usual slip explains it.",
    "inconsistent": "they disagree, and no usual slip of one number explains it.",
    "untestable": "no relation connects them, so nothing could be tested.",
}
"""What each verdict says."""


@dataclass(frozen=True)
class NumberAudit:
    """Verdict on a set of quoted numbers.

    Attributes
    ----------
    verdict : str
        A key of `VERDICTS`. "sound" is said only where every number entered a test.
    quoted : mapping
        In internal units.
    tests : tuple of RelationTest
    changes : tuple of Change
        If a test fails: best explanation first.
    doubts : tuple of str
        If all hold: usual slips under which all would hold as well (at the edges of bounds).
    untested : tuple of str
        Quoted numbers that entered no test.
    exact : tuple of str
        Numbers that were not given as text and so carry no rounding.
    assumed : tuple of str
    """

    verdict: str
    quoted: Mapping[str, float]
    tests: tuple[RelationTest, ...]
    changes: tuple[Change, ...] = ()
    doubts: tuple[str, ...] = ()
    untested: tuple[str, ...] = ()
    exact: tuple[str, ...] = ()
    assumed: tuple[str, ...] = ()

    @property
    def tied(self) -> tuple[Change, ...]:
        """The best changes: several where they cannot be told apart."""
        return tuple(c for c in self.changes if _rank(c) == _rank(self.changes[0]))

    @property
    def headline(self) -> str:
        """The verdict in a sentence."""
        told = f"Quoted numbers: {VERDICTS[self.verdict]}"
        loose = [test.bounds for test in self.tests if test.slack]
        if loose:
            names = dict.fromkeys(_label(name) for bounds in loose for name in bounds)
            told += (
                f" What was quoted of {' and '.join(names)} is true as a bound, but looser than "
                "the rest allows."
            )
        return told

    def __str__(self) -> str:
        lines = [self.headline]
        lines += [f"  {test}." for test in self.tests]
        if self.doubts:
            lines.append("These slips would fit the digits as well:")
            lines += [f"  {doubt}." for doubt in self.doubts]
        if self.changes:
            number = len(self.changes[0].quantities)
            lines.append(
                f"Changing {'one number' if number == 1 else f'{number} numbers'} is enough. "
                + (
                    "These changes cannot be told apart by the numbers alone:"
                    if len(self.tied) > 1
                    else "The likeliest change:"
                )
            )
            lines += [f"  {change}." for change in self.tied]
            if len(self.changes) > len(self.tied):
                lines.append("Less likely, but enough as well:")
                lines += [f"  {change}." for change in self.changes[len(self.tied) :]]
        lines += self._notes()
        return "\n".join(lines)

    def to_frame(self) -> pd.DataFrame:
        """The tests as a table."""
        return pd.DataFrame(
            [
                (
                    t.formula,
                    t.ratio,
                    0.0 if t.lowest is None else t.lowest,
                    math.inf if t.highest is None else t.highest,
                    "holds" if t.holds else "FAILS",
                )
                for t in self.tests
            ],
            columns=["relation", "ratio", "lowest allowed", "highest allowed", "verdict"],
        )

    def _repr_html_(self) -> str:
        text = as_html([self.headline], text_rows(self.to_frame()))
        if self.changes:
            rows = [
                (str(change), "best" if change in self.tied else "less likely")
                for change in self.changes
            ]
            text += as_html(["Changes that would be enough:"], [("needed", "rank"), *rows])
        return text + as_html((), (), self._notes())

    def _notes(self) -> list[str]:
        untested, exact = (", ".join(map(_label, n)) for n in (self.untested, self.exact))
        told = (
            ("Not tested, because no relation connects them to the rest", untested),
            ("Taken as exact, because not written as text", exact if self.tests else ""),
            ("Assumed", "; ".join(self.assumed)),
        )
        return [f"{words}: {names}." for words, names in told if names]

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description; quoted numbers in internal units."""
        return {
            "verdict": self.verdict,
            "headline": self.headline,
            "quoted": dict(self.quoted),
            "units": {name: str(UNITS[name][1]) for name in self.quoted},
            "tests": [test.to_dict() for test in self.tests],
            "changes": [change.to_dict() for change in self.changes],
            "tied": len(self.tied),
            "doubts": list(self.doubts),
            "untested": list(self.untested),
            "exact": list(self.exact),
            "assumed": list(self.assumed),
        }


def _rank(change: Change) -> tuple[int, bool]:
    return -change.plausibility, not change.slips


def audit_numbers(
    *,
    at: float | str | Quantity | None = None,
    g_at_r: float | str | None = None,
    species: str = "H2O",
    confidence: float | str | None = None,
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
        Of the molecules, or "dust".
    confidence : float
        Makes ``acceleration`` = z ``acceleration_sigma`` with the two-sided z of this confidence.
    tolerance : float
        Relative disagreement always forgiven, besides the rounding of the digits written and any
        "+-" given. Numbers given as text carry the rounding of their last digit; floats
        and Quantities are taken as exact.
    **quoted
        Keys of `UNITS`: a number in the default unit, a Quantity, or text such as "4.92e-6 m/s2".
        "> 500 m" is a bound: it agrees with all that lies on its side.

    Raises
    ------
    CaseError
        An unknown quantity, unit or species, or a number that cannot be read.
    MassError
        The thrust is off at that distance.
    """
    if quoted.get("H") is not None:
        if quoted.get("absolute_magnitude") is not None:
            raise CaseError("H and absolute_magnitude are the same number; give one of them.")
        quoted["absolute_magnitude"] = quoted.pop("H")
    for name in quoted:
        if name not in UNITS and name != "H":
            known = [*UNITS, *_OPTIONS]
            near = difflib.get_close_matches(name, known, 1, 0.5)
            hint = f"did you mean {near[0]!r}?" if near else f"known are {', '.join(known)}."
            raise CaseError(f"{name!r} is not a quantity of the audit; {hint}", key=name)
    written = {
        name: read_written(name, spec, *UNITS[name])
        for name, spec in {**quoted, "at": at}.items()
        if spec is not None
    }
    share = _option("tolerance", tolerance)
    if not 0 <= share < 1:
        raise CaseError(f"tolerance = {tolerance!r} must be at least 0 and below 1, such as 0.02.")
    level = None if confidence is None else _option("confidence", confidence)
    if level is not None and not 0 < level < 1:
        raise CaseError(f"confidence = {confidence!r} must be between 0 and 1, such as 0.95.")
    law = None if g_at_r is None else _option("g_at_r", g_at_r)
    if law is not None and not 0 < law < math.inf:
        raise MassError(f"g_at_r = {g_at_r!r} must be positive: the thrust is off there.")
    r_au = math.exp(written["at"].log) if at is not None else None
    albedo = math.exp(written["albedo"].log) if "albedo" in written else None
    g = law or (None if r_au is None else r_au**-2)
    setting = Setting(r_au, g, level, species, albedo)
    web = _Web(_relations(law, at is not None, species, level), written, share)
    tests = web.tests()
    tested = {name for test in tests for name in test.quantities}
    used = {relation for test in tests for relation in test.relations}
    untested = [name for name in written if name not in tested]
    if law is not None and "thrust law" not in used:
        untested.append("g_at_r")
    if level is not None and _LIMIT not in used:
        untested.append("confidence")
    common: dict[str, Any] = {
        "quoted": {name: _plain(name, w.log) for name, w in written.items()},
        "tests": tests,
        "untested": tuple(untested),
        "exact": tuple(name for name, w in written.items() if w.exact and name in tested),
        "assumed": _assumed(used, law, r_au, species, share),
    }
    if not tests:
        return NumberAudit("untestable", **common)
    if all(test.holds for test in tests):
        doubts = _doubts(web, tests, setting)
        verdict = "cannot tell" if doubts else "sound in part" if untested else "sound"
        return NumberAudit(verdict, **common, doubts=doubts)
    changes = web.changes(setting)
    slip = bool(changes and len(changes[0].quantities) == 1 and changes[0].slips)
    return NumberAudit("slip" if slip else "inconsistent", **common, changes=changes)


def _doubts(web: "_Web", tests: tuple[RelationTest, ...], setting: Setting) -> tuple[str, ...]:
    """Usual slips under which every test would hold as well, each with the numbers it may be in;
    numbers that bounds alone are held to stay out."""
    tight = {name for test in tests if not test.slack for name in test.quantities}
    owners: dict[str, list[str]] = {}
    for name in (n for n in web.written if n in tight):
        for _, words in web.fitting((name,), setting):
            owners.setdefault(words, []).append(_label(name))
    told = [f"{words} ({' or '.join(found)})" for words, found in owners.items()]
    told += [
        f"bounds taken from one another that point the wrong way ({' and '.join(names)})"
        for names in dict.fromkeys(
            tuple(map(_label, t.bounds)) for t in tests if t.bound and not t.slack
        )
        if len(names) > 1
    ]
    return tuple(told)


def _option(name: str, spec: Any) -> float:
    """A pure number among the options, given as number or text."""
    try:
        if isinstance(spec, bool):
            raise TypeError
        return float(spec)
    except (TypeError, ValueError, OverflowError) as error:
        raise CaseError(f"{name} = {spec!r} must be a number without a unit.") from error


def _assumed(
    used: set[str], law: float | None, r_au: float | None, species: str, tolerance: float
) -> tuple[str, ...]:
    told = []
    if "molecular mass" in used:
        told.append(f"molecules of {species}")
    if "thrust law" in used and law is None and r_au is not None:
        told.append(f"a thrust that falls as r^-2, as no g_at_r was given for {r_au:.4g} au")
    if used and tolerance:
        told.append(f"{100 * tolerance:g} % forgiven beyond the digits")
    return tuple(told)


def _plain(name: str, log: float) -> float:
    return -5.0 * log / math.log(10.0) if name == "absolute_magnitude" else math.exp(log)


@dataclass(frozen=True)
class _Relation:
    """sum of power x ln(quantity) = constant."""

    name: str
    powers: Mapping[str, float]
    constant: float


def _relations(
    law: float | None, distance: bool, species: str, confidence: float | None
) -> tuple[_Relation, ...]:
    gravity = math.log(GM_KM3_S2["sun"] * 1e9 / AU_M**2)
    size = math.log(1e3 * ASTEROID_DIAMETER_KM)
    found = [
        _Relation("momentum balance", {"mass": 1, "local_acceleration": 1, "force": -1}, 0.0),
        _Relation(
            "recoil force", {"force": 1, "collimation": -1, "mass_loss": -1, "speed": -1}, 0.0
        ),
        _Relation("sphere", {"mass": 1, "density": -1, "diameter": -3}, math.log(math.pi / 6)),
        _Relation("diameter and radius", {"diameter": 1, "radius": -1}, math.log(2)),
        _Relation("velocity change", {"velocity_change": 1, "local_acceleration": -1}, 0.0),
        _Relation(
            "photometric size", {"diameter": 1, "absolute_magnitude": -1, "albedo": 0.5}, size
        ),
    ]
    if species != DUST:
        per_molecule = math.log(molecule_mass_kg(species))
        found.append(_Relation("molecular mass", {"mass_loss": 1, "rate": -1}, per_molecule))
    push = {"local_acceleration": 1.0, "acceleration": -1.0}
    if law is not None:
        found.append(_Relation("thrust law", push, math.log(law)))
    elif distance:
        found.append(_Relation("thrust law", {**push, "at": 2.0}, 0.0))
    if distance:
        found.append(
            _Relation(
                "solar gravity",
                {"local_acceleration": 1, "gravity_fraction": -1, "at": 2},
                gravity,
            )
        )
    if confidence is not None:
        z = math.log(float(ndtri(0.5 + confidence / 2)))
        found.append(_Relation(_LIMIT, {"acceleration": 1, "acceleration_sigma": -1}, z))
    return tuple(found)


class _Web:
    """The relations between some quoted numbers, and what follows from any part of them."""

    def __init__(
        self, relations: tuple[_Relation, ...], written: Mapping[str, Written], tolerance: float
    ) -> None:
        self.relations, self.written, self.tolerance = relations, written, tolerance
        self.names = sorted({n for r in relations for n in r.powers})
        bit = {name: 1 << i for i, name in enumerate(self.names)}
        self.bits = bit
        self.subsets = [
            subset
            for size in range(1, len(relations) + 1)
            for subset in itertools.combinations(relations, size)
        ]
        once, some = [], []
        for subset in self.subsets:
            seen = repeated = 0
            for relation in subset:
                mask = sum(bit[n] for n in relation.powers)
                repeated |= seen & mask
                seen |= mask
            once.append(seen & ~repeated)
            some.append(seen)
        self.once: NDArray[np.int64] = np.array(once, dtype=np.int64)
        self.some: NDArray[np.int64] = np.array(some, dtype=np.int64)
        self.sums: dict[tuple[int, int], RelationTest | None] = {}

    def tests(self, without: Iterable[str] = ()) -> tuple[RelationTest, ...]:
        """Every minimal combination of relations in which all quantities but quoted ones cancel;
        ``without`` are taken as not quoted."""
        kept = set(self.written) - set(without)
        hidden = sum(b for n, b in self.bits.items() if n not in kept)
        # a hidden quantity that stands in one relation alone cannot cancel; relations that share
        # none are tests by themselves
        likely = np.flatnonzero((self.once & hidden) == 0)
        found = []
        for i in likely:
            key = int(i), int(self.some[i]) & hidden
            if key not in self.sums:
                self.sums[key] = self._test(self.subsets[i], kept)
            test = self.sums[key]
            if test is not None:
                found.append(test)
        return tuple(found)

    def _test(self, subset: tuple[_Relation, ...], kept: set[str]) -> RelationTest | None:
        weights = _combination(subset, kept)
        if weights is None:
            return None
        sums: dict[str, float] = {}
        for weight, relation in zip(weights, subset, strict=True):
            for name, power in relation.powers.items():
                sums[name] = sums.get(name, 0.0) + weight * power
        powers = {n: float(p) for n, p in sums.items() if abs(p) > 1e-9 and n in kept}
        if not powers:
            return None
        scale = 1.0 / min(abs(p) for p in powers.values())
        powers = {n: scale * p for n, p in powers.items()}
        constant = scale * sum(w * r.constant for w, r in zip(weights, subset, strict=True))
        off = sum(p * self.written[n].log for n, p in powers.items()) - constant
        below, above = spread_allowed(
            [(p, self.written[n]) for n, p in powers.items()], self.tolerance
        )
        bounds = tuple(n for n in powers if self.written[n].bound)
        if any(relation.name == _LIMIT for relation in subset):
            # there the acceleration is the limit itself, not what lies below it
            bounds = tuple(n for n in bounds if n != "acceleration")
        pulls = {int(math.copysign(1, powers[n])) * self.written[n].bound for n in bounds}
        return RelationTest(
            tuple(r.name for r in subset),
            powers,
            _exp(off),
            _exp(-below),
            _exp(above),
            pulls.pop() if len(pulls) == 1 else 0,
            bounds,
        )

    def fitting(
        self, names: tuple[str, ...], setting: Setting, tens: bool = False
    ) -> list[tuple[float, str]]:
        """Usual slips of some numbers, one in each, under which every test holds: misfit and words,
        closest first; ``tens``: also nameless powers of ten."""
        tests = self.tests()
        lists = []
        for name in names:
            connected = {r for t in tests if name in t.quantities for r in t.relations}
            collimation = self.written.get("collimation")
            known = usual_slips(
                name, None if collimation is None else math.exp(collimation.log), setting, connected
            )
            lists.append(known + (powers_of_ten(known) if tens else []))
        powers = np.array([[t.powers.get(n, 0.0) for n in names] for t in tests])
        off, low, high = (np.log([getattr(t, k) for t in tests]) for k in ("ratio", "low", "high"))
        # a slip must explain the numbers at the edges of bounds, unless they were far from them
        low[[t.slack and t.bound > 0 for t in tests]] = -math.inf
        high[[t.slack and t.bound < 0 for t in tests]] = math.inf
        found: dict[str, float] = {}
        for combined in itertools.product(*lists):
            left = off - powers @ np.log([factor for factor, _ in combined])
            if np.all((left >= low) & (left <= high)):
                words = " and ".join(w for _, w in combined)
                miss = float(np.abs(left).max())
                found[words] = min(miss, found.get(words, math.inf))
        return sorted((miss, words) for words, miss in found.items())

    def changes(self, setting: Setting) -> tuple[Change, ...]:
        """Smallest sets of numbers whose change makes the rest agree, best first."""
        concerned = [n for n in self.written if any(n in t.quantities for t in self.tests())]
        for size in range(1, len(concerned) + 1):
            found = [
                self._change(names, setting)
                for names in itertools.combinations(concerned, size)
                if all(test.holds for test in self.tests(names))
            ]
            if found:
                return tuple(sorted(found, key=_rank)[:MOST_CHANGES])
        return ()

    def _change(self, names: tuple[str, ...], setting: Setting) -> Change:
        logs = self._solve(names)
        slips: list[str] = []
        if len(logs) == len(names) <= 2:
            slips = [words for _, words in self.fitting(names, setting, tens=True)[:3]]
        plausibility = 2 * bool(slips)
        for name, log in logs.items():
            if name in _PLAUSIBLE:
                low, high = _PLAUSIBLE[name]
                before, after = (_exp(x) for x in (self.written[name].log, log))
                plausibility += 2 * (low <= after <= high) - 2 * (low <= before <= high)
        needed = {
            n: _plain(n, min(max(log, -_LARGEST_LOG), _LARGEST_LOG)) for n, log in logs.items()
        }
        ratios = {
            n: _exp(self.written[n].log - log)
            if n != "absolute_magnitude"
            else _plain(n, self.written[n].log) - needed[n]
            for n, log in logs.items()
        }
        return Change(names, needed, ratios, tuple(slips), plausibility)

    def _solve(self, names: tuple[str, ...]) -> dict[str, float]:
        """Logarithms that the other numbers fix, by least squares; those not fixed are left out."""
        kept = {n: w.log for n, w in self.written.items() if n not in names}
        unknown = [n for n in self.names if n not in kept]
        matrix = np.array([[r.powers.get(n, 0.0) for n in unknown] for r in self.relations])
        right = np.array(
            [
                r.constant - sum(p * kept[n] for n, p in r.powers.items() if n in kept)
                for r in self.relations
            ]
        )
        _, singular, rows = np.linalg.svd(matrix)
        free = rows[int((singular > 1e-9).sum()) :]
        solution = np.linalg.lstsq(matrix, right, rcond=None)[0]
        return {
            n: float(solution[unknown.index(n)])
            for n in names
            if n in unknown and (not len(free) or np.abs(free[:, unknown.index(n)]).max() < 1e-9)
        }


def _combination(subset: tuple[_Relation, ...], kept: set[str]) -> NDArray[np.float64] | None:
    """Weights, all non-zero and unique up to scale, that cancel the unquoted quantities; else
    None."""
    hidden = sorted({n for r in subset for n in r.powers if n not in kept})
    if not hidden:
        return np.ones(1) if len(subset) == 1 else None
    matrix = np.array([[r.powers.get(n, 0.0) for r in subset] for n in hidden])
    _, singular, rows = np.linalg.svd(matrix)
    weights: NDArray[np.float64] = rows[-1]
    if int((singular > 1e-9).sum()) != len(subset) - 1 or np.abs(weights).min() < 1e-9:
        return None
    return weights / weights[0]


def _exp(log: float) -> float:
    """exp, held within the floating-point range."""
    return math.exp(min(max(log, -_LARGEST_LOG), _LARGEST_LOG))


def _amount_text(name: str, value: float) -> str:
    """A value in internal units, told in the unit of a bare number."""
    outside, inside = UNITS[name]
    unit = (
        "m/s per day"
        if name == "velocity_change"
        else str(outside).replace(" ", "").replace("AU", "au")
    )
    return f"{number_text(value / float(outside.to(inside)))} {unit}".rstrip()


def _label(name: str) -> str:
    return _LABELS.get(name, name.replace("_", " "))
