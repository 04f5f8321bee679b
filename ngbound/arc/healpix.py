"""The equal-area tile of the sky that a direction lies in; imports numpy.

K. M. Gorski et al. 2005, ApJ 622, 759, section 4: 12 N^2 tiles of equal area on rings of constant
latitude, counted from the north pole southwards and eastwards on each ring ("RING" order). With z =
sin(latitude) and t = longitude / (pi/2), the edges of the tiles are straight lines of z against t
where |z| <= 2/3, and of t against sqrt(3 (1 - |z|)) nearer to the poles; the number of edges of
each of the two slopes passed so far gives ring and place on the ring.
"""

import numpy as np
from numpy.typing import ArrayLike, NDArray


def ring_tile(nside: int, longitude_rad: ArrayLike, latitude_rad: ArrayLike) -> NDArray[np.int64]:
    """Tile (n,), 0 to 12 nside^2 - 1 in RING order, of each direction.

    Parameters
    ----------
    nside : int
        N, at least 1.
    longitude_rad, latitude_rad : (n,) arrays
        For star catalogues right ascension and declination; finite.
    """
    longitude, latitude = np.atleast_1d(longitude_rad, latitude_rad)
    z = np.sin(latitude)
    t = np.mod(longitude, 2.0 * np.pi) / (0.5 * np.pi)
    t[t >= 4.0] = 0.0
    out = np.empty(len(z), dtype=np.int64)

    belt = np.abs(z) <= 2.0 / 3.0
    rising = np.floor(nside * (0.5 + t[belt] - 0.75 * z[belt])).astype(np.int64)
    falling = np.floor(nside * (0.5 + t[belt] + 0.75 * z[belt])).astype(np.int64)
    ring = nside + 1 + rising - falling
    place = (rising + falling - nside + 2 - ring % 2) // 2 % (4 * nside)
    out[belt] = 2 * nside * (nside - 1) + (ring - 1) * 4 * nside + place

    cap = ~belt
    # 1 - |z| without loss of figures at the pole
    reach = nside * np.sqrt(6.0) * np.abs(np.sin(0.5 * (0.5 * np.pi - np.abs(latitude[cap]))))
    quarter = t[cap] % 1.0
    ring = np.floor(quarter * reach).astype(np.int64)
    ring += np.floor((1.0 - quarter) * reach).astype(np.int64) + 1
    place = np.floor(t[cap] * ring).astype(np.int64) % (4 * ring)
    north = 2 * ring * (ring - 1) + place
    south = 12 * nside**2 - 2 * ring * (ring + 1) + place
    out[cap] = np.where(z[cap] > 0.0, north, south)
    return out
