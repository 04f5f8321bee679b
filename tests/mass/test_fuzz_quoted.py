"""Whatever a referee types: a result, or an error of the family; nothing else."""

import json

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ngbound.errors import NgboundError
from ngbound.mass import audit, audit_numbers, parse_distribution, reconcile
from ngbound.mass.arithmetic import UNITS, VERDICTS

NUMBERS = st.sampled_from(
    ["0", "0.0", "1", "-1", ".5", "5.", "1e400", "1e-400", "1e-320", "9e99", "1e27", "nan", "inf"]
) | st.from_regex(r"\A[+-]?\d{1,4}(\.\d{0,3})?([eE][+-]?\d{1,3})?\Z")
UNIT_TEXTS = st.sampled_from(
    ["", "kg", "g", "m", "km", "km/s", "m/s2", "au/d2", "1/s", "molecules/s", "mol/s", "mag", "dB"]
    + ["kg/s", "%", "/s", "kg/", "m s-2", "K", "1 / 0", "au / d**1000", "10**400 kg", "kg(", "yr"]
)
SIGNS = st.sampled_from(["", "<", ">", "~", "<=", ">> ", "+-", "("])


@st.composite
def texts(draw):
    value = draw(SIGNS) + draw(NUMBERS)
    kind = draw(st.sampled_from(["", " +- {}", " +{} -{}", " */ {}", " to {}", "..{}"]))
    value += kind.format(draw(NUMBERS), draw(NUMBERS))
    if draw(st.booleans()):
        value = f"({value}){draw(st.sampled_from(['', 'e5', 'e-300', 'e999', 'x']))}"
    return f"{value} {draw(UNIT_TEXTS)}"


KEYS = st.sampled_from(
    ["value", "sigma", "minus", "plus", "low", "high", "mode", "factor", "limit"]
)
FLOATS = st.floats() | st.integers()
TABLES = st.dictionaries(KEYS | st.just("unit"), FLOATS | UNIT_TEXTS, max_size=4)
SPECS = texts() | st.text(max_size=12) | FLOATS | TABLES | st.none() | st.booleans()
OPTIONS = st.fixed_dictionaries(
    {},
    optional={
        "H": SPECS,
        "at": SPECS,
        "g_at_r": SPECS,
        "confidence": SPECS,
        "tolerance": SPECS,
        "species": st.sampled_from(["H2O", "CO", "dust", "H20", "", "\u2603"]),
    },
)
LIKELY = st.dictionaries(st.sampled_from(sorted(UNITS)), SPECS | texts(), min_size=1, max_size=6)


@settings(max_examples=200, deadline=None)
@given(SPECS | st.binary(max_size=4) | st.lists(st.floats(), max_size=3))
def test_any_number_is_read_or_refused_in_words(spec):
    try:
        found, unit = parse_distribution(spec, "a number")
    except NgboundError as error:
        assert str(error).startswith(("a number", "In a distribution")) or "a number" in str(error)
    else:
        assert isinstance(unit, str) and str(found)


@settings(max_examples=200, deadline=None)
@given(LIKELY, OPTIONS)
def test_any_set_of_numbers_has_a_verdict_or_is_refused_in_words(numbers, options):
    try:
        found = audit_numbers(**{**numbers, **options})
    except NgboundError as error:
        assert str(error)
        return
    assert found.verdict in VERDICTS
    assert str(found) and found._repr_html_()
    json.dumps(found.to_dict(), allow_nan=False)
    entered = {name for test in found.tests for name in test.quantities}
    assert set(found.quoted) == entered | (set(found.untested) & set(UNITS))


@settings(max_examples=100, deadline=None)
@given(
    st.dictionaries(
        st.sampled_from(sorted(set(UNITS) - {"at", "absolute_magnitude"})),
        st.floats(1e-9, 1e30) | st.from_regex(r"\A[1-9](\.\d{1,2})?e-?[0-2]?[0-9]\Z"),
        min_size=3,
    ),
    st.floats(0.1, 30.0),
)
def test_readable_numbers_always_have_a_verdict(numbers, at):
    found = audit_numbers(**numbers, at=at)
    json.dumps(found.to_dict(), allow_nan=False)
    # the changes named do make the rest agree
    if found.changes and all(found.changes[0].needed.get(n) for n in found.changes[0].quantities):
        rest = {n: v for n, v in {**numbers, "at": at}.items()}
        for name in found.changes[0].quantities:
            rest.pop(name)
        again = audit_numbers(**rest)
        assert again.verdict in ("sound", "sound in part", "untestable", "cannot tell")


JSONABLE = st.recursive(
    st.none() | st.booleans() | FLOATS | st.text(max_size=8) | texts(),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=8), inner),
    max_leaves=6,
)
PAPERS = st.fixed_dictionaries(
    {},
    optional={
        "title": JSONABLE,
        "numbers": st.dictionaries(st.sampled_from(sorted(UNITS)), JSONABLE) | JSONABLE,
        "threshold": st.fixed_dictionaries(
            {},
            optional={
                "value": SPECS,
                "component": st.sampled_from(["R", "T", "any", "X", 3]),
                "sided": st.integers(0, 3),
                "confidence": SPECS,
                "sigma": SPECS,
                "at_au": SPECS,
                "law": st.sampled_from(["inverse-square", "water-ice", "power", "watr"]),
            },
        ),
        "seed": JSONABLE,
        "nonsense": JSONABLE,
    },
)
RESULTS = st.fixed_dictionaries(
    {"name": st.text(max_size=5)},
    optional={
        "A": SPECS | texts() | st.dictionaries(st.sampled_from(["R", "T", "N", "X"]), texts()),
        "upper_limit": texts(),
        "threshold": texts(),
        "component": st.sampled_from(["R", "T", "N", "any", "S"]),
        "r_au": st.lists(st.floats(-1.0, 50.0), max_size=3),
        "dates": st.lists(st.sampled_from(["2031-01-01", "2031-13-01", "", "x"]), max_size=3),
        "mass": SPECS,
        "at_au": SPECS,
        "law": st.sampled_from(["inverse-square", "water-ice", "power", "watr"]),
        "outgassing": st.dictionaries(st.sampled_from(["rate", "at", "speed"]), SPECS),
    },
)


@settings(max_examples=100, deadline=None)
@given(PAPERS)
def test_any_paper_is_audited_or_refused_in_words(paper):
    try:
        json.dumps(audit(paper).to_dict(), allow_nan=False)
    except NgboundError as error:
        sentence(str(error))


@settings(max_examples=100, deadline=None)
@given(RESULTS, RESULTS)
@pytest.mark.filterwarnings("ignore")
def test_any_results_are_reconciled_or_refused_in_words(one, other):
    try:
        json.dumps(reconcile(one, other).to_dict(), allow_nan=False)
    except NgboundError as error:
        sentence(str(error))


def sentence(text: str) -> None:
    """It ends once, and does not speak the language of the program behind it."""
    assert text.endswith((".", "?")) and not text.endswith(("..", "?.", ".?")), text
    for jargon in ("Input should", "Extra inputs", "Field required", "Value error", "type="):
        assert jargon not in text, text
