"""A small run of tests/benchmarks/first_orbit_study.py."""

import numpy as np
import pytest
from scipy import stats

from tests.benchmarks.first_orbit_study import CLASSES, coverage, report, study

pytestmark = pytest.mark.slow


@pytest.fixture(scope="module")
def tally():
    return study(20, seed=7, with_thrust=False)


def test_every_orbit_is_found_without_help(tally):
    assert tally.total("missed") == 0, report(tally)
    assert tally.total("found") >= 19
    assert set(tally.outcomes) == set(CLASSES)


def test_ellipses_cover_the_truth_when_the_errors_are_right(tally):
    assert stats.kstest(tally.state, stats.chi2(6).cdf).pvalue > 1e-3
    (_, one, error), *_ = coverage(tally.state, 6)
    assert abs(one - 0.683) < 3.5 * error


def test_they_do_not_when_the_common_error_of_nights_is_ignored(tally):
    assert np.median(tally.wrong) > 1.5 * np.median(tally.state)


def test_gross_errors_go_and_good_records_stay(tally):
    assert tally.gross_kept <= 1
    assert tally.good_rejected < 0.03 * tally.records
