"""The checks of records against the rules of the standard; imports errors and this room's rules,
fields, records and stations.

Every refusal is an ArcError that names file, line, column, value, rule and remedy. Columns of few
distinct values are judged by those values, the others byte by byte over the whole column.
"""

import re
from collections.abc import Mapping, Sequence
from typing import Any, NamedTuple

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ngbound.arc.ades_rules import (
    COLUMNS,
    OCCULTATION,
    OFFSET,
    OPTICAL,
    OPTICAL_RESIDUAL,
    RADAR,
    RADAR_RESIDUAL,
    REQUIRED,
    RULES,
    TOGETHER,
    ColumnRule,
    matches,
    required_columns,
)
from ngbound.arc.fields import Packed, pack, parse_decimals, parse_doubles, parse_times
from ngbound.arc.records import Coded, FloatArray, ObjectArray, Records
from ngbound.arc.stations import IN_SPACE, ON_EARTH, Station, near_codes, station
from ngbound.errors import ArcError, StationError

BoolArray = NDArray[np.bool_]

UNWRITABLE = re.compile(r"[\x00-\x1f\x7f|\ud800-\udfff\ufffe\uffff]")
"""What neither PSV nor XML can hold in a value."""
IDENTIFICATION = ("permID", "provID", "artSat", "trkSub")


