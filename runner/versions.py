"""Which software made a record: the program and the libraries that its numbers pass through."""

from importlib.metadata import PackageNotFoundError, version

_LIBRARIES = ("h5py", "numpy", "scipy", "PyVISA", "PyVISA-py", "pydantic")


def software() -> str:
    """Name and version of this program, as records and reports give it."""
    return f"kneemap {_version_of('kneemap')}"


def library_versions() -> dict[str, str]:
    """Versions of the libraries between an instrument and a number, by distribution name."""
    return {name: _version_of(name) for name in _LIBRARIES}


def _version_of(name: str) -> str:
    try:
        return version(name)
    except PackageNotFoundError:  # run from a bare checkout
        return "unknown"
