"""The whole job on the demo, quiet and pushed, and what it leaves on the disk."""

import hashlib
import json
import tomllib
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import chi2

import ngbound as ng
from ngbound import run
from ngbound.errors import CaseError, NgboundError, NgboundWarning
from ngbound.limits import sample_posterior
from ngbound.report import load_record, render_report
from ngbound.rounding import length_text, mass_text

DEMO = Path(__file__).parent.parent / "data_demo"
WITHIN = 0.9973
"""Probability content of 3 sigma, for one or for three components together."""


def sha256_of(path: Path) -> str:
    return hashlib.sha256(path.read_bytes()).hexdigest()


def truth_of(history: str) -> np.ndarray:
    recipe = tomllib.loads((DEMO / f"{history}_recipe.toml").read_text(encoding="utf-8"))
    return np.array(recipe["thrust"]["A_au_d2"])


@pytest.fixture(scope="module")
def results(tmp_path_factory):
    """Both histories, run once: (record, folder) by name."""
    found = {}
    for history in ("quiet", "pushed"):
        folder = tmp_path_factory.mktemp("out") / history
        found[history] = (run.run_case(DEMO / f"{history}.toml", output=folder), folder)
    return found


@pytest.fixture
def quick(tmp_path):
    """A case on the quiet arc with a known orbit and a short chain."""
    recipe = tomllib.loads((DEMO / "quiet_recipe.toml").read_text(encoding="utf-8"))
    orbit = "\n".join(f"{key} = {value!r}" for key, value in recipe["orbit"].items())
    path = tmp_path / "quick.toml"
    path.write_text(
        f'[arc]\nfile = "{DEMO / "quiet.psv"}"\n[orbit]\n{orbit}\n'
        '[thrust]\ncomponents = "R"\n'
        "[sampling]\nmax_steps = 60\neffective_samples = 200\n",
        encoding="utf-8",
    )
    return path


@pytest.mark.slow
def test_the_quiet_arc_is_a_non_detection_with_limits_above_the_truth(results):
    record, _ = results["quiet"]
    assert record["verdict"]["kind"] == "non-detection"
    assert record["comparison"]["p_value"] > record["threshold"]["false_alarm"]
    assert 0.0 < record["limit"]["magnitude_au_d2"] < record["threshold"]["worst_au_d2"]
    assert "is explained by gravity alone" in record["sentence"]
    assert record["mass"]["mass_kg"] > 0.0


@pytest.mark.slow
def test_the_pushed_arc_is_a_detection_of_the_thrust_that_was_put_in(results):
    record, _ = results["pushed"]
    truth, push = truth_of("pushed"), record["fits"]["push"]
    assert record["verdict"]["kind"] == "detection"
    estimate = np.array(push["A_au_d2"])
    assert np.all(np.abs(estimate - truth) < 3.0 * np.array(push["A_sigma_au_d2"]))
    covariance = np.array(push["theta_cov"])[6:, 6:]
    distance = (estimate - truth) @ np.linalg.solve(covariance, estimate - truth)
    assert distance < chi2.ppf(WITHIN, 3)
    assert np.linalg.norm(truth) < record["limit"]["magnitude_au_d2"]
    assert "is not explained by gravity alone" in record["sentence"]


@pytest.mark.slow
def test_the_record_holds_reach_sunlight_active_surface_and_where_detected_a_ceiling(results):
    quiet, pushed = results["quiet"][0], results["pushed"][0]
    for record in (quiet, pushed):
        (row,) = record["reach"]["rows"]
        assert (row["species"], row["at_au"]) == ("H2O", 1.25)
        assert record["reach"]["power"] == 0.95
        assert row["revealed"]["rate_low_per_s"] < row["revealed"]["rate_per_s"]
        sun = record["radiation"]
        assert sun["acceleration_au_d2"] == record["limit"]["outward_radial_au_d2"]
        assert sun["density_times_diameter_kg_m2"] > 0.0
        (area,) = record["active_areas"]
        assert 0.0 < area["active_fraction_low"] < area["active_fraction_high"] < 1.0
        assert record["law_departures"][0]["factor"] < 2.0
        assert record["mass_remarks"] == []
        # held at the limit under the other prior, the mass bound scales with it
        other = record["mass_other_prior"]
        assert other["acceleration_upper_au_d2"] == record["limit"]["alternative_magnitude_au_d2"]
        assert other["joint_confidence"] == pytest.approx(0.90)
        assert record["mass_priors"] == ["isotropic-uniform", "flat-components"]
    # a wider limit, a smaller mass: by the ratio of the limits, or less where A varies besides
    assert 0.3 < quiet["mass_other_prior"]["mass_kg"] / quiet["mass"]["mass_kg"] < 0.8
    assert quiet["mass_ceiling"] is None
    # the recipe's jet: 5e27 /s at 1.25 au; mass between the bounds, and the size fits it
    assert pushed["mass"]["mass_kg"] < pushed["mass_ceiling"]["mass_kg"]
    assert pushed["mass_ceiling"]["verdict"] == "agree"


