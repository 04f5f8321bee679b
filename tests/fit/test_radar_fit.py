"""Fits of arcs with radar: they recover the truth, judge echoes as they judge directions, and say
what they did."""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from ngbound.arc import Arc, ErrorModel, read_arc
from ngbound.constants import ARCSEC_RAD, C_KM_S
from ngbound.errors import FitError
from ngbound.fit import Fit, compare_fits, diagnose, fit_orbit
from ngbound.fit.outliers import as_of_two
from ngbound.motion import Orbit, Thrust
from tests.radar_arcs import (
    ANTENNAS,
    FIRST_MJD,
    MEGAHERTZ,
    SIGMA_DELAY_US,
    SIGMA_DOPPLER_HZ,
    mixed_arc,
    radar_frame,
)

RTN = Thrust("inverse-square", components="RTN")


def truth_at(fit: Fit, orbit: Orbit) -> np.ndarray:
    epoch = fit.orbit.epoch_tdb_d
    return orbit.track(epoch, epoch).at(epoch)[0]


def with_gross(arc: Arc, row: int, column: str, shift: float) -> Arc:
    """The arc with one value of its radar record number ``row`` shifted."""
    names = [c for c in arc.table.columns if c in ADES]
    table = arc.table[names].copy()
    place = np.flatnonzero((arc.table["kind"] == "radar") & np.isfinite(arc.table[column]))[row]
    table.loc[place, column] += shift
    return Arc.from_frame(table, stations=ANTENNAS)


ADES = (
    "kind", "permID", "mode", "stn", "obsTime", "ra", "dec", "rmsRA", "rmsDec", "astCat", "trx",
    "rcv", "frq", "delay", "rmsDelay", "doppler", "rmsDoppler",
)  # fmt: skip


def test_first_orbit_from_the_angles_then_the_echoes() -> None:
    arc, orbit = mixed_arc(seed=4)
    echoes = (arc.table["kind"] == "radar").to_numpy()
    alone = fit_orbit(arc.select(~echoes))
    fit = fit_orbit(arc)
    assert fit.n_obs + fit.n_rejected == 68 and fit.keep[~fit.noise.optical].all()
    assert fit.dof == 2 * int((fit.keep & fit.noise.optical).sum()) + 8 - 6
    # the orbit from the angles misses the echoes by thousands of their errors
    epoch = fit.orbit.epoch_tdb_d
    narrow = np.sqrt(np.diag(fit.theta_cov) / np.diag(alone.theta_cov))
    assert narrow.max() < 0.5 and narrow.min() < 0.1
    assert alone.orbit.epoch_tdb_d == epoch
    at_the_echoes = fit_orbit(arc, initial=alone.orbit, reject=False)
    assert at_the_echoes.theta == pytest.approx(fit.theta, abs=5e-8)
    off = fit.theta - truth_at(fit, orbit)
    assert stats.chi2.sf(off @ fit.normal @ off, 6) > 1e-3
    told = str(fit)
    assert "4 delays" in told and "4 Doppler shifts" in told


def test_estimates_and_residuals_scatter_as_they_should() -> None:
    n = 50
    off_chi2, chi2, dof, pulls = [], [], [], []
    for seed in range(n):
        arc, orbit = mixed_arc(seed=seed, n_nights=12)
        fit = fit_orbit(arc, RTN, initial=orbit, reject=False)
        off = fit.theta - np.concatenate([truth_at(fit, orbit), np.zeros(3)])
        off_chi2.append(off @ fit.normal @ off)
        chi2.append(fit.chi2)
        dof.append(fit.dof)
        pulls.append(off[6:] / np.sqrt(np.diag(fit.theta_cov)[6:]))
    assert set(dof) == {2 * 36 + 8 - 9}
    for total, free in ((sum(off_chi2), 9 * n), (sum(chi2), sum(dof))):
        assert 1e-3 < stats.chi2.sf(total, free) < 1.0 - 1e-3
    assert stats.kstest(off_chi2, "chi2", args=(9,)).pvalue > 1e-3
    assert np.std(pulls) == pytest.approx(1.0, abs=0.2)


