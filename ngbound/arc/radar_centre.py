"""Delays of echoes from the surface, referred to the centre of mass; imports numpy, constants and
this room.

ADES knows two kinds of delay: to the centre of mass (com = 1, also when absent) and to the point of
strongest echo (com = 0), one radius nearer. The latter can be used where the radius is known: two
radii of light time are added, and the error of the radius is one that all such delays share.
"""

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from ngbound.arc.ades_rules import RADAR
from ngbound.arc.observations import REASON_LEADING_EDGE, Arc
from ngbound.arc.shared_errors import SharedErrors
from ngbound.constants import ARCSEC_RAD, C_KM_S

RADIUS_FRACTION = 0.2
"""Error of a radius as a fraction of it, where none is given: what faces the antenna of an
irregular body may be nearer or further than its mean radius says (a choice of ours)."""


def referred_to_centre(arc: Arc, radius_km: float) -> Arc:
    """The arc with the delays that were set aside for being to the surface made usable."""
    why = arc.table["why_not"].to_numpy(dtype=object)
    waiting = why == REASON_LEADING_EDGE
    if not waiting.any():
        return arc
    delay = arc.table["delay"].to_numpy(dtype=float)
    return replace(
        arc,
        table=arc.table.assign(
            delay=np.where(waiting, delay + 2.0 * radius_km / C_KM_S, delay),
            why_not=np.where(waiting, "", why),
            use=arc.table["use"].to_numpy(dtype=bool) | waiting,
        ),
    )


def radius_error(arc: Arc, sigma_km: float) -> SharedErrors | None:
    """The radius less the one given, in the delays that are to the surface, in the unit of echoes;
    None when no usable record has such a delay.
    """
    table = arc.table
    if "com" not in table or "delay" not in table:
        return None
    delay: NDArray[np.float64] = table["delay"].to_numpy(dtype=float)
    mine = (table["kind"] == RADAR).to_numpy(dtype=bool) & np.isfinite(delay)
    mine &= (table["com"] == 0).to_numpy(dtype=bool)
    if not mine.any():
        return None
    column = np.zeros((len(table), 2))
    rms_s = table["rmsDelay"].to_numpy(dtype=float)[mine] * 1e-6
    column[mine, 0] = -2.0 * sigma_km / C_KM_S / rms_s * ARCSEC_RAD
    return SharedErrors(
        ("radius of the body",),
        column.reshape(-1, 1),
        np.array([sigma_km]),
        ("km",),
        ("chosen by the user",),
    )
