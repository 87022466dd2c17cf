"""How do arrays with their units, and what is said about them, get into one HDF5 file and back?

The only door to h5py. A file appears whole or not at all: it is written under a temporary name in
the same folder and renamed. Every dataset carries its unit in the attribute `unit`; what is said
about the whole file stands in the attributes of its root. A dataset name may hold "/" for groups.
What is too large for the memory is written and read in blocks of rows (`write_hdf5_in_blocks`, `open_hdf5`).
"""

from __future__ import annotations

import errno
import hashlib
import shutil
from collections.abc import Iterable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from excitation.errors import ExcitationError
from excitation.whole_file import taking_the_place_of

__all__ = [
    "Column",
    "Hdf5Content",
    "OpenHdf5",
    "file_sha256",
    "open_hdf5",
    "read_hdf5",
    "write_hdf5",
    "write_hdf5_in_blocks",
]

_BLOCK = 1 << 20  # bytes hashed at a time
_CHUNK_ROWS = 1 << 18  # of a dataset written in blocks
_OVERHEAD = 1 << 20  # bytes of a file beside its rows, at most


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Hdf5Content:
    """Everything a file holds, keyed by full dataset name ("group/name" inside groups).

    A dataset without the attribute `unit` has the unit "1". Attributes are Python numbers, booleans and text.
    """

    datasets: dict[str, NDArray[Any]]
    units: dict[str, str]
    attributes: dict[str, Any]


@dataclass(frozen=True, slots=True, kw_only=True)
class Column:
    """A dataset written in blocks: its full name, the type its numbers are kept in, its unit."""

    name: str
    dtype: str
    unit: str


class OpenHdf5:
    """A file open for reading, its datasets read by slices; made by `open_hdf5`."""

    def __init__(self, path: Path, file: Any) -> None:
        self._path = path
        self._file = file
        self.attributes: dict[str, Any] = {name: _plain(value) for name, value in file.attrs.items()}

    def __contains__(self, name: str) -> bool:
        """Whether there is a dataset of this full name."""
        return name in self._file

    def size(self, name: str) -> int:
        """Length of the first axis; raises KeyError where there is no such dataset."""
        return int(self._file[name].shape[0])

    def unit(self, name: str) -> str:
        """Its unit, "1" where it has none."""
        return str(_plain(self._file[name].attrs.get("unit", "1")))

    def block(self, name: str, begin: int = 0, stop: int | None = None) -> NDArray[Any]:
        """Rows begin to stop, in the type they are kept in; raises ExcitationError where they cannot be read."""
        dataset = self._file[name]
        try:
            return np.asarray(dataset[begin:stop])
        except (OSError, RuntimeError) as fault:
            raise _unreadable(self._path, fault) from fault


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
    image = _image(datasets, attributes)
    with taking_the_place_of(Path(path)) as temporary, open(temporary, "wb") as file:
        file.write(image)


def write_hdf5_in_blocks(
    path: Path,
    *,
    columns: Iterable[Column],
    blocks: Iterable[tuple[NDArray[Any], ...]],
    rows: int,
    datasets: Mapping[str, tuple[NDArray[Any], str]],
    attributes: Mapping[str, str | int | float | bool],
) -> None:
    """Write one file whose long datasets come block by block, whole or not at all; the memory holds one block.

    Parameters
    ----------
    columns, blocks
        Each block holds one array per column; blocks of any length follow each other along the first axis.
    rows
        How many rows to expect: the disk must have room for them before the first is written.
    datasets, attributes
        As in `write_hdf5`.

    Raises
    ------
    OSError
        As in `write_hdf5`. Nothing is left behind, also where `blocks` raises.
    ValueError
        The arrays of a block differ in length.
    """
    import h5py

    kept = tuple(columns)
    path = Path(path)
    with taking_the_place_of(path) as temporary:
        _check_room(path, rows * sum(np.dtype(column.dtype).itemsize for column in kept))
        with h5py.File(temporary, "w") as file:
            _fill(file, datasets, attributes)
            stored = [_growing(file, column) for column in kept]
            for block in blocks:
                _append(stored, block)


@contextmanager
def open_hdf5(path: Path) -> Iterator[OpenHdf5]:
    """Open a file to read its datasets by slices; it is closed when the block ends.

    Raises FileNotFoundError and ExcitationError as `read_hdf5` does.
    """
    path = Path(path)
    if not path.is_file():
        raise FileNotFoundError(f"{path}: there is no such file")
    import h5py

    try:
        file = h5py.File(path, "r")
        opened = OpenHdf5(path, file)
    except (OSError, RuntimeError) as fault:
        raise _unreadable(path, fault) from fault
    with file:
        yield opened


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
        raise _unreadable(path, fault) from fault


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
        _fill(file, datasets, attributes)
        file.flush()
        return bytes(file.id.get_file_image())


def _fill(
    file: Any,
    datasets: Mapping[str, tuple[NDArray[Any], str]],
    attributes: Mapping[str, str | int | float | bool],
) -> None:
    import h5py

    for name, value in attributes.items():
        file.attrs[name] = value
    for name, (array, unit) in datasets.items():
        values = np.asarray(array)
        if values.dtype.kind == "U":
            values = values.astype(h5py.string_dtype("utf-8"))
        file.create_dataset(name, data=values).attrs["unit"] = unit


def _growing(file: Any, column: Column) -> Any:
    """An empty dataset that takes rows at its end."""
    dataset = file.create_dataset(
        column.name, shape=(0,), maxshape=(None,), chunks=(_CHUNK_ROWS,), dtype=np.dtype(column.dtype)
    )
    dataset.attrs["unit"] = column.unit
    return dataset


def _append(datasets: list[Any], block: tuple[NDArray[Any], ...]) -> None:
    lengths = [len(values) for values in block]
    if len(block) != len(datasets) or len(set(lengths)) != 1:
        raise ValueError(f"a block of {lengths} rows for {len(datasets)} columns: give each an array of one length")
    for dataset, values in zip(datasets, block, strict=True):
        begin = dataset.shape[0]
        dataset.resize((begin + len(values),))
        dataset[begin:] = values


def _check_room(path: Path, size: int) -> None:
    """Refuse before writing: the HDF5 library may crash where the disk fills up under it."""
    free = shutil.disk_usage(path.parent).free
    if free < size + _OVERHEAD:
        raise OSError(errno.ENOSPC, f"{path}: {size / 1e6:.0f} MB are needed, {free / 1e6:.0f} MB are free; make room")


def _unreadable(path: Path, fault: Exception) -> ExcitationError:
    reason = str(fault).splitlines()[0] if str(fault) else type(fault).__name__
    return ExcitationError(f"{path}: not a readable HDF5 file ({reason}); write it again")


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
