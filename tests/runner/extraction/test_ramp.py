"""From a mean waveform to a ramp, against the closed form of a pulse through a coil L behind its resistance R:

    i(t) = V/R (1 - exp(-t/T)), T = L/R;  ∫(v - R i) dt = L i;  a shunt's volts over its resistance read i + τ di/dt.

What the bench does to it (offsets, gains, skew, the shunt's inductance, a cut-off range) is put in here by hand, and must
be gone behind `make_ramp`. The pulse begins half-way between two samples, where the trapezoid rule counts it exactly; where
it does not, the first sample's error of at most V·h/2 is the fit's to find.
"""

import numpy as np
import pytest
from scipy.stats import norm

from runner.extraction.calibration import Calibration, Constant
from runner.extraction.mean_capture import Setting, average
from runner.extraction.ramp import BINS, make_ramp, pulse_edges, undithered

VOLTS, INDUCTANCE, RESISTANCE = 12.0, 22e-6, 0.5
SAMPLES, BEFORE = 1000, 200
INTERVAL = 20e-9
WIDTH = 700 * INTERVAL  # 14 us: a third of the time constant of 44 us
SHUNT = 10e-3


def current_at(t):
    inside = np.clip(t, 0.0, WIDTH)
    return np.where(
        (t > 0) & (t < WIDTH), VOLTS / RESISTANCE * -np.expm1(-inside * RESISTANCE / INDUCTANCE), 0.0
    )


def rate_at(t):
    return np.where((t > 0) & (t < WIDTH), (VOLTS - RESISTANCE * current_at(t)) / INDUCTANCE, 0.0)


def waveforms(*, skew=0.0, shunt_time=0.0, begin=0.5):
    """Volts and amperes as read [1, n]; ``begin``: where between two samples the pulse begins."""
    time = (np.arange(SAMPLES) - BEFORE + begin) * INTERVAL
    late = time - skew
    voltage = np.where((late > 0) & (late < WIDTH), VOLTS, 0.0)
    return time, voltage[None, :], (current_at(time) + shunt_time * rate_at(time))[None, :]


def ramp_of(calibration=None, *, zero_v=0.0, zero_i=0.0, gain_v=1.0, gain_i=1.0, setting=None, **more):
    time, voltage, current = waveforms(**more)
    mean = average(
        gain_v * voltage + zero_v, gain_i * current + zero_i, setting or Setting(INTERVAL, float(time[0]))
    )
    return make_ramp(mean, calibration or Calibration(), point=7, temperature_degC=61.0)


def flux_error(ramp):
    """λ from the ramp less L times its current, over the largest λ."""
    return (ramp.flux(RESISTANCE) - INDUCTANCE * ramp.current) / (INDUCTANCE * ramp.peak)


# ------------------------------------------------------------------------------------ what a ramp says


def test_flux_is_inductance_times_current():
    """The trapezoid rule on an exponential of 44 us in steps of 20 ns is exact to (h/T)²/12 = 2e-8."""
    assert np.abs(flux_error(ramp_of())).max() < 1e-6


def test_bins_are_means_over_their_edges():
    """∫ i dt over each bin by the closed form, over the bin's length; the midpoint rule errs by (length/T)²/24."""
    ramp = ramp_of()
    tau = INDUCTANCE / RESISTANCE

    def charge(t):
        return VOLTS / RESISTANCE * (t + tau * np.expm1(-t / tau))

    exact = np.diff(charge(ramp.edges)) / np.diff(ramp.edges)
    assert ramp.current == pytest.approx(exact, rel=1e-5)
    assert ramp.charge == pytest.approx(charge(ramp.time), rel=2e-3, abs=1e-9)
    assert ramp.time == pytest.approx(0.5 * (ramp.edges[1:] + ramp.edges[:-1]), abs=1e-12)
    # λ rises nearly straight through a bin: its variance there is (V' length)²/12.
    slope = VOLTS * np.diff(ramp.edges)
    assert ramp.spread == pytest.approx(slope**2 / 12, rel=0.35, abs=0.0)


def test_bins_cover_the_pulse_and_no_more():
    ramp = ramp_of()
    assert len(ramp.current) <= BINS
    assert np.all(np.diff(ramp.edges) > 0)
    assert 0 < ramp.edges[0] < 6 * INTERVAL
    assert WIDTH - 6 * INTERVAL < ramp.edges[-1] <= WIDTH
    assert ramp.width == pytest.approx(WIDTH, abs=1.01 * INTERVAL)
    assert ramp.peak == pytest.approx(float(current_at(np.array(WIDTH - 2.5 * INTERVAL))), rel=1e-3)
    assert (ramp.point, ramp.temperature_degC, ramp.interval) == (7, 61.0, INTERVAL)
    assert not ramp.is_cut


