"""The residual fan: structure, labels, ladder, and no trace left in global settings."""

import io

import matplotlib
import numpy as np
import pytest
from astropy import units as u

from ngbound.errors import FitError, LimitError
from ngbound.fit import Comparison
from ngbound.limits import detection_threshold
from ngbound.report import residual_fan
from ngbound.report.figures.fan_contents import LADDER
from ngbound.report.figures.seasons import Clock
from ngbound.report.figures.style import spread
from ngbound.rounding import along
from tests.report.standins import archive_pair, demo_pair, tiny_pair

AU_D2 = u.au / u.d**2


def rung_texts(fig):
    return [t for ax in fig.axes for t in ax.texts if t.get_gid() == "rung"]


def test_two_panels_with_dates_labels_and_a_rung_each():
    fig = residual_fan(*demo_pair())
    upper, lower = fig.axes
    assert upper.get_ylabel().startswith("along") and lower.get_ylabel().startswith("across")
    assert "arcsec" in upper.get_ylabel()
    fig.canvas.draw()
    assert any("Mar" in t.get_text() for t in lower.get_xticklabels())
    assert len(rung_texts(fig)) == len(LADDER)
    assert {t.get_text() for t in fig.legends[0].get_texts()} == {
        "Q01",
        "Q02",
        "Q03",
        "SPC",
        "night mean \u00b1 1\u03c3",
        "single record",
        "fan seen from SPC",
        "rejected",
    }


def test_labels_do_not_overlap_and_stay_on_the_page():
    for figsize in (None, (3.5, 3.8)):
        fig = residual_fan(*demo_pair(), figsize=figsize)
        fig.set_dpi(200)
        fig.canvas.draw()
        boxes = [t.get_window_extent() for t in rung_texts(fig)]
        boxes += [t.get_window_extent() for t in fig.texts]
        boxes += [fig.legends[0].get_window_extent(), fig.axes[0].get_window_extent()]
        for i, a in enumerate(boxes):
            assert a.x1 <= fig.bbox.x1 + 1 and a.y1 <= fig.bbox.y1 + 1
            for b in boxes[i + 1 :]:
                assert not (a.padded(-1.0).overlaps(b.padded(-1.0)))


def test_the_drawn_fan_is_the_departure():
    null, push = demo_pair()
    size = 4e-8
    fig = residual_fan(null, push, ladder=[size], component="normal")
    small = residual_fan(null, push, ladder=[size * u.au / u.d**2 / 2], component="N")
    peak = [
        max(
            np.nanmax(np.abs(line.get_ydata()))
            for line in f.axes[1].lines
            if line.get_gid() == "fan"
        )
        for f in (fig, small)
    ]
    assert peak[0] == pytest.approx(2 * peak[1], rel=1e-6)


def test_the_ladder_in_multiples_of_the_threshold():
    null, push = demo_pair()
    threshold = detection_threshold(push, power=0.5)
    held = threshold.held[2].to_value(AU_D2)
    fig = residual_fan(
        null, push, ladder=np.array([1, 3]) * held * AU_D2, component="normal", threshold=threshold
    )
    assert [t.get_text().split("\u00d7")[0] for t in rung_texts(fig)] == ["1", "3"]
    assert any("50 %" in t.get_text() for t in fig.texts)
    given = residual_fan(null, push, ladder=[5e-9], component="T", threshold=1e-9 * AU_D2)
    assert rung_texts(given)[0].get_text().startswith("5\u00d7")


def test_a_dwarfing_ladder_goes_to_symlog_and_alike_stays_linear():
    null, push = demo_pair()
    huge = residual_fan(null, push, ladder=[1e-9, 1e-6], component="radial")
    assert huge.axes[0].get_yscale() == "symlog"
    assert residual_fan(null, push).axes[0].get_yscale() == "linear"


def test_only_residuals_without_a_thrust_fit():
    fig = residual_fan(demo_pair()[0])
    assert len(fig.axes) == 2 and not rung_texts(fig)


def test_a_detected_thrust_is_drawn_too():
    null, push = demo_pair(1.5e-8)
    fig = residual_fan(null, push)
    assert "fitted thrust" in [t.get_text() for t in fig.legends[0].get_texts()]
    note = " ".join(t.get_text() for t in fig.texts)
    unit = push.A.value / np.linalg.norm(push.A.value)
    assert f"along the fitted thrust {along('RTN', unit)}" in note
    best = residual_fan(null, push, component="best")
    assert "in the direction this arc shows best" in " ".join(t.get_text() for t in best.texts)


