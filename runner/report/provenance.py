"""Where the numbers come from: instruments as they named themselves, calibration in use, versions."""

from collections.abc import Iterator, Mapping
from datetime import UTC, datetime

from runner.record import Run
from runner.report.digits import NOTHING, short


def instruments(run: Run) -> list[tuple[str, ...]]:
    """Role, vendor, model, serial number and firmware of every instrument that named itself."""
    return [
        (i.role.replace("_", " "), i.vendor, i.model, i.serial, i.firmware)
        for i in run.instruments
        if i.vendor or i.model or i.idn
    ]


def calibration(run: Run) -> list[tuple[str, ...]]:
    """Role, constant, value, standard uncertainty, date and certificate of all that was in use."""
    rows: list[tuple[str, ...]] = []
    for instrument in run.instruments:
        for name, constant in instrument.calibration.items():
            unit = "" if constant.units == "1" else constant.units
            rows.append(
                (
                    instrument.role.replace("_", " "),
                    name.replace("_", " "),
                    _constant(constant.value, unit),
                    _uncertainty(constant.uncertainty, unit),
                    constant.date or NOTHING,
                    constant.certificate or NOTHING,
                )
            )
    return rows


def versions(run: Run) -> Iterator[tuple[str, str]]:
    """(what, which) of the run, of each session of the program, and of the extraction."""
    yield "Run", run.run_id
    for number, session in enumerate(run.sessions, start=1):
        when = datetime.fromtimestamp(run.start + session.start, UTC).strftime("%Y-%m-%d %H:%M UTC")
        versions: Mapping[str, str] = session.versions
        software = ", ".join([session.software, *(f"{name} {version}" for name, version in versions.items())])
        yield f"Session {number}", f"{when}: {software}"
    if run.extraction is not None:
        yield "Extraction", f"{run.extraction.program} {run.extraction.version}, {run.extraction.date}"


def _constant(value: float, unit: str) -> str:
    if unit == "1/K":
        return f"{1e6 * value:.6g} ppm/K"
    # An SI prefix before a difference of temperature or a plain ratio would be read by nobody.
    return (
        short(value, unit, 6) if unit in {"ohm", "s", "H", "V", "A", "F"} else f"{value:.6g} {unit}".strip()
    )


def _uncertainty(value: float, unit: str) -> str:
    if not value:
        return NOTHING
    return f"{100 * value:.6g} %" if not unit else _constant(value, unit)
