"""Can `freqid selfcheck` fail? One fault at a time is put into a copy of the program; each must turn the check red.

The packages and the reference data are copied to a scratch folder, one piece of text is replaced (a sign, a factor
2 pi, the degrees of freedom, ...), and `freqid selfcheck --json` is run on the copy. The copy without a fault must
pass.
Printed: the fault, the exit status, how many values were missed, and the quantities among them. Exit status 1 where a
fault went unseen.

    python tests/benchmarks/selfcheck_mutants.py
"""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
import tempfile
from dataclasses import dataclass
from pathlib import Path

CHECKOUT = Path(__file__).resolve().parents[2]
COPIED = ("freqid", "excitation", "reference_data")
PROGRAM = (
    "import pathlib, sys, freqid; from freqid.cli import main; "
    "assert pathlib.Path(freqid.__file__).resolve().is_relative_to(pathlib.Path.cwd().resolve()), freqid.__file__; "
    "sys.exit(main(['selfcheck', '--json']))"
)


@dataclass(frozen=True, slots=True)
class Mutant:
    """A fault: in `file` the text `old`, which stands there once, becomes `new`."""

    what: str
    file: str
    old: str
    new: str


@dataclass(frozen=True, slots=True)
class Outcome:
    """Exit status, number of values missed and the quantities among them."""

    status: int
    missed: int
    quantities: tuple[str, ...]

    @property
    def seen(self) -> bool:
        """Whether the check turned red, and for a value missed rather than for a program that does not run."""
        return self.status == 1 and self.missed > 0


MUTANTS = (
    Mutant("overshoot's exponent without pi", "freqid/step_relations.py", "np.exp(-np.pi * ", "np.exp(-3.0 * "),
    Mutant("resonance frequency, sign", "freqid/resonance_relations.py", "return np.asarray(np.sqrt(1 - 2 * ratio**2))",
           "return np.asarray(np.sqrt(1 + 2 * ratio**2))"),
    Mutant("upper half-power root, sign", "freqid/resonance_relations.py",
           "1 - 2 * ratio**2 + 2 * ratio * np.sqrt(1 - ratio**2)",
           "1 - 2 * ratio**2 + 2 * ratio * np.sqrt(1 + ratio**2)"),
    Mutant("poles without 2 pi", "freqid/second_order.py",
           "wn = 2 * math.pi * self.natural_frequency\n        root", "wn = self.natural_frequency\n        root"),
    Mutant("delay's phase, sign", "freqid/second_order.py",
           "shift = np.exp(-2j * np.pi * f", "shift = np.exp(2j * np.pi * f"),
    Mutant("Schroeder phases, half", "excitation/crest_factor.py",
           "return -2 * np.pi * np.concatenate", "return -np.pi * np.concatenate"),
    Mutant("exposure, half", "freqid/held_response.py", "begin = end - exposure\n", "begin = end - exposure / 2\n"),
    Mutant("hold late by a tenth", "freqid/held_response.py", "position = (time - self.start) / self.interval",
           "position = (time - self.start) / self.interval - 0.1"),
    Mutant("En with the uncertainties added", "freqid/crosscheck/comparison.py",
           "expanded = float(np.hypot(first.expanded_uncertainty, second.expanded_uncertainty))\n    return",
           "expanded = first.expanded_uncertainty + second.expanded_uncertainty\n    return"),
    Mutant("scatter of a mean over n", "freqid/step_test/pooling.py",
           "np.sum(weight) / (n - 1)))", "np.sum(weight) / n))"),
    Mutant("local polynomial, degrees of freedom", "freqid/estimate/local_polynomial.py",
           "degrees = len(r) - 2 * (order + 1)", "degrees = len(r) - (order + 1)"),
    Mutant("coverage factor, one-sided", "freqid/quantity.py", "1.0), 0.975)", "1.0), 0.95)"),
    Mutant("variance shared by real and imaginary part", "freqid/estimate/frequency_response.py",
           "np.sqrt(self.variance / 2)", "np.sqrt(self.variance)"),
    Mutant("propagation without correlations", "freqid/derived_uncertainty.py",
           "changes @ correlation @ changes", "changes @ changes"),
    Mutant("linear sweep at twice its rate", "excitation/swept_sine.py",
           "time**2 / (2 * duration)", "time**2 / duration"),
    Mutant("slope of the angle without 2 pi", "excitation/information.py", "slope = 2j * np.pi * frequency * response",
           "slope = 1j * frequency * response"),
)  # fmt: skip


def run_mutant(mutant: Mutant | None, *, scratch: Path, only: str = "*.toml") -> Outcome:
    """Run the self-check on a fresh copy in `scratch` with one fault, or with none, on the reference files `only`.

    Raises ValueError where the text to replace does not stand in the file exactly once.
    """
    copy = Path(tempfile.mkdtemp(prefix="copy ", dir=scratch))
    for name in COPIED:
        shutil.copytree(CHECKOUT / name, copy / name, ignore=shutil.ignore_patterns("__pycache__"))
    for file in set((copy / "reference_data").glob("*.toml")) - set((copy / "reference_data").glob(only)):
        file.unlink()
    if mutant is not None:
        _plant(mutant, copy / mutant.file)
    environment = {**os.environ, "PYTHONPATH": str(copy), "PYTHONDONTWRITEBYTECODE": "1"}
    done = subprocess.run(
        [sys.executable, "-c", PROGRAM], cwd=copy, env=environment, capture_output=True, encoding="utf-8", check=False
    )
    shutil.rmtree(copy)
    values = json.loads(done.stdout)["values"] if done.stdout else []
    missed = [value["quantity"] for value in values if not value["passed"]]
    return Outcome(done.returncode, len(missed), tuple(dict.fromkeys(missed)))


def _plant(mutant: Mutant, file: Path) -> None:
    text = file.read_text(encoding="utf-8")
    if text.count(mutant.old) != 1:
        raise ValueError(f"{mutant.file}: {mutant.old!r} stands there {text.count(mutant.old)} times, not once")
    file.write_text(text.replace(mutant.old, mutant.new), encoding="utf-8")


def main() -> int:
    """Print the table; 0 where the sound copy passes and every fault is seen."""
    with tempfile.TemporaryDirectory() as scratch:
        sound = run_mutant(None, scratch=Path(scratch))
        print(f"{'no fault':44s} status {sound.status}  {sound.missed:3d} missed", flush=True)
        good = sound.status == 0
        for mutant in MUTANTS:
            outcome = run_mutant(mutant, scratch=Path(scratch))
            good = good and outcome.seen
            word = "" if outcome.seen else "  UNSEEN"
            named = ", ".join(outcome.quantities[:3]) + (", ..." if len(outcome.quantities) > 3 else "")
            print(f"{mutant.what:44s} status {outcome.status}  {outcome.missed:3d} missed{word}  {named}", flush=True)
    return 0 if good else 1


if __name__ == "__main__":
    sys.exit(main())
