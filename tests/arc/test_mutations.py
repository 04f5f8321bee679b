"""A small run of broken files; the full one is tests/benchmarks/ingest_mutations.py."""

from tests.benchmarks.ingest_mutations import run


def test_broken_files_give_an_arc_or_our_error() -> None:
    told, faults, slowest = run(300, seed=1)
    assert not faults, faults[0]
    assert sum(told.values()) == 300 and told["arc"] >= 10 and told["ArcError"] >= 150
    assert slowest < 10.0
