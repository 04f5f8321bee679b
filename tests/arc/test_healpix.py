"""Tiles of the sky: centres of the paper, equal counts, and an independent package."""

import astropy.units as u
import numpy as np
import pytest
from astropy_healpix import HEALPix

from ngbound.arc.healpix import ring_tile


def centres(nside):
    """Longitudes and z of all tiles, ring by ring (Gorski et al. 2005, equations 4 to 9)."""
    longitude, z = [], []
    for ring in range(1, 4 * nside):
        cap = min(ring, 4 * nside - ring)
        j = np.arange(4 * min(cap, nside))
        if cap < nside:
            height = np.sign(2 * nside - ring) * (1.0 - cap**2 / (3.0 * nside**2))
            longitude.append(0.5 * np.pi / cap * (j + 0.5))
        else:
            height = 4.0 / 3.0 - 2.0 * ring / (3.0 * nside)
            longitude.append(0.5 * np.pi / nside * (j + 0.5 * ((ring - nside + 1) % 2)))
        z.append(np.full(len(j), height))
    return np.concatenate(longitude), np.concatenate(z)


@pytest.mark.parametrize("nside", [1, 2, 3, 7, 64])
def test_centres_lie_in_their_tiles(nside):
    longitude, z = centres(nside)
    assert len(z) == 12 * nside**2
    assert np.array_equal(ring_tile(nside, longitude, np.arcsin(z)), np.arange(len(z)))


@pytest.mark.parametrize("nside", [1, 4, 64, 1024])
def test_an_independent_package_agrees(nside):
    rng = np.random.default_rng(nside)
    longitude = rng.uniform(-7.0, 7.0, 50_000)
    latitude = np.concatenate(
        [np.arcsin(rng.uniform(-1, 1, 40_000)), 0.5 * np.pi - 10 ** rng.uniform(-7, 0, 10_000)]
    )
    theirs = HEALPix(nside, order="ring").lonlat_to_healpix(longitude * u.rad, latitude * u.rad)
    assert np.array_equal(ring_tile(nside, longitude, latitude), theirs)


def test_tiles_hold_equal_areas():
    rng = np.random.default_rng(5)
    z, longitude = rng.uniform(-1.0, 1.0, 480_000), rng.uniform(0.0, 2.0 * np.pi, 480_000)
    count = np.bincount(ring_tile(2, longitude, np.arcsin(z)), minlength=48)
    assert np.abs(count - 10_000).max() < 5.0 * np.sqrt(10_000)


def test_poles_and_the_seam_of_longitude():
    assert ring_tile(64, [0.0, 0.0], [0.5 * np.pi, -0.5 * np.pi]).tolist() == [0, 12 * 64**2 - 4]
    assert (
        ring_tile(64, [2.0 * np.pi, -1e-18], [0.1, 0.1]).tolist()
        == ring_tile(64, [0.0, 0.0], [0.1, 0.1]).tolist()
    )
