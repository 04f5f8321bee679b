"""The 80-column observation format of the Minor Planet Center: read; imports errors and this room.

Columns (from 1): 1-5 packed permanent designation, 6-12 packed provisional designation or a
temporary label, 13 discovery mark, 14 note or programme code, 15 kind of observation, 16-32 date
(UTC, decimal day), 33-44 RA, 45-56 Dec, 66-70 magnitude, 71 band, 72 catalogue code, 73-77
reference, 78-80 observatory code. Space-based (S/s), roving (V/v) and radar (R/r) records have a
second line with the position of the station or the rest of the radar measurement. Source: the Minor
Planet Center's published description of the format; the layout of the radar lines is written from
memory. What column 14 means is told below, at `PROGRAM_CODES`.
"""

import csv
import string
from dataclasses import dataclass
from functools import lru_cache
from importlib.resources import files

import numpy as np
from numpy.typing import NDArray

from ngbound.arc.ades_rules import OFFSET, OPTICAL, RADAR
from ngbound.arc.designations import to_base62, unpack_columns
from ngbound.arc.fields import civil_day, format_times, plain_number
from ngbound.arc.records import Angles, ObjectArray, Records
from ngbound.errors import ArcError

WIDTH = 80
MODES = {
    " ": "PHO",
    "P": "PHO",
    "A": "PHO",
    "e": "ENC",
    "C": "CCD",
    "c": "CCD",
    "D": "CCD",
    "Z": "CCD",
    "B": "CMO",
    "T": "MER",
    "M": "MIC",
    "E": "OCC",
    "n": "VID",
    "S": "CCD",
    "V": "CCD",
    "X": "UNK",
    "x": "UNK",
    "H": "UNK",
    "N": "UNK",
    "O": "UNK",
    "R": "",
}
"""Column 15 as ADES mode. Space-based and roving records do not say; they are taken as CCD.
Lower-case s, v, r are second lines."""
SECOND_LINE = {"S": "s", "V": "v", "R": "r"}
REASON_SUPERSEDED = "a discovery observation that a later measurement supersedes (type X)"
PROGRAM_CODES = (
    string.digits
    + "!\"#$%&'()*+,-./[\\]^_`{|}~:;<=>?@"
    + string.ascii_uppercase
    + string.ascii_lowercase
)
"""Programme codes of column 14 in the order in which ADES numbers them with two base-62 digits
(0 -> 00, & -> 0F). Source: the MPC's list of programme codes of 19 March 2024 as the ADES toolkit
(iau-ades 0.1.3, packUtil.py) carries it."""
PROGRAM_STATIONS = frozenset(
    (
        "010 012 033 071 084 089 094 095 119 121 181 186 246 249 260 261 262 266 267 268 269 274 "
        "290 309 413 561 568 658 673 675 688 689 695 696 703 705 807 809 851 950 A84 B35 C40 C49 "
        "C50 C65 D20 D90 E03 E10 E26 F65 G37 G40 G73 G83 G96 H06 I03 I05 I11 I18 I22 I89 J04 J13 "
        "J75 K91 K92 K93 K99 L28 L80 L81 M49 N50 Q54 Q62 Q63 Q64 T09 T11 T12 T14 T15 U65 U69 U94 "
        "V07 V26 V37 V39 W11 W38 W57 W76 W84 W85 W86 W87 W88 W98 X06 X07 Z18 Z19 Z20 Z23 Z24 Z28 "
        "Z31 Z58 Z84"
    ).split()
)
"""Stations where column 14 holds a programme code, letters included (same source, 25 April 2024).
Elsewhere a letter is a note, a sign can only be a programme code, and a digit may be either: it is
kept as both."""
HEADER_KEYS = ("COD", "CON", "OBS", "MEA", "TEL", "NET", "ACK", "AC2", "COM", "BND", "NUM", "STD")
"""Keys of the header lines that observers put above 80-column records."""
MAX_PRECISE_DAY_DIGITS = 8
NUMERIC = "+-." + string.digits
BAND_UNKNOWN = "UNK"
"""ADES asks for a band beside every magnitude; a blank column 71 does not name one."""


