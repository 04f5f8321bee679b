"""An arc as texts that the standard allows, for the writers; imports errors and this room's rules,
checks, fields and records.

What is written passes the same checks as what is read under that version: a value that has no
allowed spelling is refused, with the row and the rule named.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ngbound.arc.ades_rules import (
    COLUMNS,
    OCCULTATION,
    OPTICAL,
    OPTICAL_RESIDUAL,
    PREC_ANGLE,
    PREC_TIME,
    RADAR_RESIDUAL,
    RULES,
    VERSIONS,
    ColumnRule,
    context_problem,
)
from ngbound.arc.checking import IDENTIFICATION, Checker
from ngbound.arc.fields import fitted_decimal, format_times, plain_number, shortest_double
from ngbound.arc.observations import Arc
from ngbound.arc.records import ObjectArray, Records
from ngbound.errors import ArcError

TIME_LENGTH = 27
"""Characters of an instant with six decimals of a second."""


@dataclass(frozen=True)
class Run:
    """Consecutive records of one block and kind: their row positions, and the ADES columns that
    at least one of them fills, as texts."""

    block: int
    kind: str
    rows: NDArray[np.int64]
    columns: dict[str, ObjectArray]


def checked_contexts(arc: Arc, version: str) -> None:
    """Refuse a version that is not known, and headers in use that it does not allow."""
    if version not in VERSIONS:
        raise ArcError(
            f"The ADES version {version!r} is not known; it must be {' or '.join(VERSIONS)}.",
            value=version,
        )
    for block in np.unique(arc.table["block"].to_numpy()).tolist():
        problem = context_problem(arc.contexts[block], version) if block >= 0 else None
        if problem is not None:
            _, name, value, sentence = problem
            other = next(v for v in VERSIONS if v != version)
            raise ArcError(
                f"{arc.source}: the header of block {block + 1} cannot be written in version "
                f"{version}; header element {name}: {sentence}, or write version='{other}'.",
                column=name,
                value=value,
            )


def grouped_cells(arc: Arc, version: str) -> list[Run]:
    """The runs of an arc, in the order of its records; ArcError when something cannot be
    written."""
    table = arc.table
    if len(table) == 0:
        raise ArcError("There is no observation to write; an arc needs at least one.")
    block, kind = table["block"].to_numpy(), table["kind"].to_numpy(dtype=object)
    change = np.flatnonzero((block[1:] != block[:-1]) | (kind[1:] != kind[:-1])) + 1
    cells = _ades_cells(arc, version)
    _check(arc, kind, cells, version)
    runs = []
    for rows in np.split(np.arange(len(table)), change):
        mine = {c: v[rows] for c, v in cells.items() if kind[rows[0]] in COLUMNS[c].kinds}
        filled = {c: mine[c] for c in COLUMNS if c in mine and (mine[c] != "").any()}
        runs.append(Run(int(block[rows[0]]), str(kind[rows[0]]), rows, filled))
    return runs


def _check(arc: Arc, kind: ObjectArray, cells: dict[str, ObjectArray], version: str) -> None:
    n = len(kind)
    for name, texts in cells.items():
        kinds = COLUMNS[name].kinds
        alien = np.array([k not in kinds for k in kind], dtype=bool) & (texts != "")
        if alien.any() and name not in ("ra", "dec"):
            texts[alien] = ""
        if name not in RULES[version] and (texts != "").any():
            raise ArcError(
                f"{arc.source}: the column {name} does not exist in version 2017; write "
                "version='2022', or drop the column.",
                column=name,
            )
    named = (kind == OCCULTATION) & (cells["mode"] != "")
    if version == "2017" and named.any():
        row = int(np.argmax(named))
        raise ArcError(
            f"{arc.source}, row {row}, column mode: the value {cells['mode'][row]!r} cannot be "
            "told, for occultations have no mode in version 2017 (all are OCC); write "
            "version='2022'.",
            column="mode",
            value=cells["mode"][row],
        )
    bare = np.isin(kind, (OPTICAL_RESIDUAL, RADAR_RESIDUAL)) & (arc.table["block"] >= 0)
    if bare.any():
        raise ArcError(
            f"{arc.source}: residual records cannot stand under a header, but row "
            f"{int(np.argmax(bare))} does; set its block to -1.",
        )
    records = Records(
        source=f"{arc.source} (to be written)",
        text=cells,
        kind=kind,
        line=np.arange(n, dtype=np.int64),
        block=np.full(n, -1, dtype=np.int64),
        set_aside=np.full(n, "", dtype=object),
        version=version,
        unit_name="row",
    )
    Checker(records).everything()


def _ades_cells(arc: Arc, version: str) -> dict[str, ObjectArray]:
    """All ADES columns of an arc as texts."""
    table, n = arc.table, len(arc.table)
    cells: dict[str, ObjectArray] = {}
    for name in COLUMNS:
        if name not in table:
            continue
        column, rule = table[name], RULES[version].get(name, COLUMNS[name])
        if rule.form in ("text", "time"):
            texts = [v if isinstance(v, str) else "" for v in column.to_numpy(dtype=object)]
        else:
            values, codes = np.unique(column.to_numpy(dtype=float), return_inverse=True)
            spelled = np.array(["" if v != v else _number(v, rule) for v in values], dtype=object)
            texts = spelled[codes].tolist()
        cells[name] = np.array(texts, dtype=object)
    _spell_angles(arc, cells, version)
    _spell_offset_errors(arc, cells, RULES[version]["rmsCorr"])
    optical = (table["kind"] == OPTICAL).to_numpy(dtype=bool)
    _spell_precision(arc, cells, optical)
    cells["obsTime"] = _times(arc) if version == "2022" else cells["obsTime"]
    if "mag" in cells:
        bare = (cells["mag"] != "") & (cells["band"] == "")
        cells["band"] = np.where(bare, "UNK", cells["band"])
    named = np.zeros(n, dtype=bool)
    for name in IDENTIFICATION:
        if name in cells:
            named |= cells[name] != ""
    if not named.all():
        label = "".join(c for c in arc.name if c.isascii() and c.isalnum())[:8] or "object"
        cells["trkSub"] = np.where(named, cells["trkSub"], label)
    cells["mode"] = np.where(optical & (cells["mode"] == ""), "UNK", cells["mode"])
    occultation = (table["kind"] == OCCULTATION).to_numpy(dtype=bool)
    cells["mode"] = np.where(
        occultation & (cells["mode"] == ("OCC" if version == "2017" else "")),
        "" if version == "2017" else "OCC",
        cells["mode"],
    )
    cells["astCat"] = np.where(optical & (cells["astCat"] == ""), "UNK", cells["astCat"])
    return cells


def _number(value: float, rule: ColumnRule) -> str:
    if rule.form == "double":
        return shortest_double(value, rule.width)
    return fitted_decimal(value, rule.places, rule.width)


def _spell_angles(arc: Arc, cells: dict[str, ObjectArray], version: str) -> None:
    """Reported angles in the spelling of a version: their own digits where those are decimal."""
    table = arc.table
    ra_text = table["raText"].to_numpy(dtype=object)
    dec_text = table["decText"].to_numpy(dtype=object)
    for name, texts, kind in (
        ("ra", ra_text, OPTICAL),
        ("dec", dec_text, OPTICAL),
        ("raStar", ra_text, OCCULTATION),
        ("decStar", dec_text, OCCULTATION),
    ):
        if name in cells:
            mine = (table["kind"] == kind).to_numpy(dtype=bool)
            values = table[name].to_numpy(dtype=float)
            cells[name] = np.array(
                [
                    _angle(t, v, version) if m and v == v else ""
                    for t, v, m in zip(texts, values, mine, strict=True)
                ],
                dtype=object,
            )


def _spell_offset_errors(arc: Arc, cells: dict[str, ObjectArray], rule: ColumnRule) -> None:
    """Errors of offsets in distance and angle as they were reported."""
    if "dist" not in cells:
        return
    polar = cells["dist"] != ""
    for name in ("rmsRA", "rmsDec"):
        cells[name][polar] = ""
    if "corrReported" in arc.table:
        reported = arc.table["corrReported"].to_numpy(dtype=float)
        turned = polar & (cells["rmsDist"] != "") & (cells["rmsPA"] != "")
        for row in np.flatnonzero(turned):
            value = reported[row]
            cells["rmsCorr"][row] = "" if value != value else _number(value, rule)


def _angle(text: str, value: float, version: str) -> str:
    """The reported decimal text in the spelling of a version; degrees with nine decimals when it
    was not decimal."""
    if text and set(text) <= set("+-.0123456789"):
        if version == "2017":
            return text
        whole, point, places = text.lstrip("+-").partition(".")
        if len(places) <= 9:
            return ("-" if text[0] == "-" else "") + (whole.lstrip("0") or "0") + point + places
    rounded = plain_number(value, 9)
    return "0.000000000" if rounded.startswith("360.") else rounded


def _spell_precision(arc: Arc, cells: dict[str, ObjectArray], optical: NDArray[np.bool_]) -> None:
    """The resolution of sexagesimal reports in precTime, precRA and precDec."""
    table = arc.table
    sexagesimal = optical & np.array([" " in t or ":" in t for t in table["raText"]], dtype=bool)
    if not sexagesimal.any():
        return
    cos = np.abs(np.cos(table["dec_rad"].to_numpy()))
    ra_step = table["digits_ra_arcsec"].to_numpy() / np.maximum(cos, 1e-9) / 15.0
    dec_step = table["digits_dec_arcsec"].to_numpy()
    for name, values, steps in (
        ("precTime", table["digits_time_s"].to_numpy() / 0.0864, PREC_TIME),
        ("precRA", ra_step, PREC_ANGLE),
        ("precDec", dec_step, PREC_ANGLE),
    ):
        had = cells.get(name, np.full(len(table), "", dtype=object))
        cells[name] = np.array(
            [
                _step(v, steps) if s and not h else h
                for v, s, h in zip(values, sexagesimal, had, strict=True)
            ],
            dtype=object,
        )


def _step(value: float, allowed: tuple[float, ...]) -> str:
    """The smallest allowed resolution that is not finer than the one found."""
    for step in allowed:
        if step >= value * (1.0 - 1e-9):
            return plain_number(step)
    return plain_number(allowed[-1])


def _times(arc: Arc) -> ObjectArray:
    table = arc.table
    texts = table["obsTime"].to_numpy(dtype=object).copy()
    long = np.array([len(t) > TIME_LENGTH and ":60" not in t for t in texts], dtype=bool)
    if long.any():
        day, sec = table["utc_day"].to_numpy()[long], table["utc_sec"].to_numpy()[long]
        texts[long] = format_times(day, sec, np.full(int(long.sum()), 6))
    return texts
