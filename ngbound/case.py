"""The case file: every choice of an analysis, validated before any work begins.

A case file is TOML.  Every key has a documented default except ``[arc] file``; a key that does not
exist is an error that suggests the nearest one that does.  Paths in a case file count from the
folder of the case file.

May import errors, arc, sky, motion, fit, limits, mass and report; never run or cli.
"""

import re
import warnings
from collections.abc import Callable
from pathlib import Path
from typing import Annotated, Any, Literal, Self

import numpy as np
from pydantic import Field, PrivateAttr, ValidationInfo, field_validator, model_validator

from ngbound.arc import ErrorModel, station, user_stations
from ngbound.errors import CaseError, NgboundWarning
from ngbound.limits import PRIOR_NAMES, PlannedNight
from ngbound.mass import (
    DEFAULT_DIAMETERS_M,
    KnownSize,
    MeasuredDiameter,
    Outgassing,
    Photometry,
    bulk_density,
)
from ngbound.motion import LAWS, ForceModel, Orbit, TableLaw, Thrust, Window
from ngbound.sky import body_name, parse_time
from ngbound.toml_file import Table, nearest, read_toml, see_whether, with_choices

Positive = Annotated[float, Field(gt=0.0)]
NotNegative = Annotated[float, Field(ge=0.0)]
Probability = Annotated[float, Field(gt=0.0, lt=1.0)]
Vector = tuple[float, float, float]


class ObjectTable(Table):
    """``[object]``: what the arc is an arc of."""

    name: str | None = Field(
        default=None,
        description="Designation as the arc file spells it; needed only when a file holds several.",
    )


class StationTable(Table):
    """``[arc.stations.CODE]``: a station of the user's own, WGS84."""

    longitude_deg: float = Field(ge=-180.0, le=360.0, description="East longitude.")
    latitude_deg: float = Field(ge=-90.0, le=90.0, description="Geodetic latitude.")
    altitude_m: float = Field(description="Height above the ellipsoid.")
    name: str = Field(default="user-defined station", description="For the report.")


class ArcTable(Table):
    """``[arc]``: where the observations stand."""

    file: Path = Field(description="ADES PSV, ADES XML, 80-column or JSON file.")
    stations: dict[str, StationTable] = Field(
        default_factory=dict, description="Stations whose codes no public list has."
    )

    @field_validator("stations")
    @classmethod
    def _sound(cls, stations: dict[str, StationTable]) -> dict[str, StationTable]:
        see_whether(user_stations, {code: s.model_dump() for code, s in stations.items()})
        return stations


class ErrorsTable(Table):
    """``[errors]``: the error of each observation."""

    scheme: str = Field(
        default=ErrorModel.scheme,
        description="stated-then-table (the observer's rms, else a published table) or uniform.",
    )
    uniform_arcsec: float = Field(
        default=ErrorModel.uniform_arcsec, description="Sigma of the scheme uniform."
    )
    uniform_before_1996_arcsec: float | None = Field(
        default=ErrorModel.uniform_before_1996_arcsec, description="Another one before 1996."
    )
    floor_arcsec: float = Field(
        default=ErrorModel.floor_arcsec, description="No sigma is taken smaller."
    )
    scale: float = Field(default=ErrorModel.scale, description="Factor on all errors.")
    night_common_arcsec: float | None = Field(
        default=ErrorModel.night_common_arcsec,
        description="Error that all records of a station-night share.",
    )
    timing_s: float = Field(
        default=ErrorModel.timing_s, description="Error of the time where none is stated."
    )
    over_observing: str = Field(
        default=ErrorModel.over_observing,
        description="What tames many records of a night: common, sqrt or none.",
    )
    catalogue_offsets: bool | None = Field(
        default=ErrorModel.catalogue_offsets,
        description="Whether offsets of the star catalogues are marginalised.",
    )
    catalogue_seasons: bool = Field(
        default=ErrorModel.catalogue_seasons,
        description="Whether each catalogue has an offset for each season too.",
    )
    catalogue_scale: float = Field(
        default=ErrorModel.catalogue_scale, description="Factor on the priors of the catalogues."
    )
    debiasing: str | None = Field(
        default=ErrorModel.debiasing,
        description="Your copy of the published table of catalogue offsets (Eggl et al. 2020).",
    )
    station_offset_arcsec: float | None = Field(
        default=ErrorModel.station_offset_arcsec, description="Prior of each station's offset."
    )
    clock_s: float = Field(
        default=ErrorModel.clock_s,
        description="Prior of each station's clock error where none is stated.",
    )
    photocentre_arcsec_au: float = Field(
        default=ErrorModel.photocentre_arcsec_au,
        description="Prior of the photocentre's offset towards the Sun, at 1 au.",
    )
    radius_km: float | None = Field(
        default=ErrorModel.radius_km,
        description="Radius by which radar delays to the surface are referred to the centre.",
    )
    radius_sigma_km: float | None = Field(
        default=ErrorModel.radius_sigma_km, description="Its error; a fifth of it by default."
    )
    rescale_stations: bool | None = Field(
        default=ErrorModel.rescale_stations,
        description="Whether the arc rescales the errors of stations with enough records.",
    )
    rescale_least: int = Field(
        default=ErrorModel.rescale_least, description="Records that are enough for that."
    )
    student: bool = Field(
        default=ErrorModel.student,
        description="Whether tests and limits allow for few degrees of freedom of rescaled errors.",
    )

    def in_folder(self, base: Path) -> "ErrorsTable":
        """The choices with the path in them counted from a folder."""
        if self.debiasing is None:
            return self
        return self.model_copy(update={"debiasing": str(base / self.debiasing)})

    def error_model(self) -> ErrorModel:
        """The error model of these choices."""
        return ErrorModel(**self.model_dump())

    @model_validator(mode="after")
    def _sound(self) -> Self:
        see_whether(self.error_model)
        return self


