"""The columns of a point, once: order, unit and kind, for the journal, the record and the digest alike."""

from typing import Final

LAYOUT_VERSION: Final = 1

#: Integer columns in the order of the record and of the digest; the journal calls the first ``seq``, the last
#: ``flags``.
INTEGERS: Final = {
    "point": "i8",
    "plan_index": "i4",
    "attempt": "i4",
    "session": "i4",
    "leg": "i4",
    "part": "i4",
    "method": "u1",
    "quality": "u4",
}

TIMES: Final = ("start_time", "end_time")

#: Scalars and their units in UDUNITS spelling; NaN means that it does not apply.
SCALARS: Final = {
    "temperature_setpoint": "degC",
    "body_temperature": "degC",
    "air_temperature": "degC",
    "pulse_width_setpoint": "s",
    "rail_voltage_setpoint": "V",
    "rail_voltage": "V",
    "rail_voltage_after": "V",
    "bias_current_setpoint": "A",
    "bias_current": "A",
    "peak_current": "A",
    "inductance": "H",
    "resistance": "ohm",
    "ac_resistance": "ohm",
    "test_frequency": "Hz",
}

#: Names of all columns, in the order in which the record and `Run.points` give them.
EVERY_COLUMN: Final = (*INTEGERS, *TIMES, *SCALARS)
