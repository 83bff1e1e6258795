"""Who was on the bench: instruments as they named themselves, and the constants that the bench file gives them."""

from collections.abc import Iterator, Mapping
from typing import Literal

from drivers import Identity
from runner.plan import Bench
from runner.record import CalibrationRow, InstrumentRow

NexusClass = Literal["NXsensor", "NXactuator", "NXenvironment"]

# How a role is called in the record, and what it is there.
_NAMES: dict[str, tuple[str, NexusClass]] = {
    "supply": ("supply", "NXactuator"),
    "pulser": ("pulser", "NXactuator"),
    "digitizer": ("digitizer", "NXsensor"),
    "lcr": ("lcr_meter", "NXsensor"),
    "bias_source": ("bias_source", "NXactuator"),
    "chamber": ("chamber", "NXenvironment"),
    "thermometer": ("body_thermometer", "NXsensor"),
    "ohmmeter": ("ohmmeter", "NXsensor"),
    "multiplexer": ("multiplexer", "NXactuator"),
}

# Units of calibration constants by the end of their names.
_UNITS = (
    ("gain", "1"),
    ("skew", "s"),
    ("inductance", "H"),
    ("resistance", "ohm"),
    ("capacitance", "F"),
    ("offset", "K"),
    ("tempco", "1/K"),
)


def instrument_rows(
    bench: Bench, identities: Mapping[str, Identity], resources: Mapping[str, str]
) -> Iterator[InstrumentRow]:
    """One row for each opened instrument, and one for the shunt."""
    for role, identity in identities.items():
        name, nexus_class = _NAMES[role]
        yield InstrumentRow(
            role=name,
            nx_class=nexus_class,
            name=role.replace("_", " "),
            vendor=identity.vendor,
            model=identity.model,
            serial=identity.serial,
            firmware=identity.firmware,
            idn=identity.text,
            address=resources.get(role, ""),
            calibration=_rows(bench.instruments[role].calibration),
        )
    shunt = bench.fixture.shunt
    if shunt is not None:
        given = {
            "resistance": shunt.resistance,
            "tempco": shunt.tempco,
            "series_inductance": shunt.series_inductance,
        }
        yield InstrumentRow(role="shunt", nx_class="NXsensor", name="current shunt", calibration=_rows(given))


def _rows(constants: Mapping[str, object]) -> dict[str, CalibrationRow]:
    return {name: _row(name, constant) for name, constant in constants.items() if constant is not None}


def _row(name: str, constant: object) -> CalibrationRow:
    units = next((unit for ending, unit in _UNITS if name.endswith(ending)), "1")
    date = getattr(constant, "date", None)
    return CalibrationRow(
        value=float(getattr(constant, "value")),  # noqa: B009 - the model's type is made by a factory
        units=units,
        uncertainty=float(getattr(constant, "uncertainty")),  # noqa: B009
        date=date.isoformat() if date is not None else "",
        certificate=getattr(constant, "certificate", None) or "",
    )
