"""Flux laws against their closed forms, each other and an independent ODE solution."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad, solve_ivp

from mock_instruments.flux import FluxLaw, Memory, copper_resistance, saturation_current
from mock_instruments.spec import WorldSpec

LAWS = {
    "gapped": FluxLaw("gapped", 22e-6, 9.5, floor=0.06, knee_drift=-2.6e-3, inductance_drift=2e-4),
    "powder": FluxLaw("powder", 47e-6, 7.5, floor=0.03),
    "stepped": FluxLaw("stepped", 39e-6, 12.0, first_knee=0.35, first_share=0.45),
    "remanent": FluxLaw("remanent", 33e-6, 8.0, sharpness=4.0, memory=0.15),
    "tanh": FluxLaw("tanh", 100e-6, 10.0, floor=0.0),
    "linear": FluxLaw("linear", 100e-6, 1.0),
}


# R(T)/R(20) with alpha = 0.00393 /K (IEC 60028).
@pytest.mark.parametrize(
    ("temperature_degC", "ratio"),
    [(-40, 0.764200), (25, 1.019650), (85, 1.255450), (100, 1.314400), (125, 1.412650)],
)
def test_copper_law(temperature_degC, ratio):
    assert copper_resistance(1.0, temperature_degC) == pytest.approx(ratio, abs=1e-9)


def test_tanh_core_at_ten_ampere():
    """L0 = 100 uH, Is = 10 A at 10 A: λ 761.59416 uWb, L_diff 41.997434 uH, L_app 76.159416 uH."""
    branch = LAWS["tanh"].at(25.0).still()
    ten = np.asarray(10.0)
    assert branch.flux(ten) == pytest.approx(761.59416e-6, rel=1e-8)
    assert branch.slope(ten) == pytest.approx(41.997434e-6, rel=1e-8)
    assert branch.flux(ten) / 10.0 == pytest.approx(76.159416e-6, rel=1e-8)
    coenergy, _ = quad(lambda i: float(branch.flux(np.asarray(i))), 0.0, 10.0)
    assert coenergy == pytest.approx(4.3378083e-3, rel=1e-8)  # L0 Is² ln cosh 1


# x at which the differential inductance has fallen by 10/20/30 % (closed forms, tolerance 1e-6).
@pytest.mark.parametrize(
    ("law", "fractions"),
    [
        ("tanh", (0.3274502, 0.4812118, 0.6151220)),
        ("powder", (0.3333333, 0.5000000, 0.6546537)),  # arctan
    ],
)
def test_saturation_currents_of_the_textbook_laws(law, fractions):
    branch = FluxLaw(law, 50e-6, 10.0, floor=0.0).at(25.0).still()
    found = [saturation_current(branch, drop) / 10.0 for drop in (0.1, 0.2, 0.3)]
    assert found == pytest.approx(fractions, abs=1e-6)


@pytest.mark.parametrize("drop", [0.1, 0.2, 0.3, 0.6])
def test_saturation_current_of_the_sharp_law_is_its_closed_form(drop):
    """a + (1-a)(1 + x^p)^(-1-1/p) = 1-d solved for x by hand."""
    p, floor, knee = 6.0, 0.06, 9.5
    x = (((1 - drop - floor) / (1 - floor)) ** (-p / (p + 1)) - 1) ** (1 / p)
    law = FluxLaw("gapped", 22e-6, knee, sharpness=p, floor=floor)
    assert saturation_current(law.at(25.0).still(), drop) == pytest.approx(knee * x, rel=1e-12)


def test_a_law_that_never_falls_so_far_has_no_saturation_current():
    assert math.isnan(saturation_current(LAWS["linear"].at(25.0).still(), 0.1))
    assert math.isnan(saturation_current(FluxLaw("powder", 1e-5, 5.0, floor=0.8).at(25.0).still(), 0.3))


@pytest.mark.parametrize("name", LAWS)
@pytest.mark.parametrize("temperature_degC", [-40.0, 25.0, 125.0])
def test_slope_is_the_derivative_of_flux_and_falls_with_current(name, temperature_degC):
    curve = LAWS[name].at(temperature_degC)
    i = np.linspace(0.0, 25.0, 301)
    for branch in (curve.still(), curve.conditioned(), curve.growing(0.0), curve.growing(-1.0)):
        h = 1e-5
        difference = (branch.flux(i + h) - branch.flux(i - h)) / (2 * h)
        inner = slice(1, None)  # at zero a growing branch has a corner
        assert difference[inner] == pytest.approx(branch.slope(i)[inner], rel=2e-6)
        assert np.all(np.diff(branch.flux(i)) > 0)
    assert np.all(np.diff(curve.conditioned().slope(i)) <= 0)


@pytest.mark.parametrize("name", LAWS)
def test_the_fast_slope_is_the_slope(name):
    curve = LAWS[name].at(60.0)
    i = np.linspace(0.0, 20.0, 101)
    branches = [
        curve.still(),
        curve.conditioned(),
        curve.growing(0.3),
        curve.growing(-2.0),
        curve.growing(0.1, 3.0),
    ]
    for branch in [*branches, curve.growing(5.0)]:
        fast = branch.plain_slope()
        assert [fast(x) for x in i] == pytest.approx(branch.slope(i), rel=1e-13)


def test_without_memory_currents_of_both_signs_are_alike():
    for name in ("gapped", "powder", "stepped", "tanh", "linear"):
        branch = LAWS[name].at(25.0).still()
        assert branch.flux(np.asarray(-3.0)) == pytest.approx(-branch.flux(np.asarray(3.0)))


def test_initial_inductance_and_knee_drift_as_stated():
    law = FluxLaw(
        "gapped", 22e-6, 10.0, knee_drift=-2.6e-3, inductance_drift=2e-4, inductance_curvature=-1e-6
    )
    hot = law.at(125.0)
    assert hot.still().slope(np.asarray(0.0)) == pytest.approx(22e-6 * (1 + 0.02 - 0.01), rel=1e-12)
    ratio = saturation_current(hot.still(), 0.3) / saturation_current(law.at(25.0).still(), 0.3)
    assert ratio == pytest.approx(0.74, rel=1e-9)


@pytest.mark.parametrize(
    ("inductance", "knee", "floor"), [(0.0, 1.0, 0.1), (1e-6, -1.0, 0.1), (1e-6, 1.0, 1.0), (1e-6, 1.0, -0.1)]
)
def test_senseless_figures_are_refused(inductance, knee, floor):
    with pytest.raises(ValueError, match=r"inductance and knee|fraction"):
        FluxLaw("gapped", inductance, knee, floor=floor)


def test_a_drift_that_ends_the_law_is_refused():
    with pytest.raises(ValueError, match="no meaning"):
        FluxLaw("gapped", 22e-6, 10.0, knee_drift=-2e-2).at(125.0)


MEMORY = Memory(limit=1.2, reach=4.0, length=1.6)


@pytest.mark.parametrize(
    ("offset", "start"),
    [(0.0, 0.0), (-1.2, 0.0), (0.5, 0.0), (0.5, 3.0), (0.2, 5.0), (1.2, 0.0), (1.19, 0.0)],
)
def test_the_memory_follows_its_differential_equation(offset, start):
    """dh/di = max(0, target - h)/length, solved by scipy, against the closed form in the code."""
    i = np.linspace(start, 12.0, 80)
    solved = solve_ivp(
        lambda x, h: [max(0.0, 1.2 * min(1.0, x / 4.0) - h[0]) / 1.6],
        (start, 12.0), [offset], t_eval=i, rtol=1e-9, atol=1e-11, max_step=0.02,
    )  # fmt: skip
    h, growth = MEMORY.path(i, offset, start)
    assert h == pytest.approx(solved.y[0], abs=1e-6)
    assert growth == pytest.approx(np.maximum(0.0, 1.2 * np.minimum(1.0, i / 4.0) - h) / 1.6, abs=1e-12)


@given(
    offset=st.floats(-1.2, 1.2),
    first=st.floats(0.0, 15.0),
    second=st.floats(0.0, 15.0),
    start=st.floats(0.0, 3.0),
)
def test_going_on_from_a_stop_is_going_straight(offset, first, second, start):
    a, b = start + first, start + first + second
    straight, _ = MEMORY.path(np.asarray(b), offset, start)
    halfway, _ = MEMORY.path(np.asarray(a), offset, start)
    resumed, _ = MEMORY.path(np.asarray(b), float(halfway), a)
    assert resumed == pytest.approx(float(straight), abs=1e-9)


def test_a_part_that_remembers():
    """First shot, repeated shots and a reversed one differ, in the order a core with remanence shows."""
    curve = LAWS["remanent"].at(25.0)
    fresh, conditioned = curve.growing(0.0), curve.conditioned()
    reversed_ = curve.growing(-curve.memory.limit)
    isat = [saturation_current(branch, 0.3) for branch in (conditioned, fresh)]
    assert isat[0] < isat[1]  # what is remembered uses up some of the core's flux
    swing = [
        float(branch.flux(np.asarray(8.0)) - branch.flux(np.asarray(0.0)))
        for branch in (conditioned, fresh, reversed_)
    ]
    assert swing == sorted(swing)
    # Three large pulses leave less than a thousandth of the memory unwritten.
    offset = 0.0
    for _ in range(3):
        offset = curve.growing(offset).offset_at(10.0)
    assert offset == pytest.approx(curve.memory.limit, rel=1e-3)
    assert curve.growing(offset).offset_at(10.0) >= offset


def test_a_hotter_core_remembers_less():
    law = LAWS["remanent"]
    hot = FluxLaw("remanent", 33e-6, 8.0, memory=0.15, knee_drift=-2e-3).at(125.0)
    assert hot.kept(law.at(25.0).memory.limit) == pytest.approx(0.15 * 8.0 * 0.8)
    assert law.at(25.0).kept(-9.0) == -law.at(25.0).memory.limit


def test_the_demo_choke_saturates_where_the_plan_needs_it():
    """22 uH, knee 9.5 A: 30 % of the differential inductance is gone between 8 and 9 A at 25 degC, earlier when hot."""
    spec = WorldSpec.from_mapping({"parts": {"1": {"law": "gapped", "inductance": 22e-6, "knee": 9.5}}})
    law = spec.parts[1].law
    found = [saturation_current(law.at(t).still(), 0.3) for t in (-40.0, 25.0, 125.0)]
    assert 8.0 < found[1] < 9.0
    assert found == sorted(found, reverse=True)
