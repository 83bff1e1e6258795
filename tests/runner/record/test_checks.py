"""What the journal refuses, because the record could not hold it. Nothing of a refused row may stay behind."""

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from runner.record import (
    CaptureRow,
    EventRow,
    InstrumentRow,
    Journal,
    PartRow,
    PointRow,
    RunHeader,
    SettingRow,
)
from runner.record.rows import CalibrationRow

NAN, INF = float("nan"), float("inf")

BAD_POINTS = [
    ({"leg": 2}, "leg"),
    ({"leg": -1}, "leg"),
    ({"part": 2}, "part"),
    ({"plan_index": -1}, "plan_index"),
    ({"method": "guess"}, "method"),
    ({"quality": 8192}, "quality"),
    ({"quality": -1}, "quality"),
    ({"start_time": NAN}, "start_time"),
    ({"end_time": INF}, "end_time"),
]
BAD_SETTINGS = [
    ({"samples": 0}, "samples"),
    ({"samples": 300_000_000}, "samples"),
    ({"dtype": "uint16"}, "dtype"),
    ({"dtype": "float16"}, "dtype"),
    ({"interval": 0.0}, "interval"),
    ({"interval": INF}, "interval"),
    ({"first": NAN}, "first"),
    ({"v_scale": NAN}, "v_scale"),
    ({"i_offset": INF}, "i_offset"),
    ({"i_scale": 0.0}, "scale"),
    ({"detail": {"x": NAN}}, "detail"),
    ({"detail": {"x": object()}}, "detail"),
    ({"detail": {"x": "\ud800"}}, "Unicode"),
]
BAD_EVENTS = [
    ({"text": "a\0b"}, "NUL"),
    ({"text": "half a pair \ud800"}, "Unicode"),
    ({"kind": "\0"}, "NUL"),
    ({"level": "fatal"}, "level"),
    ({"t": NAN}, "event.t"),
]
BAD_INSTRUMENTS = [
    ({"role": "bench/lcr"}, "role"),
    ({"role": "chamber"}, "NXenvironment"),
    ({"nx_class": "NXthing"}, "NXthing"),
    ({"idn": "x\0"}, "NUL"),
    ({"calibration": {"gain": CalibrationRow(NAN, "1")}}, "gain"),
    ({"calibration": {"Gain": CalibrationRow(1.0, "1")}}, "Gain"),
]


@pytest.mark.parametrize(("change", "word"), BAD_POINTS)
def test_points(
    open_journal: Journal, make_point: Callable[..., PointRow], change: dict[str, Any], word: str
) -> None:
    with pytest.raises(ValueError, match=word):
        open_journal.add_point(replace(make_point(0), **change), [])
    assert open_journal.recorded() == frozenset()


@pytest.mark.parametrize(("change", "word"), BAD_SETTINGS)
def test_settings(open_journal: Journal, setting: SettingRow, change: dict[str, Any], word: str) -> None:
    with pytest.raises(ValueError, match=word):
        open_journal.setting(replace(setting, **change))


@pytest.mark.parametrize(("change", "word"), BAD_EVENTS)
def test_events(
    open_journal: Journal, make_point: Callable[..., PointRow], change: dict[str, Any], word: str
) -> None:
    row = replace(EventRow(1.0, "info", "note", "fine"), **change)
    with pytest.raises(ValueError, match=word):
        open_journal.event(row)
    with pytest.raises(ValueError, match=word):
        open_journal.add_point(make_point(0), [], [row])
    assert open_journal.recorded() == frozenset()


@pytest.mark.parametrize(("change", "word"), BAD_INSTRUMENTS)
def test_instruments(open_journal: Journal, change: dict[str, Any], word: str) -> None:
    with pytest.raises(ValueError, match=word):
        open_journal.instrument(replace(InstrumentRow("lcr", "NXsensor"), **change))


def test_captures(
    open_journal: Journal,
    make_point: Callable[..., PointRow],
    make_captures: Callable[..., Any],
    setting: SettingRow,
) -> None:
    number = open_journal.setting(setting)
    other = open_journal.setting(replace(setting, interval=2e-8))
    good = make_captures(0, number)
    short, wide = good[1].voltage[:-1], good[1].current.astype("int32")
    cases: list[tuple[list[CaptureRow], str]] = [
        ([good[0], good[0]], "repeat"),
        ([good[0], replace(good[1], repeat=-1)], "repeat"),
        ([good[0], replace(good[1], setting=other)], "share one"),
        ([replace(good[0], setting=99)], "not a setting"),
        ([good[0], replace(good[1], voltage=short)], "shape"),
        ([good[0], replace(good[1], current=wide)], "int32"),
        ([good[0], replace(good[1], t=NAN)], "t: must"),
    ]
    for captures, word in cases:
        with pytest.raises(ValueError, match=word):
            open_journal.add_point(make_point(0), captures)
        assert open_journal.recorded() == frozenset()
    assert open_journal.add_point(make_point(0), good) == 1


def test_captures_taken_by_hand_hold_numbers_only(
    open_journal: Journal,
    make_point: Callable[..., PointRow],
    make_captures: Callable[..., Any],
    setting: SettingRow,
) -> None:
    row = replace(setting, dtype="float64", v_scale=1.0, v_offset=0.0)
    number = open_journal.setting(row)
    good = make_captures(0, number, row)
    bad = good[1].voltage.copy()
    bad[17] = np.nan
    with pytest.raises(ValueError, match="not a number"):
        open_journal.add_point(make_point(0), [good[0], replace(good[1], voltage=bad)])
    assert open_journal.add_point(make_point(0), good) == 1


BAD_HEADERS: list[tuple[dict[str, Any], str]] = [
    ({"title": "a\0b"}, "title"),
    ({"start": NAN}, "start"),
    ({"kind": "demo"}, "kind"),
    ({"parts": ()}, "parts"),
    ({"parts": (PartRow("\0"),)}, "part 0"),
]


@pytest.mark.parametrize(("change", "word"), BAD_HEADERS)
def test_headers_are_refused_before_anything_is_made(
    tmp_path: Path, header: RunHeader, change: dict[str, Any], word: str
) -> None:
    with pytest.raises(ValueError, match=word):
        Journal.create(tmp_path / "run", replace(header, **change))
    assert not (tmp_path / "run").exists()
