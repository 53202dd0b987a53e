"""What a whole report costs, cold, warm and after one changed trial, beside what any reading must cost.

Run as ``python -m benchmarks.whole_run --trials 200`` (or 2000, 5000). A campaign of that many recordings is
written to a scratch folder, the named floors read it, and ``campaign report`` runs on it, every run a process
of its own. The table is printed, and written as ``whole_run.csv`` and into the README of this folder. Ratios
within one run are what to compare: the base is ``polars.read_csv`` file by file, which only parses.

With ``--growth`` small campaigns of several sizes show how the cost grows with recordings, modules and rows.
5,000 recordings of 10,000 rows take about 2 GB of disk and, with everything, some ten minutes.
"""

from __future__ import annotations

import argparse
import csv
import json
import math
import os
import platform
import resource
import shutil
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

HERE = Path(__file__).parent
START, END = "<!-- whole_run: written by whole_run.py -->", "<!-- end of whole_run -->"
BASE = "polars.read_csv, file by file"

GROWTH = {
    "recordings": [(200, 600, 12), (400, 600, 12), (800, 600, 12)],
    "modules": [(400, 600, 8), (400, 600, 16), (400, 600, 32)],
    "rows a recording": [(200, 1000, 12), (200, 4000, 12), (200, 16000, 12)],
}
"""(recordings, rows, modules) of the campaigns of each series."""


@dataclass(frozen=True)
class Run:
    """One measured run of a process.

    Attributes
    ----------
    name
        What was run.
    seconds
        From start to end, interpreter and imports included.
    stages
        Seconds of each stage within it.
    parent_mb, worker_mb
        Largest memory of the process, and of any of its workers; 0: none.
    """

    name: str
    seconds: float
    stages: dict[str, float]
    parent_mb: float
    worker_mb: float


def main() -> None:
    options = _options()
    if options.child:
        print(json.dumps(CHILDREN[options.child[0]](*options.child[1:])))
        return
    with _scratch(options.scratch) as scratch:
        if options.growth:
            lines = growth_lines(scratch, options.workers)
        else:
            lines = []
            for recordings in options.trials:
                lines += size_lines(recordings, options, scratch)
    print("\n".join(lines))
    if not options.print_only:
        write_into_readme(lines, "growth" if options.growth else "whole_run")


def _options() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawTextHelpFormatter)
    parser.add_argument("--trials", type=int, nargs="+", default=[200], help="recordings of the campaign")
    parser.add_argument("--rows", type=int, default=10_000, help="rows of a recording")
    parser.add_argument("--modules", type=int, help="modules; they grow with the recordings by default")
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--scratch", type=Path, help="where campaigns are written; removed afterwards")
    parser.add_argument("--growth", action="store_true", help="how the cost grows, with small campaigns")
    parser.add_argument("--print-only", action="store_true", help="write no file of this folder")
    parser.add_argument("--child", nargs="+", help=argparse.SUPPRESS)
    return parser.parse_args()


def _scratch(where: Path | None) -> tempfile.TemporaryDirectory[str]:
    return tempfile.TemporaryDirectory(prefix="whole-run-", dir=where)


# --- one size


def size_lines(recordings: int, options: argparse.Namespace, scratch: str) -> list[str]:
    """Measure one campaign and return the lines of its table."""
    from benchmarks.campaigns import Size, change_one, write_campaign

    folder = Path(scratch) / f"campaign_{recordings}"
    size = Size(recordings, options.rows, options.modules)
    began = time.perf_counter()
    count = write_campaign(size, folder)
    made = time.perf_counter() - began
    megabytes = sum(path.stat().st_size for path in folder.glob("trials/*/*.csv")) / 1e6
    floors = [_run(name, "floor", name, folder) for name in FLOORS]
    base = next(run.seconds for run in floors if run.name == BASE)
    runs = report_runs(folder, scratch, options.workers, lambda: change_one(folder))
    write_csv([*floors, *runs], recordings, options, base)
    shutil.rmtree(folder)
    title = f"{count:,} recordings × {options.rows:,} rows, {size.even_modules} modules, {megabytes:,.0f} MB"
    about = f"{title}; {_machine()}; two loops at once took {_spin():.2f} times one (1: two free cores). "
    return [about + f"Writing the campaign took {made:.0f} s.", "", *table_lines([*floors, *runs], base), ""]


def report_runs(folder: Path, scratch: str, workers: int, change: Callable[[], object]) -> list[Run]:
    """Return the intake and the report in every state of the cache, each in a process of its own."""
    cache, site = Path(scratch) / "cache", Path(scratch) / "site"
    runs = [
        _run("intake with features, serial", "intake", folder, 1),
        _run(f"intake with features, {workers} workers", "intake", folder, workers),
        _run(f"report, cold, {workers} workers", "report", folder, site, workers, cache=cache),
        _run("report, unchanged", "report", folder, site, workers, cache=cache),
    ]
    change()
    runs.append(_run("report, one trial changed", "report", folder, site, workers, cache=cache))
    shutil.rmtree(cache, ignore_errors=True)
    shutil.rmtree(site, ignore_errors=True)
    return runs


