"""HDF5 the NeXus way, in small words: a group with a class, a field with a unit, text, a dimension scale."""

from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import h5py
import numpy as np

#: Object formats of HDF5 1.8 to 1.10: what every reader of the last ten years opens.
LIBVER = ("v108", "v110")
_CHUNK_CACHE = 1 << 16  # byte

#: What h5py raises on a file that is damaged, or not ours.
DAMAGE = (OSError, KeyError, RuntimeError, ValueError)

TEXT = h5py.string_dtype()


def create(path: Path) -> h5py.File:
    """A new, empty file. Nothing in it says when it was made, so that a rebuild gives the same bytes."""
    return h5py.File(path, "w", libver=LIBVER, track_times=False)


def open_to_change(path: Path) -> h5py.File:
    """Only ever a ``.part`` file."""
    return h5py.File(path, "r+", libver=LIBVER)


def open_to_read(path: Path) -> h5py.File:
    """With the locking that everybody gets: HDF5 refuses to open one file in two ways within a process."""
    # Each capture is read once: the cache of chunks (8 MiB a dataset since HDF5 2.0) would only fill memory, 320 MiB
    # of it in a run of 20 digitizer settings.
    return h5py.File(path, "r", rdcc_nbytes=_CHUNK_CACHE)


def group(parent: h5py.Group, name: str, nx_class: str, **attributes: Any) -> h5py.Group:
    made = parent.create_group(name)
    made.attrs["NX_class"] = nx_class
    annotate(made, attributes)
    return made


def data_group(
    parent: h5py.Group, name: str, *, signal: str, axes: list[str], **attributes: Any
) -> h5py.Group:
    """An NXdata group: what a viewer plots."""
    return group(parent, name, "NXdata", signal=signal, axes=axes, **attributes)


def numbers(
    parent: h5py.Group, name: str, values: Any, units: str | None = None, **attributes: Any
) -> h5py.Dataset:
    made = parent.create_dataset(name, data=values)
    if units is not None:
        made.attrs["units"] = units
    annotate(made, attributes)
    return made


def text(parent: h5py.Group, name: str, value: str, **attributes: Any) -> h5py.Dataset:
    made = parent.create_dataset(name, data=value, dtype=TEXT)
    annotate(made, attributes)
    return made


def texts(parent: h5py.Group, name: str, values: list[str]) -> h5py.Dataset:
    return parent.create_dataset(name, data=np.array(values, dtype=object), dtype=TEXT, shape=(len(values),))


def scaled_by(field: h5py.Dataset, *scales: h5py.Dataset) -> h5py.Dataset:
    """Name the dimensions of a field, one scale an axis."""
    for axis, scale in zip(field.dims, scales, strict=True):
        axis.attach_scale(scale)
    return field


def scale(dataset: h5py.Dataset) -> h5py.Dataset:
    """Make a field the scale of its own dimension."""
    dataset.make_scale(str(dataset.name).rsplit("/", 1)[1])
    return dataset


def annotate(where: h5py.HLObject, attributes: dict[str, Any]) -> None:
    for name, value in attributes.items():
        if isinstance(value, list):
            where.attrs.create(name, np.array(value, dtype=object), dtype=TEXT)
        else:
            where.attrs[name] = value


def read_text(parent: h5py.Group, name: str, default: str = "") -> str:
    if name not in parent:
        return default
    value = parent[name][()]
    return value.decode() if isinstance(value, bytes) else str(value)


def read_texts(parent: h5py.Group, name: str) -> list[str]:
    return [value.decode() if isinstance(value, bytes) else str(value) for value in parent[name][:]]


def iso(seconds: float) -> str:
    """UTC seconds since 1970 as ISO 8601 with milliseconds."""
    return datetime.fromtimestamp(seconds, UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")


def from_iso(text_: str) -> float:
    return datetime.fromisoformat(text_.replace("Z", "+00:00")).timestamp()
