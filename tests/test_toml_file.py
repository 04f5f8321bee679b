"""Every fault of a TOML file is one sentence with its place, what is allowed, and the remedy."""

import pytest

from ngbound.case import case_for, read_case
from ngbound.errors import CaseError
from ngbound.simulate import Recipe
from ngbound.toml_file import read_toml, shown

ARC = '[arc]\nfile = "a.psv"\n'

FAULTS = [
    ("arc = 3", "line 1: arc = 3 is not allowed; it must be a table."),
    ('[arc]\nfil = "a"', "line 2: [arc] has no key 'fil'; did you mean 'file'? (1 more: "),
    ("[arc]", "line 1: [arc] file is missing; give a path in quotes, ADES PSV, "),
    (
        ARC + '[detection]\npower = "0.9"',
        'power = "0.9" is not allowed; it must be a number above 0',
    ),
    (ARC + "[detection]\npower = true", "power = true is not allowed"),
    (ARC + "[detection]\npower = nan", "power = nan is not allowed"),
    (ARC + "[detection]\npower = [1]", "power = [1] is not allowed"),
    (ARC + "[sampling]\nseed = 1.5", "must be a whole number of at least 0, or left out for the "),
    (ARC + '[errors]\nscheme = "foo"', "line 4: in [errors], the error model's scheme = 'foo'"),
    (ARC + '[forces]\nrelativity = "sum"', 'it must be one of "sun", "all" or "none", or left out'),
    (ARC + '[forces]\nexclude = "Ceres"', "it must be a list of texts in quotes"),
    (ARC + '[forces]\nexclude = ["Cerus"]', "line 4: in [forces], "),
    (ARC + '[forces]\nsun_j2 = "yes"', "it must be true or false"),
    (ARC + '[thrust]\nlaw = "water"', "did you mean 'water-ice'?"),
    (ARC + '[thrust]\nlaw = "qqqqq"', "known are inverse-square, water-ice, "),
    (ARC + '[thrust]\ncomponents = "RX"', "line 4: in [thrust], the thrust components 'RX'"),
    (ARC + '[thrust]\nwindow_au = [3, "a"]', 'window_au = [3, "a"] is not allowed'),
    (ARC + "[injection]\nshares = []", "a list of one or more numbers of at least 0"),
    (ARC + '[injection]\ndirection = "wrost"', "did you mean 'worst'?"),
    (ARC + '[[planned]]\nutc = "soon"', "line 4: in [[planned]], the time 'soon' cannot be read"),
    (ARC + '[[planned]]\nutc = 2024-07-01\nstation = "ZZZ"', "in [[planned]], station 'ZZZ'"),
    (ARC + "[planned]\nutc = 2024-07-01", "it must be an array of tables."),
    (ARC + "[[outgassing]]\nrate = 1e26", "[[outgassing]] at is missing; give a number, a text in"),
    (ARC + "[orbit]\nepoch = 2031-01-01\nposition_au = [1, 2]\n", "it must be a list of 3 numbers"),
    (ARC + "[arc.stations.ZZ1]\nlongitude_deg = 400", "at least -180 and at most 360"),
    ('[arc]\nfile = "a', "line 2, column 10: this is not TOML: "),
    ("[arc\nfile = 1", "line 1, column 5: this is not TOML: "),
    ("nonsense", "this is not TOML: "),
    (ARC + "x = {a = 1", "this is not TOML: "),
]


@pytest.mark.parametrize(("text", "said"), FAULTS, ids=[text[-28:] for text, _ in FAULTS])
def test_a_fault_is_one_sentence_with_place_and_remedy(tmp_path, text, said):
    path = tmp_path / "my.toml"
    path.write_text(text + "\n", encoding="utf-8")
    with pytest.raises(CaseError) as caught:
        read_case(path)
    message = str(caught.value)
    assert said in message
    assert message.startswith(f"{path}, line ")
    assert message.endswith((".", "?", ")"))
    for jargon in (
        "?.",
        "..",
        "\n",
        "Input",
        "should",
        "valid ",
        "{'",
        "None",
        "pydantic",
        "Error",
    ):
        assert jargon not in message.replace(str(path), "")


def test_a_misspelt_key_comes_before_the_one_that_is_missed_for_it(tmp_path):
    path = tmp_path / "recipe.toml"
    path.write_text('[object]\nname = "X"\n[shedule]\nfirst = 2024-01-01\n', encoding="utf-8")
    with pytest.raises(CaseError, match="there is no table 'shedule'; did you mean 'schedule'?"):
        read_toml(path, Recipe)


def test_a_date_may_stand_without_quotes_and_a_mark_of_order_is_skipped(tmp_path):
    path = tmp_path / "my.toml"
    path.write_text(
        "\ufeff" + ARC + "[[planned]]\nutc = 2024-07-01T00:00:00+02:00\n", encoding="utf-8"
    )
    assert read_case(path).planned[0].utc == "2024-06-30T22:00:00Z"


def test_a_choice_beside_the_case_is_held_to_the_same_rules(tmp_path):
    path = tmp_path / "my.toml"
    path.write_text(ARC, encoding="utf-8")
    with pytest.raises(CaseError, match=r"with --law watr: \[thrust\] law = .*'water-ice'\?$"):
        case_for(path, law="watr")
    assert case_for(path, law="water-ice", seed=7).sampling.seed == 7


def test_an_arc_without_a_case_is_told_what_it_gets(tmp_path):
    arc = tmp_path / "my.psv"
    assert "every choice has its default" in case_for(arc).notice
    assert "the thrust law water-ice" in case_for(arc, law="water-ice").notice
    assert "beside it" not in case_for(arc).notice
    (tmp_path / "my.toml").write_text(ARC, encoding="utf-8")
    assert "my.toml beside it may choose otherwise" in case_for(arc).notice
    assert case_for(tmp_path / "my.toml").notice == ""


def test_values_are_shown_as_toml_writes_them():
    assert shown([True, "x", {"a": 1}]) == '[true, "x", {a = 1}]'
    assert shown("y" * 100).endswith("...")
