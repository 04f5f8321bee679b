"""Outgassing budgets: production rates, speeds and collimation -> force on the nucleus.

May import: constants, errors, and from its own room distributions and notebook.

Force of one species at the distance r of its measurement: F = zeta Q m v (N), with Q molecules/s
of mass m (or a mass-loss rate directly), v the outflow speed and zeta the collimation: the net
momentum as a fraction of what the same gas would carry in one perfect beam. zeta = 0 isotropic,
1/2 a uniform hemisphere, 2/3 a hemisphere with cosine weighting, 1 a beam (plain geometry).
"""

import difflib
import math
import re
import warnings
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Literal, TypeAlias

import astropy.units as u
import numpy as np
from astropy.units import Quantity

from ngbound.constants import ATOMIC_MASS_KG, BOLTZMANN_J_K
from ngbound.errors import CaseError, NgboundWarning

from .distributions import (
    AtMost,
    Distribution,
    DistributionSpec,
    Fixed,
    LogNormal,
    Normal,
    SplitNormal,
    Triangular,
    number_text,
    parse_distribution,
)
from .notebook import as_html

AVOGADRO = 6.02214076e23
"""Molecules per mole: SI, exact."""

MOLAR_MASS_G = {
    "H2O": 18.01528,
    "CO2": 44.0095,
    "CO": 28.0101,
    "OH": 17.00734,
    "N2": 28.0134,
    "H2": 2.01588,
    "O2": 31.9988,
    "CH4": 16.0425,
    "NH3": 17.0305,
    "HCN": 27.0253,
    "CN": 26.0174,
    "CH3OH": 32.0419,
    "C2H6": 30.069,
    "H2CO": 30.026,
    "CS": 44.076,
    "C2": 24.022,
    "Ni": 58.6934,
}
"""Molar masses in g/mol: IUPAC standard atomic weights, from memory."""

DUST = "dust"


@dataclass(frozen=True)
class SpeedLaw:
    """Outflow speed v = v1_km_s * r^-exponent (r in au), uncertain by ``factor`` (one sigma).

    The factor is a choice of this program, not of the source: measured parent speeds near 1 au
    scatter between 0.6 and 1.8 km/s, about 1 being typical (textbook figure), about 20-30 % around
    any one law.
    """

    name: str
    v1_km_s: float
    exponent: float
    source: str
    status: str
    factor: float = 1.2

    def speed_km_s(self, r_au: float) -> float:
        """Speed in km/s at ``r_au``."""
        return self.v1_km_s * r_au**-self.exponent

    def __str__(self) -> str:
        return (
            f"{self.v1_km_s:g} km/s r^-{self.exponent:g} ({self.source}; {self.status}), */ "
            f"{self.factor:g}"
        )


SPEED_LAWS = {
    law.name: law
    for law in (
        SpeedLaw(
            "delsemme",
            0.85,
            0.5,
            "A. H. Delsemme 1982, in Comets (Tucson)",
            "as cited elsewhere; used so by A. L. Cochran & D. G. Schleicher 1993 (from memory)",
        ),
        SpeedLaw("budzien", 0.8, 0.6, "S. A. Budzien et al. 1994, Icarus 107, 164", "from memory"),
        SpeedLaw(
            "hale-bopp",
            1.125,
            0.42,
            "N. Biver et al. 2002, Earth Moon Planets 90, 5: a very productive comet",
            "from memory",
        ),
        SpeedLaw(
            "thermal-half",
            0.308,
            0.25,
            "half the mean thermal speed of water at 323 K r^-0.5, after A. Sosa & J. A. Fernandez "
            "2009, MNRAS 393, 192",
            "as cited by another code; temperature not checked in the paper",
        ),
    )
}
"""Published outflow laws by name."""

