"""``record.h5``, group by group: the NeXus file that people open, written from one instant of a journal.

Called only on a ``.part`` file. The order of writing is fixed, and nothing depends on the clock or on the
path, so the same journal gives the same bytes. Each group carries its own dimension scales, so that it opens
alone; groups are named by number, never by a part's name, which may hold a slash.
"""

import hashlib
import json
import sqlite3
import zlib
from typing import Any

import h5py
import numpy as np

from runner.record import hdf, reading
from runner.record.columns import INTEGERS, LAYOUT_VERSION, SCALARS, TIMES
from runner.record.digest import RawDigest, relative, rows_to_hash
from runner.record.errors import RecordError
from runner.record.flags import Flag, spelled
from runner.record.places import RECORD
from runner.record.reading import Columns, StoredCapture
from runner.record.rows import METHODS, InstrumentRow, RunHeader, SettingRow, codes_dtype
from runner.versions import software

PROGRAM = "kneemap"
CHAMBER = "chamber"
_CHUNK_SAMPLES = 262144


def program_version() -> str:
    return software().removeprefix(f"{PROGRAM} ")


def write_record(file: h5py.File, journal: sqlite3.Connection) -> str:
    """Write all of a run, without extractions.

    Returns:
        ``raw_sha256`` as computed from the journal's own rows and codes.

    Raises:
        RecordError: a capture in the journal does not match its checksum.
    """
    facts = reading.read_facts(journal, file.filename)
    header = reading.read_header(journal, file.filename)
    points = reading.read_points(journal)
    points = points | {name: relative(points[name], header.start) for name in TIMES}
    end = reading.last_time(journal)

    _write_root(file, end)
    entry = hdf.group(file, "entry", "NXentry", default="points")
    hdf.text(entry, "title", header.title)
    hdf.text(entry, "start_time", hdf.iso(header.start))
    hdf.text(entry, "end_time", hdf.iso(end))
    hdf.text(entry, "entry_identifier_uuid", header.run_id)
    hdf.text(entry, "program_name", PROGRAM, version=program_version())
    _write_note(
        entry, "plan", header.plan_name, "The plan that was carried out, byte for byte.", header.plan_bytes
    )
    _write_note(
        entry,
        "bench_description",
        header.bench_name,
        "The bench it was carried out on, byte for byte.",
        header.bench_bytes,
    )
    _write_bench(entry, journal, header)
    _write_parts(entry, journal, header)
    _write_points(entry, points, header)
    raw_sha256 = _write_captures(entry, journal, points)
    _write_events(entry, journal, header)
    _write_run_state(entry, journal, facts, points, header)
    return raw_sha256


def store_digest(file: h5py.File, raw_sha256: str) -> None:
    """The last field of a record: it is there only when what it says was checked."""
    hdf.text(file["entry/run_state"], "raw_sha256", raw_sha256)


def _write_root(file: h5py.File, end: float) -> None:
    hdf.annotate(
        file,
        {
            "NX_class": "NXroot",
            "default": "entry",
            "file_name": RECORD,
            "file_time": hdf.iso(end),
            "creator": PROGRAM,
            "creator_version": program_version(),
            "HDF5_Version": h5py.version.hdf5_version,
            "h5py_version": h5py.version.version,
        },
    )


def _write_note(entry: h5py.Group, name: str, file_name: str, description: str, data: bytes) -> None:
    note = hdf.group(entry, name, "NXnote")
    hdf.text(note, "type", "application/yaml")
    hdf.text(note, "file_name", file_name)
    hdf.text(note, "description", description)
    hdf.numbers(note, "data", np.frombuffer(data, dtype=np.uint8))
    hdf.text(note, "checksum", hashlib.sha256(data).hexdigest())
    hdf.text(note, "algorithm", "sha256")


