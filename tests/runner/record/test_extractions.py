"""Extractions: added to a record without its journal, without touching what was measured."""

import json
import math
import shutil
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

from runner.errors import InputError
from runner.record import (
    ExtractionTables,
    Journal,
    PointRow,
    RecordError,
    consolidate,
    open_run,
    write_extraction,
)


@pytest.fixture
def archived(make_run: Callable[..., Any], tmp_path: Path) -> Path:
    """A record that was copied away from its journal."""
    place = tmp_path / "archive"
    place.mkdir()
    shutil.copy(consolidate(make_run().folder), place / "record.h5")
    return place


def assert_same(found: ExtractionTables | None, written: ExtractionTables) -> None:
    assert found is not None
    assert (found.program, found.version, found.date) == (written.program, written.version, written.date)
    assert found.settings == written.settings
    for kind in ("surfaces", "isats"):
        for one, other in zip(getattr(found, kind), getattr(written, kind), strict=True):
            for name in one.__slots__:
                np.testing.assert_array_equal(getattr(one, name), getattr(other, name), err_msg=name)


def test_an_extraction_comes_back_and_the_raw_data_are_untouched(
    archived: Path, tables: ExtractionTables
) -> None:
    with open_run(archived) as run:
        before = run.raw_sha256
        assert run.extraction is None
        assert run.result is None
    write_extraction(archived, tables, {"coverage": 0.95, "parts": []})
    with open_run(archived) as run:
        assert run.raw_sha256 == before
        assert_same(run.extraction, tables)
        assert run.result == {"coverage": 0.95, "parts": []}
    assert json.loads((archived / "result.json").read_bytes()) == {"coverage": 0.95, "parts": []}
    assert {path.name for path in archived.iterdir()} == {"record.h5", "result.json", "record.lock"}


def test_a_later_extraction_is_shown_first_and_the_earlier_one_stays(
    archived: Path, tables: ExtractionTables, later_tables: ExtractionTables
) -> None:
    write_extraction(archived / "record.h5", tables, {"n": 1})
    write_extraction(archived, later_tables, {"n": 2})
    with open_run(archived) as run:
        assert_same(run.extraction, later_tables)
        assert run.result == {"n": 2}
    with h5py.File(archived / "record.h5") as file:
        assert file["entry"].attrs["default"] == "extraction_01"
        assert [file[f"entry/extraction_0{n}/sequence_index"][()] for n in (0, 1)] == [1, 2]


def test_an_extraction_of_fewer_points_is_not_passed_off_as_current(
    make_run: Callable[..., Any], make_point: Callable[..., PointRow], tables: ExtractionTables
) -> None:
    sample = make_run()
    consolidate(sample.folder)
    write_extraction(sample.folder, tables, {"n": 1})
    with Journal.reopen(
        sample.folder, plan=sample.header.plan_bytes, bench=sample.header.bench_bytes
    ) as journal:
        journal.session("later", {}, journal.last_time())
        journal.add_point(make_point(8), [])
    with open_run(sample.folder) as run, h5py.File(run.path) as file:
        assert run.extraction is None
        assert run.result is None
        assert "extraction_00" in file["entry"]
        assert file["entry"].attrs["default"] == "points"
    write_extraction(sample.folder, tables, {"n": 2})
    with open_run(sample.folder) as run, h5py.File(run.path) as file:
        assert run.result == {"n": 2}
        assert file["entry"].attrs["default"] == "extraction_01"


def test_an_extraction_knows_the_data_it_was_made_from(archived: Path, tables: ExtractionTables) -> None:
    with open_run(archived) as run:
        now = run.raw_sha256
    write_extraction(archived, tables, {"n": 1}, made_from="another digest")
    with open_run(archived) as run:
        assert run.extraction is None
    write_extraction(archived, tables, {"n": 2}, made_from=now)
    with open_run(archived) as run:
        assert run.result == {"n": 2}


def test_a_file_that_is_no_record_gets_no_extraction(tmp_path: Path, tables: ExtractionTables) -> None:
    with h5py.File(tmp_path / "record.h5", "w") as file:
        file["x"] = 1
    with pytest.raises(RecordError, match="could not be added"):
        write_extraction(tmp_path, tables, {})
    assert {path.name for path in tmp_path.iterdir()} == {"record.h5", "record.lock"}


def test_curves_stand_in_the_record_with_their_drop(archived: Path, tables: ExtractionTables) -> None:
    write_extraction(archived, tables, {})
    with h5py.File(archived / "record.h5") as file:
        group = file["entry/extraction_00/part_00_pulse_isat"]
        assert group["isat"].attrs["drop_fraction"] == 0.3
        assert [group[name].attrs["drop_fraction"] for name in group.attrs["auxiliary_signals"]] == [0.1, 0.2]
        assert "part_01_bias_isat" in file["entry/extraction_00"]


def test_numbers_that_json_does_not_know_become_null(archived: Path, tables: ExtractionTables) -> None:
    write_extraction(
        archived, tables, {"a": math.nan, "b": [np.float64(math.inf), np.int64(3)], "c": np.arange(2.0)}
    )
    assert json.loads((archived / "result.json").read_text()) == {"a": None, "b": [None, 3], "c": [0.0, 1.0]}


def test_tables_that_do_not_fit_together_are_refused(archived: Path, tables: ExtractionTables) -> None:
    surface, isat = tables.surfaces[0], tables.isats[0]
    wrong = [
        replace(tables, surfaces=(replace(surface, errors=surface.errors[:1]),)),
        replace(tables, surfaces=(replace(surface, body_temperature=surface.current),)),
        replace(tables, surfaces=(surface, surface)),
        replace(tables, isats=(replace(isat, drops=isat.drops[:2]),)),
        replace(tables, isats=(replace(isat, drops=()),)),
        replace(tables, isats=(replace(isat, part=-1),)),
    ]
    before = (archived / "record.h5").read_bytes()
    for bad in wrong:
        with pytest.raises(ValueError, match="part"):
            write_extraction(archived, bad, {})
    assert (archived / "record.h5").read_bytes() == before


def test_an_extraction_with_nothing_in_it_leaves_the_points_in_front(
    archived: Path, tables: ExtractionTables
) -> None:
    write_extraction(archived, replace(tables, surfaces=(), isats=()), {"n": 0})
    with open_run(archived) as run, h5py.File(run.path) as file:
        assert run.result == {"n": 0}
        assert file["entry"].attrs["default"] == "points"


def test_a_damaged_record_gets_no_extraction(archived: Path, tables: ExtractionTables) -> None:
    with h5py.File(archived / "record.h5", "r+") as file:
        file["entry/captures_00/voltage"][0, 0] += 1
    before = (archived / "record.h5").read_bytes()
    with pytest.raises(RecordError, match="checksum"):
        write_extraction(archived, tables, {})
    assert (archived / "record.h5").read_bytes() == before
    assert {path.name for path in archived.iterdir()} == {"record.h5", "record.lock"}


def test_where_there_is_no_record_there_is_nothing_to_add_to(
    tmp_path: Path, tables: ExtractionTables
) -> None:
    with pytest.raises(InputError, match=r"record\.h5"):
        write_extraction(tmp_path, tables, {})
