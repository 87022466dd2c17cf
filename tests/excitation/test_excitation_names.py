"""Is what the package exports what it says, and is it light to import?"""

from __future__ import annotations

import importlib
import pkgutil
import subprocess
import sys
from pathlib import Path

import excitation


def test_exports_are_complete_and_sorted() -> None:
    """`__all__` names exactly the public names, in order."""
    modules = {module.name for module in pkgutil.iter_modules(excitation.__path__)}
    public = {name for name in vars(excitation) if not name.startswith("_")} - modules
    assert sorted(public) == excitation.__all__ == sorted(excitation.__all__)


def test_no_name_hides_a_module() -> None:
    """No exported name is that of a module, and every module's own `__all__` exists."""
    for module in pkgutil.iter_modules(excitation.__path__):
        assert module.name not in excitation.__all__
        loaded = importlib.import_module(f"excitation.{module.name}")
        assert all(hasattr(loaded, name) for name in loaded.__all__)


def test_import_is_light_and_stands_alone() -> None:
    """Importing the package loads neither scipy nor h5py nor freqid."""
    listing = "import sys, excitation; print([m for m in ('scipy', 'h5py', 'freqid') if m in sys.modules])"
    root = Path(excitation.__file__).resolve().parents[1]
    result = subprocess.run([sys.executable, "-c", listing], capture_output=True, text=True, check=True, cwd=root)
    assert result.stdout.strip() == "[]"
