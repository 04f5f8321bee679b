"""What people read of an arc with radar: tables, figures, the command line."""

from pathlib import Path

import numpy as np
import pytest

from ngbound.arc import write_psv
from ngbound.fit import Fit, fit_orbit
from ngbound.motion import Thrust
from ngbound.report import (
    echo_table,
    residual_by_station,
    residual_fan,
    residual_suspicions,
    station_table,
)
from ngbound.run import fit_case, inspect_case
from tests.radar_arcs import ANTENNAS, mixed_arc

CASE = """
[arc]
file = "arc.psv"

[arc.stations.RD1]
longitude_deg = {RD1[longitude_deg]}
latitude_deg = {RD1[latitude_deg]}
altitude_m = {RD1[altitude_m]}

[arc.stations.RD2]
longitude_deg = {RD2[longitude_deg]}
latitude_deg = {RD2[latitude_deg]}
altitude_m = {RD2[altitude_m]}
"""


@pytest.fixture(scope="module")
def fits() -> tuple[Fit, Fit]:
    arc, orbit = mixed_arc(seed=14)
    null = fit_orbit(arc, initial=orbit, reject=False)
    push = fit_orbit(arc, Thrust("inverse-square", components="RTN"), initial=null, reject=False)
    return null, push


def test_tables(fits: tuple[Fit, Fit]) -> None:
    null, push = fits
    assert station_table(push).frame["station"].tolist() == ["500"]
    echoes = echo_table(null)
    assert len(echoes.frame) == 8 and echoes.frame["delay_us"].notna().sum() == 4
    assert set(echoes.frame["receiver"]) == {"RD2"} and "*" not in set(echoes.frame["flag"])
    text = str(echoes)
    assert "delay (us)" in text and text.count("RD2") == 8
    assert residual_suspicions(push) == []


def test_figures_show_directions_alone(fits: tuple[Fit, Fit]) -> None:
    null, push = fits
    for figure in (residual_fan(null, push), residual_fan(null), residual_by_station(null)):
        words = [text.get_text() for ax in figure.axes for text in ax.get_yticklabels()]
        assert "RD2" not in words
        figure.canvas.draw()
        for ax in figure.axes:
            assert np.all(np.isfinite(ax.get_xlim())) and np.all(np.isfinite(ax.get_ylim()))


def test_command_line_steps(tmp_path: Path) -> None:
    arc, _ = mixed_arc(seed=14)
    write_psv(arc, tmp_path / "arc.psv")
    case = tmp_path / "case.toml"
    case.write_text(CASE.format(**ANTENNAS), encoding="utf-8")
    seen = str(inspect_case(case))
    assert "radar 8" in seen and "stated delay" in seen and "radar, stated" in seen
    told = str(fit_case(case))
    assert "4 delays" in told and "Radar echoes (observed - computed)" in told