def _run(name: str, *child: object, cache: Path | None = None) -> Run:
    variables = {**os.environ, "OPENBLAS_NUM_THREADS": "1", "OMP_NUM_THREADS": "1"}
    if cache is not None:
        variables["CAMPAIGN_CACHE"] = str(cache)
    words = [sys.executable, "-m", "benchmarks.whole_run", "--child", *map(str, child)]
    began = time.perf_counter()
    done = subprocess.run(words, capture_output=True, text=True, check=True, env=variables, cwd=HERE.parent)
    seconds = time.perf_counter() - began
    told = json.loads(done.stdout.splitlines()[-1])
    return Run(name, seconds, told.get("stages", {}), told["parent_mb"], told["worker_mb"])


def table_lines(runs: Sequence[Run], base: float) -> list[str]:
    """Return a Markdown table of *runs*."""
    cold = next((run.seconds for run in runs if run.name.startswith("report, cold")), math.nan)
    lines = [
        "| run | s | × base | × cold | reading, analyses, pages, the rest, s | parent, MB | a worker, MB |",
        "|---|---|---|---|---|---|---|",
    ]
    for run in runs:
        share = f"{run.seconds / cold:.2f}" if run.name.startswith("report") else ""
        stages = ", ".join(f"{seconds:.1f}" for seconds in run.stages.values())
        worker = f"{run.worker_mb:.0f}" if run.worker_mb else ""
        lines.append(
            f"| {run.name} | {run.seconds:.2f} | {run.seconds / base:.2f} | {share} | {stages} "
            f"| {run.parent_mb:.0f} | {worker} |"
        )
    return lines


def write_csv(runs: Sequence[Run], recordings: int, options: argparse.Namespace, base: float) -> None:
    """Write the same as numbers, every size after those measured before."""
    if options.print_only:
        return
    head = ["recordings", "rows", "run", "seconds", "times_base", "parent_mb", "worker_mb", "stages"]
    path = HERE / "whole_run.csv"
    sizes = (str(recordings), str(options.rows))
    kept = []
    if path.is_file():
        with path.open(newline="", encoding="utf-8") as stream:
            kept = [row for row in csv.reader(stream) if tuple(row[:2]) not in (sizes, tuple(head[:2]))]
    with path.open("w", newline="", encoding="utf-8") as stream:
        writer = csv.writer(stream, lineterminator="\n")
        writer.writerow(head)
        writer.writerows(kept)
        for run in runs:
            stages = " ".join(f"{name.replace(' ', '_')}={value:.2f}" for name, value in run.stages.items())
            figures = [f"{run.seconds:.3f}", f"{run.seconds / base:.3f}"]
            memory = [f"{run.parent_mb:.0f}", f"{run.worker_mb:.0f}"]
            writer.writerow([*sizes, run.name, *figures, *memory, stages])


def write_into_readme(lines: Sequence[str], part: str) -> None:
    """Put *lines* between the marks of *part* in this folder's README."""
    path = HERE / "README.md"
    start, end = START.replace("whole_run:", f"{part}:"), END.replace("whole_run ", f"{part} ")
    text = path.read_text(encoding="utf-8")
    head, tail = text[: text.index(start) + len(start)], text[text.index(end) :]
    path.write_text("\n".join([head, "", *lines, tail]), encoding="utf-8")


# --- how the cost grows


def growth_lines(scratch: str, workers: int) -> list[str]:
    """Measure every series of :data:`GROWTH` and return its table with the exponents."""
    lines = [
        f"{_machine()}. Exponents are slopes of log cost against log size.",
        "",
        "| what grows | sizes | cold report, s | exponent | reading | analyses | pages |",
        "|---|---|---|---|---|---|---|",
    ]
    for name, sizes in GROWTH.items():
        runs = [_grown(recordings, rows, modules, scratch, workers) for recordings, rows, modules in sizes]
        index = ["recordings", "rows a recording", "modules"].index(name)
        values = [size[index] for size in sizes]
        whole = ", ".join(f"{run.seconds:.1f}" for run in runs)
        exponents = [slope(values, [run.stages[stage] for run in runs]) for stage in STAGES]
        shown = " | ".join(f"{value:.2f}" for value in [slope(values, [r.seconds for r in runs]), *exponents])
        lines.append(f"| {name} | {', '.join(map(str, values))} | {whole} | {shown} |")
    return lines


STAGES = ("reading", "analyses", "pages")


def _grown(recordings: int, rows: int, modules: int, scratch: str, workers: int) -> Run:
    from benchmarks.campaigns import Size, write_campaign

    folder = Path(scratch) / "grown"
    write_campaign(Size(recordings, rows, modules), folder)
    cache, site = Path(scratch) / "cache", Path(scratch) / "site"
    run = _run("grown", "report", folder, site, workers, cache=cache)
    for place in (folder, cache, site):
        shutil.rmtree(place, ignore_errors=True)
    return run


