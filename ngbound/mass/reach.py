"""The inverse question: which production rate would this arc have revealed, for a given body?

May import: constants, errors, rounding, limits, and from its own room distributions, notebook,
outgassing, size and sublimation.

Q_det(r) = M A_det g(r) / (zeta m v(r)), with M = pi/6 rho D^3. A sphere of exposed ice gives at
most Q_full(r) = pi D^2 Z(r), with Z the mean flux of the energy balance. As Q_det grows with D^3
and Q_full with D^2, there is one diameter at which they meet: any larger body would have kept its
thrust hidden even if all its surface sublimated.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import astropy.units as u
import numpy as np
from astropy.units import Quantity

from ngbound.constants import AU_D2_TO_M_S2
from ngbound.errors import CaseError, MassError
from ngbound.limits import DetectionThreshold
from ngbound.rounding import length_text, only_along, percent, rounded

from .distributions import AtMost, Distribution, DistributionSpec, Fixed
from .notebook import as_columns, as_html
from .outgassing import MOLAR_MASS_G, Emission, Outgassing, molecule_mass_kg
from .size import (
    KnownSize,
    MeasuredDiameter,
    Photometry,
    bulk_density,
    size_words,
    sphere_mass_kg,
)
from .sublimation import ICES, largest_rate

AU_D2 = u.au / u.day**2
DEFAULT_SPECIES = ("H2O", "CO2", "CO")
DEFAULT_DIAMETERS_M = (10.0, 30.0, 100.0, 300.0, 1000.0, 3000.0, 10_000.0, 30_000.0)


@dataclass(frozen=True)
class RevealedRate:
    """Production rate that would have lifted the thrust to the detection threshold.

    Attributes
    ----------
    rate : Quantity, s^-1, or None
        Median; None for a species given in kg/s only.
    rate_low, rate_high : Quantity or None
        Central interval at ``confidence``, from density, size, speed and collimation.
    mass_loss, mass_loss_low, mass_loss_high : Quantity, kg/s
    full_rate : Quantity, s^-1, or None
        Of a sphere of the median diameter, wholly covered with the ice.
    share : float or None
        ``rate`` over ``full_rate``, median; above 1 the arc says nothing of such a body.
    false_alarm, power : float or None
        Of the threshold, where it carries them.
    """

    species: str
    at_au: float
    rate: Quantity | None
    rate_low: Quantity | None
    rate_high: Quantity | None
    mass_loss: Quantity
    mass_loss_low: Quantity
    mass_loss_high: Quantity
    confidence: float
    diameter: Distribution
    density: Distribution
    threshold: Quantity
    full_rate: Quantity | None = None
    share: float | None = None
    false_alarm: float | None = None
    power: float | None = None
    name: str = ""

    @property
    def body(self) -> str:
        """Size and density in words."""
        name = self.name or "diameter"
        return f"{name} {size_words(self.diameter)} and bulk density {self.density} kg/m3"

    @property
    def where(self) -> str:
        """Species and distance in words."""
        return f"{self.species} at {self.at_au:.3g} au"

    def rates(self) -> tuple[float, float, float]:
        """Median and central interval, molecules/s, or kg/s where there is no molecular mass."""
        found = (self.rate, self.rate_low, self.rate_high)
        if self.rate is None:
            found = (self.mass_loss, self.mass_loss_low, self.mass_loss_high)
        middle, low, high = (math.nan if q is None else float(q.value) for q in found)
        return middle, low, high

    def rate_words(self) -> str:
        """The median rate with its unit, rounded up, and its interval, rounded outward."""
        unit = "kg/s" if self.rate is None else "molecules/s"
        middle, low, high = self.rates()
        return (
            f"{rounded(middle, 2, outward='up')} ({rounded(low, 2, outward='down')} to "
            f"{rounded(high, 2, outward='up')}) {unit}"
        )

    def sentence(self) -> str:
        """The rate in words; rounded up, its interval outward."""
        beside = ""
        if self.rate is not None:
            beside = f"; {rounded(float(self.mass_loss.value), 2, outward='up')} kg/s"
        chance = f" with probability {percent(self.power)}" if self.power is not None else ""
        text = (
            f"A body of {self.body} would have shown a thrust{chance} if it lost more than about "
            f"{self.rate_words()} of {self.where} ({percent(self.confidence)} interval{beside})"
        )
        if self.share is not None:
            text += (
                f", {_share_text(self.share)} of what its whole surface could give"
                if self.share <= 1
                else ", more than its whole surface could give: its outgassing would have stayed "
                "unseen at any rate"
            )
        return text + "."

    def __str__(self) -> str:
        return self.sentence()

    def _repr_html_(self) -> str:
        return as_html([self.sentence()])

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""

        def number(q: Quantity | None) -> float | None:
            return None if q is None else float(q.value)

        return {
            "species": self.species,
            "at_au": self.at_au,
            "rate_per_s": number(self.rate),
            "rate_low_per_s": number(self.rate_low),
            "rate_high_per_s": number(self.rate_high),
            "mass_loss_kg_s": number(self.mass_loss),
            "mass_loss_low_kg_s": number(self.mass_loss_low),
            "mass_loss_high_kg_s": number(self.mass_loss_high),
            "confidence": self.confidence,
            "diameter_m": self.diameter.to_dict(),
            "density_kg_m3": self.density.to_dict(),
            "threshold_au_d2": number(self.threshold),
            "full_rate_per_s": number(self.full_rate),
            "share_of_full": self.share,
            "false_alarm": self.false_alarm,
            "power": self.power,
            "sentence": self.sentence(),
        }


@dataclass(frozen=True)
class ReachRow:
    """One species at one distance: the rate revealed, over diameters.

    Attributes
    ----------
    species : str
    at_au, g : float
        Distance at which the rates hold, au, and the thrust law there.
    unit : str
        "molecules/s" or "kg/s".
    diameter_m : (n,) tuple
    rate, rate_low, rate_high : (n,) tuples
        Median and central interval, for the direction that the threshold is of.
    full_rate : (n,) tuple or None
        What a sphere wholly covered with the ice gives; None for a species that is no ice here.
    largest, largest_low, largest_high : float or None
        Diameter (m) above which even such a sphere would not have been revealed; with its interval.
    revealed : RevealedRate or None
        For the size given.
    measured : str
        The rate measured, or its upper limit, in words; "" if none was given.
    measured_rate : float or None
        Its median, or the limit, in ``unit``.
    """

    species: str
    at_au: float
    g: float
    unit: str
    diameter_m: tuple[float, ...]
    rate: tuple[float, ...]
    rate_low: tuple[float, ...]
    rate_high: tuple[float, ...]
    full_rate: tuple[float, ...] | None
    largest: float | None
    largest_low: float | None
    largest_high: float | None
    revealed: RevealedRate | None = None
    measured: str = ""
    measured_rate: float | None = None

    @property
    def name(self) -> str:
        """Species and distance in words."""
        return f"{self.species} at {self.at_au:.3g} au"

    def largest_words(self) -> str:
        """The diameter up to which a wholly active body would have been revealed; "" if unknown."""
        if self.largest is None or self.largest_low is None or self.largest_high is None:
            return ""
        return (
            f"{length_text(self.largest)} ({length_text(self.largest_low)} to "
            f"{length_text(self.largest_high, outward='up')}) for {self.name}"
        )

    def cells(self) -> list[tuple[float, float, float, float, float | None]]:
        """Diameter, rate, low, high and full rate: for the size given, else over diameters."""
        one = self.revealed
        if one is None:
            full = self.full_rate or (None,) * len(self.diameter_m)
            return list(
                zip(self.diameter_m, self.rate, self.rate_low, self.rate_high, full, strict=True)
            )
        rates = one.rates()
        return [
            (
                one.diameter.median,
                *rates,
                None if one.full_rate is None else float(one.full_rate.value),
            )
        ]

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record."""
        known = {k: list(v) if isinstance(v, tuple) else v for k, v in vars(self).items()}
        return {**known, "revealed": None if self.revealed is None else self.revealed.to_dict()}