DEFAULT_SPEED_LAW = SPEED_LAWS["delsemme"]
DEFAULT_COLLIMATION = Triangular(0.2, 0.5, 0.7)
"""Default prior of the collimation: most likely 0.5, range 0.2 to 0.7."""
DEFAULT_COLLIMATION_SOURCE = (
    "range of momentum-transfer factors in the literature (J. F. Crifo 1987; H. Rickman 1989; A. "
    "Sosa & J. A. Fernandez 2009; N. Attree et al. 2019), from memory"
)

SpeedSpec: TypeAlias = SpeedLaw | DistributionSpec | None
LimitsAs: TypeAlias = Literal["zero", "limit", "uniform"]
_KIND_LABELS = {"rate": "production rate", "speed": "outflow speed", "collimation": "collimation"}


_WORDS = {
    "water": "H2O",
    "carbon dioxide": "CO2",
    "carbon monoxide": "CO",
    "hydroxyl": "OH",
    "nitrogen": "N2",
    "hydrogen": "H2",
    "oxygen": "O2",
    "methane": "CH4",
    "ammonia": "NH3",
    "methanol": "CH3OH",
    "ethane": "C2H6",
    "formaldehyde": "H2CO",
    "nickel": "Ni",
}


def _meant(species: str) -> str:
    """The known species that a misspelt one stands for; "" if none is near."""
    if species.casefold() in _WORDS:
        return _WORDS[species.casefold()]
    plain = species.casefold().replace("0", "o")
    alike = [known for known in MOLAR_MASS_G if known.casefold() == plain]
    return next(iter(alike or difflib.get_close_matches(species, MOLAR_MASS_G, 1, 0.3)), "")


def molecule_mass_kg(species: str) -> float:
    """Mass of one molecule in kg; CaseError for an unknown species."""
    if species not in MOLAR_MASS_G:
        meant = _meant(species)
        hint = f" Did you mean {meant!r}?" if meant else ""
        raise CaseError(
            f"Species {species!r} is not known.{hint} Known: {', '.join(MOLAR_MASS_G)}; for "
            "anything else give the rate in kg/s.",
            species=species,
        )
    return MOLAR_MASS_G[species] * ATOMIC_MASS_KG


def mass_loss_rate(rate_per_s: float, species: str = "H2O") -> Quantity:
    """Mass-loss rate (kg/s) of ``rate_per_s`` molecules of a species per second."""
    return rate_per_s * molecule_mass_kg(species) * u.kg / u.s


def thermal_speed(species: str, temperature_k: float, factor: float = 1.0) -> Quantity:
    """``factor`` times the mean thermal speed sqrt(8 k T / (pi m)), in m/s (kinetic theory).

    A. P. Jackson & S. J. Desch 2021, JGR Planets 126, e06706, take 0.45 of it with a recoil factor
    of 1/3.
    """
    mean = math.sqrt(8 * BOLTZMANN_J_K * temperature_k / (math.pi * molecule_mass_kg(species)))
    return factor * mean * u.m / u.s


