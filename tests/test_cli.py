"""The command line: statuses, one sentence on stderr, JSON, and no traceback ever."""

import json
import re
from dataclasses import dataclass
from pathlib import Path

import pytest
from click.testing import CliRunner

import ngbound as ng
from ngbound import cli
from ngbound.errors import CaseError, FitError, NgboundWarning

VERBS = [
    "audit",
    "fan",
    "fit",
    "forecast",
    "inject",
    "inspect",
    "limit",
    "mass",
    "reconcile",
    "run",
    "simulate",
    "sweep",
]
FUNCTIONS = {verb: f"{verb}_case" for verb in VERBS} | {
    "audit": "audit",
    "reconcile": "reconcile",
    "simulate": "simulate_arc",
    "sweep": "sweep_cases",
}
HEADER = "# version=2022\n"
COLUMNS = "trkSub|mode|stn|obsTime|ra|dec|astCat\n"
ROW = "Ember|CCD|{stn}|{time}|{ra}|12.5|Gaia3\n"


@dataclass
class Printed:
    """What a verb's function returns in these tests."""

    text: str = "all is well"

    n_failed = 0

    def __str__(self) -> str:
        return self.text

    def to_dict(self):
        return {"text": self.text, "absent": float("nan"), "rows": [1.0, float("inf")]}


@pytest.fixture
def ngbound():
    def invoke(*arguments: object):
        return CliRunner().invoke(cli.main, [str(argument) for argument in arguments])

    return invoke


def told(result, status: int) -> str:
    """The sentence on stderr, after the checks that hold for every failure."""
    assert result.exit_code == status, result.output
    assert result.stdout == ""
    assert "Traceback" not in result.stderr
    lines = [line for line in result.stderr.splitlines() if "warning" not in line]
    assert len(lines) == 1, result.stderr
    assert lines[0].startswith("ngbound: ")
    return lines[0]


def rows(n: int, **changes: str) -> str:
    return "".join(
        ROW.format(
            **(
                {"stn": "500", "time": f"2024-01-{day + 1:02d}T01:02:03Z", "ra": f"{100 + day}.5"}
                | changes
            )
        )
        for day in range(n)
    )


def test_the_group_lists_every_verb(ngbound):
    result = ngbound("--help")
    assert result.exit_code == 0
    assert "..." not in result.stdout.split("Commands:")[1]
    assert sorted(cli.main.commands) == VERBS
    for verb in VERBS:
        assert f"  {verb} " in result.stdout


def test_the_readme_lists_every_verb_and_its_case_can_be_read(tmp_path):
    text = (Path(__file__).parents[1] / "README.md").read_text(encoding="utf-8")
    assert sorted(set(re.findall(r"^\| `ngbound (\w+) ", text, re.MULTILINE))) == VERBS
    case = tmp_path / "readme.toml"
    case.write_text(re.findall(r"```toml\n(.*?)```", text, re.DOTALL)[0], encoding="utf-8")
    assert ng.read_case(case).budget() is not None


@pytest.mark.parametrize("verb", VERBS)
def test_every_verb_has_help_with_an_example(ngbound, verb):
    result = ngbound(verb, "--help")
    assert result.exit_code == 0
    assert f"Example: ngbound {verb} " in result.stdout
    assert "--json" in result.stdout


@pytest.mark.parametrize("verb", VERBS)
def test_every_verb_prints_what_its_one_function_returns(ngbound, monkeypatch, verb):
    monkeypatch.setattr(ng, FUNCTIONS[verb], lambda path, **options: Printed(), raising=False)
    plain = ngbound(verb, "x.toml")
    assert (plain.exit_code, plain.stdout) == (0, "all is well\n")
    asked = ngbound(verb, "x.toml", "--json")
    assert json.loads(asked.stdout) == {"text": "all is well", "absent": None, "rows": [1.0, None]}


def test_options_reach_the_function(ngbound, monkeypatch):
    seen = {}
    monkeypatch.setattr(
        ng, "run_case", lambda path, **options: seen.update(path=path, **options) or Printed()
    )
    ngbound("run", "x.toml", "-o", "here", "--seed", "3", "--law", "water-ice", "--no-progress")
    assert seen["path"] == Path("x.toml")
    assert (seen["output"], seen["seed"], seen["law"]) == (Path("here"), 3, "water-ice")
    assert seen["progress"] is False


