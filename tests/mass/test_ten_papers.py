"""Ten invented papers through the front door: five sound, five with one planted slip each.

The sound numbers follow from F = zeta Q m v, M = F / (A g), the sphere and the brightness, worked
out apart from the program and rounded as a paper would. Thresholds come from the arc of an invented
object with errors of 0.06 arcsec.
"""

import re

import pytest

from ngbound.mass import audit

from .simulated import EARLY, ROUND, SIGMA_ARCSEC, THRUST, fitted

# zeta Q m v = 0.45 x 4.2e26 x 18.01528 u x 640 m/s = 3618.5 N; 3.1e-9 au/d2 / 1.8^2 = 1.9174e-8
# m/s2: 1.887e11 kg; 480 kg/m3: 909 m
NEARBY = {
    "acceleration": "3.10e-9 au/d2",
    "at": 1.8,
    "rate": "4.20e26 molecules/s",
    "speed": "0.640 km/s",
    "collimation": "0.45",
    "mass": "1.89e11 kg",
    "density": "480 kg/m3",
    "diameter": "909 m",
}
# 0.30 x 7.5e27 x 28.0101 u x 380 = 39768 N; 6.4e-10 au/d2 / 5.2^2 = 4.743e-10 m/s2: 8.384e13 kg
DISTANT_CO = {
    "acceleration": "6.40e-10 au/d2",
    "local_acceleration": "4.74e-10 m/s2",
    "at": "5.20 au",
    "species": "CO",
    "rate": "7.50e27 molecules/s",
    "speed": "380 m/s",
    "collimation": "0.300",
    "mass": "8.38e13 kg",
    "density": "350 kg/m3",
    "diameter": "7.71 km",
}
# 0.6 x 14 kg/s x 310 m/s = 2604 N; over 8.8e-8 m/s2: 2.959e10 kg; 900 kg/m3: 397 m
MASS_LOSS = {
    "force": "2604 N",
    "mass_loss": "14.0 kg/s",
    "speed": "310 m/s",
    "collimation": "0.60",
    "local_acceleration": "8.80e-8 m/s2",
    "mass": "2.96e10 kg",
    "density": "900 kg/m3",
    "radius": "199 m",
}
# H = 19.20, p = 0.050: 859 m; 600 kg/m3: 1.99e11 kg
PHOTOMETRIC = {
    "H": "19.20",
    "albedo": "0.050",
    "diameter": "859 m",
    "density": "600 kg/m3",
    "mass": "1.99e11 kg",
}
# 0.55 x 8.8e26 x 18.01528 u x 590 = 8542.5 N; 5.5e-9 au/d2 / 2.1^2 = 2.4993e-8 m/s2: 3.418e11 kg,
# quoted in g with the unit kg
GRAMS = {
    "acceleration": "5.50e-9 au/d2",
    "at": 2.1,
    "rate": "8.80e26 molecules/s",
    "speed": "590 m/s",
    "collimation": "0.550",
    "mass": "3.42e14 kg",
    "density": "520 kg/m3",
    "diameter": "1.08 km",
}
# 0.40 x 3.3e27 x 18.01528 u x 720 = 28431 N; 2.7e-8 au/d2 / 1.4^2 = 2.7606e-7 m/s2: 1.030e11 kg;
# the acceleration quoted in m/s2 with its number in au/d2
METRES = {
    "acceleration": "2.70e-8 m/s2",
    "at": 1.4,
    "rate": "3.30e27 molecules/s",
    "speed": "720 m/s",
    "collimation": "0.40",
    "mass": "1.03e11 kg",
    "density": "430 kg/m3",
    "diameter": "771 m",
}
# 0.50 x 2.6e25 x 18.01528 u x 810 = 315.0 N; 9.0e-10 au/d2 / 1.1^2 = 1.4906e-8 m/s2: 2.113e10 kg,
# D = 416 m; the mass quoted is that of a sphere whose radius is 416 m
RADIUS = {
    "acceleration": "9.00e-10 au/d2",
    "at": 1.1,
    "rate": "2.60e25 molecules/s",
    "speed": "810 m/s",
    "collimation": "0.500",
    "mass": "1.69e11 kg",
    "density": "560 kg/m3",
    "diameter": "416 m",
}
# 0.50 x 1.6e27 x 18.01528 u x 540 = 12923 N at 2.5 au; 1.2e-8 au/d2 / 2.5^2 = 3.8477e-8 m/s2:
# 3.359e11 kg; the rate quoted is the one scaled to 1 au, 1.00e28
WRONG_DISTANCE = {
    "acceleration": "1.20e-8 au/d2",
    "at": 2.5,
    "rate": "1.00e28 molecules/s",
    "speed": "540 m/s",
    "collimation": "0.500",
    "mass": "3.36e11 kg",
    "density": "400 kg/m3",
    "diameter": "1171 m",
}


