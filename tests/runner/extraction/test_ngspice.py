"""Extraction against a circuit simulator that nobody here wrote: ngspice makes the captures.

The circuit: a stiff rail behind a resistance, a switch, the part (copper in series with a saturating core), a shunt with
series inductance to ground, a freewheel diode. The core is controlled by its flux: a capacitor of 1 uF integrates the
voltage across it to a node whose volts are microwebers, and a behavioural source drives i = g(λ); so λ never has to be
found by iteration, and g has its inverse slope, the differential inductance L_d = 1/g'(λ), in closed form:

* gapped ferrite, a linear gap in series with a tanh core: i = λ/L + Ic atanh(λ/λs); L_d = 1/(1/L + (Ic/λs)/(1 − (λ/λs)²))
* powder (Froehlich): i = λ/(L0 − λ/Is); L_d = L0/(1 + i/Is)²
* arctangent: i = Is tan(λ/(L0 Is)); L_d = L0/(1 + (i/Is)²)

The fit has the last two among its laws, the first it does not know.

What a bench would know goes to the extraction (shunt, its inductance, winding resistance); the law does not. Waveforms
are digitized with 12 bits, noise of half a step and eight repeats before they get there, as on the mock bench.
"""

import shutil
import subprocess
from dataclasses import dataclass, replace

import numpy as np
import pytest

from runner.extraction.calibration import Calibration, Constant, copper_ratio
from runner.extraction.mean_capture import Setting, average
from runner.extraction.pulse_leg import pulse_leg
from runner.extraction.ramp import make_ramp

NGSPICE = shutil.which("ngspice")
pytestmark = pytest.mark.skipif(
    NGSPICE is None,
    reason="NOT CHECKED AGAINST AN INDEPENDENT CIRCUIT SIMULATOR: no 'ngspice' on this machine; install it (on Debian: "
    "apt install ngspice) and run this again",
)

RAIL, SOURCE, SHUNT, SHUNT_INDUCTANCE, COPPER_20 = 12.0, 20e-3, 10e-3, 3e-9, 18e-3
WIDTHS, SAMPLES, BEFORE, REPEATS, BITS = 8, 2000, 200, 8, 12
TEMPERATURES = (25.0, 100.0)  # degC

CIRCUIT = """a pulse into a flux-controlled saturating inductor
Vrail rail 0 {rail}
Rsource rail a {source}
Vgate gate 0 PULSE(0 1 {start} 1n 1n {width} 1)
S1 a part gate 0 gate
.model gate SW(Ron=5m Roff=1Meg Vt=0.5 Vh=0.05)
Rcopper part core {copper}
Gflux 0 flux core shunt 1
Cflux flux 0 1u
Rflux flux 0 1e12
Bcore core shunt I = {current}
Rshunt shunt s {shunt}
Lshunt s 0 {shunt_inductance}
Dfreewheel 0 part freewheel
.model freewheel D(Is=1e-12 Rs=5m)
.options method=gear reltol=1e-6 abstol=1e-9 vntol=1e-9
.tran {step} {stop} 0 {step}
.control
set wr_singlescale
set numdgt=12
run
let part_volts = v(part) - v(shunt)
let shunt_volts = v(shunt)
linearize part_volts shunt_volts
wrdata waveforms.txt part_volts shunt_volts
quit
.endc
.end
"""


@dataclass(frozen=True)
class Gapped:
    """Ferrite with a gap; saturation flux falls with temperature as a power ferrite's does (500 to 395 mT at 100 degC)."""

    inductance: float = 23.5e-6
    core_current: float = 0.8
    saturation_flux: float = 266e-6

    def at(self, temperature):
        return replace(self, saturation_flux=self.saturation_flux * (1 - 2.8e-3 * (temperature - 25.0)))

    @property
    def top(self):
        """Pulsed until the core carries 98 % of its saturation flux: 13 A, L_d down to some 40 %."""
        y = 0.98
        return self.saturation_flux * y / self.inductance + self.core_current * float(np.arctanh(y))

    @property
    def source(self):
        y = f"max(-0.999999, min(0.999999, V(flux)*1e-6/{self.saturation_flux}))"
        return f"V(flux)*1e-6/{self.inductance} + {self.core_current}*atanh({y})"

    def curve(self):
        """Current, flux and L_d on a fine grid."""
        y = np.tanh(np.linspace(0.0, 20.0, 200_001))[:-1]
        y = y[y < 0.9999999]
        flux = self.saturation_flux * y
        current = flux / self.inductance + self.core_current * np.arctanh(y)
        steep = 1 / self.inductance + self.core_current / self.saturation_flux / (1 - y**2)
        return current, flux, 1 / steep


@dataclass(frozen=True)
class Powder:
    """Froehlich's law; a powder core hardly feels the temperature."""

    inductance: float = 47e-6
    knee: float = 20.0
    top: float = 16.0

    def at(self, temperature):
        rise = temperature - 25.0
        return replace(
            self, inductance=self.inductance * (1 + 3e-4 * rise), knee=self.knee * (1 - 5e-4 * rise)
        )

    @property
    def source(self):
        flux = f"min(abs(V(flux)*1e-6), {0.999 * self.inductance * self.knee})"
        return f"sgn(V(flux))*{flux}/({self.inductance} - {flux}/{self.knee})"

    def curve(self):
        x = np.linspace(0.0, 5.0, 100_001)
        return self.knee * x, self.inductance * self.knee * x / (1 + x), self.inductance / (1 + x) ** 2


