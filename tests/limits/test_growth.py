import json

import numpy as np
import pytest

from ngbound.errors import LimitError
from ngbound.limits import detection_threshold, threshold_growth
from tests.limits.arcs import CLASSES, fitted


@pytest.fixture(scope="module")
def push():
    return fitted(CLASSES["main belt, 10 years"])


@pytest.fixture(scope="module")
def growth(push):
    return threshold_growth(push, n_cuts=12)


def test_the_last_cut_is_the_whole_arc(push, growth):
    whole = detection_threshold(push)
    assert growth.n_obs[-1] == push.n_obs
    assert growth.worst[-1].value == pytest.approx(whole.worst.value, rel=1e-6)
    assert growth.table["held_T"].iloc[-1] == pytest.approx(whole.held[1].value, rel=1e-6)


def test_the_threshold_only_falls(growth):
    worst = growth.worst.value[np.isfinite(growth.worst.value)]
    assert len(worst) >= 8
    assert np.all(np.diff(worst) <= 1e-9 * worst[:-1])
    assert growth.exponent < 0.0


def test_record_and_choices(push, growth):
    json.dumps(growth.to_dict(), allow_nan=False)
    assert "Growth of the threshold" in str(growth)
    with pytest.raises(LimitError):
        threshold_growth(push, n_cuts=0)
