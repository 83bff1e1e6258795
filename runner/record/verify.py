"""Is a record what it claims to be? Everything that was measured is read back and hashed again."""

import zlib
from pathlib import Path

import h5py
import numpy as np

from runner.record import hdf
from runner.record.columns import EVERY_COLUMN
from runner.record.digest import RawDigest, rows_to_hash
from runner.record.errors import RecordError


def raw_sha256_of(file: h5py.File) -> str:
    """``raw_sha256`` recomputed from the points and the captures in a record, one capture in memory at a
    time.

    Raises:
        RecordError: a capture does not match its CRC-32, or cannot be read.
    """
    entry = file["entry"]
    points = {name: entry["points"][name][:] for name in EVERY_COLUMN}
    where: dict[int, list[tuple[int, str, int]]] = {}
    crcs = {}
    for name in capture_groups(entry):
        made = entry[name]
        crcs[name] = (made["voltage_crc32"][:], made["current_crc32"][:])
        for row, (point, repeat) in enumerate(
            zip(made["point"][:].tolist(), made["repeat"][:].tolist(), strict=True)
        ):
            where.setdefault(point, []).append((repeat, name, row))
    digest = RawDigest()
    for integers, floats in rows_to_hash(points):
        captures = sorted(where.get(integers[0], []))
        digest.point(integers, len(captures), floats)
        for repeat, name, row in captures:
            voltage, current = (_codes(entry[name][channel], row) for channel in ("voltage", "current"))
            expected = tuple(int(crc[row]) for crc in crcs[name])
            if (zlib.crc32(voltage), zlib.crc32(current)) != expected:
                raise RecordError(
                    f"{file.filename}: damaged: the codes of point {integers[0]}, repeat {repeat}, do not "
                    "match their checksum. Rebuild the record from its journal, or restore it from a copy."
                )
            digest.capture(voltage, current)
    return digest.hexdigest()


def capture_groups(entry: h5py.Group) -> list[str]:
    """Names of the captures groups, in order."""
    return sorted(name for name in entry if name.startswith("captures_"))


def verify_record(path: Path | str) -> str:
    """Check a finished record and return its ``raw_sha256``.

    Raises:
        RecordError: it does not open, or what it holds is not what was recorded.
    """
    path = Path(path)
    try:
        with hdf.open_to_read(path) as file:
            stored = hdf.read_text(file["entry/run_state"], "raw_sha256")
            found = raw_sha256_of(file)
    except hdf.DAMAGE as error:
        raise RecordError(f"{path}: damaged, or not a record: {error}.") from error
    if found != stored:
        raise RecordError(
            f"{path}: damaged: its data give raw_sha256 {found}, the record says {stored or 'nothing'}."
        )
    return stored


def _codes(dataset: h5py.Dataset, row: int) -> bytes:
    codes: np.ndarray = dataset[row]
    return codes.astype(codes.dtype.newbyteorder("<"), copy=False).tobytes()
