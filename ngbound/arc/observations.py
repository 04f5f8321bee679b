"""Arc: the frozen, validated table of observations; imports errors and this room's rules, fields
and stations.

Every reader hands the text of its records to `assemble`, which checks it column by column against
the rules of the standard and derives what the rest of ngbound works with. Nothing is dropped: a
record that cannot be used in a fit stays in the table with ``use`` False and the reason in
``why_not``.
"""

import difflib
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
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
    ColumnRule,
    kind_of_columns,
    matches,
)
from ngbound.arc.fields import (
    calendar_date,
    format_times,
    parse_decimals,
    parse_doubles,
    parse_times,
    plain_number,
)
from ngbound.arc.stations import Station, near_codes, station, user_stations
from ngbound.errors import ArcError, StationError

ObjectArray = NDArray[np.object_]
FloatArray = NDArray[np.float64]

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
)
"""Columns that ngbound adds to those of ADES."""

REASON_RADAR = "radar is not used in fits yet"
REASON_OFFSET = "offsets from another body are not used in fits yet"
REASON_RESIDUAL = "a residual record holds no observed position"
REASON_DEPRECATED = "marked as deprecated"
REASON_NO_POSITION = "the record gives no position of the {site} station"
REASON_NO_ANGLES = "the record gives no position of the object"
REASON_SYSTEM = "the position system {system} of the station cannot be used"
REASON_CENTRE = "the station's position is not counted from the Earth"
EARTH_CENTRE = 399
UNWRITABLE = re.compile(r"[\x00-\x1f\x7f|\ud800-\udfff\ufffe\uffff]")
"""What neither PSV nor XML can hold in a value."""

Context = tuple[tuple[str, str, tuple[tuple[str, str], ...]], ...]
"""One obsContext: (element, its own text, ((child, text), ...)) in the order of the file."""


@dataclass(frozen=True)
class Angles:
    """Positions that a reader has parsed itself: degrees, reported text, resolution in arcsec (RA
    not times cos dec) and s (NaN: what the digits of obsTime say)."""

    ra_deg: FloatArray
    dec_deg: FloatArray
    ra_text: ObjectArray
    dec_text: ObjectArray
    ra_step_arcsec: FloatArray
    dec_step_arcsec: FloatArray
    time_step_s: FloatArray


@dataclass(frozen=True)
class Records:
    """Records as text, before any check.

    ``text`` holds an object array of strings per ADES column ("" where absent); ``kind``, ``line``
    and ``block`` (index into ``contexts``, -1 without) stand one per record; ``set_aside`` is a
    reason, or "". ``strict`` asks for the lexical rules of ADES 2022 (no leading zeros, limited
    digits), which other sources do not promise.
    """

    source: str
    text: Mapping[str, ObjectArray]
    kind: ObjectArray
    line: NDArray[np.int64]
    block: NDArray[np.int64]
    set_aside: ObjectArray
    contexts: tuple[Context, ...] = ()
    angles: Angles | None = None
    strict: bool = False
    unit_name: str = "line"


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
        """The records that a fit can use, sorted by time (stable), with a fresh index."""
        kept = self.table[self.table["use"].to_numpy(dtype=bool)]
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
        days = table["utc_day"].to_numpy()
        aside = table.loc[~table["use"].to_numpy(dtype=bool), "why_not"]
        return {
            "name": self.name,
            "source": self.source,
            "n_records": len(table),
            "n_usable": int(table["use"].sum()),
            "set_aside": {str(k): int(v) for k, v in aside.value_counts().items()},
            "kinds": {str(k): int(v) for k, v in table["kind"].value_counts().items()},
            "stations": {str(k): int(v) for k, v in table["stn"].value_counts().items() if k},
            "catalogues": {str(k): int(v) for k, v in table["astCat"].value_counts().items() if k},
            "modes": {str(k): int(v) for k, v in table["mode"].value_counts().items() if k},
            "first_day": iso_day(int(days.min())) if len(days) else None,
            "last_day": iso_day(int(days.max())) if len(days) else None,
            "span_d": self.span_d,
        }

    def __str__(self) -> str:
        told = self.to_dict()
        text = (
            f"Arc of {self.name}: {told['n_records']} observations from {len(told['stations'])} "
            "stations, "
            f"{told['first_day']} to {told['last_day']} ({self.span_d:.1f} d)"
        )
        if told["set_aside"]:
            reasons = "; ".join(f"{count} {reason}" for reason, count in told["set_aside"].items())
            text += f"; set aside: {reasons}"
        return text

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
            angles=_frame_angles(frame, text) if n and "ra" in known else None,
        )
        return assemble(records, label=name, object=object, stations=stations)


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


