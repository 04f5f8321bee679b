"""Arc: the frozen, validated table of observations; imports errors and this room's rules, fields
and stations.

Every reader hands the text of its records to `assemble`, which checks it column by column against
the rules of the standard and derives what the rest of ngbound works with. Nothing is dropped: a
record that cannot be used in a fit stays in the table with ``use`` False and the reason in
``why_not``.
"""

import difflib
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field, replace
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ngbound.arc.ades_rules import (
    COLUMNS,
    NUMBER_COLUMNS,
    OCCULTATION,
    OFFSET,
    OPTICAL,
    OPTICAL_RESIDUAL,
    RADAR,
    RADAR_RESIDUAL,
    REQUIRED,
    TEXT_COLUMNS,
    kind_of_columns,
)
from ngbound.arc.checking import Checker
from ngbound.arc.fields import calendar_date, format_times, plain_number
from ngbound.arc.parquet import read_table, write_table
from ngbound.arc.records import Angles, Context, ObjectArray, Records
from ngbound.arc.stations import Station, station, user_stations
from ngbound.arc.whole_file import PathLike
from ngbound.constants import EPHEMERIS_MJD
from ngbound.errors import ArcError
from ngbound.rounding import counted

ALWAYS_TEXT = (
    "permID",
    "provID",
    "trkSub",
    "mode",
    "stn",
    "prog",
    "obsTime",
    "astCat",
    "band",
    "sys",
    "notes",
)
ALWAYS_NUMBER = (
    "ra",
    "dec",
    "rmsRA",
    "rmsDec",
    "rmsCorr",
    "rmsTime",
    "mag",
    "ctr",
    "pos1",
    "pos2",
    "pos3",
    "vel1",
    "vel2",
    "vel3",
)
"""ADES columns that every arc has, filled or not."""

DERIVED = (
    "kind",
    "use",
    "why_not",
    "utc_day",
    "utc_sec",
    "ra_rad",
    "dec_rad",
    "raText",
    "decText",
    "digits_ra_arcsec",
    "digits_dec_arcsec",
    "digits_time_s",
    "site",
    "line",
    "block",
    "object",
    "corrReported",
)
"""Columns that ngbound adds to those of ADES."""
BIAS_COLUMNS = ("bias_ra_arcsec", "bias_dec_arcsec")
"""Columns of an arc corrected for the offsets of its star catalogues: what was subtracted (RA times
cos dec); nan where nothing was."""

REASON_MOVING_RADAR = "a radar record of a {site} station, whose position it cannot give"
REASON_LEADING_EDGE = (
    "a delay to the point of strongest echo, one radius nearer than the centre of mass; "
    "radius_km of the error model makes it usable"
)
REASON_NO_ECHO = "the radar record gives no delay or Doppler shift with its error"
REASON_OFFSET = "an offset from another body, not reduced to a position"
REASON_RESIDUAL = "a residual record holds no observed position"
REASON_DEPRECATED = "marked as deprecated"
REASON_NO_POSITION = "the record gives no position of the {site} station"
REASON_NO_ANGLES = "the record gives no position of the object"
REASON_SYSTEM = "the position system {system} of the station cannot be used"
REASON_CENTRE = "the station's position is not counted from the Earth"
REASON_EPHEMERIS = "the date lies outside the planetary ephemeris (1550 to 2650)"
EARTH_CENTRE = 399
LIGHT_TIME_D = 7.0
"""The ephemeris is asked for the places of bodies so many days earlier and later, too."""