@dataclass(frozen=True)
class Reach:
    """What outgassing this arc would have revealed.

    Attributes
    ----------
    threshold : Quantity, au/d2
        Thrust at g = 1 that would have been detected, in the direction the arc sees worst.
    radial_threshold : Quantity or None
        The same of a radial thrust; all rates scale with it.
    false_alarm, power : float or None
        Of the threshold.
    density : Distribution, kg/m3
    confidence : float
        Of the intervals.
    rows : tuple of ReachRow
    assumptions : tuple of str
    components : str
        Letters of the thrust components that the threshold tests; "" where that is not known.
    """

    threshold: Quantity
    radial_threshold: Quantity | None
    false_alarm: float | None
    power: float | None
    density: Distribution
    confidence: float
    rows: tuple[ReachRow, ...]
    assumptions: tuple[str, ...]
    components: str = ""

    @property
    def radial_share(self) -> float | None:
        """Rates if the thrust is radial, as a share of those in the worst direction."""
        if self.radial_threshold is None:
            return None
        return float((self.radial_threshold / self.threshold).value)

    def sentence(self) -> str:
        """The reach in words: rates for the size given, and up to which size it reaches at all."""
        along, whatever = only_along(self.components), "whatever the direction of the thrust"
        test = "" if self.power is None else f" with probability {percent(self.power)}"
        if self.false_alarm is not None:
            test += f" (false-alarm rate {percent(self.false_alarm)})"
        told = [row.revealed for row in self.rows if row.revealed is not None]
        parts = []
        if told:
            rates = ", ".join(f"{one.rate_words()} of {one.where}" for one in told)
            parts.append(
                f"A body of {told[0].body} would have shown a thrust{test}, "
                f"{f'if it acts {along}' if along else 'whatever its direction'}, had it lost "
                f"more than about {rates}."
            )
        largest = [words for row in self.rows if (words := row.largest_words())]
        if largest:
            if not told:
                test += f", {f'by a thrust {along}' if along else whatever},"
            parts.append(
                f"A body whose whole surface sublimates would have been revealed"
                f"{'' if told else test} up to a diameter of {', '.join(largest)}, at a bulk "
                f"density of {self.density} kg/m3 ({percent(self.confidence)} intervals); this arc "
                "does not constrain the outgassing of a larger one at all."
            )
        if self.radial_share is not None and self.radial_share < 0.995:
            share = rounded(self.radial_share, 2, outward="up")
            wider = rounded(1 / self.radial_share, 2, outward="down")
            parts.append(
                f"A radial thrust is seen better: {share} times these rates would have been "
                f"revealed, and {wider} times these diameters reached."
            )
        if not parts:
            parts.append(f"Thrusts are revealed{test} as the table tells.")
        return " ".join(parts)

    def table_rows(self) -> list[list[str]]:
        """Rates for the size given, or over diameters, as text, the head first; rounded up."""
        interval = percent(self.confidence)
        rows = [
            ["species", "diameter", "revealed above", f"{interval} from", "to", "unit"]
            + ["whole surface gives", "share", "measured"]
        ]
        for row in self.rows:
            for size, rate, low, high, full in row.cells():
                rows.append(
                    [
                        row.name,
                        length_text(size, outward=""),
                        rounded(rate, 2, outward="up"),
                        rounded(low, 2, outward="down"),
                        rounded(high, 2, outward="up"),
                        row.unit,
                        "-" if full is None else rounded(full, 2),
                        "-" if not full else _share_text(rate / full),
                        row.measured or "-",
                    ]
                )
        if all(cells[-1] == "-" for cells in rows[1:]):
            rows = [cells[:-1] for cells in rows]
        return rows

    def table(self) -> str:
        """Rates over diameters as aligned text."""
        return as_columns(self.table_rows(), left=(0, 5, 8))

    def __str__(self) -> str:
        lines = [self.sentence(), "", self.table()]
        return "\n".join([*lines, *(f"assumed: {text}" for text in self.assumptions)])

    def _repr_html_(self) -> str:
        assumed = [f"assumed: {text}" for text in self.assumptions]
        return as_html([self.sentence()], self.table_rows(), assumed)

    def to_dict(self) -> dict[str, Any]:
        """JSON-able record."""
        return {
            "threshold_au_d2": float(self.threshold.value),
            "radial_threshold_au_d2": None
            if self.radial_threshold is None
            else float(self.radial_threshold.value),
            "components": self.components,
            "false_alarm": self.false_alarm,
            "power": self.power,
            "density_kg_m3": self.density.to_dict(),
            "confidence": self.confidence,
            "rows": [row.to_dict() for row in self.rows],
            "assumptions": list(self.assumptions),
            "table": self.table(),
            "sentence": self.sentence(),
        }