@dataclass(frozen=True)
class Arctangent:
    """The arctangent law, whose knee falls with temperature."""

    inductance: float = 33e-6
    knee: float = 9.0
    top: float = 14.0

    def at(self, temperature):
        rise = temperature - 25.0
        return replace(self, knee=self.knee * (1 - 2e-3 * rise), top=self.top * (1 - 2e-3 * rise))

    @property
    def source(self):
        limit = 0.999 * np.pi / 2
        return f"{self.knee}*tan(max(-{limit}, min({limit}, V(flux)*1e-6/{self.inductance * self.knee})))"

    def curve(self):
        x = np.linspace(0.0, 5.0, 100_001)
        return self.knee * x, self.inductance * self.knee * np.arctan(x), self.inductance / (1 + x**2)


LAWS = {"gapped ferrite": Gapped(), "powder": Powder(), "arctangent": Arctangent()}


def simulate(folder, law, copper, width):
    """Time from the trigger [n] s, volts across the part [n], volts of the shunt [n] as the simulator has them."""
    step = width / (0.82 * SAMPLES)
    text = CIRCUIT.format(
        rail=RAIL, source=SOURCE, start=BEFORE * step, width=width, copper=copper, current=law.source, shunt=SHUNT,
        shunt_inductance=SHUNT_INDUCTANCE, step=step, stop=SAMPLES * step,
    )  # fmt: skip
    netlist = folder / "pulse.cir"
    netlist.write_text(text)
    (folder / "waveforms.txt").unlink(missing_ok=True)
    done = subprocess.run(
        [NGSPICE, "-b", netlist.name], cwd=folder, capture_output=True, text=True, timeout=120, check=False
    )
    assert (folder / "waveforms.txt").is_file(), done.stdout + done.stderr
    time, part, shunt = np.loadtxt(folder / "waveforms.txt").T[:3, :SAMPLES]
    return time - BEFORE * step, part, shunt


def digitize(values, full_scale, generator):
    """Codes [repeats, n] of a 12-bit converter with rms noise of half a step, and the volts of one code."""
    step = full_scale / 2 ** (BITS - 1)
    noisy = values / step + 0.5 * generator.standard_normal((REPEATS, len(values)))
    return np.clip(np.round(noisy), -(2 ** (BITS - 1)), 2 ** (BITS - 1) - 1).astype(np.int16), step


def known():
    """What the bench would state."""
    return Calibration(
        nominal_shunt=SHUNT,
        shunt=Constant(SHUNT, 1e-3 * SHUNT),
        shunt_inductance=Constant(SHUNT_INDUCTANCE, 0.3e-9),
        skew=Constant(0.0, 1e-9),
    )


def measure(folder, law, temperature, generator):
    """The leg's curve as a run would have it."""
    copper = COPPER_20 * copper_ratio(temperature)
    current, flux, _ = law.curve()
    longest = 1.04 * float(np.interp(law.top, current, flux)) / RAIL
    bench = known()
    ramps = []
    for width in np.linspace(0.15, 1.0, WIDTHS) * longest:
        time, part, shunt = simulate(folder, law, copper, width)
        v_codes, v_step = digitize(part, 20.0, generator)
        i_codes, i_step = digitize(shunt, 0.2, generator)
        setting = Setting(
            interval=float(time[1] - time[0]),
            first=float(time[0]),
            v_scale=v_step,
            i_scale=i_step / SHUNT,
            code_min=-(2.0 ** (BITS - 1)),
            code_max=2.0 ** (BITS - 1) - 1,
        )
        ramp = make_ramp(average(v_codes, i_codes, setting), bench, temperature_degC=temperature)
        assert ramp is not None
        ramps.append(ramp)
    return pulse_leg(
        ramps, bench, temperature_degC=temperature, resistance=copper, resistance_uncertainty=1e-3 * copper
    )


@pytest.fixture(scope="module", params=LAWS)
def legs(request, tmp_path_factory):
    """Law and curve at each temperature."""
    folder = tmp_path_factory.mktemp("ngspice")
    found = []
    for number, temperature in enumerate(TEMPERATURES):
        law = LAWS[request.param].at(temperature)
        generator = np.random.default_rng([39, list(LAWS).index(request.param), number])
        found.append((law, measure(folder, law, temperature, generator)))
    return found


def test_differential_inductance_is_that_of_the_simulated_law(legs):
    for law, leg in legs:
        assert leg.top == pytest.approx(law.top, rel=0.15)  # the pulses went where they should
        at = np.linspace(0.05, 0.95, 181) * leg.top
        current, _, inductance = law.curve()
        truth = np.interp(at, current, inductance)
        found = np.interp(at, leg.current, leg.inductance)
        assert truth[-1] < 0.7 * truth[0]  # past the knee
        assert np.max(np.abs(found / truth - 1)) < 0.005


def test_saturation_current_holds_the_simulated_one(legs):
    for law, leg in legs:
        current, _, inductance = law.curve()
        for drop in (0.1, 0.2, 0.3):
            truth = float(np.interp(-(1 - drop) * inductance[0], -inductance, current))
            knee = leg.knee(drop)
            assert knee.value == pytest.approx(truth, rel=0.01)
            # Three standard uncertainties: eighteen knees are asked, at 95 % one of them would lie outside by right.
            assert abs(knee.value - truth) < 3 * knee.uncertainty


def test_saturation_current_falls_where_the_simulated_core_falls(legs):
    (cold, cold_leg), (hot, hot_leg) = legs

    def knee(law):
        current, _, inductance = law.curve()
        return float(np.interp(-0.7 * inductance[0], -inductance, current))

    ratio = hot_leg.knee(0.3).value / cold_leg.knee(0.3).value
    assert ratio == pytest.approx(knee(hot) / knee(cold), abs=0.01)
