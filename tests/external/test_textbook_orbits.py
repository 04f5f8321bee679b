"""Kepler, two-body motion, elements and Gauss's method against published worked examples.

The sources stand beside the figures. "From memory" marks inputs that were not read off the page;
their results were recomputed by independent programs before they came here.
"""

import math

import numpy as np
import pytest

from ngbound.constants import GM_SUN_AU3_D2, J2000_JD
from ngbound.fit.gauss import gauss_orbits
from ngbound.motion.elements import CometaryElements, KeplerianElements
from ngbound.motion.kepler import conic_anomaly, propagate_two_body, solve_kepler
from tests.units import arcsec, metre

GAUSS_K = 0.01720209895
"""Gaussian gravitational constant, au^1.5/d: C. F. Gauss 1809; IAU 1938."""


def test_meeus_kepler_equation():
    # J. Meeus 1998, Astronomical Algorithms, 2nd ed., ex. 30.a and 30.b
    assert math.degrees(solve_kepler(math.radians(5.0), 0.1)) == pytest.approx(
        5.554589254, abs=1e-9
    )
    # same, p. 205
    assert solve_kepler(0.2, 0.99) == pytest.approx(1.066997365282, abs=1e-12)


@pytest.mark.parametrize(
    ("q", "e", "dt", "nu", "r"),
    [
        # Meeus 1998, p. 247 (near-parabolic motion)
        (0.921326, 1.0, 138.4783, 102.74426, 2.364192),
        (0.1, 0.987, 254.9, 164.50029, 4.063777),
        (0.123456, 0.99997, -30.47, 221.9119, 0.965053),
        (3.363943, 1.05731, 1237.1, 109.40598, 10.668551),
        (0.5871018, 0.9672746, 20.0, 52.85331, 0.729116),
        # Meeus 1998, ex. 34.a: T 1998 April 14.4358, t 1998 August 5.0
        (1.487469, 1.0, 112.5642, 66.78862, 2.133911),
    ],
)
def test_meeus_near_parabolic(q, e, dt, nu, r):
    anomaly, distance = conic_anomaly(q, e, dt, GAUSS_K**2)
    assert math.degrees(anomaly) % 360 == pytest.approx(nu, abs=1e-5)
    assert distance == pytest.approx(r, abs=1e-6)


def test_meeus_speeds_of_halley():
    # Meeus 1998, ex. 33.c: a = 17.9400782 au, e = 0.96727426; km/s at 1 au, perihelion, aphelion
    a, e = 17.9400782, 0.96727426
    km_s = 149597870.7 / 86400.0
    at_perihelion = KeplerianElements(0.0, a, e, 2.8, 1.0, 2.0, 0.0)
    at_aphelion = KeplerianElements(0.0, a, e, 2.8, 1.0, 2.0, math.pi)
    assert np.linalg.norm(at_perihelion.state()[3:]) * km_s == pytest.approx(54.52, abs=0.01)
    assert np.linalg.norm(at_aphelion.state()[3:]) * km_s == pytest.approx(0.91, abs=0.01)
    cometary = at_perihelion.to_cometary()
    for day in np.linspace(20.0, 60.0, 2001):
        state = propagate_two_body(cometary.state(), day)
        if np.linalg.norm(state[:3]) >= 1.0:
            break
    assert np.linalg.norm(state[3:]) * km_s == pytest.approx(41.53, abs=0.01)


def test_vallado_kepler_propagation():
    # D. A. Vallado, Fundamentals of Astrodynamics and Applications, ex. 2-4 (from memory)
    start = [1131.340, -2282.343, 6672.423, -5.64305, 4.30333, 2.42879]
    end = propagate_two_body(start, 40 * 60.0, 398600.4418)
    np.testing.assert_allclose(end[:3], [-4219.7527, 4363.0292, -3958.7666], atol=1e-3)
    np.testing.assert_allclose(end[3:], [3.689866, -1.916735, -6.112511], atol=1e-6)


def test_curtis_universal_kepler():
    # H. D. Curtis, Orbital Mechanics for Engineering Students, ex. 3.7 (from memory)
    end = propagate_two_body([7000, -12124, 0, 2.6679, 4.6210, 0], 3600.0, 398600.0)
    np.testing.assert_allclose(end[:3], [-3297.8, 7413.4, 0], atol=0.1)
    np.testing.assert_allclose(end[3:], [-8.2976, -0.96404, 0], atol=1e-4)