@pytest.mark.parametrize(
    ("error", "status", "word"),
    [
        (CaseError("The case is wrong."), 2, "The case is wrong."),
        (FitError("The fit failed."), 1, "The fit failed."),
        (PermissionError(13, "Permission denied", "/out/record.json"), 1, "/out/record.json"),
        (OSError(28, "No space left on device"), 1, "No space left on device"),
        (MemoryError(), 1, "memory"),
        (KeyboardInterrupt(), 130, "Interrupted"),
    ],
)
def test_failures_are_one_sentence_and_a_status(ngbound, monkeypatch, error, status, word):
    def fail(path, **options):
        raise error

    monkeypatch.setattr(ng, "run_case", fail, raising=False)
    assert word in told(ngbound("run", "x.toml"), status)


def test_a_bug_is_not_dressed_up_as_a_user_error(ngbound, monkeypatch):
    def fail(path, **options):
        raise ZeroDivisionError

    monkeypatch.setattr(ng, "run_case", fail, raising=False)
    assert isinstance(ngbound("run", "x.toml").exception, ZeroDivisionError)


def test_warnings_of_ngbound_are_sentences(ngbound, monkeypatch):
    def warn(path, **options):
        cli.warnings.warn("Two records are alike.", NgboundWarning, stacklevel=1)
        return Printed()

    monkeypatch.setattr(ng, "inspect_case", warn, raising=False)
    result = ngbound("inspect", "x.psv")
    assert result.stderr == "ngbound: warning: Two records are alike.\n"
    assert result.stdout == "all is well\n"


@pytest.mark.parametrize(
    "arguments", [["run"], ["run", "a", "b"], ["runn"], ["run", "--what", "a"]]
)
def test_wrong_usage_is_status_2(ngbound, arguments):
    assert "--help." in told(ngbound(*arguments), 2)


@pytest.mark.parametrize(
    ("verb", "hint"),
    [
        ("fit", "begins anew"),
        ("run", "--checkpoint"),
        ("limit", "--checkpoint"),
        ("inject", "--checkpoint"),
        ("sweep", "that have no record yet"),
    ],
)
def test_an_interruption_says_how_to_go_on(ngbound, monkeypatch, verb, hint):
    def stop(path, **options):
        raise KeyboardInterrupt

    monkeypatch.setattr(ng, FUNCTIONS[verb], stop, raising=False)
    assert hint in told(ngbound(verb, "x.toml"), cli.INTERRUPTED)


BAD_ARCS = {
    "a missing column": (
        HEADER + COLUMNS.replace("|dec", "") + "Ember|CCD|500|2024-01-01T00:00:00Z|100.5|Gaia3\n",
        2,
        "dec",
    ),
    "an unknown station": (HEADER + COLUMNS + rows(9, stn="ZQ9"), 2, "ZQ9"),
    "a date out of the ephemeris": (
        HEADER + COLUMNS + rows(9, time="0001-01-01T00:00:00Z"),
        1,
        "1550 to 2650",
    ),
    "an arc of two observations": (HEADER + COLUMNS + rows(2), 1, "two|2"),
    "an empty file": ("", 2, "empty"),
    "a binary file": (bytes(range(256)).decode("latin1"), 2, ""),
}


@pytest.mark.parametrize("what", BAD_ARCS)
def test_bad_arcs_end_in_a_sentence_and_nothing_is_written(ngbound, tmp_path, what):
    content, status, words = BAD_ARCS[what]
    arc = tmp_path / "arc.psv"
    arc.write_bytes(content.encode("latin1"))
    case = tmp_path / "case.toml"
    case.write_text('[arc]\nfile = "arc.psv"\n[output]\nfolder = "results"\n')
    result = ngbound("run", case)
    sentence = told(result, status or result.exit_code)
    assert result.exit_code in (1, 2)
    assert any(word in sentence for word in words.split("|"))
    assert sorted(tmp_path.iterdir()) == [arc, case]


@pytest.mark.parametrize("verb", ["run", "inspect", "fit", "limit", "mass", "fan", "simulate"])
def test_a_folder_or_a_missing_file_ends_in_a_sentence(ngbound, tmp_path, verb):
    before = sorted(Path().iterdir())
    for name in (tmp_path, tmp_path / "absent.psv", tmp_path / "absent.toml"):
        told(ngbound(verb, name), 2)
    assert list(tmp_path.iterdir()) == []
    assert sorted(Path().iterdir()) == before


def test_a_misspelt_key_ends_in_a_sentence_and_nothing_is_written(ngbound, tmp_path):
    case = tmp_path / "case.toml"
    case.write_text('[arc]\nfile = "arc.psv"\n[detection]\nfalse_alarms = 0.01\n')
    assert "did you mean 'false_alarm'?" in told(ngbound("run", case), 2)
    assert list(tmp_path.iterdir()) == [case]
