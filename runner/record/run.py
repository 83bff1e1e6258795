"""A run as it is read: extraction and report see nothing else.

All of it comes from ``record.h5``; times are seconds from the start of the run, everything else is SI and
degC. Captures stay on the disk and are read point by point, so memory does not grow with the night. An open
`Run` is one instant: a rebuild puts a new file in place of the one that is being read here, and the old one
stays whole.
"""

import json
import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property, wraps
from pathlib import Path
from typing import Any, Self, TypeVar

import h5py
import numpy as np

from runner.arrays import FloatArray
from runner.record import hdf, reading
from runner.record.columns import EVERY_COLUMN, INTEGERS, LAYOUT_VERSION
from runner.record.consolidation import consolidate, is_current
from runner.record.errors import RecordError, not_a_run
from runner.record.extractions import latest_valid, read_tables
from runner.record.flags import is_acceptable
from runner.record.layout import CHAMBER
from runner.record.lock import is_being_acquired
from runner.record.places import JOURNAL, RECORD
from runner.record.reading import Columns, LegTimes, Session
from runner.record.rows import CalibrationRow, Codes, EventRow, InstrumentRow, PartRow
from runner.record.tables import ExtractionTables
from runner.record.verify import capture_groups


@dataclass(frozen=True, slots=True)
class PointCaptures:
    """All captures of one point: n samples, r repeats.

    ``time`` [n] s from the trigger; ``voltage`` [r, n] V, ``current`` [r, n] A (shunt voltage over the
    bench's nominal shunt resistance); the codes [r, n] as delivered; ``repeat`` [r]; ``setting`` with
    "code_min" and "code_max" of the digitizer (infinite where the captures were not codes).
    """

    time: FloatArray
    voltage_codes: Codes
    current_codes: Codes
    repeat: Codes
    setting: dict[str, Any]

    # Made when asked for: whoever works on codes, as extraction does, need not pay for arrays four times as large.

    @property
    def voltage(self) -> FloatArray:
        """Across the part [r, n] V."""
        return _scaled(self.voltage_codes, self.setting["v_scale"], self.setting["v_offset"])

    @property
    def current(self) -> FloatArray:
        """Through the part [r, n] A."""
        return _scaled(self.current_codes, self.setting["i_scale"], self.setting["i_offset"])


@dataclass(frozen=True, slots=True)
class _CapturesGroup:
    voltage: h5py.Dataset
    current: h5py.Dataset
    time: FloatArray
    repeat: Codes
    setting: dict[str, Any]


def open_run(path: Path | str) -> "Run":
    """Open a run folder or a ``record.h5``.

    A folder whose record is missing, or older than its journal, has it rebuilt first; while the run is being
    acquired the record of the last rebuild is read as it is.

    Raises:
        InputError: it is neither.
        RecordError: it is damaged, or its record could not be rebuilt.
    """
    path = Path(path)
    if path.is_file():
        return Run(path)
    if not path.is_dir():
        raise not_a_run(path, "there is no such run folder or record.")
    record = path / RECORD
    if (path / JOURNAL).is_file() and reading.has_run(path):
        acquired = record.is_file() and is_being_acquired(path)
        if not acquired and not is_current(path):
            return Run(consolidate(path))
    if not record.is_file():
        raise not_a_run(path, f"is not a run folder: it has neither a {RECORD} nor a begun {JOURNAL}.")
    return Run(record)


_T = TypeVar("_T")


def _from_the_file(read: "Callable[[Run], _T]") -> "Callable[[Run], _T]":
    """h5py's complaints about a damaged file become ours."""

    @wraps(read)
    def reading_or_saying_so(run: "Run") -> _T:
        try:
            return read(run)
        except hdf.DAMAGE as error:
            raise RecordError(f"{run.path}: damaged: its {read.__name__} cannot be read: {error}.") from error

    return reading_or_saying_so


