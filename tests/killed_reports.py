"""Sites that are killed while they are written: a process that imports once and forks writer after writer.

Run as ``python killed_reports.py SITE SEED KILLS FOLDER FOLDER``, where each FOLDER holds a whole site. Each
writer is a process of its own, ended with SIGKILL before a step of its work (opening, making, moving or
removing a file or folder) drawn at random: by steps and not by the clock, so a busy machine sees the same
moments. Prints, one line a kill, ``FOLDER SIGNAL``, and then waits for a line; the signal is 0 for a writer
that was done before.
"""

from __future__ import annotations

import itertools
import os
import random
import signal
import sys
from collections.abc import Iterator
from pathlib import Path

from campaign.pages.output import MARKER, write_folder

STEPS = frozenset(("open", "os.mkdir", "os.rename", "os.remove", "os.rmdir", "os.scandir", "ctypes.dlsym"))
"""Steps of a writer, by the names of their audit events; ``dlsym`` comes just before folders are
exchanged."""


def files_of(folder: Path) -> dict[str, bytes]:
    """Every file of a whole site but its marker, by address."""
    files = {path.relative_to(folder).as_posix(): path for path in folder.rglob("*") if path.is_file()}
    return {address: path.read_bytes() for address, path in files.items() if address != MARKER}


def writer(files: dict[str, bytes], site: Path, last: int | None, told: int) -> int:
    """Fork a process that writes a site, and return its number.

    It is killed before step number *last*; with ``None`` it writes how many steps it took to the pipe *told*.
    """
    child = os.fork()
    if child:
        return child
    try:
        steps = itertools.count()
        sys.addaudithook(lambda event, _: step(event, steps, last))
        write_folder(files, site)
        os.write(told, str(next(steps)).encode())
        os._exit(0)
    finally:
        os._exit(70)


def step(event: str, steps: Iterator[int], last: int | None) -> None:
    """Count a step on files (PEP 578 names them); the last one is never taken."""
    if event in STEPS and next(steps) == last:
        os.kill(os.getpid(), signal.SIGKILL)


def steps_of(files: dict[str, bytes], site: Path) -> int:
    """Let a writer be, and return how many steps it took."""
    heard, told = os.pipe()
    _, status = os.waitpid(writer(files, site, None, told), 0)
    if status:
        sys.exit("the writer failed without being killed")
    return int(os.read(heard, 20))


def moments(seed: int, kills: int, steps: int) -> list[int]:
    """One random step out of each of *kills* equal parts of the work, in random order."""
    draw = random.Random(seed)
    drawn = [int((part + draw.random()) * steps / kills) for part in range(kills)]
    draw.shuffle(drawn)
    return drawn


def run(site: Path, seed: int, kills: int, folders: list[Path]) -> None:
    """Kill *kills* writers, of one site after the other."""
    files = [files_of(folder) for folder in folders]
    steps_of(files[0], site)
    steps = steps_of(files[-1], site)
    for number, last in enumerate(moments(seed, kills, steps)):
        _, status = os.waitpid(writer(files[number % len(files)], site, last, sys.stdout.fileno()), 0)
        ended_by = os.WTERMSIG(status) if os.WIFSIGNALED(status) else 0
        print(folders[number % len(files)].name, ended_by, flush=True)
        sys.stdin.readline()


if __name__ == "__main__":
    run(Path(sys.argv[1]), int(sys.argv[2]), int(sys.argv[3]), [Path(folder) for folder in sys.argv[4:]])
