"""Reconciling quoted numbers: values that can be worked out by hand, and refusals."""

import json
import math

import pytest
from scipy.stats import chi2

from ngbound.errors import CaseError, MassError, NgboundError
from ngbound.mass import reconcile

EARLY = {
    "name": "early",
    "threshold": "2.0e-9 au/d2",
    "component": "R",
    "r_au": [3.0],
    "dates": ["2031-01-01", "2031-04-01"],
}
LATE = {
    "name": "late",
    "A": "(1.0 +- 0.1)e-8 au/d2",
    "component": "R",
    "r_au": [1.5],
    "dates": ["2031-09-01", "2031-12-01"],
}


def test_tension_of_two_estimates_is_the_usual_chi2():
    found = reconcile(
        {**LATE, "name": "a", "A": "(1.0 +- 0.3)e-8"}, {**LATE, "name": "b", "A": "(2.2 +- 0.4)e-8"}
    )
    # (1.2 / 0.5)^2 with one degree of freedom
    assert found.chi2 == pytest.approx(5.76, rel=1e-9) and found.dof == 1
    assert found.probability == pytest.approx(float(chi2.sf(5.76, 1)), rel=1e-9)
    assert found.pair == ("a", "b")


def test_results_that_agree_need_no_explanation():
    found = reconcile(LATE, {**LATE, "name": "again", "A": "(1.1 +- 0.2)e-8"})
    assert "chance" in found.possible and "nothing needs explaining" in str(found)


def test_exponent_needed_for_a_non_detection_farther_out():
    found = reconcile(EARLY, LATE)
    assert "chance" in found.excluded
    # sigma = 2e-9 / 4.645; an estimate within 3 sigma was no detection. With r^-n the thrust at
    # 3 au shrinks by 2^-(n-2): 1e-8 less 1.96 of the joint error must come under the edge.
    sigma = 2.0e-9 / 4.6448
    exponents = found["law"].needed["exponents"]
    largest = (1e-8 * 2 ** -(exponents[0] - 2.0) - 3.0 * sigma) / math.hypot(
        sigma, 1e-9 * 2 ** -(exponents[0] - 2.0)
    )
    assert largest == pytest.approx(1.96, abs=0.6)  # the grid has steps of 0.25 in n
    assert found.verdict("law") == "possible" and "water-ice" in found["law"].needed["named_laws"]


def gas(result: dict, rate: str, r_au: float) -> dict:
    return {**result, "outgassing": {"rate": rate, "at": r_au}}


def test_upper_limits_of_the_rate_speak_on_one_side_only():
    late = gas(LATE, "(1.0 +- 0.1)e27", 1.5)
    # a tenth of the rate, at most, twice as far out, at 0.85 km/s r^-0.5: n of log2(10) + 0.5 or
    # more. At 1.96 sigma of the limit, itself 1.645 sigma, and with the error of the rate a little
    # less
    far = reconcile(gas(EARLY, "< 1.0e26", 3.0), late)["law"]
    low, high = far.needed["exponents_of_rates"]
    edge = math.log2(10 * 1.645 / 1.96) + 0.5
    assert edge - 0.5 < low <= edge + 0.25 and high == 30.0
    assert "1 of them upper limit," in far.sentence and "or more" in far.sentence
    assert far.needed["exponents"][0] >= low
    # the same limit half as far out allows any steepness below
    near = reconcile(gas({**EARLY, "r_au": [0.75]}, "< 1.0e28", 0.75), late)["law"]
    low, high = near.needed["exponents_of_rates"]
    assert low == -2.0 and math.log2(10) < high < math.log2(10) + 1.25
    loose = reconcile(gas(EARLY, "< 1.0e30", 3.0), late)["law"]
    assert "any size" in loose.sentence


