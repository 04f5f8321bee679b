"""The propagator against ephemerides made elsewhere.

JPL Horizons output is quoted by solution number and site; positions of asteroids and planets are
those of sb441-n16 (D. Farnocchia 2021, JPL IOM 392R-21-005) and DE440 (R. S. Park et al. 2021, AJ
161, 105), read with jplephem.
"""

import dataclasses

import numpy as np
import pytest

from ngbound.constants import J2000_JD
from ngbound.motion import ForceModel, Orbit, Thrust, integrate_track, partials_along, predict
from ngbound.sky import load_ephemeris, tdb_minus_tt_s
from tests.units import km, mas

YEAR_D = 365.25
ALL = ForceModel(relativity="all", sun_j2=True, frame_dragging=True)


def own_state(body: str) -> np.ndarray:
    return np.concatenate(load_ephemeris().posvel(body, 0.0))


@pytest.mark.parametrize(
    "body", ["ceres", "pallas", "vesta", "hygiea", "juno", "interamnia", "davida"]
)
@pytest.mark.parametrize("relativity", ["sun", "all"])
def test_asteroid_from_its_own_state_in_2000(body: str, relativity: str) -> None:
    # the orbits of sb441-n16 also feel some 320 smaller asteroids, which nobody ships
    forces = ForceModel(exclude=(body,), relativity=relativity)
    times = np.array([1.0, 10.0, 20.0]) * YEAR_D
    track = integrate_track(0.0, own_state(body), 0.0, times[-1], None, forces)
    miss = np.linalg.norm(
        track.at(times)[:, :3] - load_ephemeris().position_au(body, times), axis=1
    )
    assert miss[0] < 0.4 * km
    assert miss[2] < 70 * km


@pytest.mark.parametrize("body", ["ceres", "vesta", "hygiea"])
def test_what_remains_is_the_pull_of_other_asteroids(body: str) -> None:
    # refitting the state takes away most of the miss: it is a slow drift of the orbit, as small
    # kicks make it, not an error of the force model that would return every revolution
    forces = dataclasses.replace(ALL, exclude=(body,))
    times = np.linspace(0.0, 20 * YEAR_D, 200)
    truth = load_ephemeris().position_au(body, times)
    state = own_state(body)
    first = None
    for _ in range(3):
        track = integrate_track(0.0, state, 0.0, times[-1], None, forces)
        miss = (truth - track.at(times)[:, :3]).ravel()
        first = first if first is not None else np.abs(miss).max()
        columns = partials_along(track, ("x", "y", "z", "vx", "vy", "vz")).at_offset(times)
        state = state + np.linalg.lstsq(columns[:, :3].reshape(-1, 6), miss, rcond=None)[0]
    assert first is not None
    assert np.abs(miss).max() < 0.3 * first
    assert np.linalg.norm(state[:3] - own_state(body)[:3]) < 10 * km


@pytest.mark.parametrize(
    ("planet", "tolerance"), [("mercury", 0.2 * km), ("venus", 0.3 * km), ("mars", 4 * km)]
)
def test_planet_as_a_test_particle_over_twenty_years(planet: str, tolerance: float) -> None:
    # the remainder is the pull of the planet on the others, and, for Mars, of the asteroids
    forces = dataclasses.replace(ALL, exclude=(planet,))
    end = 20 * YEAR_D
    track = integrate_track(0.0, own_state(planet), 0.0, end, None, forces)
    assert (
        np.linalg.norm(track.at(end)[0, :3] - load_ephemeris().position_au(planet, end)) < tolerance
    )


def test_frame_dragging_and_sun_quadrupole_bring_mercury_nearer() -> None:
    end = 20 * YEAR_D
    miss = []
    for quadrupole, dragging in ((False, False), (True, False), (True, True)):
        forces = ForceModel(
            exclude=("mercury",), relativity="all", sun_j2=quadrupole, frame_dragging=dragging
        )
        track = integrate_track(0.0, own_state("mercury"), 0.0, end, None, forces)
        miss.append(
            np.linalg.norm(track.at(end)[0, :3] - load_ephemeris().position_au("mercury", end))
        )
    assert miss[0] > miss[1] > miss[2]
    assert miss[2] < 0.05 * km


def tdb_of_jd_tt(jd_tt: np.ndarray) -> np.ndarray:
    days = jd_tt - J2000_JD
    return days + tdb_minus_tt_s(days) / 86400.0


