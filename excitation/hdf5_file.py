"""How do arrays with their units, and what is said about them, get into one HDF5 file and back?

The only door to h5py. A file appears whole or not at all: it is written under a temporary name in
the same folder and renamed. Every dataset carries its unit in the attribute `unit`; what is said
about the whole file stands in the attributes of its root. A dataset name may hold "/" for groups.
"""

from __future__ import annotations

import hashlib
import os
import tempfile
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from excitation.errors import ExcitationError

__all__ = ["Hdf5Content", "file_sha256", "read_hdf5", "write_hdf5"]

_BLOCK = 1 << 20  # bytes hashed at a time


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Hdf5Content:
    """Everything a file holds, keyed by full dataset name ("group/name" inside groups).

    A dataset without the attribute `unit` has the unit "1". Attributes are Python numbers, booleans and text.
    """

    datasets: dict[str, NDArray[Any]]
    units: dict[str, str]
    attributes: dict[str, Any]


def write_hdf5(
    path: Path,
    *,
    datasets: Mapping[str, tuple[NDArray[Any], str]],
    attributes: Mapping[str, str | int | float | bool],
) -> None:
    """Write one file, whole or not at all.

    Parameters
    ----------
    path : Path
        Where the file is to stand; an existing file is replaced.
    datasets : mapping of name to (array, unit)
        Arrays of numbers or of text (any shape, scalars included).
    attributes : mapping of name to text, number or boolean
        Written to the root of the file.

    Raises
    ------
    OSError
        The folder is missing, the disk is full, or the file may not be replaced. Nothing is left behind.
    """
    path = Path(path)
    if not path.parent.is_dir():
        raise FileNotFoundError(f"{path}: the folder {path.parent} does not exist; create it first")
    image = _image(datasets, attributes)
    handle, temporary = tempfile.mkstemp(prefix=f".{path.stem}-", suffix=".tmp", dir=path.parent)
    try:
        with os.fdopen(handle, "wb") as file:
            file.write(image)
        os.chmod(temporary, 0o666 & ~_umask())
        os.replace(temporary, path)
    finally:
        Path(temporary).unlink(missing_ok=True)


def read_hdf5(path: Path) -> Hdf5Content:
    """Read a whole file back.

    Raises
    ------
    FileNotFoundError
        There is no such file.
    ExcitationError
        The file is damaged or no HDF5 file.
    """
    path = Path(path)
    if not path.is_file():
        raise FileNotFoundError(f"{path}: there is no such file")
    import h5py

    try:
        with h5py.File(path, "r") as file:
            return _read(file)
    except (OSError, RuntimeError, KeyError, ValueError) as fault:
        reason = str(fault).splitlines()[0] if str(fault) else type(fault).__name__
        raise ExcitationError(f"{path}: not a readable HDF5 file ({reason}); write it again") from fault


def file_sha256(path: Path) -> str:
    """SHA-256 of the bytes of a file, 64 hexadecimal digits (FIPS 180-4)."""
    digest = hashlib.sha256()
    with open(path, "rb") as file:
        while block := file.read(_BLOCK):
            digest.update(block)
    return digest.hexdigest()


def _image(
    datasets: Mapping[str, tuple[NDArray[Any], str]], attributes: Mapping[str, str | int | float | bool]
) -> bytes:
    """The bytes of the file, made in memory: unlike plain writing, the HDF5 library may crash on a full disk."""
    import h5py

    with h5py.File("image", "w", driver="core", backing_store=False) as file:
        for name, value in attributes.items():
            file.attrs[name] = value
        for name, (array, unit) in datasets.items():
            values = np.asarray(array)
            if values.dtype.kind == "U":
                values = values.astype(h5py.string_dtype("utf-8"))
            file.create_dataset(name, data=values).attrs["unit"] = unit
        file.flush()
        return bytes(file.id.get_file_image())


def _read(file: Any) -> Hdf5Content:
    import h5py

    datasets: dict[str, NDArray[Any]] = {}
    units: dict[str, str] = {}

    def collect(name: str, item: Any) -> None:
        if not isinstance(item, h5py.Dataset):
            return
        is_text = h5py.check_string_dtype(item.dtype) is not None
        # a fixed-width array is easier to handle than one of objects
        datasets[name] = np.asarray(item.asstr()[()], dtype=np.str_) if is_text else np.asarray(item[()])
        units[name] = str(_plain(item.attrs.get("unit", "1")))

    file.visititems(collect)
    return Hdf5Content(
        datasets=datasets, units=units, attributes={name: _plain(value) for name, value in file.attrs.items()}
    )


def _plain(value: Any) -> Any:
    """An attribute as a Python scalar, text, or list of these."""
    if isinstance(value, bytes):
        return value.decode("utf-8")
    if isinstance(value, np.generic):
        return _plain(value.item())
    if isinstance(value, np.ndarray):
        return value.tolist()
    return value


def _umask() -> int:
    """The permissions the user withholds from new files (a temporary file has none for others at all)."""
    mask = os.umask(0)
    os.umask(mask)
    return mask