# ------------------------------------------------------------------------------------ what the bench did to it


@pytest.mark.parametrize(("zero_v", "zero_i"), [(0.3, 0.0), (0.0, -0.2), (-0.5, 0.7)])
def test_offsets_of_the_channels_are_gone(zero_v, zero_i):
    """Half a volt left in would be 7 uV s of 160 at the end."""
    assert np.abs(flux_error(ramp_of(zero_v=zero_v, zero_i=zero_i))).max() < 1e-6


def test_gains_and_the_true_shunt_are_divided_out():
    """The record took 10 mΩ; the shunt has 10.5 mΩ at 25 °C and 100 ppm/K more at 35 °C; both channels read too high."""
    true = 10.5e-3 * (1 + 100e-6 * 10)
    bench = Calibration(
        nominal_shunt=SHUNT,
        shunt=Constant(10.5e-3),
        tempco=Constant(100e-6),
        ambient_degC=Constant(35.0),
        voltage_gain=Constant(1.02),
        shunt_gain=Constant(0.97),
    )
    ramp = ramp_of(bench, gain_v=1.02, gain_i=0.97 * true / SHUNT)
    assert np.abs(flux_error(ramp)).max() < 1e-6
    assert ramp.peak == pytest.approx(ramp_of().peak, rel=1e-9)


@pytest.mark.parametrize("samples", [-8, -1, 0, 1, 3, 20])
def test_a_whole_number_of_samples_of_skew_is_undone(samples):
    late = samples * INTERVAL
    assert np.abs(flux_error(ramp_of(Calibration(skew=Constant(late)), skew=late))).max() < 1e-6


@pytest.mark.parametrize("samples", [-2.7, -0.4, 0.3, 1.4, 12.8])
def test_a_skew_between_samples_leaves_a_constant_of_less_than_half_a_sample(samples):
    """Where the voltage jumps is known to half a sample: V·h/2, the same all along, is what stays."""
    late = samples * INTERVAL
    error = flux_error(ramp_of(Calibration(skew=Constant(late)), skew=late)) * INDUCTANCE * ramp_of().peak
    assert np.ptp(error) < 1e-6 * INDUCTANCE * ramp_of().peak
    assert abs(error.mean()) <= 0.5 * VOLTS * INTERVAL


def test_a_skew_that_is_not_undone_would_be_seen():
    """The check above can fail: 20 samples of skew are V·20 h, 3 % of the flux."""
    assert np.abs(flux_error(ramp_of(skew=20 * INTERVAL))).max() > 0.025


def test_a_skew_that_is_to_be_found_is_left_to_the_fit():
    unknown = Calibration(skew=Constant(5 * INTERVAL, np.inf))
    assert np.array_equal(ramp_of(unknown).volt_seconds, ramp_of().volt_seconds)


@pytest.mark.parametrize("begin", [0.05, 0.25, 0.75, 0.95])
def test_where_the_pulse_begins_between_two_samples_is_one_constant(begin):
    """(begin - 1/2) V h of volt-seconds, which the trapezoid rule sees too much or too little."""
    error = flux_error(ramp_of(begin=begin)) * INDUCTANCE * ramp_of().peak
    assert error == pytest.approx(np.full(len(error), (0.5 - begin) * VOLTS * INTERVAL), rel=0.02)


@pytest.mark.parametrize("share", [0.02, 0.2, 0.5])
def test_inductance_of_the_shunt_is_undone(share):
    """τ up to half of the pulse. The jump of the reading at the start is known to half a sample, an error of
    (h/τ)²/24 of τ V/L, which decays with τ."""
    tau = share * WIDTH
    bench = Calibration(nominal_shunt=SHUNT, shunt=Constant(SHUNT), shunt_inductance=Constant(tau * SHUNT))
    ramp = ramp_of(bench, shunt_time=tau)
    assert ramp.shunt_time == pytest.approx(tau)
    assert np.abs(flux_error(ramp)).max() < 1e-4
    late = ramp_of(shunt_time=tau)  # the same left in: the reading leads by τ
    assert np.abs(flux_error(late)).max() > 0.5 * share
    assert late.peak > ramp.peak


# ------------------------------------------------------------------------------------ cut off, or nothing there