@pytest.fixture(scope="module")
def fit():
    return fitted(*EARLY, 0 * THRUST, 5, ROUND)


def quoted_limit(fit, sigmas: float, digits: int = 4) -> dict:
    """A 95 % limit on the transverse thrust, the others free: so many sigma of the fit."""
    sigma = float(fit.A_sigma[1].value)
    return {
        "title": "limit from an arc",
        "threshold": {
            "value": f"{sigmas * sigma:.{digits - 1}e} au/d2",
            "component": "T",
            "others": "free",
            "confidence": 0.95,
            "sided": 2,
        },
        "errors": {"arcsec": SIGMA_ARCSEC},
    }


@pytest.mark.parametrize("numbers", [NEARBY, DISTANT_CO, MASS_LOSS, PHOTOMETRIC])
def test_sound_papers(numbers):
    found = audit({"title": "sound", "numbers": numbers})
    assert found.sound, str(found)
    assert found.numbers.verdict == "sound" and found.slips == ()


def test_the_fifth_sound_paper_with_its_arc(fit):
    # 1.960 sigma is the two-sided 95 % multiple
    found = audit(quoted_limit(fit, 1.960), arc=fit)
    assert found.sound, str(found)
    assert found.threshold.verdict == "holds"
    assert found.threshold.claimed.ratio == pytest.approx(1.0, abs=0.02)


@pytest.mark.parametrize(
    ("numbers", "quantity", "words"),
    [
        (GRAMS, "mass", "factor 1000"),
        (METRES, "acceleration", "au/d2 and m/s2 exchanged"),
        (RADIUS, "mass", "radius and diameter exchanged"),
        (WRONG_DISTANCE, "rate", "wrong distance"),
    ],
    ids=["factor-1000", "au-against-m", "radius-for-diameter", "wrong-distance"],
)
def test_planted_slips_are_named(numbers, quantity, words):
    found = audit({"title": "one slip", "numbers": numbers})
    assert not found.sound and found.numbers.verdict == "slip", str(found)
    named = {c.quantities: c for c in found.numbers.changes}
    assert any(words in slip for slip in named[(quantity,)].slips), str(found)
    best = found.numbers.changes[0]
    assert best.slips and any(words in slip for slip in found.slips)


def test_one_sided_called_two_sided_is_named(fit):
    # 1.645 sigma is the one-sided 95 % multiple, quoted as two-sided
    found = audit(quoted_limit(fit, 1.645), arc=fit)
    assert not found.sound and found.threshold.verdict == "another reading", str(found)
    assert found.threshold.changes == ("one-sided instead of two-sided",)
    assert "one-sided instead of two-sided" in found.slips


@pytest.mark.parametrize("digits", [1, 2, 3])
def test_limits_with_fewer_digits_hold_or_are_in_doubt(fit, digits):
    found = audit(quoted_limit(fit, 1.960, digits), arc=fit)
    assert found.sound or found.undecided, str(found)
    assert found.sound or digits == 1
    wrong = audit(quoted_limit(fit, 1.645, digits), arc=fit)
    assert not wrong.sound, str(wrong)
    assert any("one-sided" in change for change in wrong.threshold.changes), str(wrong)
    assert digits == 1 or not wrong.undecided


def with_digits(numbers: dict, digits: int) -> dict:
    """The same paper with every number rounded to so many digits."""

    def rounded(text: str) -> str:
        number = re.match(r"[\d.e+-]+", text)
        assert number is not None
        return f"{float(number[0]):.{digits - 1}e}{text[number.end() :]}"

    return {
        key: rounded(value) if isinstance(value, str) and value[0].isdigit() else value
        for key, value in numbers.items()
    }


