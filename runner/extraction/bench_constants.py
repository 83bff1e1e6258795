"""The bench file's constants, as `Calibration`: names of the file on one side, names of the physics on the other."""

from runner.extraction.calibration import Calibration, Constant
from runner.plan import Bench, CapturesFile

# What is assumed about the temperature of a shunt that stands in the open: near the bench's stated one.
ROOM = Constant(23.0, 2.0)


def from_bench(bench: Bench) -> Calibration:
    """Constants of a bench; what it does not state is taken as exact and zero (or one)."""
    digitizer, lcr, bias = bench.digitizer, bench.lcr, bench.bias_source
    thermometer, ohmmeter = bench.thermometer, bench.ohmmeter
    shunt = bench.fixture.shunt
    default = Calibration()
    resistance = Constant(shunt.resistance.value, shunt.resistance.uncertainty) if shunt else Constant(1.0)
    return Calibration(
        nominal_shunt=resistance.value,
        shunt=resistance,
        shunt_temperature_degC=shunt.temperature_degC if shunt else 25.0,
        ambient_degC=ROOM,
        tempco=_take(shunt.tempco if shunt else None, default.tempco),
        shunt_inductance=_take(shunt.series_inductance if shunt else None, default.shunt_inductance),
        voltage_gain=_from(digitizer, "voltage_gain", default.voltage_gain),
        shunt_gain=_from(digitizer, "shunt_gain", default.shunt_gain),
        # A bench that states no skew has it found in the data.
        skew=_from(digitizer, "skew", Constant(0.0, float("inf"))),
        body_offset=_from(thermometer, "offset", default.body_offset),
        ohmmeter_gain=_from(ohmmeter, "gain", default.ohmmeter_gain),
        lead_resistance=_from(ohmmeter, "lead_resistance", default.lead_resistance),
        bias_gain=_from(bias, "current_gain", default.bias_gain),
        meter_gain=_from(lcr, "inductance_gain", default.meter_gain),
        fixture_inductance=_from(lcr, "fixture_inductance", default.fixture_inductance),
        fixture_resistance=_from(lcr, "fixture_resistance", default.fixture_resistance),
        open_capacitance=_from(lcr, "open_capacitance", default.open_capacitance),
    )


def from_captures_file(captures: CapturesFile) -> Calibration:
    """Constants of captures taken by hand; a missing skew is found in the data."""
    shunt = captures.shunt
    default = Calibration()
    skew = _take(captures.skew, Constant(0.0, float("inf")))
    if shunt is None:
        return Calibration(skew=skew)
    resistance = Constant(shunt.resistance.value, shunt.resistance.uncertainty)
    return Calibration(
        nominal_shunt=resistance.value,
        shunt=resistance,
        shunt_temperature_degC=shunt.temperature_degC,
        ambient_degC=ROOM,
        tempco=_take(shunt.tempco, default.tempco),
        shunt_inductance=_take(shunt.series_inductance, default.shunt_inductance),
        skew=skew,
    )


def _take(stated: object, default: Constant) -> Constant:
    value, uncertainty = getattr(stated, "value", None), getattr(stated, "uncertainty", 0.0)
    return default if value is None else Constant(float(value), float(uncertainty))


def _from(instrument: object, name: str, default: Constant) -> Constant:
    calibration = getattr(instrument, "calibration", None) or {}
    return _take(calibration.get(name), default)