def _frame_angles(frame: pd.DataFrame, text: Mapping[str, ObjectArray]) -> Angles | None:
    """Angles given as numbers, which state no precision; None when they were given as text."""
    if not {"ra", "dec"} <= set(frame.columns):
        return None
    if not (
        pd.api.types.is_numeric_dtype(frame["ra"]) and pd.api.types.is_numeric_dtype(frame["dec"])
    ):
        return None
    n = len(frame)
    ra = frame["ra"].to_numpy(dtype=np.float64, copy=True)
    dec = frame["dec"].to_numpy(dtype=np.float64, copy=True)
    timed_by_text = "obsTime" in frame and pd.api.types.is_string_dtype(frame["obsTime"])
    again = "digits_ra_arcsec" in frame and "raText" in frame
    ra_step = np.zeros(n)
    if again:
        with np.errstate(invalid="ignore", divide="ignore"):
            ra_step = frame["digits_ra_arcsec"].to_numpy(dtype=float) / np.cos(np.radians(dec))
    return Angles(
        ra_deg=ra,
        dec_deg=dec,
        ra_text=frame["raText"].to_numpy(dtype=object) if again else text["ra"],
        dec_text=frame["decText"].to_numpy(dtype=object) if again else text["dec"],
        ra_step_arcsec=ra_step,
        dec_step_arcsec=frame["digits_dec_arcsec"].to_numpy(dtype=float, copy=True)
        if again
        else np.zeros(n),
        time_step_s=np.full(n, np.nan if timed_by_text else 0.0),
    )


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
    checker = _Checker(records)
    checker.identification(optional=bool(label))
    checker.required()
    columns: dict[str, Any] = {}
    for column in TEXT_COLUMNS:
        if column in ALWAYS_TEXT or checker.filled(column).any():
            columns[column] = checker.text_column(column)
    for column in NUMBER_COLUMNS:
        if column in ALWAYS_NUMBER or checker.filled(column).any():
            columns[column] = checker.number_column(column)
    checker.groups()
    day, sec, time_step = checker.times()
    columns["utc_day"], columns["utc_sec"] = day, sec
    columns.update(checker.angles(columns, time_step))
    _error_of_offset(columns, records.kind)
    columns["kind"], columns["line"], columns["block"] = records.kind, records.line, records.block
    columns["site"] = checker.sites(columns, own)
    columns["object"] = _objects(columns, n)
    why = _why_not(records, columns)
    columns["why_not"], columns["use"] = why, (why == "").astype(bool)
    table = pd.DataFrame(columns)
    arc = Arc(table, records.source, label, records.contexts, own)
    return _one_object(arc, object)