@lru_cache(maxsize=1)
def catalogue_codes() -> dict[str, str]:
    """ADES astCat by the catalogue letter of column 72 (blank -> UNK)."""
    text = files("ngbound").joinpath("data/catalogues.csv").read_text(encoding="utf-8")
    lines = [line for line in text.splitlines() if not line.startswith("#")]
    return {row["code"] or " ": row["astCat"] for row in csv.DictReader(lines)}


@dataclass(frozen=True)
class _Line:
    number: int
    text: str


def looks_like_80(line: str) -> bool:
    """Whether a line has the shape of an 80-column record: a date at column 16 and a station code
    at column 78."""
    if len(line.rstrip()) < WIDTH - 2:
        return False
    date = line[15:32]
    return (
        date[:4].isdigit()
        and date[4] == " "
        and date[5:7].strip().isdigit()
        and date[8:10].strip().isdigit()
    )


def report80_records(lines: list[tuple[int, str]], source: str, unit_name: str = "line") -> Records:
    """Records from numbered lines.

    Parameters
    ----------
    lines : list of (int, str)
        Number and text. Blank lines and the header lines of an observer's report are passed over. A
        text of 160 columns is taken as the two lines of one record.
    source : str
        Name for messages.

    Raises
    ------
    ArcError
        For a line that is no record, a second line that is missing, or a value that cannot be; with
        line and columns.
    """
    firsts, seconds = _pair(_single_lines(lines, source, unit_name), source, unit_name)
    if not firsts:
        raise ArcError(
            f"{source}: there is no observation in it; an arc needs at least one.", file=source
        )
    return _Reader(*_split_radar(firsts, seconds), source, unit_name).records()


def _split_radar(
    firsts: list[_Line], seconds: list[_Line | None]
) -> tuple[list[_Line], list[_Line | None], list[str]]:
    """A radar record that holds delay and Doppler becomes two, as ADES has it; ``part`` says which
    one each is."""
    out_firsts: list[_Line] = []
    out_seconds: list[_Line | None] = []
    parts: list[str] = []
    for first, second in zip(firsts, seconds, strict=True):
        mine = [""]
        if first.text[14] == "R":
            mine = [
                p for p, a, b in (("delay", 32, 47), ("doppler", 47, 62)) if first.text[a:b].strip()
            ] or ["none"]
        for part in mine:
            out_firsts.append(first)
            out_seconds.append(second)
            parts.append(part)
    return out_firsts, out_seconds, parts


def _single_lines(lines: list[tuple[int, str]], source: str, unit_name: str) -> list[_Line]:
    single: list[_Line] = []
    for number, raw in lines:
        text = raw.rstrip("\r\n")
        if (
            not text.strip()
            or text[:4].rstrip() in HEADER_KEYS
            or text.strip() == "----- end -----"
        ):
            continue
        if "\t" in text:
            raise ArcError(
                f"{source}, {unit_name} {number}: a tab stands in column {text.index(chr(9)) + 1}; "
                "the format counts columns, "
                "so replace tabs by blanks.",
                file=source,
                line=number,
            )
        bare = text.rstrip()
        if len(bare) == 2 * WIDTH:
            single.extend([_Line(number, bare[:WIDTH]), _Line(number, bare[WIDTH:])])
        elif len(bare) == WIDTH:
            single.append(_Line(number, bare))
        else:
            raise ArcError(
                f"{source}, {unit_name} {number}: the record has {len(bare)} columns "
                f"({bare[:30]!r}...); an 80-column record ends with "
                "the station code in columns 78-80 (160 when it holds both lines). Restore the "
                "blanks, or take the line out.",
                file=source,
                line=number,
                value=bare,
            )
    return single


