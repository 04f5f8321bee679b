"""What `reconcile` makes of simulated two-epoch histories: which explanations it calls possible.

    python -m tests.benchmarks.histories [--seeds 10] [--out FILE]

Histories of an invented object (`tests.mass.simulated`), each with fresh noise for every seed: a
mass loss, a late onset, a rotated jet, a changed law, an onset in the midst of an arc. For each
explanation the table counts the seeds in which it was called possible, strained, excluded or not
testable. The true one is marked; below stand the misreadings: false explanations called possible,
and true ones that were not.
"""

import argparse
import json
from collections import Counter
from pathlib import Path

from ngbound.mass import reconcile
from ngbound.mass.explanations import EXCLUDED, ORDER, POSSIBLE
from tests.mass.simulated import (
    changed_law,
    late_onset,
    mass_loss,
    onset_on_the_way,
    rotated_jet,
)

HISTORIES = {
    "mass loss": (mass_loss, "mass"),
    "late onset": (late_onset, "date"),
    "rotated jet": (rotated_jet, "rotated"),
    "changed law": (changed_law, "law"),
    "onset on the way": (onset_on_the_way, "onset-distance"),
}
"""What makes each history, and the key of its true explanation."""

Counts = dict[str, Counter[str]]
"""Verdicts by key of the explanation."""


def count(history: str, seeds: range) -> tuple[Counts, dict[str, str]]:
    """Verdicts on one history, and the titles of the explanations."""
    make, _ = HISTORIES[history]
    counts: Counts = {}
    titles: dict[str, str] = {}
    for seed in seeds:
        for found in reconcile(*make(seed)).explanations:
            counts.setdefault(found.key, Counter())[found.verdict] += 1
            titles[found.key] = found.title
    return counts, titles


def table(history: str, counts: Counts, titles: dict[str, str]) -> str:
    """The counts of one history as text, and its misreadings."""
    true = HISTORIES[history][1]
    total = sum(counts[true].values())
    lines = [f"{history}, {total} seeds", f"  {'explanation':46s} {'  '.join(ORDER)}"]
    for key in sorted(counts, key=lambda k: (-counts[k][POSSIBLE], counts[k][EXCLUDED])):
        cells = "  ".join(f"{counts[key][v]:{len(v)}d}" for v in ORDER)
        lines.append(f"  {'*' if key == true else ' '} {titles[key]:44s} {cells}")
    false = [
        f"{titles[key]} in {counts[key][POSSIBLE]} of {total}"
        for key in counts
        if key != true and counts[key][POSSIBLE]
    ]
    lines.append(f"  true explanation possible in {counts[true][POSSIBLE]} of {total}")
    lines.append(f"  false ones called possible: {'; '.join(false) or 'none'}")
    ruled_out = sum(key != true and counts[key][EXCLUDED] == total for key in counts)
    lines.append(f"  false ones excluded in every seed: {ruled_out} of {len(counts) - 1}")
    return "\n".join(lines)


def main() -> None:
    """Print the tables."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--seeds", type=int, default=10)
    parser.add_argument("--out", type=Path)
    options = parser.parse_args()
    record = {}
    for history in HISTORIES:
        counts, titles = count(history, range(1, options.seeds + 1))
        print(table(history, counts, titles), flush=True)
        record[history] = {key: dict(found) for key, found in counts.items()}
    if options.out:
        options.out.write_text(json.dumps(record, indent=2), encoding="utf-8")


if __name__ == "__main__":
    main()