class ForcesTable(Table):
    """``[forces]``: what pulls on the object besides the thrust."""

    asteroids: bool = Field(default=True, description="The 16 massive asteroids as perturbers.")
    exclude: tuple[str, ...] = Field(
        default=(), description="Perturbers left out, for instance because the object is one."
    )
    relativity: Literal["sun", "all", "none"] = Field(
        default="sun", description="First post-Newtonian term of the Sun, of all bodies, or none."
    )
    sun_j2: bool = Field(default=False, description="The Sun's quadrupole.")
    frame_dragging: bool = Field(default=False, description="The Sun's Lense-Thirring term.")

    def force_model(self) -> ForceModel:
        """The force model of these choices."""
        return ForceModel(**self.model_dump())

    @model_validator(mode="after")
    def _sound(self) -> Self:
        for body in self.exclude:
            see_whether(body_name, body, key="exclude")
        see_whether(self.force_model)
        return self


class OrbitTable(Table):
    """``[orbit]``: a starting orbit, when the first orbit shall not be found from the angles.

    Either ``position_au`` and ``velocity_au_d`` (barycentric ICRF, TDB), or the cometary elements
    ``q_au``, ``e``, ``i_deg``, ``node_deg``, ``argperi_deg`` and ``tp`` (heliocentric, ecliptic
    and equinox J2000.0, TDB).
    """

    epoch: str = Field(description="Epoch of the orbit, TDB, as 2031-05-01 or with a time of day.")
    position_au: Vector | None = Field(default=None, description="Barycentric ICRF.")
    velocity_au_d: Vector | None = Field(default=None, description="Barycentric ICRF.")
    q_au: Positive | None = Field(default=None, description="Perihelion distance.")
    e: NotNegative | None = Field(default=None, description="Eccentricity.")
    i_deg: Annotated[float, Field(ge=0.0, le=180.0)] | None = Field(
        default=None, description="Inclination."
    )
    node_deg: float | None = Field(default=None, description="Longitude of the ascending node.")
    argperi_deg: float | None = Field(default=None, description="Argument of perihelion.")
    tp: str | None = Field(default=None, description="Time of perihelion, TDB.")

    @model_validator(mode="after")
    def _one_kind(self) -> Self:
        state = (self.position_au, self.velocity_au_d)
        elements = (self.q_au, self.e, self.i_deg, self.node_deg, self.argperi_deg, self.tp)
        complete = [all(x is not None for x in kind) for kind in (state, elements)]
        started = [any(x is not None for x in kind) for kind in (state, elements)]
        if complete != started or sum(complete) != 1:
            raise ValueError(
                "give either position_au and velocity_au_d, "
                "or all of q_au, e, i_deg, node_deg, argperi_deg and tp"
            )
        for key, when in (("epoch", self.epoch), ("tp", self.tp)):
            if when is not None:
                see_whether(parse_time, when, "tdb", key=key)
        return self

    def orbit(self, thrust: Thrust | None = None, forces: ForceModel | None = None) -> Orbit:
        """The orbit that the table describes."""
        forces = forces or ForceModel()
        if self.position_au and self.velocity_au_d:
            state = np.array([*self.position_au, *self.velocity_au_d])
            return Orbit(float(parse_time(self.epoch, "tdb")), state, thrust, forces)
        given = self.model_dump()
        return Orbit.from_elements(
            epoch=self.epoch,
            q=given["q_au"],
            e=given["e"],
            i=given["i_deg"],
            node=given["node_deg"],
            argperi=given["argperi_deg"],
            tp=self.tp,
            thrust=thrust,
            forces=forces,
        )


