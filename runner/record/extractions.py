"""Extractions in a record: adding one, reading them back.

An extraction never touches what was measured: it is added to a copy, the copy is checked, and the copy takes
the record's place. It remembers the ``raw_sha256`` of the data it was made from. When points were added to
the run since (it was resumed), the extraction stays in the record, but it is no longer what the record shows
first.
"""

import json
import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any, get_args

import h5py
import numpy as np

from runner.record import hdf
from runner.record.durable import copy_file, removed_unless_finished, replace, reserve, write_file
from runner.record.errors import RecordError, not_a_run
from runner.record.lock import holding_record_lock
from runner.record.places import PART, RECORD, RESULT
from runner.record.rows import METHODS, Method
from runner.record.tables import ExtractionTables, IsatTable, SurfaceTable
from runner.record.verify import raw_sha256_of

#: Bytes that one extraction may add, generously.
ROOM_FOR_EXTRACTION = 8_000_000


def write_extraction(
    path: Path | str, tables: ExtractionTables, result: Mapping[str, Any], *, made_from: str | None = None
) -> None:
    """Add an extraction to a record and write ``result.json`` beside it. Needs no journal.

    Args:
        path: a run folder, or a ``record.h5`` wherever it lies.
        tables: surfaces and curves.
        result: the result as it will be written to ``result.json``; NaN and infinity become null.
        made_from: `Run.raw_sha256` of the data it was made from, when the record may have grown since; otherwise
            it is taken to be made from what the record holds.

    Raises:
        InputError: there is no record.
        RecordError: the record is damaged, or the disk refused; the old record is still there.
        ValueError: tables whose shapes do not fit together.
    """
    _check(tables)
    path = Path(path)
    record = path if path.is_file() else path / RECORD
    if not record.is_file():
        raise not_a_run(path, f"has no {RECORD} to add an extraction to; rebuild it first.")
    text = json.dumps(_plain(result), indent=1, ensure_ascii=False, allow_nan=False)
    with holding_record_lock(record.parent):
        part = record.with_name(PART)
        try:
            with removed_unless_finished(part):
                reserve(part, record.stat().st_size + ROOM_FOR_EXTRACTION)
                copy_file(record, part)
                _append(part, tables, text, made_from)
                left_behind = not replace(part, record)
        except (OSError, KeyError, RuntimeError) as error:
            raise RecordError(f"{record}: the extraction could not be added: {error}.") from error
        _write_result(record.with_name(RESULT), text)
    if left_behind:
        raise RecordError(f"{record}: somebody keeps it open, so the new one was left beside it as {part}.")


def _write_result(path: Path, text: str) -> None:
    try:
        write_file(path, text.encode() + b"\n")
    except OSError as error:
        raise RecordError(
            f"{path}: could not be written: {error}. The record holds the same result."
        ) from error


def _append(part: Path, tables: ExtractionTables, text: str, made_from: str | None) -> None:
    with hdf.open_to_change(part) as file:
        add_extraction(file, tables, text, made_from)
    with hdf.open_to_read(part) as file:
        if raw_sha256_of(file) != hdf.read_text(file["entry/run_state"], "raw_sha256"):
            raise RecordError(f"{part}: what was measured is not what the record says; nothing was changed.")


