"""L(I,T) over all legs against a family in closed form:

    L_d = L_0(T)/cosh²(x), λ = L_0 I_k tanh x, ∫ I dλ = L_0 I_k² (x tanh x - ln cosh x), x = I/I_k(T),

with L_0 and I_k straight lines in T, as a power ferrite's are about (a knee that falls by a quarter in 100 K: common
practice, no source). Legs are the family itself with uncertainties that are put in by hand, so that no fit stands behind
these tests: what is checked is what lies between the legs, and what is said about it.
"""

from itertools import pairwise

import numpy as np
import pytest

from runner.extraction.curve import LegCurve, Scale
from runner.extraction.surface import Surface, left_out_error

NIGHT = (-40.0, 0.0, 25.0, 60.0, 85.0, 105.0, 125.0)
REACH = 1.3  # largest current of a leg, in units of its knee current I_k
POINTS = 763


def initial(t):
    return 22e-6 * (1 + 2e-4 * (np.asarray(t) - 25.0))


def knee(t):
    return 10.0 * (1 - 2.6e-3 * (np.asarray(t) - 25.0))


def inductance(i, t):
    return initial(t) / np.cosh(i / knee(t)) ** 2


def flux(i, t):
    return initial(t) * knee(t) * np.tanh(i / knee(t))


def energy(i, t):
    x = i / knee(t)
    return initial(t) * knee(t) ** 2 * (x * np.tanh(x) - np.log(np.cosh(x)))


def leg(t, *, own=0.0, shared=0.0, factor=1.0, reach=REACH, knee_factor=1.0):
    """The family's leg at ``t``, its inductance times ``factor`` and its knee times ``knee_factor``; one parameter, the log
    of its inductance, known to ``own`` by itself and moved by ``shared`` by a cause that all legs have in common."""
    current = np.linspace(0.0, reach * knee(t) * knee_factor, POINTS)
    l_d = factor * inductance(current / knee_factor, t)
    wb = factor * knee_factor * flux(current / knee_factor, t)
    return LegCurve(
        temperature_degC=t,
        current=current,
        inductance=l_d,
        flux=wb,
        inductance_slopes=l_d[:, None],
        flux_slopes=wb[:, None],
        covariance=np.array([[own**2]]),
        noise=np.array([[own**2]]),
        delay=np.zeros((1, 1)),
        shifts={"shunt": np.array([shared])} if shared else {},
        fit=None,
        scale=Scale(1.0, 1.0),
    )


def surface(temperatures=NIGHT, **more):
    return Surface([leg(t, **more) for t in temperatures])


# ------------------------------------------------------------------------------------ at the legs


@pytest.mark.parametrize(
    ("temperatures", "tolerance"),
    [
        # Linear interpolation on 400 points of the scaled current costs L'' h²/8, up to 1e-4 of L where L is small.
        ((25.0,), 1e-4),
        ((25.0, 125.0), 1e-4),
        # More legs smooth each other: each is passed as closely as a thousandth of what the knee does in all (0.4).
        ((-40.0, 25.0, 125.0), 5e-4),
        (NIGHT, 5e-4),
    ],
)
def test_at_a_leg_the_surface_is_that_leg(temperatures, tolerance):
    found = surface(temperatures)
    for t in temperatures:
        i = np.linspace(0.0, 0.999 * REACH * knee(t), 57)
        assert found(i, t) == pytest.approx(inductance(i, t), rel=tolerance)
        assert found.flux_linkage(i, t) == pytest.approx(flux(i, t), rel=tolerance, abs=1e-12)
        assert found.energy(i, t) == pytest.approx(energy(i, t), rel=tolerance, abs=1e-13)
        assert found.secant_inductance(i[1:], t) == pytest.approx(flux(i[1:], t) / i[1:], rel=tolerance)
        assert found.top(t) == pytest.approx(REACH * knee(t), rel=tolerance)


