"""Short versions of the campaigns."""

from tests.campaigns import solver
from tests.campaigns.coverage import campaign


def test_intervals_hold_the_truth_of_a_few_boards() -> None:
    """Four boards are too few to tell 93 % from 97 %; half of the intervals missing shows."""
    found = campaign(4)
    assert found["boards"] == 4
    intervals = found["intervals"]
    assert isinstance(intervals, int)
    assert intervals == 2 * (8 + 1) + 2 * (7 + 1)
    share = found["share"]
    assert isinstance(share, float)
    assert share >= 0.8


def test_the_solver_finds_a_point_for_random_stages_or_says_that_there_is_none() -> None:
    found = solver.campaign(80, seed=7)
    stages, solutions, no_point = found["stages"], found["solutions"], found["no_point"]
    worst = found["worst_residual"]
    assert isinstance(stages, int)
    assert isinstance(solutions, int)
    assert isinstance(no_point, int)
    assert isinstance(worst, float)
    assert stages >= 80
    assert solutions == 13 * stages
    assert found["unsolved"] == 0
    assert 0.0 < worst <= 1e-9
    # Some stages block what is to be drawn through them, and most do not.
    assert 0 < no_point < 0.2 * solutions
