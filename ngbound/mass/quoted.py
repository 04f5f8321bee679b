"""What a paper says of a thrust, as tables of a TOML file, checked on reading.

May import: errors, toml_file, arc, motion, and from its own room distributions.

For `audit` (every table but one of numbers and threshold may be left out):

    title = "an invented paper"
    [numbers]                       # any keys of audit_numbers; text carries its rounding
    acceleration = "1.43e-8 au/d2"
    at = 1.3
    rate = "1.00e27 molecules/s"
    speed = "0.80 km/s"
    collimation = "0.50"
    mass = "4.0e10 kg"              # "> 4.0e10 kg" is a bound: it is held to its side
    [threshold]
    value = "2.1e-9 au/d2"
    component = "R"                 # R, T, N or any
    others = "free"                 # or held
    confidence = 0.95               # or sigma = 3, or false_alarm = 0.0027 with power = 0.95
    sided = 2
    [arc]
    file = "paper.psv"
    [errors]
    arcsec = "0.50"                 # or keys of the error model
    [geometry]                      # instead of, or beside, the arc
    n_obs = 120
    nights = 40
    span_d = 180
    sigma_arcsec = 0.5
    r_au = [2.9, 2.1]
    delta_au = [1.3, 2.6]

For `reconcile`, two or more tables:

    [[result]]
    name = "early"
    threshold = "2.0e-9 au/d2"      # or upper_limit, or A = "(1.0 +- 0.1)e-8 au/d2", or a file
    component = "R"
    law = "inverse-square"
    r_au = [3.4, 2.9]
    dates = ["2031-01-01", "2031-04-01"]
    [result.outgassing]             # as in a case file
    rate = "< 1e26"
    at = 3.0
"""

import math
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import fields
from pathlib import Path
from typing import Annotated, Any, Literal, Self

import astropy.units as u
from astropy.units import Quantity
from pydantic import Field, model_validator

from ngbound.arc import ErrorModel
from ngbound.errors import ArcError, CaseError, InputError, MassError
from ngbound.motion import Thrust
from ngbound.toml_file import Model, Table, hold, nearest, read_toml, see_whether, shown

from .distributions import AtMost, Distribution, Normal, SplitNormal, parse_distribution, unit_named

AU_D2 = u.au / u.day**2
Spec = str | float | dict[str, Any]
Positive = Annotated[float, Field(gt=0.0)]
Probability = Annotated[float, Field(gt=0.0, lt=1.0)]


class LawTable(Table):
    """The law under which a number was quoted."""

    law: str = Field(default="inverse-square", description="Thrust law, g(1 au) = 1.")
    exponent: float | None = Field(default=None, description='Of the law "power".')

    def thrust(self, components: str = "RTN") -> Thrust:
        """The thrust of the law."""
        return Thrust(self.law, components, exponent=self.exponent)

    @model_validator(mode="after")
    def _known_law(self) -> Self:
        see_whether(self.thrust)
        return self


class QuotedResult(LawTable):
    """``[[result]]``: one estimate, limit or threshold, or an arc to be fitted."""

    name: str
    file: Path | None = Field(default=None, description="An arc, fitted here.")
    object: str | None = Field(default=None, description="Which object of the arc file.")
    errors: dict[str, Any] = Field(default_factory=dict, description="Error model of the arc.")
    A: Spec | None = Field(default=None, description="Estimate with error; or a table by R, T, N.")
    upper_limit: Spec | None = None
    confidence: Probability = 0.95
    threshold: Spec | None = Field(default=None, description="Would have been detected above.")
    false_alarm: Probability = 0.0027
    power: Probability = 0.95
    sided: Literal[1, 2] = 2
    component: Literal["R", "T", "N", "any"] = "any"
    at_au: Positive | None = Field(
        default=None, description="The acceleration is the one at this distance, not at g = 1."
    )
    dates: tuple[str, str] | None = Field(default=None, description="First and last, TDB.")
    r_au: tuple[Positive, ...] = Field(default=(), description="Distances along the arc, in order.")
    outgassing: dict[str, Any] | None = None
    mass: Spec | None = Field(default=None, description='"> 1e12 kg" is a bound.')
    diameter: Spec | None = Field(default=None, description='"< 2 km" is a bound.')

    @model_validator(mode="after")
    def _one_kind(self) -> Self:
        given = [k for k in ("file", "A", "upper_limit", "threshold") if getattr(self, k)]
        if len(given) != 1:
            raise ValueError(
                "it must hold exactly one of file, A, upper_limit and threshold, but holds "
                f"{' and '.join(given) or 'none'}"
            )
        if not self.file and not self.r_au:
            raise ValueError("it needs r_au, the heliocentric distances of the arc in au")
        return self


class Results(Table):
    """A file for `reconcile`."""

    result: tuple[QuotedResult, ...]
    level: Probability = Field(default=0.95, description="Confidence of every interval.")
    seed: int = Field(default=1, ge=0)

    @model_validator(mode="after")
    def _several(self) -> Self:
        if len(self.result) < 2:
            raise ValueError("reconciling needs at least two [[result]] tables; add the other one")
        return self


