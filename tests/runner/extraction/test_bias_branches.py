"""Way up and way down of the bias method: split, compared, and named as different only where they are."""

import numpy as np
import pytest

from runner.extraction.bias import Readings, bias_leg
from runner.extraction.bias_branches import compare_branches, say_difference, split
from runner.extraction.calibration import Calibration, Constant
from runner.extraction.drift import at_one_temperature

SEED = 4242
UP = np.linspace(0.0, 10.0, 21)
CURRENT = np.concatenate([UP, UP[-2::-1]])
NOISE = 1e-4  # of a reading


def incremental(current, *, level=47e-6, knee=7.5):
    """Permeability of a powder core against bias, 1/(1 + (I/knee)²) with a floor: the form of catalogues."""
    return level * (0.03 + 0.97 / (1 + (current / knee) ** 2))


def readings(gap=0.0, *, current=CURRENT, level=47e-6, degC=25.0, warm=0.0, seed=SEED, heat=0.0):
    """A series up and down; on the way down the inductance is smaller by ``gap`` of L_0 at mid-current, and the part
    warms by ``warm`` K over the series, which takes 0.1 % of L per kelvin."""
    rng = np.random.default_rng(seed)
    temperature = degC + np.linspace(0.0, warm, len(current))
    true = incremental(current, level=level) * (1 - 1e-3 * (temperature - 25.0))
    is_down = np.arange(len(current)) > int(np.argmax(current))
    true = true - gap * level * np.where(is_down, np.sin(np.pi * current / 10.0), 0.0)
    read = true * (1 + NOISE * rng.standard_normal(len(current)))
    return Readings(current, read, temperature, np.full(len(current), heat))


def branches_of(series, calibration=None, degC=25.0):
    up, down = split(series)
    legs = [bias_leg(way, calibration or Calibration(), temperature_degC=degC) for way in (up, down)]
    return compare_branches(*legs)


def test_the_series_is_split_at_its_largest_current_which_belongs_to_both_ways():
    up, down = split(readings())
    np.testing.assert_array_equal(up.current, UP)
    np.testing.assert_array_equal(down.current, UP[::-1])
    assert down.inductance[0] == up.inductance[-1]


def test_a_series_that_ends_at_the_top_has_no_way_down():
    up, down = split(readings(current=UP))
    assert down is None
    assert len(up.current) == len(UP)


@pytest.mark.parametrize("seed", range(SEED, SEED + 6))
def test_one_and_the_same_curve_both_ways_is_not_called_different(seed):
    branches = branches_of(readings(seed=seed))
    assert not branches.differ
    assert say_difference([branches]) is None


@pytest.mark.parametrize("gap", [0.01, -0.02])
def test_a_core_that_remembers_shows_by_how_much_and_where(gap):
    branches = branches_of(readings(gap))
    assert branches.differ
    assert branches.difference == pytest.approx(-gap, abs=3 * branches.difference_uncertainty + 2e-4)
    assert branches.at == pytest.approx(5.0, abs=0.5)
    said = say_difference([branches])
    assert ("below" if gap > 0 else "above") in said
    assert "remembers" in said
    row = branches.as_row(1.96)
    assert row["low"] < row["largest_difference_share"] < row["high"]


def test_a_wrong_meter_gain_moves_both_ways_alike():
    """It is in the interval of L_0 and not in that of the difference."""
    calibration = Calibration(meter_gain=Constant(1.0, 5e-3))
    sure, unsure = branches_of(readings(0.01)), branches_of(readings(0.01), calibration)
    assert unsure.difference_uncertainty == pytest.approx(sure.difference_uncertainty, rel=1e-6)


def test_a_part_that_warms_between_the_ways_is_no_core_that_remembers():
    """5 K between the ways look like 0.5 % of memory, until each reading is brought to its leg's temperature."""
    from runner.extraction.calibration import Calibration as Bench
    from runner.extraction.drift import brought_by
    from runner.extraction.surface import Surface

    legs, series = [], []
    for degC in (0.0, 25.0, 50.0):
        one = readings(warm=10.0, degC=degC, seed=SEED + int(degC))
        series.append(one)
        at = float(one.temperature_degC.mean())
        legs.append(bias_leg(split(one)[0], Bench(), temperature_degC=at))
    down = bias_leg(split(series[1])[1], Bench(), temperature_degC=legs[1].temperature_degC)
    assert compare_branches(legs[1], down).differ
    straight = at_one_temperature(legs, kind="incremental")
    there = brought_by(Surface(straight, kind="incremental"), down)
    assert not compare_branches(straight[1], there).differ


def test_what_heating_leaves_open_widens_the_interval_and_is_named():
    """2 K unsure at 0.1 % a kelvin: 0.2 % of L_0, beside next to nothing."""

    def legs(heat):
        made = [
            bias_leg(
                split(readings(degC=degC, heat=heat, seed=SEED + k))[0], Calibration(), temperature_degC=degC
            )
            for k, degC in enumerate((0.0, 25.0, 50.0))
        ]
        return at_one_temperature(made, kind="incremental")

    cool, warm = legs(0.0)[1].initial_inductance(), legs(2.0)[1].initial_inductance()
    assert "self-heating" not in cool.shared
    assert abs(warm.shared["self-heating"]) == pytest.approx(2e-3 * 47e-6, rel=0.1)
    assert warm.uncertainty > 1.9e-3 * 47e-6
