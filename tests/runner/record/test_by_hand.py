"""Captures taken by hand become a run that reads like any other."""

import numpy as np
import pytest

from runner.errors import InputError
from runner.plan import load_captures_file
from runner.record import open_run, write_captures_run
from runner.record.by_hand import group_legs

CAPTURES = """\
title: Captures taken by hand
part: {label: DRUM-22-A, inductance: 22 uH, rated_current: 6 A, resistance: 18 mohm}
shunt: {resistance: 10 mohm, uncertainty: 0.1 %, series_inductance: 3 nH}
columns: {time: t, voltage: v_part, shunt_voltage: v_shunt}
captures:
  - {file: hot.csv, temperature: 100 degC}
  - {file: cold.npz, temperature: 25.1 degC}
"""


def ramp(width, *, interval=1e-8, samples=400):
    """A 22 µH part on 12 V: i = V t / L, closed form."""
    t = (np.arange(samples) - 40) * interval
    on = (t >= 0) & (t < width)
    current = 12 / 22e-6 * np.clip(t, 0, width)
    return t, np.where(on, 12.0, 0.0), current * 10e-3


@pytest.fixture
def folder(tmp_path):
    t, v, shunt = ramp(2e-6)
    np.savez(tmp_path / "cold.npz", t=t, v_part=v, v_shunt=shunt)
    rows = "\n".join(
        f"{a!r},{b!r},{c!r}" for a, b, c in zip(*map(np.ndarray.tolist, ramp(3e-6)), strict=True)
    )
    (tmp_path / "hot.csv").write_text(f"# taken at bench 2\nt,v_part,v_shunt\n{rows}\n")
    (tmp_path / "captures.yaml").write_text(CAPTURES)
    return tmp_path


def ingest(folder):
    loaded = load_captures_file(folder / "captures.yaml")
    return write_captures_run(loaded, into=folder / "runs", software="kneemap test", versions={})


def test_every_sample_comes_back_as_it_was(folder):
    run = open_run(ingest(folder))
    assert run.kind == "captures"
    assert run.plan_bytes == CAPTURES.encode()
    assert run.points["body_temperature"].tolist() == [25.1, 100.0]
    assert run.points["leg"].tolist() == [0, 1]
    for number, width in zip(run.points["point"].tolist(), (2e-6, 3e-6), strict=True):
        t, v, shunt = ramp(width)
        block = run.captures(int(number))
        np.testing.assert_allclose(block.time, t, atol=1e-15)
        np.testing.assert_array_equal(block.voltage[0], v)
        np.testing.assert_allclose(block.current[0], shunt / 10e-3, rtol=1e-15)


def test_the_width_shown_is_the_time_in_which_the_current_rose(folder):
    widths = open_run(ingest(folder)).points["pulse_width_setpoint"]
    np.testing.assert_allclose(
        widths, [2e-6, 3e-6], rtol=0.06
    )  # from 2 % to 98 % of the peak, by its definition


def test_all_bad_waveforms_are_named_at_once_and_nothing_is_written(folder):
    (folder / "hot.csv").write_text("t,v_part\n0,1\n")
    np.savez(folder / "cold.npz", t=np.arange(20.0), v_part=np.full(20, np.nan), v_shunt=np.zeros(20))
    with pytest.raises(InputError) as caught:
        ingest(folder)
    text = str(caught.value)
    assert "hot.csv:1: no column 'v_shunt'" in text
    assert "cold.npz: v_part: sample 0 is nan" in text
    assert not (folder / "runs").exists()


@pytest.mark.parametrize(
    ("temperatures", "legs"),
    [
        ([25.0, 25.1, 24.9], [[0, 1, 2]]),
        ([100.0, 25.0, 101.9, 25.5], [[1, 3], [0, 2]]),
        ([20.0, 21.5, 23.0], [[0, 1], [2]]),  # a chain of neighbours that spans 3 K is no leg of 2 K
        ([40.0], [[0]]),
    ],
)
def test_captures_within_two_kelvin_form_a_leg(temperatures, legs):
    assert [members for _, members in group_legs(temperatures)] == legs