@pytest.mark.parametrize("share", [0.3, 0.6, 0.9])
def test_a_current_that_is_cut_off_ends_the_ramp_there(share):
    time, voltage, current = waveforms()
    full = float(current.max())
    codes_i = np.rint(current / full * 2000).astype(np.int16)
    codes_v = np.rint(voltage / 20.0 * 2000).astype(np.int16)
    top = int(2000 * share)
    codes_i = np.minimum(codes_i, top)
    setting = Setting(
        INTERVAL, float(time[0]), v_scale=0.01, i_scale=full / 2000, code_min=-2000, code_max=top
    )
    codes_v = np.minimum(codes_v, top - 1)  # the voltage keeps inside the range
    mean = average(codes_v, codes_i, setting)
    ramp = make_ramp(mean, Calibration())
    assert ramp.is_cut
    assert ramp.peak < share * full
    assert ramp.peak == pytest.approx(share * full, rel=0.03)
    assert ramp.edges[-1] < WIDTH


def test_a_spike_in_the_range_is_not_taken_for_the_pulse():
    """A ringing edge twice as high as the plateau, and a spike long before it."""
    voltage = np.zeros(1000)
    voltage[300:800] = 12.0
    voltage[300:302], voltage[50:52] = 24.0, 20.0
    assert pulse_edges(voltage) == (300, 800)


def test_no_pulse_and_a_pulse_of_too_few_samples_give_no_ramp():
    time = (np.arange(100) - 50 + 0.5) * INTERVAL
    quiet = np.random.default_rng(90).standard_normal((2, 4, 100)) * 1e-3
    setting = Setting(INTERVAL, float(time[0]))
    assert make_ramp(average(*quiet, setting), Calibration()) is None
    for samples, is_there in ((10, False), (16, False), (20, True)):
        on = (time > 0) & (time < samples * INTERVAL)
        voltage, current = np.where(on, VOLTS, 0.0), np.where(on, VOLTS / INDUCTANCE * time, 0.0)
        ramp = make_ramp(average(voltage[None, :], current[None, :], setting), Calibration())
        assert (ramp is not None) is is_there


# ------------------------------------------------------------------------------------ what is said about the noise


def test_noise_of_a_ramp_is_that_of_its_capture():
    """White noise σ a sample, r repeats: density σ² h/r, walk of ∫v dt σ √(h/r) a root second, offsets σ/√(n r)."""
    time, voltage, current = waveforms()
    generator = np.random.default_rng(91)
    shape = (8, SAMPLES)
    mean = average(
        voltage + 8e-3 * generator.standard_normal(shape),
        current + 5e-3 * generator.standard_normal(shape),
        Setting(INTERVAL, float(time[0])),
    )
    ramp = make_ramp(mean, Calibration())
    assert ramp.noise_density == pytest.approx(5e-3**2 * INTERVAL / 8, rel=0.25, abs=0.0)
    assert ramp.walk == pytest.approx(8e-3 * np.sqrt(INTERVAL / 8), rel=0.12)
    assert ramp.slope_uncertainty == pytest.approx(8e-3 / np.sqrt(8 * mean.pretrigger), rel=0.12)
    assert ramp.level_uncertainty == pytest.approx(5e-3 / np.sqrt(8 * mean.pretrigger), rel=0.12)


@pytest.mark.parametrize("sigma", [0.0, 0.1, 0.2, 0.3, 0.5, 1.0])
def test_what_rounding_leaves_in_a_mean(sigma):
    """Against rounding itself: root-mean-square over all phases of E[round(x + noise)] - x, by the normal distribution.

    Without noise it is q/√12 (a uniform distribution, GUM 4.3.7).
    """
    q, phases, codes = 0.02, np.linspace(-0.5, 0.5, 400, endpoint=False), np.arange(-12, 13)
    if sigma == 0.0:
        mean = np.rint(phases)
    else:
        upper = norm.cdf((codes[None, :] + 0.5 - phases[:, None]) / sigma)
        lower = norm.cdf((codes[None, :] - 0.5 - phases[:, None]) / sigma)
        mean = (upper - lower) @ codes
    left = float(np.sqrt(np.mean((mean - phases) ** 2)))
    # The noise as it is read, rounding's own twelfth of a step squared in it.
    read = np.sqrt(sigma**2 + 1 / 12)
    assert undithered(q, q * read) == pytest.approx(q * left, rel=0.12, abs=1e-6 * q)


def test_an_unknown_step_leaves_nothing():
    assert undithered(0.0, 0.1) == 0.0
