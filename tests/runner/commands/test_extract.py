import pytest

from runner.commands.extract import flag_lines


@pytest.mark.parametrize(
    ("flags", "lines"),
    [
        ([], []),
        (
            [{"point": n, "flag": "clipped", "text": "raise its range"} for n in (9, 3, 7, 8)],
            ["clipped: raise its range (points 3, 7–9)"],
        ),
        ([{"flag": "two_knees", "text": "two plateaus"}], ["two_knees: two plateaus"]),
        ([{"point": -1, "flag": "two_knees", "text": "two plateaus"}], ["two_knees: two plateaus"]),
    ],
)
def test_points_with_the_same_flag_are_told_in_one_line(flags, lines):
    assert flag_lines(flags) == lines