class ThrustTable(Table):
    """``[thrust]``: the thrust that is looked for."""

    law: str = Field(
        default="inverse-square",
        description="How the thrust falls with distance: a named law, or power with an exponent.",
    )
    exponent: float | None = Field(default=None, description="m of r^-m for law = 'power'.")
    table: tuple[tuple[Positive, Positive], ...] | None = Field(
        default=None, description="Pairs of r (au) and g for law = 'table'."
    )
    components: str = Field(
        default="RTN", description="Which of radial, transverse and normal are free."
    )
    lag_d: float = Field(default=0.0, description="Delay of the law behind the Sun, days.")
    window_dates: tuple[str, str] | None = Field(
        default=None, description="First and last date (TDB) at which the thrust acts."
    )
    window_au: tuple[NotNegative, Positive] | None = Field(
        default=None, description="Least and largest heliocentric distance at which it acts."
    )

    def thrust(self, A_au_d2: Vector = (0.0, 0.0, 0.0)) -> Thrust:
        """The thrust law with given amounts."""
        window = None
        if self.window_dates and self.window_au:
            raise CaseError("the activity window goes by window_dates or by window_au, not by both")
        if self.window_dates:
            window = Window.between_dates(*self.window_dates)
        if self.window_au:
            window = Window.between_distances(*self.window_au)
        law: str | TableLaw = self.law
        if self.law == "table":
            if self.table is None:
                raise CaseError("law = 'table' needs table = [[r, g], ...] beside it")
            law = TableLaw(tuple(r for r, _ in self.table), tuple(g for _, g in self.table))
        return Thrust(
            law,
            components=self.components,
            A=A_au_d2,
            lag=self.lag_d,
            window=window,
            exponent=self.exponent,
        )

    @field_validator("law")
    @classmethod
    def _known(cls, law: str) -> str:
        known = [*LAWS, "power", "table"]
        if law not in known:
            raise ValueError(f"there is no such thrust law; {nearest(law, known)}")
        return law

    @model_validator(mode="after")
    def _sound(self) -> Self:
        see_whether(self.thrust)
        return self


class FitTable(Table):
    """``[fit]``: how the orbit is fitted."""

    reject: bool = Field(default=True, description="Set outliers aside, and take them back.")


class DetectionTable(Table):
    """``[detection]``: what counts as a detection, and what a limit promises."""

    false_alarm: Probability = Field(
        default=0.0027, description="Probability of a detection where there is no thrust."
    )
    power: Probability = Field(
        default=0.95, description="Probability that a thrust at the threshold is detected."
    )
    confidence: Probability = Field(default=0.95, description="Of the upper limits.")
    vary_errors: bool = Field(
        default=True,
        description="Whether run repeats threshold and limit under other defensible error models.",
    )


class SamplingTable(Table):
    """``[sampling]``: how the posterior is drawn."""

    seed: int = Field(default=1, ge=0, description="Of every random number of the analysis.")
    prior: str = Field(
        default=PRIOR_NAMES[0], description="On the thrust; named in the record beside the limit."
    )
    walkers: int | None = Field(
        default=None, ge=2, description="Walkers, an even number; 64 or more unless given."
    )
    max_steps: int = Field(
        default=5000, ge=24, description="The chain ends there even if it has not converged."
    )
    effective_samples: Positive = Field(
        default=5000.0, description="Wanted of each thrust component."
    )

    @field_validator("prior")
    @classmethod
    def _known(cls, prior: str) -> str:
        if prior not in PRIOR_NAMES:
            raise ValueError(f"there is no such prior; {nearest(prior, PRIOR_NAMES)}")
        return prior