def add_extraction(
    file: h5py.File, tables: ExtractionTables, text: str, raw_sha256: str | None = None
) -> None:
    """Write the next ``extraction_NN`` into a ``.part`` file; show it first if it belongs to these data."""
    entry = file["entry"]
    # Read before anything is written: HDF5 fills up the text heaps it has seen, so an order of reading and
    # writing that differs between a first extraction and a rebuild would give files that differ.
    of_the_record = hdf.read_text(entry["run_state"], "raw_sha256")
    made_from = raw_sha256 or of_the_record
    number = len(extraction_groups(entry))
    name = f"extraction_{number:02d}"
    made = hdf.group(entry, name, "NXprocess")
    hdf.text(made, "program", tables.program)
    hdf.text(made, "version", tables.version)
    hdf.text(made, "date", tables.date)
    hdf.numbers(made, "sequence_index", np.int64(number + 1))
    _write_settings(made, tables.settings)
    note = hdf.group(made, "result", "NXnote")
    hdf.text(note, "type", "application/json")
    hdf.text(note, "description", f"the result as it stood in {RESULT}")
    hdf.text(note, "data", text)
    source = hdf.group(made, "source", "NXparameters")
    hdf.text(source, "raw_sha256", made_from)
    for surface in tables.surfaces:
        _write_surface(made, surface)
    for isat in tables.isats:
        _write_isat(made, isat)
    shown = _data_groups(made)
    surfaces = [child for child in shown if not child.endswith("_isat")]
    if surfaces or shown:
        made.attrs["default"] = min(surfaces or shown, key=_shown_first)
        if made_from == of_the_record:
            entry.attrs["default"] = name


def _shown_first(name: str) -> tuple[str, bool]:
    return name[:7], "_bias" in name


def extraction_groups(entry: h5py.Group) -> list[str]:
    """Names of the extractions, oldest first."""
    return sorted(name for name in entry if name.startswith("extraction_"))


def latest_valid(file: h5py.File) -> h5py.Group | None:
    """The newest extraction made from exactly the data that the record holds."""
    entry = file["entry"]
    raw_sha256 = hdf.read_text(entry["run_state"], "raw_sha256")
    for name in reversed(extraction_groups(entry)):
        if hdf.read_text(entry[name]["source"], "raw_sha256") == raw_sha256:
            return entry[name]
    return None


def read_everything(file: h5py.File) -> list[tuple[ExtractionTables, str, str]]:
    """All extractions, oldest first: tables, the result's text, and the ``raw_sha256`` each was made from."""
    entry = file["entry"]
    return [
        (
            read_tables(entry[name]),
            hdf.read_text(entry[name]["result"], "data"),
            hdf.read_text(entry[name]["source"], "raw_sha256"),
        )
        for name in extraction_groups(entry)
    ]


def read_tables(made: h5py.Group) -> ExtractionTables:
    """One extraction as it was handed in."""
    names = sorted(_data_groups(made), key=lambda name: int(made[name].attrs["order"]))
    return ExtractionTables(
        program=hdf.read_text(made, "program"),
        version=hdf.read_text(made, "version"),
        date=hdf.read_text(made, "date"),
        settings=_read_settings(made["settings"]),
        surfaces=tuple(_read_surface(made[name], name) for name in names if not name.endswith("_isat")),
        isats=tuple(_read_isat(made[name], name) for name in names if name.endswith("_isat")),
    )


# ---------------------------------------------------------------------- fields


def _write_surface(made: h5py.Group, table: SurfaceTable) -> None:
    data = hdf.data_group(
        made,
        f"part_{table.part:02d}_{table.method}",
        signal="inductance",
        axes=["temperature", "current"],
        order=_next_order(made),
    )
    temperature = hdf.scale(hdf.numbers(data, "temperature", _floats(table.temperature_degC), "degC"))
    current = hdf.scale(hdf.numbers(data, "current", _floats(table.current), "A"))
    hdf.scaled_by(hdf.numbers(data, "inductance", _floats(table.inductance), "H"), temperature, current)
    hdf.scaled_by(hdf.numbers(data, "inductance_errors", _floats(table.errors), "H"), temperature, current)
    hdf.scaled_by(
        hdf.numbers(data, "point_count", np.asarray(table.point_count, "<i4")), temperature, current
    )
    hdf.scaled_by(hdf.numbers(data, "body_temperature", _floats(table.body_temperature), "degC"), temperature)


