"""Where does each file of a test live, and how is it written so that nothing half-written stays?

One folder per test; each stage writes its own files under a temporary name in the same folder and then
renames them. Every result says its format, its version, the program that made it, when (UTC, ISO 8601)
and the sha256 of each file it was computed from. Raw runs are made read-only.
"""

from __future__ import annotations

import json
import math
import os
import re
from collections.abc import Iterable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any, ClassVar, Literal, NoReturn

import freqid
from freqid.errors import TestFolderError

__all__ = ["RunKind", "TestFolder", "check_format", "json_text", "make_read_only", "replacing", "write_text"]

RunKind = Literal["response", "step"]  # as in freqid.records, which needs numpy

_MADE_BY = {
    "rig.toml": "new",
    "profile": "excite",
    "step_profile": "excite --kind step",
    "response": "estimate",
    "model": "estimate",
    "step": "steptest",
    "crosscheck": "crosscheck",
    "report": "report",
}


@contextmanager
def replacing(path: Path) -> Iterator[Path]:
    """A temporary path beside `path` that takes its place when the block ends, and vanishes when it fails.

    Missing folders above `path` are made. Raises OSError as the block, or the renaming, does.
    """
    path.parent.mkdir(parents=True, exist_ok=True)
    temporary = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        yield temporary
        os.replace(temporary, path)
    finally:
        temporary.unlink(missing_ok=True)


def write_text(path: Path, text: str) -> None:
    """Write `text` as UTF-8 with plain line feeds, whole or not at all."""
    with replacing(path) as temporary:
        temporary.write_text(text, encoding="utf-8", newline="\n")


def json_text(content: Mapping[str, Any]) -> str:
    """`content` as indented JSON with a final line feed; raises ValueError as `TestFolder.write_json` does."""
    return json.dumps(_plain(content, ""), ensure_ascii=False, allow_nan=False, indent=2) + "\n"


def make_read_only(path: Path) -> None:
    """Take the write permission from the file (its read-only attribute on Windows)."""
    os.chmod(path, 0o444)


