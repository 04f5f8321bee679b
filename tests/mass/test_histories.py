"""Simulated two-epoch histories: the true explanation is possible, a false one excluded."""

import json

import pytest

from ngbound.mass import reconcile

from .simulated import changed_law, late_onset, mass_loss, rotated_jet

HISTORIES = {
    "mass loss": (mass_loss, "mass", {"law", "onset-distance", "date", "rotated", "chance"}),
    "late onset": (late_onset, "date", {"law", "onset-distance", "rotated", "chance"}),
    "rotated jet": (rotated_jet, "rotated", {"law", "mass", "production", "collimation", "date"}),
    "changed law": (changed_law, "law", {"rotated", "chance"}),
}


@pytest.mark.parametrize("history", HISTORIES)
def test_the_true_history_is_possible_and_false_ones_are_not(history):
    make, true, false = HISTORIES[history]
    early, late = make(1)
    found = reconcile(early, late)
    assert found.probability < 0.0027, str(found)
    assert true in found.possible, str(found)
    assert false <= set(found.excluded), str(found)
    assert found.pair == ("early", "late")
    json.dumps(found.to_dict(), allow_nan=False)


def test_numbers_needed_hold_the_truth():
    early, late = late_onset(2)
    dates = reconcile(early, late)["date"].needed["dates"]
    # the thrust was off until 2021-06-01 and on from 2023-02-01
    assert dates[0] < "2023-02-01" and dates[1] > "2021-06-01"