def elements_about_earth(r_km, v_km_s, mu):
    """Keplerian elements of an Earth satellite by the routine for the Sun.

    The routine takes ICRF au and au/d about the Sun and returns ecliptic elements. The example is
    scaled by its length so that its GM becomes the Sun's, and turned so that its equator becomes
    the ecliptic.
    """
    from_equator = np.array([[1.0, 0.0, 0.0], [0.0, 1.0, 0.0], [0.0, 0.0, 1.0]])
    turn = math.radians(84381.448 / 3600)
    from_equator[1:, 1:] = [[math.cos(turn), -math.sin(turn)], [math.sin(turn), math.cos(turn)]]
    length = 10000.0
    speed = math.sqrt(mu / length) / math.sqrt(GM_SUN_AU3_D2)
    state = np.concatenate(
        [from_equator @ np.array(r_km) / length, from_equator @ np.array(v_km_s) / speed]
    )
    return CometaryElements.from_state(0.0, state), length


def true_anomaly_deg(elements):
    nu, _ = conic_anomaly(
        elements.q_au, elements.e, elements.epoch_tdb_d - elements.tp_tdb_d, elements.gm_au3_d2
    )
    return math.degrees(nu) % 360


def test_vallado_elements():
    # Vallado, ex. 2-5 (from memory)
    k, length = elements_about_earth(
        [6524.834, 6862.875, 6448.296], [4.901327, 5.533756, -1.976341], 398600.4418
    )
    assert k.q_au * (1 + k.e) * length == pytest.approx(11067.798, rel=1e-4)
    assert k.a_au * length == pytest.approx(36127.338, rel=1e-4)
    assert k.e == pytest.approx(0.832853, rel=1e-4)
    assert math.degrees(k.i_rad) == pytest.approx(87.8691, rel=1e-4)
    assert math.degrees(k.node_rad) == pytest.approx(227.898, rel=1e-4)
    assert math.degrees(k.argperi_rad) == pytest.approx(53.3849, rel=1e-4)
    assert true_anomaly_deg(k) == pytest.approx(92.3352, rel=1e-4)


def test_curtis_elements():
    # Curtis, ex. 4.3 (from memory)
    k, length = elements_about_earth([-6045, -3490, 2500], [-3.457, 6.618, 2.533], 398600.0)
    h = math.sqrt(398600.0 * k.q_au * (1 + k.e) * length)
    assert h == pytest.approx(58310, rel=1e-3)
    assert math.degrees(k.i_rad) == pytest.approx(153.2, rel=1e-3)
    assert math.degrees(k.node_rad) == pytest.approx(255.3, rel=1e-3)
    assert k.e == pytest.approx(0.1712, rel=1e-3)
    assert math.degrees(k.argperi_rad) == pytest.approx(20.07, rel=1e-3)
    assert true_anomaly_deg(k) == pytest.approx(28.45, rel=1e-3)


def test_curtis_gauss_method():
    # Curtis, ex. 5.11 (input from memory; the unrefined vector recomputed): station at latitude
    # 40 deg, height 1 km, on his ellipsoid (6378 km, flattening 0.003353)
    mu, radius, flattening = 398600.0, 6378.0, 0.003353
    phi, height = math.radians(40.0), 1.0
    sidereal = np.radians([44.506, 45.000, 45.499])
    big = radius / math.sqrt(1 - (2 * flattening - flattening**2) * math.sin(phi) ** 2)
    across = (big + height) * math.cos(phi)
    up = (big * (1 - flattening) ** 2 + height) * math.sin(phi)
    station = np.column_stack(
        [across * np.cos(sidereal), across * np.sin(sidereal), np.full(3, up)]
    )
    ra = np.radians([43.537, 54.420, 64.318])
    dec = np.radians([-8.7833, -12.074, -15.105])
    sight = np.column_stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)])
    found = gauss_orbits([0.0, 118.10, 237.58], sight, station, mu, light_speed=math.inf)
    assert len(found) == 1
    unrefined, iterated = found[0]
    np.testing.assert_allclose(unrefined[:3], [5659.7, 6534.8, 3269.9], atol=1.0)
    np.testing.assert_allclose(unrefined[3:], [-3.8791, 5.1197, -2.2409], atol=1e-3)
    np.testing.assert_allclose(iterated[:3], [5662.1, 6538.0, 3269.0], atol=1.0)
    # the printed velocity misses the printed angles by 3 arcsec, their rounding; ours meets them
    np.testing.assert_allclose(iterated[3:], [-3.8856, 5.1214, -2.2433], atol=5e-3)
    look = propagate_two_body(iterated, [-118.10, 0.0, 119.48], mu)[:, :3] - station
    look /= np.linalg.norm(look, axis=1, keepdims=True)
    assert np.linalg.norm(look - sight, axis=1).max() < 1e-3 * arcsec