@dataclass(frozen=True, eq=False)
class Arc:
    """What was observed: a validated table, one row an observation.

    Parameters
    ----------
    table : pandas.DataFrame
        ADES columns as far as present, and the derived columns named in `DERIVED`. Angles ``ra``,
        ``dec`` in degrees and ``ra_rad``, ``dec_rad`` in radians; ``utc_day`` the MJD of the UTC
        day and ``utc_sec`` the seconds into it (up to 86401 in a leap second); ``digits_ra_arcsec``
        (times cos dec), ``digits_dec_arcsec``, ``digits_time_s`` the resolution that the written
        digits imply (0: no statement).
    source : str
        Where the records came from.
    label : str
        A name given by the user, or "".
    contexts : tuple
        The obsContext headers of the file; column ``block`` points into them.
    stations : mapping of str to Station
        Stations of the user's own table.
    """

    table: pd.DataFrame
    source: str
    label: str = ""
    contexts: tuple[Context, ...] = ()
    stations: Mapping[str, Station] = field(default_factory=dict)

    def __len__(self) -> int:
        return len(self.table)

    @property
    def name(self) -> str:
        """The object's designation (the user's label when one was given)."""
        if self.label:
            return self.label
        names = [n for n in pd.unique(self.table["object"]) if n]
        return names[0] if len(names) == 1 else ", ".join(names) or "unnamed object"

    @property
    def used(self) -> "Arc":
        """The records that a fit can use, sorted by time (stable), with a fresh index; ``stn`` of
        a radar record is its receiver, where and when it was timed."""
        kept = self.table[self.table["use"].to_numpy(dtype=bool)]
        radar = (kept["kind"] == RADAR).to_numpy(dtype=bool)
        if radar.any():
            kept = kept.assign(stn=np.where(radar, kept["rcv"], kept["stn"]))
        kept = kept.sort_values(["utc_day", "utc_sec"], kind="stable").reset_index(drop=True)
        return replace(self, table=kept)

    def select(self, mask: Any) -> "Arc":
        """The rows where ``mask`` (bool, one per row; or row positions) holds, in their order."""
        mask = np.asarray(mask)
        if mask.dtype == bool and len(mask) != len(self):
            raise ArcError(
                f"The selection has {len(mask)} entries, the arc {len(self)} rows; give one per "
                "row."
            )
        return replace(
            self, table=self.table[mask] if mask.dtype == bool else self.table.iloc[mask]
        )

    def station(self, code: str) -> Station:
        """The station with this code, the user's own table first; StationError when unknown."""
        return station(code, self.stations)

    @property
    def span_d(self) -> float:
        """Days from the first to the last record."""
        mjd = self.table["utc_day"].to_numpy() + self.table["utc_sec"].to_numpy() / 86400.0
        return float(mjd.max() - mjd.min()) if len(mjd) else 0.0

    def to_dict(self) -> dict[str, Any]:
        """JSON-able summary of the arc."""
        table = self.table
        stations = table["stn"]
        if "rcv" in table:
            stations = stations.where(stations != "", table["rcv"])
        days = table["utc_day"].to_numpy()
        aside = table.loc[~table["use"].to_numpy(dtype=bool), "why_not"]
        return {
            "name": self.name,
            "source": self.source,
            "n_records": len(table),
            "n_usable": int(table["use"].sum()),
            "set_aside": {str(k): int(v) for k, v in aside.value_counts().items()},
            "kinds": {str(k): int(v) for k, v in table["kind"].value_counts().items()},
            "stations": {str(k): int(v) for k, v in stations.value_counts().items() if k},
            "catalogues": {str(k): int(v) for k, v in table["astCat"].value_counts().items() if k},
            "modes": {str(k): int(v) for k, v in table["mode"].value_counts().items() if k},
            "first_day": iso_day(int(days.min())) if len(days) else None,
            "last_day": iso_day(int(days.max())) if len(days) else None,
            "span_d": self.span_d,
        }

    def __str__(self) -> str:
        told = self.to_dict()
        text = (
            f"Arc of {self.name}: {counted(len(self), 'observation')} from "
            f"{counted(len(told['stations']), 'station')}, {told['first_day']} to "
            f"{told['last_day']} ({self.span_d:.1f} d)"
        )
        return text + self.told_set_aside()

    def told_set_aside(self) -> str:
        """How many records no fit uses, and why, as the end of a sentence; "" for none."""
        reasons = "; ".join(
            f"{count} ({reason})" for reason, count in self.to_dict()["set_aside"].items()
        )
        return f"; set aside: {reasons}" if reasons else ""

    def to_parquet(self, path: PathLike) -> None:
        """Write the arc as Parquet, nothing lost; needs pyarrow (extra "parquet"), else
        ArcError."""
        notes = {
            "source": self.source,
            "label": self.label,
            "contexts": self.contexts,
            "stations": {code: asdict(place) for code, place in self.stations.items()},
        }
        write_table(self.table, notes, path)

    @classmethod
    def from_parquet(cls, path: PathLike) -> "Arc":
        """An arc that `to_parquet` wrote; ArcError when the file holds none, or without
        pyarrow."""
        needed = [*ALWAYS_TEXT, *ALWAYS_NUMBER, *(c for c in DERIVED if c != "corrReported")]
        table, notes, source = read_table(path, needed, [*COLUMNS, *DERIVED, *BIAS_COLUMNS])
        try:
            contexts = tuple(_context_of(c) for c in notes["contexts"])
            places = {code: Station(**place) for code, place in notes["stations"].items()}
            columns = {str(name): _plain(table[name]) for name in table}
            return cls(_table(columns), str(notes["source"]), str(notes["label"]), contexts, places)
        except (ValueError, KeyError, TypeError, AttributeError) as error:
            raise ArcError(
                f"{source}: the metadata of the arc are broken ({error}). Write the file again.",
                file=source,
            ) from error

    @classmethod
    def from_frame(
        cls,
        frame: pd.DataFrame,
        *,
        name: str = "",
        object: str | None = None,
        stations: Mapping[str, Any] | None = None,
    ) -> "Arc":
        """An arc from a data frame with ADES column names and units.

        Parameters
        ----------
        frame : pandas.DataFrame
            Columns are ADES names; those that ngbound derives are ignored and derived anew. Values
            may be texts (whose digits then state a precision) or numbers and timestamps (which
            state none).
        name : str
            A name for the object, if the frame has no identification or another one is liked
            better.
        object : str, optional
            Which object to take, when there are several.
        stations : mapping, optional
            Own stations, see `user_stations`.

        Raises
        ------
        ArcError
            For unknown or missing columns and for values out of range.
        """
        frame = frame.reset_index(drop=True)
        known = [c for c in frame.columns if c in COLUMNS]
        for column in frame.columns:
            if column not in COLUMNS and column not in DERIVED:
                near = difflib.get_close_matches(str(column), list(COLUMNS), n=3, cutoff=0.4)
                raise ArcError(
                    f"data frame: the column {column!r} is not an ADES column; near matches: "
                    f"{', '.join(near) or 'none'}. "
                    "Rename it, or leave it out.",
                    column=column,
                )
        n = len(frame)
        text = {c: texts_of(frame[c]) for c in known}
        _undo_error_of_offset(frame, text)
        if n == 0:
            raise ArcError("data frame: it has no rows; an arc needs at least one observation.")
        if "kind" in frame:
            kind = frame["kind"].to_numpy(dtype="O")
            strange = [str(k) for k in pd.unique(kind) if k not in REQUIRED]
            if strange:
                raise ArcError(
                    f"data frame: the kind {strange[0]!r} is not a kind of record; use one of "
                    f"{', '.join(REQUIRED)}, or leave the column out.",
                    column="kind",
                    value=strange[0],
                )
        else:
            filled = {c for c in known if (text[c] != "").any()}
            one = kind_of_columns(filled) or kind_of_columns(set(known)) or OPTICAL
            kind = np.full(n, one, dtype="O")
        if not name and not {"permID", "provID", "artSat", "trkSub"} & set(known):
            name = "unnamed object"
        records = Records(
            source="data frame",
            text=text,
            kind=kind,
            line=np.arange(n, dtype=np.int64),
            block=np.full(n, -1, dtype=np.int64),
            set_aside=np.array([""] * n, dtype="O"),
            unit_name="row",
            angles=_frame_angles(frame, text, kind),
        )
        return assemble(records, label=name, object=object, stations=stations)