@dataclass(frozen=True)
class Emission:
    """One species measured at one heliocentric distance.

    Parameters
    ----------
    species : str
        A key of `MOLAR_MASS_G`, or "dust", or any name if the rate is in kg/s.
    rate : Distribution
        In molecules/s, or in kg/s if ``rate_in_kg``.
    rate_in_kg : bool
    speed : SpeedLaw or Distribution
        Law, or measured speed in m/s.
    collimation : Distribution
        Between 0 and 1.
    at_au : float
        Heliocentric distance of the measurement, au.
    """

    species: str
    rate: Distribution
    rate_in_kg: bool
    speed: SpeedLaw | Distribution
    collimation: Distribution
    at_au: float

    @property
    def kg_per_count(self) -> float:
        """Mass in kg of one unit of ``rate``."""
        return 1.0 if self.rate_in_kg else molecule_mass_kg(self.species)

    @property
    def rate_unit(self) -> str:
        """Unit of ``rate`` as text."""
        return "kg/s" if self.rate_in_kg else "molecules/s"

    @property
    def speed_is_law(self) -> bool:
        """True where the speed comes from a law, so that the input drawn is a factor on it."""
        return isinstance(self.speed, SpeedLaw)

    @property
    def median_speed_m_s(self) -> float:
        """Median outflow speed at the distance of the measurement, m/s."""
        if isinstance(self.speed, SpeedLaw):
            return 1e3 * self.speed.speed_km_s(self.at_au)
        return self.speed.median

    @property
    def speed_words(self) -> str:
        """The speed with its uncertainty and its law."""
        if isinstance(self.speed, SpeedLaw):
            median = number_text(self.median_speed_m_s)
            return f"{median} m/s */ {self.speed.factor:g} ({self.speed.name} law)"
        return f"{self.speed} m/s"

    @property
    def rate_words(self) -> str:
        """The rate with its uncertainty, its unit and, of an upper limit, its confidence."""
        if isinstance(self.rate, AtMost) and self.rate.confidence is not None:
            limit = AtMost(self.rate.limit)
            return f"{limit} {self.rate_unit} ({100 * self.rate.confidence:g} %)"
        return f"{self.rate} {self.rate_unit}"

    def __str__(self) -> str:
        return (
            f"{self.species}: {self.rate_words} at {self.at_au:g} au, speed "
            f"{self.speed_words}, collimation {self.collimation}"
        )

    def _repr_html_(self) -> str:
        return as_html([f"{self}."])

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        speed: dict[str, Any]
        if isinstance(self.speed, SpeedLaw):
            speed = {
                "law": self.speed.name,
                "v1_km_s": self.speed.v1_km_s,
                "exponent": self.speed.exponent,
                "factor": self.speed.factor,
                "source": self.speed.source,
                "status": self.speed.status,
            }
        else:
            speed = {**self.speed.to_dict(), "unit": "m/s"}
        return {
            "species": self.species,
            "rate": {**self.rate.to_dict(), "unit": self.rate_unit},
            "speed": speed,
            "collimation": self.collimation.to_dict(),
            "at_au": self.at_au,
            "median_speed_m_s": self.median_speed_m_s,
        }


@dataclass(frozen=True, eq=False)
class BudgetDraws:
    """Monte Carlo draws of a budget: one row an emission, one column a draw.

    ``force_n`` (m, n) N, ``mass_loss_kg_s`` (m, n) kg/s, ``inputs`` each uncertain input by name,
    (n,).
    """

    emissions: tuple[Emission, ...]
    force_n: np.ndarray
    mass_loss_kg_s: np.ndarray
    inputs: dict[str, np.ndarray] = field(repr=False)

    @property
    def force(self) -> Quantity:
        """Total force, shape (n,) N; only where every emission was measured at one distance."""
        _one_distance(self.emissions)
        return self.force_n.sum(axis=0) * u.N

    @property
    def mass_loss(self) -> Quantity:
        """Total mass-loss rate, shape (n,) kg/s; only where every emission was measured at one
        distance."""
        _one_distance(self.emissions)
        return self.mass_loss_kg_s.sum(axis=0) * u.kg / u.s


