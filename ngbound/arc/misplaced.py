"""Observations that stand where another reading of their numbers would put them right: hours taken
for degrees, a lost sign, a second object; imports numpy only.

Nothing here knows an orbit. The arc is cut where the position jumps far more than the usual motion
allows; a short piece between two cuts is compared with what its neighbours in time predict, as
reported and under each other reading.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

JUMP_DEG = 1.0
JUMP_RATES = 2.5
"""A cut: a step larger than this many degrees plus this many times the usual motion."""
NEAR_DEG = 1.0
"""A reading is right when it lies within this of the prediction, plus `NEAR_SHARE` of the step
between the neighbours; the report is wrong when it is farther off than `FAR` times that."""
NEAR_SHARE = 0.3
FAR = 4.0
END_RATES = 1.5
"""At an end of the arc only one neighbour is there; the prediction may be off by this many times
the usual motion."""
TRACK_ARCSEC = 60.0
TRACK_DEG_D = 5.0
"""Two positions of a night belong to one track when they are no farther apart than this, plus this
motion."""
TRACK_APART_DEG = 0.1
"""Tracks of one night that lie at least this far apart are two objects."""
TRACK_WINDOW_D = 0.5
MOST_TRACKS = 50


@dataclass(frozen=True)
class Misread:
    """Rows that another reading puts right: what the reading is ("ra-in-hours", "ra-in-degrees",
    "declination-sign"), and how far off the report is, in degrees."""

    rows: tuple[int, ...]
    reading: str
    off_deg: float


def unit_vectors(ra_rad: FloatArray, dec_rad: FloatArray) -> FloatArray:
    """Directions (n, 3)."""
    cos = np.cos(dec_rad)
    return np.stack([cos * np.cos(ra_rad), cos * np.sin(ra_rad), np.sin(dec_rad)], axis=-1)


def apart_deg(one: FloatArray, two: FloatArray) -> FloatArray:
    """Angle in degrees between directions (..., 3)."""
    chord = np.linalg.norm(one - two, axis=-1)
    return np.degrees(2.0 * np.arcsin(np.clip(0.5 * chord, 0.0, 1.0)))


def misread(time_d: FloatArray, ra_rad: FloatArray, dec_rad: FloatArray) -> list[Misread]:
    """Pieces of an arc (n observations in any order) that another reading puts right."""
    if len(time_d) < 4:
        return []
    order = np.argsort(time_d, kind="stable")
    t, ra, dec = time_d[order], ra_rad[order], dec_rad[order]
    here = unit_vectors(ra, dec)
    step, gap = apart_deg(here[1:], here[:-1]), np.maximum(np.diff(t), 1e-3)
    usual = float(np.median(step / gap))
    cuts = np.flatnonzero(step > JUMP_DEG + JUMP_RATES * usual * gap) + 1
    if not len(cuts):
        return []
    edges = [0, *cuts.tolist(), len(t)]
    found = []
    trusted = np.ones(len(t), dtype=bool)
    pieces = sorted(zip(edges[:-1], edges[1:], strict=True), key=lambda p: p[1] - p[0])
    for low, high in pieces:
        if 2 * (high - low) > len(t) - (high - low):
            continue
        inside = np.arange(low, high)
        before, behind = np.flatnonzero(trusted[:low]), high + np.flatnonzero(trusted[high:])
        ends = (int(before[-1]) if len(before) else -1, int(behind[0]) if len(behind) else -1)
        predicted, slack = _predicted(t, here, inside, ends, usual)
        off = apart_deg(here[inside], predicted)
        for reading, (other_ra, other_dec) in {
            "ra-in-hours": (ra[inside] * 15.0, dec[inside]),
            "ra-in-degrees": (ra[inside] / 15.0, dec[inside]),
            "declination-sign": (ra[inside], -dec[inside]),
        }.items():
            there = apart_deg(unit_vectors(other_ra, other_dec), predicted)
            right = (there < slack) & (off > FAR * slack)
            if right.any():
                rows = tuple(sorted(int(r) for r in order[inside[right]]))
                trusted[inside[right]] = False
                found.append(Misread(rows, reading, float(np.median(off[right]))))
                break
    return sorted(found, key=lambda piece: piece.rows)


def _predicted(
    t: FloatArray, here: FloatArray, inside: IntArray, ends: tuple[int, int], usual_deg_d: float
) -> tuple[FloatArray, float]:
    """Directions that the neighbours before and behind (-1 when there is none) predict for some
    rows, and how far they may be wrong (deg)."""
    before, behind = ends
    if before < 0 or behind < 0:
        near = max(before, behind)
        gap_d = float(np.abs(t[inside] - t[near]).max())
        slack = NEAR_DEG + END_RATES * usual_deg_d * gap_d
        return np.repeat(here[near : near + 1], len(inside), axis=0), slack
    share = ((t[inside] - t[before]) / max(t[behind] - t[before], 1e-9))[:, None]
    between = (1.0 - share) * here[before] + share * here[behind]
    between /= np.maximum(np.linalg.norm(between, axis=1, keepdims=True), 1e-9)
    return between, NEAR_DEG + NEAR_SHARE * float(apart_deg(here[before], here[behind]))


def second_tracks(
    time_d: FloatArray, ra_rad: FloatArray, dec_rad: FloatArray, stn: NDArray[np.object_]
) -> list[IntArray]:
    """Rows of the smaller tracks in nights where the positions of one station form two or more of
    at least two observations each. (Stations are kept apart, for a spacecraft sees a near object
    degrees away from where the Earth does.)"""
    order = np.lexsort((time_d, stn.astype(str)))
    here = unit_vectors(ra_rad, dec_rad)
    found = []
    start = 0
    for at in range(1, len(order) + 1):
        if (
            at < len(order)
            and stn[order[at]] == stn[order[start]]
            and time_d[order[at]] - time_d[order[start]] <= TRACK_WINDOW_D
        ):
            continue
        rows = order[start:at]
        start = at
        if len(rows) < 4 or float(apart_deg(here[rows], here[rows[0]]).max()) < TRACK_APART_DEG:
            continue
        tracks: list[list[int]] = []
        for row in rows.tolist():
            for track in tracks:
                gap = time_d[row] - time_d[track[-1]]
                near = TRACK_ARCSEC / 3600.0 + TRACK_DEG_D * gap
                if float(apart_deg(here[row], here[track[-1]])) <= near:
                    track.append(row)
                    break
            else:
                if len(tracks) < MOST_TRACKS:
                    tracks.append([row])
        long = sorted((t for t in tracks if len(t) >= 2), key=len, reverse=True)
        for track in long[1:]:
            if float(apart_deg(here[track[0]], here[long[0]]).min()) >= TRACK_APART_DEG:
                found.append(np.array(track, dtype=np.int64))
    return found
