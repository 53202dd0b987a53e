"""Where the time of one whole report goes: stages of a cold run on the demonstration, in one process.

Run as ``python benchmarks/report_profile.py [FOLDER]``. Prints one Markdown table of processor seconds and
their share; the named floor beside it is hashing the same recordings once: reading every byte, nothing else.
"""

from __future__ import annotations

import argparse
import platform
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import TypeVar

T = TypeVar("T")

IMPORTS = "import time; t = time.process_time(); import campaign.pipeline; print(time.process_time() - t)"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("folder", nargs="?", type=Path, default=Path("demo_campaign"))
    folder = parser.parse_args().folder
    print(f"One report on `{folder.name}`, {platform.machine()}, Python {platform.python_version()}\n")
    print("| stage | processor seconds | share |\n|---|---|---|")
    stages = list(profile(folder))
    whole = sum(seconds for _, seconds in stages)
    for name, seconds in stages:
        print(f"| {name} | {seconds:.2f} | {100 * seconds / whole:.0f} % |")
    print(f"| all | {whole:.2f} | 100 % |")
    floor = timed(lambda: hash_all(folder))[1]
    print(f"\nHashing the same files: {floor:.3f} s; the whole report is {whole / floor:.0f} times that.")


def profile(folder: Path) -> list[tuple[str, float]]:
    """Return (stage, processor seconds) of one report, in order."""
    from campaign import pipeline
    from campaign.analyses.calibration_effort import analyse_calibration_effort
    from campaign.analyses.residuals import analyse_residuals
    from campaign.analyses.variance import analyse_variance
    from campaign.pages.notes import make_notes, read_note_files
    from campaign.pages.output import write_folder
    from campaign.pages.site import build_site

    imports = subprocess.run([sys.executable, "-c", IMPORTS], capture_output=True, text=True, check=True)
    stages = [("imports", float(imports.stdout))]
    read, seconds = timed(lambda: pipeline.read_campaign(folder))
    stages.append(("reading and readings", seconds))
    results, whole = timed(lambda: pipeline.analyse(read))
    calibration, variance = results.calibration, results.variance
    if calibration is not None and variance is not None:
        parts = [
            ("variance", lambda: analyse_variance(calibration, results.description)),
            ("residuals", lambda: analyse_residuals(calibration, variance)),
            ("effort", lambda: analyse_calibration_effort(calibration, variance, results.description)),
        ]
        named = [(name, timed(part)[1]) for name, part in parts]
        stages.append(("calibration, limits and findings", max(whole - sum(s for _, s in named), 0.0)))
        stages += named
    notes = make_notes(read_note_files(folder))
    files, seconds = timed(lambda: build_site(results, notes))
    stages.append((f"pages ({len(files)} files)", seconds))
    with tempfile.TemporaryDirectory() as parent:
        stages.append(("writing", timed(lambda: write_folder(files, Path(parent) / "site"))[1]))
    return stages


def hash_all(folder: Path) -> None:
    """Read and hash every file of the folder."""
    from campaign.archive import sha256_of

    for path in sorted(folder.rglob("*")):
        if path.is_file():
            sha256_of(path.read_bytes())


def timed(run: Callable[[], T]) -> tuple[T, float]:
    """Return what *run* returns and the processor seconds it took."""
    start = time.process_time()
    result = run()
    return result, time.process_time() - start


if __name__ == "__main__":
    main()
