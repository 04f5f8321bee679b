"""One result about the thrust of an object: a fitted arc or quoted numbers, and what goes with it.

May import: constants, errors, toml_file, arc, sky, motion, fit, limits, and from its own room
distributions, outgassing, quoted, thrust_history and written.
"""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import astropy.units as u
import numpy as np
from scipy.special import ndtri
from scipy.stats import chi2

from ngbound.arc import read_arc
from ngbound.constants import AU_D2_TO_M_S2
from ngbound.errors import CaseError
from ngbound.fit import Fit, fit_orbit
from ngbound.limits import noncentrality
from ngbound.sky import parse_time, tdb_d_to_iso
from ngbound.toml_file import shown

from .distributions import AtMost, Distribution, Fixed, number_text, parse_distribution
from .outgassing import Outgassing
from .quoted import QuotedResult, amount_au_d2, error_model, read_table, size_au_d2
from .thrust_history import ArcResponse, QuotedResponse, Response, law_history
from .written import without_sign

THREE_SIGMA = 0.0027
AXES = "RTN"


@dataclass(frozen=True, eq=False)
class ThrustResult:
    """A result with its name.

    Attributes
    ----------
    name : str
    kind : {"arc", "estimate", "limit", "threshold"}
    response : ArcResponse or QuotedResponse
        What it says of any history of thrust.
    outgassing : Outgassing or None
        Measured at its epoch.
    mass, diameter : Distribution or None
        kg, m; of a bound, its edge.
    mass_bound, diameter_bound : {-1, 0, 1}
        Whether it is an upper (-1) or a lower (1) bound.
    """

    name: str
    kind: str
    response: Response
    outgassing: Outgassing | None = None
    mass: Distribution | None = None
    diameter: Distribution | None = None
    mass_bound: int = 0
    diameter_bound: int = 0
    assumed: tuple[str, ...] = field(default=())

    @classmethod
    def from_fit(
        cls,
        fit: Fit,
        name: str | None = None,
        outgassing: Outgassing | None = None,
        mass: Any = None,
        diameter: Any = None,
    ) -> "ThrustResult":
        """The result of a fit; all three components are looked at, whichever were fitted."""
        return cls(
            name or fit.arc.name,
            "arc",
            ArcResponse.of(fit),
            outgassing,
            **_sized(mass, "mass", u.kg),
            **_sized(diameter, "diameter", u.m),
        )

    @classmethod
    def from_quoted(
        cls,
        quoted: QuotedResult | Mapping[str, Any],
        folder: Path | None = None,
        progress: Callable[[str], None] | None = None,
    ) -> "ThrustResult":
        """The result of a ``[[result]]`` table; an arc file in it is fitted."""
        table = quoted
        if not isinstance(table, QuotedResult):
            table = read_table(table, QuotedResult)[0]
        budget = None if table.outgassing is None else Outgassing.from_dict(table.outgassing)
        extras: dict[str, Any] = {
            "outgassing": budget,
            **_sized(table.mass, "mass", u.kg),
            **_sized(table.diameter, "diameter", u.m),
        }
        if table.file is not None:
            arc = read_arc((folder or Path()) / table.file, object=table.object)
            if progress:
                progress(f"fitting {table.name}")
            fit = fit_orbit(arc, table.thrust(), error_model(table.errors), progress=progress)
            return cls(table.name, "arc", ArcResponse.of(fit), **extras)
        amounts, matrix, allowed, kind, assumed = _numbers(table)
        first, last = (
            tuple(float(parse_time(date, "tdb")) for date in table.dates)
            if table.dates
            else (math.nan, math.nan)
        )
        if last < first:
            raise CaseError(f"The dates of {table.name!r} run backwards; swap them.")
        response = QuotedResponse(
            law_history(table.thrust()),
            first,
            last,
            (min(table.r_au), max(table.r_au)),
            table.r_au,
            amounts,
            matrix,
            allowed,
        )
        return cls(table.name, kind, response, **extras, assumed=assumed)

    @property
    def amounts_au_d2(self) -> np.ndarray:
        """Best-fit amounts (3,) R, T, N at g = 1, au/d2; zero where not measured or a limit."""
        return self.response.misfit(self.response.own).lowest()[1]

    @property
    def significance(self) -> float:
        """Drop of chi2 through the thrust, and whether it is a detection at 3 sigma."""
        found = self.response.misfit(self.response.own)
        return max(found.at_zero - found.lowest()[0], 0.0)

    @property
    def is_detection(self) -> bool:
        """Whether thrust is seen at a false-alarm rate of 0.0027, all measured axes together."""
        rank = self.response.misfit(self.response.own).rank
        return self.significance > float(chi2.isf(THREE_SIGMA, max(rank, 1)))

    def draw_amounts(self, rng: np.random.Generator, n: int) -> np.ndarray:
        """Draws (n, 3) of the amounts; along axes not measured they are zero."""
        found = self.response.misfit(self.response.own)
        values, axes = np.linalg.eigh(found.matrix)
        seen = values > 1e-10 * values[-1]
        spread = np.where(seen, np.where(seen, values, 1.0) ** -0.5, 0.0)
        return found.lowest()[1] + (rng.standard_normal((n, 3)) * spread) @ axes.T

    def mass_draws_kg(self, rng: np.random.Generator, n: int) -> np.ndarray | None:
        """Mass (n,) kg: as quoted, else from the momentum balance; None where neither is known.

        For a result that is no detection these are lower bounds: A at its 95 % point.
        """
        if self.mass is not None:
            return self.mass.draw(rng, n)
        if self.outgassing is None or len(self.outgassing.distances_au) != 1:
            return None
        push = np.linalg.norm(self.draw_amounts(rng, n), axis=1)
        if not self.is_detection:
            push = np.full(n, np.quantile(push, 0.95))
        g = float(self.response.own.g(np.asarray(self.outgassing.distances_au))[0])
        return self.outgassing.draw(rng, n).force.value / (push * g * AU_D2_TO_M_S2)

    def __str__(self) -> str:
        found = self.response.misfit(self.response.own)
        a, matrix = found.lowest()[1], found.matrix
        spread = np.sqrt(np.diagonal(np.linalg.pinv(matrix, hermitian=True)))
        low, high = self.response.r_au
        where = f"{low:.3g} au" if low == high else f"{low:.3g} to {high:.3g} au"
        when = ""
        if math.isfinite(self.response.first_d):
            ends = (self.response.first_d, self.response.last_d)
            when = ", " + " to ".join(str(tdb_d_to_iso(d))[:10] for d in ends)
        parts = []
        for i, letter in enumerate(AXES):
            if matrix[i, i] > 0:
                parts.append(f"A_{letter} = {number_text(a[i])} +- {number_text(spread[i], 2)}")
        seen = "a detection" if self.is_detection else "no detection"
        free = " (each with the others free)" if len(parts) > 1 else ""
        return (
            f"{self.name!r} ({self.kind}, {self.response.own.words}, {where}{when}): "
            f"{', '.join(parts)} au/d2{free}; {seen} at 3 sigma"
        )

    def to_dict(self) -> dict[str, Any]:
        """JSON-able description."""
        found = self.response.misfit(self.response.own)
        dated = math.isfinite(self.response.first_d)
        return {
            "name": self.name,
            "kind": self.kind,
            "law": self.response.own.words,
            "r_au": list(self.response.r_au),
            "first_tdb_d": self.response.first_d if dated else None,
            "last_tdb_d": self.response.last_d if dated else None,
            "A_au_d2": found.lowest()[1].tolist(),
            "information_au_d2_-2": found.matrix.tolist(),
            "delta_chi2": self.significance,
            "detection": self.is_detection,
            "outgassing": None if self.outgassing is None else self.outgassing.to_dict(),
            "mass_kg": None if self.mass is None else self.mass.to_dict(),
            "diameter_m": None if self.diameter is None else self.diameter.to_dict(),
            "mass_bound": self.mass_bound,
            "diameter_bound": self.diameter_bound,
            "assumed": list(self.assumed),
        }