def _write_bench(entry: h5py.Group, journal: sqlite3.Connection, header: RunHeader) -> None:
    bench = hdf.group(entry, "bench", "NXinstrument")
    hdf.text(bench, "name", header.bench_name)
    instruments = {row.role: row for row in reading.read_instruments(journal)}
    for role, row in instruments.items():
        if role != CHAMBER:
            made = hdf.group(bench, role, row.nx_class)
            hdf.text(made, "name", row.name)
            _write_identity(made, row)
    _write_chamber(bench, journal, header, instruments.get(CHAMBER, InstrumentRow(CHAMBER, "NXenvironment")))


def _write_chamber(
    bench: h5py.Group, journal: sqlite3.Connection, header: RunHeader, row: InstrumentRow
) -> None:
    """The chamber's air is always there, if only as an empty log. Its maker stands with its sensor, because
    NeXus knows no maker of an environment."""
    made = hdf.group(bench, CHAMBER, "NXenvironment")
    hdf.text(made, "name", row.name)
    air = hdf.group(made, "air", "NXsensor")
    hdf.text(air, "measurement", "temperature")
    _write_identity(air, row)
    _write_log(air, *reading.read_chamber(journal), header)


def _write_identity(made: h5py.Group, row: InstrumentRow) -> None:
    fabrication = hdf.group(made, "fabrication", "NXfabrication")
    hdf.text(fabrication, "vendor", row.vendor)
    hdf.text(fabrication, "model", row.model)
    hdf.text(fabrication, "serial_number", row.serial)
    identity = hdf.group(made, "identity", "NXparameters")
    hdf.text(identity, "idn", row.idn)
    hdf.text(identity, "firmware", row.firmware)
    hdf.text(identity, "address", row.address)
    calibration = hdf.group(made, "calibration", "NXparameters")
    for name, constant in sorted(row.calibration.items()):
        hdf.numbers(
            calibration,
            name,
            constant.value,
            constant.units,
            uncertainty=constant.uncertainty,
            date=constant.date,
            certificate=constant.certificate,
        )


def _write_log(parent: h5py.Group, times: Any, values: Any, header: RunHeader) -> None:
    log = hdf.group(parent, "value_log", "NXlog")
    time = hdf.scale(
        hdf.numbers(log, "time", relative(times, header.start), "s", start=hdf.iso(header.start))
    )
    hdf.scaled_by(hdf.numbers(log, "value", values, "degC"), time)


def _write_parts(entry: h5py.Group, journal: sqlite3.Connection, header: RunHeader) -> None:
    for number, part in enumerate(header.parts):
        sample = hdf.group(entry, f"part_{number:02d}", "NXsample")
        hdf.text(sample, "name", part.name)
        hdf.text(sample, "description", part.description)
        hdf.numbers(sample, "changer_position", np.int64(part.channel), "1")
        environment = hdf.group(sample, "temperature_env", "NXenvironment")
        hdf.text(environment, "name", "what surrounds the part and how warm its body was")
        body = hdf.group(environment, "body", "NXsensor")
        hdf.text(body, "measurement", "temperature")
        _write_log(body, *reading.read_body(journal, number), header)


def _write_points(entry: h5py.Group, points: Columns, header: RunHeader) -> None:
    made = hdf.data_group(entry, "points", signal="inductance", axes=["point"])
    axis = hdf.scale(hdf.numbers(made, "point", points["point"].astype("<i8")))
    for name, kind in list(INTEGERS.items())[1:]:
        hdf.scaled_by(hdf.numbers(made, name, points[name].astype(np.dtype(kind).newbyteorder("<"))), axis)
    meanings = {"flag_meanings": " ".join(METHODS), "flag_values": np.array(list(METHODS.values()), "u1")}
    hdf.annotate(made["method"], meanings)
    meanings = {"flag_meanings": " ".join(map(spelled, Flag)), "flag_masks": np.array(list(Flag), "<u4")}
    hdf.annotate(made["quality"], meanings)
    for name in TIMES:
        hdf.scaled_by(hdf.numbers(made, name, points[name], "s", start=hdf.iso(header.start)), axis)
    for name, units in SCALARS.items():
        hdf.scaled_by(hdf.numbers(made, name, points[name], units), axis)


