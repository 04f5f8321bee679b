"""Radar records in an arc: which can be used, where they were timed, and their errors."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from ngbound.arc import Arc, ErrorModel, read_arc, survey, vet, write_psv, write_xml
from ngbound.constants import ARCSEC_RAD
from ngbound.motion import Echoes
from tests.radar_arcs import ANTENNAS, mixed_arc


def radar_arc(**changed: object) -> Arc:
    row = {
        "kind": "radar", "permID": "1", "trx": "RD1", "rcv": "RD2",
        "obsTime": "2020-03-01T00:00:00Z", "frq": 2400.0, "delay": 20.0, "rmsDelay": 0.5,
    }  # fmt: skip
    row |= changed
    frame = pd.DataFrame({k: [v] for k, v in row.items() if v is not None})
    return Arc.from_frame(frame, stations=ANTENNAS)


def test_a_plain_record_is_used() -> None:
    arc = radar_arc()
    assert arc.table["use"].all()
    assert arc.used.table["stn"].tolist() == ["RD2"] and arc.table["stn"].tolist() == [""]
    echoes = Echoes.of(arc.used)
    assert echoes is not None
    # seconds beside microseconds
    assert echoes.delay_s[0] == 20.0 and echoes.sigma_delay_s[0] == 0.5e-6
    assert np.isnan(echoes.doppler_hz[0])
    assert echoes.per_unit[0] == pytest.approx([ARCSEC_RAD / 0.5e-6, 0.0])


@pytest.mark.parametrize(
    ("changed", "words"),
    [
        ({"com": 0}, "one radius nearer"),
        ({"trx": "247"}, "roving"),
        ({"rcv": "250"}, "space"),
    ],
)
def test_what_cannot_be_used_says_why(changed: dict[str, object], words: str) -> None:
    arc = radar_arc(**changed)
    assert not arc.table["use"].any()
    assert words in arc.table["why_not"][0]
    assert words in str(arc)


def test_radius_refers_a_delay_to_the_centre() -> None:
    arc = radar_arc(com=0)
    model = ErrorModel(radius_km=3.0)
    used = model.usable(arc).used
    assert used.table["delay"][0] == pytest.approx(20.0 + 6.0 / 299792.458, abs=1e-12)
    assert not arc.table["use"].any() and arc.table["delay"][0] == 20.0
    assert model.usable(model.usable(arc)).table["delay"][0] == used.table["delay"][0]
    shared = model.apply(used).shared
    assert shared is not None and shared.names == ("radius of the body",)
    # a fifth of the radius, there and back, over half a microsecond
    sigma = 2.0 * 0.6 / 299792.458 / 0.5e-6
    assert shared.matrix.ravel() / ARCSEC_RAD == pytest.approx([-sigma, 0.0])
    assert ErrorModel(radius_km=3.0).apply(radar_arc().used).shared is None


def test_doppler_of_the_leading_edge_is_used() -> None:
    # the centre of the spectrum is that of the body, wherever on it the echo was strongest
    arc = radar_arc(com=0, delay=None, rmsDelay=None, doppler=-5000.0, rmsDoppler=0.1)
    assert arc.table["use"].all()


@pytest.mark.parametrize("ending", ["psv", "xml"])
def test_round_trip(ending: str, tmp_path: Path) -> None:
    arc, _ = mixed_arc()
    path = tmp_path / f"arc.{ending}"
    (write_xml if ending == "xml" else write_psv)(arc, path)
    again = read_arc(path, stations=ANTENNAS)
    for column in ("kind", "trx", "rcv", "delay", "rmsDelay", "doppler", "rmsDoppler", "frq"):
        pd.testing.assert_series_equal(arc.table[column], again.table[column])
    assert again.table["use"].all()


def test_noise_of_echoes_stands_beside_that_of_directions() -> None:
    arc, _ = mixed_arc()
    used = arc.used
    radar = (used.table["kind"] == "radar").to_numpy()
    model = ErrorModel(
        scheme="uniform", uniform_arcsec=0.7, night_common_arcsec=0.2, station_offset_arcsec=0.1,
        floor_arcsec=2.0, scale=1.5,
    )  # fmt: skip
    noise = model.apply(used)
    alone = model.apply(used.select(~radar))
    assert np.array_equal(noise.sigma_ra_arcsec[~radar], alone.sigma_ra_arcsec)
    # the stated error times the factor on all errors; nothing shared
    assert np.all(noise.sigma_ra_arcsec[radar] == 1.5)
    assert not noise.night_common_arcsec[radar].any()
    assert noise.shared is not None and alone.shared is not None
    assert noise.shared.names == alone.shared.names
    assert not noise.shared.matrix.reshape(len(used), 2, -1)[radar].any()
    assert not set(noise.night[radar]) & set(noise.night[~radar])
    assert noise.count.sum() == 2 * (~radar).sum() + radar.sum()
    assert np.array_equal(noise.optical, ~radar)
    kept = noise.mask(radar).scaled(2.0)
    assert np.array_equal(kept.count, np.ones(radar.sum()))
    white = noise.whiten(np.full(2 * len(used), ARCSEC_RAD)).reshape(-1, 2)
    assert white[radar] == pytest.approx(1.0 / 1.5, rel=1e-12)
    assert not ErrorModel(rescale_stations=True).rescalable(noise)[radar].any()
    assert "stated sigma" in str(noise)
    told = noise.to_dict()["sources"]["radar, stated"]
    assert told == {"n": int(radar.sum()), "median_stated_sigmas": 1.5}


def test_an_echo_reported_twice_is_found() -> None:
    arc, _ = mixed_arc()
    again = replace(arc, table=pd.concat([arc.table, arc.table.iloc[[61, 66]]], ignore_index=True))
    found = [finding for finding in vet(again) if finding.kind == "exact-duplicate"]
    assert [finding.rows for finding in found] == [(61, 68), (66, 69)]
    assert "delays of one echo" in found[0].sentence
    assert "Doppler shifts of one echo" in found[1].sentence
    # the same echo out of a format that tells its second less well
    table = again.table.assign(
        utc_sec=again.table["utc_sec"]
        .where(again.table.index < 68)
        .fillna(again.table["utc_sec"] - 0.01)
    )
    found = [f.rows for f in vet(replace(again, table=table)) if f.kind == "exact-duplicate"]
    assert found == [(61, 68), (66, 69)]


@pytest.mark.parametrize("frequency", [2.38, 2.38e9])
def test_a_frequency_in_another_unit_is_found(frequency: float) -> None:
    found = [f for f in vet(radar_arc(frq=frequency)) if f.kind == "impossible-frequency"]
    assert [f.rows for f in found] == [(0,)]
    assert "impossible-frequency" not in [f.kind for f in vet(radar_arc())]


def test_inspection_of_a_mixed_arc() -> None:
    arc, _ = mixed_arc()
    told = survey(arc)
    assert told.stations == {"500": 60, "RD2": 8}
    assert told.errors["stated delay"].median == 0.5
    assert told.errors["assigned RA"].n == 60
    # delay and Doppler shift of one instant are no duplicates
    assert [finding.kind for finding in vet(arc)] == ["single-station"]