class Run:
    """An open record. Close it, or use it in a ``with`` statement; it can be sent to another process."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self._groups: dict[str, _CapturesGroup] = {}
        try:
            self._file = hdf.open_to_read(path)
        except OSError as error:
            raise not_a_run(
                path, f"is not a record that can be read ({error}); name a run folder or its record.h5."
            ) from error
        try:
            state = self._file["entry/run_state"]
            version = int(state.attrs["layout_version"])
        except hdf.DAMAGE:
            self._file.close()
            raise not_a_run(path, "is an HDF5 file, but not a record of kneemap.") from None
        if version > LAYOUT_VERSION:
            self._file.close()
            raise not_a_run(
                path, f"was written by a newer kneemap (layout {version}, known is {LAYOUT_VERSION})."
            )

    def __reduce__(self) -> tuple[Any, ...]:
        return Run, (self.path,)

    # ------------------------------------------------------------ the run itself

    @property
    def folder(self) -> Path:
        return self.path.parent

    @cached_property
    @_from_the_file
    def title(self) -> str:
        return self._text("title")

    @cached_property
    @_from_the_file
    def kind(self) -> str:
        """ "plan" for a plan that was carried out, "captures" for captures taken by hand."""
        return self._text("run_state/kind")

    @cached_property
    @_from_the_file
    def start(self) -> float:
        """UTC seconds since 1970; all other times are relative to it."""
        return hdf.from_iso(self._text("start_time"))

    @cached_property
    @_from_the_file
    def end(self) -> float:
        """The last time at which anything happened [UTC s]."""
        return hdf.from_iso(self._text("end_time"))

    @cached_property
    @_from_the_file
    def state(self) -> str:
        return self._text("run_state/state")

    @cached_property
    @_from_the_file
    def run_id(self) -> str:
        return self._text("entry_identifier_uuid")

    @cached_property
    @_from_the_file
    def raw_sha256(self) -> str:
        return self._text("run_state/raw_sha256")

    @cached_property
    @_from_the_file
    def plan_name(self) -> str:
        return self._text("plan/file_name")

    @cached_property
    @_from_the_file
    def plan_bytes(self) -> bytes:
        return bytes(self._entry["plan/data"][:].tobytes())

    @cached_property
    @_from_the_file
    def bench_name(self) -> str:
        return self._text("bench_description/file_name")

    @cached_property
    @_from_the_file
    def bench_bytes(self) -> bytes:
        return bytes(self._entry["bench_description/data"][:].tobytes())

    @cached_property
    @_from_the_file
    def parts(self) -> tuple[PartRow, ...]:
        names = sorted(name for name in self._entry if name.startswith("part_"))
        return tuple(
            PartRow(
                self._text(f"{name}/name"),
                self._text(f"{name}/description"),
                int(self._entry[name]["changer_position"][()]),
            )
            for name in names
        )

    @cached_property
    @_from_the_file
    def instruments(self) -> tuple[InstrumentRow, ...]:
        bench = self._entry["bench"]
        return tuple(_instrument(role, bench[role]) for role in bench if role != "name")

    @cached_property
    @_from_the_file
    def legs(self) -> tuple[LegTimes, ...]:
        state = self._entry["run_state"]
        columns = (
            state[name][:].tolist() for name in ("leg", "leg_temperature_setpoint", "leg_start", "leg_end")
        )
        return tuple(LegTimes(*row) for row in zip(*columns, strict=True))

    @cached_property
    @_from_the_file
    def sessions(self) -> tuple[Session, ...]:
        state = self._entry["run_state"]
        rows = zip(
            state["session"][:].tolist(),
            state["session_start"][:].tolist(),
            hdf.read_texts(state, "session_software"),
            hdf.read_texts(state, "session_versions"),
            strict=True,
        )
        return tuple(
            Session(number, start, software, json.loads(text)) for number, start, software, text in rows
        )

    @cached_property
    @_from_the_file
    def events(self) -> tuple[EventRow, ...]:
        made = self._entry["events"]
        rows = zip(
            made["time"][:].tolist(),
            *(hdf.read_texts(made, name) for name in ("level", "kind", "text")),
            made["point"][:].tolist(),
            made["leg"][:].tolist(),
            strict=True,
        )
        return tuple(EventRow(*row) for row in rows)

    @cached_property
    @_from_the_file
    def chamber_log(self) -> tuple[FloatArray, FloatArray]:
        """Time [n] s and air temperature [n] degC."""
        return _log(self._entry["bench/chamber/air/value_log"])

    @cached_property
    @_from_the_file
    def body_logs(self) -> tuple[tuple[FloatArray, FloatArray], ...]:
        """For each part, time [n] s and body temperature [n] degC."""
        return tuple(
            _log(self._entry[f"part_{number:02d}/temperature_env/body/value_log"])
            for number in range(len(self.parts))
        )

    # ------------------------------------------------------------------- points

    @cached_property
    @_from_the_file
    def all_points(self) -> Columns:
        """Every attempt at every point, in the order of recording; one array a column."""
        points = self._entry["points"]
        return {
            name: points[name][:].astype(np.int64 if name in INTEGERS else np.float64)
            for name in EVERY_COLUMN
        }

    @cached_property
    @_from_the_file
    def points(self) -> Columns:
        """The last acceptable attempt at each point, in the order of the plan."""
        everything = self.all_points
        chosen: dict[int, int] = {}
        for row, (index, quality) in enumerate(
            zip(everything["plan_index"].tolist(), everything["quality"].tolist(), strict=True)
        ):
            if is_acceptable(quality):
                chosen[index] = row  # rows stand in the order of recording, so a later attempt wins
        rows = [chosen[index] for index in sorted(chosen)]
        return {name: values[rows] for name, values in everything.items()}

    def captures(self, point: int) -> PointCaptures | None:
        """Captures of the point with this number (column ``point``); None when it has none.

        Raises:
            RecordError: they cannot be read, the record is damaged.
        """
        found = self._where.get(int(point))
        if found is None:
            return None
        name, first, last = found
        try:
            group = self._opened(name)
            voltage, current = group.voltage[first:last], group.current[first:last]
        except hdf.DAMAGE as error:
            raise RecordError(
                f"{self.path}: damaged: captures of point {point} cannot be read: {error}."
            ) from error
        setting = group.setting
        return PointCaptures(
            time=group.time,
            voltage_codes=voltage,
            current_codes=current,
            repeat=group.repeat[first:last],
            setting=dict(setting),
        )

    # -------------------------------------------------------------- extraction

    @cached_property
    @_from_the_file
    def extraction(self) -> ExtractionTables | None:
        """The newest extraction made from exactly these data; None when there is none."""
        made = latest_valid(self._file)
        return None if made is None else read_tables(made)

    @cached_property
    @_from_the_file
    def result(self) -> dict[str, Any] | None:
        """What ``result.json`` said when `extraction` was made; None when there is none."""
        made = latest_valid(self._file)
        if made is None:
            return None
        result: dict[str, Any] = json.loads(hdf.read_text(made["result"], "data"))
        return result

    def close(self) -> None:
        self._file.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    # ------------------------------------------------------------------ private

    @property
    def _entry(self) -> h5py.Group:
        return self._file["entry"]

    def _text(self, name: str) -> str:
        return hdf.read_text(self._entry, name)

    @cached_property
    @_from_the_file
    def _where(self) -> dict[int, tuple[str, int, int]]:
        """Point to captures group and rows; those of one point stand together, in order."""
        found: dict[int, tuple[str, int, int]] = {}
        for name in capture_groups(self._entry):
            points, firsts, counts = np.unique(
                self._entry[name]["point"][:], return_index=True, return_counts=True
            )
            for point, first, count in zip(points.tolist(), firsts.tolist(), counts.tolist(), strict=True):
                found[point] = (name, first, first + count)
        return found

    def _opened(self, name: str) -> "_CapturesGroup":
        """What all captures of one setting share is looked up once: a night has thousands of them."""
        if name not in self._groups:
            made = self._entry[name]
            facts: dict[str, Any] = json.loads(hdf.read_text(made, "setting"))
            setting = {"code_min": -math.inf, "code_max": math.inf} | facts.pop("detail") | facts
            time: FloatArray = made["time"][:]
            time.flags.writeable = False  # shared by all that is handed out
            self._groups[name] = _CapturesGroup(
                made["voltage"], made["current"], time, made["repeat"][:], setting
            )
        return self._groups[name]


def _scaled(codes: Codes, factor: float, offset: float) -> FloatArray:
    return np.asarray(codes.astype(np.float64) * factor + offset)


def _log(made: h5py.Group) -> tuple[FloatArray, FloatArray]:
    return made["time"][:], made["value"][:]


def _instrument(role: str, made: h5py.Group) -> InstrumentRow:
    owner = made["air"] if role == CHAMBER else made
    fabrication, identity = owner["fabrication"], owner["identity"]
    calibration = {
        str(name): CalibrationRow(
            float(constant[()]),
            str(constant.attrs["units"]),
            float(constant.attrs["uncertainty"]),
            str(constant.attrs["date"]),
            str(constant.attrs["certificate"]),
        )
        for name, constant in owner["calibration"].items()
    }
    return InstrumentRow(
        role=role,
        nx_class=made.attrs["NX_class"],
        name=hdf.read_text(made, "name"),
        vendor=hdf.read_text(fabrication, "vendor"),
        model=hdf.read_text(fabrication, "model"),
        serial=hdf.read_text(fabrication, "serial_number"),
        firmware=hdf.read_text(identity, "firmware"),
        idn=hdf.read_text(identity, "idn"),
        address=hdf.read_text(identity, "address"),
        calibration=calibration,
    )
