import json

import numpy as np
import pytest
from astropy import units as u

from ngbound.errors import LimitError, StationError
from ngbound.fit import fit_orbit
from ngbound.limits import PlannedNight, detection_threshold, forecast
from ngbound.motion import Thrust
from tests.limits.arcs import CLASSES, ERRORS, fitted, simulated_arc

COMET = CLASSES["comet, 200 days through perihelion"]


@pytest.fixture(scope="module")
def push():
    return fitted(COMET)


PLAN = (
    PlannedNight("2020-06-01T04:00", station="568", n=4),
    PlannedNight("2020-05-01T04:00", station="568", n=4),
    PlannedNight("2020-07-10T04:00", station="950", n=8, sigma_arcsec=0.1, common_arcsec=0.05),
)


def test_nights_add_up_and_are_compared(push):
    found = forecast(push, PLAN)
    worst = found.table["worst"].to_numpy()
    # the middle of each night, as it was planned, whatever the number of records
    assert [utc[:16] for utc in found.table["utc"]] == [
        "2020-05-01T04:00", "2020-06-01T04:00", "2020-07-10T04:00",
    ]  # fmt: skip
    assert np.all(np.diff([found.now.worst.value, *worst]) < 0.0)
    assert np.all(found.table["alone_worst"] >= worst[-1])
    assert found.best_night == 2
    assert found.table["mass_reach"].iloc[-1] == pytest.approx(
        found.now.worst.value / found.after[-1].worst.value
    )
    assert np.all(found.table["elongation_deg"].between(40.0, 180.0))
    json.dumps(found.to_dict())
    assert "buys most alone is 2020-07-10" in str(found)


def test_date_when_an_acceleration_becomes_detectable(push):
    found = forecast(push, PLAN)
    now, last = found.now.worst.value, found.after[-1].worst.value
    assert found.detectable(1.01 * now) == "now"
    assert found.detectable(1.001 * last).startswith("2020-07-10")
    assert found.detectable(0.9 * last) is None
    assert found.detectable(1.01 * found.now.along("R").value, "R") == "now"
    with pytest.raises(LimitError):
        found.detectable(0.0)
    assert "in any direction already" in found.detectable_sentence(1.01 * now)
    assert "in any direction from 2020-07-10" in found.detectable_sentence(1.001 * last)
    assert "below the threshold" in found.detectable_sentence(0.9 * last * u.au / u.d**2)


def test_the_forecast_is_what_the_longer_arc_then_has():
    # the arc as it was two months before its end, and the nights that then came
    arc, orbit = simulated_arc(COMET)
    table = arc.table
    day = table["utc_day"].to_numpy()
    nights = np.unique(day)
    early = day <= nights[39]
    from_then = [
        PlannedNight(
            str(table["obsTime"].to_numpy()[day == night][2]),
            station=str(table["stn"].to_numpy()[day == night][0]),
            n=5,
            sigma_arcsec=0.3,
            common_arcsec=0.15,
        )
        for night in nights[40:]
    ]
    whole = detection_threshold(fitted(COMET))
    cut = fit_orbit(arc, Thrust(COMET.law), ERRORS, initial=orbit, reject=False, keep=early)
    last = forecast(cut, from_then).after[-1]
    assert last.worst.value == pytest.approx(whole.worst.value, rel=0.02)


def test_bad_plans_are_refused(push):
    with pytest.raises(LimitError, match="no night"):
        forecast(push, [])
    with pytest.raises(LimitError, match="at least one record"):
        PlannedNight("2020-05-01", n=0)
    with pytest.raises(StationError):
        forecast(push, [PlannedNight("2020-05-01", station="@@@")])