def _write_captures(entry: h5py.Group, journal: sqlite3.Connection, points: Columns) -> str:
    """One pass over the codes: each capture is checked, written and hashed; only one is in memory."""
    settings = reading.read_settings(journal)
    columns = {
        number: _CapturesGroup(entry, f"captures_{n:02d}", settings[number], count)
        for n, (number, count) in enumerate(reading.count_captures(journal).items())
    }
    counts: dict[int, int] = dict(
        journal.execute("SELECT point, count(*) FROM capture GROUP BY point").fetchall()
    )
    digest = RawDigest()
    captures = reading.read_captures(journal)
    for integers, floats in rows_to_hash(points):
        count = counts.get(integers[0], 0)
        digest.point(integers, count, floats)
        for _ in range(count):
            capture = next(captures)
            _check(capture)
            columns[capture.setting].add(capture)
            digest.capture(capture.voltage, capture.current)
    for column in columns.values():
        column.finish()
    return digest.hexdigest()


def _check(capture: StoredCapture) -> None:
    for name, codes, crc in (
        ("voltage", capture.voltage, capture.v_crc),
        ("current", capture.current, capture.i_crc),
    ):
        if zlib.crc32(codes) != crc:
            raise RecordError(
                f"the journal is damaged: the {name} codes of point {capture.point}, "
                f"repeat {capture.repeat}, do not match their checksum. Keep the folder as it is; restore it "
                "from a copy if there is one."
            )


class _CapturesGroup:
    """All captures of one digitizer setting, filled row by row."""

    def __init__(self, entry: h5py.Group, name: str, setting: SettingRow, count: int) -> None:
        self._made = hdf.data_group(
            entry, name, signal="voltage", axes=["capture", "time"], auxiliary_signals=["current"]
        )
        kind = codes_dtype(setting.dtype)
        self._codes = [
            self._made.create_dataset(
                channel,
                shape=(count, setting.samples),
                dtype=kind,
                compression="gzip",
                compression_opts=1,
                shuffle=True,
                fletcher32=True,
                chunks=(1, min(setting.samples, _CHUNK_SAMPLES)),
            )
            for channel in ("voltage", "current")
        ]
        scales = ((setting.v_scale, setting.v_offset, "V"), (setting.i_scale, setting.i_offset, "A"))
        for dataset, (factor, offset, units) in zip(self._codes, scales, strict=True):
            write_scale(self._made, dataset, factor, offset, units)
        self._made_of = setting
        self._kind = kind
        self._row = 0
        self._capture = np.zeros(count, "<i8")
        self._point = np.zeros(count, "<i8")
        self._repeat = np.zeros(count, "<i4")
        self._crc = np.zeros((2, count), "<u4")

    def add(self, capture: StoredCapture) -> None:
        row = self._row
        for dataset, codes in zip(self._codes, (capture.voltage, capture.current), strict=True):
            dataset[row] = np.frombuffer(codes, dtype=self._kind)
        self._capture[row], self._point[row], self._repeat[row] = (
            capture.number,
            capture.point,
            capture.repeat,
        )
        self._crc[:, row] = capture.v_crc, capture.i_crc
        self._row = row + 1

    def finish(self) -> None:
        """The columns and the axes, once every row is in."""
        made, setting = self._made, self._made_of
        capture = hdf.scale(hdf.numbers(made, "capture", self._capture))
        axis = setting.first + setting.interval * np.arange(setting.samples)
        time = hdf.scale(hdf.numbers(made, "time", axis, "s", comment="from the trigger"))
        for dataset in self._codes:
            hdf.scaled_by(dataset, capture, time)
        columns = (
            ("point", self._point),
            ("repeat", self._repeat),
            ("voltage_crc32", self._crc[0]),
            ("current_crc32", self._crc[1]),
        )
        for name, values in columns:
            hdf.scaled_by(hdf.numbers(made, name, values), capture)
        hdf.text(made, "setting", setting_text(setting))