@dataclass(frozen=True)
class TestFolder:
    """The names of every file of a test, and the reading and writing of its JSON files.

    Making the object touches no disk; `TestFolder.existing` also looks whether the folder is there.
    """

    __test__: ClassVar[bool] = False  # the name begins with "Test"; pytest must not collect it

    path: Path

    def __init__(self, path: Path | str) -> None:
        object.__setattr__(self, "path", Path(path))

    @classmethod
    def existing(cls, path: Path | str) -> TestFolder:
        """The folder `path`; raises TestFolderError where there is none."""
        folder = cls(path)
        if folder.path.is_dir():
            return folder
        if folder.path.exists():
            raise TestFolderError(f"{folder.path}: a file, not a test folder; name the folder that holds rig.toml")
        raise TestFolderError(f"{folder.path}: no such test folder; make one with `freqid new {folder.quoted}`")

    @property
    def quoted(self) -> str:
        """The path as one word for a command line."""
        text = str(self.path)
        return f'"{text}"' if re.search(r"[^\w./\\:~-]", text) else text

    @property
    def rig(self) -> Path:
        """rig.toml, the rig sheet."""
        return self.path / "rig.toml"

    def profile(self, kind: RunKind = "response", suffix: str = ".h5") -> Path:
        """profile.* for a response run, step_profile.* for a step run (.h5, .csv, .wav, .json)."""
        return self.path / f"{self.profile_stem(kind)}{suffix}"

    @staticmethod
    def profile_stem(kind: RunKind) -> str:
        """File name of the profile without its ending."""
        return "step_profile" if kind == "step" else "profile"

    @property
    def profile_h5(self) -> Path:
        """profile.h5"""
        return self.profile(suffix=".h5")

    @property
    def profile_csv(self) -> Path:
        """profile.csv"""
        return self.profile(suffix=".csv")

    @property
    def profile_wav(self) -> Path:
        """profile.wav"""
        return self.profile(suffix=".wav")

    @property
    def profile_json(self) -> Path:
        """profile.json, what was designed and what it predicts"""
        return self.profile(suffix=".json")

    @property
    def runs(self) -> Path:
        """The folder of raw runs."""
        return self.path / "runs"

    @property
    def results(self) -> Path:
        """The folder of results."""
        return self.path / "results"

    @property
    def response_h5(self) -> Path:
        """results/response.h5, the frequency response"""
        return self.results / "response.h5"

    @property
    def response_csv(self) -> Path:
        """results/response.csv, the same as text"""
        return self.results / "response.csv"

    @property
    def model(self) -> Path:
        """results/model.json"""
        return self.results / "model.json"

    @property
    def step(self) -> Path:
        """results/step.json"""
        return self.results / "step.json"

    @property
    def crosscheck(self) -> Path:
        """results/crosscheck.json"""
        return self.results / "crosscheck.json"

    @property
    def report(self) -> Path:
        """report.html"""
        return self.path / "report.html"

    @property
    def figures(self) -> Path:
        """The folder of figures."""
        return self.path / "figures"

    def run(self, name: str) -> Path:
        """The file of the run `name`, such as "response-001"."""
        return self.runs / f"{name}.h5"

    def run_names(self, kind: RunKind) -> tuple[str, ...]:
        """Names of the runs of this kind, oldest first; empty where there are none."""
        pattern = re.compile(rf"{kind}-(\d{{3,}})\.h5")
        found = [(int(match[1]), path.stem) for path in self.runs.glob(f"{kind}-*.h5")
                 if (match := pattern.fullmatch(path.name))]  # fmt: skip
        return tuple(name for _, name in sorted(found))

    def next_run_name(self, kind: RunKind) -> str:
        """The name after the latest run: "response-001" in an empty folder."""
        names = self.run_names(kind)
        number = int(names[-1].rsplit("-", 1)[1]) + 1 if names else 1
        return f"{kind}-{number:03d}"

    def latest_run_name(self, kind: RunKind) -> str:
        """The run with the highest number; raises TestFolderError where there is none of this kind."""
        names = self.run_names(kind)
        if names:
            return names[-1]
        raise TestFolderError(
            f"{self.runs}: holds no {kind} run; record one with `freqid capture {self.quoted} --kind {kind}`"
            f" or bring logs in with `freqid import {self.quoted} --kind {kind}`"
        )

    def missing(self, path: Path) -> TestFolderError:
        """The error that says that a file is missing and which command makes it."""
        verb, *options = _MADE_BY.get(path.name, _MADE_BY.get(path.stem, "")).split(" ")
        if not verb:
            return TestFolderError(f"{path}: no such file")
        command = " ".join(["freqid", verb, self.quoted, *options])
        return TestFolderError(f"{path}: no such file; make it with `{command}`")

    def write_json(self, path: Path, content: Mapping[str, Any]) -> None:
        """Write a JSON file, whole or not at all; numpy scalars and arrays are written as numbers and lists.

        Raises
        ------
        ValueError
            The content holds NaN or infinity; the message names the place.
        """
        write_text(path, json_text(content))

    def read_json(self, path: Path, *, format: str | None = None, version: int = 1) -> dict[str, Any]:
        """Content of a JSON file.

        Parameters
        ----------
        format, version
            The file must say this `format` and at most this `format_version`; not checked when None.

        Raises
        ------
        TestFolderError
            The file is missing (with the command that makes it), damaged, of another format or newer.
        """
        try:
            content = json.loads(path.read_text(encoding="utf-8"), parse_constant=_refuse_constant)
        except FileNotFoundError:
            raise self.missing(path) from None
        except ValueError as error:  # JSON and UTF-8 faults both
            raise TestFolderError(f"{path}: damaged ({error}); delete it and make it again") from None
        if not isinstance(content, dict):
            raise TestFolderError(f"{path}: damaged (not a JSON object); delete it and make it again")
        if format is not None:
            check_format(path, content, format=format, version=version)
        return content

    def provenance(
        self, *, format: str, version: int = 1, computed_from: Iterable[Path] | Mapping[Path, str | None] = ()
    ) -> dict[str, Any]:
        """What every result file says of itself and of the files it comes from (with their sha256 where known)."""
        from excitation.hdf5_file import file_sha256

        known = computed_from if isinstance(computed_from, Mapping) else {}
        return {
            "format": format,
            "format_version": version,
            "freqid_version": freqid.__version__,
            "created": datetime.now(UTC).isoformat(timespec="seconds"),
            "computed_from": {self.relative_name(path): known.get(path) or file_sha256(path) for path in computed_from},
        }

    def relative_name(self, path: Path) -> str:
        """Name of `path` within the folder, with "/" on every system; the bare file name for one outside."""
        try:
            return path.resolve().relative_to(self.path.resolve()).as_posix()
        except ValueError:
            return path.name


def check_format(path: Path, content: Mapping[str, Any], *, format: str, version: int) -> None:
    """Raise TestFolderError unless `content` says this format and a version that is known here."""
    found, found_version = content.get("format"), content.get("format_version")
    if found != format:
        raise TestFolderError(f"{path}: its format is {found!r}, expected {format!r}; delete it and make it again")
    if not isinstance(found_version, int) or found_version > version:
        raise TestFolderError(
            f"{path}: {format} version {found_version}, written by freqid {content.get('freqid_version', '?')}; this is"
            f" freqid {freqid.__version__}, which reads up to version {version}: update it, or make the file again"
        )


def _plain(value: Any, where: str) -> Any:
    if isinstance(value, Mapping):
        return {str(key): _plain(item, f"{where}.{key}") for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(item, f"{where}[{number}]") for number, item in enumerate(value)]
    if value is None or isinstance(value, (str, bool, int)):
        return value
    if hasattr(value, "tolist"):  # numpy scalar or array, without importing numpy
        return _plain(value.tolist(), where)
    if not math.isfinite(value):
        raise ValueError(f"{where.lstrip('.')} is {value}: JSON holds finite numbers only; write null and a warning")
    return float(value)


def _refuse_constant(name: str) -> NoReturn:
    raise ValueError(f"holds {name}")