def _context_of(listed: Any) -> Context:
    return tuple(
        (str(name), str(text), tuple((str(c), str(v)) for c, v in children))
        for name, text, children in listed
    )


def _plain(column: pd.Series) -> NDArray[Any]:
    """The values of a column, texts as objects."""
    return column.to_numpy(dtype="object" if pd.api.types.is_string_dtype(column) else None)


def observers_of(arc: Arc) -> ObjectArray:
    """Who observed each row (n,): the code, and for roving observers, who share one, the place to
    a hundredth of a degree."""
    table = arc.table
    who = table["stn"].to_numpy(dtype=object).copy()
    for row in np.flatnonzero((table["site"] == "roving").to_numpy(dtype=bool)).tolist():
        who[row] += f" at {table['pos1'].iat[row]:.2f}, {table['pos2'].iat[row]:.2f}"
    return who


def iso_day(mjd: int) -> str:
    """Calendar date of an MJD day number."""
    year, month, day = calendar_date(np.array([mjd]))
    return f"{year[0]:04d}-{month[0]:02d}-{day[0]:02d}"


def texts_of(column: pd.Series) -> ObjectArray:
    """A column of a data frame as trimmed texts ("" for a missing value); numbers in their shortest
    exact form."""
    if pd.api.types.is_datetime64_any_dtype(column):
        stamps = (
            column.dt.tz_convert("UTC").dt.tz_localize(None) if column.dt.tz is not None else column
        )
        micro = stamps.to_numpy().astype("datetime64[us]").astype(np.int64)
        day = micro // 86_400_000_000
        return format_times(
            day + 40587, (micro - day * 86_400_000_000) / 1e6, np.full(len(micro), 6)
        )
    out = np.array([""] * len(column), dtype=object)
    for i, value in enumerate(column.to_numpy(dtype=object)):
        if isinstance(value, str):
            out[i] = value.strip()
        elif value is None or value is pd.NA or value is pd.NaT or value != value:
            continue
        elif isinstance(value, bool | np.bool_):
            out[i] = str(int(value))
        elif isinstance(value, int | np.integer):
            out[i] = str(int(value))
        elif isinstance(value, float | np.floating):
            out[i] = plain_number(float(value)) if np.isfinite(value) else str(value)
        else:
            out[i] = str(value).strip()
    return out


