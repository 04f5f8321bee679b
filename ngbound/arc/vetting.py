"""What is doubtful in an arc, before any orbit; imports this room's table and nights.

Nothing is taken out: each finding names the rows and says what it would do to a thrust estimate.
"""

from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ngbound.arc.ades_rules import RADAR
from ngbound.arc.errors_model import station_nights
from ngbound.arc.misplaced import misread, second_tracks
from ngbound.arc.observations import Arc, observers_of
from ngbound.arc.stations import record_position_km
from ngbound.arc.time_stamps import time_shifts
from ngbound.constants import AU_KM
from ngbound.errors import StationError
from ngbound.rounding import counted

SAME_INSTANT_S = 2.0
"""Two records of one station closer than this are one observation, or a repeated one."""
SAME_PLACE_ARCSEC = 0.05
NEAR_PLACE_ARCSEC = 3.0
JUMP_DEG_D = 10.0
"""Departure from the usual rate of the night that no small body beyond the Moon shows between
neighbours."""
JUMP_SLACK_ARCSEC = 15.0
FEWEST = 3
SAME_SITE_KM = 1.0
"""Positions of one station closer than this differ by less than any astrometry of today sees: a
kilometre is 1.4 mas at 1 au."""
PLACE_KM = {
    "WGS84": (6300.0, 6500.0),
    "ITRF": (6300.0, 6500.0),
    "ICRF_KM": (6300.0, 100.0 * AU_KM),
    "ICRF_AU": (6300.0, 100.0 * AU_KM),
}
"""Distances from the Earth's centre at which observers stand, by the system of the position."""
RADAR_MHZ = (5.0, 1e5)
"""What the ionosphere and the air let through."""
MOST_AT_ONCE = 5
"""Records of one station at one instant that are compared with each other."""
SYSTEM_UNITS = {
    "WGS84": "east longitude and latitude in degrees, altitude in m",
    "ITRF": "east longitude in degrees, distances from axis and equator in km",
    "ICRF_KM": "x, y, z in km",
    "ICRF_AU": "x, y, z in au",
}
READINGS = {
    "ra-in-hours": "its right ascension, taken as hours, fits",
    "ra-in-degrees": "its right ascension, divided by 15, fits",
    "declination-sign": "its declination with the other sign fits",
}


@dataclass(frozen=True)
class Finding:
    """Something doubtful: row positions in ``arc.table``, a kind, and one sentence."""

    rows: tuple[int, ...]
    kind: str
    sentence: str

    def __str__(self) -> str:
        return f"{self.kind}: {self.sentence}"

    def to_dict(self) -> dict[str, Any]:
        """JSON-able content."""
        return asdict(self) | {"rows": list(self.rows)}


def vet(arc: Arc) -> list[Finding]:
    """Findings about the usable observations of an arc, in the order of their rows.

    Kinds: "exact-duplicate", "near-duplicate", "impossible-rate", "ra-in-hours", "ra-in-degrees",
    "declination-sign", "second-object", "time-stamps", "few-observations", "single-station",
    "surplus-position", "impossible-position", "impossible-frequency".
    """
    table = arc.table
    rows = np.flatnonzero(table["use"].to_numpy(dtype=bool))
    findings: list[Finding] = []
    if len(rows) < FEWEST:
        findings.append(
            Finding(
                tuple(int(r) for r in rows),
                "few-observations",
                f"only {counted(len(rows), 'usable observation')}: an orbit needs at least "
                f"{FEWEST}, and a thrust more.",
            )
        )
    if len(rows) == 0:
        return findings
    radar = (table["kind"] == RADAR).to_numpy(dtype=bool)[rows]
    findings.extend(_echoes_twice(arc, rows[radar]))
    findings.extend(_frequencies(arc, rows[radar]))
    # what follows is about directions
    rows = rows[~radar]
    if len(rows) == 0:
        return findings
    used = arc.select(rows)
    t = used.table
    time = t["utc_day"].to_numpy() + t["utc_sec"].to_numpy() / 86400.0
    findings.extend(_duplicates(used, rows, time))
    findings.extend(_jumps(used, rows, time))
    findings.extend(_misread(used, rows, time))
    findings.extend(_time_stamps(used, rows))
    if len(set(observers_of(used))) == 1 and len(rows) >= FEWEST:
        findings.append(
            Finding(
                (),
                "single-station",
                f"all {len(rows)} directions come from station {t['stn'].iloc[0]}: an error of "
                "its clock or catalogue cannot be told from a thrust.",
            )
        )
    findings.extend(_surplus(used, rows))
    findings.extend(_places(used, rows))
    return sorted(findings, key=lambda f: f.rows[:1])