def _pair(
    lines: list[_Line], source: str, unit_name: str
) -> tuple[list[_Line], list[_Line | None]]:
    firsts: list[_Line] = []
    seconds: list[_Line | None] = []
    i = 0
    while i < len(lines):
        line = lines[i]
        kind = line.text[14]
        follower = SECOND_LINE.get(kind)
        if kind in SECOND_LINE.values():
            raise ArcError(
                f"{source}, {unit_name} {line.number}, column 15: the second line of a two-line "
                f"record ({kind!r}) has no first "
                f"line ({kind.upper()!r}) before it. Add that line, or take this one out.",
                file=source,
                line=line.number,
                column="15",
                value=kind,
            )
        firsts.append(line)
        if follower is None:
            seconds.append(None)
        else:
            after = lines[i + 1] if i + 1 < len(lines) else None
            if after is None or after.text[14] != follower:
                raise ArcError(
                    f"{source}, {unit_name} {line.number}, column 15: a record of the type "
                    f"{kind!r} needs a second line with "
                    f"{follower!r} in column 15 right after it. Add it, or take the record out.",
                    file=source,
                    line=line.number,
                    column="15",
                    value=kind,
                )
            if after.text[15:32] != line.text[15:32] or after.text[77:80] != line.text[77:80]:
                raise ArcError(
                    f"{source}, {unit_name} {after.number}, columns 16-32: date or station of the "
                    "second line differ from the "
                    "first line. Put the two lines of the record together.",
                    file=source,
                    line=after.number,
                    column="16-32",
                    value=after.text[15:32],
                )
            seconds.append(after)
            i += 1
        i += 1
    return firsts, seconds