def slope(sizes: Sequence[float], costs: Sequence[float]) -> float:
    """Return the least-squares slope of log cost against log size."""
    x, y = [math.log(v) for v in sizes], [math.log(max(v, 1e-3)) for v in costs]
    mean = sum(x) / len(x)
    return sum((a - mean) * b for a, b in zip(x, y, strict=True)) / sum((a - mean) ** 2 for a in x)


# --- what the processes do


def child_floor(name: str, folder: str) -> dict[str, object]:
    """Read every recording of a campaign in one of the usual ways."""
    FLOORS[name](sorted(Path(folder).glob("trials/*/*.csv")))
    return _memory()


def child_intake(folder: str, workers: str) -> dict[str, object]:
    """Hash, gate, parse and check every recording, and reduce every trial; nothing is kept."""
    from campaign.keeping.store import Store
    from campaign.pipeline import read_campaign
    from campaign.workers.crew import LocalProcesses, ThisProcess
    from campaign.workers.workshop import Workshop

    crew = LocalProcesses(int(workers)) if int(workers) > 1 else ThisProcess()
    try:
        read_campaign(Path(folder), workshop=Workshop(crew, Store(None)))
    finally:
        crew.close()
    return _memory()


def child_report(folder: str, site: str, workers: str) -> dict[str, object]:
    """Run ``campaign report`` and note when its stages begin."""
    from campaign.pipeline import report
    from campaign.recordings.description import DESCRIPTION_FILE
    from campaign.workers.workshop import open_workshop

    began = time.perf_counter()
    first: dict[str, float] = {}

    def progress(what: str, _done: int, _total: int) -> None:
        first.setdefault(what, time.perf_counter())

    with open_workshop(Path(folder), DESCRIPTION_FILE, workers=int(workers)) as workshop:
        report(Path(folder), Path(site), fail_on_set_aside=False, progress=progress, workshop=workshop)
    ended = time.perf_counter()
    begins = [first[stage] for stage in STAGES if stage in first] or [ended]
    spans = [end - start for start, end in zip(begins, [*begins[1:], ended], strict=True)]
    stages = dict(zip([s for s in STAGES if s in first], spans)) | {"the rest": begins[0] - began}
    return _memory() | {"stages": stages}


CHILDREN: dict[str, Callable[..., dict[str, object]]] = {
    "floor": child_floor,
    "intake": child_intake,
    "report": child_report,
}


def _cat(files: Sequence[Path]) -> None:
    for path in files:
        path.read_bytes()


def _polars_each(files: Sequence[Path]) -> None:
    import polars as pl

    for path in files:
        pl.read_csv(path, comment_prefix="#")


def _polars_scan(files: Sequence[Path]) -> None:
    """All files of one header at once."""
    import polars as pl

    headers: dict[str, list[Path]] = {}
    for path in files:
        with path.open(encoding="utf-8") as stream:
            header = next(line for line in stream if not line.startswith("#"))
        headers.setdefault(header, []).append(path)
    for alike in headers.values():
        pl.scan_csv(alike, comment_prefix="#").collect()


def _pandas_each(files: Sequence[Path]) -> None:
    import pandas as pd

    for path in files:
        pd.read_csv(path, comment="#")


FLOORS: dict[str, Callable[[Sequence[Path]], None]] = {
    "cat of the bytes": _cat,
    BASE: _polars_each,
    "polars.scan_csv, all files": _polars_scan,
    "pandas.read_csv, file by file": _pandas_each,
}


def _memory() -> dict[str, object]:
    """Largest memory of this process and of its workers, MB."""
    status = Path("/proc/self/status")
    own = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    if status.is_file():  # what getrusage says begins with the memory of the process that started this one
        own = int(status.read_text().split("VmHWM:")[1].split()[0])
    workers = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss
    return {"parent_mb": own / 1024, "worker_mb": workers / 1024}


# --- the machine


def _machine() -> str:
    """Return cores, memory and versions; no names."""
    from importlib.metadata import version

    memory = os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") / 2**30
    libraries = ", ".join(f"{name} {version(name)}" for name in ("numpy", "pandas", "polars"))
    cores = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count()
    python = f"Python {platform.python_version()}"
    return f"{cores} cores of {platform.machine()}, {memory:.0f} GiB, {python}, {libraries}"


_LOOP = "sum(range(20_000_000))"


def _spin() -> float:
    """Return how much longer two busy processes take than one: 1 where two cores are free."""

    def took(count: int) -> float:
        began = time.perf_counter()
        running = [subprocess.Popen([sys.executable, "-c", _LOOP]) for _ in range(count)]
        for process in running:
            process.wait()
        return time.perf_counter() - began

    return took(2) / took(1)


if __name__ == "__main__":
    main()
