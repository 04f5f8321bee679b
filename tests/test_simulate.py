"""Invented arcs: the recipe is met, the errors are those stated, and nobody observes by day."""

from pathlib import Path

import astropy.units as u
import numpy as np
import pytest
from astropy.coordinates import AltAz, EarthLocation, SkyCoord, get_sun
from astropy.time import Time

import ngbound as ng
from ngbound.case import read_toml
from ngbound.errors import CaseError
from ngbound.motion import predict_for
from ngbound.simulate import Recipe, simulate_arc
from ngbound.sky import load_ephemeris, observer_states, tangent_plane_residuals
from tests.units import arcsec

DEMO = Path(__file__).parent.parent / "data_demo"
HORIZON_SLACK_DEG = 0.4
"""Geodetic against geocentric zenith (0.2 deg) and what the object moves between frames."""


@pytest.fixture(scope="module")
def recipe():
    return read_toml(DEMO / "pushed_recipe.toml", Recipe)


@pytest.fixture(scope="module")
def simulated(recipe):
    return simulate_arc(recipe)


def changed(recipe: Recipe, **tables):
    return Recipe.model_validate({**recipe.model_dump(), **tables})


@pytest.mark.parametrize("history", ["quiet", "pushed"])
def test_the_checked_in_arcs_are_what_their_recipes_make(tmp_path, history):
    made = simulate_arc(DEMO / f"{history}_recipe.toml", output=tmp_path / "again.psv")
    again, kept = (ng.read_arc(path).table for path in (made.path, DEMO / f"{history}.psv"))
    same = ["trkSub", "stn", "sys", "obsTime", "astCat", "block", "rmsRA", "rmsTime"]
    assert again[same].equals(kept[same])
    # the last digits may differ by rounding, and by what a better propagator moves
    for column, digit in (("ra_rad", 1e-6), ("dec_rad", 1e-6)):
        assert np.all(np.abs(again[column] - kept[column]) < np.radians(2.0 * digit))
    for column in ("pos1", "pos2", "pos3"):
        assert np.all(np.abs(again[column] - kept[column]) < 0.01)


def test_the_arc_is_one_that_the_reader_reads(simulated):
    arc = ng.read_arc(DEMO / "pushed.psv")
    assert arc.name == "Ember"
    assert len(arc) == len(simulated.arc)
    assert arc.table["use"].all()
    assert 250 <= len(arc) <= 320
    assert 230.0 < arc.span_d < 260.0


def test_every_place_and_its_name_are_invented(simulated):
    text = (DEMO / "pushed.psv").read_text(encoding="utf-8")
    assert text.count("! line Invented: object, place and observations.") == 4
    assert set(simulated.records_by_site) == {
        "Saltpan Camp",
        "Goat Ridge",
        "Windmill Yard",
        "Lantern",
    }
    assert simulated.arc.table["site"].isin(["roving", "space"]).all()


def test_the_errors_are_those_of_the_recipe(simulated, recipe):
    arc = simulated.arc
    observers = observer_states(arc, load_ephemeris())
    orbit = recipe.orbit.orbit(recipe.thrust.thrust(recipe.thrust.A_au_d2))
    order = np.argsort(observers.tdb_d)
    seen = predict_for(orbit, observers.tdb_d[order], observers.position_au[order])
    table = arc.table.iloc[order]
    off = tangent_plane_residuals(
        table["ra_rad"], table["dec_rad"], np.radians(seen["ra_deg"]), np.radians(seen["dec_deg"])
    )
    block = table["block"].to_numpy()
    for number, instrument in enumerate((*recipe.site, *recipe.spacecraft)):
        mine = off[block == number] / arcsec
        expected = np.hypot(instrument.rms_arcsec, instrument.night_common_arcsec)
        # 3 sigma of a standard deviation from n pairs, common errors counted once a night
        slack = 3.0 / np.sqrt(4.0 * len(mine) / instrument.frames)
        assert abs(np.sqrt(np.mean(mine**2)) / expected - 1.0) < slack
        assert np.all(np.abs(np.mean(mine, axis=0)) < 3.0 * expected / np.sqrt(len(mine) / 4.0))