class _Checker:
    """The checks of one set of records; every refusal is an ArcError made by `fail`."""

    def __init__(self, records: Records) -> None:
        self.records = records
        self.n = len(records.kind)
        self.blank = np.array([""] * self.n, dtype=object)
        self.kinds = [k for k in REQUIRED if (records.kind == k).any()]
        self.present: dict[str, NDArray[np.bool_]] = {}

    def text(self, column: str) -> ObjectArray:
        return self.records.text.get(column, self.blank)

    def filled(self, column: str) -> NDArray[np.bool_]:
        if column not in self.present:
            self.present[column] = (self.text(column) != "").astype(bool)
        return self.present[column]

    def fail(self, row: int, column: str, problem: str, remedy: str) -> ArcError:
        records = self.records
        value = self.text(column)[row] if column in records.text else ""
        where = f"{records.source}, {records.unit_name} {records.line[row]}, column {column}"
        return ArcError(
            f"{where}: {problem}. {remedy}",
            file=records.source,
            line=int(records.line[row]),
            column=column,
            value=value,
        )

    def refuse(self, bad: NDArray[np.bool_], column: str, rule: str, remedy: str) -> None:
        if bad.any():
            row = int(np.argmax(bad))
            shown = str(self.text(column)[row])
            shown = shown if len(shown) <= 60 else shown[:57] + "..."
            raise self.fail(row, column, f"the value {shown!r} is not allowed; {rule}", remedy)

    def identification(self, optional: bool) -> None:
        if not optional:
            named = np.zeros(self.n, dtype=bool)
            for column in ("permID", "provID", "artSat", "trkSub"):
                named |= self.filled(column)
            if not named.all():
                row = int(np.argmin(named))
                raise self.fail(
                    row,
                    "permID",
                    "the record names no object",
                    "Fill one of permID, provID, artSat or trkSub.",
                )
        both = self.filled("artSat") & (self.filled("permID") | self.filled("provID"))
        self.refuse(both, "artSat", "it cannot stand beside permID or provID", "Keep one of them.")

    def required(self) -> None:
        for kind in self.kinds:
            mine = (self.records.kind == kind) & (self.records.set_aside == "")
            for column in REQUIRED[kind]:
                if self.records.angles is not None and column in ("ra", "dec"):
                    continue
                missing = mine & ~self.filled(column)
                if missing.any():
                    row = int(np.argmax(missing))
                    if column not in self.records.text:
                        have = ", ".join(self.records.text)
                        raise ArcError(
                            f"{self.records.source}: the column {column} is missing; a record of "
                            f"the kind {kind} needs "
                            f"{', '.join(REQUIRED[kind])}, and the columns found are {have}. Add "
                            "the column.",
                            file=self.records.source,
                            line=int(self.records.line[row]),
                            column=column,
                            value="",
                        )
                    hint = " (UNK when unknown)" if column in ("astCat", "mode") else ""
                    raise self.fail(
                        row,
                        column,
                        f"the value is missing; every {kind} record needs one",
                        f"Fill it in{hint}, or take the record out.",
                    )
            if kind in (OFFSET, OCCULTATION):
                pair = self.filled("deltaRA") & self.filled("deltaDec")
                polar = self.filled("dist") & self.filled("pa")
                self.refuse(
                    mine & (pair == polar),
                    "deltaRA",
                    f"an {kind} record needs either deltaRA and deltaDec or dist and pa",
                    "Give one of the two pairs, whole.",
                )
            if kind == RADAR:
                delay, doppler = self.filled("delay"), self.filled("doppler")
                self.refuse(
                    mine & (delay == doppler),
                    "delay",
                    "a radar record needs exactly one of delay and doppler",
                    "Write delay and Doppler as two records.",
                )
                for value, rms in (("delay", "rmsDelay"), ("doppler", "rmsDoppler")):
                    self.refuse(
                        mine & self.filled(value) & ~self.filled(rms),
                        rms,
                        f"{value} needs {rms}",
                        "Add it.",
                    )

    def groups(self) -> None:
        if not self.records.strict:
            return
        for group in (
            ("sys", "ctr", "pos1", "pos2", "pos3"),
            ("mag", "band"),
            ("precTime", "precRA", "precDec"),
        ):
            count = sum(self.filled(c).astype(int) for c in group)
            torn = (count > 0) & (count < len(group))
            if np.any(torn):
                row = int(np.argmax(torn))
                column = next(c for c in group if not self.filled(c)[row])
                raise self.fail(
                    row,
                    column,
                    f"the value is missing although {', '.join(c for c in group if c != column)} "
                    "or some of them are given; they come together",
                    "Fill in all of them or none.",
                )

    def text_column(self, column: str) -> ObjectArray:
        texts = self.text(column)
        if column == "obsTime" or column not in self.records.text:
            return texts
        rule = COLUMNS[column]
        codes, uniques = pd.factorize(texts)
        control = [i for i, u in enumerate(uniques) if UNWRITABLE.search(str(u))]
        if control:
            remedy = "Take the characters out."
            rule_text = "control characters and '|' cannot stand in a value"
            self.refuse(np.isin(codes, control), column, rule_text, remedy)
        if self.records.strict:
            bad = [i for i, u in enumerate(uniques) if u != "" and not matches(rule, str(u))]
            if bad:
                self.refuse(np.isin(codes, bad), column, rule.words, "Correct the value.")
        return texts

    def number_column(self, column: str) -> FloatArray | NDArray[Any]:
        value = np.full(self.n, np.nan)
        filled = self.filled(column)
        if not filled.any():
            return value
        if column in ("ra", "dec") and self.records.angles is not None:
            return value
        rule = COLUMNS[column]
        texts = self.text(column)[filled]
        bad = np.zeros(self.n, dtype=bool)
        if rule.form == "double":
            got, ok = parse_doubles(texts)
        else:
            parsed = parse_decimals(texts)
            got, ok = parsed.value, parsed.ok.copy()
            if self.records.strict:
                ok &= (
                    ~parsed.leading_zero
                    & ~(parsed.plus & (not rule.signed))
                    & (parsed.places <= rule.places)
                )
                if rule.width:
                    ok &= parsed.width <= rule.width
            else:
                if not ok.all():
                    exponents = ~ok
                    got[exponents], ok[exponents] = parse_doubles(texts[exponents])
            if rule.form == "integer":
                ok &= got == np.floor(got)
        bad[filled] = ~ok
        self.refuse(bad, column, _lexical(rule, self.records.strict), "Correct the value.")
        low = got <= rule.low if rule.open_low else got < rule.low
        high = got >= rule.high if rule.open_high else got > rule.high
        bad[filled] = low | high
        self.refuse(bad, column, rule.words, _range_remedy(column))
        value[filled] = got
        return value

    def times(self) -> tuple[NDArray[np.int64], FloatArray, FloatArray]:
        parsed = parse_times(self.text("obsTime"))
        self.refuse(
            ~parsed.well_formed,
            "obsTime",
            "it must have the form YYYY-MM-DDThh:mm:ss[.f]Z in UTC",
            "Write the instant in that form, for example 2022-11-04T05:06:07.8Z.",
        )
        self.refuse(
            ~parsed.on_calendar,
            "obsTime",
            "there is no such date or time of day",
            "Correct it; a second of 60 exists only in a leap second.",
        )
        if self.records.strict:
            self.refuse(
                parsed.places > 6,
                "obsTime",
                "ADES 2022 allows at most 6 decimals of a second",
                "Shorten it, or declare version=2017.",
            )
        step = 10.0 ** -parsed.places.astype(float)
        return parsed.utc_day, parsed.utc_sec, step

    def angles(self, columns: Mapping[str, Any], time_step: FloatArray) -> dict[str, Any]:
        n, given = self.n, self.records.angles
        ra, dec = np.full(n, np.nan), np.full(n, np.nan)
        ra_step, dec_step = np.zeros(n), np.zeros(n)
        ra_text, dec_text = self.blank.copy(), self.blank.copy()
        if given is not None:
            ra, dec = given.ra_deg.copy(), given.dec_deg.copy()
            ra_text, dec_text = given.ra_text.copy(), given.dec_text.copy()
            ra_step, dec_step = given.ra_step_arcsec.copy(), given.dec_step_arcsec.copy()
            said = np.isfinite(given.time_step_s)
            time_step = np.where(said, given.time_step_s, time_step)
            mine = self.records.kind == OPTICAL
            self._refuse_angle(
                mine & ~((ra >= 0.0) & (ra < 360.0)), "ra", ra_text, "from 0 to below 360 deg"
            )
            self._refuse_angle(mine & ~(np.abs(dec) <= 90.0), "dec", dec_text, "from -90 to 90 deg")
        for kind, ra_column, dec_column in (
            (OPTICAL, "ra", "dec"),
            (OCCULTATION, "raStar", "decStar"),
        ):
            mine = self.records.kind == kind
            if not mine.any() or (kind == OPTICAL and given is not None):
                continue
            ra[mine], dec[mine] = columns[ra_column][mine], columns[dec_column][mine]
            ra_text[mine], dec_text[mine] = self.text(ra_column)[mine], self.text(dec_column)[mine]
            ra_step[mine] = 3600.0 * 10.0 ** -parse_decimals(ra_text[mine]).places.astype(float)
            dec_step[mine] = 3600.0 * 10.0 ** -parse_decimals(dec_text[mine]).places.astype(float)
        absent = np.full(n, np.nan)
        ra_step = np.fmax(ra_step, 15.0 * columns.get("precRA", absent))
        dec_step = np.fmax(dec_step, columns.get("precDec", absent))
        time_step = np.fmax(time_step, 1e-6 * 86400.0 * columns.get("precTime", absent))
        occultation = self.records.kind == OCCULTATION
        if occultation.any():
            d_ra, d_dec = _offset_arcsec(columns, n)
            with np.errstate(invalid="ignore"):
                ra = np.where(
                    occultation, (ra + d_ra / 3600.0 / np.cos(np.radians(dec))) % 360.0, ra
                )
                dec = np.where(occultation, dec + d_dec / 3600.0, dec)
            self.refuse(
                occultation & ~(np.abs(dec) <= 90.0),
                "decStar",
                "star and offset lead beyond the pole",
                "Correct decStar or the offset.",
            )
        ra_rad, dec_rad = np.radians(ra), np.radians(dec)
        return {
            "ra": ra,
            "dec": dec,
            "ra_rad": ra_rad,
            "dec_rad": dec_rad,
            "raText": ra_text,
            "decText": dec_text,
            "digits_ra_arcsec": np.where(np.isfinite(dec), ra_step * np.abs(np.cos(dec_rad)), 0.0),
            "digits_dec_arcsec": dec_step,
            "digits_time_s": time_step,
        }

    def _refuse_angle(
        self, bad: NDArray[np.bool_], column: str, texts: ObjectArray, span: str
    ) -> None:
        if bad.any():
            row = int(np.argmax(bad))
            raise self.fail(
                row,
                column,
                f"the value {texts[row]!r} is not allowed; it must lie {span}",
                _range_remedy(column),
            )

    def sites(self, columns: Mapping[str, Any], own: Mapping[str, Station]) -> ObjectArray:
        site = np.array(["fixed"] * self.n, dtype=object)
        names = ("trx", "rcv", "stn") if RADAR in self.kinds else ("stn",)
        for column in names:
            if column not in columns:
                continue
            codes, uniques = pd.factorize(columns[column])
            for i, code in enumerate(uniques):
                if code == "":
                    continue
                try:
                    kind = station(code, own).kind
                except StationError as error:
                    row = int(np.argmax(codes == i))
                    near = ", ".join(near_codes(str(code), own))
                    raise self.fail(
                        row,
                        column,
                        f"the station {str(code)!r} is not in the list of observatory codes; "
                        f"near matches: {near}",
                        "Correct the code, or give the coordinates in a table of your own "
                        "stations.",
                    ) from error
                if column == "stn":
                    site[codes == i] = kind
        return site