def _surplus(arc: Arc, rows: NDArray[np.int64]) -> list[Finding]:
    """Positions in records of stations that have a place of their own in the list."""
    t = arc.table
    site, given = t["site"].to_numpy(dtype=object), (t["sys"] != "").to_numpy(dtype=bool)
    codes = t["stn"].to_numpy(dtype=object)
    found = []
    for code in sorted(set(codes[given & (site != "roving")])):
        mine = given & (codes == code)
        mine &= t["sys"].to_numpy(dtype=object) != "IAU"
        try:
            place = arc.station(code)
        except StationError:
            continue
        if not np.isfinite(place.longitude_deg) or not mine.any():
            continue
        if (site[mine] == "space").any():
            words = (
                "a position in space, which is used in place of the list of stations: if it is "
                "wrong, the parallax is, and a thrust takes part of that up."
            )
        else:
            off = max(
                float(np.linalg.norm(record_position_km(*row) - place.itrf_km))
                for row in set(t.loc[mine, ["sys", "pos1", "pos2", "pos3"]].itertuples(index=False))
            )
            words = (
                "a position of their own, which is passed over in favour of the list of stations; "
                f"the two lie {off:.1f} km apart"
                + (
                    ": if the record is right, the parallax is wrong by that much, and a thrust "
                    "takes part of it up."
                    if off > SAME_SITE_KM
                    else ", which no thrust feels."
                )
            )
        found.append(
            Finding(
                tuple(int(r) for r in rows[mine]),
                "surplus-position",
                f"{int(mine.sum())} records of the fixed station {code} give {words}",
            )
        )
    return found


def _places(arc: Arc, rows: NDArray[np.int64]) -> list[Finding]:
    """Positions of observers where none can stand: another unit, or another order."""
    t = arc.table
    codes = t["stn"].to_numpy(dtype=object)
    moving = np.isin(t["site"].to_numpy(dtype=object), ("roving", "space"))
    found = []
    for system, (least, most) in PLACE_KM.items():
        mine = np.flatnonzero(moving & (t["sys"] == system).to_numpy(dtype=bool))
        one, two, three = (t[f"pos{k}"].to_numpy(dtype=float)[mine] for k in (1, 2, 3))
        far_km = np.linalg.norm(record_position_km(system, one, two, three), axis=1)
        wrong = ~((far_km >= least) & (far_km <= most))
        if system == "WGS84":
            wrong |= np.abs(two) > 90.0
        for code in sorted(set(codes[mine[wrong]])):
            of_code = mine[wrong & (codes[mine] == code)]
            first = t.iloc[of_code[0]]
            found.append(
                Finding(
                    tuple(int(r) for r in rows[of_code]),
                    "impossible-position",
                    f"{counted(len(of_code), 'record')} of station {code}, the first in line "
                    f"{first['line']}: no observer stands at pos1 {first['pos1']:g}, pos2 "
                    f"{first['pos2']:g}, pos3 {first['pos3']:g} of the system {system} "
                    f"({SYSTEM_UNITS[system]}): the parallax is wrong, and a thrust takes part of "
                    "that up.",
                )
            )
    return found


