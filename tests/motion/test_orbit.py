"""Orbits as objects: elements, epochs, predictions; and the sight of a trajectory."""

import astropy.units as u
import numpy as np
import pytest

from ngbound.errors import CaseError
from ngbound.motion import (
    ForceModel,
    Orbit,
    Records,
    Thrust,
    design_matrix,
    partials_along,
    predict,
)
from ngbound.motion.observables import residuals, see
from ngbound.sky import astrometric, load_ephemeris
from tests.motion.orbits import BELT, HYPERBOLA, geocentric_records
from tests.units import arcsec, mas, metre

ORBIT = Orbit(0.0, BELT, Thrust(A=(1e-9, 0.0, 0.0)))


def test_elements_there_and_back() -> None:
    for state in (BELT, HYPERBOLA):
        orbit = Orbit(0.0, state)
        k = orbit.elements()
        again = Orbit.from_elements(
            epoch=0.0,
            q=k.q_au * u.au,
            e=k.e,
            i=np.degrees(k.i_rad),
            node=k.node_rad * u.rad,
            argperi=np.degrees(k.argperi_rad),
            tp=k.tp_tdb_d,
        )
        assert np.abs(again.state_vector - state)[:3].max() < 0.1 * metre


def test_state_and_trajectory_have_units() -> None:
    position, velocity = ORBIT.state("2000-06-01", scale="tdb")
    assert position.unit == u.au and velocity.unit == u.au / u.day
    path = ORBIT.propagate([0.0, 100.0])
    assert path.position.shape == (2, 3) and path.velocity.shape == (2, 3)
    assert path.position[0].value == pytest.approx(BELT[:3], abs=1e-15)
    assert list(path.to_frame())[:2] == ["tdb", "x_au"]


def test_epoch_can_be_moved() -> None:
    moved = ORBIT.moved_to(200.0)
    assert moved.epoch_tdb_d == 200.0
    a = ORBIT.propagate([400.0]).state[0]
    b = moved.propagate([400.0]).state[0]
    assert np.abs(a - b)[:3].max() < 0.05 * metre


def test_unknown_centre_and_relativity_are_refused() -> None:
    with pytest.raises(CaseError, match="heliocentric or barycentric"):
        ORBIT.elements(centre="lunar")
    with pytest.raises(CaseError, match="relativity model 'einstein' is unknown"):
        ForceModel(relativity="einstein")


def test_prediction_meets_the_slow_sightline() -> None:
    times = np.array([10.0, 120.0, 300.0])
    seen = predict(ORBIT, times, "500", scale="tdb")
    track = ORBIT.track(-1.0, 301.0)
    slow = astrometric(
        lambda t: track.at(t)[:, :3], times, load_ephemeris().position_au("earth", times)
    )
    assert np.abs(np.radians(seen["ra_deg"].to_numpy()) - slow.ra_rad).max() < 1e-3 * mas
    assert np.abs(np.radians(seen["dec_deg"].to_numpy()) - slow.dec_rad).max() < 1e-3 * mas
    assert seen["range_au"].to_numpy() == pytest.approx(slow.range_au, abs=1 * metre)


def test_design_matrix_is_the_slope_of_the_residuals() -> None:
    names = ("x", "y", "z", "vx", "vy", "vz", "A1", "A2", "A3")
    track = ORBIT.track(-1.0, 301.0)
    records = geocentric_records(track, 0.0, 300.0, 12, 0.5 * arcsec)
    design = design_matrix(see(track, records), records, partials_along(track, names))
    for c in range(9):
        step = 1e-7 if c < 3 else 1e-9 if c < 6 else 1e-11
        sides = []
        for sign in (1.0, -1.0):
            state = BELT.copy()
            amounts = np.array([1e-9, 0.0, 0.0])
            if c < 6:
                state[c] += sign * step
            else:
                amounts[c - 6] += sign * step
            moved = Orbit(0.0, state, Thrust(A=amounts)).track(-1.0, 301.0)
            sides.append(residuals(see(moved, records), records))
        slope = -(sides[0] - sides[1]) / (2 * step)
        assert np.abs(slope - design[:, :, c]).max() < 2e-5 * np.abs(design[:, :, c]).max()


def test_residuals_are_observed_minus_computed() -> None:
    track = ORBIT.track(-1.0, 11.0)
    sight = see(
        track,
        Records.from_angles([5.0], load_ephemeris().position_au("earth", [5.0]), [0.0], [0.0]),
    )
    place = astrometric(
        lambda t: track.at(t)[:, :3], np.array([5.0]), load_ephemeris().position_au("earth", [5.0])
    )
    records = Records.from_angles(
        [5.0],
        load_ephemeris().position_au("earth", [5.0]),
        place.ra_rad + 2 * arcsec / np.cos(place.dec_rad),
        place.dec_rad - 1 * arcsec,
    )
    seen = residuals(sight, records)[0]
    assert seen == pytest.approx([2 * arcsec, -1 * arcsec], abs=0.1 * mas)


def test_deflection_is_small_and_off_by_default() -> None:
    times = np.linspace(0.0, 300.0, 40)
    plain = predict(ORBIT, times, "500", scale="tdb")
    bent = predict(ORBIT, times, "500", scale="tdb", deflection=True)
    shift = np.abs(np.radians(bent["dec_deg"] - plain["dec_deg"])).max()
    assert 1e-3 * mas < shift < 60 * mas
    again = predict(ORBIT, times, "500", scale="tdb", deflection=False)
    assert np.array_equal(plain["ra_deg"], again["ra_deg"])
