"""The front door of the audit: files, what it combines, what it refuses."""

import json
import textwrap
import tomllib

import pytest

from ngbound.errors import CaseError
from ngbound.mass import QuotedPaper, ThrustResult, audit, quoted

PAPER = """
title = "an invented paper"

[numbers]
acceleration = "1.43e-8 au/d2"
at = 1.3
g_at_r = 0.6
rate = "1.00e27 molecules/s"
speed = "0.80 km/s"
collimation = "0.50"
mass = "{mass}"

[threshold]
value = "{value}"
component = "N"
sigma = 3

[geometry]
n_obs = 120
nights = 40
span_d = 180
sigma_arcsec = 0.5
r_au = [2.9, 2.1]
delta_au = [1.3, 2.6]
"""


@pytest.fixture
def paper(tmp_path):
    def write(mass: str = "6.96e10 kg", value: str = "1e-8 au/d2"):
        path = tmp_path / "paper.toml"
        path.write_text(PAPER.format(mass=mass, value=value), encoding="utf-8")
        return path

    return write


def test_a_sound_paper(paper):
    found = audit(paper())
    assert found.sound, str(found)
    text = str(found)
    assert text.startswith("an invented paper: sound") and "simulated arcs" in text
    record = json.loads(json.dumps(found.to_dict(), allow_nan=False))
    assert record["numbers"]["verdict"] == "sound in part"
    assert "not everything could" in text and "Not tested" in text and "distance" in text
    assert record["geometry"]["verdict"] == "plausible" and record["threshold"] is None


def test_each_part_can_spoil_it(paper):
    wrong_mass = audit(paper(mass="6.96e13 kg"))
    assert not wrong_mass.sound and "factor 1000" in " ".join(wrong_mass.slips)
    wrong_threshold = audit(paper(value="1e-13 au/d2"))
    assert not wrong_threshold.sound and not wrong_threshold.undecided
    assert wrong_threshold.numbers.verdict == "sound in part"


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("[numbers]\nmas = 1.0\n", "'mas' is not a quantity of the audit; did you mean 'mass'?"),
        ("[numbers]\nxyz = 1.0\n", "'xyz' is not a quantity of the audit; known are "),
        ("[numbers]\nspecies = 'H20'\n", "Species 'H20' is not known. Did you mean 'H2O'?"),
        ("[numbers]\nmass = '5 km'\n", "mass has the unit 'km', which is no unit of it; use for"),
        ("[numbers]\nmass = 'about 5'\n", "mass = 'about 5' cannot be read as a number"),
        ("[numbers]\nconfidence = 95\n", "confidence = 95 must be between 0 and 1, such as"),
        ("[numbers]\nH = 18\nabsolute_magnitude = 17\n", "are the same number; give one"),
        ("[numberz]\n", "line 1: there is no table 'numberz'; did you mean 'numbers'?"),
        (
            "[threshold]\nvalue = 1e-9\ncomponent = 'X'\n",
            'line 3: [threshold] component = "X" is not allowed; it must be one of "R", "T", "N" '
            'or "any", or left out for the default "any".',
        ),
        (
            "[threshold]\nvalue = 1e-9\nconfidence = 95\n",
            "line 3: [threshold] confidence = 95 is not allowed; it must be a number above 0 and "
            "below 1, or left out.",
        ),
        ("[threshold]\n", "line 1: [threshold] value is missing; give a text in quotes or a"),
        (
            "[threshold]\nvalue = 1e-9\nlaw = 'watr-ice'\n",
            "line 3: in [threshold], the thrust law 'watr-ice'",
        ),
        (
            "[threshold]\nvalue = 1e-9\nsigma = 3\nconfidence = 0.95\n",
            "in [threshold], it gives sigma and confidence; give one of them.",
        ),
        (
            "[threshold]\nvalue = 1e-9\n[geometry]\nn_obs = 2\n",
            "line 4: [geometry] n_obs = 2 is not allowed; it must be a whole number of at least 3.",
        ),
        ("title = \n", "line 1, column 9: this is not TOML: "),
        ("", "is empty; it must hold at least one table."),
        ("title = 'x'\n", "it must hold a [numbers] or a [threshold] table."),
    ],
)
def test_wrong_files_are_told_in_a_sentence(tmp_path, text, words):
    path = tmp_path / "wrong.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(CaseError) as caught:
        audit(path)
    said = str(caught.value)
    assert words in said
    for jargon in ("?.", "..", "{", "Input should", "Value error", "validation"):
        assert jargon not in said, said


def test_binary_and_missing_files(tmp_path):
    path = tmp_path / "binary.toml"
    path.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(CaseError, match="not UTF-8"):
        audit(path)
    with pytest.raises(CaseError, match="cannot be read"):
        audit(tmp_path)


def test_the_examples_of_the_docstring_are_read():
    text = textwrap.dedent(quoted.__doc__.partition("\n")[2])
    paper = text[text.index('    title = "an') : text.index("For `reconcile`")]
    results = text[text.index("    [[result]]") :]
    found = QuotedPaper.model_validate(tomllib.loads(textwrap.dedent(paper)))
    assert found.geometry.nights == 40 and found.arc.file.name == "paper.psv"
    one = tomllib.loads(textwrap.dedent(results))["result"][0]
    assert ThrustResult.from_quoted(one).kind == "threshold"


def test_nothing_tested_is_not_sound() -> None:
    found = audit({"threshold": {"value": "1e-9 au/d2"}})
    assert not found.tested and not found.sound
    assert "nothing in it could be tested" in str(found)
    assert audit({"numbers": {"mass": "1e10 kg", "rate": "1e26 1/s"}}).sound is False


def test_doubtful_geometry_is_not_sound() -> None:
    geometry = {
        "n_obs": 100,
        "span_d": 60.0,
        "sigma_arcsec": 0.3,
        "r_au": [1.6, 1.4],
        "delta_au": [0.9, 0.7],
    }
    sane = audit({"threshold": {"value": "1e-8 au/d2"}, "geometry": geometry})
    assert sane.geometry is not None
    far = audit({"threshold": {"value": "1e-5 au/d2"}, "geometry": geometry})
    assert far.geometry is not None and far.geometry.verdict != "plausible"
    assert not far.sound