Spec = float | str | dict[str, Any]
"""A number, a text such as "(2.0 +- 0.5)e26", or a table such as {low = 1, high = 2}."""
EXAMPLES = {
    "rate": 'rate = "(1.0 +- 0.2)e27" or "< 5 kg/s"',
    "at": "at = 1.4",
    "speed": 'speed = "0.8 +- 0.1 km/s"',
    "collimation": 'collimation = "0.2 to 0.7"',
    "density": 'density = "400 to 600 kg/m3"',
    "diameter": 'diameter = "2.0 +- 0.3 km"',
    "H": 'H = "18.2 +- 0.3"',
    "albedo": 'albedo = "0.02 to 0.06"',
}
"""What a fault in one of these keys suggests to write."""


def _sound_spec(key: str, make: Callable[..., Any], *arguments: Any, **options: Any) -> None:
    """Build something from one key; its fault, said once and with an example of what is right."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", NgboundWarning)
        try:
            make(*arguments, **options)
        except CaseError as error:
            text = re.sub(rf"^(\w+ )?{key}(: | = .*? (?=must|is|cannot))", "", str(error))
            text = text.removeprefix("In a distribution, ").rstrip(".")
            offered = key in EXAMPLES and not re.search(r"write|such as|for instance|\?", text)
            advice = f"; write for instance {EXAMPLES[key]}" if offered else ""
            raise ValueError(text + advice) from error


class InjectionTable(Table):
    """``[injection]``: invented thrusts that try the arc's own detection test."""

    arcs: int = Field(default=400, ge=1, description="Arcs made for each size of the thrust.")
    direction: str | Vector = Field(
        default="worst", description='"worst", "best", a letter of R, T, N, or a vector in R, T, N.'
    )
    shares: tuple[NotNegative, ...] = Field(
        default=(0.0, 0.5, 1.0, 1.5),
        min_length=1,
        description="Sizes as shares of the detection threshold in that direction.",
    )
    noise: Literal["model", "residuals"] = Field(
        default="model", description="Noise from the error model, or resampled by station-night."
    )
    reject: bool = Field(default=True, description="Whether the outlier rule works on each arc.")

    @field_validator("direction")
    @classmethod
    def _known(cls, direction: str | Vector) -> str | Vector:
        words = ("worst", "best", "R", "T", "N")
        if isinstance(direction, str) and direction not in words:
            raise ValueError(f"there is no such direction; {nearest(direction, words)}")
        return direction


class PlannedTable(Table):
    """``[[planned]]``: a night of observations to come, for the forecast."""

    utc: str = Field(description="Middle of the night's records, ISO date and time, UTC.")
    station: str = Field(default="500", description="Station code; 500 is the geocentre.")
    n: int = Field(default=4, ge=1, description="Records.")
    sigma_arcsec: Positive = Field(default=0.3, description="Independent error of each record.")
    common_arcsec: NotNegative = Field(default=0.1, description="Error the night's records share.")
    spacing_d: Positive = Field(default=0.02, description="Time between records.")

    def night(self) -> PlannedNight:
        """The night as the forecast takes it."""
        return PlannedNight(**self.model_dump())

    @model_validator(mode="after")
    def _sound(self) -> Self:
        see_whether(parse_time, self.utc, "utc", key="utc")
        see_whether(station, self.station, key="station")
        return self


class OutgassingTable(Table):
    """``[[outgassing]]``: one species that leaves the nucleus and pushes it.

    Rate, speed and collimation take a number, a text with an uncertainty, or a table.
    """

    rate: Spec = Field(description="Production, molecules/s unless a unit stands beside it.")
    at: Spec = Field(description="Heliocentric distance at which the rate holds, au.")
    species: str = Field(default="H2O", description="Formula, which gives the molecular mass.")
    speed: Spec | None = Field(
        default=None, description="Outflow speed, km/s, or the name of a law; default 0.85 r^-0.5."
    )
    collimation: Spec | None = Field(
        default=None, description="Momentum not cancelled: 0 even, 1 a beam; default about 0.5."
    )

    def given(self) -> dict[str, Any]:
        """The keys that were given, as `Outgassing.from_dict` takes them."""
        return self.model_dump(exclude_none=True)

    @field_validator("rate", "at", "speed", "collimation")
    @classmethod
    def _sound_alone(cls, value: Any, info: ValidationInfo) -> Any:
        """Each key by itself, so that a fault is told where it stands."""
        if value is not None:
            key = str(info.field_name)
            sound = {"rate": "1 kg/s", "at": 1.0, "speed": "1 km/s", "species": "H2O"}
            _sound_spec(key, Outgassing.from_dict, {**sound, key: value})
        return value

    @field_validator("species")
    @classmethod
    def _known(cls, species: str, info: ValidationInfo) -> str:
        if "rate" in info.data and species != "dust":
            table = {"rate": info.data["rate"], "at": 1.0, "species": species}
            _sound_spec("species", Outgassing.from_dict, table)
        return species

    @model_validator(mode="after")
    def _sound(self) -> Self:
        see_whether(Outgassing.from_dict, self.given())
        return self


