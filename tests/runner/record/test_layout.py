"""The record as NeXus, as netCDF and as what an engineer opens."""

import re
import shutil
import subprocess
import sys
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
import xarray

from runner.record import (
    CaptureRow,
    ExtractionTables,
    InstrumentRow,
    Journal,
    PartRow,
    PointRow,
    RunHeader,
    SettingRow,
    consolidate,
    open_run,
    write_extraction,
)

KINDS = ["finished", "empty", "many events", "by hand", "killed early"]


@pytest.fixture(params=KINDS, scope="module")
def record(
    request: pytest.FixtureRequest, run_writer: Callable[..., Any], tables: ExtractionTables, setting: SettingRow,
    header: RunHeader, tmp_path_factory: pytest.TempPathFactory,
) -> Path:  # fmt: skip
    """Records of runs that went as they should, and of some that hardly went at all."""
    tmp_path = tmp_path_factory.mktemp("records")
    if request.param == "finished":
        folder: Path = run_writer(tmp_path / "run").folder
        consolidate(folder)
        write_extraction(folder, tables, {"coverage": 0.95})
        return folder / "record.h5"
    if request.param == "empty":
        return consolidate(run_writer(tmp_path / "run", points=0, bias=0, events=0).folder)
    if request.param == "many events":
        return consolidate(run_writer(tmp_path / "run", points=2, bias=1, events=600).folder)
    if request.param == "by hand":
        by_hand = replace(header, kind="captures", bench_bytes=b"", bench_name="", parts=(PartRow("x"),))
        with Journal.create(tmp_path / "hand", by_hand) as journal:
            journal.session("s", {}, header.start)
            number = journal.setting(replace(setting, dtype="float64", v_scale=1.0, v_offset=0.0, detail={}))
            journal.instrument(InstrumentRow("shunt", "NXsensor"))
            wave = np.linspace(0, 1, setting.samples)
            row = PointRow(0, 0, 0, "pulse", header.start, header.start)
            journal.add_point(row, [CaptureRow(0, number, header.start, wave, wave**2)])
        return consolidate(tmp_path / "hand")
    with Journal.create(tmp_path / "killed", header):
        pass
    return consolidate(tmp_path / "killed")


def groups(file: h5py.File) -> Iterator[h5py.Group]:
    found = [file]
    file.visititems(lambda name, item: found.append(item) if isinstance(item, h5py.Group) else None)
    yield from found


def datasets(file: h5py.File) -> Iterator[h5py.Dataset]:
    found: list[h5py.Dataset] = []
    file.visititems(lambda name, item: found.append(item) if isinstance(item, h5py.Dataset) else None)
    yield from found


def test_nxcheck_finds_nothing(record: Path) -> None:
    """Base-class checker of the package nexusformat, definitions v2026.01. Its exit status says nothing."""
    nxcheck = shutil.which("nxcheck", path=str(Path(sys.executable).parent))
    assert nxcheck, "nexusformat is a test dependency"
    said = subprocess.run([nxcheck, str(record)], capture_output=True, text=True).stdout
    plain = re.sub(r"\x1b\[[0-9;]*m", "", said)
    totals = dict(re.findall(r"Total number of (warnings|errors): (\d+)", plain))
    assert totals == {"warnings": "0", "errors": "0"}, plain


def test_every_group_has_a_class_and_every_float_a_unit(record: Path) -> None:
    with h5py.File(record) as file:
        for group in groups(file):
            assert str(group.attrs["NX_class"]).startswith("NX"), group.name
        for data in datasets(file):
            scale_constant = re.search(r"_(scaling_factor|offset)$", data.name)
            if data.dtype.kind == "f" and not scale_constant:
                assert data.attrs["units"] in {"s", "V", "A", "H", "ohm", "Hz", "degC", "1"}, data.name
            if data.name.endswith("_errors"):
                assert data.shape == file[data.name.removesuffix("_errors")].shape


def test_every_plot_has_its_signal_its_axes_and_one_scale_an_axis(record: Path) -> None:
    with h5py.File(record) as file:
        plots = [group for group in groups(file) if group.attrs["NX_class"] == "NXdata"]
        for group in plots:
            axes = list(group.attrs["axes"])
            signals = [group.attrs["signal"], *group.attrs.get("auxiliary_signals", [])]
            for signal in signals:
                assert group[signal].shape == tuple(group[axis].shape[0] for axis in axes), group.name
                scales = [[scale.name for scale in dim.values()] for dim in group[signal].dims]
                assert scales == [[group[axis].name] for axis in axes], group.name
        logs = [group for group in groups(file) if group.attrs["NX_class"] == "NXlog"]
        assert len(logs) == 1 + len([name for name in file["entry"] if name.startswith("part_")])
        for log in logs:
            assert log["value"].dims[0][0] == log["time"]
            assert "T" in log["time"].attrs["start"]


