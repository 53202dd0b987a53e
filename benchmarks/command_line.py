"""How long the command line takes to answer, beside an interpreter that does nothing.

Run ``python benchmarks/command_line.py``: the shortest of some cold starts of each, and their ratio.
The shortest is taken because other work on the machine only ever adds to it.
"""

from __future__ import annotations

import subprocess
import sys
import time

STARTS = 15
LIMIT_SECONDS = 0.15


def shortest_seconds(*words: str) -> float:
    """Time of the shortest of :data:`STARTS` runs of the interpreter with some words."""
    taken = []
    for _ in range(STARTS):
        started = time.perf_counter()
        subprocess.run([sys.executable, *words], stdout=subprocess.DEVNULL, check=True)
        taken.append(time.perf_counter() - started)
    return min(taken)


def main() -> None:
    """Print the times as a table."""
    nothing = shortest_seconds("-c", "")
    print(f"{'run':<28}{'s':>8}{'ratio':>8}")
    print(f"{'an interpreter alone':<28}{nothing:>8.3f}{1:>8.2f}")
    for words in (("--help",), ("report", "--help"), ("--version",)):
        seconds = shortest_seconds("-m", "campaign", *words)
        print(f"{'campaign ' + ' '.join(words):<28}{seconds:>8.3f}{seconds / nothing:>8.2f}")
        if seconds > LIMIT_SECONDS:
            print(f"  over the {LIMIT_SECONDS} s that a command line may take to answer")


if __name__ == "__main__":
    main()
