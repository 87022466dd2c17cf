"""Every example in a docstring is run, and prints what it shows."""

from __future__ import annotations

import doctest
import importlib
import pkgutil
from pathlib import Path

import pytest

import excitation
import freqid

PACKAGES = (excitation, freqid)
ENTRANCES = ("identify", "evaluate_steps", "cross_check", "read_rig")  # where a notebook begins


def modules_with_examples() -> list[str]:
    """Names of all modules whose text holds an example."""
    found = []
    for package in PACKAGES:
        for module in pkgutil.walk_packages(package.__path__, f"{package.__name__}."):
            spec = importlib.util.find_spec(module.name)
            if spec and spec.origin and ">>> " in Path(spec.origin).read_text(encoding="utf-8"):
                found.append(module.name)
    return found


@pytest.mark.parametrize("name", modules_with_examples())
def test_examples_print_what_they_show(name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The module's examples run in an empty folder; none fails and there is at least one."""
    monkeypatch.chdir(tmp_path)
    result = doctest.testmod(importlib.import_module(name), optionflags=doctest.NORMALIZE_WHITESPACE)
    assert result.attempted > 0 and result.failed == 0


@pytest.mark.parametrize("name", ENTRANCES)
def test_every_entrance_has_an_example(name: str) -> None:
    """The functions with which a notebook begins show how."""
    assert ">>> " in (getattr(freqid, name).__doc__ or "")