class _Reader:
    def __init__(
        self,
        firsts: list[_Line],
        seconds: list[_Line | None],
        parts: list[str],
        source: str,
        unit_name: str,
    ) -> None:
        self.firsts, self.seconds, self.parts = firsts, seconds, parts
        self.source, self.unit_name = source, unit_name
        self.n = len(firsts)
        self.type80 = np.array([line.text[14] for line in firsts], dtype=object)

    def fail(self, row: int, columns: str, problem: str, remedy: str) -> ArcError:
        line = self.firsts[row]
        low, _, high = columns.partition("-")
        value = line.text[int(low) - 1 : int(high or low)]
        word = "columns" if high else "column"
        return ArcError(
            f"{self.source}, {self.unit_name} {line.number}, {word} {columns}: {value!r} "
            f"{problem}. {remedy}",
            file=self.source,
            line=line.number,
            column=columns,
            value=value,
        )

    def column(self, first: int, last: int) -> list[str]:
        return [line.text[first - 1 : last] for line in self.firsts]

    def records(self) -> Records:
        n = self.n
        blank = np.full(n, "", dtype=object)
        kind = np.full(n, OPTICAL, dtype=object)
        kind[self.type80 == "R"] = RADAR
        kind[self.type80 == "O"] = OFFSET
        aside = blank.copy()
        aside[np.isin(self.type80, ["X", "x"])] = REASON_SUPERSEDED
        aside[self.type80 == "O"] = "offsets in 80-column form are not used in fits"
        text: dict[str, ObjectArray] = dict(self._identification())
        text["mode"] = np.array([MODES.get(t, "UNK") for t in self.type80], dtype=object)
        text["stn"] = np.array(self.column(78, 80), dtype=object)
        text["disc"] = np.array([c if c in "*+" else "" for c in self.column(13, 13)], dtype=object)
        text["disc"][text["disc"] == " "] = ""
        self._column_14(text)
        text["band"] = np.array([c.strip() for c in self.column(71, 71)], dtype=object)
        text["ref"] = np.array([c.strip() for c in self.column(73, 77)], dtype=object)
        self._catalogue(text, kind)
        self._magnitude(text, kind)
        texts, time_step = self._time()
        text["obsTime"] = texts
        angles = self._angles(kind, time_step)
        self._second_lines(text)
        self._radar(text, kind)
        self._offsets(text, kind)
        return Records(
            source=self.source,
            text=text,
            kind=kind,
            line=np.array([line.number for line in self.firsts], dtype=np.int64),
            block=np.full(n, -1, dtype=np.int64),
            set_aside=aside,
            angles=angles,
            unit_name=self.unit_name,
        )

    def _identification(self) -> dict[str, ObjectArray]:
        seen: dict[str, dict[str, str]] = {}
        out = {c: np.full(self.n, "", dtype=object) for c in ("permID", "provID", "trkSub")}
        for row, line in enumerate(self.firsts):
            packed = line.text[:12]
            if packed not in seen:
                try:
                    seen[packed] = unpack_columns(packed)
                except ValueError:
                    raise self.fail(
                        row,
                        "1-12",
                        "is not a packed designation",
                        "Columns 1-5 hold a permanent number (00433, A0001, 0073P), columns 6-12 a "
                        "provisional designation "
                        "(K07Tf8A) or a label.",
                    ) from None
                if not seen[packed]:
                    raise self.fail(
                        row, "1-12", "names no object", "Fill in a designation or a label."
                    )
            for name, value in seen[packed].items():
                out[name][row] = value
        return out

    def _column_14(self, text: dict[str, ObjectArray]) -> None:
        """Note or programme code; a character that can be neither goes to the remarks."""
        for name in ("notes", "prog"):
            text[name] = np.full(self.n, "", dtype=object)
        for row, (c, code) in enumerate(zip(self.column(14, 14), text["stn"], strict=True)):
            programmed = code in PROGRAM_STATIONS and c in PROGRAM_CODES
            if c.isascii() and c.isalnum() and not programmed:
                text["notes"][row] = c
            if programmed or (c in PROGRAM_CODES and not c.isalpha()):
                text["prog"][row] = to_base62(PROGRAM_CODES.index(c), 2)
            elif c != " " and not text["notes"][row]:
                self._remark(text, row, f"column 14: {c}")

    def _remark(self, text: dict[str, ObjectArray], row: int, words: str) -> None:
        """What no ADES field can hold."""
        remarks = text.setdefault("remarks", np.full(self.n, "", dtype=object))
        remarks[row] += "; " * bool(remarks[row]) + words

    def _catalogue(self, text: dict[str, ObjectArray], kind: ObjectArray) -> None:
        codes = catalogue_codes()
        cats = self.column(72, 72)
        text["astCat"] = np.array(
            ["UNK" if c not in codes else codes[c] for c in cats], dtype=object
        )
        text["astCat"][kind != OPTICAL] = ""

    def _magnitude(self, text: dict[str, ObjectArray], kind: ObjectArray) -> None:
        mags = np.array([c.strip() for c in self.column(66, 70)], dtype=object)
        mags[kind == RADAR] = ""
        text["band"][kind == RADAR] = ""
        for row, mag in enumerate(mags):
            if mag and not _is_number(mag):
                raise self.fail(
                    row, "66-70", "is not a magnitude", "Write a number such as 19.3, or blanks."
                )
        text["mag"] = mags
        for row in np.flatnonzero((mags == "") & (text["band"] != "")).tolist():
            self._remark(text, row, f"column 71: {text['band'][row]}")
            text["band"][row] = ""
        text["band"] = np.where((mags != "") & (text["band"] == ""), BAND_UNKNOWN, text["band"])

    def _time(self) -> tuple[ObjectArray, NDArray[np.float64]]:
        """Instants as texts and the step of their digits, s.

        Echoes are timed at whole seconds of UTC, which decimals of a day cannot tell (0.000001 d
        are 0.09 s, in which a delay changes by many times its error): where the digits leave one
        open, it is taken.
        """
        n = self.n
        year, month, day = (np.zeros(n, dtype=np.int64) for _ in range(3))
        micro = np.zeros(n, dtype=np.int64)
        digits = np.zeros(n, dtype=np.int64)
        for row, field in enumerate(self.column(16, 32)):
            parts = field.split()
            good = len(parts) == 3 and parts[0].isdigit() and parts[1].isdigit()
            whole, _, fraction = parts[2].partition(".") if good else ("", "", "")
            if (
                not good
                or not whole.isdigit()
                or (fraction and not fraction.isdigit())
                or not field.isascii()
            ):
                raise self.fail(
                    row,
                    "16-32",
                    "is not a date",
                    "Write year, month and decimal day of UTC, as 2010 06 07.03243.",
                )
            year[row], month[row], day[row] = int(parts[0]), int(parts[1]), int(whole)
            digits[row] = len(fraction)
            if fraction:
                micro[row] = round(int(fraction) * 86_400_000_000 / 10 ** len(fraction))
        mjd, ok = civil_day(year, month, day)
        if not ok.all():
            raise self.fail(
                int(np.argmin(ok)),
                "16-32",
                "is not a date of the calendar",
                "Correct year, month or day.",
            )
        places = np.array([0, 0, 0, 1, 2, 3, 4, 5, 6])[np.minimum(digits, MAX_PRECISE_DAY_DIGITS)]
        step = 86400.0 * 10.0 ** -digits.astype(float)
        whole_s = (micro + 500_000) // 1_000_000 * 1_000_000
        echo = (self.type80 == "R") & (np.abs(micro - whole_s) <= 1e6 * step)
        micro[echo], places[echo], step[echo] = whole_s[echo], 0, 0.0
        over = micro >= 86_400_000_000
        mjd, micro = mjd + over, np.where(over, 0, micro)
        return format_times(mjd, micro / 1e6, places), step

    def _angles(self, kind: ObjectArray, time_step: NDArray[np.float64]) -> Angles:
        n = self.n
        ra, dec = np.full(n, np.nan), np.full(n, np.nan)
        ra_step, dec_step = np.zeros(n), np.zeros(n)
        ra_text, dec_text = np.full(n, "", dtype=object), np.full(n, "", dtype=object)
        for row in np.flatnonzero(kind == OPTICAL).tolist():
            line = self.firsts[row].text
            hours = _sexagesimal(line[32:44])
            if hours is None or hours[0] >= 24.0:
                raise self.fail(
                    row,
                    "33-44",
                    "is not a right ascension",
                    "Write hours, minutes and seconds as 'HH MM SS.ss', below 24 h.",
                )
            sign = line[44]
            degrees = _sexagesimal(line[45:56])
            if degrees is None or sign not in "+-":
                raise self.fail(
                    row,
                    "45-56",
                    "is not a declination",
                    "Write sign, degrees, minutes and seconds as '+DD MM SS.s'.",
                )
            if degrees[0] > 90.0:
                raise self.fail(row, "45-56", "is beyond 90 deg", "Correct the declination.")
            ra[row], ra_step[row] = 15.0 * hours[0], 15.0 * hours[1]
            dec[row], dec_step[row] = (-degrees[0] if sign == "-" else degrees[0]), degrees[1]
            ra_text[row], dec_text[row] = line[32:44].strip(), line[44:56].strip()
        return Angles(ra, dec, ra_text, dec_text, ra_step, dec_step, time_step)

    def _second_lines(self, text: dict[str, ObjectArray]) -> None:
        if not np.isin(self.type80, ["S", "V"]).any():
            return
        for name in ("sys", "ctr", "pos1", "pos2", "pos3"):
            text[name] = np.full(self.n, "", dtype=object)
        for row, second in enumerate(self.seconds):
            if second is None or self.type80[row] not in ("S", "V"):
                continue
            line, unit = second.text, second.text[32]
            if self.type80[row] == "S":
                if unit not in "12":
                    raise self._second_fail(second, "33", "the unit must be 1 (km) or 2 (au)")
                values = [_signed(line[a:b]) for a, b in ((34, 46), (46, 58), (58, 70))]
                if line[33] in NUMERIC or any(v is None for v in values):
                    raise self._second_fail(
                        second, "34-70", "this is not a geocentric position in x, y, z"
                    )
                text["sys"][row] = "ICRF_KM" if unit == "1" else "ICRF_AU"
            else:
                values = [_signed(line[34:44]), _signed(line[45:55]), _signed(line[56:61])]
                between = line[33] + line[44] + line[55] + line[61:71]
                if unit not in "1 " or between.strip() or any(v is None for v in values):
                    raise self._second_fail(
                        second,
                        "33-71",
                        "this is not an east longitude (35-44), a latitude (46-55, deg) and an "
                        "altitude (57-61, m) with blanks between them",
                    )
                text["sys"][row] = "WGS84"
            text["ctr"][row] = "399"
            for name, value in zip(("pos1", "pos2", "pos3"), values, strict=True):
                text[name][row] = value

    def _second_fail(self, second: _Line, columns: str, problem: str) -> ArcError:
        low, _, high = columns.partition("-")
        value = second.text[int(low) - 1 : int(high or low)]
        return ArcError(
            f"{self.source}, {self.unit_name} {second.number}, columns {columns} of the second "
            f"line: {value!r}; {problem}. "
            "Correct the line.",
            file=self.source,
            line=second.number,
            column=columns,
            value=value,
        )

    def _radar(self, text: dict[str, ObjectArray], kind: ObjectArray) -> None:
        rows = np.flatnonzero(kind == RADAR)
        if not len(rows):
            return
        for name in ("trx", "rcv", "frq", "delay", "rmsDelay", "doppler", "rmsDoppler", "com"):
            text[name] = np.full(self.n, "", dtype=object)
        for row in rows:
            first, second = self.firsts[row].text, self.seconds[row]
            rest = second.text if second is not None else " " * WIDTH
            part = self.parts[row]
            at = 32 if part == "delay" else 47
            value = _implied(first[at : at + 11], first[at + 11 : at + 15])
            rms = _implied(rest[max(at, 33) : at + 11], rest[at + 11 : at + 15])
            frequency = _implied(first[62:67], first[67:68] + rest[62:68])
            if value is None or rms is None or frequency is None:
                raise self.fail(
                    int(row),
                    "33-68",
                    "is not a radar measurement",
                    "A radar record needs delay or Doppler, the frequency, and the error of each "
                    "in its second line.",
                )
            text["trx"][row], text["rcv"][row] = first[68:71].strip() or first[77:80], first[77:80]
            text["stn"][row], text["mode"][row] = "", ""
            text["frq"][row] = plain_number(frequency)
            scale = 1e-6 if part == "delay" else 1.0
            text[part][row] = plain_number(value * scale)
            text["rmsDelay" if part == "delay" else "rmsDoppler"][row] = plain_number(rms)
            text["com"][row] = "0" if rest[32:33] == "S" else "1"

    def _offsets(self, text: dict[str, ObjectArray], kind: ObjectArray) -> None:
        rows = kind == OFFSET
        for row in np.flatnonzero(rows).tolist():
            self._remark(text, row, f"80-column offset: {self.firsts[row].text[32:56].strip()}")


