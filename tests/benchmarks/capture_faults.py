"""What is left of a capture, and of the rig, whatever happens to program, server, disk and cables?

The real program plays a profile through PortAudio on a JACK server with a vane behind it, and an independent recorder
keeps every sample that reached the vane. One row a fault: how often it was struck, at random instants; the longest time
until the program and its children were gone ("hangs" after 30 s); exit status; the least profile kept and the most
lost (sent before the fault and not in the file), in seconds; files readable; the largest step of the voltage from
sample to sample over the largest of the profile itself (in brackets where nothing can ramp any more: server or stream
process are dead, and as this server stands still when a client dies, the record ends there); the highest voltage sent.
Then what must be refused before anything sounds.

    python tests/benchmarks/capture_faults.py [--strikes 20] [--others 3] [--only NAME ...] [--bias 0.0] [--seed 1]

Linux with jackd2. The disk is a small tmpfs, which takes root; without it that row says so.
"""

from __future__ import annotations

import argparse
import os
import re
import subprocess
import sys
import tempfile
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "capture"))

from jack_rig import jack_rig, what_is_missing
from plant_client import PlantSettings
from sound_faults import FAULTS, REFUSALS, Fault, Outcome, refused, struck
from sound_session import SoundSession

OFTEN = ("server killed", "server stopped", "child killed", "child stopped", "parent killed")
RATE = 48000  # Hz
DURATION = 10.0  # s of profile
LATEST = 5.0  # s of drive after which a fault is struck at the latest


def main() -> int:
    """Print the table; 1 where a requirement is not kept."""
    arguments = _arguments()
    if (missing := what_is_missing()) is not None:
        print(missing)
        return 1
    rng = np.random.default_rng(arguments.seed)
    kept_all = True
    with tempfile.TemporaryDirectory(prefix="capture faults ") as scratch:
        planned = _planned(Path(scratch), arguments.bias)
        print(_HEADING, flush=True)
        for fault in FAULTS:
            if arguments.only and fault.name not in arguments.only:
                continue
            strikes = arguments.strikes if fault.name in OFTEN else arguments.others
            kept_all &= _row(fault, [_one(fault, planned, rng.uniform(0.3, LATEST)) for _ in range(strikes)])
        for refusal in REFUSALS:
            if arguments.only and refusal.name not in arguments.only:
                continue
            plant = PlantSettings(sample_rate=round(RATE * refusal.server_rate))
            with jack_rig(plant) as rig, _copy(planned) as folder:
                outcome = refused(refusal, SoundSession(folder=folder, environment=rig.environment), rig)
            kept_all &= _refusal_row(refusal.says, outcome)
    print("every requirement kept" if kept_all else "REQUIREMENTS NOT KEPT, see above")
    return 0 if kept_all else 1


_HEADING = (
    f"{'fault':<20}{'n':>4}{'ended, s':>10}{'exit':>6}{'kept, s':>9}{'lost, s':>9}{'readable':>10}{'step':>7}"
    f"{'peak, V':>9}  message"
)


def _row(fault: Fault, outcomes: Sequence[Outcome | None]) -> bool:
    done = [outcome for outcome in outcomes if outcome is not None]
    if not done:
        print(f"{fault.name:<20}   not run: no small tmpfs can be mounted (needs root)", flush=True)
        return True
    ended = [outcome.ended_after for outcome in done if outcome.ended_after is not None]
    slowest = "hangs" if any(_hangs(outcome) for outcome in done) else f"{max(ended):.2f}" if ended else "-"
    status = "/".join(sorted({str(outcome.status) for outcome in done}))
    step = max(outcome.largest_step / outcome.profile_step for outcome in done)
    print(
        f"{fault.name:<20}{len(done):>4}{slowest:>10}{status:>6}{min(o.kept for o in done):>9.2f}"
        f"{max(o.lost for o in done):>9.3f}{sum(o.readable for o in done):>6}/{len(done):<3}"
        f"{f'{step:.3f}' if fault.ramped else f'({step:.0f})':>7}{max(o.highest_voltage for o in done):>9.4f}"
        f"  {done[-1].message}",
        flush=True,
    )
    bad = [outcome for outcome in done if not _fulfilled(fault, outcome)]
    for outcome in bad:
        print(f"    NOT KEPT: {outcome}", flush=True)
    return not bad


def _hangs(outcome: Outcome) -> bool:
    return outcome.status is None


def _fulfilled(fault: Fault, outcome: Outcome) -> bool:
    return (
        not _hangs(outcome)
        and (fault.played_out or (outcome.ended_after or 0.0) < 5.0)
        and outcome.lost <= 1.0
        and outcome.readable
        and (outcome.gentle or not fault.ramped)
        and outcome.highest_voltage <= 5.0
        and re.search(fault.says, outcome.message) is not None
    )


def _refusal_row(says: str, outcome: Outcome) -> bool:
    good = (
        outcome.status == 1
        and outcome.highest_voltage == 0.0
        and re.search(says, outcome.message) is not None
        and "Traceback" not in outcome.message
    )
    print(
        f"{outcome.name:<20}   1{outcome.ended_after or float('nan'):>10.2f}{outcome.status!s:>6}"
        f"{'':>35}{outcome.highest_voltage:>9.4f}  {outcome.message}{'' if good else '  NOT KEPT'}",
        flush=True,
    )
    return good


def _one(fault: Fault, planned: SoundSession, after: float) -> Outcome | None:
    """One strike on a rig of its own."""
    plant = PlantSettings(sample_rate=RATE, noise=0.3, **fault.plant)
    with jack_rig(plant) as rig, _copy(planned) as folder:
        if fault.name == "disk full" and not _mounted(folder):
            return None
        try:
            return struck(fault, SoundSession(folder=folder, environment=rig.environment), rig, after=after)
        finally:
            if fault.name == "disk full":
                subprocess.run(["umount", "--lazy", str(folder)], check=True)


def _mounted(folder: Path) -> bool:
    """A disk of 64 MB in the place of the folder, with its files on it."""
    if os.geteuid() != 0:
        return False
    files = {path.name: path.read_bytes() for path in folder.iterdir() if path.is_file()}
    done = subprocess.run(["mount", "-t", "tmpfs", "-o", "size=64m", "tmpfs", str(folder)], capture_output=True)
    if done.returncode == 0:
        for name, content in files.items():
            (folder / name).write_bytes(content)
    return done.returncode == 0


def _planned(scratch: Path, bias: float) -> SoundSession:
    """A folder with a profile."""
    session = SoundSession(folder=scratch / "a vane é", environment=os.environ)
    session.new(RATE, bias=str(bias))
    session.do("excite", "--duration", str(DURATION), "--band", "1", "8", "--seed", "1")
    return session


@contextmanager
def _copy(planned: SoundSession) -> Iterator[Path]:
    with tempfile.TemporaryDirectory(prefix="a run ", dir=planned.folder.parent) as above:
        copy = SoundSession(folder=Path(above) / planned.folder.name, environment=os.environ)
        copy.copy_plan(planned)
        yield copy.folder


def _arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--strikes", type=int, default=20, help="of the faults that kill or stop a process")
    parser.add_argument("--others", type=int, default=3, help="of the others")
    parser.add_argument("--only", nargs="*", default=[], metavar="NAME")
    parser.add_argument("--bias", type=float, default=0.0, help="V")
    parser.add_argument("--seed", type=int, default=1)
    return parser.parse_args()


if __name__ == "__main__":
    sys.exit(main())