def test_measured_rates_can_exclude_the_law_that_the_thrust_asks_for():
    # the thrust asks for n of 4 or more, the rates for 2.5 +- 0.2
    early, late = gas(EARLY, "(2.5 +- 0.2)e26", 3.0), gas(LATE, "(1.0 +- 0.1)e27", 1.5)
    alone, both = reconcile(EARLY, LATE)["law"], reconcile(early, late)["law"]
    assert alone.verdict == "possible" and alone.needed["exponents_of_rates"] is None
    assert both.verdict == "excluded", both
    assert both.needed["exponents_of_rates"] == pytest.approx([2.5, 2.5], abs=0.6)


def test_the_law_must_fit_all_results():
    # a third result at the distance of the second, half as strong, fits no law
    third = {**LATE, "name": "third", "A": "(0.5 +- 0.02)e-8"}
    strong = {**LATE, "A": "(1.0 +- 0.02)e-8"}
    assert reconcile(EARLY, strong).verdict("law") == "possible"
    found = reconcile(EARLY, strong, third)
    assert found.verdict("law") == "excluded" and "all 3" in found["law"].sentence


def test_explanations_are_ranked_and_ties_are_told():
    found = reconcile(EARLY, LATE)
    order = ["possible", "strained", "excluded", "not testable"]
    verdicts = [order.index(e.verdict) for e in found.explanations]
    assert verdicts == sorted(verdicts)
    for verdict in order:
        chances = [e.probability or 0.0 for e in found.explanations if e.verdict == verdict]
        assert chances == sorted(chances, reverse=True)
    assert len(found.tied) > 1 and set(found.tied) <= set(found.possible)
    assert "cannot be told apart" in str(found)
    best = min(e.chi2 for e in found.explanations if e.key in found.possible)
    for key in found.possible:
        assert (key in found.tied) == (found[key].chi2 <= best + chi2.isf(0.05, 1))
    alone = reconcile(LATE, {**LATE, "name": "again", "A": "(1.1 +- 0.2)e-8"})
    assert "chance" in alone.tied


def test_onset_lies_between_the_two():
    found = reconcile(EARLY, LATE)
    low, high = found["onset-distance"].needed["onset_au"]
    assert 1.5 < low < 1.55 and 2.9 < high < 3.0
    first, last = found["date"].needed["dates"]
    assert "2031-03" <= first <= "2031-04" and "2031-09" <= last <= "2031-11"


def test_a_measured_rate_speaks_against_an_onset():
    active = {**EARLY, "outgassing": {"rate": "(1.0 +- 0.1)e27", "at": 3.0}}
    found = reconcile(active, LATE)
    assert found.verdict("onset-distance") == "excluded"
    assert "3 au" in found["onset-distance"].sentence
    assert found.verdict("date") == "strained"


def test_direction_hidden_from_one_component():
    # a limit on the radial part alone: |cos| < A_lim / A is a tenth of the sphere, blurred by noise
    limit = {**EARLY, "threshold": "1.0e-9", "r_au": [1.5]}
    found = reconcile(
        limit, {**LATE, "A": {"R": "(1.0 +- 0.02)e-8", "T": "(0 +- 2)e-10", "N": "(0 +- 2)e-10"}}
    )
    # P[missed] = E[Phi((3 sigma - A cos) / sigma) ...]: mean edge 3 / 4.645 of the threshold
    assert found["rotated"].needed["missed_fraction"] == pytest.approx(0.3 / 4.645, abs=0.006)
    assert found.verdict("rotated") == "possible"


def test_mass_change_against_the_rocket_equation():
    gas = {"rate": "1.0e27", "speed": "500 m/s", "collimation": 0.5, "at": 1.5}
    found = reconcile(
        {**LATE, "name": "before", "A": "(1.0 +- 0.02)e-8", "dates": ["2030-09-01", "2030-12-01"]},
        {**LATE, "A": "(2.0 +- 0.02)e-8", "outgassing": gas},
    )
    mass = found["mass"]
    # half of the mass in 365 d; A g t = 2e-8 au/d2 / 2.25 x 365 d = 5.62 m/s over 250 m/s
    assert mass.needed["log_mass_ratio_needed"] == pytest.approx(math.log(2), abs=0.06)
    assert mass.needed["log_mass_ratio_available"] == pytest.approx(5.617 / 250, rel=0.01)
    assert mass.verdict == "excluded"
    assert found.verdict("law") == "excluded"
    assert (
        "grow"
        in reconcile(
            {**LATE, "A": "(1.0 +- 0.02)e-8"},
            {
                **LATE,
                "name": "before",
                "A": "(2.0 +- 0.02)e-8",
                "dates": ["2030-09-01", "2030-12-01"],
            },
        )["mass"].sentence
    )


