"""Delay and Doppler shift of the lanes of a batch of neighbours, from the legs of the reference.

With d the lane's offset at the reference's bounce time, its own bounce is later by
-(|rho + d| - |rho|) / (c + n.V), the signal arrives there having been sent earlier or later by what
the length of the other leg has changed, and the rate of the delay is that of the two legs
(`ngbound.motion.radar`); times change to first order, lengths are exact. The Sun's delay changes by
its slope; its rate and the clocks are those of the reference.
"""

import math

from .compiled import kernel

_FAST = {"contract", "nsz", "nnan", "ninf", "arcp"}


@kernel(fastmath=_FAST)
def echo_residuals(c_au_d, rows, legs, rate, missed, per_day, per_rate, speed, offset, out):
    """Pairs of residuals of the echoes, written into ``out`` (n, 2, lanes) at ``rows`` (k,).

    ``legs`` (k, 7, 3): down, up, receiver's velocity, transmitter's velocity and acceleration,
    object's acceleration, slope of the Sun's delay; ``rate`` (k,) of the reference's delay by the
    formula used here; ``missed`` (k, 2) the reference's pairs; ``per_day``, ``per_rate`` (k,)
    radians for a day of delay and for a unit of its rate; ``speed`` (n, 3) of the object and
    ``offset`` (n, 6, lanes) as for the sightlines.
    """
    for k in range(rows.size):
        row = rows[k]
        x = legs[k, 0, 0]
        y = legs[k, 0, 1]
        z = legs[k, 0, 2]
        ux = legs[k, 1, 0]
        uy = legs[k, 1, 1]
        uz = legs[k, 1, 2]
        wx = legs[k, 3, 0]
        wy = legs[k, 3, 1]
        wz = legs[k, 3, 2]
        down_ref = math.sqrt(x * x + y * y + z * z)
        up_ref = math.sqrt(ux * ux + uy * uy + uz * uz)
        for lane in range(offset.shape[2]):
            dx = offset[row, 0, lane]
            dy = offset[row, 1, lane]
            dz = offset[row, 2, lane]
            vx = speed[row, 0] + offset[row, 3, lane]
            vy = speed[row, 1] + offset[row, 4, lane]
            vz = speed[row, 2] + offset[row, 5, lane]
            px = x + dx
            py = y + dy
            pz = z + dz
            far = math.sqrt(px * px + py * py + pz * pz)
            longer = (dx * (px + x) + dy * (py + y) + dz * (pz + z)) / (far + down_ref)
            late = -longer * far / (c_au_d * far + px * vx + py * vy + pz * vz)
            dx += vx * late
            dy += vy * late
            dz += vz * late
            vx += legs[k, 5, 0] * late
            vy += legs[k, 5, 1] * late
            vz += legs[k, 5, 2] * late
            # up
            qx = ux + dx
            qy = uy + dy
            qz = uz + dz
            above = math.sqrt(qx * qx + qy * qy + qz * qz)
            longer = (dx * (qx + ux) + dy * (qy + uy) + dz * (qz + uz)) / (above + up_ref)
            toward = (qx * wx + qy * wy + qz * wz) / above
            sent = (c_au_d * late - longer) / (c_au_d - toward)
            # rates of the two legs
            px = x + dx
            py = y + dy
            pz = z + dz
            far = math.sqrt(px * px + py * py + pz * pz)
            away = (px * vx + py * vy + pz * vz) / far
            end = (px * legs[k, 2, 0] + py * legs[k, 2, 1] + pz * legs[k, 2, 2]) / far
            down_rate = (away - end) / (c_au_d + away)
            sx = wx + legs[k, 4, 0] * sent
            sy = wy + legs[k, 4, 1] * sent
            sz = wz + legs[k, 4, 2] * sent
            qx -= wx * sent
            qy -= wy * sent
            qz -= wz * sent
            above = math.sqrt(qx * qx + qy * qy + qz * qz)
            away = (qx * vx + qy * vy + qz * vz) / above
            start = (qx * sx + qy * sy + qz * sz) / above
            up_rate = (1.0 - down_rate) * (away - start) / (c_au_d - start)
            sun = legs[k, 6, 0] * dx + legs[k, 6, 1] * dy + legs[k, 6, 2] * dz
            out[row, 0, lane] = missed[k, 0] + per_day[k] * (sent - sun)
            out[row, 1, lane] = missed[k, 1] + per_rate[k] * (down_rate + up_rate - rate[k])