@pytest.mark.slow
@pytest.mark.parametrize("history", ["quiet", "pushed"])
def test_the_fits_describe_the_residuals(results, history):
    push = results[history][0]["fits"]["push"]
    assert 0.85 < push["chi2"] / push["dof"] < 1.15
    assert push["n_rejected"] < 0.04 * push["n_obs"]
    assert results[history][0]["suspicions"] == []


@pytest.mark.slow
def test_the_record_tells_inputs_versions_seeds_and_every_choice(results):
    record, folder = results["quiet"]
    assert load_record(folder)["sentence"] == record["sentence"]
    inputs = record["provenance"]["inputs"]
    assert inputs["arc"]["sha256"] == sha256_of(DEMO / "quiet.psv")
    assert inputs["case"]["sha256"] == sha256_of(DEMO / "quiet.toml")
    assert {"ngbound", "numpy", "numba", "astropy"} <= set(record["provenance"]["packages"])
    assert record["seeds"]["sampling"] == 1
    assert record["choices"]["detection"]["power"] == 0.95
    assert set(record["timings_s"]) >= {"read the arc", "sample the posterior"}


@pytest.mark.slow
def test_the_folder_holds_report_figures_and_record_and_nothing_else(results):
    record, folder = results["quiet"]
    written = {path.name for path in folder.iterdir()}
    assert written == {
        "record.json",
        "report.txt",
        "residuals.csv",
        "residual_fan.png",
        "residuals_by_station.png",
        "posterior.png",
        "direction_map.png",
        "mass.png",
        "reach.png",
    }
    assert [path.name for path in folder.parent.iterdir()] == ["quiet"]
    report = (folder / "report.txt").read_text(encoding="utf-8")
    for heading in (
        "Verdict",
        "Detection thresholds",
        "Upper limits",
        "Mass and size",
        "Reach: the outgassing this arc would have revealed",
        "Sunlight instead of gas",
        "Residuals by station",
    ):
        assert heading in report
    mass, flat = record["mass"], " ".join(report.split())
    for bound in (mass_text(mass["mass_kg"]), length_text(mass["diameter_m"])):
        assert record["sentence"].count(f"above {bound}") == 1
        assert flat.count(f"above {bound}") >= 2
    json.loads((folder / "record.json").read_text(encoding="utf-8"))


@pytest.mark.slow
def test_the_same_seed_gives_the_same_numbers_and_another_does_not(quick):
    first, again, other = (run.limit_case(quick, seed=seed) for seed in (5, 5, 6))
    assert first.limit.to_dict() == again.limit.to_dict()
    assert first.limit.magnitude != other.limit.magnitude
    assert first.threshold.to_dict() == other.threshold.to_dict()


@pytest.mark.slow
def test_the_chain_of_an_interrupted_limit_goes_on(quick, tmp_path, monkeypatch):
    whole = run.limit_case(quick)
    chain = tmp_path / "chain"

    def stopped(*arguments, progress, **options):
        def interrupt(step, total, message):
            raise KeyboardInterrupt

        return sample_posterior(*arguments, progress=interrupt, **options)

    with monkeypatch.context() as patch:
        patch.setattr(run, "sample_posterior", stopped)
        with pytest.raises(KeyboardInterrupt):
            run.limit_case(quick, checkpoint=chain)
    assert chain.exists()
    again = run.limit_case(quick, checkpoint=chain)
    assert again.limit.to_dict() == whole.limit.to_dict()


@pytest.mark.parametrize("moment", ["fit_orbit", "sample_posterior", "residual_fan"])
def test_an_interrupted_run_leaves_nothing(quick, tmp_path, monkeypatch, moment):
    def interrupt(*arguments, **options):
        raise KeyboardInterrupt

    monkeypatch.setattr(run, moment, interrupt)
    with pytest.raises(KeyboardInterrupt):
        run.run_case(quick, output=tmp_path / "results")
    assert list(tmp_path.iterdir()) == [quick]


def test_a_file_in_the_way_of_the_output_is_told_before_any_work(quick, tmp_path, monkeypatch):
    monkeypatch.setattr(run, "read_arc", None)
    taken = tmp_path / "taken"
    taken.write_text("mine")
    for folder in (taken, taken / "below"):
        with pytest.raises(CaseError, match="is a file"):
            run.run_case(quick, output=folder)
    assert taken.read_text() == "mine"


