"""How long does a user wait before freqid speaks? `freqid --help` over `python -c pass`, in turns, in one run.

    python tests/benchmarks/start_up.py [turns]

Printed: median of each, and the ratio of the medians (wanted: at most 3). Both run as whole processes of this Python.
"""

from __future__ import annotations

import statistics
import subprocess
import sys
import time

HELP = "import sys; from freqid.cli import main; sys.exit(main(['--help']))"


def seconds(program: str) -> float:
    """Wall time of one process that runs the program."""
    begun = time.perf_counter()
    subprocess.run([sys.executable, "-c", program], stdout=subprocess.DEVNULL, check=True)
    return time.perf_counter() - begun


def main(turns: int = 40) -> None:
    """Print both medians and their ratio."""
    pairs = [(seconds("pass"), seconds(HELP)) for _ in range(turns + 1)][1:]  # the first turn fills the caches
    bare, helped = (statistics.median(column) for column in zip(*pairs, strict=True))
    print(f"python -c pass  {1e3 * bare:6.1f} ms")
    print(f"freqid --help   {1e3 * helped:6.1f} ms")
    print(f"ratio           {helped / bare:6.2f}")


if __name__ == "__main__":
    main(*(int(word) for word in sys.argv[1:2]))