# JPL Horizons object headers: "IAU76/J2000 helio. ecliptic osc. elements" and the "Equivalent ICRF
# heliocentric cartesian coordinates (au, au/d)" printed with them, by solution number.
HORIZONS = {
    "2P/Encke, JPL#K273/20": (
        (2460147.5, 0.3395910296522707, 0.8469532425568865, 11.33709697552753,
         334.0240655739339, 187.2820411908973, 2460240.0266747689),
        (1.564746628554244e00, 4.893647265026269e-01, 4.882908818596594e-01,
         -1.431656881443231e-02, 2.742739686966740e-03, 3.397424502898812e-04),
    ),
    "2P/Encke, JPL#K232/4": (
        (2459752.5, 0.3362300806790429, 0.8485141889848308, 11.50170416921873,
         334.3120522286535, 187.0124965530834, 2460239.0189482248),
        (3.886668467170212e00, -9.188393246574216e-01, -2.098903569670719e-01,
         -9.846074938312395e-04, 3.120416928338697e-03, 1.988497527345202e-03),
    ),
    "1P/Halley, JPL#75": (
        (2439875.5, 0.5748638313743413, 0.9679359956953212, 162.1905300439129,
         59.09894720612437, 112.2414314637764, 2446469.9736161465),
        (-1.331029360169393e01, 2.541249958785733e01, 2.637549316318327e00,
         1.418949944126011e-03, -1.422475975617656e-03, 4.131321199969281e-05),
    ),
    "C/1995 O1 (Hale-Bopp), JPL#226": (
        (2459837.5, 0.890537663547794, 0.9949810027633206, 89.28759424740302,
         282.7334213961641, 130.4146670659176, 2450537.1349071441),
        (3.907631452214869e00, -1.373895334060347e00, -4.624358508575312e01,
         3.778244409519935e-04, -5.803173067116371e-04, -3.255716412104052e-03),
    ),
    "1 Ceres, JPL#48": (
        (2458849.5, 2.556401146697176, 0.07687465013145245, 10.59127767086216,
         80.3011901917491, 73.80896808746482, 2458240.1791309435),
        (1.007608869613381e00, -2.390064275223502e00, -1.332124522752402e00,
         9.201724467227128e-03, 3.370381135398406e-03, -2.850337057661093e-04),
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", HORIZONS)
def test_horizons_headers(name):
    (epoch, q, e, i, node, argperi, tp), published = HORIZONS[name]
    elements = CometaryElements(
        epoch - J2000_JD, q, e, *np.radians([i, node, argperi]), tp - J2000_JD
    )
    state = elements.state()
    published = np.array(published)
    assert np.linalg.norm((state - published)[:3]) < 1.0 * metre
    micrometre_per_second = metre * 1e-6 * 86400.0
    assert np.linalg.norm((state - published)[3:]) < 0.1 * micrometre_per_second
    back = CometaryElements.from_state(epoch - J2000_JD, published)
    assert back.q_au == pytest.approx(q, abs=1.0 * metre)
    assert back.e == pytest.approx(e, abs=1e-12)
    assert back.tp_tdb_d + J2000_JD == pytest.approx(tp, abs=1e-8)
    angles = np.degrees([back.i_rad, back.node_rad, back.argperi_rad])
    np.testing.assert_allclose(angles, [i, node, argperi], rtol=0, atol=1e-10)
