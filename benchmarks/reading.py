"""The whole intake of recordings against a plain reader, file by file, as a ratio in one run.

The intake reads the bytes, hashes them, finds the dialect, passes the gate, parses and checks the values; the
other side, ``polars.read_csv`` on one thread (``pandas.read_csv`` where it is not installed), only parses.
Times are of the processor, so that neighbours on the machine do not count. Run::

    python benchmarks/reading.py                      # 60 files of 10,000 rows, about 23 MB
    python benchmarks/reading.py --files 5000         # the size of the design's table, about 1.9 GB on disk

Files are made in a temporary folder, which is removed.
"""

from __future__ import annotations

import argparse
import importlib.util
import io
import os
import tempfile
import time
from collections.abc import Callable, Iterator
from pathlib import Path

os.environ.setdefault("POLARS_MAX_THREADS", "1")

import numpy as np

from campaign.recordings.description import Description
from campaign.recordings.fast_reader import BATCH_BYTES
from campaign.recordings.reading import RecordingBytes, read_recordings

HEADER = (
    "# module: M{module:02d}\n# sensor: S{sensor:02d}\ntime_s,length_mm,capacitance_pF,pressure_kPa,force_N\n"
)


def write_recordings(folder: Path, files: int, rows: int, odd_rows: int) -> list[Path]:
    """Write logs of five columns; *odd_rows* rows of each hold an instrument's word instead of a value."""
    rng = np.random.default_rng(7)
    time_s = np.arange(rows) * 0.01
    paths = []
    for number in range(files):
        length = 60 + 12 * np.abs(np.sin(time_s / 7))
        signal = 100 + 1.5 * (length - 60) + rng.normal(0, 0.05, rows)
        table = np.column_stack([time_s, length, signal, rng.normal(0, 0.3, rows), rng.normal(1, 0.2, rows)])
        text = io.StringIO()
        np.savetxt(text, table, fmt="%.4f", delimiter=",")
        lines = text.getvalue().split("\n")
        for at in rng.choice(rows, odd_rows, replace=False):
            lines[at] = lines[at].rpartition(",")[0] + ",OVER"
        path = folder / f"{number:05d}.csv"
        path.write_text(HEADER.format(module=number // 5, sensor=number % 5) + "\n".join(lines))
        paths.append(path)
    return paths


def batches(paths: list[Path]) -> Iterator[list[RecordingBytes]]:
    """Yield files with their bytes, a few megabytes at a time."""
    batch: list[RecordingBytes] = []
    for path in paths:
        batch.append(RecordingBytes(path.name, path.read_bytes()))
        if sum(len(item.data) for item in batch) >= BATCH_BYTES:
            yield batch
            batch = []
    if batch:
        yield batch


def intake(paths: list[Path]) -> int:
    """Read all files by the intake; returns the rows kept."""
    outcomes = [o for batch in batches(paths) for o in read_recordings(batch, Description("benchmark"))]
    return sum(outcome.recording.rows for outcome in outcomes if outcome.recording is not None)


def plain_reader() -> tuple[str, Callable[[Path], int]]:
    """Return the name of the reader that is compared with, and the function that reads one file by it."""
    if importlib.util.find_spec("polars") is not None:
        import polars

        return f"polars {polars.__version__}", lambda path: len(polars.read_csv(path, comment_prefix="#"))
    import pandas

    return f"pandas {pandas.__version__}", lambda path: len(pandas.read_csv(path, comment="#"))


def seconds(call: Callable[[], object]) -> float:
    """Return the processor seconds that a call takes."""
    start = time.process_time()
    call()
    return time.process_time() - start


def compare(paths: list[Path], rounds: int, read_one: Callable[[Path], int]) -> tuple[float, float]:
    """Return the best seconds of the intake and of the plain reader, taken in turn."""
    ours, theirs = [], []
    for _ in range(rounds):
        theirs.append(seconds(lambda: [read_one(path) for path in paths]))
        ours.append(seconds(lambda: intake(paths)))
    return min(ours), min(theirs)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.partition("\n")[0])
    parser.add_argument("--files", type=int, default=60)
    parser.add_argument("--rows", type=int, default=10_000)
    parser.add_argument("--rounds", type=int, default=3)
    options = parser.parse_args()
    name, read_one = plain_reader()
    with tempfile.TemporaryDirectory() as folder:
        clean = write_recordings(Path(folder), options.files, options.rows, 0)
        megabytes = sum(path.stat().st_size for path in clean) / 1e6
        print(f"{options.files} files of {options.rows} rows, {megabytes:.0f} MB; {name} only parses")
        ours, theirs = compare(clean, options.rounds, read_one)
        print(f"healthy files:       intake {ours:.2f} s, {theirs:.2f} s to parse: {ours / theirs:.2f} times")
        odd = write_recordings(Path(folder), options.files, options.rows, 20)
        with_odd = min(seconds(lambda: intake(odd)) for _ in range(options.rounds))
        print(
            f"20 odd rows a file:  intake {with_odd:.2f} s: {with_odd / ours:.2f} times that of healthy files"
        )


if __name__ == "__main__":
    main()
