"""What the help and README show as examples is run as it stands: nobody copies a command that fails."""

from __future__ import annotations

import re
import shlex
from importlib import import_module
from pathlib import Path

import pytest

from freqid.cli import main
from freqid.cli.verbs import VERBS
from freqid.run_file import read_run

README = Path(__file__).parents[2] / "README.md"
VERDICTS = (0, 3, 4)  # crosscheck's statuses: which one depends on the numbers


def examples(verb: str) -> list[str]:
    """The commands that the verb's help gives as examples."""
    module = next(one.module for one in VERBS if one.name == verb)
    text = import_module(module).command.help
    after = re.split(r"Examples?:", text)
    assert len(after) == 2, f"{verb}: its help has no example"
    found = re.findall(r"freqid [^\n]*", after[1])
    assert found and all(line.split()[1] == verb for line in found)
    return found


def session(text: str) -> list[tuple[str, str]]:
    """Commands after "$ " in the fenced blocks of a page, each with the output shown beneath it."""
    steps: list[tuple[str, str]] = []
    for block in re.findall(r"```\n(\$ .*?)```", text, re.DOTALL):
        for part in re.split(r"^\$ ", block, flags=re.MULTILINE)[1:]:
            command, _, output = part.partition("\n")
            steps.append((command, output))
    return steps


def words(output: str) -> list[str]:
    """The output without what may differ in the last digit between machines: numbers, rules, bars, spacing."""
    kept = []
    for line in output.splitlines():
        row = re.match(r"(.*?)│.*│(.*)", line)  # a row of the agreement strip: its label and its verdict
        kept.append(" ".join(row.groups()) if row else line)
    return re.sub(r"[-+±]?\d[\d.]*(e[-+]?\d+)?", "#", re.sub(r"[─━]+", " ", "\n".join(kept))).split()


def test_every_verbs_example_runs(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """In the order of the work, in one folder, each example ends well."""
    monkeypatch.chdir(tmp_path)
    for verb in VERBS:
        for command in examples(verb.name):
            if verb.name == "import":
                _camera_log(tmp_path / "vane" / "runs" / "response-001.h5", tmp_path / "camera.csv")
            status = main(shlex.split(command)[1:])
            said = capsys.readouterr()
            if verb.name == "devices" and status == 1:  # no PortAudio library on this machine
                assert "PortAudio" in said.err
                continue
            allowed = VERDICTS if verb.name == "crosscheck" else (0,)
            assert status in allowed, f"{command}: {said.err}"


def _camera_log(run_path: Path, log: Path) -> None:
    """The angles of a run as a camera would have logged them: milliseconds and degrees."""
    run = read_run(run_path)
    rows = (f"{1e3 * time:.3f},{angle:.4f}" for time, angle in zip(run.angle.time, run.angle.angle, strict=True))
    log.write_text("time_ms,angle_deg\n" + "\n".join(rows) + "\n", encoding="utf-8")


def test_readme_session_runs_and_prints_what_it_shows(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """Each command of README's session ends with status 0 and prints the words shown there, in their order."""
    monkeypatch.chdir(tmp_path)
    steps = session(README.read_text(encoding="utf-8"))
    assert steps[0][0].split()[1] == "new" and len(steps) > 8
    for command, shown in steps:
        capsys.readouterr()
        assert main(shlex.split(command)[1:]) == 0, command
        if shown.strip():
            assert words(capsys.readouterr().out) == words(shown), command