def test_a_bare_arc_is_a_case_with_defaults(tmp_path):
    case = run.case_for(DEMO / "quiet.psv", seed=7, components="RT")
    assert case.arc.file == DEMO / "quiet.psv"
    assert (case.sampling.seed, case.thrust.components) == (7, "RT")


@pytest.mark.parametrize(
    ("choice", "words"),
    [
        ({"law": "water-ise"}, "did you mean 'water-ice'?"),
        ({"components": "RX"}, "R, T and N"),
        ({"seed": -1}, "seed = -1"),
    ],
)
def test_a_wrong_choice_beside_the_case_is_told(choice, words):
    with pytest.raises(CaseError) as caught:
        run.case_for(DEMO / "quiet.toml", **choice)
    assert words in str(caught.value)


def test_inspect_tells_what_is_in_the_arc():
    seen = run.inspect_case(DEMO / "quiet.psv")
    told = seen.to_dict()
    assert told["n_records"] == len(ng.read_arc(DEMO / "quiet.psv"))
    assert told["n_nights"] > 50 and told["assigned_errors"]["n"] == told["n_usable"]
    assert "Ember: 317 records" in str(seen)
    json.dumps(told)


def test_inspect_uses_the_offsets_that_a_fit_uses(tmp_path):
    path = tmp_path / "offsets.psv"
    row = "433|CCD|704|2022-01-20T0{}:00:00Z|{}|10.0|5.0|0.2|0.2"
    names = "permID|mode|stn|obsTime|obsCenter|deltaRA|deltaDec|rmsRA|rmsDec"
    rows = [row.format(hour, body) for hour, body in enumerate(("Mars", "Moon", "719"))]
    path.write_text("\n".join(["# version=2022", names, *rows]) + "\n")
    told = run.inspect_case(path).to_dict()
    assert told["n_usable"] == told["assigned_errors"]["n"] == 2
    assert told["set_aside_lines"] == {"an offset from 719, which is not in the ephemeris": (5,)}


def test_fit_reads_the_starting_orbit_of_the_case(quick):
    fits = run.fit_case(quick)
    assert fits.push.components == "R"
    assert "Gravity alone" in str(fits)
    assert fits.to_dict()["comparison"]["delta_dof"] == 1


def test_fan_writes_the_figure_whole(quick, tmp_path):
    drawn = run.fan_case(quick, output=tmp_path / "fan.png")
    assert (tmp_path / "fan.png").read_bytes().startswith(b"\x89PNG")
    assert sorted(path.name for path in tmp_path.iterdir()) == ["fan.png", "quick.toml"]
    assert "fan.png" in str(drawn)


def test_fan_refuses_an_unknown_ending(tmp_path):
    with pytest.raises(CaseError, match="must end in"):
        run.fan_case(DEMO / "quiet.toml", output=tmp_path / "fan.gif")


def test_fan_refuses_a_folder_that_is_not_there(tmp_path):
    with pytest.raises(CaseError, match="no folder"):
        run.fan_case(DEMO / "quiet.toml", output=tmp_path / "absent" / "fan.png")
    assert list(tmp_path.iterdir()) == []


def test_a_mass_needs_a_budget(quick):
    with pytest.raises(CaseError, match="outgassing"):
        run.mass_case(quick)


def test_progress_is_told_on_stderr_only_when_asked(capsys):
    run.inspect_case(DEMO / "quiet.psv", progress=True)
    assert "read the arc" in capsys.readouterr().err
    run.inspect_case(DEMO / "quiet.psv")
    assert capsys.readouterr().err == ""


def test_every_expected_failure_is_of_our_own_tree(tmp_path):
    with pytest.raises(NgboundError):
        run.run_case(tmp_path / "absent.psv", output=tmp_path / "out")
    assert list(tmp_path.iterdir()) == []


def test_the_limit_carries_the_law_to_the_mass(quick):
    bounds = run.limit_case(quick)
    budget = ng.Outgassing(rate=3e26, at=1.25)
    carried = ng.mass_bound(bounds.limit, budget)
    told = ng.mass_bound(bounds.limit, budget, g_at=bounds.fits.push.thrust.g)
    assert carried.mass == told.mass
    assert ng.mass_bound(bounds.posterior, budget).mass.value > 0.0
    with pytest.raises(ng.NgboundError, match="give g_at"):
        ng.mass_bound(1e-9, budget)


def test_limit_under_other_error_models(quick):
    bounds = run.limit_case(quick, vary_errors=True)
    assert bounds.variation is not None
    text = str(bounds)
    assert "Threshold and limit under other error models" in text and "naive" in text
    assert bounds.to_dict()["error_variants"]["table"]
    assert "may be trusted" in text or "not be trusted" in text


