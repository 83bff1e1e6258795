"""The fit behind the soak: against closed forms of first-order lags."""

import numpy as np
import pytest

from runner.sweep.approach import fit_approach, reading_noise

SEED = 11


def relaxing(
    tau: float, *, count: int = 200, step: float = 15.0, noise: float = 0.01
) -> tuple[np.ndarray, ...]:
    """A body that starts 40 K below steady air: 40 exp(-t/tau)."""
    random = np.random.default_rng(SEED)
    time = np.arange(count) * step
    air = np.full(count, 85.0)
    return time, 85.0 - 40.0 * np.exp(-time / tau) + noise * random.standard_normal(count), air


@pytest.mark.parametrize("tau", [120.0, 420.0, 1300.0, 2400.0])
def test_the_rest_of_a_single_lag_is_bounded_from_above(tau: float) -> None:
    time, body, air = relaxing(tau)
    truth = 40.0 * np.exp(-time[-1] / tau)
    rest = fit_approach(time, body, air, final_air_degC=85.0, at=time[-1]).rest
    assert truth - 0.05 <= rest <= 1.5 * truth + 0.3  # 0.3 K: what an offset between two sensors leaves open


def test_the_noise_of_readings_is_found_on_a_slope() -> None:
    random = np.random.default_rng(SEED)
    values = np.linspace(0.0, 50.0, 4000) + 0.05 * random.standard_normal(4000)
    # Standard error of a standard deviation from 4000 values, median estimator: about 2 %.
    assert reading_noise(values) == pytest.approx(0.05, rel=0.08)


def test_a_shift_of_all_temperatures_changes_nothing() -> None:
    time, body, air = relaxing(420.0)
    plain = fit_approach(time, body, air, final_air_degC=85.0, at=time[-1])
    shifted = fit_approach(time, body + 100.0, air + 100.0, final_air_degC=185.0, at=time[-1])
    assert shifted.rest == pytest.approx(plain.rest, rel=1e-6)


def test_mirrored_temperatures_give_the_same_rest() -> None:
    time, body, air = relaxing(420.0)
    plain = fit_approach(time, body, air, final_air_degC=85.0, at=time[-1])
    mirrored = fit_approach(time, -body, -air, final_air_degC=-85.0, at=time[-1])
    assert mirrored.rest == pytest.approx(plain.rest, rel=1e-6)


def test_a_long_trace_is_thinned_and_says_the_same() -> None:
    short = fit_approach(*relaxing(1300.0, count=200, step=15.0), final_air_degC=85.0, at=199 * 15.0)
    long = fit_approach(*relaxing(1300.0, count=1000, step=3.0), final_air_degC=85.0, at=999 * 3.0)
    assert long.rest == pytest.approx(short.rest, abs=0.5)


def test_too_few_readings_are_refused() -> None:
    with pytest.raises(ValueError, match="at least 5"):
        fit_approach(np.arange(4.0), np.arange(4.0), np.arange(4.0), final_air_degC=0.0, at=0.0)
