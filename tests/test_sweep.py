"""Many cases in one call: results, failures, records that stand, and shares of the work."""

from pathlib import Path

import pandas as pd
import pytest
from click.testing import CliRunner

import ngbound as ng
from ngbound.cli import main
from ngbound.errors import CaseError

DEMO = Path(__file__).parent.parent / "data_demo"
CASE = """[arc]
file = "{arc}"

[sampling]
effective_samples = 200

[output]
folder = "{folder}"
"""


def write_case(folder: Path, name: str, arc: Path) -> Path:
    path = folder / f"{name}.toml"
    path.write_text(CASE.format(arc=arc, folder=f"out_{name}"))
    return path


@pytest.fixture
def cases(tmp_path: Path) -> Path:
    write_case(tmp_path, "quiet", DEMO / "quiet.psv")
    write_case(tmp_path, "wrong", DEMO / "README.md")
    (tmp_path / "recipe.toml").write_text("[object]\nname = 'no case'\n")
    return tmp_path


def test_sweep_runs_what_it_can_and_keeps_what_stands(cases: Path) -> None:
    first = ng.sweep_cases([cases], workers=1, table=cases / "results.csv")
    by_case = first.table.set_index("case")
    assert list(by_case["status"]) == ["done", "failed"]
    assert by_case.loc["quiet.toml", "verdict"] == "non-detection"
    assert by_case.loc["quiet.toml", "limit_au_d2"] > 0
    assert "README.md" in by_case.loc["wrong.toml", "problem"]
    assert first.n_failed == 1 and "README.md" in str(first)
    assert pd.read_csv(cases / "results.csv").shape[0] == 2
    assert Path(by_case.loc["quiet.toml", "record"]).is_file()
    again = ng.sweep_cases([cases / "quiet.toml"])
    assert list(again.table["status"]) == ["kept"]
    assert again.table["limit_au_d2"][0] == pytest.approx(by_case.loc["quiet.toml", "limit_au_d2"])
    text = (cases / "quiet.toml").read_text()
    (cases / "quiet.toml").write_text(text.replace("200", "201"))
    assert ng.sweep_cases([cases / "quiet.toml"]).table["status"][0] == "done"


def test_parts_share_out_the_cases(tmp_path: Path) -> None:
    for i in range(3):
        write_case(tmp_path, f"case{i}", DEMO / "README.md")
    parts = [ng.sweep_cases([tmp_path], workers=1, part=f"{i}/2").table["case"] for i in (1, 2)]
    assert [len(part) for part in parts] == [2, 1]
    assert sorted([*parts[0], *parts[1]]) == ["case0.toml", "case1.toml", "case2.toml"]


def test_wrong_requests_are_refused(tmp_path: Path) -> None:
    with pytest.raises(CaseError, match="No case file"):
        ng.sweep_cases([tmp_path])
    with pytest.raises(CaseError, match="no case file or folder"):
        ng.sweep_cases([tmp_path / "absent"])
    write_case(tmp_path, "one", DEMO / "quiet.psv")
    with pytest.raises(CaseError, match="2/8"):
        ng.sweep_cases([tmp_path], part="3/2")
    (tmp_path / "two.toml").write_text((tmp_path / "one.toml").read_text())
    with pytest.raises(CaseError, match="same folder"):
        ng.sweep_cases([tmp_path])


def test_verb_ends_with_one_when_a_case_failed(tmp_path: Path) -> None:
    write_case(tmp_path, "wrong", DEMO / "README.md")
    done = CliRunner().invoke(main, ["sweep", str(tmp_path), "--workers", "1", "--json"])
    assert done.exit_code == 1
    assert '"n_failed": 1' in done.output