def _lexical(rule: ColumnRule, strict: bool) -> str:
    words = rule.words
    if strict and rule.form == "decimal":
        words += ", without exponent or leading zeros"
        if rule.places < 99:
            words += f", with at most {rule.places} decimals"
        if rule.width:
            words += f", in at most {rule.width} characters"
    return words


def _range_remedy(column: str) -> str:
    if column == "ra":
        return "Give right ascension in degrees (hours times 15)."
    if column == "dec":
        return "Check whether right ascension and declination were exchanged."
    return "Correct the value."


def _offset_arcsec(columns: Mapping[str, Any], n: int) -> tuple[FloatArray, FloatArray]:
    """Offsets in RA times cos(dec) and in Dec (arcsec), from whichever pair was given."""
    nan = np.full(n, np.nan)
    dist, pa = columns.get("dist", nan), np.radians(columns.get("pa", nan))
    d_ra, d_dec = columns.get("deltaRA", nan), columns.get("deltaDec", nan)
    return (
        np.where(np.isfinite(d_ra), d_ra, dist * np.sin(pa)),
        np.where(np.isfinite(d_dec), d_dec, dist * np.cos(pa)),
    )


def _error_of_offset(columns: dict[str, Any], kind: ObjectArray) -> None:
    """Errors given as rmsDist (arcsec) and rmsPA (deg), turned into rmsRA, rmsDec, rmsCorr of
    occultations."""
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
    take = (kind == OCCULTATION) & np.isfinite(var_ra) & ~np.isfinite(columns["rmsRA"])
    columns["rmsRA"] = np.where(take, np.sqrt(np.fmax(var_ra, 0.0)), columns["rmsRA"])
    columns["rmsDec"] = np.where(take, np.sqrt(np.fmax(var_dec, 0.0)), columns["rmsDec"])
    with np.errstate(invalid="ignore", divide="ignore"):
        columns["rmsCorr"] = np.where(take, both / np.sqrt(var_ra * var_dec), columns["rmsCorr"])


