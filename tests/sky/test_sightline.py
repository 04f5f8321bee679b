"""Sightline: light time, angles, tangent plane, deflection."""

import erfa
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ngbound.constants import C_AU_D
from ngbound.errors import AnalysisError
from ngbound.sky import (
    angles_to_direction,
    astrometric,
    deflection_by_sun,
    direction_to_angles,
    load_ephemeris,
    sky_axes,
    tangent_plane_residuals,
)
from tests.units import arcsec, mas, metre

EPHEMERIS = load_ephemeris()


def test_light_time_of_uniform_motion():
    # |r0 + v (t - tau) - o| = c tau is a quadratic in tau for uniform motion.
    start_au, velocity_au_d = np.array([3.0, -1.0, 0.5]), np.array([0.02, 0.01, -0.005])
    observer_au = np.array([0.9, 0.2, -0.1])
    time_d = 100.0
    line_au = start_au + velocity_au_d * time_d - observer_au
    a = velocity_au_d @ velocity_au_d - C_AU_D**2
    b = -2.0 * velocity_au_d @ line_au
    c = line_au @ line_au
    tau_d = (-b - np.sqrt(b * b - 4.0 * a * c)) / (2.0 * a)
    place = astrometric(lambda t: start_au + velocity_au_d * t[:, None], time_d, observer_au)
    assert place.light_time_d[0] == pytest.approx(tau_d, abs=1e-12)
    expected = direction_to_angles(line_au - velocity_au_d * tau_d)
    assert abs(place.ra_rad[0] - expected[0]) < 1e-6 * mas
    assert abs(place.dec_rad[0] - expected[1]) < 1e-6 * mas


def test_light_time_closes_on_a_planet():
    times_d = np.linspace(0.0, 4000.0, 9)
    earth_au = EPHEMERIS.position_au("earth", times_d)
    place = astrometric(lambda t: EPHEMERIS.position_au("mercury", t), times_d, earth_au)
    line_au = EPHEMERIS.position_au("mercury", times_d - place.light_time_d) - earth_au
    assert np.abs(np.linalg.norm(line_au, axis=1) - C_AU_D * place.light_time_d).max() < 5 * metre
    pointing = place.range_au[:, None] * angles_to_direction(place.ra_rad, place.dec_rad)
    assert np.abs(pointing - line_au).max() < 1 * metre
    assert len(place) == 9 and len(str(place).splitlines()) == 10
    assert set(place.to_dict()) == {"ra_rad", "dec_rad", "range_au", "light_time_d"}


def test_no_aberration_in_astrometric_places():
    # SOFA/ERFA validation program t_erfa_c.c, t_ab: the same direction with aberration.
    direction = np.array([-0.76321968546737951, -0.60869453983060384, -0.21676408580639883])
    aberrated = np.array([-0.7631631094219556269, -0.6087553082505590832, -0.2167926269368471279])
    star_au = 1e12 * direction
    place = astrometric(lambda t: np.tile(star_au, (t.size, 1)), 0.0, [0.7, 0.5, 0.3])
    seen = angles_to_direction(place.ra_rad, place.dec_rad)[0]
    assert np.linalg.norm(seen - direction) < 1e-3 * mas
    assert np.linalg.norm(seen - aberrated) > 10 * arcsec


def test_light_time_that_never_settles():
    with pytest.raises(AnalysisError, match="does not settle"):
        astrometric(lambda t: np.full((t.size, 3), np.nan), 0.0, np.zeros(3))
    with pytest.raises(AnalysisError, match="slower than light"):
        astrometric(lambda t: 400.0 * t[:, None] * np.ones(3), 1.0, np.zeros(3))


@given(st.floats(0.0, 6.283185), st.floats(-1.5707, 1.5707))
@settings(max_examples=100, deadline=None)
def test_angles_there_and_back(ra_rad, dec_rad):
    ra, dec = direction_to_angles(3.0 * angles_to_direction(ra_rad, dec_rad))
    assert abs((ra - ra_rad + np.pi) % (2 * np.pi) - np.pi) * np.cos(dec_rad) < 1e-15
    assert abs(dec - dec_rad) < 1e-14
    east, north = sky_axes(ra_rad, dec_rad)
    axes = np.stack([east, north, angles_to_direction(ra_rad, dec_rad)])
    assert np.abs(axes @ axes.T - np.eye(3)).max() < 1e-15


def test_angles_stay_in_their_circle():
    ra_rad, _ = direction_to_angles([[1.0, -1e-30, 0.0], [1.0, -1e-3, 0.0], [-1.0, 0.0, 0.0]])
    assert np.all((ra_rad >= 0.0) & (ra_rad < 2.0 * np.pi))


@pytest.mark.parametrize("dec_rad", [-1.2, 0.0, 0.3, 1.55])
def test_small_residuals_are_plain_differences(dec_rad):
    offset = np.array([0.7, -0.4]) * arcsec
    residual = tangent_plane_residuals(
        1.0 + offset[0] / np.cos(dec_rad), dec_rad + offset[1], 1.0, dec_rad
    )
    # What is left out of plain differences is second order: offset^2 tan(dec).
    assert np.abs(residual - offset).max() < 1e-6 * mas + (1 * arcsec) ** 2 / np.cos(dec_rad)


def test_residuals_across_zero_hours_over_the_pole_and_far_off():
    across = tangent_plane_residuals(1e-7, 0.0, 2 * np.pi - 1e-7, 0.0)
    assert across[0] == pytest.approx(2e-7, abs=1e-14) and across[1] == 0.0
    over_pole = tangent_plane_residuals(0.0, np.pi / 2 - 1e-5, np.pi, np.pi / 2 - 1e-5)
    assert np.linalg.norm(over_pole) == pytest.approx(2e-5, rel=1e-9)
    far = tangent_plane_residuals(2.5, 0.0, 0.0, 0.0)
    assert far == pytest.approx([2.5, 0.0])
    assert np.all(tangent_plane_residuals(1.0, 0.5, 1.0, 0.5) == 0.0)


def test_sun_deflection():
    # SOFA/ERFA validation program t_erfa_c.c, t_ldsun.
    p = np.array([-0.763276255, -0.608633767, -0.216735543])
    e = np.array([-0.973644023, -0.20925523, -0.0907169552])
    em = 0.999809214
    stars = erfa.ldsun(p, e, em)
    expected = [-0.7632762580731413169, -0.6086337635262647900, -0.2167355419322321302]
    assert np.abs(stars - expected).max() < 1e-12
    very_far = deflection_by_sun(p[None], (em * e + 1e9 * p)[None], (em * e)[None])
    assert np.abs(very_far).max() < 1e-3 * mas
    # Between observer and Sun's plane there is less to bend than for the stars, so the body is
    # seen nearer to the Sun than they are: the shift points towards the Sun.
    body = deflection_by_sun(p[None], (em * e + 2.5 * p)[None], (em * e)[None])[0]
    assert 0.1 * mas < np.linalg.norm(body) < 10 * mas
    assert body @ -e > 0.0
