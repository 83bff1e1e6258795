import pytest

from runner.commands.progress import span


@pytest.mark.parametrize(
    ("seconds", "text"),
    [
        (0, "0 s"),
        (45.4, "45 s"),
        (90, "2 min"),
        (720, "12 min"),
        (29_100, "8 h 05 min"),
        (5_399, "1 h 30 min"),
        (86_400, "24 h 00 min"),
    ],
)
def test_a_span_reads_as_people_say_it(seconds, text):
    assert span(seconds) == text