def test_measured_production_decides():
    def with_rate(result: dict, rate: str) -> dict:
        return {**result, "outgassing": {"rate": rate, "at": 1.5, "speed": "0.7 km/s"}}

    before = {**LATE, "name": "before", "A": "(1.0 +- 0.05)e-8"}
    after = {**LATE, "A": "(2.0 +- 0.05)e-8", "dates": ["2033-01-01", "2033-03-01"]}
    same = reconcile(with_rate(before, "(1.0 +- 0.05)e27"), with_rate(after, "(1.0 +- 0.05)e27"))
    assert same.verdict("production") == "strained"  # within twice, outside its interval
    double = reconcile(with_rate(before, "(1.0 +- 0.1)e27"), with_rate(after, "(2.0 +- 0.2)e27"))
    assert double.verdict("production") == "possible"
    low, high = double["production"].needed["measured_ratio"]
    # the shared collimation and speed cancel: 0.5 within the errors of the rates alone
    assert 0.35 < low < 0.45 and 0.57 < high < 0.68


def test_density_that_makes_mass_and_size_agree():
    found = reconcile(
        {**LATE, "name": "thrust", "mass": "2.0e11 kg"},
        {**LATE, "name": "light", "A": "(1.1 +- 0.1)e-8", "diameter": "800 m"},
    )
    # 2e11 kg in a sphere of 800 m: 746 kg/m3
    low, high = found["density"].needed["density_kg_m3"]
    assert low == pytest.approx(746, rel=0.01) and high == pytest.approx(746, rel=0.01)
    assert found.verdict("density") == "possible"


@pytest.mark.parametrize(
    ("mass", "diameter", "edges", "verdict", "words"),
    [
        # 2e11 kg in a sphere of 800 m: 746 kg/m3; of 300 m: 14147 kg/m3; of 2 km: 47.7 kg/m3
        ("> 2.0e11 kg", "800 m", (746, None), "possible", "need above 746 kg/m3"),
        ("< 2.0e11 kg", "800 m", (0, 746), "possible", "need below 746 kg/m3"),
        ("2.0e11 kg", "< 800 m", (746, None), "possible", "need above 746 kg/m3"),
        ("2.0e11 kg", "> 800 m", (0, 746), "possible", "need below 746 kg/m3"),
        ("> 2.0e11 kg", "< 300 m", (14147, None), "excluded", "need above"),
        ("2.0e11 kg", "≥ 2 km", (0, 47.7), "excluded", "need below"),
        ("< 2.0e11 kg", "< 800 m", (0, None), "possible", "leave it open"),
        ({"limit": 2.0e11, "unit": "kg"}, "800 m", (0, 746), "possible", "need below"),
    ],
)
def test_bounds_on_mass_and_size_bound_the_density_on_one_side(
    mass, diameter, edges, verdict, words
):
    found = reconcile(
        {**LATE, "name": "heavy", "mass": mass},
        {**LATE, "name": "seen", "A": "(1.1 +- 0.1)e-8", "diameter": diameter},
    )
    low, high = found["density"].needed["density_kg_m3"]
    assert low == pytest.approx(edges[0], rel=0.01)
    assert high == (edges[1] if edges[1] is None else pytest.approx(edges[1], rel=0.01))
    assert found.verdict("density") == verdict and words in found["density"].sentence
    json.dumps(found.to_dict(), allow_nan=False)