SOUND_PAPERS = [NEARBY, DISTANT_CO, MASS_LOSS, PHOTOMETRIC]
SLIPS = [
    (GRAMS, "mass", "factor 1000"),
    (METRES, "acceleration", "au/d2 and m/s2 exchanged"),
    (RADIUS, "mass", "radius and diameter exchanged"),
    (WRONG_DISTANCE, "rate", "wrong distance"),
]


@pytest.mark.parametrize("digits", [1, 2, 3])
@pytest.mark.parametrize("numbers", SOUND_PAPERS)
def test_sound_papers_with_fewer_digits_are_never_called_wrong(numbers, digits):
    found = audit({"title": "rounded", "numbers": with_digits(numbers, digits)})
    assert found.sound or found.undecided, str(found)
    assert found.slips == ()
    if digits > 1:
        assert found.sound, str(found)


@pytest.mark.parametrize("digits", [1, 2, 3])
@pytest.mark.parametrize(("numbers", "quantity", "words"), SLIPS)
def test_planted_slips_with_fewer_digits_are_named_or_in_doubt(numbers, quantity, words, digits):
    found = audit({"title": "rounded", "numbers": with_digits(numbers, digits)})
    assert not found.sound, str(found)
    if digits > 1:
        assert not found.undecided, str(found)
        named = {c.quantities: c for c in found.numbers.tied}
        assert any(words in slip for slip in named[(quantity,)].slips), str(found)
    elif found.undecided:
        assert any(words in doubt for doubt in found.numbers.doubts), str(found)


FACTOR_TWO = {
    # radius for diameter, one number with one digit
    "radius for diameter": {"mass": "3.77e10 kg", "density": "600 kg/m3", "diameter": "247 m"},
    # M = 0.5 Q m v / A, quoted with a collimation of 1
    "collimation": {
        "force": "6.0e3 N",
        "mass_loss": "20.0 kg/s",
        "speed": "600 m/s",
        "collimation": "1",
    },
    # 1.645 sigma called two-sided
    "one-sided": {"acceleration": "1.6e-9", "acceleration_sigma": "1.0e-9", "confidence": 0.95},
}


@pytest.mark.parametrize("name", FACTOR_TWO)
def test_slips_of_two_and_less_are_named_where_the_digits_allow(name):
    found = audit({"title": name, "numbers": FACTOR_TWO[name]})
    assert found.numbers.verdict == "slip" and not found.undecided, str(found)
    words = {
        "radius for diameter": "radius and diameter",
        "collimation": "half a beam",
        "one-sided": "one-sided",
    }[name]
    assert any(words in slip for change in found.numbers.tied for slip in change.slips)


def test_where_the_digits_do_not_allow_it_the_audit_says_so():
    # all of one digit: the force agrees with a collimation of 1 and of 0.5
    found = audit(
        {
            "title": "coarse",
            "numbers": {
                "force": "7e3 N",
                "mass_loss": "1e1 kg/s",
                "speed": "1 km/s",
                "collimation": "1",
            },
        }
    )
    assert found.undecided and not found.sound, str(found)
    assert "too coarse to tell" in found.headline and "digits cannot tell" in str(found)
    assert any("half a beam" in doubt for doubt in found.numbers.doubts), str(found)
    # with a second digit they do
    finer = dict(force="7.0e3 N", mass_loss="1.0e1 kg/s", speed="1.0 km/s", collimation="1.0")
    assert audit({"numbers": finer}).numbers.verdict == "inconsistent"


def test_numbers_that_entered_no_test_are_told():
    found = audit({"title": "t", "numbers": {**PHOTOMETRIC, "speed": "0.8 km/s"}})
    assert found.sound and found.numbers.verdict == "sound in part"
    assert found.numbers.untested == ("speed",)
    assert "not everything could" in found.headline and "Not tested" in str(found)
    assert "everything in it was tested" in audit({"numbers": PHOTOMETRIC}).headline


def test_a_magnitude_of_zero_is_a_number_like_any_other():
    # 1329 km / sqrt(0.1) = 4203 km
    found = audit({"numbers": {"H": "0.0 +- 0.1", "albedo": "0.100", "diameter": "4.2e3 km"}})
    assert found.sound, str(found)
    for size in ("0", "0.0", "-0.0"):
        assert audit({"numbers": {"H": size, "albedo": "0.10", "diameter": "4.20e3 km"}}).tested