def test_sites_observe_by_night_and_above_the_horizon(simulated, recipe):
    table = simulated.arc.table
    for number, site in enumerate(recipe.site):
        mine = table[table["block"] == number]
        place = EarthLocation.from_geodetic(
            site.longitude_deg * u.deg, site.latitude_deg * u.deg, site.altitude_m * u.m
        )
        when = Time([text.rstrip("Z") for text in mine["obsTime"]], scale="utc")
        frame = AltAz(obstime=when, location=place)
        target = SkyCoord(mine["ra"].to_numpy() * u.deg, mine["dec"].to_numpy() * u.deg)
        height = target.transform_to(frame).alt.deg
        sun = get_sun(when).transform_to(frame).alt.deg
        assert height.min() > site.min_altitude_deg - HORIZON_SLACK_DEG
        assert sun.max() < -site.sun_below_deg + HORIZON_SLACK_DEG


def test_the_spacecraft_keeps_its_distance_from_the_sun(simulated, recipe):
    arc = simulated.arc.select(simulated.arc.table["site"].to_numpy() == "space")
    observers = observer_states(arc, load_ephemeris())
    sun = load_ephemeris().position_au("sun", observers.tdb_d) - observers.position_au
    ra, dec = arc.table["ra_rad"].to_numpy(), arc.table["dec_rad"].to_numpy()
    line = np.stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)], axis=1)
    elongation = np.degrees(np.arccos(np.sum(line * sun, axis=1) / np.linalg.norm(sun, axis=1)))
    low, high = recipe.spacecraft[0].elongation_deg
    assert low - HORIZON_SLACK_DEG < elongation.min() < elongation.max() < high + HORIZON_SLACK_DEG
    assert np.linalg.norm(observers.geocentric_au, axis=1).min() > 0.1


def test_the_seed_decides(recipe):
    site = {**recipe.site[0].model_dump(), "every_nights": 40}
    plan = recipe.schedule.model_dump()
    small = [
        simulate_arc(changed(recipe, site=[site], spacecraft=[], schedule={**plan, "seed": seed}))
        for seed in (1, 1, 2)
    ]
    first, again, other = (one.arc.table["ra"].to_numpy() for one in small)
    assert np.array_equal(first, again)
    assert not np.array_equal(first, other)


def test_nothing_is_written_without_a_file_name(recipe, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    site = {**recipe.site[0].model_dump(), "every_nights": 60}
    assert simulate_arc(changed(recipe, site=[site], spacecraft=[])).path is None
    assert list(tmp_path.iterdir()) == []


def test_a_recipe_that_nobody_can_observe_is_told(recipe):
    blind = [{**one.model_dump(), "faintest_mag": 10.0} for one in recipe.site]
    with pytest.raises(CaseError, match="Nobody could observe Ember"):
        simulate_arc(changed(recipe, site=blind, spacecraft=[]))


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("frames = 3", "frmes = 3", "did you mean 'frames'?"),
        ("last = 2024-05-24", "last = 2022-05-24", "last must not come before first"),
        ('name = "Ember"', 'name = "much too long a name"', "name"),
        ('law = "inverse-square"', 'law = "inverse"', "inverse-square"),
    ],
)
def test_a_wrong_recipe_is_told_in_one_sentence(tmp_path, old, new, words):
    text = (DEMO / "quiet_recipe.toml").read_text(encoding="utf-8")
    assert old in text
    path = tmp_path / "recipe.toml"
    path.write_text(text.replace(old, new, 1), encoding="utf-8")
    with pytest.raises(CaseError) as caught:
        simulate_arc(path)
    assert words in str(caught.value)
    assert "\n" not in str(caught.value)
    assert list(tmp_path.iterdir()) == [path]


@pytest.mark.parametrize(("kind", "code"), [("site", "G96"), ("spacecraft", "250")])
def test_no_real_observatory_is_credited(recipe, kind, code):
    table = recipe.model_dump()
    table[kind][0]["code"] = code
    with pytest.raises(ValueError, match=rf"code of no observatory, but {code} is"):
        Recipe.model_validate(table)
