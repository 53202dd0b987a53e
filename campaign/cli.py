"""The command line: arguments in, exit status out.

Everything heavy is imported inside the commands, so that ``--help`` answers at once.
"""

from __future__ import annotations

import argparse
import os
import shutil
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path

from campaign import __version__
from campaign.notices import CampaignStops

DONE, SET_ASIDE, STOPPED, INTERRUPTED = 0, 1, 2, 130
"""Exit statuses: done; something is set aside and that counts; nothing written; stopped by hand."""

Progress = Callable[[str, int, int], None]


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command and return its exit status.

    Parameters
    ----------
    arguments
        Words after the program's name; those of the process where ``None``.

    Returns
    -------
    int
        0 done, 1 something was set aside and ``--fail-on-set-aside`` was given, 2 nothing written.
    """
    _show_every_character()
    _keep_algebra_on_one_thread()
    options = _parser().parse_args(arguments)
    try:
        status: int = options.run(options)
        sys.stdout.flush()
    except CampaignStops as stops:
        _say_stops(stops)
        return STOPPED
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return DONE
    except KeyboardInterrupt:
        print("stopped by hand; nothing is written", file=sys.stderr)
        return INTERRUPTED
    except OSError as fault:
        print(
            f"{fault.filename or 'the disk'}: {fault.strerror or fault}; nothing is written", file=sys.stderr
        )
        return STOPPED
    return status


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="campaign",
        description="Turns a folder of strain sensor recordings into an offline site of evidence.",
        epilog="exit status: 0 done; 1 something is set aside, with --fail-on-set-aside; 2 nothing written",
    )
    parser.add_argument("--version", action="version", version=f"campaign {__version__}")
    commands = parser.add_subparsers(required=True, metavar="COMMAND")

    report = commands.add_parser("report", help="read a campaign folder and write its site")
    report.add_argument("folder", metavar="FOLDER", type=Path, help="the campaign folder")
    report.add_argument(
        "--into", metavar="SITE", type=Path, help="folder to write the site to (FOLDER_report beside FOLDER)"
    )
    report.add_argument(
        "--fail-on-set-aside",
        action="store_true",
        help="end with status 1 where anything is set aside unasked",
    )
    report.add_argument(
        "--workers",
        metavar="N",
        type=_count,
        help="processes that read recordings (as many as cores, where that is faster than one)",
    )
    report.add_argument(
        "--dask", metavar="ADDRESS", help="read on a Dask cluster: the address of its scheduler"
    )
    report.add_argument(
        "--ignore-cache", action="store_true", help="compute everything anew, and keep nothing of it"
    )
    report.add_argument(
        "--brief",
        metavar="FILE.html",
        type=Path,
        help="write one file for mail instead of the site: findings and key figures, no script",
    )
    report.set_defaults(run=_report)

    figures = commands.add_parser(
        "figures", help="write every figure as SVG and 300 dpi PNG, and every table as CSV and LaTeX"
    )
    figures.add_argument("folder", metavar="FOLDER", type=Path, help="the campaign folder")
    figures.add_argument(
        "--into", metavar="DIR", type=Path, help="folder to write to (FOLDER_figures beside FOLDER)"
    )
    figures.add_argument(
        "--page",
        metavar="NAME",
        action="append",
        default=[],
        help="only of this page (calibration, sensor-M01-AB, …); may be given more than once",
    )
    figures.set_defaults(run=_figures)

    inspect = commands.add_parser("inspect", help="read and check a campaign folder, and say what is found")
    inspect.add_argument("folder", metavar="FOLDER", type=Path, help="the campaign folder")
    inspect.add_argument(
        "--tables",
        metavar="DIR",
        type=Path,
        help="also write recordings.csv, trials.csv and notices.csv to DIR",
    )
    inspect.set_defaults(run=_inspect)

    begin = commands.add_parser("begin", help="look at a tree of recordings and write a first campaign.toml")
    begin.add_argument("folder", metavar="FOLDER", type=Path, help="the folder that holds the recordings")
    begin.set_defaults(run=_begin)

    rehearse = commands.add_parser("rehearse", help="make the synthetic campaign of a planned design")
    rehearse.add_argument(
        "plan", metavar="PLAN", type=Path, help="a TOML file with [plan] and [plan.components]"
    )
    rehearse.add_argument(
        "--into", metavar="FOLDER", type=Path, required=True, help="folder to write the rehearsal to"
    )
    rehearse.set_defaults(run=_rehearse)

    seal = commands.add_parser("seal", help="seal a campaign and its report into one archive")
    seal.add_argument("folder", metavar="FOLDER", type=Path, help="the campaign folder")
    seal.add_argument(
        "--into", metavar="FILE.zip", type=Path, required=True, help="the archive to write, outside FOLDER"
    )
    seal.set_defaults(run=_seal)

    verify = commands.add_parser(
        "verify",
        help="check hashes and structure of a sealed archive, an unpacked one or a site",
        epilog="exit status: 0 everything agrees; 1 something differs; 2 it cannot be read, or is refused",
    )
    verify.add_argument("target", metavar="FILE.zip|FOLDER", type=Path, help="what to verify")
    verify.add_argument(
        "--recompute",
        action="store_true",
        help="also read and analyse the sealed recordings again and compare every figure",
    )
    verify.set_defaults(run=_verify)
    return parser


def _report(options: argparse.Namespace) -> int:
    from campaign.kept_report import keeper_of, write_kept
    from campaign.recordings.description import DESCRIPTION_FILE
    from campaign.workers.workshop import open_workshop

    with (
        open_workshop(
            options.folder,
            DESCRIPTION_FILE,
            workers=options.workers,
            dask=options.dask,
            ignore_cache=options.ignore_cache,
        ) as workshop,
        _progress_bar() as progress,
    ):
        if options.brief is not None:
            from campaign.pipeline import brief

            return brief(options.folder, options.brief, progress, workshop)
        keeper = keeper_of(options.folder, options.into, workshop)
        status = write_kept(keeper, options.fail_on_set_aside)
        if status is not None:
            return status
        from campaign.pipeline import report

        return report(options.folder, options.into, options.fail_on_set_aside, progress, workshop, keeper)


def _figures(options: argparse.Namespace) -> int:
    from campaign.pipeline import publish
    from campaign.recordings.description import DESCRIPTION_FILE
    from campaign.workers.workshop import open_workshop

    with open_workshop(options.folder, DESCRIPTION_FILE) as workshop, _progress_bar() as progress:
        return publish(options.folder, options.into, options.page, progress, workshop)


def _count(text: str) -> int:
    """Read a number of workers."""
    if not text.isascii() or not text.isdigit() or int(text) < 1:
        raise argparse.ArgumentTypeError(f"{text!r} is no whole number from 1")
    return int(text)


def _inspect(options: argparse.Namespace) -> int:
    from campaign.recordings.inspection import (
        check_tables_folder,
        inspection_lines,
        print_lines,
        write_tables,
    )
    from campaign.recordings.intake import NothingUsable, inspect_folder

    if options.tables is not None:
        check_tables_folder(options.tables)
    status = DONE
    try:
        with _progress_bar() as progress:
            intake = inspect_folder(options.folder, options.tables, progress)
    except NothingUsable as stops:
        intake, status = stops.intake, STOPPED
    if options.tables is not None:
        write_tables(intake, options.tables)
    sys.stdout.write(print_lines(inspection_lines(intake, _width())))
    return status


def _begin(options: argparse.Namespace) -> int:
    from campaign.recordings.beginning import write_first_description

    path = write_first_description(options.folder)
    print(f"{path} is written. Every guess in it is marked; look them through, then run:")
    print(f"  campaign inspect {options.folder}")
    return DONE


def _rehearse(options: argparse.Namespace) -> int:
    from campaign.rehearsal import rehearse

    return rehearse(options.plan, options.into)


def _seal(options: argparse.Namespace) -> int:
    from campaign.archiving import seal
    from campaign.recordings.description import DESCRIPTION_FILE
    from campaign.workers.workshop import open_workshop

    with (
        open_workshop(options.folder, DESCRIPTION_FILE, ignore_cache=True) as workshop,
        _progress_bar() as progress,
    ):
        return seal(options.folder, options.into, progress, workshop)


def _verify(options: argparse.Namespace) -> int:
    from campaign.archiving import verify
    from campaign.recordings.description import DESCRIPTION_FILE
    from campaign.workers.workshop import open_workshop

    with (
        open_workshop(options.target, DESCRIPTION_FILE, ignore_cache=True) as workshop,
        _progress_bar() as progress,
    ):
        return verify(options.target, options.recompute, progress, workshop)


def _say_stops(stops: CampaignStops) -> None:
    """Name every fault that stops the campaign and, where recordings were read, what became of them."""
    from campaign.recordings.inspection import inspection_lines, notice_lines, print_lines

    intake = getattr(stops, "intake", None)
    lines = (
        inspection_lines(intake, _width()) if intake is not None else notice_lines(stops.notices, _width())
    )
    sys.stderr.write(print_lines(lines).lstrip("\n"))


def _width() -> int:
    return min(max(shutil.get_terminal_size((100, 24)).columns, 60), 110)


def _keep_algebra_on_one_thread() -> None:
    """Ask the algebra libraries for one thread, unless the user asked for another number.

    The matrices here are small: on a busy machine, threads that wait for each other cost several times the
    work.
    It must be said before numpy is imported.
    """
    for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
        os.environ.setdefault(name, "1")


def _show_every_character() -> None:
    """Spell out what the terminal cannot show, rather than fail on it."""
    for stream in (sys.stdout, sys.stderr):
        reconfigure = getattr(stream, "reconfigure", None)
        if reconfigure is not None:
            reconfigure(errors="backslashreplace")


@contextmanager
def _progress_bar() -> Iterator[Progress]:
    """Show what is being done, on the error stream and only where that is a terminal."""
    from tqdm import tqdm

    bars: list[tqdm] = []  # type: ignore[type-arg, unused-ignore]

    def progress(what: str, done: int, total: int) -> None:
        if not bars or bars[-1].desc != what:
            if bars:
                bars[-1].close()
            bars.append(
                tqdm(desc=what, total=total, disable=None, leave=False, unit_scale=True, file=sys.stderr)
            )
            bars[-1].desc = what
        bars[-1].total = total
        bars[-1].update(done - bars[-1].n)

    try:
        yield progress
    finally:
        if bars:
            bars[-1].close()
