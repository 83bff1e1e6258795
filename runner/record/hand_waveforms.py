"""Waveforms that somebody saved by hand: CSV with a header line and `#` comments, or NPZ with named arrays.

A waveform is taken as it is or refused with the line that is wrong: nothing is resampled, sorted or filled in, because a
gap or a step back in time says that the file is not what its owner thinks it is.
"""

import csv
import zipfile
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from runner.arrays import FloatArray
from runner.errors import Fault, InputError

# A time column printed with few digits jitters by its rounding; what moves more than this share of a step is another
# sampling rate or a missing sample.
LARGEST_JITTER = 0.25
FEWEST_SAMPLES = 16


@dataclass(frozen=True, slots=True)
class Waveform:
    """One capture on an even time grid.

    Attributes:
        first: time of the first sample [s].
        interval: between samples [s].
        voltage: across the part, shape ``[n]`` [V].
        current: shape ``[n]``; shunt voltage [V] or current [A], whichever the file holds.
    """

    first: float
    interval: float
    voltage: FloatArray
    current: FloatArray


def read_waveform(path: Path, *, time: str, voltage: str, current: str) -> Waveform:
    """Read the three columns named ``time``, ``voltage`` and ``current``.

    Raises:
        InputError: the file or a column is missing, a value is no finite number, time does not increase evenly, or there
            are fewer than 16 samples; the message names file and line.
    """
    wanted = (time, voltage, current)
    columns = _read_npz(path, wanted) if path.suffix.lower() == ".npz" else _read_csv(path, wanted)
    times = columns[time].values
    if len(times) < FEWEST_SAMPLES:
        raise _fault(path, f"{len(times)} samples are too few; a capture needs at least {FEWEST_SAMPLES}")
    steps = np.diff(times)
    if not (steps > 0).all():
        bad = int(np.argmax(steps <= 0)) + 1
        where = columns[time].where(bad)
        raise _fault(
            where,
            f"{time}: time does not increase ({times[bad]:g} s after {times[bad - 1]:g} s); export again",
        )
    interval = float((times[-1] - times[0]) / (len(times) - 1))
    jitter = np.abs(times - (times[0] + interval * np.arange(len(times))))
    if (jitter > LARGEST_JITTER * interval).any():
        bad = int(np.argmax(jitter > LARGEST_JITTER * interval))
        where = columns[time].where(bad)
        raise _fault(
            where, f"{time}: samples are not evenly spaced (mean step {interval:g} s); export the raw samples"
        )
    return Waveform(float(times[0]), interval, columns[voltage].values, columns[current].values)


@dataclass(frozen=True, slots=True)
class _Column:
    name: str
    values: FloatArray
    places: tuple[str, ...] | str  # "file:line" of each value, or the file where there are no lines

    def where(self, index: int) -> str:
        return self.places if isinstance(self.places, str) else self.places[index]


def _read_csv(path: Path, wanted: tuple[str, ...]) -> Mapping[str, _Column]:
    try:
        text = path.read_text(encoding="utf-8-sig")
    except OSError as error:
        raise _fault(path, f"cannot be read ({error.strerror}); name a CSV or NPZ file") from error
    except UnicodeDecodeError as error:
        raise _fault(path, "is no UTF-8 text; save it as CSV, or as NPZ with the ending .npz") from error
    lines = [
        (number, line)
        for number, line in enumerate(text.splitlines(), 1)
        if line.strip() and line.lstrip()[0] != "#"
    ]
    if not lines:
        raise _fault(path, "holds no data; a header line and samples are needed")
    rows = list(csv.reader(line for _, line in lines))
    header = [name.strip() for name in rows[0]]
    _refuse_missing(f"{path}:{lines[0][0]}", header, wanted)
    places = tuple(f"{path}:{number}" for number, _ in lines[1:])
    found = {}
    for name in wanted:
        index = header.index(name)
        values = np.empty(len(rows) - 1)
        for row, (place, cells) in enumerate(zip(places, rows[1:], strict=True)):
            if len(cells) <= index:
                raise _fault(
                    place, f"{name}: the line has {len(cells)} values, the header {len(header)}; export again"
                )
            try:
                values[row] = float(cells[index])
            except ValueError:
                raise _fault(
                    place, f"{name}: {cells[index].strip()!r} is no number; use a point for decimals"
                ) from None
        found[name] = _finite(_Column(name, values, places))
    return found


def _read_npz(path: Path, wanted: tuple[str, ...]) -> Mapping[str, _Column]:
    try:
        with np.load(path, allow_pickle=False) as archive:
            _refuse_missing(str(path), list(archive.files), wanted)
            arrays = {name: np.asarray(archive[name], dtype=np.float64) for name in wanted}
    except OSError as error:
        raise _fault(path, f"cannot be read ({error.strerror or error}); name a CSV or NPZ file") from error
    except (ValueError, TypeError, EOFError, zipfile.BadZipFile) as error:
        raise _fault(path, f"is no NPZ file of plain numbers ({error}); save it with numpy.savez") from error
    lengths = {name: array.shape for name, array in arrays.items()}
    if any(array.ndim != 1 for array in arrays.values()) or len(set(lengths.values())) != 1:
        raise _fault(path, f"the arrays must be one-dimensional and of one length, not {lengths}")
    return {name: _finite(_Column(name, array, str(path))) for name, array in arrays.items()}


def _refuse_missing(where: str, present: list[str], wanted: tuple[str, ...]) -> None:
    missing = [name for name in wanted if name not in present]
    if missing:
        raise InputError(
            [
                Fault(
                    where,
                    f"no column {name!r}; there are {', '.join(present)}: correct 'columns:' in the captures file",
                )
                for name in missing
            ]
        )


def _finite(column: _Column) -> _Column:
    bad = ~np.isfinite(column.values)
    if bad.any():
        index = int(np.argmax(bad))
        raise _fault(
            column.where(index),
            f"{column.name}: sample {index} is {column.values[index]}; remove or mend the capture",
        )
    return column


def _fault(where: Path | str, what: str) -> InputError:
    return InputError([Fault(str(where), what)])