def _objects(columns: Mapping[str, Any], n: int) -> ObjectArray:
    """One name a record: permID, else provID (the number where the file links the two), else
    artSat, else trkSub."""
    perm, prov = columns["permID"], columns["provID"]
    blank = np.array([""] * n, dtype=object)
    name = np.where(perm != "", perm, prov)
    both = (perm != "") & (prov != "")
    if both.any():
        link = dict(zip(prov[both], perm[both], strict=True))
        alone = (perm == "") & (prov != "")
        name[alone] = [link.get(p, p) for p in prov[alone]]
    name = np.where(name == "", columns.get("artSat", blank), name)
    return np.where(name == "", columns["trkSub"], name)


def _why_not(records: Records, columns: Mapping[str, Any]) -> ObjectArray:
    why = records.set_aside.copy()

    def set_aside(mask: NDArray[np.bool_], reason: str) -> None:
        why[mask & (why == "")] = reason

    kind = records.kind
    set_aside(kind == RADAR, REASON_RADAR)
    set_aside(kind == OFFSET, REASON_OFFSET)
    set_aside((kind == OPTICAL_RESIDUAL) | (kind == RADAR_RESIDUAL), REASON_RESIDUAL)
    if "deprecated" in columns:
        set_aside(columns["deprecated"] != "", REASON_DEPRECATED)
    lost = ~(np.isfinite(columns["ra_rad"]) & np.isfinite(columns["dec_rad"]))
    set_aside(lost, REASON_NO_ANGLES)
    site, sys = columns["site"], columns["sys"]
    placed = (
        np.isfinite(columns["pos1"]) & np.isfinite(columns["pos2"]) & np.isfinite(columns["pos3"])
    )
    for needing in ("roving", "space"):
        set_aside(
            (site == needing) & ~(placed & (sys != "")), REASON_NO_POSITION.format(site=needing)
        )
    set_aside((site != "fixed") & (sys == "IAU"), REASON_SYSTEM.format(system="IAU"))
    elsewhere = np.isfinite(columns["ctr"]) & (columns["ctr"] != EARTH_CENTRE)
    set_aside((site != "fixed") & elsewhere, REASON_CENTRE)
    return why


def _one_object(arc: Arc, wanted: str | None) -> Arc:
    """The arc of one object; ArcError that lists the objects when there are several and none was
    asked for."""
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
    if len(counts) > 1 and not arc.label:
        listed = ", ".join(f"{k} ({v})" for k, v in counts.head(12).items())
        more = f" and {len(counts) - 12} more" if len(counts) > 12 else ""
        raise ArcError(
            f"{arc.source}: there are {len(counts)} objects in it: {listed}{more}. "
            "An arc is of one object: choose it with object= (--object).",
            objects=[str(k) for k in counts.index],
        )
    return arc


def concatenate(
    parts: Sequence[Mapping[str, ObjectArray]], sizes: Sequence[int]
) -> dict[str, ObjectArray]:
    """Text columns of several blocks under one another, "" where a block lacks a column."""
    names = list(dict.fromkeys(c for part in parts for c in part))
    ordered = [c for c in COLUMNS if c in names] + [c for c in names if c not in COLUMNS]
    return {
        name: np.concatenate(
            [
                part[name] if name in part else np.array([""] * size, dtype=object)
                for part, size in zip(parts, sizes, strict=True)
            ]
        )
        for name in ordered
    }