def _frequencies(arc: Arc, rows: NDArray[np.int64]) -> list[Finding]:
    """Frequencies of echoes that no radar sends, as those in Hz or GHz."""
    t = arc.table.iloc[rows]
    wrong = rows[~t["frq"].between(*RADAR_MHZ).to_numpy()] if len(rows) else rows
    if not len(wrong):
        return []
    first = arc.table.iloc[wrong[0]]
    return [
        Finding(
            tuple(int(r) for r in wrong),
            "impossible-frequency",
            f"{counted(len(wrong), 'echo record')}, the first in line {first['line']}: no radar "
            f"sends at {first['frq']:g} MHz, the unit of frq; its Doppler shift is then computed "
            "wrong by as large a factor, and rejected or taken for a thrust.",
        )
    ]


def _sky(arc: Arc) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    return arc.table["ra_rad"].to_numpy(dtype=float), arc.table["dec_rad"].to_numpy(dtype=float)


def _step_arcsec(ra: NDArray, dec: NDArray, a: int, b: int) -> NDArray[np.float64]:
    """Step from a to b in RA times cos dec and Dec (arcsec), across the RA seam too."""
    d_ra = (ra[b] - ra[a] + np.pi) % (2.0 * np.pi) - np.pi
    return np.degrees(np.array([d_ra * np.cos(0.5 * (dec[a] + dec[b])), dec[b] - dec[a]])) * 3600.0


def _duplicates(arc: Arc, rows: NDArray[np.int64], time: NDArray[np.float64]) -> list[Finding]:
    ra, dec = _sky(arc)
    stn = observers_of(arc)
    line = arc.table["line"].to_numpy()
    order = np.lexsort((time, stn.astype(str)))
    found = []
    for i, a in enumerate(order):
        for b in order[i + 1 : i + 1 + MOST_AT_ONCE]:
            gap = (time[b] - time[a]) * 86400.0
            if stn[a] != stn[b] or gap > SAME_INSTANT_S:
                break
            apart = float(np.hypot(*_step_arcsec(ra, dec, a, b)))
            pair = tuple(sorted((int(rows[a]), int(rows[b]))))
            where = (
                f"lines {min(line[a], line[b])} and {max(line[a], line[b])} "
                f"(station {stn[a]}, {gap:.1f} s and {apart:.2f} arcsec apart)"
            )
            if apart <= SAME_PLACE_ARCSEC:
                found.append(
                    Finding(
                        pair,
                        "exact-duplicate",
                        f"{where} are the same observation: it would count twice, and the thrust's "
                        "error "
                        "come out too small.",
                    )
                )
            elif apart <= NEAR_PLACE_ARCSEC:
                found.append(
                    Finding(
                        pair,
                        "near-duplicate",
                        f"{where} look like two reductions of one observation: keep the better "
                        "one, or "
                        "the thrust's error comes out too small.",
                    )
                )
    return found


def _echoes_twice(arc: Arc, rows: NDArray[np.int64]) -> list[Finding]:
    """Echoes of one pair of stations and one instant, to within a clock, that are both delays or
    both Doppler shifts."""
    last: dict[tuple[Any, ...], tuple[int, float]] = {}
    found = []
    time = arc.table["utc_day"].to_numpy() * 86400.0 + arc.table["utc_sec"].to_numpy()
    for row in rows[np.argsort(time[rows], kind="stable")].tolist():
        record = arc.table.iloc[row]
        is_delay = bool(np.isfinite(record.get("delay", np.nan)))
        echo = (record["trx"], record["rcv"], is_delay)
        before, then = last.get(echo, (row, -np.inf))
        if time[row] - then <= SAME_INSTANT_S:
            pair = tuple(sorted((before, row)))
            lines = " and ".join(str(arc.table["line"].iloc[r]) for r in pair)
            found.append(
                Finding(
                    pair,
                    "exact-duplicate",
                    f"lines {lines} are {'delays' if is_delay else 'Doppler shifts'} of one echo "
                    f"(stations {record['trx']} and {record['rcv']}): it would count twice, and "
                    "the thrust's error come out too small.",
                )
            )
        last[echo] = row, time[row]
    return found


