"""Falling with one knee, or not: closed forms that do fall, one that rises first, one with two plateaus; drawn noise must
change none of the four verdicts.

Curves here carry a covariance that is put in by hand, with the drawn noise of just that covariance, so a false alarm is the
test's own and no fit's. Ten smooth bumps along the current move the logarithm of L, as a fit's free deviation does.
"""

import numpy as np
import pytest

from runner.extraction.curve import LegCurve, Scale
from runner.extraction.shape_test import judge_shape

KNEE = 10.0
CURRENT = np.linspace(0.0, 1.6 * KNEE, 763)
X = CURRENT / KNEE


def sharp(x, p=6.0):
    return (1 + x**p) ** (-1 - 1 / p)


# L/L_0: laws of the trade (tanh, Froehlich, arctangent, a sharp one like gapped ferrite) and two that break a claim.
FALLING = {
    "tanh": 1 / np.cosh(X) ** 2,
    "froehlich": 1 / (1 + X) ** 2,
    "arctangent": 1 / (1 + X**2),
    "sharp": 0.06 + 0.94 * sharp(X),
    "barely saturated": 1 - 0.02 * X,
    "constant": np.ones_like(X),
}
RISES = (1 + 0.08 * np.sin(np.pi * np.clip(X / 0.6, 0, 1)) ** 2) * (0.06 + 0.94 * sharp(X))  # +8 % at 3 A
STEPPED = 0.05 + 0.45 * sharp(X / 0.35) + 0.5 * sharp(X / 1.1)  # knees near 3.5 and 11 A

BUMPS = np.exp(-0.5 * ((X[:, None] - np.linspace(0.0, 1.6, 10)[None, :]) / 0.16) ** 2)


def leg(share, *, noise=1e-3, generator=None, henry=22e-6):
    """A leg of this shape, the logarithm of L known to ``noise`` at each bump; with a generator, off by as much."""
    value = henry * np.asarray(share)
    off = np.zeros(10) if generator is None else noise * generator.standard_normal(10)
    value = value * np.exp(BUMPS @ off)
    covariance = noise**2 * np.eye(10)
    return LegCurve(
        temperature_degC=25.0,
        current=CURRENT,
        inductance=value,
        flux=np.zeros_like(value),
        inductance_slopes=value[:, None] * BUMPS,
        flux_slopes=np.zeros((len(value), 10)),
        covariance=covariance,
        noise=covariance,
        delay=np.zeros((10, 10)),
        shifts={},
        fit=None,
        scale=Scale(1.0, 1.0),
    )


@pytest.mark.parametrize("name", FALLING)
def test_a_curve_that_falls_with_one_knee_passes(name):
    shape = judge_shape(leg(FALLING[name]))
    assert shape.is_falling
    assert shape.has_one_knee
    assert np.isnan(shape.rise_at)


@pytest.mark.parametrize("henry", [22e-6, 3.3e-3])
def test_a_curve_that_rises_first_is_told_with_its_height_and_place(henry):
    """8 % at 3 A, by construction; less what the knee takes off there, 0.4 %."""
    shape = judge_shape(leg(RISES, henry=henry))
    assert not shape.is_falling
    assert shape.rise == pytest.approx(0.08, abs=0.003)
    assert shape.rise_at == pytest.approx(3.0, abs=0.3)
    assert shape.has_one_knee


def test_a_dip_before_the_rise_counts_from_the_dip():
    """Falls by 5 % up to 2.5 A and comes back: the rise is over the lowest earlier value, whatever L_0 is."""
    dip = (1 - 0.05 * np.sin(np.pi * np.clip(X / 0.5, 0, 1)) ** 2) * (0.06 + 0.94 * sharp(X))
    over = dip - np.minimum.accumulate(dip)
    shape = judge_shape(leg(dip))
    assert 0.03 < over.max() < 0.05
    assert shape.rise == pytest.approx(over.max(), abs=0.001)  # 60 of the 763 points are looked at
    assert shape.rise_at == pytest.approx(CURRENT[np.argmax(over)], abs=0.3)


def test_a_rise_that_nobody_would_care_about_is_none():
    """0.2 % however certain (common practice, no source)."""
    small = (1 + 0.002 * np.sin(np.pi * np.clip(X / 0.6, 0, 1)) ** 2) * (0.06 + 0.94 * sharp(X))
    assert judge_shape(leg(small, noise=1e-6)).is_falling


def test_a_rise_within_its_uncertainty_is_none():
    """The same 8 % where L is known to 5 %: nobody can say."""
    assert judge_shape(leg(RISES, noise=0.05)).is_falling


def test_a_stepped_gap_has_two_knees():
    """The fall over log x goes as x^p (1 + x^p)^(-2 - 1/p): largest where (p + 1) x^p = p, at 0.975 knees for p = 6."""
    shape = judge_shape(leg(STEPPED))
    assert not shape.has_one_knee
    at = (6 / 7) ** (1 / 6)
    assert shape.knees == pytest.approx((3.5 * at, 11.0 * at), rel=0.06)
    assert shape.is_falling


def test_two_plateaus_within_their_uncertainty_are_not_told_apart():
    assert judge_shape(leg(STEPPED, noise=0.15)).has_one_knee


@pytest.mark.parametrize("noise", [1e-3, 1e-2])
@pytest.mark.parametrize("name", ["tanh", "froehlich", "sharp", "constant"])
def test_noise_makes_no_rise_and_no_second_knee(name, noise):
    """Forty draws each: a rise of four standard uncertainties by chance would be one in 30 000 a comparison."""
    generator = np.random.default_rng([62, list(FALLING).index(name)])
    for _ in range(40):
        shape = judge_shape(leg(FALLING[name], noise=noise, generator=generator))
        assert shape.is_falling
        assert shape.has_one_knee


def test_noise_hides_neither_a_rise_nor_a_step():
    """8 % and a half are many times what 0.5 % of noise makes uncertain."""
    generator = np.random.default_rng(63)
    for _ in range(40):
        rising = judge_shape(leg(RISES, noise=5e-3, generator=generator))
        stepped = judge_shape(leg(STEPPED, noise=5e-3, generator=generator))
        assert not rising.is_falling
        assert rising.rise == pytest.approx(0.08, abs=0.03)
        assert len(stepped.knees) == 2


# ------------------------------------------------------------------------------------ from captures


@pytest.mark.parametrize(
    ("shape", "top", "falls", "knees"),
    [
        (lambda i: 22e-6 * (0.06 + 0.94 * sharp(i / 10)), 13.0, True, 1),
        (
            lambda i: (
                22e-6 * (1 + 0.08 * np.sin(np.pi * np.clip(i / 6, 0, 1)) ** 2) * (0.06 + 0.94 * sharp(i / 10))
            ),
            13.0,
            False,
            1,
        ),
        (lambda i: 22e-6 * (0.05 + 0.45 * sharp(i / 3.5) + 0.5 * sharp(i / 11)), 15.0, True, 2),
    ],
    ids=["falling", "rising first", "two plateaus"],
)
def test_fitted_captures_have_the_shape_of_their_part(leg_of, tabulated, bench, shape, top, falls, knees):
    found = judge_shape(leg_of(tabulated(shape), bench(seed=64), top=top))
    assert found.is_falling is falls
    assert len(found.knees) == knees
    if not falls:
        assert found.rise == pytest.approx(0.08, abs=0.02)
