"""Simulated two-epoch histories: the true explanation is possible, a false one excluded."""

import json

import pytest

from ngbound.mass import reconcile

from .simulated import (
    ONSET_AU,
    changed_law,
    late_onset,
    mass_loss,
    onset_on_the_way,
    rotated_jet,
)

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


def test_an_onset_that_the_arc_itself_shows_is_no_coincidence():
    found = reconcile(*onset_on_the_way(1))
    onset = found["onset-distance"]
    low, high = onset.needed["onset_au"]
    assert low - 0.01 < ONSET_AU < high + 0.01 and high - low < 0.05
    assert onset.needed["share_of_range"] < 0.05 and onset.verdict == "possible"
    assert "ask for it" in onset.sentence
    # a steeper law fits both too, but far worse
    assert found.verdict("law") == "strained" and "fits better" in found["law"].sentence


def test_an_onset_that_only_a_sliver_of_distances_allows_is_strained():
    onset = reconcile(*rotated_jet(3))["onset-distance"]
    assert onset.needed["share_of_range"] < 0.05
    assert onset.verdict == "strained" and "coincidence" in onset.sentence