class NucleusTable(Table):
    """``[nucleus]``: what is assumed about the body."""

    density: Spec = Field(
        default={"low": 200.0, "mode": 500.0, "high": 800.0},
        description="Bulk density, kg/m3; about 500 is common practice for comet nuclei.",
    )
    diameter: Spec | None = Field(
        default=None, description="Diameter where it is known otherwise than from H, m."
    )
    H: Spec | None = Field(default=None, description="Absolute magnitude of the bare nucleus.")
    albedo: Spec | None = Field(
        default=None, description="Geometric albedo, for the diameter from brightness."
    )
    coma: bool = Field(
        default=False, strict=True, description="Whether H may hold light of a coma."
    )
    radiation_coefficient: float = Field(
        default=1.0,
        strict=True,
        gt=0.0,
        le=2.0,
        description="C_R of radiation pressure: 1 absorbing sphere, 2 mirror.",
    )

    def size(self) -> KnownSize | None:
        """What is known of the size: the diameter if given, else the brightness, else None."""
        if self.diameter is not None:
            return MeasuredDiameter(self.diameter)
        return None if self.H is None else Photometry(self.H, self.albedo, self.coma)

    @field_validator("density", "diameter", "H", "albedo")
    @classmethod
    def _sound(cls, value: Any, info: ValidationInfo) -> Any:
        if value is None:
            return value
        if info.field_name == "albedo":
            _sound_spec("albedo", Photometry, 18.0, value)
        else:
            makers = {"density": bulk_density, "diameter": MeasuredDiameter, "H": Photometry}
            _sound_spec(str(info.field_name), makers[str(info.field_name)], value)
        return value

    @model_validator(mode="after")
    def _albedo_has_use(self) -> Self:
        if self.albedo is not None and self.H is None:
            raise ValueError("albedo says nothing without H; give H beside it, or diameter instead")
        return self


class ReachTable(Table):
    """``[reach]``: which production rates would this arc have revealed?

    What is not given here is taken from ``[nucleus]`` and ``[[outgassing]]``.
    """

    diameter: Spec | None = Field(
        default=None, description="Size asked about, m; default that of [nucleus], else a range."
    )
    density: Spec | None = Field(default=None, description="Bulk density, kg/m3.")
    species: tuple[str, ...] | None = Field(
        default=None,
        min_length=1,
        description="Species asked about; default those of [[outgassing]], else H2O, CO2, CO.",
    )
    at: Positive | None = Field(
        default=None,
        description="Heliocentric distance asked about, au; default that of [[outgassing]], else "
        "the arc's least.",
    )
    speed: Spec | None = Field(default=None, description="As in [[outgassing]].")
    collimation: Spec | None = Field(default=None, description="As in [[outgassing]].")
    diameters_m: tuple[Positive, ...] = Field(
        default=DEFAULT_DIAMETERS_M, min_length=1, description="Sizes of the table and the figure."
    )

    def size(self) -> KnownSize | None:
        """The size asked about, or None."""
        return None if self.diameter is None else MeasuredDiameter(self.diameter)

    def asks_beyond(self) -> bool:
        """Whether species, distance, speed or collimation are asked about for themselves."""
        own = (self.species, self.at, self.speed, self.collimation)
        return any(given is not None for given in own)

    @field_validator("diameter", "density", "species", "speed", "collimation")
    @classmethod
    def _sound(cls, value: Any, info: ValidationInfo) -> Any:
        if value is None:
            return value
        name = str(info.field_name)
        if name in ("diameter", "density"):
            _sound_spec(name, MeasuredDiameter if name == "diameter" else bulk_density, value)
        for species in value if name == "species" else ():
            _sound_spec(name, Outgassing, "1e26 1/s", at=1.0, species=species)
        if name in ("speed", "collimation"):
            _sound_spec(name, Outgassing, "1e26 1/s", at=1.0, **{name: value})
        return value


class OutputTable(Table):
    """``[output]``: where the results go."""

    folder: Path | None = Field(
        default=None, description="Output folder; out/<name of the case file> unless given."
    )
    figures: Literal["png", "pdf"] = Field(default="png", description="Format of the figures.")


