"""Bench time is the simulated bench's own, so this holds on any machine."""

from tests.benchmarks.sweep import ratio


def test_a_sweep_takes_little_more_bench_time_than_it_needs() -> None:
    found = ratio()
    assert found["visits"] == 16
    assert 1.0 <= found["ratio"] <= 1.10
