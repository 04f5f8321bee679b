"""Echoes and fits of echoes against an ephemeris made elsewhere: two-way delays of Ceres by plain
light times from sb441-n16 (D. Farnocchia 2021, JPL IOM 392R-21-005) and DE440 (R. S. Park et al.
2021, AJ 161, 105), the time scales by astropy."""

import numpy as np
import pandas as pd
from astropy import units as u
from astropy.time import Time

from ngbound.arc import Arc
from ngbound.constants import AU_KM, C_KM_S, DAY_S, J2000_JD
from ngbound.fit import fit_orbit
from ngbound.motion import ForceModel, Orbit, echo
from ngbound.sky import load_ephemeris
from tests.units import km

MEGAHERTZ = 2380.0
SIGMA_US, SIGMA_HZ = 2.0, 0.1
FORCES = ForceModel(exclude=("ceres",), relativity="all")
FIRST_MJD = 60310.0


def tdb_d(time: Time) -> np.ndarray:
    return np.asarray((time.tdb.jd1 - J2000_JD) + time.tdb.jd2)


def sun_delay_s(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    # twice GM of the Sun over c^3 is 9.851 microseconds (I. I. Shapiro 1964, Phys. Rev. Lett. 13,
    # 789, eq. 1)
    r1, r2 = np.linalg.norm(a, axis=-1), np.linalg.norm(b, axis=-1)
    r12 = np.linalg.norm(a - b, axis=-1)
    return np.asarray(9.8510e-6 * np.log((r1 + r2 + r12) / (r1 + r2 - r12)))


def plain_delay_s(received: Time) -> np.ndarray:
    """UTC seconds from geocentre to Ceres and back."""
    de = load_ephemeris()
    end = tdb_d(received)
    light = C_KM_S / AU_KM

    def leg_s(body: np.ndarray, earth: np.ndarray, sun: np.ndarray) -> np.ndarray:
        length = np.linalg.norm(body - earth, axis=-1)
        return np.asarray(length / light + sun_delay_s(body - sun, earth - sun))

    down = np.full(end.shape, 1000.0)
    for _ in range(8):
        bounce = end - down / DAY_S
        body, sun = de.position_au("ceres", bounce), de.position_au("sun", bounce)
        down = leg_s(body, de.position_au("earth", end), sun)
    up = down
    for _ in range(8):
        sent = bounce - up / DAY_S
        up = leg_s(body, de.position_au("earth", sent), sun)
    start = received.tdb - (down + up) * u.s
    return np.asarray((received.utc - start.utc).to_value(u.s))


def ceres_frame(times: Time) -> pd.DataFrame:
    delay = plain_delay_s(times)
    half = 300.0 * u.s
    rate = (plain_delay_s(times + half) - plain_delay_s(times - half)) / 600.0
    common = {
        "kind": "radar", "permID": "1", "trx": "500", "rcv": "500", "frq": MEGAHERTZ,
        "obsTime": [t.utc.isot.split(".")[0] + "Z" for t in times],
    }  # fmt: skip
    return pd.concat(
        [
            pd.DataFrame(common | {"delay": delay, "rmsDelay": SIGMA_US}),
            pd.DataFrame(common | {"doppler": -rate * MEGAHERTZ * 1e6, "rmsDoppler": SIGMA_HZ}),
        ],
        ignore_index=True,
    )


def ceres_orbit(epoch: float) -> Orbit:
    state = np.concatenate(load_ephemeris().posvel("ceres", epoch))
    return Orbit(epoch, state, None, FORCES)


def test_fit_to_delays_of_ceres_finds_its_place() -> None:
    days = np.sort(np.concatenate([np.arange(0.0, 200.0, 20.0), np.arange(0.5, 200.0, 20.0)]))
    times = Time(FIRST_MJD + days, format="mjd", scale="utc")
    arc = Arc.from_frame(ceres_frame(times))
    epoch = float(tdb_d(Time(FIRST_MJD + 100.0, format="mjd", scale="utc")))
    off = ceres_orbit(epoch)
    guess = Orbit(
        epoch, off.state_vector + np.array([1e-5, -1e-5, 1e-5, 1e-7, 1e-7, -1e-7]), None, FORCES
    )
    fit = fit_orbit(arc, initial=guess, epoch_tdb_d=epoch)
    assert fit.keep.all()
    told = fit.echo_summary
    # the asteroids nobody ships pull alike all the while, and the orbit follows them
    assert told["rms_delay_us"] < 0.01
    assert told["rms_doppler_hz"] < 1e-3
    assert np.linalg.norm(fit.theta[:3] - off.state_vector[:3]) < 1.0 * km


def test_echoes_along_the_ephemeris() -> None:
    # no fit: the orbit that the ephemeris has at one moment, over twenty days
    times = Time(FIRST_MJD + np.array([90.0, 95.0, 100.0, 105.0, 110.0]), format="mjd", scale="utc")
    when = tdb_d(times)
    track = ceres_orbit(float(when[2])).track(float(when[0]) - 1.0, float(when[-1]) + 1.0)
    got = echo(track, when, "500", "500", MEGAHERTZ)
    frame = ceres_frame(times)
    delay, doppler = frame["delay"].to_numpy()[:5], frame["doppler"].to_numpy()[5:]
    # at the start both have the same state: what is left is the echo's own model
    assert abs(got.delay_s[2] - delay[2]) < 0.1e-9
    # 50 ns are 8 m: what two integrations of Ceres make of ten days
    assert np.abs(got.delay_s - delay).max() < 50e-9
    assert np.abs(got.doppler_hz - doppler).max() < 1e-3
