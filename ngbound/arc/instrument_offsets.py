"""Offsets that belong to the observer or to the object: station, clock, photocentre; imports numpy,
constants and this room.

A station keeps an offset of its own over the years: refraction of different colours, optics, the
habits of its reduction. M. Carpino, A. Milani & S. R. Chesley 2003, Icarus 166, 248, found mean
residuals of many stations that are a sizeable part of their scatter (from memory). No size that
could serve as a prior was found published: the published weights (P. Veres et al. 2017, Icarus 296,
139) are of single records and tell nothing of what a station keeps over the years. The default, a
fifth of a sigma that is implied by the table and nothing where the observer states his own, is
therefore a choice, and it was made after an arc had shown the need: without it the inert asteroid
12893 shows a normal thrust of 3.7 sigma. Whoever asks for published priors only sets it to 0; the
variant "no station offsets" (`ngbound.fit.error_variants`) says beside every limit what it costs.

The others are off unless asked for or, a clock error, stated (uncTime). A clock error moves the
observed place along the motion; the
photocentre of a comet lies off its nucleus along the direction to the Sun, by an angle that goes
as 1/distance (for example D. K. Yeomans et al. 2004, in Comets II, p. 137; the size is the
user's).
"""

import numpy as np
from numpy.typing import NDArray

from ngbound.arc.observations import Arc, observers_of
from ngbound.arc.shared_errors import SharedErrors
from ngbound.constants import ARCSEC_RAD

FloatArray = NDArray[np.float64]
USER = "chosen by the user"


def station_offsets(arc: Arc, sigma_arcsec: FloatArray, source: str = USER) -> SharedErrors:
    """An offset in RA and one in Dec for each station, over the whole arc; each place of roving
    observers, who share a code, is a station.

    Parameters
    ----------
    sigma_arcsec : ndarray (n,)
        Prior standard deviation, per observation; stations where all are 0 have no offset.
    source : str
        Where the prior comes from.
    """
    stn = observers_of(arc)
    names, columns, sigma = [], [], []
    for code in sorted(set(stn.tolist())):
        mine = stn == code
        if sigma_arcsec[mine].max() <= 0.0:
            continue
        for axis, letter in enumerate(("RA", "Dec")):
            column = np.zeros((len(stn), 2))
            column[mine, axis] = sigma_arcsec[mine] * ARCSEC_RAD
            names.append(f"station {code}, {letter}")
            columns.append(column.ravel())
            sigma.append(float(np.median(sigma_arcsec[mine])))
    return _made(names, columns, np.array(sigma), "arcsec", [source] * len(names))


def _made(
    names: list[str], columns: list[FloatArray], sigma: FloatArray, unit: str, source: list[str]
) -> SharedErrors:
    k = len(names)
    matrix = np.stack(columns, axis=1) if columns else np.zeros((0, 0))
    return SharedErrors(tuple(names), matrix, sigma, (unit,) * k, tuple(source))


def station_clocks(arc: Arc, sigma_s: float, motion_arcsec_s: FloatArray) -> SharedErrors:
    """A clock error for each station: along the motion (n, 2), arcsec/s in RA cos dec and Dec.

    Its prior standard deviation is the stated uncTime of a record, and ``sigma_s`` where a record
    states none; stations where all are 0 have none.
    """
    stn = observers_of(arc)
    chosen = np.full(len(stn), sigma_s)
    stated = (
        arc.table["uncTime"].to_numpy(dtype=float) if "uncTime" in arc.table else chosen * np.nan
    )
    sizes = np.where(np.isfinite(stated), stated, chosen)
    names, columns, sigma, source = [], [], [], []
    for code in sorted(set(stn.tolist())):
        mine = stn == code
        if sizes[mine].max() <= 0.0:
            continue
        column = np.where(mine[:, None], motion_arcsec_s * sizes[:, None], 0.0) * ARCSEC_RAD
        names.append(f"clock of station {code}")
        columns.append(column.ravel())
        sigma.append(float(np.median(sizes[mine])))
        source.append("stated as uncTime" if np.isfinite(stated[mine]).any() else USER)
    return _made(names, columns, np.array(sigma), "s", source)


def photocentre_offset(sigma_arcsec_au: float, sunward_per_au: FloatArray) -> SharedErrors:
    """The photocentre off the nucleus towards the Sun.

    Parameters
    ----------
    sigma_arcsec_au : float
        Prior standard deviation, arcsec at 1 au from the observer (725 km an arcsec), for the Sun
        seen square to the sightline.
    sunward_per_au : ndarray (n, 2)
        Unit vector object to Sun projected on RA cos dec and Dec, over the distance in au.
    """
    column = sigma_arcsec_au * ARCSEC_RAD * sunward_per_au
    sigma = np.array([sigma_arcsec_au])
    return _made(["photocentre sunward"], [column.ravel()], sigma, "arcsec au", [USER])