def test_the_default_leads_to_a_plot(record: Path) -> None:
    with h5py.File(record) as file:
        group = file
        while group.attrs["NX_class"] != "NXdata":
            group = group[group.attrs["default"]]
        if "extraction_00" in file["entry"]:
            assert group.name == "/entry/extraction_00/part_00_pulse"
            assert list(group.attrs["axes"]) == ["temperature", "current"]
            assert group["inductance_errors"].shape == group["inductance"].shape
        else:
            assert group.name == "/entry/points"


def test_xarray_opens_every_plot_log_and_collection(record: Path) -> None:
    with h5py.File(record) as file:
        names = [g.name for g in groups(file) if g.attrs["NX_class"] in ("NXdata", "NXlog")]
        lengths = {
            name: len(file[name][file[name].attrs["axes"][0]]) for name in names if "axes" in file[name].attrs
        }
    for name in [*names, "/entry/events", "/entry/run_state"]:
        with xarray.open_dataset(record, group=name, engine="h5netcdf") as dataset:
            assert not [dim for dim in dataset.dims if str(dim).startswith("phony")], name
            assert all(v.dtype.kind != "m" for v in dataset.variables.values()), "a time became a timedelta"
            if name in lengths:
                assert next(iter(dataset.sizes.values())) == lengths[name]
            dataset.load()


def test_the_two_spellings_of_a_scale_agree(record: Path) -> None:
    with h5py.File(record) as file:
        names = [name for name in file["entry"] if name.startswith("captures_")]
        for name in names:
            group = file["entry"][name]
            with xarray.open_dataset(record, group=f"/entry/{name}", engine="h5netcdf") as decoded:
                for channel in ("voltage", "current"):
                    codes = group[channel][:].astype("f8")
                    scale = group[channel].attrs["scale_factor"]
                    netcdf = codes * scale + group[channel].attrs["add_offset"]
                    nexus = (codes + group[f"{channel}_offset"][()]) * group[f"{channel}_scaling_factor"][()]
                    np.testing.assert_allclose(nexus, netcdf, rtol=1e-12, atol=abs(scale) * 1e-9)
                    np.testing.assert_allclose(decoded[channel], netcdf, rtol=1e-6, atol=abs(scale) * 0.01)


def test_plan_and_bench_come_back_byte_for_byte(make_run: Callable[..., Any]) -> None:
    import hashlib

    sample = make_run()
    with h5py.File(consolidate(sample.folder)) as file:
        for name, data in (
            ("plan", sample.header.plan_bytes),
            ("bench_description", sample.header.bench_bytes),
        ):
            note = file["entry"][name]
            assert note["data"][:].tobytes() == data
            assert note["checksum"].asstr()[()] == hashlib.sha256(data).hexdigest()
            assert note["algorithm"].asstr()[()] == "sha256"
    assert b"\r\n" in sample.header.plan_bytes
    with pytest.raises(UnicodeDecodeError):
        sample.header.bench_bytes.decode()


@pytest.mark.parametrize("dtype", ["int8", "int16", "int32", "float32", "float64"])
def test_codes_of_every_kind_come_back_as_they_were(
    make_run: Callable[..., Any], make_captures: Callable[..., Any], setting: SettingRow, dtype: str
) -> None:
    setting = replace(setting, dtype=dtype)
    with open_run(make_run(points=3, bias=0, setting=setting).folder) as run:
        for index in range(3):
            found, written = run.captures(index + 1), make_captures(index, 1, setting)
            assert found is not None
            assert found.voltage_codes.dtype == found.current_codes.dtype == np.dtype(dtype)
            for row, capture in enumerate(written):
                np.testing.assert_array_equal(found.voltage_codes[row], capture.voltage)
                np.testing.assert_array_equal(found.current_codes[row], capture.current)


def test_each_setting_has_its_own_group_and_an_unused_one_has_none(
    open_journal: Journal,
    make_point: Callable[..., PointRow],
    make_captures: Callable[..., Any],
    setting: SettingRow,
) -> None:
    kinds = [setting, replace(setting, interval=5e-8), replace(setting, samples=50, first=0.0)]
    numbers = [open_journal.setting(kind) for kind in kinds]
    for index, kind in enumerate((0, 2, 0)):
        open_journal.add_point(make_point(index), make_captures(index, numbers[kind], kinds[kind]))
    open_journal.close()
    with open_run(open_journal.folder) as run, h5py.File(run.path) as file:
        assert [name for name in file["entry"] if name.startswith("captures")] == [
            "captures_00",
            "captures_01",
        ]
        assert file["entry/captures_00/point"][:].tolist() == [1, 1, 3, 3]
        assert file["entry/captures_01/point"][:].tolist() == [2, 2]
        second = run.captures(2)
        assert second is not None
        np.testing.assert_allclose(second.time, np.arange(50) * 1e-8, rtol=1e-12)


def test_codes_are_compressed_and_checked_on_the_disk(make_run: Callable[..., Any]) -> None:
    with h5py.File(consolidate(make_run().folder)) as file:
        for channel in ("voltage", "current"):
            data = file["entry/captures_00"][channel]
            assert (data.compression, data.compression_opts, data.shuffle, data.fletcher32) == (
                "gzip",
                1,
                True,
                True,
            )
            assert data.chunks == (1, 200)
