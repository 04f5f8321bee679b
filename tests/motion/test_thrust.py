"""Thrust laws against tabulated values, and the objects around them."""

from collections.abc import Callable

import astropy.units as u
import numpy as np
import pytest

from ngbound.errors import CaseError
from ngbound.motion import LAWS, TableLaw, Thrust, Window, power_law, radiation_pressure_au_d2
from ngbound.motion._kernels.laws import distance_at_lag, stumpff
from ngbound.motion.kepler import propagate_two_body


@pytest.mark.parametrize(
    ("r_au", "g"),
    [
        (1.0, 1.0000000023534),
        (0.5, 4.54265535583563),
        (1.5, 0.3558094988946892),
        (2.0, 0.10853676962725793),
        (2.5, 0.018717099454664626),
        (3.0, 0.0016973748092543766),
        (4.0, 6.293504061490886e-06),
        (5.0, 3.2789583298409185e-08),
    ],
)
def test_water_ice_law(r_au: float, g: float) -> None:
    # computed from the constants of B. G. Marsden, Z. Sekanina & D. K. Yeomans 1973, AJ 78, 211
    assert Thrust("water-ice").g(r_au) == pytest.approx(g, rel=1e-12)


@pytest.mark.parametrize(("r_au", "slope"), [(1.0, -2.27165), (2.0, -5.69429), (2.808, -13.90006)])
def test_slope_of_the_water_ice_law(r_au: float, slope: float) -> None:
    thrust = Thrust("water-ice")
    h = 1e-5
    rise = np.log(thrust.g(r_au * np.exp(h)) / thrust.g(r_au * np.exp(-h))) / (2 * h)
    assert rise == pytest.approx(slope, abs=1e-4)


def test_normalisation_of_the_co_laws() -> None:
    # alpha of r0 = 5 au as in JPL Horizons headers (ALN=.0408373333); of r0 = 10 au from memory
    assert LAWS["co-5au"].alpha == pytest.approx(0.0408373333, abs=2e-10)
    assert LAWS["co-10au"].alpha == pytest.approx(0.0100260208, abs=1e-8)
    for name in LAWS:
        assert Thrust(name).g(1.0) == pytest.approx(1.0, abs=1e-8)


def test_power_and_table_laws_agree_where_the_table_is_a_power() -> None:
    knots = np.geomspace(0.2, 8.0, 7)
    table = Thrust(TableLaw(tuple(knots), tuple(knots**-2.0)))
    for r in (0.1, 0.2, 0.7, 1.0, 3.3, 8.0, 12.0):
        assert table.g(r) == pytest.approx(Thrust("inverse-square").g(r), rel=1e-12)
        assert Thrust("power", exponent=2.0).g(r) == pytest.approx(r**-2.0, rel=1e-14)


@pytest.mark.parametrize("z", [-30.0, -3.0, -0.05, 0.0, 0.05, 1.0, 9.0, 40.0])
def test_stumpff_functions(z: float) -> None:
    c = np.empty(6)
    stumpff(z, c)
    root = np.sqrt(complex(z))
    if z != 0.0:
        assert c[0] == pytest.approx(np.cos(root).real, rel=1e-12, abs=1e-12)
        assert c[1] == pytest.approx((np.sin(root) / root).real, rel=1e-12, abs=1e-12)
    for n in range(4):
        factorial = [1, 1, 2, 6][n]
        assert c[n] == pytest.approx(1 / factorial - z * c[n + 2], rel=1e-11, abs=1e-12)


@pytest.mark.parametrize("dt", [-35.0, 10.0, 200.0])
@pytest.mark.parametrize("speed", [0.9, 1.0, 1.4142135623730951, 1.7])
def test_distance_at_lag_is_two_body_motion(dt: float, speed: float) -> None:
    gm = 2.9591220828e-4
    x = np.array([1.1, 0.2, -0.3])
    v = speed * np.sqrt(gm / 1.15) * np.array([-0.3, 0.9, 0.1])
    out = np.empty(8)
    distance_at_lag(gm, x, v, dt, out)
    there = propagate_two_body(np.concatenate([x, v]), dt, gm)
    assert out[0] == pytest.approx(np.linalg.norm(there[:3]), rel=1e-12)
    scrap = np.empty(8)
    for j in range(3):
        for block, unit in ((1, 1.0), (4, 0.01)):
            h = 1e-6 * unit
            sides = []
            for sign in (1, -1):
                xs, vs = x.copy(), v.copy()
                (xs if block == 1 else vs)[j] += sign * h
                distance_at_lag(gm, xs, vs, dt, scrap)
                sides.append(scrap[0])
            assert out[block + j] == pytest.approx(
                (sides[0] - sides[1]) / (2 * h), rel=1e-6, abs=1e-7
            )
    assert out[7] == pytest.approx(there[:3] @ there[3:] / out[0], rel=1e-9)


def test_units_and_names() -> None:
    thrust = Thrust("co-5au", components="tr", A=[1.0, 2.0, 0.0] * u.m / u.s**2, lag=86400 * u.s)
    assert thrust.components == "RT"
    assert thrust.amounts_au_d2[0] == pytest.approx(1.0 / 20.04001, rel=1e-6)
    assert thrust.lag.to_value(u.day) == pytest.approx(1.0)
    assert thrust.with_amounts([0.0, 0.0, 3e-9]).amounts_au_d2[2] == 3e-9
    assert "co-5au" in str(thrust)
    assert thrust.to_dict()["lag_d"] == pytest.approx(1.0)
    assert power_law(2.5).m == 2.5


def test_radiation_pressure_of_2009_bd() -> None:
    # M. Micheli, D. J. Tholen & G. T. Elliott 2012: (2.97 +- 0.33)e-4 m2/kg; S/c times that
    assert radiation_pressure_au_d2(2.97e-4) == pytest.approx(6.728e-11, rel=1e-3)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: Thrust("water-ise"), r"Did you mean water-ice"),
        (lambda: Thrust("power"), "needs an exponent"),
        (lambda: Thrust(components="XY"), "components 'XY'"),
        (lambda: Thrust(A=(1.0, 2.0)), "three amounts"),
        (lambda: TableLaw((1.0,), (1.0,)), "at least two"),
        (lambda: TableLaw((2.0, 1.0), (1.0, 1.0)), "ascending"),
        (lambda: TableLaw((1.0, 2.0), (1.0, 0.0)), "positive"),
        (lambda: Window("date", 2.0, 1.0), "empty"),
        (lambda: Window("phase", 1.0, 2.0), "by 'date' or by 'distance'"),
    ],
)
def test_wrong_choices_are_refused_in_a_sentence(make: Callable[[], object], message: str) -> None:
    with pytest.raises(CaseError, match=message):
        make()
