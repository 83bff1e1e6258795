"""The worked examples of JCGM 101:2008 through our drawing code, and our own intervals against it."""

import numpy as np
import pytest

from runner.extraction.calibration import Calibration, Constant
from runner.extraction.knee_draws import draw_knees
from runner.extraction.monte_carlo import normal, rectangular, simulate, summarise

TRIALS = 400_000


def total(**inputs):
    return sum(inputs.values())


@pytest.mark.parametrize(
    ("inputs", "uncertainty", "half", "tolerance"),
    [
        # 9.2.2 four unit normals; 9.2.3 four rectangular of u = 1; 9.2.4 three of u = 1 and one of u = 10.
        ({f"x{k}": normal(0.0, 1.0) for k in range(4)}, 2.00, 3.92, 0.02),
        ({f"x{k}": rectangular(-np.sqrt(3), np.sqrt(3)) for k in range(4)}, 2.00, 3.88, 0.02),
        (
            {f"x{k}": rectangular(-np.sqrt(3), np.sqrt(3)) for k in range(3)}
            | {"x3": rectangular(-10 * np.sqrt(3), 10 * np.sqrt(3))},
            10.1, 17.0, 0.07,
        ),
    ],
)  # fmt: skip
def test_additive_models(inputs, uncertainty, half, tolerance):
    result = summarise(simulate(total, inputs, np.random.default_rng(9), TRIALS))
    assert result.mean == pytest.approx(0.0, abs=3 * uncertainty / np.sqrt(TRIALS) * 1.5)
    assert result.uncertainty == pytest.approx(uncertainty, rel=0.01)
    assert result.symmetric == pytest.approx((-half, half), abs=tolerance)


def test_mass_calibration():
    """9.3: published MC mean 1.2341, u 0.0754 mg, shortest 95 % interval [1.0834, 1.3825] mg."""

    def deviation(m_rc, dm, a, rho_w, rho_r):
        return (m_rc + dm) * (1 + (a - 1.2) * (1 / rho_w - 1 / rho_r)) - 100_000.0

    inputs = {
        "m_rc": normal(100_000.0, 0.050),
        "dm": normal(1.234, 0.020),
        "a": rectangular(1.10, 1.30),
        "rho_w": rectangular(7000.0, 9000.0),
        "rho_r": rectangular(7950.0, 8050.0),
    }
    result = summarise(simulate(deviation, inputs, np.random.default_rng(3), 1_000_000))
    assert result.mean == pytest.approx(1.2341, abs=0.0005)
    assert result.uncertainty == pytest.approx(0.0754, abs=0.0005)
    # The minimum of the width is flat, so its place moves more than its value does.
    assert result.shortest == pytest.approx((1.0834, 1.3825), abs=0.004)
    assert result.shortest[1] - result.shortest[0] == pytest.approx(0.2991, abs=0.002)


def test_drawn_saturation_currents_agree_with_the_budget(ramps_of, bench, tanh_part):
    """The budget's combined uncertainty, less what it allows for the model (which is not drawn), is that of the draws:
    300 draws know a standard deviation to 4 %."""
    from runner.extraction.pulse_leg import pulse_leg

    calibration = Calibration(
        shunt=Constant(1.0, 1e-3),
        voltage_gain=Constant(1.0, 5e-4),
        shunt_gain=Constant(1.0, 5e-4),
        skew=Constant(0.0, 2e-9),
    )
    setup = bench(samples=200, widths=8, current_noise=0.02)
    ramps = ramps_of(tanh_part, setup, 14.0, calibration)
    leg = pulse_leg(ramps, calibration, temperature_degC=25.0, resistance=0.02, resistance_uncertainty=1e-4)
    drawn = draw_knees(
        leg, calibration, drops=(0.3,), resistance_uncertainty=1e-4, trials=300,
        generator=np.random.default_rng(8),
    )[:, 0]  # fmt: skip
    knee = leg.knee(0.3)
    without_model = np.sqrt(knee.uncertainty**2 - knee.own["model"] ** 2)
    result = summarise(drawn)
    assert result.uncertainty == pytest.approx(without_model, rel=0.15)
    assert result.mean == pytest.approx(knee.value, abs=0.3 * knee.uncertainty)