@dataclass(frozen=True, init=False)
class Outgassing:
    """What leaves the nucleus: one or several species, each at the distance where it was measured.

    Parameters
    ----------
    rate : spec, mapping or sequence of Emission
        Rate in molecules/s or kg/s: a Quantity, a text with unit ("(1.0 +- 0.2)e27 molecules/s",
        "< 5 kg/s"), a Distribution in molecules/s, or a table (see `parse_distribution`); or one
        such per species, ``{"H2O": .., "CO": ..}``; or ready `Emission` objects; or a list of
        rates with a list ``at`` of equal length (one species at several distances). A bare number
        is molecules/s.
    speed : spec, SpeedLaw, name of a law, or mapping by species, optional
        Measured outflow speed (default unit km/s), or a key of `SPEED_LAWS`. Default: 0.85 km/s
        r^-0.5.
    collimation : spec or mapping by species, optional
        Default `DEFAULT_COLLIMATION`.
    at : float, Quantity or sequence
        Heliocentric distance of the measurement, au.
    species : str
        Used where ``rate`` does not name the species.

    Notes
    -----
    Inputs are independent, except that one assumption is one draw: emissions that share a
    collimation prior, or a speed law, share the draw of it (the same nucleus), whatever their
    species. Rates and measured speeds are drawn one by one.
    """

    emissions: tuple[Emission, ...]

    def __init__(
        self,
        rate: Any,
        speed: Any = None,
        collimation: Any = None,
        at: Any = None,
        species: str = "H2O",
    ) -> None:
        if (
            isinstance(rate, Sequence)
            and not isinstance(rate, str)
            and len(rate)
            and all(isinstance(item, Emission) for item in rate)
        ):
            emissions = tuple(rate)
        else:
            emissions = tuple(
                _emission(
                    name, one, _for_species(speed, name), _for_species(collimation, name), r_au
                )
                for name, one, r_au in _rates(rate, at, species)
            )
        object.__setattr__(self, "emissions", emissions)
        for emission in emissions:
            if emission.species == "OH":
                warnings.warn(
                    "The OH rate is used as if OH left the nucleus; water is its parent: give the "
                    "H2O rate instead (about 1.1 times Q(OH), from memory).",
                    NgboundWarning,
                    stacklevel=2,
                )

    @classmethod
    def from_dict(cls, table: Mapping[str, Any]) -> "Outgassing":
        """From a case-file table with the keys of the constructor, and ``more``: a list of such
        tables to add."""
        allowed = {"rate", "speed", "collimation", "at", "species", "more"}
        for key in table:
            if key not in allowed:
                near = difflib.get_close_matches(key, sorted(allowed), 1)
                hint = (
                    f" Did you mean {near[0]!r}?"
                    if near
                    else f" Allowed: {', '.join(sorted(allowed))}."
                )
                raise CaseError(f"The outgassing table has the unknown key {key!r}.{hint}", key=key)
        if "rate" not in table:
            raise CaseError(
                'The outgassing table needs a rate, for instance rate = "(1.0 +- 0.2)e27 '
                'molecules/s".'
            )
        own = cls(**{k: v for k, v in table.items() if k != "more"})
        added = [cls.from_dict(other).emissions for other in table.get("more", ())]
        return cls([*own.emissions, *(emission for group in added for emission in group)])

    @property
    def distances_au(self) -> tuple[float, ...]:
        """Distinct heliocentric distances of the measurements, ascending."""
        return tuple(sorted({e.at_au for e in self.emissions}))

    def inputs(self) -> dict[str, Distribution]:
        """Every input by name; `Fixed` ones included. Rates that are upper limits keep their
        `AtMost`."""
        return {name: found for names in self._wiring() for name, found in names.values()}

    def owner(self, name: str) -> tuple[Emission, str]:
        """The emission an input belongs to, and its kind: "rate", "speed" or "collimation"."""
        for emission, names in zip(self.emissions, self._wiring(), strict=True):
            for kind, (input_name, _) in names.items():
                if input_name == name:
                    return emission, kind
        raise CaseError(f"The budget has no input {name!r}; it has {', '.join(self.inputs())}.")

    def _wiring(self) -> list[dict[str, tuple[str, Distribution]]]:
        """For each emission: kind -> (input name, distribution)."""
        keys = [
            {
                "rate": (number, emission.rate),
                "speed": (emission.speed if emission.speed_is_law else number, _factor(emission)),
                "collimation": (emission.collimation, emission.collimation),
            }
            for number, emission in enumerate(self.emissions)
        ]
        names: dict[tuple[str, Any], str] = {}
        for number, specs in enumerate(keys):
            for kind, (identity, _) in specs.items():
                if (kind, identity) not in names:
                    users = [
                        e
                        for e, other in zip(self.emissions, keys, strict=True)
                        if other[kind][0] == identity
                    ]
                    rivals = [e for e in self.emissions if e not in users]
                    names[kind, identity] = _input_name(
                        kind, self.emissions[number], users, rivals, set(names.values())
                    )
        return [
            {kind: (names[kind, identity], found) for kind, (identity, found) in specs.items()}
            for specs in keys
        ]

    def evaluate(self, inputs: Mapping[str, np.ndarray]) -> tuple[np.ndarray, np.ndarray]:
        """Force (m, n) N and mass-loss rate (m, n) kg/s of the m emissions for given values of the
        inputs, (n,)."""
        forces, losses = [], []
        for emission, names in zip(self.emissions, self._wiring(), strict=True):
            rate, speed, zeta = (
                inputs[names[kind][0]] for kind in ("rate", "speed", "collimation")
            )
            if isinstance(emission.speed, SpeedLaw):
                speed = speed * emission.median_speed_m_s
            loss = rate * emission.kg_per_count
            losses.append(loss)
            forces.append(zeta * loss * speed)
        return np.array(forces), np.array(losses)

    def draw(self, rng: np.random.Generator, n: int, limits_as: LimitsAs = "zero") -> BudgetDraws:
        """``n`` draws of force and mass loss.

        ``limits_as`` says how a rate known only as an upper limit counts: "zero" (safe for a lower
        bound on the mass), "limit" (at the limit: safe for an upper bound), "uniform" between.
        """
        values = {
            name: _limited(found, limits_as, rng.random(n)) for name, found in self.inputs().items()
        }
        force, loss = self.evaluate(values)
        return BudgetDraws(self.emissions, force, loss, values)

    def force(self, limits_as: LimitsAs = "zero") -> Quantity:
        """Force in N with every input at its median: a scalar, or one value per `distances_au` if
        there are several."""
        return self._central(limits_as)[0] * u.N

    def mass_loss(self, limits_as: LimitsAs = "zero") -> Quantity:
        """Mass-loss rate in kg/s with every input at its median; shape as `force`."""
        return self._central(limits_as)[1] * u.kg / u.s

    def _central(self, limits_as: LimitsAs) -> tuple[Any, Any]:
        half = np.full(1, 0.5)
        found = self.evaluate({k: _limited(v, limits_as, half) for k, v in self.inputs().items()})
        distances = self.distances_au
        sums = tuple(
            np.array(
                [
                    sum(row[0] for row, e in zip(rows, self.emissions, strict=True) if e.at_au == r)
                    for r in distances
                ]
            )
            for rows in found
        )
        return (sums[0][0], sums[1][0]) if len(distances) == 1 else (sums[0], sums[1])

    def assumptions(self) -> tuple[str, ...]:
        """Which inputs rest on a default or a law, each with its source and status."""
        lines: dict[str, dict[str, None]] = {}
        for emission in self.emissions:
            if isinstance(emission.speed, SpeedLaw):
                lines.setdefault(f"speed: {emission.speed}", {})[emission.species] = None
            if emission.collimation == DEFAULT_COLLIMATION:
                text = f"collimation: {emission.collimation}, {DEFAULT_COLLIMATION_SOURCE}"
                lines.setdefault(text, {})[emission.species] = None
            if isinstance(emission.rate, AtMost):
                text = "rate: an upper limit, which counts as zero in a lower mass bound"
                lines.setdefault(text, {})[emission.species] = None
        return tuple(f"{', '.join(species)} {text}" for text, species in lines.items())

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        return {
            "emissions": [e.to_dict() for e in self.emissions],
            "assumptions": list(self.assumptions()),
        }

    def __str__(self) -> str:
        return "\n".join(str(e) for e in self.emissions)

    def _repr_html_(self) -> str:
        rows = [["species", "rate", "unit", "at (au)", "speed", "collimation"]]
        for e in self.emissions:
            cells = [e.species, str(e.rate), e.rate_unit, f"{e.at_au:g}", e.speed_words]
            rows.append([*cells, str(e.collimation)])
        return as_html([], rows, [f"assumed: {text}" for text in self.assumptions()])