def _is_number(text: str) -> bool:
    return text.lstrip("+-").replace(".", "", 1).isdigit() and text.isascii()


def _signed(text: str) -> str | None:
    """A number whose sign may stand apart from its digits (``- 6490.4555``), as text; None when it
    is none."""
    compact = "".join(text.split())
    if not _is_number(compact):
        return None
    return compact.removeprefix("+")


def _implied(whole: str, decimals: str) -> float | None:
    """A number whose decimal point is implied between two column ranges; None when both are blank
    or no number."""
    digits = whole.strip().replace(" ", "")
    if not digits.lstrip("+-").isdigit():
        return None
    tail = decimals.rstrip().replace(" ", "0")
    if tail and not tail.isdigit():
        return None
    return float(f"{digits}.{tail or '0'}")


def _sexagesimal(text: str) -> tuple[float, float] | None:
    """Value and resolution of 'A B C.c', 'A B.b' or 'A.a': value in A, resolution in seconds of A;
    None when it is neither."""
    parts = text.split()
    if not 1 <= len(parts) <= 3 or not text.isascii():
        return None
    *wholes, last = parts
    integer, _, fraction = last.partition(".")
    if (
        not all(w.isdigit() for w in wholes)
        or not integer.isdigit()
        or (fraction and not fraction.isdigit())
    ):
        return None
    scales = (3600, 60, 1)
    if any(float(p) >= 60.0 for p in parts[1:]):
        return None
    seconds = (
        sum(int(w) * s for w, s in zip(wholes, scales, strict=False))
        + float(last) * scales[len(wholes)]
    )
    return seconds / 3600.0, scales[len(wholes)] * 10.0 ** -len(fraction)
