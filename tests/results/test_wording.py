import math

import pytest

from manybody.results import wording


@pytest.mark.parametrize(
    ("value", "error", "text"),
    [
        (0.77257, 0.00002, "0.77257(2)"),
        (-0.77257, 0.0013, "−0.7726(13)"),
        (1.0, 0.0, "1"),
        (0.1, 0.5, "0.1 ± 0.5"),
        (123.0, 40.0, "123 ± 40"),
        (math.nan, 1.0, "unknown"),
        (0.5, math.nan, "0.5 (error unknown)"),
        (0.25, 0.00996, "0.250(10)"),
    ],
)
def test_values_carry_their_error(value, error, text):
    assert wording.measured(value, error) == text


def test_numbers_spins_and_lists():
    assert wording.number(-1.5e-11, 2) == "−1.5×10⁻¹¹"
    assert wording.number(math.nan) == "unknown"
    assert [wording.spin(s) for s in (0.5, 2.0, math.nan, math.inf)] == ["1/2", "2", "unknown", "very large"]
    assert wording.percent(1.0) == "100\N{NO-BREAK SPACE}%" and wording.percent(0.0523) == "5.2\N{NO-BREAK SPACE}%"
    assert wording.several(["a", "b", "c"]) == "a, b and c" and wording.several(["a"]) == "a"
    assert wording.count(1, "point") == "1 point" and wording.count(0, "point") == "0 points"