def _limited(found: Distribution, limits_as: LimitsAs, u01: np.ndarray) -> np.ndarray:
    if isinstance(found, AtMost) and limits_as != "uniform":
        return np.full(np.shape(u01), 0.0 if limits_as == "zero" else found.limit)
    return found.ppf(u01)


def _one_distance(emissions: tuple[Emission, ...]) -> None:
    distances = sorted({e.at_au for e in emissions})
    if len(distances) > 1:
        raise CaseError(
            "The budget was measured at several distances ("
            + ", ".join(f"{r:g}" for r in distances)
            + " au), so it has no single force; use the rows of force_n, or mass_bound."
        )


def _factor(emission: Emission) -> Distribution:
    """What is drawn for the speed: the speed itself in m/s, or the factor on a law."""
    if not isinstance(emission.speed, SpeedLaw):
        return emission.speed
    return LogNormal(1.0, emission.speed.factor) if emission.speed.factor > 1 else Fixed(1.0)


def _input_name(
    kind: str, emission: Emission, users: list[Emission], rivals: list[Emission], taken: set[str]
) -> str:
    name = _KIND_LABELS[kind]
    if rivals and len({e.species for e in users}) == 1:
        if any(e.species != emission.species for e in rivals):
            name += f" ({emission.species})"
        if any(e.species == emission.species for e in rivals):
            name += f" at {emission.at_au:g} au"
    number, base = 2, name
    while name in taken:
        name, number = f"{base} #{number}", number + 1
    return name