def _frame_angles(
    frame: pd.DataFrame, text: Mapping[str, ObjectArray], kind: ObjectArray
) -> Angles | None:
    """Angles given as numbers, which state no precision; None when they were given as text. Those
    of an occultation are the star's."""
    star = np.asarray(kind == OCCULTATION, dtype=bool)
    pairs = {}
    for ra, dec, mine in (("ra", "dec", ~star), ("raStar", "decStar", star)):
        if mine.any() and {ra, dec} <= set(frame.columns):
            pairs[ra, dec] = mine
    if not pairs or not all(pd.api.types.is_numeric_dtype(frame[c]) for p in pairs for c in p):
        return None
    n = len(frame)
    again = {"digits_ra_arcsec", "digits_dec_arcsec", "raText", "decText", "ra", "dec"}
    known = again <= set(frame.columns)
    blank = np.full(n, "", dtype=object)
    made = Angles(np.full(n, np.nan), np.full(n, np.nan), blank, blank.copy(), *np.zeros((3, n)))
    for (ra, dec), mine in pairs.items():
        made.ra_deg[mine] = frame[ra].to_numpy(dtype=np.float64)[mine]
        made.dec_deg[mine] = frame[dec].to_numpy(dtype=np.float64)[mine]
        made.ra_text[mine] = (frame["raText"].to_numpy(dtype=object) if known else text[ra])[mine]
        made.dec_text[mine] = (frame["decText"].to_numpy(dtype=object) if known else text[dec])[
            mine
        ]
    if known:
        cos = np.cos(np.radians(frame["dec"].to_numpy(dtype=float)))
        with np.errstate(invalid="ignore", divide="ignore"):
            made.ra_step_arcsec[:] = frame["digits_ra_arcsec"].to_numpy(dtype=float) / np.abs(cos)
        made.dec_step_arcsec[:] = frame["digits_dec_arcsec"].to_numpy(dtype=float)
    if "obsTime" in frame and pd.api.types.is_string_dtype(frame["obsTime"]):
        made.time_step_s[:] = np.nan
    return made


def _undo_error_of_offset(frame: pd.DataFrame, text: dict[str, ObjectArray]) -> None:
    """What `_error_of_offset` derived in the table of an arc is left to be derived anew."""
    if not {"corrReported", "rmsDist", "rmsPA", "rmsRA", "rmsDec"} <= set(frame.columns):
        return
    turned = (text["rmsDist"] != "") & (text["rmsPA"] != "") & (text["dist"] != "")
    for name in ("rmsRA", "rmsDec"):
        text[name] = np.where(turned, "", text[name])
    text["rmsCorr"] = np.where(turned, texts_of(frame["corrReported"]), text["rmsCorr"])


# --------------------------------------------------------------------------- from text to an arc


