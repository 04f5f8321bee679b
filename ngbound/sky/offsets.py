"""Offset records reduced to positions, where the body they are counted from is in the ephemeris;
imports numpy, the arc room and this room.

An offset record gives the distance of the object from another body on the sky. With the place of
that body as the station saw it (light time included, as catalogue stars would show it), the offset
becomes a right ascension and a declination. ``deltaRA`` is already multiplied by cos dec, so it is
divided by it before it is added to a right ascension; ``dist`` and ``pa`` are laid off on the
sphere.

From Mars outwards the ephemeris knows the barycentre of a planet with its satellites, not the
planet: for Jupiter and Saturn that is up to about 0.1 arcsec off, and the user is told.
"""

import warnings
from dataclasses import replace
from functools import partial

import numpy as np
from numpy.typing import NDArray

from ngbound.arc import REASON_OFFSET, Arc, offset_arcsec
from ngbound.constants import ARCSEC_RAD
from ngbound.errors import EphemerisRangeError, InputError, NgboundWarning
from ngbound.sky.ephemeris import Ephemeris, body_name
from ngbound.sky.observers import Observers, observer_states
from ngbound.sky.sightline import (
    angles_to_direction,
    astrometric,
    direction_to_angles,
    sky_axes,
)

FloatArray = NDArray[np.float64]

REASON_CENTRE_UNKNOWN = "an offset from {centre}, which is not in the ephemeris"
REASON_NO_PLACE = "an offset from another body, seen from a station without a known position"
REASON_OUTSIDE = "an offset from {centre} at a date outside the ephemeris"
NOT_THE_PLANET = ("jupiter", "saturn", "uranus", "neptune")
"""Bodies that stand for the barycentre of their system."""
EARTH_CENTRE = 399
J2000_MJD = 51544.5
ON_GROUND = ("WGS84", "ITRF")
IN_SPACE = ("ICRF_KM", "ICRF_AU")
_OFFSETS = ("deltaRA", "deltaDec", "dist", "pa")


def reduce_offsets(arc: Arc, ephemeris: Ephemeris) -> Arc:
    """The arc with its offset records turned into positions where that is possible.

    Parameters
    ----------
    arc : Arc
    ephemeris : Ephemeris

    Returns
    -------
    Arc
        Rows of the kind "offset" that were set aside for being offsets, and whose ``obsCenter`` is
        a planet, the Moon or a minor planet of the ephemeris, have ``ra``, ``dec``, ``ra_rad``,
        ``dec_rad`` and can be used; the others keep ``use`` False with a reason of their own. An
        arc without offset records comes back as it is.
    """
    table = arc.table
    waiting = (table["kind"] == "offset") & (table["why_not"] == REASON_OFFSET)
    rows = np.flatnonzero(waiting.to_numpy(dtype=bool))
    if not len(rows) or "obsCenter" not in table:
        return arc
    centre = table["obsCenter"].to_numpy(dtype=object)
    why = table["why_not"].to_numpy(dtype=object).copy()
    names: dict[str, list[int]] = {}
    placed = _placed(arc, rows)
    for row, known in zip(rows.tolist(), placed, strict=True):
        name = _body(str(centre[row]))
        if name is None:
            why[row] = REASON_CENTRE_UNKNOWN.format(centre=centre[row] or "an unnamed body")
        elif not known:
            why[row] = REASON_NO_PLACE
        else:
            names.setdefault(name, []).append(row)
    ra, dec = (table[c].to_numpy(dtype=float, copy=True) for c in ("ra_rad", "dec_rad"))
    for name, mine in names.items():
        here = np.array(mine)
        inside = _inside(arc, here, ephemeris)
        why[here[~inside]] = REASON_OUTSIDE.format(centre=name.capitalize())
        here = here[inside]
        if not len(here):
            continue
        ra[here], dec[here] = _reduced(arc, here, name, ephemeris)
        why[here] = ""
        if name in NOT_THE_PLANET:
            warnings.warn(
                f"{arc.source}: the offsets from {name.capitalize()} ({len(here)}) are counted "
                "from the barycentre of its system; the positions can be off by 0.1 arcsec.",
                NgboundWarning,
                stacklevel=2,
            )
    changed = table.assign(
        ra_rad=ra,
        dec_rad=dec,
        ra=np.where(waiting, np.degrees(ra), table["ra"]),
        dec=np.where(waiting, np.degrees(dec), table["dec"]),
        why_not=why,
        use=why == "",
    )
    return replace(arc, table=changed)


def _body(centre: str) -> str | None:
    """Name in the ephemeris of what an offset is counted from; None when it is not there."""
    try:
        name = body_name(centre)
    except InputError:
        return None
    return None if name in ("sun", "earth", "emb", "ssb") else name


def _placed(arc: Arc, rows: NDArray[np.int64]) -> NDArray[np.bool_]:
    """Whether the position of the station of each row is known."""
    table = arc.table.iloc[rows]
    site, system = table["site"].to_numpy(dtype=object), table["sys"].to_numpy(dtype=object)
    given = np.isfinite(table[["pos1", "pos2", "pos3"]].to_numpy(dtype=float)).all(axis=1)
    given &= table["ctr"].to_numpy(dtype=float) == EARTH_CENTRE
    return (
        np.isin(site, ("fixed", "geocentre"))
        | ((site == "roving") & given & np.isin(system, ON_GROUND))
        | ((site == "space") & given & np.isin(system, IN_SPACE))
    ).astype(bool)


def _inside(arc: Arc, rows: NDArray[np.int64], ephemeris: Ephemeris) -> NDArray[np.bool_]:
    """Whether the ephemeris covers the instant of each row."""
    days = arc.table["utc_day"].to_numpy()[rows]
    inside = np.ones(len(rows), dtype=bool)
    for day in np.unique(days).tolist():
        try:
            ephemeris.position_au("earth", np.array([day - J2000_MJD - 1.0, day - J2000_MJD + 2.0]))
        except EphemerisRangeError:
            inside[days == day] = False
    return inside


def _reduced(
    arc: Arc, rows: NDArray[np.int64], name: str, ephemeris: Ephemeris
) -> tuple[FloatArray, FloatArray]:
    """RA and Dec in rad of offsets from one body."""
    part = arc.select(rows)
    observers: Observers = observer_states(part, ephemeris)
    seen = astrometric(partial(ephemeris.position_au, name), observers.tdb_d, observers.position_au)
    columns = {c: part.table[c].to_numpy(dtype=float) for c in _OFFSETS if c in part.table}
    d_ra, d_dec = (d * ARCSEC_RAD for d in offset_arcsec(columns, len(part)))
    ra = (seen.ra_rad + d_ra / np.cos(seen.dec_rad)) % (2.0 * np.pi)
    dec = seen.dec_rad + d_dec
    polar = np.isfinite(columns["dist"]) if "dist" in columns else np.zeros(len(part), dtype=bool)
    if polar.any():
        dist = columns["dist"][polar] * ARCSEC_RAD
        pa = np.radians(columns["pa"][polar])
        east, north = sky_axes(seen.ra_rad[polar], seen.dec_rad[polar])
        centre = angles_to_direction(seen.ra_rad[polar], seen.dec_rad[polar])
        along = np.sin(pa)[:, None] * east + np.cos(pa)[:, None] * north
        direction = np.cos(dist)[:, None] * centre + np.sin(dist)[:, None] * along
        ra[polar], dec[polar] = direction_to_angles(direction)
    return ra, dec