def _write_isat(made: h5py.Group, table: IsatTable) -> None:
    """One curve for each drop: ``isat`` is the last of them, the others are drawn beside it."""
    names = [*(f"isat_{number:02d}" for number in range(len(table.drops) - 1)), "isat"]
    others = {"auxiliary_signals": names[:-1]} if names[:-1] else {}
    data = hdf.data_group(
        made,
        f"part_{table.part:02d}_{table.method}_isat",
        signal="isat",
        axes=["temperature"],
        order=_next_order(made),
        **others,
    )
    temperature = hdf.scale(hdf.numbers(data, "temperature", _floats(table.temperature_degC), "degC"))
    for name, drop, ampere, errors in zip(names, table.drops, table.ampere, table.errors, strict=True):
        hdf.scaled_by(hdf.numbers(data, name, _floats(ampere), "A", drop_fraction=float(drop)), temperature)
        hdf.scaled_by(hdf.numbers(data, f"{name}_errors", _floats(errors), "A"), temperature)


def _read_surface(data: h5py.Group, name: str) -> SurfaceTable:
    return SurfaceTable(
        *_part_and_method(name),
        data["temperature"][:],
        data["current"][:],
        data["inductance"][:],
        data["inductance_errors"][:],
        data["point_count"][:].astype(np.int64),
        data["body_temperature"][:],
    )


def _read_isat(data: h5py.Group, name: str) -> IsatTable:
    names = [*sorted(n for n in data if n.startswith("isat_") and not n.endswith("_errors")), "isat"]
    return IsatTable(
        *_part_and_method(name),
        tuple(float(data[n].attrs["drop_fraction"]) for n in names),
        data["temperature"][:],
        np.array([data[n][:] for n in names]),
        np.array([data[f"{n}_errors"][:] for n in names]),
    )


def _part_and_method(name: str) -> tuple[int, Method]:
    _, part, method = name.removesuffix("_isat").split("_")
    return int(part), next(known for known in get_args(Method) if known == method)


def _next_order(made: h5py.Group) -> int:
    return len(_data_groups(made))


def _data_groups(made: h5py.Group) -> list[str]:
    return [name for name in made if made[name].attrs.get("NX_class") == "NXdata"]


def _write_settings(made: h5py.Group, settings: Mapping[str, Any]) -> None:
    """Each setting as one field of JSON text: whatever it is, it comes back as it was."""
    group = hdf.group(made, "settings", "NXparameters")
    for name, value in sorted(settings.items()):
        hdf.text(group, name, json.dumps(_plain(value), sort_keys=True, ensure_ascii=False))


def _read_settings(group: h5py.Group) -> dict[str, Any]:
    return {name: json.loads(hdf.read_text(group, name)) for name in group}


def _check(tables: ExtractionTables) -> None:
    for surface in tables.surfaces:
        rows = len(surface.temperature_degC)
        grid = (rows, len(surface.current))
        fields = (surface.inductance, surface.errors, surface.point_count)
        _check_shapes(surface, *((field, grid) for field in fields), (surface.body_temperature, (rows,)))
    for isat in tables.isats:
        curves = (len(isat.drops), len(isat.temperature_degC))
        if not isat.drops:
            raise ValueError(f"isat of part {isat.part}, {isat.method}: no drops")
        _check_shapes(isat, (isat.ampere, curves), (isat.errors, curves))
    for kind in (tables.surfaces, tables.isats):
        names = [(table.part, table.method) for table in kind]
        if len(names) != len(set(names)):
            raise ValueError(f"a part and method given twice: {names}")


def _check_shapes(table: SurfaceTable | IsatTable, *fields: tuple[Any, tuple[int, ...]]) -> None:
    where = f"{type(table).__name__} of part {table.part}, {table.method}"
    if table.method not in METHODS or not 0 <= table.part < 100:
        raise ValueError(f"{where}: unknown method or part")
    for field, shape in fields:
        if np.shape(field) != shape:
            raise ValueError(f"{where}: an array of shape {np.shape(field)} where {shape} belongs")


def _floats(values: Any) -> Any:
    return np.asarray(values, dtype="<f8")


def _plain(value: Any) -> Any:
    """A value as JSON knows it; NaN and infinity become null."""
    if isinstance(value, Mapping):
        return {str(key): _plain(inner) for key, inner in value.items()}
    if isinstance(value, np.ndarray | np.generic):
        value = value.tolist()
    if isinstance(value, list | tuple):
        return [_plain(inner) for inner in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value
