"""Earth orientation: SOFA vectors, table ends, velocity."""

import erfa
import numpy as np
import pytest

from ngbound.errors import NgboundWarning
from ngbound.sky import delta_t_s, earth_rotation, itrf_to_gcrs
from ngbound.sky.earth_orientation import EQUATOR_SPEED_M_S, _to_intermediate

SITE_M = np.array([[-5464468.0, -2493053.0, 2150797.0]])


def test_intermediate_position_sofa_vector():
    # SOFA/ERFA validation program t_erfa_c.c, t_pvtob.
    itrf_m = erfa.gd2gc(1, 2.0, 0.5, 3000.0)[None]
    pole = erfa.pom00(1e-6, -0.5e-6, 1e-8)[None]
    position_m, velocity_m_s = _to_intermediate(itrf_m, np.array([5.0]), pole)
    expected_m = [4225081.367071159207, 3681943.215856198144, 3041149.399241260785]
    assert np.abs(position_m[0] - expected_m).max() < 1e-5
    reference = erfa.pvtob(2.0, 0.5, 3000.0, 1e-6, -0.5e-6, 1e-8, 5.0)
    assert np.abs(velocity_m_s[0] - reference["v"]).max() < 1e-7


def test_velocity_is_the_derivative():
    step_s = 10.0
    times_d = 6000.0 + np.array([-step_s, 0.0, step_s]) / 86400.0
    position_m, velocity_m_s = itrf_to_gcrs(np.repeat(SITE_M, 3, axis=0), times_d)
    slope_m_s = (position_m[2] - position_m[0]) / (2.0 * step_s)
    assert np.abs(slope_m_s - velocity_m_s[1]).max() < 1e-3
    assert np.linalg.norm(position_m[1]) == pytest.approx(np.linalg.norm(SITE_M), abs=1e-6)


def test_ut1_of_a_known_day():
    # IERS Bulletin B 360 / series C04, 2017-01-02 0h UTC: UT1-UTC about +0.59 s just after the
    # leap second, so UT1-TT = 0.59 - 69.184 s; from memory.
    ut1_minus_tt_s, pole_x, pole_y = earth_rotation(np.array([57755.0 - 51544.5]))
    assert ut1_minus_tt_s[0] == pytest.approx(0.59 - 69.184, abs=0.01)
    assert abs(pole_x[0]) < 3e-6 and abs(pole_y[0]) < 3e-6


def test_ut1_is_smooth_over_a_leap_second():
    times_d = 57754.0 - 51544.5 + np.linspace(-2.0, 2.0, 81)
    ut1_minus_tt_s = earth_rotation(times_d)[0]
    assert np.abs(np.diff(ut1_minus_tt_s)).max() < 2e-4


def test_before_the_table():
    time_d = np.array([-25000.0])
    with pytest.warns(NgboundWarning, match="before 1962.*50 m"):
        ut1_minus_tt_s, pole_x, _ = earth_rotation(time_d)
    assert ut1_minus_tt_s[0] == pytest.approx(-float(delta_t_s(2000 - 25000 / 365.25)), abs=1e-6)
    assert pole_x[0] == 0.0


def test_the_table_joins_the_polynomial():
    first_d = 37665.0 - 51544.5 + 1.0
    inside_s = earth_rotation(np.array([first_d]))[0][0]
    assert -inside_s == pytest.approx(float(delta_t_s(2000 + first_d / 365.25)), abs=0.1)


def test_past_the_table():
    with pytest.warns(NgboundWarning, match=r"past the end of the table.*cost up to \d+ m"):
        ut1_minus_tt_s = earth_rotation(np.array([0.0, 20000.0]))[0]
    # Held at its last value: near -69.2 s since 2017, no leap second since.
    assert ut1_minus_tt_s[1] == pytest.approx(-69.2, abs=1.0)


def test_equator_speed():
    position_m, velocity_m_s = itrf_to_gcrs(np.array([[6378137.0, 0.0, 0.0]]), np.array([3000.0]))
    assert np.linalg.norm(velocity_m_s) == pytest.approx(EQUATOR_SPEED_M_S, abs=0.1)
    assert np.linalg.norm(position_m) == pytest.approx(6378137.0, abs=1e-6)