def assemble(
    records: Records,
    *,
    label: str = "",
    object: str | None = None,
    stations: Mapping[str, Any] | None = None,
) -> Arc:
    """Check records and derive the table of an `Arc`.

    Raises ArcError that names file, line, column, value and rule for the first record that breaks
    one.
    """
    n = len(records.kind)
    if n == 0:
        raise ArcError(
            f"{records.source}: there is no observation in it; an arc needs at least one.",
            file=records.source,
        )
    own = user_stations(stations or {})
    checker = Checker(records)
    checker.identification(optional=bool(label))
    checker.required()
    columns: dict[str, Any] = {}
    for column in TEXT_COLUMNS:
        if column in ALWAYS_TEXT or checker.filled(column).any():
            columns[column] = checker.text_column(column)
    for column in NUMBER_COLUMNS:
        if column in ALWAYS_NUMBER or checker.filled(column).any():
            columns[column] = checker.number_column(column)
    if records.version == "2017" and OCCULTATION in checker.kinds:
        unsaid = checker.of_kind(OCCULTATION) & (columns["mode"] == "")
        columns["mode"] = np.where(unsaid, "OCC", columns["mode"])
    checker.groups()
    day, sec, time_step = checker.times()
    columns["utc_day"], columns["utc_sec"] = day, sec
    columns.update(checker.angles(columns, time_step))
    _error_of_offset(columns, records.kind)
    columns["kind"], columns["line"], columns["block"] = records.kind, records.line, records.block
    columns["site"] = checker.sites(columns, own)
    columns["object"] = _objects(columns, checker)
    why = _why_not(records, columns, checker)
    columns["why_not"], columns["use"] = why, (why == "").astype(bool)
    arc = Arc(_table(columns), records.source, label, records.contexts, own)
    return _one_object(arc, object)


def _table(columns: Mapping[str, Any]) -> pd.DataFrame:
    """Columns as a table whose texts are Python objects, whatever kinds of string this pandas has:
    turning a million rows into another kind takes longer than reading them."""
    objects = {
        name: pd.Series(values, dtype="object", copy=False)
        for name, values in columns.items()
        if np.asarray(values).dtype == "object"
    }
    return pd.DataFrame(dict(columns) | objects, copy=False)


def _error_of_offset(columns: dict[str, Any], kind: ObjectArray) -> None:
    """Errors given as rmsDist (arcsec) and rmsPA (deg), turned into rmsRA, rmsDec and rmsCorr; the
    correlation as reported stays in corrReported."""
    if not {"dist", "pa", "rmsDist", "rmsPA"} <= set(columns):
        return
    s_d, s_p = columns["rmsDist"], np.radians(columns["rmsPA"]) * columns["dist"]
    pa = np.radians(columns["pa"])
    rho = np.nan_to_num(columns["rmsCorr"])
    sin, cos = np.sin(pa), np.cos(pa)
    cov = rho * s_d * s_p
    var_ra = (s_d * sin) ** 2 + (s_p * cos) ** 2 + 2.0 * cov * sin * cos
    var_dec = (s_d * cos) ** 2 + (s_p * sin) ** 2 - 2.0 * cov * sin * cos
    both = (s_d**2 - s_p**2) * sin * cos + cov * (cos**2 - sin**2)
    polar = np.isin(kind, (OCCULTATION, OFFSET))
    take = polar & np.isfinite(var_ra) & ~np.isfinite(columns["rmsRA"])
    columns["rmsRA"] = np.where(take, np.sqrt(np.fmax(var_ra, 0.0)), columns["rmsRA"])
    columns["rmsDec"] = np.where(take, np.sqrt(np.fmax(var_dec, 0.0)), columns["rmsDec"])
    with np.errstate(invalid="ignore", divide="ignore"):
        turned = np.where(take, both / np.sqrt(var_ra * var_dec), columns["rmsCorr"])
    if take.any():
        columns["corrReported"] = np.where(take, columns["rmsCorr"], np.nan)
    columns["rmsCorr"] = turned


def _objects(columns: Mapping[str, Any], checker: Checker) -> ObjectArray:
    """One name a record: permID, else provID (the number where the file links the two), else
    artSat, else trkSub."""
    perm, prov, trk = columns["permID"], columns["provID"], columns["trkSub"]
    has_perm, has_prov = checker.filled("permID"), checker.filled("provID")
    if has_perm.all():
        return perm
    name = np.where(has_perm, perm, prov)
    both = has_perm & has_prov
    if both.any():
        link = dict(zip(prov[both], perm[both], strict=True))
        alone = ~has_perm & has_prov
        name[alone] = [link.get(p, p) for p in prov[alone]]
    named = has_perm | has_prov
    if "artSat" in columns:
        name = np.where(named, name, columns["artSat"])
        named = named | checker.filled("artSat")
    return np.where(named, name, trk)


