"""The verbs inject, forecast, audit and reconcile: one call each, text and JSON, wrong input."""

import json
from pathlib import Path

import pytest
from click.testing import CliRunner

from ngbound.cli import main

DEMO = Path(__file__).parent.parent / "data_demo"
CASE = f"""[arc]
file = "{DEMO / "quiet.psv"}"

[thrust]
components = "R"

[injection]
arcs = 40
direction = "R"
shares = [0.0, 2.0]
"""
PLANNED = """
[[planned]]
utc = "2024-07-01T00:00:00"

[[planned]]
utc = "2024-09-01T00:00:00"
n = 6
"""
PAPER = """title = "An invented paper"

[numbers]
mass = "1.0e10 kg"
density = 500.0
diameter = "337 m"
"""
RESULTS = """
[[result]]
name = "early arc"
A = "(0.0 +- 1.0)e-9 au/d2"
component = "R"
r_au = [2.0, 1.5, 1.2]

[[result]]
name = "late arc"
A = "(9.0 +- 1.0)e-9 au/d2"
component = "R"
r_au = [1.2, 1.0, 1.1]
"""


def call(*words: str) -> tuple[int, str, str]:
    done = CliRunner().invoke(main, list(words))
    return done.exit_code, done.stdout, done.stderr


def test_inject_counts_what_is_found(tmp_path: Path) -> None:
    case = tmp_path / "case.toml"
    case.write_text(CASE)
    status, text, _ = call("inject", str(case), "--json", "--checkpoint", str(tmp_path / "counts"))
    assert status == 0
    told = json.loads(text)
    assert told["object"] == "Ember"
    again = json.loads(
        call("inject", str(case), "--json", "--checkpoint", str(tmp_path / "counts"))[1]
    )
    assert again == told
    assert "Power of the test of R" in call("inject", str(case))[1]


def test_forecast_needs_planned_nights_and_uses_them(tmp_path: Path) -> None:
    case = tmp_path / "case.toml"
    case.write_text(CASE)
    status, _, complaint = call("forecast", str(case))
    assert status == 2 and "[[planned]]" in complaint
    case.write_text(CASE + PLANNED)
    status, text, _ = call("forecast", str(case))
    assert status == 0 and "falls from" in text and "in any direction" not in text
    text = call("forecast", str(case), "--acceleration", "1e-3")[1]
    assert "A thrust of 0.00100 au/d2 is above the threshold in any direction already" in text
    told = json.loads(call("forecast", str(case), "--acceleration", "1e-20", "--json")[1])
    assert told["acceleration_au_d2"] == 1e-20 and told["detectable_from"] is None
    assert call("forecast", str(case), "--acceleration", "0")[0] == 2


def test_audit_of_quoted_numbers(tmp_path: Path) -> None:
    paper = tmp_path / "paper.toml"
    paper.write_text(PAPER)
    status, text, _ = call("audit", str(paper))
    assert status == 0 and "sound" in text
    paper.write_text(PAPER.replace("337 m", "168 m"))
    status, text, _ = call("audit", str(paper), "--json")
    assert status == 0 and "slip" in text


def test_reconcile_of_two_results(tmp_path: Path) -> None:
    paper = tmp_path / "results.toml"
    paper.write_text(RESULTS)
    status, text, complaint = call("reconcile", str(paper))
    assert status == 0, complaint
    assert "early arc" in text and "late arc" in text


@pytest.mark.parametrize("verb", ["audit", "reconcile"])
def test_desk_refuses_what_it_cannot_read(verb: str, tmp_path: Path) -> None:
    status, _, complaint = call(verb, str(tmp_path / "absent.toml"))
    assert status == 2 and complaint.startswith("ngbound: ")
    wrong = tmp_path / "wrong.toml"
    wrong.write_text("[numbrs]\n")
    status, _, complaint = call(verb, str(wrong))
    assert status == 2 and "Traceback" not in complaint


@pytest.mark.parametrize(
    ("verb", "file", "words"),
    [
        ("audit", "desk/audit.toml", "sound"),
        ("reconcile", "desk/reconcile.toml", "must be explained"),
        ("forecast", "forecast.toml", "falls from"),
    ],
)
def test_files_of_the_demo(verb: str, file: str, words: str) -> None:
    status, text, complaint = call(verb, str(DEMO / file))
    assert status == 0, complaint
    assert words in text