def _share_text(share: float) -> str:
    return "hidden" if share > 1 else f"{rounded(100 * share, 2, outward='up')} %"


def revealed_rate(
    threshold: DetectionThreshold | Quantity | float,
    diameter: DistributionSpec | KnownSize,
    *,
    at: float,
    g_at_r: float = 1.0,
    density: DistributionSpec | None = None,
    species: str = "H2O",
    speed: Any = None,
    collimation: Any = None,
    confidence: float = 0.9,
    seed: int | np.random.Generator = 1,
    n_draws: int = 20_000,
) -> RevealedRate:
    """Q = M A_det g(r) / (zeta m v) for a body of given size and density.

    Parameters
    ----------
    threshold : DetectionThreshold, Quantity or float
        Detection threshold A_det (au/d2 if bare) at g = 1; of a DetectionThreshold the worst
        direction.
    diameter : spec, Photometry or MeasuredDiameter
        Default unit m.
    at : float
        Heliocentric distance in au at which the rate is wanted, with ``g_at_r`` the thrust law
        there.
    density, speed, collimation, species
        As in `mass_bound` and `Outgassing`.

    Raises
    ------
    MassError
        A threshold or g that is not positive; a force that reaches zero.
    CaseError
        A value outside its range.
    """
    size: KnownSize
    if isinstance(diameter, (Photometry, MeasuredDiameter)):
        size = diameter
    else:
        size = MeasuredDiameter(diameter)
    found = reach(
        threshold,
        g_at=lambda _: g_at_r,
        species=(species,),
        at=at,
        size=size,
        density=density,
        speed=speed,
        collimation=collimation,
        confidence=confidence,
        seed=seed,
        n_draws=n_draws,
    )
    revealed = found.rows[0].revealed
    assert revealed is not None
    return revealed