class Case(Table):
    """Every choice of one analysis.

    Read one with `read_case`; ``str(case)`` lists the choices, ``case.to_dict()`` is what the
    record keeps.
    """

    object: ObjectTable = ObjectTable()
    arc: ArcTable
    errors: ErrorsTable = ErrorsTable()
    forces: ForcesTable = ForcesTable()
    orbit: OrbitTable | None = None
    thrust: ThrustTable = ThrustTable()
    fit: FitTable = FitTable()
    detection: DetectionTable = DetectionTable()
    sampling: SamplingTable = SamplingTable()
    injection: InjectionTable = InjectionTable()
    planned: tuple[PlannedTable, ...] = ()
    outgassing: tuple[OutgassingTable, ...] = ()
    nucleus: NucleusTable = NucleusTable()
    reach: ReachTable | None = None
    output: OutputTable = OutputTable()
    _notice: str = PrivateAttr(default="")

    @property
    def notice(self) -> str:
        """What its user should know of the case as a whole; "" where there is nothing."""
        return self._notice

    def own_stations(self) -> dict[str, dict[str, Any]]:
        """The user's own stations, as `read_arc` takes them."""
        return {code: table.model_dump() for code, table in self.arc.stations.items()}

    def budget(self) -> Outgassing | None:
        """The outgassing budget, or None when the case gives none."""
        if not self.outgassing:
            return None
        first, *others = (table.given() for table in self.outgassing)
        return Outgassing.from_dict({**first, "more": others})

    def __str__(self) -> str:
        lines = []
        for table, choices in self.to_dict().items():
            lines.append(f"[{table}]")
            rows = choices if isinstance(choices, list) else [choices or {}]
            lines += [f"  {key} = {value}" for row in rows for key, value in row.items()]
        return "\n".join(lines)

    def to_dict(self) -> dict[str, Any]:
        """All choices, defaults included, as JSON-able values."""
        return self.model_dump(mode="json")


def read_case(path: str | Path) -> Case:
    """Read and validate a case file.

    Parameters
    ----------
    path : path of a TOML file

    Returns
    -------
    Case
        With the paths in it made absolute.

    Raises
    ------
    CaseError
        One sentence with file, line, table and key, and the nearest right key.
    """
    path = Path(path)
    return _in_folder(read_toml(path, Case), path, path.parent)


def _in_folder(case: Case, path: Path, base: Path) -> Case:
    """The case with its paths counted from ``base``, and with an output folder."""
    folder = case.output.folder or Path("out") / path.stem
    return case.model_copy(
        update={
            "arc": case.arc.model_copy(update={"file": base / case.arc.file}),
            "errors": case.errors.in_folder(base),
            "output": case.output.model_copy(update={"folder": (base / folder).resolve()}),
        }
    )


def case_for(path: str | Path, **choices: Any) -> Case:
    """The case of a case file, or of a bare arc with a default for everything else.

    Parameters
    ----------
    path : path
        What ends in .toml is a case file, anything else an arc.
    **choices
        Choices that override those of the file; None leaves a choice as it is.  The names are
        those of `CHOICES`.

    Raises
    ------
    CaseError
        As `read_case`, and for a choice that is not allowed.
    """
    path = Path(path)
    if path.suffix == ".toml":
        case = read_case(path)
    else:
        case = _in_folder(Case(arc=ArcTable(file=path)), path, Path())
    given = {name: value for name, value in choices.items() if value is not None}
    if given:
        said = " ".join(f"--{name.removesuffix('_name')} {value}" for name, value in given.items())
        case = with_choices(
            case, f"{path} with {said}", {CHOICES[name]: value for name, value in given.items()}
        )
    if path.suffix != ".toml":
        case._notice = _bare(path, case)
    return case


def _bare(path: Path, case: Case) -> str:
    """What the user of an arc without a case file should know."""
    beside = path.with_suffix(".toml")
    other = f"; {beside} beside it may choose otherwise" if beside.is_file() else ""
    return (
        f"{path} is an arc without a case file, so that every choice has its default, the thrust "
        f"law {case.thrust.law} and the errors of the error model {case.errors.scheme} among "
        f"them{other}."
    )


CHOICES = {
    "law": ("thrust", "law"),
    "components": ("thrust", "components"),
    "seed": ("sampling", "seed"),
    "object_name": ("object", "name"),
    "output": ("output", "folder"),
}
"""Choices that can be made beside a case file: their table and key in it."""