def _why_not(records: Records, columns: Mapping[str, Any], checker: Checker) -> ObjectArray:
    """Why each record cannot be used in a fit, "" when it can; the first reason found counts."""
    why = records.set_aside.copy()
    free = np.asarray(why == "", dtype=bool)

    def set_aside(mask: NDArray[np.bool_], reason: str) -> None:
        mask = mask & free
        if mask.any():
            why[mask] = reason
            free[mask] = False

    set_aside(checker.of_kind(OFFSET), REASON_OFFSET)
    residual = checker.of_kind(OPTICAL_RESIDUAL) | checker.of_kind(RADAR_RESIDUAL)
    set_aside(residual, REASON_RESIDUAL)
    set_aside(checker.filled("deprecated"), REASON_DEPRECATED)
    day, (first, last) = columns["utc_day"], EPHEMERIS_MJD
    set_aside((day < first + LIGHT_TIME_D) | (day > last - LIGHT_TIME_D), REASON_EPHEMERIS)
    site = columns["site"]
    radar = checker.of_kind(RADAR)
    if radar.any():
        for kind in ("roving", "space"):
            set_aside(radar & (site == kind), REASON_MOVING_RADAR.format(site=kind))
        delay, doppler = (_echo_given(columns, name) for name in ("delay", "doppler"))
        set_aside(radar & ~(delay | doppler), REASON_NO_ECHO)
        edge = np.asarray(columns["com"] == 0) if "com" in columns else ~radar
        set_aside(radar & edge & delay, REASON_LEADING_EDGE)
    lost = ~(np.isfinite(columns["ra_rad"]) & np.isfinite(columns["dec_rad"]))
    set_aside(lost & ~radar, REASON_NO_ANGLES)
    moving = np.asarray(site != "fixed", dtype=bool)
    if not moving.any():
        return why
    placed = (
        np.isfinite(columns["pos1"])
        & np.isfinite(columns["pos2"])
        & np.isfinite(columns["pos3"])
        & checker.filled("sys")
    )
    for needing in ("roving", "space"):
        set_aside((site == needing) & ~placed, REASON_NO_POSITION.format(site=needing))
    set_aside(moving & (columns["sys"] == "IAU"), REASON_SYSTEM.format(system="IAU"))
    elsewhere = np.isfinite(columns["ctr"]) & (columns["ctr"] != EARTH_CENTRE)
    set_aside(moving & elsewhere, REASON_CENTRE)
    return why


def _echo_given(columns: Mapping[str, Any], name: str) -> NDArray[np.bool_]:
    """Where a delay or a Doppler shift stands beside a positive error."""
    nan = np.full(len(columns["site"]), np.nan)
    error = columns.get("rms" + name.capitalize(), nan)
    return np.asarray(np.isfinite(columns.get(name, nan)) & np.isfinite(error) & (error > 0.0))


def _one_object(arc: Arc, wanted: str | None) -> Arc:
    """The arc of one object; ArcError that lists the objects when there are several and none was
    asked for."""
    if wanted is None and (arc.label or len(pd.unique(arc.table["object"])) == 1):
        return arc
    counts = arc.table["object"].value_counts()
    if wanted is not None:
        key = wanted.strip().strip("()")
        table = arc.table
        mask = np.zeros(len(table), dtype=bool)
        for column in ("object", "permID", "provID", "trkSub"):
            mask |= (table[column] == key).to_numpy(dtype=bool)
        if not mask.any():
            near = difflib.get_close_matches(key, [str(c) for c in counts.index], n=4, cutoff=0.0)
            raise ArcError(
                f"{arc.source}: there is no object {wanted!r} in it; near matches: "
                f"{', '.join(near)}. "
                "Choose one of the objects in the file with object= (--object).",
                objects=list(counts.index),
            )
        return replace(arc, table=table[mask].reset_index(drop=True))
    if len(counts) > 1:
        listed = ", ".join(f"{k} ({v})" for k, v in counts.head(12).items())
        more = f" and {len(counts) - 12} more" if len(counts) > 12 else ""
        raise ArcError(
            f"{arc.source}: there are {len(counts)} objects in it: {listed}{more}. "
            "An arc is of one object: choose it with object= (--object).",
            objects=[str(k) for k in counts.index],
        )
    return arc
