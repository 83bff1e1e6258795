"""The curve as the core sees it, against magnetics' closed forms: H = N I/l, B = λ/(N A), and the permeability of a toroid,
L = μ0 μ N² A/l. The part is λ = L0 Is tanh(I/Is): where L_d has fallen by d, tanh = √d, so B = L0 Is √d/(N A)."""

from types import SimpleNamespace

import numpy as np
import pytest

from runner.extraction.core_view import at_knees, core_curve

TURNS, AREA, PATH = 15, 52e-6, 46e-3
INITIAL, KNEE = 22e-6, 10.0
MU_0 = 1.25663706127e-6  # H/m, CODATA 2022, from memory
DROPS = (0.1, 0.2, 0.3)


def leg(temperature_degC=25.0, knee=KNEE):
    """What `core_curve` reads of a leg: 801 points up to 1.5 times the knee current."""
    current = np.linspace(0.0, 1.5 * knee, 801)
    return SimpleNamespace(
        temperature_degC=temperature_degC,
        current=current,
        flux=INITIAL * knee * np.tanh(current / knee),
        inductance=INITIAL / np.cosh(current / knee) ** 2,
    )


def knees(legs):
    """acosh(1/√(1 - d)) knee currents, `found[drop][leg]`."""
    return {
        drop: [
            SimpleNamespace(value=each.current[-1] / 1.5 * np.arccosh(1 / np.sqrt(1 - drop))) for each in legs
        ]
        for drop in DROPS
    }


def test_a_worked_core():
    """15 turns on 46 mm at 8 A: 2608.7 A/m. 22 uH·10 A·tanh 0.8 over 15·52 mm²: 187.3 mT. 22 uH is μ = 68.8."""
    curve = core_curve(leg(), turns=TURNS, area=AREA, path=PATH)
    assert np.interp(2608.6957, curve.field, leg().current) == pytest.approx(8.0, rel=1e-6)
    assert np.interp(2608.6957, curve.field, curve.flux_density) == pytest.approx(0.187293, rel=1e-4)
    # 22e-6·46e-3/(4π·1e-7·225·52e-6) by hand.
    assert curve.permeability[0] == pytest.approx(68.831, rel=1e-4)


def test_permeability_is_that_of_a_toroid():
    curve = core_curve(leg(), turns=TURNS, area=AREA, path=PATH)
    assert MU_0 * curve.permeability[0] * TURNS**2 * AREA / PATH == pytest.approx(INITIAL, rel=1e-9)
    # The differential one is the slope of B over H.
    slope = np.gradient(curve.flux_density, curve.field) / MU_0
    assert curve.permeability[5:-5] == pytest.approx(slope[5:-5], rel=1e-4)


def test_field_energy_is_the_parts_energy():
    """∫ H dB over the core's volume A·l is ∫ I dλ: a wrong power of the turns anywhere breaks it."""
    part = leg()
    curve = core_curve(part, turns=TURNS, area=AREA, path=PATH)
    stored = np.trapezoid(curve.field, curve.flux_density) * AREA * PATH
    assert stored == pytest.approx(np.trapezoid(part.current, part.flux), rel=1e-12)


def test_flux_density_at_the_knee_of_each_leg():
    legs = [leg(-40.0, 11.0), leg(25.0), leg(125.0, 8.0)]
    rows = at_knees(legs, knees(legs), turns=TURNS, area=AREA, path=PATH)
    assert [(row["drop"], row["temperature_degC"]) for row in rows] == [
        (drop, at) for drop in DROPS for at in (-40.0, 25.0, 125.0)
    ]
    for row in rows:
        knee = {-40.0: 11.0, 25.0: 10.0, 125.0: 8.0}[row["temperature_degC"]]
        drop = row["drop"]
        # Interpolation between 801 points errs by h²/8 of the second derivative: below 1e-5.
        assert row["tesla"] == pytest.approx(INITIAL * knee * np.sqrt(drop) / (TURNS * AREA), rel=1e-5)
        assert row["ampere_per_metre"] == pytest.approx(
            TURNS * knee * np.arccosh(1 / np.sqrt(1 - drop)) / PATH, rel=1e-9
        )
        assert row["relative_permeability"] == pytest.approx((1 - drop) * 68.831, rel=1e-4)


def test_a_knee_that_was_not_reached_has_no_row():
    legs = [leg(25.0), leg(125.0, 8.0)]
    found = knees(legs)
    found[0.3][0] = None
    rows = at_knees(legs, found, turns=TURNS, area=AREA, path=PATH)
    assert [(row["drop"], row["temperature_degC"]) for row in rows if row["drop"] == 0.3] == [(0.3, 125.0)]
    assert len(rows) == 5