def test_thrust_is_recovered() -> None:
    arc, orbit = mixed_arc(seed=7, thrust=Thrust("inverse-square", A=(2e-8, 5e-9, 0.0)))
    null = fit_orbit(arc)
    push = fit_orbit(arc, RTN, initial=null)
    assert push.significance > 8.0
    off = push.theta[6:] - np.array([2e-8, 5e-9, 0.0])
    assert np.abs(off / np.sqrt(np.diag(push.theta_cov)[6:])).max() < 4.0
    assert push.keep[~push.noise.optical].all()
    told = compare_fits(null, push)
    assert told.delta_bic > 0.0
    # a numbers' worth of BIC: two of a direction, one of an echo
    fee = 3.0 * np.log(push.n_numbers)
    assert told.delta_bic == pytest.approx(told.delta_chi2 - fee, rel=1e-12)


@pytest.mark.parametrize(
    ("column", "shift"), [("delay", 5e-5), ("delay", -1e-3), ("doppler", 20.0), ("delay", 1.0)]
)
def test_one_gross_echo_is_rejected_and_only_it(column: str, shift: float) -> None:
    arc, _ = mixed_arc(seed=3, radar_days=(20.0, 21.0, 22.0, 50.0, 70.0, 71.0))
    fit = fit_orbit(with_gross(arc, 1, column, shift))
    echoes = ~fit.noise.optical
    wrong = np.flatnonzero(echoes & ~fit.keep)
    assert len(wrong) == 1
    table = fit.residuals.iloc[wrong[0]]
    seen = table["delay_us"] * 1e-6 if column == "delay" else table["doppler_hz"]
    assert seen == pytest.approx(shift, rel=0.1)


def test_chi2_of_one_number_is_exchanged_for_one_of_two() -> None:
    one = np.array([0.0, 0.4549, 5.0, 50.0, 1e4])
    two = as_of_two(one)
    assert stats.chi2.sf(two[:4], 2) == pytest.approx(stats.chi2.sf(one[:4], 1), rel=1e-9)
    assert two[4] == pytest.approx(1e4, rel=1e-3)


def test_radius_of_the_body_is_found_from_echoes_of_both_kinds() -> None:
    arc, orbit = mixed_arc(seed=11, radar_days=(20.0, 21.0, 22.0, 70.0, 71.0, 72.0))
    table = arc.table[list(ADES)].assign(com=1.0)
    delays = np.flatnonzero(np.isfinite(table["delay"]))
    table.loc[delays[::2], "com"] = 0.0
    table.loc[delays[::2], "delay"] -= 2.0 * 1.3 / C_KM_S
    mixed = Arc.from_frame(table, stations=ANTENNAS)
    assert (~mixed.table["use"]).sum() == 3
    model = ErrorModel(radius_km=1.0, radius_sigma_km=0.5)
    fit = fit_orbit(mixed, error_model=model, initial=orbit)
    found = fit.offsets.set_index("name").loc["radius of the body"]
    assert found["estimate"] == pytest.approx(0.3, abs=4.0 * found["sigma"])
    assert found["sigma"] < 0.15 and found["unit"] == "km"
    near = fit.theta + 2.0 * np.sqrt(np.diag(fit.theta_cov)) * [1, -1, 1, -1, 1, -1]
    assert fit.chi2_many(near)[0] == pytest.approx(fit.neighbourhood.chi2_alone(near)[0], rel=1e-5)


def test_echoes_alone_need_an_initial_orbit() -> None:
    arc, orbit = mixed_arc(seed=5, radar_days=tuple(np.arange(2.0, 90.0, 6.0)))
    echoes = (arc.table["kind"] == "radar").to_numpy()
    only = arc.select(echoes)
    with pytest.raises(FitError, match="echoes alone give no first orbit"):
        fit_orbit(only)
    fit = fit_orbit(only, initial=orbit)
    assert fit.dof == 30 - 6
    off = fit.theta - truth_at(fit, orbit)
    assert stats.chi2.sf(off @ fit.normal @ off, 6) > 1e-3
    assert np.isnan(fit.rms_arcsec)
    assert fit.residuals["ra_arcsec"].isna().all()
    diagnose(fit_orbit(only, RTN, initial=orbit))


def test_residual_table() -> None:
    arc, _ = mixed_arc(seed=2)
    fit = fit_orbit(arc, reject=False)
    table = fit.residuals
    echo = table["kind"] == "radar"
    assert table.loc[echo, ["ra_arcsec", "dec_arcsec", "along_arcsec"]].isna().all().all()
    assert table.loc[~echo, ["delay_us", "doppler_hz"]].isna().all().all()
    delay = table["delay_us"].notna()
    assert delay.sum() == 4 and table["doppler_hz"].notna().sum() == 4
    assert (table.loc[delay, "sigma_delay_us"] == SIGMA_DELAY_US).all()
    assert (table.loc[echo & ~delay, "sigma_doppler_hz"] == SIGMA_DOPPLER_HZ).all()
    pair = fit.seen[echo.to_numpy()] / ARCSEC_RAD
    assert table.loc[delay, "delay_us"].to_numpy() / SIGMA_DELAY_US == pytest.approx(
        pair[:, 0][pair[:, 0] != 0.0]
    )
    assert set(table.loc[echo, "stn"]) == {"RD2"}
    told = fit.to_dict()["radar"]
    assert told["n_delay"] == told["n_doppler"] == 4
    assert told["rms_delay_us"] == pytest.approx(np.sqrt(np.mean(table["delay_us"] ** 2)))