def _for_species(spec: Any, species: str) -> Any:
    if isinstance(spec, Mapping) and not set(spec) & {"value", "low", "limit", "distribution"}:
        unknown = [
            key for key in spec if key not in MOLAR_MASS_G and key != DUST and key != species
        ]
        if unknown:
            raise CaseError(
                f"{unknown[0]!r} is neither a key of a distribution nor a species; species known: "
                f"{', '.join(MOLAR_MASS_G)}, {DUST}."
            )
        return spec.get(species)
    return spec


def _rates(rate: Any, at: Any, species: str) -> list[tuple[str, Any, float]]:
    if at is None:
        raise CaseError(
            "An outgassing rate needs `at`: the heliocentric distance in au at which it was "
            "measured."
        )
    by_species = isinstance(rate, Mapping) and not set(rate) & {
        "value",
        "low",
        "limit",
        "distribution",
    }
    if by_species:
        if not rate:
            raise CaseError(
                "The outgassing budget names no species; give for instance "
                '{"H2O": "1e27 molecules/s"}.'
            )
        return [
            item
            for name, one in rate.items()
            for item in _rates(one, _for_distance(at, name), name)
        ]
    if isinstance(rate, Sequence) and not isinstance(rate, str):
        if not isinstance(at, Sequence) or isinstance(at, str) or len(at) != len(rate):
            raise CaseError(f"{len(rate)} rates need as many distances `at`, one for each.")
        return [(species, one, _distance_au(r)) for one, r in zip(rate, at, strict=True)]
    return [(species, rate, _distance_au(at))]


def _for_distance(at: Any, species: str) -> Any:
    if isinstance(at, Mapping):
        if species not in at:
            raise CaseError(
                f"`at` gives no distance for {species!r}; it names {', '.join(map(str, at))}."
            )
        return at[species]
    return at


def _distance_au(at: Any) -> float:
    found, unit = parse_distribution(at, "at", lower=0.0)
    if not isinstance(found, Fixed):
        raise CaseError(f"at = {at!r} must be one heliocentric distance without an uncertainty.")
    return found.value * _unit_factor(unit or "au", u.au, "at", "au or km")


def _unit_factor(unit: str, target: u.UnitBase, name: str, allowed: str) -> float:
    try:
        return float(u.Unit(unit).to(target))
    except (ValueError, TypeError, u.UnitConversionError) as error:
        raise CaseError(f"{name} has the unit {unit!r}; allowed: {allowed}.", unit=unit) from error