@pytest.mark.parametrize("share", [1e-4, 1e-3, 3e-3, 0.01])
def test_energy_and_flux_at_a_small_share_of_the_range(share):
    """½ L_0 I² and L_0 I, also between the first points of the grid, which lie 1/400 of the range apart."""
    i = share * REACH * knee(25.0)
    assert surface((25.0,)).energy(i, 25.0) == pytest.approx(initial(25.0) * i**2 / 2, rel=1e-3, abs=0.0)
    assert surface((25.0,)).flux_linkage(i, 25.0) == pytest.approx(initial(25.0) * i, rel=1e-3, abs=0.0)
    found = surface((25.0,), own=3e-3)
    assert found.energy_uncertainty(i, 25.0) == pytest.approx(
        3e-3 * initial(25.0) * i**2 / 2, rel=0.01, abs=0.0
    )


def test_secant_inductance_at_no_current_is_the_initial_one():
    assert surface().secant_inductance(0.0, 60.0) == pytest.approx(initial(60.0), rel=1e-5)


# ------------------------------------------------------------------------------------ between the legs


@pytest.mark.parametrize(
    ("temperatures", "tolerance"),
    [
        # A straight line in the logarithm of the knee errs by (gap/2)²/2·(2.6e-3/0.74)²: 0.2 % for the night's 40 K and
        # 1.5 % for 100 K; times 2 x tanh x = 2.2 at the top. The smoother bends and must do better than half of that.
        (NIGHT, 1e-3),
        ((-40.0, 25.0, 125.0), 12e-3),
    ],
)
def test_between_the_legs_it_is_the_family(temperatures, tolerance):
    found = surface(temperatures)
    for low, high in pairwise(temperatures):
        t = np.linspace(low + 1, high - 1, 9)[:, None]
        i = np.linspace(0.0, 1.0, 41)[None, :] * REACH * knee(high)
        assert found(i, t) == pytest.approx(inductance(i, t), rel=tolerance)
        assert found.flux_linkage(i, t) == pytest.approx(flux(i, t), rel=tolerance, abs=1e-12)
        assert found.energy(i, t)[:, 1:] == pytest.approx(energy(i, t)[:, 1:], rel=2 * tolerance)


def test_a_straight_line_of_the_inductance_at_fixed_current_would_not_do():
    """Why legs are laid over each other: half-way between 25 and 125 °C at 8 A, L_d is far from the mean of both."""
    found = surface((-40.0, 25.0, 125.0))
    naive = 0.5 * (inductance(8.0, 25.0) + inductance(8.0, 125.0)) / inductance(8.0, 75.0) - 1
    assert abs(naive) > 0.015
    assert abs(found(8.0, 75.0) / inductance(8.0, 75.0) - 1) < 0.4 * abs(naive)


def test_what_the_temperature_leaves_open_covers_the_error():
    """Exact legs, so all that is uncertain is what lies between them: no error beyond three standard uncertainties."""
    found = surface((-40.0, 25.0, 125.0))
    t = np.concatenate([np.linspace(-35, 20, 12), np.linspace(30, 120, 19)])[:, None]
    i = np.linspace(0.0, 9.5, 39)[None, :]
    inside = np.isfinite(found(i, t))
    error = np.abs(found(i, t) - inductance(i, t))[inside]
    assert inside.mean() > 0.9
    # A millionth of the value for the grid's own interpolation where nothing is left open.
    assert np.all(error < 3 * found.uncertainty(i, t)[inside] + 3e-5 * inductance(i, t)[inside])


# ------------------------------------------------------------------------------------ outside