def test_diagnostics_count_numbers() -> None:
    # one station observes, one receives: whatever the radar says counts in its own group only
    arc, orbit = mixed_arc(seed=6)
    fit = fit_orbit(arc, RTN, initial=orbit)
    told = diagnose(fit)
    groups = told.groups.set_index(["kind", "name"])
    assert groups.loc[("station", "RD2"), "n"] == 8
    assert ("catalogue", "Gaia2") in groups.index and len(groups.loc["catalogue"]) == 1
    assert told.nights["radar"].sum() == 4
    # the expectations of all groups together are the degrees of freedom
    free = fit.noise.mask(fit.keep).given.ravel() - fit.joint.leverage
    assert free.sum() == pytest.approx(fit.dof, rel=1e-6)


def test_rescaling_leaves_echoes_as_stated() -> None:
    arc, orbit = mixed_arc(seed=8)
    model = ErrorModel(rescale_stations=True, rescale_least=4)
    fit = fit_orbit(arc, error_model=model, initial=orbit)
    assert [scale.station for scale in fit.scales] == ["500"]
    assert (fit.noise.sigma_ra_arcsec[~fit.noise.optical] == 1.0).all()


def line80_of(delay: pd.Series, doppler: pd.Series) -> list[str]:
    """The two 80-column lines of a delay and a Doppler shift at one instant."""
    time = delay["obsTime"]
    day = time.day + (time.hour * 3600 + time.minute * 60 + time.second) / 86400.0
    date = f"{time.year} {time.month:02d} {day:09.6f}"
    whole, part = f"{delay['delay'] * 1e6:.4f}".split(".")
    hertz, tenths = f"{abs(doppler['doppler']):.4f}".split(".")
    sign = "-" if doppler["doppler"] < 0 else "+"
    desig = "99999".ljust(12)
    first = f"{desig}  R{date}{whole:>11}{part}{sign}{hertz:>10}{tenths}{MEGAHERTZ:5.0f} RD1 JPLR"
    us, us_part = f"{SIGMA_DELAY_US:.4f}".split(".")
    hz, hz_part = f"{SIGMA_DOPPLER_HZ:.4f}".split(".")
    second = f"{desig}  r{date}C{us:>10}{us_part}{hz:>11}{hz_part}      RD1 JPLR"
    return [f"{line:<77}RD2" for line in (first, second)]


def test_eighty_column_radar_reaches_the_same_fit(tmp_path: Path) -> None:
    arc, orbit = mixed_arc(seed=9)
    echoes = (arc.table["kind"] == "radar").to_numpy()
    # whole seconds, of which six decimals of a day tell no more than hundredths
    days = FIRST_MJD + np.array([20.125, 21.25, 70.5, 71.625]) + np.array([17, 1, 29, 3]) / 86400.0
    frame = radar_frame(orbit, days, np.random.default_rng(1))
    lines = []
    for i in range(4):
        lines += line80_of(frame.iloc[i], frame.iloc[4 + i])
    path = tmp_path / "radar.txt"
    path.write_text("\n".join(lines) + "\n")
    short = read_arc(path, stations=ANTENNAS)
    assert short.table["use"].all() and len(short) == 8
    columns = [c for c in ADES if c in arc.table and c in short.table]
    both = pd.concat(
        [arc.table.loc[~echoes, columns], short.table[columns]], ignore_index=True
    ).assign(permID="999999")
    frame["obsTime"] = [f"{t:%Y-%m-%dT%H:%M:%S}Z" for t in frame["obsTime"]]
    direct = pd.concat([arc.table.loc[~echoes, list(ADES)], frame], ignore_index=True)
    fits = [
        fit_orbit(Arc.from_frame(table, stations=ANTENNAS), initial=orbit)
        for table in (both, direct)
    ]
    # four decimals of a microsecond and of a hertz are written
    off = fits[0].theta - fits[1].theta
    assert off @ fits[1].normal @ off < 1e-4
