"""Tables of stations and catalogues: the bias must be seen, chance must not."""

import csv
import io
import json

import numpy as np
import pandas as pd
import pytest

from ngbound.limits import detection_threshold
from ngbound.report import (
    catalogue_table,
    residual_suspicions,
    residuals_csv,
    station_table,
    threshold_table,
)
from ngbound.report.tables import SmallTable, group_means
from tests.report.standins import StandInNoise, archive_pair, demo_pair


def test_biased_catalogues_give_themselves_away():
    for fit in archive_pair():
        table = catalogue_table(fit)
        starred = set(table.frame.loc[table.frame["flag_dec"] == "*", "catalogue"])
        assert {"USNOA2", "USNOB1"} <= starred
        told = residual_suspicions(fit)
        assert any("USNOA2" in s and "Dec" in s for s in told)
        assert not any("Gaia" in s for s in told)


def test_a_clean_arc_and_a_true_thrust_are_not_suspected():
    assert residual_suspicions(archive_pair(biased=False)[0]) == []
    assert residual_suspicions(demo_pair()[0]) == []
    assert residual_suspicions(demo_pair(1.5e-8)[1]) == []


def test_the_error_of_a_mean_knows_of_common_errors():
    class Fit:
        pass

    # 20 frames in each of 4 nights: independent 0.1, common 0.3 -> 0.3 / 2 is nearly all of it
    n = 80
    fit = Fit()
    fit.noise = StandInNoise(
        np.full(n, 0.1), np.full(n, 0.1), np.zeros(n), np.full(n, 0.3), np.repeat(np.arange(4), 20)
    )
    fit.residuals = pd.DataFrame(
        {
            "ra_arcsec": np.full(n, 0.2),
            "dec_arcsec": np.zeros(n),
            "keep": True,
            "utc": "2030-01-01T00:00:00",
        }
    )
    row = group_means(fit, ["Q01"] * n).iloc[0]
    assert row["mean_ra_arcsec"] == pytest.approx(0.2)
    assert row["mean_ra_error_arcsec"] == pytest.approx(
        np.sqrt((0.3**2 + 0.1**2 / 20) / 4), rel=1e-9
    )
    assert row["nights"] == 4


def test_a_group_without_a_kept_observation_is_shown_with_dashes():
    null, _ = demo_pair()
    labels = np.array(["good"] * 300, dtype=object)
    labels[~null.keep] = "bad"
    means = group_means(null, labels)
    assert list(means["group"]) == ["good", "bad"]
    assert means.loc[1, "n"] == 0 and np.isnan(means.loc[1, "mean_ra_arcsec"])


def test_renderings():
    table = station_table(demo_pair()[0])
    text = table.to_text().splitlines()
    assert text[0].startswith("Residuals by station")
    assert len({len(line) for line in text[3:-1]}) == 1
    back = pd.read_csv(io.StringIO(table.to_csv()))
    assert list(back["n"]) == list(table.frame["n"])
    latex = table.to_latex()
    assert latex.count(r"\\") == len(table.frame) + 1 and r"\toprule" in latex
    assert json.loads(json.dumps(table.to_dict(), allow_nan=False))["columns"]["station"]


def test_latex_is_escaped_and_missing_numbers_are_dashes():
    table = SmallTable("t", pd.DataFrame({"name": ["a_b & 5 %"], "x": [np.nan]}), {"x": ".2f"}, {})
    assert r"a\_b \& 5 \% & -" in table.to_latex()
    assert "nan" not in table.to_text()


def test_threshold_table_names_each_definition():
    table = threshold_table(detection_threshold(demo_pair()[1]))
    assert len(table.frame) == 12
    assert "0.27 %" in table.note and "95 %" in table.note
    assert "component alone, others free" in table.to_text()


def test_residuals_csv():
    null, _ = demo_pair()
    rows = list(csv.DictReader(io.StringIO(residuals_csv(null))))
    assert len(rows) == 300
    assert float(rows[7]["ra_arcsec"]) == pytest.approx(
        null.residuals["ra_arcsec"].iloc[7], abs=1e-5
    )
    assert {r["keep"] for r in rows} == {"True", "False"}