@pytest.mark.parametrize(
    ("i", "t", "inside"),
    [
        (0.0, 25.0, True),
        (-1e-6, 25.0, False),
        (13.0, 25.0, True),  # 1.3 knees of 10 A
        (13.001, 25.0, False),
        (5.0, -40.5, True),  # a set-point is not met to the last tenth of a kelvin
        (5.0, -41.0, False),
        (5.0, 125.5, True),
        (5.0, 126.0, False),
        (9.6, 125.0, True),  # 1.3 knees of 7.4 A
        (9.7, 125.0, False),
        (np.nan, 25.0, False),
        (5.0, np.nan, False),
    ],
)
def test_outside_what_was_measured_the_answer_is_nan(i, t, inside):
    found = surface()
    for answer in (
        found,
        found.uncertainty,
        found.flux_linkage,
        found.flux_uncertainty,
        found.secant_inductance,
        found.energy,
        found.energy_uncertainty,
    ):
        assert bool(np.isfinite(answer(i, t))) is inside


def test_between_two_legs_the_smaller_reach_counts():
    """In units of the knee: the hot leg was driven to 0.8 knees, the cold one to 1.3; beyond 0.8 nobody knows."""
    found = Surface([leg(25.0), leg(75.0, reach=0.8)])
    assert found.top(50.0) == pytest.approx(0.8 * knee(50.0), rel=3e-3)  # the knee by a line in its log
    assert found.top(25.0) == pytest.approx(1.3 * knee(25.0))
    assert found.top(75.0) == pytest.approx(0.8 * knee(75.0))
    assert np.isnan(found(0.82 * knee(50.0), 50.0))
    assert np.isnan(found.top(80.0))
    assert found.at(80.0) is None


def test_legs_that_never_reached_a_knee_still_give_a_surface():
    """Up to 0.15 knees L_d falls by 2 %: nothing to lay them over each other by, and nothing that moves."""
    found = surface((25.0, 75.0, 125.0), reach=0.15)
    i = np.linspace(0.0, 0.14 * knee(125.0), 20)
    assert found(i, 100.0) == pytest.approx(inductance(i, 100.0), rel=3e-3)


# ------------------------------------------------------------------------------------ shapes, datasets


def test_currents_and_temperatures_are_broadcast():
    found = surface()
    i, t = np.linspace(0, 8, 5), np.array([0.0, 25.0, 200.0])
    grid = found(i[None, :], t[:, None])
    assert grid.shape == (3, 5)
    assert np.isnan(grid[2]).all()
    assert grid[1, 3] == found(i[3], 25.0)
    assert found(6.0, 25.0).shape == ()


def test_dataset_names_its_axes_and_units():
    made = surface().to_dataset(np.linspace(0.0, 8.0, 9), [0.0, 50.0])
    assert dict(made.sizes) == {"temperature_degC": 2, "current": 9}
    assert made["differential_inductance"].sel(temperature_degC=0.0, current=8.0) == pytest.approx(
        float(inductance(8.0, 0.0)), rel=1e-4
    )
    assert made["flux_linkage"].attrs["units"] == "Wb"
    assert made["energy"].sel(temperature_degC=0.0, current=8.0) == pytest.approx(
        float(energy(8.0, 0.0)), rel=1e-4
    )
    every = surface().to_dataset([1.0])
    assert every["temperature_degC"].values.tolist() == list(NIGHT)
    assert "incremental_inductance" in Surface([leg(25.0)], kind="incremental").to_dataset([1.0])


# ------------------------------------------------------------------------------------ uncertainty


@pytest.mark.parametrize("answer", ["inductance", "flux", "energy"])
def test_one_leg_hands_its_uncertainty_on(answer):
    """Own 0.3 % and shared 0.4 % of everything: 0.5 % (GUM 5.1.2)."""
    found = surface((25.0,), own=3e-3, shared=4e-3)
    i = np.linspace(0.5, 12.5, 9)
    value, u = {
        "inductance": (found(i, 25.0), found.uncertainty(i, 25.0)),
        "flux": (found.flux_linkage(i, 25.0), found.flux_uncertainty(i, 25.0)),
        "energy": (found.energy(i, 25.0), found.energy_uncertainty(i, 25.0)),
    }[answer]
    assert u / value == pytest.approx(np.full(9, 5e-3), rel=1e-3)


