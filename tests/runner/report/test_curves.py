"""The net of the map: it covers what was measured, exactly once, and nothing else."""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from matplotlib.figure import Figure

from runner.report.curves import _draw_ways_down, _mesh
from runner.report.digits import Scale
from runner.report.facts import Family, MethodFacts

NAN = np.nan


def family(temperatures, rows):
    inductance = np.array(rows, dtype=float)
    return Family(
        np.array(temperatures, dtype=float),
        np.arange(inductance.shape[1], dtype=float),
        inductance,
        inductance * 0,
    )


def areas(mesh):
    """Signed areas by the shoelace formula."""
    x, y = mesh.current[mesh.triangles], mesh.temperature_degC[mesh.triangles]
    return 0.5 * ((x[:, 1] - x[:, 0]) * (y[:, 2] - y[:, 0]) - (x[:, 2] - x[:, 0]) * (y[:, 1] - y[:, 0]))


def test_a_full_table_is_covered_whole():
    mesh = _mesh(family([0, 10, 30], [[3, 2, 1, 0.5]] * 3))
    assert np.all(areas(mesh) > 0)
    assert areas(mesh).sum() == pytest.approx(3 * 30)  # three ampere by thirty kelvin


def test_where_a_row_ends_sooner_the_map_ends_on_the_line_between_the_ends():
    mesh = _mesh(family([0, 10], [[3, 2, 1, 0.5], [3, 2, NAN, NAN]]))
    assert areas(mesh).sum() == pytest.approx((3 + 1) / 2 * 10)  # area of the trapezoid


def test_at_equal_currents_the_map_is_straight_in_temperature():
    """An edge joins each current to itself in the next row, so nothing is mixed along the current."""
    mesh = _mesh(family([0, 10], [[4, 3, 2, 1]] * 2))
    edges = {
        frozenset(edge)
        for triangle in mesh.triangles.tolist()
        for edge in zip(triangle, triangle[1:] + triangle[:1], strict=True)
    }
    for current in range(4):
        assert frozenset(np.flatnonzero(mesh.current == current).tolist()) in edges


@pytest.mark.parametrize(
    ("temperatures", "rows"),
    [
        ([25], [[3, 2, 1]]),
        ([25, 25], [[3, 2, 1], [3, 2, 1]]),
        ([0, 25], [[3, 2, 1], [NAN, 2, NAN]]),
        ([0, 25], [[NAN] * 3, [NAN] * 3]),
    ],
    ids=["one row", "one temperature", "one current", "nothing"],
)
def test_too_little_makes_no_map(temperatures, rows):
    assert _mesh(family(temperatures, rows)) is None


@given(st.lists(st.integers(1, 8), min_size=2, max_size=6))
def test_no_triangle_is_turned_over_whatever_the_rows_reach(lengths):
    rows = [[1.0 / (c + 1) if c <= reach else NAN for c in range(9)] for reach in lengths]
    mesh = _mesh(family(range(len(rows)), rows))
    expected = sum((a + b) / 2 for a, b in pairwise(lengths))
    assert np.all(areas(mesh) > 0)
    assert areas(mesh).sum() == pytest.approx(expected)


def test_a_way_down_is_drawn_where_it_is_another_curve_and_in_its_own_temperatures_colour():
    def way(temperature, differs):
        curves = {"ampere": [0.0, 1.0], "up_henry": [2e-6, 1e-6], "down_henry": [2e-6, 0.9e-6]}
        return {"temperature_degC": temperature, "branches_differ": differs, "curves": curves}

    net = family([0, 30], [[2e-6, 1e-6]] * 2)
    method = MethodFacts("bias", net, (), (), (), {"branches": [way(0.4, False), way(29.6, True)]})
    axes = Figure().subplots()
    _draw_ways_down(axes, net, method, ["tab:blue", "tab:red"], Scale(1.0, "A"), Scale(1e-6, "µH"))
    (line,) = axes.get_lines()
    assert line.get_color() == "tab:red"
    assert line.get_ydata() == pytest.approx([2.0, 0.9])
