"""How far has a test come? What is there, what is out of date, and which command comes next."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

from freqid.errors import FreqidError
from freqid.freshness import changed_sources, sources_of
from freqid.test_folder import RunKind, TestFolder

__all__ = ["FolderStatus", "Part", "folder_status"]

State = Literal["there", "missing", "out of date", "incomplete", "damaged"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Part:
    """One part of a test: what it is, its file relative to the folder, its state, and why that is so."""

    name: str
    file: str
    state: State
    detail: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class FolderStatus:
    """All parts in the order of the work, the verdict where there is one, and the next command with its reason."""

    folder: Path
    parts: tuple[Part, ...]
    verdict: str | None
    next_command: str | None
    reason: str

    def as_json(self) -> dict[str, Any]:
        """The form that `freqid status --json` prints."""
        return {
            "format": "freqid status",
            "format_version": 1,
            "parts": [{"name": p.name, "file": p.file, "state": p.state, "detail": p.detail} for p in self.parts],
            "verdict": self.verdict,
            "next_command": self.next_command,
            "reason": self.reason,
        }


def folder_status(folder: TestFolder) -> FolderStatus:
    """Look at every file of the folder; nothing is written. A damaged file is a state, not an error."""
    parts = [
        _rig(folder),
        _profile(folder, "response"),
        *_runs(folder, "response"),
        _result(folder, "model", folder.model, "response"),
        _profile(folder, "step"),
        *_runs(folder, "step"),
        _result(folder, "step test", folder.step, "step"),
        _result(folder, "cross-check", folder.crosscheck),
        _result(folder, "report", folder.report),
    ]
    command, reason = _next(folder, {part.name: part for part in parts})
    return FolderStatus(
        folder=folder.path, parts=tuple(parts), verdict=_verdict(folder), next_command=command, reason=reason
    )


def _rig(folder: TestFolder) -> Part:
    from freqid.rig import read_rig

    if not folder.rig.exists():
        return Part(name="rig sheet", file="rig.toml", state="missing")
    try:
        rig = read_rig(folder.rig)
    except FreqidError as error:
        return Part(name="rig sheet", file="rig.toml", state="damaged", detail=str(error))
    return Part(name="rig sheet", file="rig.toml", state="there", detail=rig.name)


def _profile(folder: TestFolder, kind: RunKind) -> Part:
    name = "step profile" if kind == "step" else "profile"
    path = folder.profile(kind, ".json")
    if not path.exists():
        return Part(name=name, file=path.name, state="missing")
    return _checked(folder, name, path)


def _runs(folder: TestFolder, kind: RunKind) -> list[Part]:
    from freqid.run_file import read_run_facts

    parts = []
    for name in folder.run_names(kind):
        path = folder.run(name)
        file = folder.relative_name(path)
        try:
            run = read_run_facts(path)
        except (FreqidError, OSError) as error:
            parts.append(Part(name=name, file=file, state="damaged", detail=str(error)))
            continue
        said = "simulated" if run.simulated else ""
        parts.append(Part(name=name, file=file, state="there" if run.complete else "incomplete", detail=said))
    return parts or [Part(name=f"{kind} run", file=f"runs/{kind}-001.h5", state="missing")]


def _result(folder: TestFolder, name: str, path: Path, kind: RunKind | None = None) -> Part:
    if not path.exists():
        return Part(name=name, file=folder.relative_name(path), state="missing")
    part = _checked(folder, name, path)
    if part.state == "there" and kind is not None:
        used = [Path(source).stem for source in sources_of(folder, path) if source.startswith("runs/")]
        newer = [run for run in _complete(folder, kind) if used and run > max(used)]
        if newer:
            return Part(name=name, file=part.file, state="out of date", detail=f"{newer[-1]} came after it was made")
    return part


def _checked(folder: TestFolder, name: str, path: Path) -> Part:
    file = folder.relative_name(path)
    try:
        changed = changed_sources(folder, path)
    except (FreqidError, OSError, ValueError) as error:
        return Part(name=name, file=file, state="damaged", detail=str(error))
    if path in (folder.model, folder.step):  # what was measured does not depend on the rig sheet
        changed = tuple(source for source in changed if source != folder.rig.name)
    if changed:
        return Part(name=name, file=file, state="out of date", detail=f"{', '.join(changed)} changed since")
    return Part(name=name, file=file, state="there")


def _complete(folder: TestFolder, kind: RunKind) -> list[str]:
    return [part.name for part in _runs(folder, kind) if part.state == "there"]


def _verdict(folder: TestFolder) -> str | None:
    try:
        return str(folder.read_json(folder.crosscheck)["verdict"])
    except (FreqidError, KeyError):
        return None


def _next(folder: TestFolder, parts: dict[str, Part]) -> tuple[str | None, str]:
    """The first command in the order of the work whose product is missing, damaged or out of date."""
    where = folder.quoted
    rig = parts["rig sheet"]
    if rig.state == "missing":
        return f"freqid new {where}", "there is no rig sheet yet"
    if rig.state == "damaged":
        return None, f"mend the rig sheet first: {rig.detail}"
    for kind, title, verb, result in (
        ("response", "profile", "estimate", "model"), ("step", "step profile", "steptest", "step test"),
    ):  # fmt: skip
        of_kind: RunKind = "step" if kind == "step" else "response"
        option = " --kind step" if kind == "step" else ""
        if not _complete(folder, of_kind):
            if parts[title].state != "there":
                return f"freqid excite {where}{option}", f"{title}: {_why(parts[title])}"
            return f"freqid capture {where}{option}", (
                f"no complete {kind} run yet; `freqid import {where}{option}` brings in logs made elsewhere,"
                " --simulate rehearses"
            )
        if parts[result].state != "there":
            return f"freqid {verb} {where}", f"{result}: {_why(parts[result])}"
    for verb, result in (("crosscheck", "cross-check"), ("report", "report")):
        if parts[result].state != "there":
            return f"freqid {verb} {where}", f"{result}: {_why(parts[result])}"
    return _proposed(folder)


def _why(part: Part) -> str:
    return f"{part.state}, {part.detail}" if part.detail else part.state


def _proposed(folder: TestFolder) -> tuple[str | None, str]:
    proposed = folder.read_json(folder.crosscheck).get("next_test")
    if not proposed:
        return None, "everything is there and up to date"
    return proposed["command"], proposed["reason"]
