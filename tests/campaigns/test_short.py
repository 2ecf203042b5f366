"""Short versions of the campaigns."""

from tests.campaigns.coverage import campaign


def test_intervals_hold_the_truth_of_a_few_boards() -> None:
    """Six boards are too few to tell 93 % from 97 %; half of the intervals missing shows."""
    found = campaign(6)
    assert found["boards"] == 6
    intervals = found["intervals"]
    assert isinstance(intervals, int)
    assert intervals == 3 * (8 + 1) + 3 * (7 + 1)
    share = found["share"]
    assert isinstance(share, float)
    assert share >= 0.8