def test_three_results_name_the_worst_pair():
    found = reconcile(EARLY, LATE, {**LATE, "name": "third", "A": "(1.2 +- 0.2)e-8"})
    assert found.dof == 2 and found.pair == ("early", "late")


def test_the_table():
    found = reconcile(EARLY, LATE)
    table = found.to_frame()
    assert table.loc["law", "verdict"] == "possible"
    assert list(table.index) == [e.key for e in found.explanations]
    assert "<table" in found._repr_html_() and "Where the published" in found._repr_html_()


def test_file_with_results(tmp_path):
    path = tmp_path / "results.toml"
    path.write_text(
        """
level = 0.9

[[result]]
name = "early"
upper_limit = "2.0e-9 au/d2"
component = "R"
r_au = [3.4, 2.9]
dates = ["2031-01-01", "2031-04-01"]

[[result]]
name = "late"
A = "(2.0 +- 0.2)e-7 m/s2"
component = "R"
r_au = [1.6, 1.4]
""",
        encoding="utf-8",
    )
    found = reconcile(path)
    assert found.level == 0.9
    assert found.verdict("date") == "not testable"
    assert "taken as zero" in str(found)
    json.dumps(found.to_dict(), allow_nan=False)


@pytest.mark.parametrize(
    ("results", "words"),
    [
        ((LATE,), "at least two"),
        ((LATE, {**LATE, "A": "1e-8"}), "A = \"1e-8\" of 'late' has no error; write for instance"),
        ((LATE, {**LATE, "r_au": []}), "it needs r_au"),
        ((LATE, {**LATE, "r_au": [0.0]}), "r_au = [0.0] is not allowed; it must be a list of"),
        ((LATE, {**LATE, "threshold": 1e-9}), "exactly one of file, A, upper_limit and threshold"),
        ((LATE, {**LATE, "componentt": "R"}), "no key 'componentt'; did you mean 'component'?"),
        ((LATE, {**LATE, "A": "(1.0 +- 0.1) kg"}), "the unit 'kg', which is none of an accel"),
        ((LATE, {**LATE, "A": {"R": "1 +- 1", "X": "2 +- 1"}}), "no component 'X'; there are"),
        ((LATE, {**LATE, "dates": ["2031-09-01", "2030-09-01"]}), "run backwards; swap them."),
        ((LATE, {**LATE, "sided": 3}), "sided = 3 is not allowed; it must be one of 1 or 2"),
        ((LATE, 5), "give fits"),
        (("nowhere.toml",), "cannot be read"),
    ],
)
def test_refusals(results, words):
    with pytest.raises(CaseError) as caught:
        reconcile(*results)
    said = str(caught.value)
    assert words in said
    for jargon in ("?.", "..", "Input should", "Value error", "validation"):
        assert jargon not in said, said


def test_faults_of_a_file_name_file_table_and_key(tmp_path):
    head = '[[result]]\nname = "a"\nA = "(1.0 +- 0.1)e-8"\nr_au = [1.5]\n'
    path = tmp_path / "results.toml"
    for text, words in (
        (head, f"{path}: reconciling needs at least two [[result]] tables; add the other one."),
        (head + '[[result]]\nname = "b"\n', f"{path}, line 5: in [[result]], it must hold exactly"),
        (
            head + '[[result]]\nname = "b"\nupper_limit = "1e-9"\nr_au = [1]\nmass = "5 m"\n',
            f"{path}, [[result]] 'b': mass has the unit 'm', which is no unit of it; use for",
        ),
    ):
        path.write_text(text, encoding="utf-8")
        with pytest.raises(CaseError) as caught:
            reconcile(path)
        assert words in str(caught.value) and "more:" not in str(caught.value)


def test_no_common_axis():
    with pytest.raises(MassError, match="common axis"):
        reconcile(LATE, {**LATE, "component": "N"})


def test_errors_are_of_the_family():
    with pytest.raises(NgboundError):
        reconcile({"name": "empty"}, LATE)