def _misread(arc: Arc, rows: NDArray[np.int64], time: NDArray[np.float64]) -> list[Finding]:
    ra, dec = _sky(arc)
    line = arc.table["line"].to_numpy()
    stn = observers_of(arc)
    # the parallax of a spacecraft sets its track apart from those seen from the ground
    in_space = (arc.table["site"] == "space").to_numpy(dtype=bool)
    ground = np.flatnonzero(~in_space)
    crafts = [np.flatnonzero(in_space & (stn == code)) for code in sorted(set(stn[in_space]))]
    found = []
    for seen in (ground, *crafts):
        for piece in misread(time[seen], ra[seen], dec[seen]):
            mine = seen[list(piece.rows)]
            where = ", ".join(str(n) for n in line[mine][:10])
            found.append(
                Finding(
                    tuple(int(r) for r in rows[mine]),
                    piece.reading,
                    f"line {where}: the position lies {piece.off_deg:.1f} deg from where its "
                    f"neighbours lead, and {READINGS[piece.reading]}. As it stands it is "
                    "rejected or spoils the orbit; put right it lengthens the arc, on which a "
                    "thrust's error depends most.",
                )
            )
    for track in second_tracks(time, ra, dec, stn):
        where = ", ".join(str(n) for n in line[track][:10])
        found.append(
            Finding(
                tuple(sorted(int(r) for r in rows[track])),
                "second-object",
                f"lines {where} follow a track of their own in that night, "
                "as a second object would: an orbit through both is no orbit, and a thrust from it "
                "means nothing. Take the lines out or choose the object.",
            )
        )
    return found


def _time_stamps(arc: Arc, rows: NDArray[np.int64]) -> list[Finding]:
    found = []
    for shift in time_shifts(arc):
        early = "early" if shift.fraction > 0.0 else "late"
        place = "the start" if shift.fraction > 0.0 else "the end"
        found.append(
            Finding(
                tuple(int(r) for r in rows[list(shift.rows)]),
                "time-stamps",
                f"the instants of station {shift.station} look {early} by "
                f"{abs(shift.fraction):.2f} +- {shift.sigma:.2f} of the exposure, as if they stood "
                f"at {place} of it (0.5) or a whole exposure off (1): a shift of "
                f"{shift.shift_arcsec:.2f} arcsec along the track, which a fit takes for a "
                "transverse thrust when the station covers one end of the arc.",
            )
        )
    return found


def _jumps(arc: Arc, rows: NDArray[np.int64], time: NDArray[np.float64]) -> list[Finding]:
    ra, dec = _sky(arc)
    night = station_nights(arc)
    line, stn = arc.table["line"].to_numpy(), arc.table["stn"].to_numpy(dtype=object)
    order = np.lexsort((time, night))
    pairs, steps, gaps = [], [], []
    for a, b in zip(order[:-1], order[1:], strict=True):
        gap_d = time[b] - time[a]
        if night[a] == night[b] and gap_d * 86400.0 > SAME_INSTANT_S:
            pairs.append((a, b))
            steps.append(_step_arcsec(ra, dec, a, b))
            gaps.append(gap_d)
    if not pairs:
        return []
    step, gap = np.array(steps), np.array(gaps)
    rate = step / gap[:, None]
    of_night = np.array([night[a] for a, _ in pairs])
    overall = np.median(rate, axis=0)
    found = []
    for k, (a, b) in enumerate(pairs):
        mine = rate[of_night == of_night[k]]
        usual = np.median(mine, axis=0) if len(mine) >= 3 else overall
        if len(pairs) == 1:
            usual = np.zeros(2)
        apart = float(np.hypot(*(step[k] - usual * gap[k])))
        if apart > JUMP_DEG_D * 3600.0 * gap[k] + JUMP_SLACK_ARCSEC:
            found.append(
                Finding(
                    (int(rows[a]), int(rows[b])),
                    "impossible-rate",
                    f"from line {line[a]} to line {line[b]} (station {stn[a]}) the position "
                    f"departs by {apart:.0f} arcsec in "
                    f"{gap[k] * 1440.0:.1f} min from the night's usual motion: one of the two is "
                    "wrong, and would pull the orbit "
                    "unless rejected.",
                )
            )
    return found
