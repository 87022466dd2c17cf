"""Which program computed this, on which machine? Versions, machine, and the SHA-256 of every installed file.

Files are named by their place in the package, `freqid/quantity.py`, and the reference data `reference_data/NAME`
wherever they are installed, so that the fingerprint of a checkout and of an installed copy of it are the same.
The fingerprint is the SHA-256 (FIPS 180-4) of the lines "sha256  name" in the order of the names.
"""

from __future__ import annotations

import hashlib
import platform
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

import excitation
import freqid
from excitation.hdf5_file import file_sha256

__all__ = ["Installation", "InstalledFile", "inspect_installation"]

LIBRARIES = ("numpy", "scipy", "matplotlib", "h5py", "sounddevice", "click", "rich", "jinja2")


@dataclass(frozen=True, slots=True, kw_only=True)
class InstalledFile:
    """A file of the program: its place in the package, with slashes, and its SHA-256."""

    name: str
    sha256: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Installation:
    """The program and the machine at `inspected` (UTC, ISO 8601).

    `machine` holds (what, which), `versions` (library, version or "not installed"), `files` is sorted by name.
    """

    inspected: str
    machine: tuple[tuple[str, str], ...]
    versions: tuple[tuple[str, str], ...]
    files: tuple[InstalledFile, ...]

    @property
    def fingerprint(self) -> str:
        """SHA-256 over names and SHA-256 of all files: equal only where every byte of the program is."""
        return hashlib.sha256("".join(f"{f.sha256}  {f.name}\n" for f in self.files).encode()).hexdigest()


def inspect_installation(reference_folder: Path) -> Installation:
    """Read every file of the program, and of its reference data in `reference_folder`.

    Raises OSError where a file cannot be read.
    """
    return Installation(
        inspected=datetime.now(UTC).isoformat(timespec="seconds"),
        machine=_machine(),
        versions=(("freqid", freqid.__version__), *((name, _version(name)) for name in LIBRARIES)),
        files=tuple(sorted(_files(reference_folder), key=lambda file: file.name)),
    )


def _machine() -> tuple[tuple[str, str], ...]:
    return (
        ("name", platform.node() or "unknown"),
        ("system", platform.platform()),
        ("processor", platform.processor() or platform.machine()),
        ("Python", f"{platform.python_implementation()} {platform.python_version()}"),
        ("program in", str(Path(freqid.__file__).parent.parent)),
    )


def _version(library: str) -> str:
    try:
        return version(library)
    except PackageNotFoundError:
        return "not installed"


def _files(reference_folder: Path) -> Iterator[InstalledFile]:
    for module in (freqid, excitation):
        package = Path(str(module.__file__)).parent
        for file in package.rglob("*"):
            if file.is_file() and "__pycache__" not in file.parts and reference_folder not in file.parents:
                yield _file(f"{package.name}/{file.relative_to(package).as_posix()}", file)
    for file in reference_folder.rglob("*"):
        if file.is_file():
            yield _file(f"reference_data/{file.relative_to(reference_folder).as_posix()}", file)


def _file(name: str, file: Path) -> InstalledFile:
    return InstalledFile(name=name, sha256=file_sha256(file))