@pytest.mark.parametrize("name", ["quiet", "pushed"])
def test_the_demo_arcs_hold_nothing_doubtful(name):
    assert run.inspect_case(DEMO / f"{name}.psv").survey.findings == ()


def with_more(path: Path, text: str) -> Path:
    """The same case with more tables, beside it."""
    other = path.with_name("more.toml")
    other.write_text(path.read_text(encoding="utf-8") + text, encoding="utf-8")
    return other


def test_rates_known_only_as_limits_are_said_to_exclude_no_mass(quick):
    more = '[[outgassing]]\nrate = "< 3e25"\nat = 1.25\n[nucleus]\ndiameter = "2 km"\n'
    weighed = run.mass_case(with_more(quick, more))
    assert weighed.bound is None and weighed.ceiling is None
    (remark,) = weighed.remarks
    assert remark.startswith(
        "No lower bound on the mass: Every rate of the budget is an upper limit"
    )
    assert remark in " ".join(str(weighed).split())
    assert weighed.active[0].is_limit
    # the rate that would have been seen is told all the same, beside the limit
    assert weighed.reach.rows[0].measured == "< 3e25 molecules/s"
    told = weighed.to_dict()
    assert "mass_kg" not in told and told["mass_remarks"] == [remark]
    json.dumps(told, allow_nan=False)
    assert "less than" in weighed._repr_html_()


def test_the_reach_is_asked_for_without_any_budget(quick):
    more = '[reach]\ndiameter = "1 to 2 km"\nspecies = ["H2O", "CO"]\ndensity = 400\n'
    weighed = run.mass_case(with_more(quick, more))
    rows = weighed.reach.rows
    assert [row.species for row in rows] == ["H2O", "CO"]
    # the distance is the arc's least, where the law is strongest
    assert rows[0].at_au == pytest.approx(weighed.bounds.fits.r_au.min())
    assert rows[0].revealed.diameter.median == 1500.0
    assert weighed.reach.density.median == 400.0
    assert "Reach: the outgassing" in str(weighed) and "Mass and size" not in str(weighed)


def test_radiation_pressure_under_another_law_is_fitted_for_itself(quick):
    more = "[reach]\nat = 1.3\n"
    path = with_more(quick, more)
    path.write_text(path.read_text().replace("[thrust]", '[thrust]\nlaw = "water-ice"'))
    weighed = run.mass_case(path)
    assert "from a fit with an inverse-square thrust instead of the law water-ice" in str(weighed)
    plain = run.mass_case(with_more(quick, more))
    assert "instead of the law" not in plain.radiation.sentence()
    # the same question asked of the same arc: linear theory against the posterior
    assert weighed.radiation.acceleration.value == pytest.approx(
        plain.radiation.acceleration.value, rel=0.15
    )


def test_without_a_radial_component_sunlight_is_said_not_to_be_bounded(quick):
    path = with_more(quick, "[reach]\nat = 1.3\n")
    path.write_text(path.read_text().replace('components = "R"', 'components = "N"'))
    weighed = run.mass_case(path)
    assert weighed.radiation is None
    assert "no radial component" in " ".join(str(weighed).split())


def test_a_law_off_where_the_rate_was_measured_costs_the_mass_but_nothing_else(quick):
    bounds = run.limit_case(quick)
    more = "[[outgassing]]\nrate = 3e26\nat = 4.0\n"
    path = with_more(quick, more)
    path.write_text(path.read_text().replace("[thrust]", "[thrust]\nwindow_au = [0.5, 3.0]"))
    windowed = replace(bounds, fits=replace(bounds.fits, case=run.case_for(path)))
    weighed = run.weigh(windowed, run.Steps(False))
    assert weighed.bound is None and weighed.reach is None
    assert any("g = 0 at 4 au" in remark for remark in weighed.remarks)
    assert weighed.active and weighed.radiation is not None


def test_rates_that_do_not_follow_the_law_are_warned_about_in_the_report(quick):
    more = "".join(f'[[outgassing]]\nrate = "(4.0 +- 0.2)e26"\nat = {at}\n' for at in (1.25, 2.5))
    bounds = run.limit_case(quick)
    case = run.case_for(with_more(quick, more))
    with pytest.warns(NgboundWarning), run.hear_warnings() as heard:
        weighed = run.weigh(replace(bounds, fits=replace(bounds.fits, case=case)), run.Steps(False))
    (told,) = [text for text in heard if "do not follow the thrust law" in text]
    assert "H2O: force / g(r) at 2.5 au" in told
    assert "rates against the thrust law: H2O: force / g(r) at 2.5 au" in " ".join(
        str(weighed).split()
    )
    record = {**weighed.found(), "warnings": heard}
    assert told in " ".join(render_report(record).split())