def write_scale(made: h5py.Group, dataset: h5py.Dataset, factor: float, offset: float, units: str) -> None:
    """Both spellings of one scale, from the same two numbers.

    netCDF and xarray: code * scale_factor + add_offset. NeXus: (code + offset) * scaling_factor.
    """
    name = str(dataset.name).rsplit("/", 1)[1]
    what = "volts across the part" if name == "voltage" else "amperes through the part"
    hdf.annotate(
        dataset,
        {
            "units": units,
            "scale_factor": factor,
            "add_offset": offset,
            "comment": f"digitizer codes; code * scale_factor + add_offset gives {what}",
        },
    )
    made.create_dataset(f"{name}_scaling_factor", data=float(factor))
    made.create_dataset(f"{name}_offset", data=offset / factor)


def setting_text(setting: SettingRow) -> str:
    """A setting as the JSON text that stands in its captures group."""
    facts = {
        name: getattr(setting, name)
        for name in ("samples", "interval", "first", "dtype", "v_scale", "v_offset", "i_scale", "i_offset")
    }
    return json.dumps(facts | {"detail": dict(setting.detail)}, sort_keys=True, ensure_ascii=False)


def _write_events(entry: h5py.Group, journal: sqlite3.Connection, header: RunHeader) -> None:
    events = reading.read_events(journal)
    made = hdf.group(entry, "events", "NXcollection")
    axis = hdf.scale(hdf.numbers(made, "event", np.arange(len(events), dtype="<i8")))
    times = relative([event.t for event in events], header.start)
    hdf.scaled_by(hdf.numbers(made, "time", times, "s", start=hdf.iso(header.start)), axis)
    for name in ("level", "kind", "text"):
        hdf.scaled_by(hdf.texts(made, name, [getattr(event, name) for event in events]), axis)
    for name, kind in (("point", "<i8"), ("leg", "<i4")):
        hdf.scaled_by(hdf.numbers(made, name, np.array([getattr(e, name) for e in events], kind)), axis)


def _write_run_state(
    entry: h5py.Group, journal: sqlite3.Connection, facts: dict[str, Any], points: Columns, header: RunHeader
) -> None:
    made = hdf.group(entry, "run_state", "NXcollection", layout_version=LAYOUT_VERSION)
    hdf.text(made, "state", facts["state"])
    hdf.text(made, "kind", header.kind)
    hdf.numbers(made, "points_recorded", np.int64(len(points["point"])))
    hdf.text(made, "journal_mark", reading.mark(journal))
    legs = reading.read_legs(journal)
    leg = hdf.scale(hdf.numbers(made, "leg", np.array([leg.index for leg in legs], "<i4")))
    columns = (
        ("leg_temperature_setpoint", "degC", np.array([leg.setpoint for leg in legs], "f8")),
        ("leg_start", "s", relative([leg.start for leg in legs], header.start)),
        ("leg_end", "s", relative([leg.end for leg in legs], header.start)),
    )
    for name, units, values in columns:
        hdf.scaled_by(hdf.numbers(made, name, values, units, **_started(units, header)), leg)
    sessions = reading.read_sessions(journal)
    session = hdf.scale(hdf.numbers(made, "session", np.array([s.number for s in sessions], "<i4")))
    starts = relative([s.start for s in sessions], header.start)
    hdf.scaled_by(hdf.numbers(made, "session_start", starts, "s", **_started("s", header)), session)
    hdf.scaled_by(hdf.texts(made, "session_software", [s.software for s in sessions]), session)
    versions = [json.dumps(s.versions, sort_keys=True, ensure_ascii=False) for s in sessions]
    hdf.scaled_by(hdf.texts(made, "session_versions", versions), session)


def _started(units: str, header: RunHeader) -> dict[str, str]:
    return {"start": hdf.iso(header.start)} if units == "s" else {}
