"""Captures files: what is known of waveforms taken by hand."""

from pathlib import Path

import pytest

from runner.errors import InputError
from runner.plan import load_captures_file, parse_captures

# The file of the design page, word for word.
TEXT = """\
title: Captures taken by hand
part: {label: DRUM-22-A, inductance: 22 uH, rated_current: 6 A, resistance: 18 mohm}   # resistance at 20 degC
shunt: {resistance: 10 mohm, uncertainty: 0.1 %, series_inductance: 3 nH}
skew: 0 ns                       # voltage channel later than current channel; leave out to have it estimated
columns: {time: t, voltage: v_part, shunt_voltage: v_shunt}     # or current: i; units s, V, A
captures:                        # relative to this file
  - {file: t25_w10us.csv, temperature: 25.1 degC}
  - {file: t25_w20us.csv, temperature: 25.1 degC}
"""


def test_the_example_of_the_design_is_read() -> None:
    captures = parse_captures(TEXT.encode(), "c.yaml")
    assert captures.shunt is not None
    assert (captures.shunt.resistance.value, captures.shunt.resistance.uncertainty) == (
        0.01,
        pytest.approx(1e-5),
    )
    assert captures.shunt.series_inductance is not None
    assert captures.shunt.series_inductance.value == 3e-9
    assert captures.skew is not None
    assert (captures.skew.value, captures.skew.uncertainty) == (0.0, 0.0)
    assert captures.columns.shunt_voltage == "v_shunt"
    assert [(c.file, c.temperature_degC) for c in captures.captures] == [
        ("t25_w10us.csv", 25.1),
        ("t25_w20us.csv", 25.1),
    ]
    assert captures.extract.drops == (0.1, 0.2, 0.3)


def test_constants_may_be_written_with_their_uncertainty_and_a_skew_left_out() -> None:
    text = TEXT.replace("3 nH}", "{value: 3 nH, uncertainty: 0.5 nH}}").replace("skew: 0 ns", "#")
    captures = parse_captures(text.encode(), "c.yaml")
    assert captures.shunt is not None
    assert captures.shunt.series_inductance is not None
    assert captures.shunt.series_inductance.uncertainty == 0.5e-9
    assert captures.skew is None


@pytest.mark.parametrize(
    ("old", "new", "where", "says"),
    [
        ("25.1 degC}\n", "25.1}\n", "c.yaml:7:40: captures[0].temperature", "25.1 has no unit; write '25.1 degC'"),
        ("shunt_voltage: v_shunt", "curent: i", "c.yaml:5:37: columns.curent", "did you mean 'current'?"),
        ("shunt_voltage: v_shunt", "shunt_voltage: v, current: i", "c.yaml:5:10: columns", "and not both"),
        ("shunt: {resistance", "#", "c.yaml:1:1", "'columns.shunt_voltage' needs the shunt"),
        ("skew: 0 ns", "skew: 0", "c.yaml:4:7: skew", "0 has no unit; write '0 s' if that is meant, or for example '12 ns'"),
        ("uncertainty: 0.1 %", "uncertainty: 0.1", "c.yaml:3:43: shunt.uncertainty", "0.1 has no unit"),
        ("captures:  ", "captures: []\n#", "c.yaml:6:11: captures", "no value is too few; write at least 1"),
    ],
)  # fmt: skip
def test_a_broken_captures_file_is_shown_where_it_is_broken(
    old: str, new: str, where: str, says: str
) -> None:
    text = (
        TEXT.replace(old, new, 1) if "[]" not in new else TEXT[: TEXT.index("captures:  ")] + "captures: []\n"
    )
    with pytest.raises(InputError) as caught:
        parse_captures(text.encode(), "c.yaml")
    assert caught.value.faults[0].where == where
    assert says in caught.value.faults[0].what


def test_waveforms_that_are_missing_are_named_all_at_once(tmp_path: Path) -> None:
    path = tmp_path / "c.yaml"
    path.write_text(TEXT)
    with pytest.raises(InputError) as caught:
        load_captures_file(path)
    assert [fault.where for fault in caught.value.faults] == [
        f"{path}:7:12: captures[0].file",
        f"{path}:8:12: captures[1].file",
    ]
    for name in ("t25_w10us.csv", "t25_w20us.csv"):
        (tmp_path / name).write_text("t,v_part,v_shunt\n")
    loaded = load_captures_file(path)
    assert (loaded.captures_path, loaded.captures_bytes) == (path, TEXT.encode())