def test_encke_seen_from_x05() -> None:
    # JPL Horizons, 2P/Encke JPL#K273/20, site X05, astrometric ICRF, times in TT
    orbit = Orbit.from_elements(
        epoch=2460147.5 - J2000_JD,
        q=0.3395910296522707,
        e=0.8469532425568865,
        i=11.33709697552753,
        node=334.0240655739339,
        argperi=187.2820411908973,
        tp=2460240.0266747689 - J2000_JD,
        thrust=Thrust("water-ice", A=(2.041002176702e-10, 2.635817800183e-12, 0.0)),
    )
    times = tdb_of_jd_tt(np.array([2459417.5, 2459490.50000002, 2460210.026675018]))
    published = np.array(
        [
            [343.098376774, -8.254881173],
            [326.413642876, -13.483322598],
            [136.698363978, 26.823003125],
        ]
    )
    seen = predict(orbit, times, "X05", scale="tdb")[["ra_deg", "dec_deg"]].to_numpy()
    miss = np.radians(seen - published)
    miss[:, 0] *= np.cos(np.radians(published[:, 1]))
    assert np.abs(miss).max() < 0.2 * mas
    bare = predict(orbit.with_thrust(None), times, "X05", scale="tdb")[
        ["ra_deg", "dec_deg"]
    ].to_numpy()
    assert np.abs(np.radians(bare - published)).max() > 20 * mas


def test_encke_range_from_the_geocentre() -> None:
    # JPL Horizons, 2P/Encke JPL#K232/4, geocentric, UT; test data of the PyPI package sbpy
    orbit = Orbit.from_elements(
        epoch=2459752.5 - J2000_JD,
        q=0.3362300806790429,
        e=0.8485141889848308,
        i=11.50170416921873,
        node=334.3120522286535,
        argperi=187.0124965530834,
        tp=2460239.0189482248 - J2000_JD,
        thrust=Thrust("water-ice", A=(3.368033468723e-10, 8.548115729354e-12, 0.0)),
    )
    seen = predict(orbit, ["2024-08-16T00:00:00", "2024-10-09T00:00:00"], "500", scale="utc")
    published = np.array([2.35165022935209, 3.02015223273410])
    assert np.abs(seen["range_au"].to_numpy() - published).max() < 0.2 * km


def test_halley_over_57_years_from_gemini_north() -> None:
    # JPL Horizons, 1P/Halley JPL#75, site Gemini North (204.5309 E, 19.8238126 N, 4.24672 km), UT
    orbit = Orbit.from_elements(
        epoch=2439875.5 - J2000_JD,
        q=0.5748638313743413,
        e=0.9679359956953212,
        i=162.1905300439129,
        node=59.09894720612437,
        argperi=112.2414314637764,
        tp=2446469.9736161465 - J2000_JD,
        thrust=Thrust("water-ice", A=(4.887055233121e-10, 1.554720290005e-10, 0.0)),
    )
    seen = predict(
        orbit, ["2025-05-02T00:00:00", "2025-05-03T00:00:00"], (204.5309, 19.8238126, 4246.72)
    )
    ra = np.array([8 + 9 / 60 + 46.797665 / 3600, 8 + 9 / 60 + 47.839432 / 3600]) * 15.0
    dec = np.array([3 + 21 / 60 + 19.54244 / 3600, 3 + 21 / 60 + 45.00389 / 3600])
    assert np.abs(np.radians(seen["dec_deg"].to_numpy() - dec)).max() < 1 * mas
    assert np.abs(np.radians(seen["ra_deg"].to_numpy() - ra)).max() < 1 * mas


@pytest.mark.parametrize(
    ("solution", "elements", "published", "tolerance"),
    [
        (
            # JPL Horizons, C/1995 O1 JPL#226, geocentric 2024-08-16 and -19 0h UT: delta in au
            "C/1995 O1 JPL#226",
            dict(
                epoch=2459837.5 - J2000_JD,
                q=0.890537663547794,
                e=0.9949810027633206,
                i=89.28759424740302,
                node=282.7334213961641,
                argperi=130.4146670659176,
                tp=2450537.1349071441 - J2000_JD,
            ),
            {"2024-08-16": 48.3840175329577, "2024-08-19": 48.4092312233878},
            0.1 * km,
        ),
        (
            # JPL Horizons, 1 Ceres JPL#48, geocentric 2024-08-16 0h UT: delta in au; the other
            # asteroids of its own force model are 15 of the 16 here
            "1 Ceres JPL#48",
            dict(
                epoch=2458849.5 - J2000_JD,
                q=2.556401146697176,
                e=0.07687465013145245,
                i=10.59127767086216,
                node=80.3011901917491,
                argperi=73.80896808746482,
                tp=2458240.1791309435 - J2000_JD,
            ),
            {"2024-08-16": 2.13108333791703},
            1 * km,
        ),
    ],
    ids=["C/1995 O1", "Ceres"],
)
def test_geocentric_range(
    solution: str, elements: dict[str, float], published: dict[str, float], tolerance: float
) -> None:
    # test data of the PyPI package sbpy
    exclude = ("ceres",) if "Ceres" in solution else ()
    orbit = Orbit.from_elements(**elements, forces=ForceModel(exclude=exclude))
    seen = predict(orbit, [f"{day}T00:00:00" for day in published], "500")
    miss = np.abs(seen["range_au"].to_numpy() - np.array(list(published.values())))
    assert miss.max() < tolerance, f"{miss / km} km"