def _rate_factor(unit: str) -> tuple[float, bool]:
    """(factor, is it a mass rate) to molecules/s or kg/s."""
    text = re.sub(r"\b(molecules?|molec\.?|mols)(?=\W|$)", "", unit, flags=re.IGNORECASE).strip()
    text = re.sub(r"^/\s*", "1/", text) or "1/s"
    try:
        parsed = u.Unit(text)
    except (ValueError, TypeError) as error:
        raise CaseError(
            f"rate has the unit {unit!r}; allowed: molecules/s, 1/s, mol/s, kg/s, g/s, t/d.",
            unit=unit,
        ) from error
    for target, extra, mass in (
        (u.kg / u.s, 1.0, True),
        (1 / u.s, 1.0, False),
        (u.mol / u.s, AVOGADRO, False),
    ):
        if parsed.is_equivalent(target):
            return float(parsed.to(target)) * extra, mass
    raise CaseError(
        f"rate has the unit {unit!r}; allowed: molecules/s, 1/s, mol/s, kg/s, g/s, t/d.", unit=unit
    )


def _emission(
    species: str, rate: Any, speed: SpeedSpec, collimation: Any, at_au: float
) -> Emission:
    found, unit = parse_distribution(rate, f"{species} rate", lower=0.0)
    factor, in_kg = _rate_factor(unit) if unit else (1.0, False)
    if not in_kg:
        if species == DUST:
            raise CaseError(
                f'A dust rate must be a mass rate such as "5 kg/s"; it was given as {rate!r}.'
            )
        molecule_mass_kg(species)
    if factor != 1.0:
        found = found.scaled(factor)
    limit_per_s = found.limit if isinstance(found, AtMost) else found.median
    if not in_kg and limit_per_s < 1e15:
        warnings.warn(
            f"The {species} rate of {limit_per_s:.3g} molecules/s is under a microgram per second; "
            "was kg/s meant? Write the unit beside the number.",
            NgboundWarning,
            stacklevel=4,
        )
    return Emission(
        species, found, in_kg, _speed(speed, species), _collimation(collimation, species), at_au
    )


def _speed(speed: SpeedSpec, species: str) -> SpeedLaw | Distribution:
    if isinstance(speed, SpeedLaw):
        return speed
    if speed is None:
        if species == DUST:
            raise CaseError(
                "Dust needs its own speed: the gas laws do not hold for it. Give for instance "
                'speed = {dust = "3 to 30 m/s"}.'
            )
        return DEFAULT_SPEED_LAW
    if isinstance(speed, str) and speed in SPEED_LAWS:
        return SPEED_LAWS[speed]
    if isinstance(speed, str) and not re.search(r"\d", speed):
        near = difflib.get_close_matches(speed, SPEED_LAWS, 1)
        hint = f" Did you mean {near[0]!r}?" if near else ""
        raise CaseError(
            f"speed = {speed!r} is neither a speed nor a law; laws: {', '.join(SPEED_LAWS)}.{hint}"
        )
    found, unit = parse_distribution(speed, f"{species} speed", lower=0.0)
    found = found.scaled(_unit_factor(unit or "km/s", u.m / u.s, f"{species} speed", "km/s, m/s"))
    if found.median > 1e4:
        raise CaseError(
            f"{species} speed = {found.median:g} m/s is above 10 km/s, faster than any gas leaves "
            "a comet; "
            'a bare number means km/s: write "800 m/s" or 0.8.',
            value=found.median,
        )
    return found


def _collimation(collimation: Any, species: str) -> Distribution:
    if collimation is None:
        return DEFAULT_COLLIMATION
    found, unit = parse_distribution(
        collimation, f"{species} collimation", lower=0.0, upper=1.0 + 1e-12
    )
    if unit:
        raise CaseError(f"{species} collimation has no unit, but {unit!r} was given.")
    if isinstance(found, (Normal, SplitNormal)) and not 0 < found.median <= 1:
        raise CaseError(f"{species} collimation = {found} must lie between 0 and 1.")
    return found
