"""Labels that do not overlap, colours that keep their distance."""

import matplotlib
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from runner.report import look


@pytest.mark.parametrize(
    ("wanted", "gap", "expected"),
    [
        ([0.0, 1.0, 2.0], 0.5, [0.0, 1.0, 2.0]),  # nothing to do
        ([1.0, 1.0], 0.5, [0.75, 1.25]),  # two on one place part evenly
        ([0.0, 0.1, 5.0], 1.0, [-0.45, 0.55, 5.0]),
        ([2.0, 0.0, 2.0], 1.0, [1.5, 0.0, 2.5]),  # the order given is kept
        ([], 1.0, []),
    ],
)
def test_labels_move_apart_as_little_as_needed(wanted, gap, expected):
    assert look.spread(wanted, gap) == pytest.approx(expected)


@given(st.lists(st.floats(-10, 10), max_size=12), st.floats(0.01, 2))
def test_labels_never_overlap_and_keep_their_order(wanted, gap):
    places = look.spread(wanted, gap)
    order = np.argsort(wanted, kind="stable")
    assert np.all(np.diff(np.array(places)[order]) >= gap * (1 - 1e-6))
    if wanted:
        assert np.mean(places) == pytest.approx(np.mean(wanted), abs=1e-6)


def test_temperatures_differ_in_lightness_so_that_a_grey_copy_can_be_read():
    """CIE lightness rises with temperature; the palest line still stands off white paper (L* = 100)."""
    colours = look.temperature_colours([-40, 0, 25, 60, 85, 105, 125])
    lightness = [_lightness(colour) for colour in colours]
    assert np.all(np.diff(lightness) > 3)
    assert lightness[-1] < 75


def test_one_temperature_is_no_special_case():
    assert len(look.temperature_colours([25.0, 25.0])) == 2
    assert look.temperature_colours([]) == []


@pytest.mark.parametrize(
    ("temperatures", "names"),
    [
        ([-40.1, 25.2], ["−40 °C", "25 °C"]),
        (
            [25.1, 25.3, 85.0],
            ["25.1 °C", "25.3 °C", "85.0 °C"],
        ),  # whole degrees would give two lines one name
    ],
)
def test_lines_have_names_of_their_own(temperatures, names):
    assert look.temperature_names(temperatures) == names


def test_the_settings_of_others_are_left_alone():
    before = dict(matplotlib.rcParams)
    with look.settings():
        assert matplotlib.rcParams["svg.hashsalt"] == "kneemap"
    assert dict(matplotlib.rcParams) == before


def _lightness(colour):
    """CIE 1976 L* of an sRGB colour (IEC 61966-2-1 for the transfer curve, CIE 15 for L*)."""
    rgb = np.array(matplotlib.colors.to_rgb(colour))
    linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
    luminance = float(linear @ [0.2126, 0.7152, 0.0722])
    return 116 * luminance ** (1 / 3) - 16