def test_flux_and_energy_at_no_current_are_known():
    found = surface(own=3e-3, shared=4e-3)
    assert found.flux_uncertainty(0.0, 40.0) == 0.0
    assert found.energy_uncertainty(0.0, 40.0) == 0.0
    assert found.uncertainty(0.0, 40.0) > 0.0


@pytest.mark.parametrize(
    ("t", "share"), [(25.0, 1.0), (75.0, 0.5**0.5), (50.0, (0.75**2 + 0.25**2) ** 0.5), (125.0, 1.0)]
)
def test_between_two_legs_own_uncertainties_average_and_shared_ones_do_not(t, share):
    """On the line between two legs: √(w² + (1 - w)²) of the own 0.3 %, the whole of the shared 0.4 %."""
    own, shared = (surface((25.0, 125.0), **{kind: size}) for kind, size in (("own", 3e-3), ("shared", 4e-3)))
    i = np.linspace(0.0, 7.0, 8)
    assert own.uncertainty(i, t) / own(i, t) == pytest.approx(np.full(8, 3e-3 * share), rel=2e-3)
    assert shared.uncertainty(i, t) / shared(i, t) == pytest.approx(np.full(8, 4e-3), rel=2e-3)


def test_drawn_legs_err_as_much_as_is_said():
    """60 nights whose seven legs each are off by their own 0.5 %: mean square of error over uncertainty is 1, at the legs
    and between. With 60 draws the mean square of one place is known to 18 %; places differ, since a night's smoother
    chooses how much to believe."""
    generator = np.random.default_rng(61)
    t = np.array([-40.0, -20.0, 25.0, 45.0, 95.0, 125.0])[:, None]
    i = np.array([0.0, 3.0, 6.0])[None, :]
    squares = []
    for _ in range(60):
        off = 1 + 5e-3 * generator.standard_normal(7)
        found = Surface([leg(at, own=5e-3, factor=f) for at, f in zip(NIGHT, off, strict=True)])
        squares.append(((found(i, t) - inductance(i, t)) / found.uncertainty(i, t)) ** 2)
    mean = np.mean(squares, axis=0)
    assert 0.6 < mean.mean() < 1.4
    assert np.all(mean > 0.4)
    assert np.all(mean < 1.8)


# ------------------------------------------------------------------------------------ left out


def test_a_family_that_is_straight_in_its_logarithms_is_guessed_exactly():
    """Exponentials in T with one shape: a line through the logarithms has nothing left to guess."""
    legs = []
    for t in NIGHT:
        base = leg(25.0)
        size, place = np.exp(2e-4 * (t - 25)), np.exp(-2.6e-3 * (t - 25))
        legs.append(
            LegCurve(
                t, base.current * place, base.inductance * size, base.flux * size * place,
                base.inductance_slopes, base.flux_slopes, base.covariance, base.noise, base.delay, {}, None, base.scale,
            )
        )  # fmt: skip
    error = left_out_error(Surface(legs))
    assert error["largest"] < 1e-4


def test_a_leg_that_is_one_percent_off_is_seen():
    """The others say what it should be, to far better than 1 %."""
    legs = [leg(t, factor=1.01 if t == 60.0 else 1.0) for t in NIGHT]
    error = left_out_error(Surface(legs))
    assert 0.008 < error["largest"] < 0.015
    assert 0.002 < error["rms"] < error["largest"]
    assert left_out_error(surface())["largest"] < 0.002


@pytest.mark.parametrize(("count", "is_told"), [(1, False), (2, False), (3, False), (4, True), (7, True)])
def test_fewer_than_four_legs_have_nothing_to_leave_out(count, is_told):
    assert (left_out_error(surface(NIGHT[:count])) is not None) is is_told
