"""Preliminary orbits of invented bodies seen from an invented Earth, and what is refused."""

import json
import math
import warnings

import numpy as np
import pytest

from ngbound.constants import ARCSEC_RAD, OBLIQUITY_J2000_RAD
from ngbound.errors import FirstOrbitError
from ngbound.fit.first_orbit import preliminary_orbits
from ngbound.fit.gauss import gauss_orbits
from ngbound.motion import CometaryElements, propagate_two_body, two_body_sightlines
from tests.units import arcsec, km

NOISE_ARCSEC = 0.3


def observers(t, rng):
    """An eccentric ecliptic Earth with a station that turns with it."""
    longitude = 2 * math.pi * t / 365.25 + 1.75
    north, up = math.cos(OBLIQUITY_J2000_RAD), math.sin(OBLIQUITY_J2000_RAD)
    r = 1 + 0.0167 * np.cos(longitude - 1.8)
    centre = np.column_stack(
        [r * np.cos(longitude), r * np.sin(longitude) * north, r * np.sin(longitude) * up]
    )
    turn = 2 * math.pi * 1.0027379 * t + rng.uniform(0, 6)
    station = np.column_stack([0.8 * np.cos(turn), 0.8 * np.sin(turn), np.full(len(t), 0.6)])
    return centre + 6378 * km * station


def main_belt(rng):
    a, e = rng.uniform(2.1, 3.3), rng.uniform(0.02, 0.3)
    return a * (1 - e), e, abs(rng.normal(0, 0.14)) + 1e-3, rng.uniform(-700, 700)


def near_earth(rng):
    a, e = rng.uniform(0.8, 2.5), rng.uniform(0.2, 0.6)
    return a * (1 - e), e, abs(rng.normal(0, 0.17)) + 1e-3, rng.uniform(-200, 200)


def short_period_comet(rng):
    return (
        rng.uniform(0.3, 2),
        rng.uniform(0.5, 0.85),
        rng.uniform(0.01, 0.5),
        rng.uniform(-250, 250),
    )


def halley_like_inbound(rng):
    return 0.6, 0.967, rng.uniform(0.1, 3), rng.uniform(500, 700)


def hyperbolic(rng):
    return rng.uniform(0.3, 3), 1.5, rng.uniform(0.1, 3), rng.uniform(-200, 200)


def retrograde_near_parabolic(rng):
    return rng.uniform(0.3, 3), 1 + 1e-3 * rng.normal(), rng.uniform(1.7, 3), rng.uniform(-300, 300)


def distant(rng):
    a, e = rng.uniform(39, 45), rng.uniform(0, 0.15)
    return a * (1 - e), e, abs(rng.normal(0, 0.14)) + 1e-3, rng.uniform(-5e4, 5e4)