class Checker:
    """The checks of one set of records."""

    def __init__(self, records: Records) -> None:
        self.records = records
        self.n = len(records.kind)
        self.strict = bool(records.version)
        self.rules = RULES.get(records.version, COLUMNS)
        self.blank = np.full(self.n, "", dtype=object)
        self.never = np.zeros(self.n, dtype=bool)
        found = set(pd.unique(records.kind))
        self.kinds = [k for k in REQUIRED if k in found]
        self.one_kind = len(self.kinds) == 1
        self.present: dict[str, BoolArray] = {}
        self.factors: dict[str, Coded] = dict(records.coded)
        self.places: dict[str, NDArray[np.int64]] = {}

    def everything(self, named: bool = False) -> None:
        """All checks, for their refusals only."""
        self.identification(optional=named)
        self.required()
        for column in self.records.text:
            if COLUMNS[column].form in ("text", "time"):
                self.text_column(column)
            else:
                self.number_column(column)
        self.groups()
        self.times()

    def of_kind(self, kind: str) -> BoolArray:
        """The records of a kind."""
        if kind not in self.kinds:
            return self.never
        if self.one_kind:
            return ~self.never
        return np.asarray(self.records.kind == kind, dtype=bool)

    def text(self, column: str) -> ObjectArray:
        """The texts of a column, "" throughout when the file lacks it."""
        return self.records.text.get(column, self.blank)

    def coded(self, column: str) -> Coded:
        """A column as codes into its distinct values."""
        if column not in self.factors:
            codes, values = pd.factorize(self.text(column))
            self.factors[column] = Coded(codes, np.asarray(values, dtype=object))
        return self.factors[column]

    def filled(self, column: str) -> BoolArray:
        """Where a column has a value."""
        if column not in self.records.text:
            return self.never
        if column not in self.present:
            packed, factors = self.records.packed.get(column), self.factors.get(column)
            if packed is not None:
                self.present[column] = packed.length > 0
            elif factors is not None:
                self.present[column] = (factors.values != "").astype(bool)[factors.codes]
            else:
                self.present[column] = (self.text(column) != "").astype(bool)
        return self.present[column]

    def any_filled(self, columns: Sequence[str]) -> BoolArray:
        """Where at least one of the columns has a value."""
        found = self.never
        for column in columns:
            if column in self.records.text:
                found = found | self.filled(column)
        return found

    def fail(self, row: int, column: str, problem: str, remedy: str) -> ArcError:
        """The error of one record."""
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

    def refuse(self, bad: BoolArray, column: str, rule: str, remedy: str) -> None:
        """Raise for the first of the bad values of a column."""
        if bad.any():
            row = int(np.argmax(bad))
            shown = str(self.text(column)[row])
            shown = shown if len(shown) <= 60 else shown[:57] + "..."
            raise self.fail(row, column, f"the value {shown!r} is not allowed; {rule}", remedy)

    # ------------------------------------------------------------------ which values must be there

    def identification(self, optional: bool) -> None:
        """Every record names an object, and does so in one of the ways allowed."""
        if not optional:
            named = self.any_filled(IDENTIFICATION)
            if not named.all():
                row = int(np.argmin(named))
                raise self.fail(
                    row,
                    "permID",
                    "the record names no object",
                    "Fill one of permID, provID, artSat or trkSub.",
                )
        both = self.filled("artSat") & self.any_filled(("permID", "provID"))
        self.refuse(both, "artSat", "it cannot stand beside permID or provID", "Keep one of them.")
        if self.strict and not optional:
            for kind in (RADAR, RADAR_RESIDUAL):
                alone = self.of_kind(kind) & ~self.any_filled(IDENTIFICATION[:3])
                self.refuse(
                    alone,
                    "trkSub",
                    f"a {kind} record cannot be named by trkSub alone",
                    "Add permID, provID or artSat.",
                )

    def required(self) -> None:
        """What records of each kind must fill."""
        for kind in self.kinds:
            mine = self.of_kind(kind)
            if (self.records.set_aside != "").any():
                mine = mine & np.asarray(self.records.set_aside == "", dtype=bool)
            for column in required_columns(kind, self.records.version):
                if self.records.angles is not None and column in ("ra", "dec"):
                    continue
                self._needed(mine, column, kind)
            if kind in (OFFSET, OCCULTATION):
                self._one_offset(mine, kind)
            if kind == RADAR:
                self._one_echo(mine)

    def _needed(self, mine: BoolArray, column: str, kind: str) -> None:
        missing = mine & ~self.filled(column)
        if not missing.any():
            return
        row = int(np.argmax(missing))
        if column not in self.records.text:
            have = ", ".join(self.records.text)
            raise ArcError(
                f"{self.records.source}: the column {column} is missing; a record of "
                f"the kind {kind} needs {', '.join(REQUIRED[kind])}, and the columns found are "
                f"{have}. Add the column.",
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

    def _one_offset(self, mine: BoolArray, kind: str) -> None:
        pair = self.filled("deltaRA") & self.filled("deltaDec")
        polar = self.filled("dist") & self.filled("pa")
        wrong = pair == polar
        if self.strict:
            wrong |= self.any_filled(("deltaRA", "deltaDec")) & self.any_filled(
                ("dist", "pa", "rmsDist", "rmsPA")
            )
        self.refuse(
            mine & wrong,
            "deltaRA",
            f"an {kind} record needs either deltaRA and deltaDec or dist and pa",
            "Give one of the two pairs, whole.",
        )

    def _one_echo(self, mine: BoolArray) -> None:
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
        """Columns that come together or shut each other out."""
        if not self.strict:
            return
        for members, needed in TOGETHER:
            some = self.any_filled(members)
            if not some.any():
                continue
            for column in needed:
                torn = some & ~self.filled(column)
                if torn.any():
                    row = int(np.argmax(torn))
                    there = [c for c in members if self.filled(c)[row]]
                    raise self.fail(
                        row,
                        column,
                        f"the value is missing although {', '.join(there)} is given; "
                        f"{', '.join(needed)} come together",
                        "Fill in all of them or none.",
                    )
        by_offset = self.of_kind(OFFSET) | self.of_kind(OCCULTATION)
        for column in ("rmsRA", "rmsDec") if by_offset.any() else ():
            self.refuse(
                by_offset & self.filled(column) & ~self.filled("deltaRA"),
                column,
                "it belongs to deltaRA and deltaDec, which the record does not give",
                "Give rmsDist and rmsPA instead.",
            )
        self._residuals()

    def _residuals(self) -> None:
        radar = self.of_kind(RADAR) | self.of_kind(RADAR_RESIDUAL)
        alone = self.of_kind(OPTICAL_RESIDUAL) | self.of_kind(RADAR_RESIDUAL)
        some = self.any_filled(("orbProd", "orbID")) | alone
        if not some.any():
            return
        optical = self.any_filled(("resRA", "resMag"))
        delay, doppler = self.filled("resDelay"), self.filled("resDoppler")
        bare_orbit = self.records.version == "2017"  # which lets an orbit stand without residuals
        self.refuse(
            some & ~radar & ~(optical | (bare_orbit & self.filled("orbProd"))),
            "orbProd",
            "the record names an orbit but gives no residual",
            "Add resRA and its companions, or resMag and its companions.",
        )
        self.refuse(
            some & radar & (delay == doppler),
            "orbProd",
            "a radar record needs exactly one of resDelay and resDoppler beside orbProd",
            "Give one of them.",
        )

    # ------------------------------------------------------------------ what values may be

    def _rule(self, column: str) -> ColumnRule:
        """The rule of a column; a value in a column that the version does not have is refused."""
        if column not in self.rules:
            self.refuse(
                self.filled(column),
                column,
                f"the column does not exist in version {self.records.version}",
                "Declare version=2022, or leave the column out.",
            )
        return COLUMNS[column] if column not in self.rules else self.rules[column]

    def text_column(self, column: str) -> ObjectArray:
        """A checked text column."""
        texts = self.text(column)
        if column == "obsTime" or column not in self.records.text:
            return texts
        rule = self._rule(column)
        coded = self.coded(column)
        control = [bool(UNWRITABLE.search(str(v))) for v in coded.values]
        if any(control):
            remedy = "Take the characters out."
            rule_text = "control characters and '|' cannot stand in a value"
            self.refuse(np.array(control)[coded.codes], column, rule_text, remedy)
        if self.strict:
            bad = [v != "" and not matches(rule, str(v)) for v in coded.values]
            if any(bad):
                self.refuse(np.array(bad)[coded.codes], column, rule.words, "Correct the value.")
        return texts

    def number_column(self, column: str) -> FloatArray:
        """A checked column of numbers, NaN where it has none."""
        filled = self.filled(column)
        if not filled.any() or (column in ("ra", "dec") and self.records.angles is not None):
            return np.full(self.n, np.nan)
        rule = self._rule(column)
        if column in self.records.packed:
            judged = _judge_numbers(rule, self.records.packed[column], self.strict)
        else:
            coded = self.coded(column)
            judged = _judge_numbers(rule, pack(coded.values), self.strict)
            judged = judged.take(coded.codes)
        value, form_ok, range_ok, self.places[column] = judged
        self.refuse(filled & ~form_ok, column, _lexical(rule, self.strict), "Correct the value.")
        self.refuse(filled & ~range_ok, column, rule.words, _range_remedy(column))
        return value

    def times(self) -> tuple[NDArray[np.int64], FloatArray, FloatArray]:
        """Day (MJD), second of the day and resolution in s of every record."""
        packed = self.records.packed.get("obsTime")
        parsed = parse_times(self.text("obsTime") if packed is None else packed)
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
        if self.records.version == "2022":
            self.refuse(
                (parsed.places > 6) & ~parsed.leap,
                "obsTime",
                "ADES 2022 allows at most 6 decimals of a second",
                "Shorten it, or declare version=2017.",
            )
        step = 10.0 ** -np.arange(81.0)
        return parsed.utc_day, parsed.utc_sec, step[parsed.places]

    def angles(self, columns: Mapping[str, Any], time_step: FloatArray) -> dict[str, Any]:
        """Positions, their texts and what their digits say."""
        n, given = self.n, self.records.angles
        if self.one_kind and self.kinds[0] == OPTICAL and given is None:
            ra, dec = columns["ra"], columns["dec"]
            ra_text, dec_text = self.text("ra"), self.text("dec")
            ra_step, dec_step = self._step_arcsec("ra"), self._step_arcsec("dec")
        else:
            ra, dec = np.full(n, np.nan), np.full(n, np.nan)
            ra_step, dec_step = np.zeros(n), np.zeros(n)
            ra_text, dec_text = self.blank.copy(), self.blank.copy()
        if given is not None:
            ra, dec = given.ra_deg.copy(), given.dec_deg.copy()
            ra_text, dec_text = given.ra_text.copy(), given.dec_text.copy()
            ra_step, dec_step = given.ra_step_arcsec.copy(), given.dec_step_arcsec.copy()
            said = np.isfinite(given.time_step_s)
            time_step = np.where(said, given.time_step_s, time_step)
            mine = self.of_kind(OPTICAL)
            self._refuse_angle(
                mine & ~((ra >= 0.0) & (ra < 360.0)), "ra", ra_text, "from 0 to below 360 deg"
            )
            self._refuse_angle(mine & ~(np.abs(dec) <= 90.0), "dec", dec_text, "from -90 to 90 deg")
        for kind, ra_column, dec_column in (
            (OPTICAL, "ra", "dec"),
            (OCCULTATION, "raStar", "decStar"),
        ):
            if kind not in self.kinds or (kind == OPTICAL and (given is not None or self.one_kind)):
                continue
            mine = self.of_kind(kind)
            if given is not None and np.isfinite(given.ra_deg[mine]).all():
                continue
            ra[mine], dec[mine] = columns[ra_column][mine], columns[dec_column][mine]
            ra_text[mine], dec_text[mine] = self.text(ra_column)[mine], self.text(dec_column)[mine]
            ra_step[mine] = self._step_arcsec(ra_column)[mine]
            dec_step[mine] = self._step_arcsec(dec_column)[mine]
        if "precRA" in columns:
            ra_step = np.fmax(ra_step, 15.0 * columns["precRA"])
        if "precDec" in columns:
            dec_step = np.fmax(dec_step, columns["precDec"])
        if "precTime" in columns:
            time_step = np.fmax(time_step, 1e-6 * 86400.0 * columns["precTime"])
        if OCCULTATION in self.kinds:
            occultation = self.of_kind(OCCULTATION)
            d_ra, d_dec = offset_arcsec(columns, n)
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

    def _step_arcsec(self, column: str) -> FloatArray:
        step = 3600.0 * 10.0 ** -np.arange(100.0)
        unstated = self.records.unstated.get(column, self.never)
        return np.where(unstated, 0.0, step[self.places[column]])

    def _refuse_angle(self, bad: BoolArray, column: str, texts: ObjectArray, span: str) -> None:
        if bad.any():
            row = int(np.argmax(bad))
            raise self.fail(
                row,
                column,
                f"the value {texts[row]!r} is not allowed; it must lie {span}",
                _range_remedy(column),
            )

    def sites(self, columns: Mapping[str, Any], own: Mapping[str, Station]) -> ObjectArray:
        """Kind of the station of every record: a position on ICRF axes means one in space, whatever
        the code; a position on the Earth one that roves, unless the code has a place of its own.
        Unknown codes without a position are refused."""
        system = columns["sys"] if self.filled("sys").any() else self.blank
        on_earth = np.isin(system, ON_EARTH) if system is not self.blank else self.never
        in_space = np.isin(system, IN_SPACE) if system is not self.blank else self.never
        site = np.full(self.n, "fixed", dtype=object)
        names = ("stn", "trx", "rcv") if RADAR in self.kinds else ("stn",)
        radar = self.of_kind(RADAR)
        for column in names:
            if column not in columns:
                continue
            coded = self.coded(column)
            kinds = np.array([_kind_of(str(code), own) for code in coded.values], dtype=object)
            of_record = kinds[coded.codes]
            lost = of_record == "unknown"
            if column == "stn":
                of_record[on_earth & np.isin(of_record, ("unknown", "space"))] = "roving"
                of_record[in_space] = "space"
                lost = of_record == "unknown"
                site = of_record
            else:
                # an echo stands where its less settled end does
                moving = radar & np.isin(of_record, ("roving", "space"))
                site[moving] = of_record[moving]
            if lost.any():
                row = int(np.argmax(lost))
                code = str(self.text(column)[row])
                with_record = " or give the position with the record (sys, ctr, pos1, pos2, pos3)."
                own_table = "Correct the code, give the coordinates in a table of your own stations"
                raise self.fail(
                    row,
                    column,
                    f"the station {code!r} is not in the list of observatory codes; near matches: "
                    f"{', '.join(near_codes(code, own))}",
                    f"{own_table},{with_record}"
                    if column == "stn"
                    else f"{own_table.replace(',', ' or')}.",
                )
        return site


def _kind_of(code: str, own: Mapping[str, Station]) -> str:
    if code == "":
        return "fixed"
    try:
        return station(code, own).kind
    except StationError:
        return "unknown"


class Judged(NamedTuple):
    """Values of a column of numbers, whether form and range are as the rule has them, and the
    decimals written; (n,) each."""

    value: FloatArray
    form_ok: BoolArray
    range_ok: BoolArray
    places: NDArray[np.int64]

    def take(self, rows: NDArray[np.int64]) -> "Judged":
        """The same for some rows, which may repeat."""
        return Judged(self.value[rows], self.form_ok[rows], self.range_ok[rows], self.places[rows])


def _judge_numbers(rule: ColumnRule, packed: Packed, strict: bool) -> Judged:
    if rule.form == "double":
        value, ok = parse_doubles(_unpacked(packed))
        if strict:
            signed = np.isin(packed.turned[0], (43, 45))
            ok &= packed.length - signed <= rule.width
        places = np.zeros(len(packed), dtype=np.int64)
    else:
        parsed = parse_decimals(packed)
        value, ok, places = parsed.value, parsed.ok.copy(), parsed.places
        if strict:
            ok &= parsed.places <= rule.places
            if not rule.zeros:
                ok &= ~parsed.leading_zero
            if not rule.signed:
                ok &= ~(parsed.plus | parsed.minus)
            if not rule.bare_point:
                ok &= ~parsed.bare_point
            if rule.width:
                ok &= parsed.width <= rule.width
            if rule.form == "integer":
                ok &= ~parsed.point
        elif not ok.all():
            odd = ~ok & (packed.length > 0)
            value[odd], ok[odd] = parse_doubles(_unpacked(packed.take(odd)))
    with np.errstate(invalid="ignore"):
        if rule.form == "integer":
            ok &= value == np.floor(value)
        inside = strict and rule.inside
        low = value <= rule.low if rule.open_low or inside else value < rule.low
        high = value >= rule.high if rule.open_high or inside else value > rule.high
    good = ~(low | high)
    if strict and rule.values:
        good &= np.isin(value, rule.values)
    return Judged(value, ok, good, places)


def _unpacked(packed: Packed) -> ObjectArray:
    width, n = packed.turned.shape
    raw = np.ascontiguousarray(packed.turned.T).view(f"S{width}").reshape(n)
    return np.char.decode(raw, "ascii", "replace").astype(object)


def _lexical(rule: ColumnRule, strict: bool) -> str:
    words = rule.words
    if strict and rule.form == "decimal":
        words += ", without exponent"
        if not rule.zeros:
            words += " or leading zeros"
        if not rule.bare_point:
            words += ", with a digit before the point"
        if not rule.signed:
            words += ", without a sign"
        if rule.places < 99:
            words += f", with at most {rule.places} decimals"
    if strict and rule.width:
        words += f", in at most {rule.width} characters"
    return words


def _range_remedy(column: str) -> str:
    if column == "ra":
        return "Give right ascension in degrees (hours times 15)."
    if column == "dec":
        return "Check whether right ascension and declination were exchanged."
    return "Correct the value."


def offset_arcsec(columns: Mapping[str, Any], n: int) -> tuple[FloatArray, FloatArray]:
    """Offsets in RA times cos(dec) and in Dec (arcsec), from whichever pair was given."""
    nan = np.full(n, np.nan)
    dist, pa = columns.get("dist", nan), np.radians(columns.get("pa", nan))
    d_ra, d_dec = columns.get("deltaRA", nan), columns.get("deltaDec", nan)
    return (
        np.where(np.isfinite(d_ra), d_ra, dist * np.sin(pa)),
        np.where(np.isfinite(d_dec), d_dec, dist * np.cos(pa)),
    )