def test_the_ladder_is_the_fitted_thrust_times_a_number():
    null, push = demo_pair(1.5e-8)
    size = float(np.linalg.norm(push.A.value))
    fig = residual_fan(null, push, ladder=[size])
    for ax in fig.axes:
        rung = [line.get_ydata() for line in ax.lines if line.get_gid() == "fan"]
        fitted = [line for line in ax.lines if line.get_linestyle() == "--"][0].get_ydata()
        assert np.nanmax(np.abs(fitted)) == pytest.approx(np.nanmax(np.abs(rung[0])), rel=1e-9)


def test_a_comparison_decides_whether_the_thrust_is_significant():
    null, push = demo_pair(1.5e-8)
    weak = Comparison(1.0, 3, 0.8, -10.0, 100, True)
    fig = residual_fan(null, push, comparison=weak)
    assert "fitted thrust" not in [t.get_text() for t in fig.legends[0].get_texts()]


def test_platforms_are_drawn_apart():
    fig = residual_fan(*demo_pair())
    for ax in fig.axes:
        ids = [line.get_gid() for line in ax.lines]
        assert ids.count("fan") == ids.count("fan from elsewhere") == 2 * len(LADDER)


def test_a_narrow_figure_writes_the_accelerations_into_the_note():
    fig = residual_fan(*demo_pair(), figsize=(3.5, 4.2))
    assert [t.get_text() for t in rung_texts(fig)] == ["0.5\u00d7", "1\u00d7", "2\u00d7", "4\u00d7"]
    assert "1\u00d7 = " in " ".join(t.get_text() for t in fig.texts)


def test_the_file_knows_what_it_shows():
    page = io.BytesIO()
    residual_fan(*demo_pair()).savefig(page, format="pdf")
    assert b"residuals of the gravity-only fit" in page.getvalue()
    assert b"/CreationDate" not in page.getvalue()
    svg = io.StringIO()
    residual_fan(tiny_pair()[0]).savefig(svg, format="svg")
    assert "<dc:title>" in svg.getvalue() and "<dc:date>" not in svg.getvalue()


def test_ten_observations():
    fig = residual_fan(*tiny_pair(), component="transverse")
    fig.canvas.draw()
    assert len(rung_texts(fig)) == 4


def test_decades_of_seasons_stand_side_by_side():
    null, push = archive_pair()
    fig = residual_fan(null, push)
    years = [t.get_text() for t in fig.axes[1].get_xticklabels()]
    assert years[0] == "1983" and years == sorted(years) and len(years) > 15
    assert {t.get_text() for t in fig.legends[0].get_texts()} >= {
        "night mean \u00b1 1\u03c3",
        "single record",
    }


def test_the_cut_time_axis_keeps_the_order_of_time():
    rng = np.random.default_rng(1)
    date = np.sort(np.concatenate([c + 40 * rng.random(30) for c in (0.0, 500.0, 1100.0, 4000.0)]))
    clock = Clock.of(date)
    assert clock.cut and len(clock.first) == 4
    assert np.all(np.diff(clock.place(date)) > 0)
    inside = np.diff(date) < 100
    assert np.diff(clock.place(date))[inside] == pytest.approx(np.diff(date)[inside])
    short = Clock.of(np.linspace(0, 240, 50))
    assert not short.cut and short.place(np.array([3.5]))[0] == 3.5


def test_vector_output_has_real_fonts_and_settings_are_put_back():
    before = dict(matplotlib.rcParams)
    page = io.BytesIO()
    residual_fan(tiny_pair()[0]).savefig(page, format="pdf")
    assert b"/TrueType" in page.getvalue() or b"/CIDFontType2" in page.getvalue()
    assert b"/Type3" not in page.getvalue()
    assert dict(matplotlib.rcParams) == before


def test_refusals():
    null, push = demo_pair()
    with pytest.raises(LimitError, match="sideways"):
        residual_fan(null, push, component="sideways")
    with pytest.raises(FitError, match="gravity-only"):
        residual_fan(null, null)


def test_spread_keeps_order_and_distance():
    placed = spread([0.5, 0.51, 0.52, 0.9], 0.1, 0.0, 1.0)
    assert np.all(np.diff(placed) >= 0.1 - 1e-12)
    assert placed[1] == pytest.approx(0.51) and placed[3] == 0.9
    assert spread([0.99, 1.2], 0.1, 0.0, 1.0) == pytest.approx([0.9, 1.0])