def reach(
    threshold: DetectionThreshold | Quantity | float,
    *,
    g_at: Callable[[float], float],
    outgassing: Outgassing | None = None,
    species: Sequence[str] = DEFAULT_SPECIES,
    at: float | None = None,
    size: KnownSize | None = None,
    density: DistributionSpec | None = None,
    speed: Any = None,
    collimation: Any = None,
    diameters_m: Sequence[float] = DEFAULT_DIAMETERS_M,
    confidence: float = 0.9,
    seed: int | np.random.Generator = 1,
    n_draws: int = 20_000,
) -> Reach:
    """Which production rates this arc would have revealed, over sizes and for the size given.

    Parameters
    ----------
    threshold : DetectionThreshold, Quantity or float
        A_det at g = 1 (au/d2 if bare); of a DetectionThreshold the worst direction, with the
        radial one beside it.
    g_at : callable
        Thrust law g(r), r in au.
    outgassing : Outgassing, optional
        Its species, distances, speeds and collimations are asked about; else ``species`` at ``at``
        with ``speed`` and ``collimation``, as `Outgassing` takes them.
    size : Photometry or MeasuredDiameter, optional
    density : spec, optional
    diameters_m : sequence of float
        Sizes of the table, m.
    confidence : float
        Of the central intervals.

    Raises
    ------
    MassError
        The threshold or the law is not positive, or the force may be zero.
    CaseError
        A value outside its range.
    """
    worst, radial, false_alarm, power = _threshold(threshold)
    if not 0 < confidence < 1:
        raise CaseError(f"confidence = {confidence!r} must be between 0 and 1.")
    bulk, rng = bulk_density(density), np.random.default_rng(seed)
    measured = outgassing is not None
    if outgassing is None:
        outgassing = Outgassing({name: "1e26 1/s" for name in species}, speed, collimation, at)
    rho = bulk.draw(rng, n_draws)
    probes = {(e.species, e.at_au): e for e in reversed(outgassing.emissions)}
    found = [
        _row(emission, worst, float(g_at(emission.at_au)), rho, diameters_m, confidence, rng)
        for emission in reversed(probes.values())
    ]
    rows = [row for row, _, _ in found]
    if size is not None:
        cubes = size.diameter_m(rng, n_draws) ** 3
        for k, (row, cube, full) in enumerate(found):
            revealed = _revealed(row, cube * cubes, size, bulk, worst, confidence, full)
            revealed = replace(revealed, false_alarm=false_alarm, power=power)
            rows[k] = replace(row, revealed=revealed)
    if measured:
        for k, (row, emission) in enumerate(zip(rows, reversed(probes.values()), strict=True)):
            rows[k] = replace(
                row,
                measured=emission.rate_words,
                measured_rate=_measured(emission, row.unit),
            )
    asked = Outgassing([replace(e, rate=Fixed(1.0)) for e in outgassing.emissions])
    return Reach(
        worst * AU_D2,
        radial,
        false_alarm,
        power,
        bulk,
        confidence,
        tuple(rows),
        (
            *asked.assumptions(),
            "a whole surface: a dark sphere of pure ice that does not rotate, each facet in its "
            "own energy balance, the most that sublimation can give",
        ),
        threshold.components if isinstance(threshold, DetectionThreshold) else "",
    )


