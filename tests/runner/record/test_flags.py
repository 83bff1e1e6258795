"""The bits are a promise to every record ever written, so their values stand here a second time."""

import pytest

from runner.record import SENTENCES, Flag, flag_names, is_acceptable

# name, bit, may extraction use the point?
PROMISED = [
    ("clipped", 1, True),
    ("no_trigger", 2, False),
    ("bank_sagged", 4, True),
    ("offset_current", 8, True),
    ("temperature_drifted", 16, True),
    ("overload", 32, False),
    ("not_settled", 64, True),
    ("retried", 128, True),
    ("skipped", 256, False),
    ("instrument_restarted", 512, True),
    ("part_open", 1024, False),
    ("part_short", 2048, False),
    ("stuck_reading", 4096, False),
]


@pytest.mark.parametrize(("name", "bit", "usable"), PROMISED)
def test_a_bit_keeps_its_meaning(name: str, bit: int, usable: bool) -> None:
    assert flag_names(bit) == (name,)
    assert is_acceptable(bit) is usable
    assert not is_acceptable(bit | Flag.OVERLOAD)
    assert SENTENCES[Flag(bit)].endswith(".")


def test_no_flag_is_missing_here_and_zero_is_good() -> None:
    assert [flag.value for flag in Flag] == [bit for _, bit, _ in PROMISED]
    assert set(SENTENCES) == set(Flag)
    assert is_acceptable(0)
    assert flag_names(0) == ()
    assert flag_names(1 | 4096) == ("clipped", "stuck_reading")