def _sized(spec: Any, name: str, unit: u.UnitBase) -> dict[str, Any]:
    """A mass or diameter and whether it is a bound, as fields of a `ThrustResult`."""
    if spec is None:
        return {}
    plain, bound = without_sign(spec)
    found, text = parse_distribution(plain, name, lower=0.0)
    if isinstance(found, AtMost):
        found, bound = Fixed(found.limit), -1
    try:
        factor = float((u.Unit(text) if text else unit).to(unit))
        return {name: found.scaled(factor), f"{name}_bound": bound}
    except (ValueError, TypeError, u.UnitConversionError) as error:
        raise CaseError(
            f"{name} has the unit {text!r}, which is no unit of it; use for instance {unit}."
        ) from error


def _numbers(
    table: QuotedResult,
) -> tuple[np.ndarray, np.ndarray, float, str, tuple[str, ...]]:
    """Amounts, information, allowed sigma and kind of a quoted result."""
    scale = 1.0
    if table.at_au is not None:
        scale = float(table.thrust().g(table.at_au))
    amounts, matrix = np.zeros(3), np.zeros((3, 3))
    if table.A is not None:
        named = isinstance(table.A, dict) and not set(table.A).isdisjoint(AXES)
        given = table.A if named and isinstance(table.A, dict) else {table.component: table.A}
        for letter, spec in given.items():
            if letter not in (*AXES, "any"):
                raise CaseError(
                    f"A of {table.name!r} has no component {letter!r}; there are R, T and N."
                )
            found, sigma = amount_au_d2(spec, f"A of {table.name!r}")
            if sigma == 0.0:
                raise CaseError(
                    f"A = {shown(spec)} of {table.name!r} has no error; write for instance "
                    '"(1.0 +- 0.2)e-8 au/d2", or give it as upper_limit or threshold.'
                )
            i = AXES.index("R" if letter == "any" else letter)
            amounts[i], matrix[i, i] = found.median / scale, (scale / sigma) ** 2
        assumed: tuple[str, ...] = ()
        if table.component == "any" and not named:
            assumed = (f"the thrust of {table.name!r} is taken as radial",)
        return amounts, matrix, 0.0, "estimate", assumed
    if table.threshold is not None:
        size = size_au_d2(table.threshold, f"threshold of {table.name!r}") / scale
        k = 3 if table.component == "any" else 1
        sided = table.sided if k == 1 else 2
        sigma = size / noncentrality(table.false_alarm, table.power, k, sided=sided)
        allowed = (
            math.sqrt(float(chi2.isf(table.false_alarm, k)))
            if sided == 2
            else float(-ndtri(table.false_alarm))
        )
        kind = "threshold"
    else:
        size = size_au_d2(table.upper_limit, f"upper_limit of {table.name!r}") / scale
        tail = (1.0 - table.confidence) / table.sided
        sigma, allowed, kind = size / float(-ndtri(tail)), 0.0, "limit"
    for i, letter in enumerate(AXES):
        if table.component in ("any", letter):
            matrix[i, i] = sigma**-2
    taken = (
        (f"the estimate behind the limit of {table.name!r} is taken as zero",)
        if kind == "limit"
        else ()
    )
    return amounts, matrix, allowed, kind, taken