def _measured(emission: Emission, unit: str) -> float:
    """The rate of an emission, or its limit, in the unit of its row."""
    rate = emission.rate
    value = rate.limit if isinstance(rate, AtMost) else rate.median
    if emission.rate_in_kg and unit != "kg/s":
        value /= molecule_mass_kg(emission.species)
    return value


def _threshold(
    threshold: DetectionThreshold | Quantity | float,
) -> tuple[float, Quantity | None, float | None, float | None]:
    """Worst and radial threshold, false-alarm rate and power."""
    if not isinstance(threshold, DetectionThreshold):
        return float(u.Quantity(threshold, AU_D2).value), None, None, None
    radial = None
    if "R" in threshold.components:
        radial = threshold.direction_free[threshold.components.index("R")]
    return float(threshold.worst.value), radial, threshold.false_alarm, threshold.power


def _row(
    emission: Emission,
    threshold_au_d2: float,
    g: float,
    rho: np.ndarray,
    diameters_m: Sequence[float],
    confidence: float,
    rng: np.random.Generator,
) -> tuple[ReachRow, np.ndarray, float | None]:
    """The row of one emission, the rates (n,) of spheres of 1 m, the flux that a whole one gives.

    Rates are molecules/s, or kg/s where the species has no molecular mass here; the flux that of a
    sphere of 1 m.
    """
    if not (threshold_au_d2 > 0 and math.isfinite(threshold_au_d2) and g > 0):
        raise MassError(
            f"The threshold {threshold_au_d2:g} au/d2 and g = {g:g} at {emission.at_au:g} au must "
            "both be positive for a rate to follow."
        )
    in_kg = emission.species not in MOLAR_MASS_G
    one = Outgassing([replace(emission, rate=Fixed(1.0), rate_in_kg=in_kg)])
    with np.errstate(divide="ignore"):
        cube = (
            sphere_mass_kg(1.0, rho)
            * (threshold_au_d2 * g * AU_D2_TO_M_S2)
            / one.draw(rng, len(rho)).force_n[0]
        )
    half = (1 - confidence) / 2
    low, middle, high = (float(x) for x in np.quantile(cube, [half, 0.5, 1 - half]))
    if not math.isfinite(middle):
        raise MassError(
            "The collimation or speed reaches zero, so no rate is large enough; give them a range "
            "that keeps away from zero."
        )
    metre = full = None
    if emission.species in ICES:
        metre = largest_rate(emission.species, emission.at_au, 1.0 * u.m)
        full = tuple(metre * d**2 for d in diameters_m)
    return (
        ReachRow(
            emission.species,
            emission.at_au,
            g,
            "kg/s" if in_kg else "molecules/s",
            tuple(float(d) for d in diameters_m),
            tuple(middle * d**3 for d in diameters_m),
            tuple(low * d**3 for d in diameters_m),
            tuple(high * d**3 for d in diameters_m),
            full,
            None if metre is None else metre / middle,
            None if metre is None else metre / high,
            None if metre is None else metre / low,
        ),
        cube,
        metre,
    )


def _revealed(
    row: ReachRow,
    rates: np.ndarray,
    size: KnownSize,
    bulk: Distribution,
    threshold_au_d2: float,
    confidence: float,
    metre: float | None,
) -> RevealedRate:
    """The rate revealed for the size given, from its draws (n,)."""
    half = (1 - confidence) / 2
    middle, low, high = (float(x) for x in np.quantile(rates, [0.5, half, 1 - half]))
    in_kg = row.unit == "kg/s"
    kg = 1.0 if in_kg else molecule_mass_kg(row.species)
    per_s = None if in_kg else 1 / u.s
    full = None if metre is None else metre * size.distribution.median**2
    return RevealedRate(
        row.species,
        row.at_au,
        None if per_s is None else middle * per_s,
        None if per_s is None else low * per_s,
        None if per_s is None else high * per_s,
        middle * kg * u.kg / u.s,
        low * kg * u.kg / u.s,
        high * kg * u.kg / u.s,
        confidence,
        size.distribution,
        bulk,
        threshold_au_d2 * AU_D2,
        None if full is None else full / u.s,
        None if full is None else middle / full,
        name=size.name,
    )