class QuotedThreshold(LawTable):
    """``[threshold]``: a quoted detection threshold or upper limit, and what it is said to mean."""

    value: str | float = Field(description="At g = 1, au/d2 unless a unit is given.")
    component: Literal["R", "T", "N", "any"] = "any"
    others: Literal["held", "free"] = Field(
        default="free", description="The other components of the fit."
    )
    sigma: Positive | None = Field(default=None, description="So many standard deviations, or ...")
    confidence: Probability | None = Field(default=None, description="... this confidence, or ...")
    false_alarm: Probability | None = Field(default=None, description="... this false-alarm rate.")
    sided: Literal[1, 2] = 2
    power: Probability = Field(
        default=0.5, description="Chance to find it; 0.5 for a plain multiple of sigma."
    )
    at_au: Positive | None = Field(
        default=None, description="The acceleration is the one at this distance, not at g = 1."
    )

    @model_validator(mode="after")
    def _one_level(self) -> Self:
        given = [k for k in ("sigma", "confidence", "false_alarm") if getattr(self, k) is not None]
        if len(given) > 1:
            raise ValueError(f"it gives {' and '.join(given)}; give one of them")
        return self


class Geometry(Table):
    """``[geometry]``: an arc of which only this is known."""

    n_obs: int = Field(ge=3)
    span_d: Annotated[float, Field(gt=0.0, le=36525.0)]
    sigma_arcsec: Positive
    nights: int | None = Field(default=None, ge=2, description="All observations apart by default.")
    r_au: tuple[Positive, ...] = Field(
        min_length=1, description="Heliocentric distance at the start and end."
    )
    delta_au: tuple[Positive, ...] = Field(
        min_length=1, description="Smallest and largest geocentric distance."
    )
    q_au: Positive | None = None
    e: float | None = Field(default=None, ge=0.0)

    @model_validator(mode="after")
    def _ends(self) -> Self:
        for key in ("r_au", "delta_au"):
            if len(getattr(self, key)) > 2:
                raise ValueError(
                    f"{key} = {shown(getattr(self, key))} must be one or two distances in au: "
                    f"{type(self).model_fields[key].description}"
                )
        return self


class ArcTable(Table):
    """``[arc]``: the observations behind the quoted threshold."""

    file: Path
    object: str | None = None


class QuotedPaper(Table):
    """A file for `audit`."""

    title: str = "quoted numbers"
    numbers: dict[str, Any] = Field(
        default_factory=dict, description="Keys of `audit_numbers`, its options among them."
    )
    threshold: QuotedThreshold | None = None
    arc: ArcTable | None = None
    errors: dict[str, Any] = Field(
        default_factory=dict, description="Quoted error level: a key arcsec, or of the error model."
    )
    geometry: Geometry | None = None
    seed: int = Field(default=1, ge=0)

    @model_validator(mode="after")
    def _something(self) -> Self:
        if not self.numbers and self.threshold is None:
            raise ValueError("it must hold a [numbers] or a [threshold] table")
        if (self.arc or self.geometry) and self.threshold is None:
            raise ValueError("it has an [arc] or [geometry] table but no [threshold] to hold to it")
        return self


def read_table(source: str | Path | Mapping[str, Any], model: type[Model]) -> tuple[Model, Path]:
    """Read a TOML file or a mapping into a model; also the folder paths in it count from.

    Raises
    ------
    CaseError
        When it cannot be read, is not TOML, or holds an unknown or impossible choice.
    """
    if isinstance(source, Mapping):
        return hold(source, model, "The table given"), Path()
    return read_toml(source, model), Path(source).parent


@contextmanager
def placed(where: str) -> Iterator[None]:
    """Say ``where`` in the input a fault lies that was found after the tables were read; those of
    an arc name its file themselves."""
    try:
        yield
    except ArcError:
        raise
    except (InputError, MassError) as error:
        raise type(error)(f"{where}: {error}", **error.data) from error


def amount_au_d2(spec: Any, name: str) -> tuple[Distribution, float]:
    """A quoted acceleration: its distribution in au/d2, and one standard deviation (0: none)."""
    found, unit = parse_distribution(spec, name)
    try:
        factor = float(Quantity(1.0, unit_named(unit) if unit else AU_D2).to_value(AU_D2))
    except (ValueError, TypeError, u.UnitConversionError) as error:
        raise CaseError(
            f"{name} has the unit {unit!r}, which is none of an acceleration; write au/d2, m/s2 or "
            "the like.",
            unit=unit,
        ) from error
    found = found.scaled(factor)
    if isinstance(found, Normal):
        return found, found.sigma
    if isinstance(found, SplitNormal):
        return found, 0.5 * (found.minus + found.plus)
    return found, 0.0


def size_au_d2(spec: Any, name: str) -> float:
    """A quoted positive acceleration in au/d2."""
    found, _ = amount_au_d2(spec, name)
    value = found.limit if isinstance(found, AtMost) else found.median
    if not (math.isfinite(value) and value > 0):
        raise CaseError(f"{name} = {shown(spec)} must be positive; give its size.", value=spec)
    return value


def error_model(choices: Mapping[str, Any]) -> ErrorModel:
    """The error model of an ``errors`` table; ``arcsec`` alone stands for one sigma for all."""
    options = dict(choices)
    if "arcsec" in options:
        value, _ = parse_distribution(options.pop("arcsec"), "errors.arcsec", lower=0.0)
        options = {"scheme": "uniform", "uniform_arcsec": value.median, **options}
    known = ["arcsec", *(field.name for field in fields(ErrorModel))]
    for key in choices:
        if key not in known:
            raise CaseError(f"[errors] has no key {key!r}; {nearest(key, known)}", key=key)
    return ErrorModel(**options)
