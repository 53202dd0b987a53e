"""Sites that are killed while they are written: a process that imports once and forks writer after writer.

Run as ``python killed_reports.py SITE SEED KILLS FOLDER FOLDER``, where each FOLDER holds a whole site. Each
writer is a process of its own, killed with SIGKILL at a random moment of its work. Prints, one line a kill,
``FOLDER SIGNAL``, and then waits for a line; the signal is 0 for a writer that was done before.
"""

from __future__ import annotations

import os
import random
import signal
import sys
import time
from pathlib import Path

from campaign.pages.output import MARKER, write_folder


def files_of(folder: Path) -> dict[str, bytes]:
    """Every file of a whole site but its marker, by address."""
    files = {path.relative_to(folder).as_posix(): path for path in folder.rglob("*") if path.is_file()}
    return {address: path.read_bytes() for address, path in files.items() if address != MARKER}


def writer(files: dict[str, bytes], site: Path) -> int:
    """Fork a process that writes a site and return its number."""
    child = os.fork()
    if child:
        return child
    try:
        write_folder(files, site)
        os._exit(0)
    finally:
        os._exit(70)


def run(site: Path, seed: int, kills: int, folders: list[Path]) -> None:
    """Kill *kills* writers, of one site after the other."""
    draw = random.Random(seed)
    files = [files_of(folder) for folder in folders]
    begun = time.perf_counter()
    _, status = os.waitpid(writer(files[-1], site), 0)
    whole = time.perf_counter() - begun
    for number in range(kills if status == 0 else 0):
        child = writer(files[number % len(files)], site)
        time.sleep(draw.uniform(0.0, 2.0 * whole))
        os.kill(child, signal.SIGKILL)
        _, status = os.waitpid(child, 0)
        ended_by = os.WTERMSIG(status) if os.WIFSIGNALED(status) else 0
        print(folders[number % len(files)].name, ended_by, flush=True)
        sys.stdin.readline()


if __name__ == "__main__":
    run(Path(sys.argv[1]), int(sys.argv[2]), int(sys.argv[3]), [Path(folder) for folder in sys.argv[4:]])