def invented_arc(kind, span, n, seed, outliers=0.0):
    """(true state at day 0, t, ra, dec, observers, true directions) of an observable body."""
    rng = np.random.default_rng(seed)
    while True:
        q, e, i, tp = kind(rng)
        elements = CometaryElements(
            0.0, q, e, i, rng.uniform(0, 2 * math.pi), rng.uniform(0, 2 * math.pi), tp
        )
        if span < 3:
            t = np.sort(rng.uniform(0, span, n))
        else:
            nights = np.unique(
                np.round(np.r_[0, rng.uniform(0.6, span - 0.6, max(3, n // 3) - 2), span])
            )
            each = max(1, n // len(nights))
            t = np.sort((nights[:, None] + rng.uniform(0, 0.06, (len(nights), each))).ravel())
        observer = observers(t, rng)
        state = elements.state()
        u, _ = two_body_sightlines(0.0, state, t, observer)
        distance = np.linalg.norm(propagate_two_body(state, t)[:, :3] - observer, axis=1)
        elongation = -(u * observer).sum(axis=1) / np.linalg.norm(observer, axis=1)
        if elongation.max() < math.cos(math.radians(35)) and distance.min() > 0.02:
            break
    noise = NOISE_ARCSEC * arcsec
    dec = np.arcsin(u[:, 2]) + rng.normal(0, noise, len(t))
    ra = np.arctan2(u[:, 1], u[:, 0]) + rng.normal(0, noise, len(t)) / np.cos(dec)
    bad = rng.random(len(t)) < outliers
    ra[bad] += rng.normal(0, 300 * arcsec, bad.sum())
    dec[bad] += rng.normal(0, 300 * arcsec, bad.sum())
    return state, t, ra, dec, observer, u


def sky_miss_arcsec(found, t, observer, u):
    seen, _ = two_body_sightlines(found.epoch_tdb_d, found.state, t, observer)
    return float(np.linalg.norm(seen - u, axis=1).max()) / ARCSEC_RAD


@pytest.mark.parametrize(
    ("kind", "span", "n", "distance_error"),
    [
        (main_belt, 30, 20, 0.03),
        (main_belt, 90, 60, 0.003),
        (main_belt, 30, 3, 0.1),
        (near_earth, 10, 15, 0.3),
        (near_earth, 60, 60, 0.003),
        (near_earth, 10, 3, 0.5),
        (short_period_comet, 60, 60, 0.003),
        (halley_like_inbound, 200, 60, 0.001),
        (hyperbolic, 60, 40, 0.003),
        (retrograde_near_parabolic, 90, 60, 0.003),
        (distant, 60, 20, 0.03),
    ],
)
def test_first_candidate_is_the_body(kind, span, n, distance_error):
    for seed in range(3):
        state, t, ra, dec, observer, u = invented_arc(kind, span, n, [17, seed])
        found = preliminary_orbits(t, ra, dec, observer, NOISE_ARCSEC * ARCSEC_RAD)
        best = found[0]
        assert sky_miss_arcsec(best, t, observer, u) < 6 * NOISE_ARCSEC
        assert best.rms_arcsec < 2 * NOISE_ARCSEC
        assert len(best.indices) >= min(len(t), 3)
        # three sightlines may have several orbits through them, and then none is the first
        miss = []
        for candidate in found if len(t) <= 3 else found[:1]:
            true = propagate_two_body(state, candidate.epoch_tdb_d)
            miss.append(np.linalg.norm((candidate.state - true)[:3]) / np.linalg.norm(true[:3]))
        assert min(miss) < distance_error


def test_outliers_are_left_out():
    for seed in range(4):
        _, t, ra, dec, observer, u = invented_arc(main_belt, 30, 40, [3, seed], outliers=0.1)
        best = preliminary_orbits(t, ra, dec, observer, NOISE_ARCSEC * ARCSEC_RAD)[0]
        assert sky_miss_arcsec(best, t, observer, u) < 6 * NOISE_ARCSEC
        off = np.hypot(
            (ra - np.arctan2(u[:, 1], u[:, 0]) + math.pi) % (2 * math.pi) - math.pi,
            dec - np.arcsin(u[:, 2]),
        )
        assert not np.isin(np.flatnonzero(off > 20 * arcsec), best.indices).any()


def test_a_wild_first_and_last_record_do_no_harm():
    _, t, ra, dec, observer, u = invented_arc(near_earth, 30, 30, [5, 0])
    ra[0] += 0.01
    dec[-1] -= 0.02
    best = preliminary_orbits(t, ra, dec, observer, NOISE_ARCSEC * ARCSEC_RAD)[0]
    assert sky_miss_arcsec(best, t, observer, u) < 6 * NOISE_ARCSEC
    assert 0 not in best.indices and len(t) - 1 not in best.indices


def test_an_arc_of_years_is_started_from_its_best_part():
    rng = np.random.default_rng(8)
    state = CometaryElements(0.0, 2.2, 0.12, 0.2, 1.0, 2.0, 300.0).state()
    t = np.sort(
        np.concatenate([k * 460.0 + rng.uniform(0, 70, 6) for k in range(12)] + [[3000.0, 3020.0]])
    )
    t = np.sort(np.concatenate([t, 2300 + rng.uniform(0, 50, 40)]))
    observer = observers(t, rng)
    u, _ = two_body_sightlines(0.0, state, t, observer)
    noise = NOISE_ARCSEC * arcsec
    dec = np.arcsin(u[:, 2]) + rng.normal(0, noise, len(t))
    ra = np.arctan2(u[:, 1], u[:, 0]) + rng.normal(0, noise, len(t)) / np.cos(dec)
    best = preliminary_orbits(t, ra, dec, observer, noise)[0]
    elements = best.elements()
    assert elements.a_au == pytest.approx(2.5, rel=2e-3)
    assert best.span_d > 40 and len(best.indices) >= 40


def test_order_and_seed_do_not_matter():
    _, t, ra, dec, observer, _ = invented_arc(main_belt, 30, 20, [9, 0])
    one = preliminary_orbits(t, ra, dec, observer, rng_seed=5)
    two = preliminary_orbits(t, ra, dec, observer, rng_seed=5)
    assert [a.to_dict() for a in one] == [b.to_dict() for b in two]
    shuffle = np.random.default_rng(0).permutation(len(t))
    other = preliminary_orbits(t[shuffle], ra[shuffle], dec[shuffle], observer[shuffle])
    np.testing.assert_allclose(other[0].state, one[0].state, rtol=1e-6, atol=1e-9)
    assert sorted(shuffle[other[0].indices]) == sorted(one[0].indices)


def test_an_hour_of_motion_gives_some_orbit_and_no_warning():
    _, t, ra, dec, observer, u = invented_arc(main_belt, 0.05, 5, [10, 0])
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        found = preliminary_orbits(t, ra, dec, observer, NOISE_ARCSEC * ARCSEC_RAD)
    assert sky_miss_arcsec(found[0], t, observer, u) < 6 * NOISE_ARCSEC
    assert all(len(f.state) == 6 for f in found) and len(found) <= 8


def test_results_print_and_save():
    _, t, ra, dec, observer, _ = invented_arc(main_belt, 30, 20, [11, 0])
    found = preliminary_orbits(t, ra, dec, observer, max_candidates=1)
    assert len(found) == 1
    assert "q =" in str(found[0]) and "arcsec" in str(found[0])
    assert len(json.loads(json.dumps(found[0].to_dict()))["state"]) == 6


def test_gauss_without_curvature_or_order_gives_nothing():
    sight = np.array(
        [[1.0, 0, 0], [math.cos(0.01), math.sin(0.01), 0], [math.cos(0.02), math.sin(0.02), 0]]
    )
    assert gauss_orbits([0.0, 1.0, 2.0], sight, np.eye(3)) == []
    assert gauss_orbits([2.0, 1.0, 0.0], np.eye(3), np.eye(3)) == []


def test_what_cannot_be_done_is_said():
    _, t, ra, dec, observer, _ = invented_arc(main_belt, 30, 20, [12, 0])
    with pytest.raises(FirstOrbitError, match="at least 3 observations, not 2"):
        preliminary_orbits(t[:2], ra[:2], dec[:2], observer[:2])
    with pytest.raises(FirstOrbitError, match="only 2 different dates"):
        preliminary_orbits([0.0, 0.0, 1.0], ra[:3], dec[:3], observer[:3])
    with pytest.raises(FirstOrbitError, match="no motion on the sky"):
        preliminary_orbits(t, 0 * ra + 1.0, 0 * dec, observer)
    broken = ra.copy()
    broken[7] = math.nan
    with pytest.raises(FirstOrbitError, match="Observation 7"):
        preliminary_orbits(t, broken, dec, observer)
    with pytest.raises(ValueError, match="must be as many"):
        preliminary_orbits(t, ra[:-1], dec, observer)


@pytest.mark.slow
def test_random_directions_have_no_orbit():
    rng = np.random.default_rng(13)
    t = np.arange(0.0, 20.0, 2.0)
    with pytest.raises(FirstOrbitError, match="belong to one object"):
        preliminary_orbits(t, rng.uniform(0, 6, 10), rng.uniform(-1, 1, 10), observers(t, rng))
