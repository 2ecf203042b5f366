import math

import pytest

from benchkit.metrology import Accuracy


def test_limits_of_a_range_become_rectangular_uncertainties() -> None:
    accuracy = Accuracy(range=10.0, reading_percent=0.02, range_percent=0.005, offset=1e-4)
    assert accuracy.gain_limit() == pytest.approx(2e-4)
    assert accuracy.offset_limit() == pytest.approx(6e-4)
    # JCGM 100:2008, 4.3.7: half-width over sqrt(3); the two parts are independent.
    assert accuracy.standard_uncertainty(-5.0) == pytest.approx(
        math.sqrt((1e-3**2 + 6e-4**2) / 3.0)
    )


@pytest.mark.parametrize(
    "bad",
    [
        {"range": 0.0},
        {"range": 1.0, "offset": -1.0},
        {"range": 1.0, "reading_percent": math.nan},
    ],
)
def test_an_impossible_declaration_names_its_key(bad: dict[str, float]) -> None:
    with pytest.raises(ValueError, match=list(bad)[-1]):
        Accuracy(**bad)
