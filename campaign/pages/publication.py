"""Figures and tables for a paper, as files: vectors and pictures at both widths, CSV and LaTeX.

What stands in a folder of publication files:

- ``figures/PAGE_NAME_one-column.svg`` and ``.png`` (85 mm), ``…_two-column.svg`` and ``.png`` (175 mm);
- ``tables/NAME.csv`` (whole, full precision) and ``NAME.tex`` (rounded as on the page; a table that shows a
  part of another is ``PAGE_NAME.tex``);
- ``index.csv``: a line a figure and a table, with its page, number, caption and files.
"""

from __future__ import annotations

import difflib
from collections.abc import Callable, Iterator, Mapping, Sequence

import pandas as pd

from campaign.notices import CampaignStops, Notice
from campaign.pages.drawing import ready
from campaign.pages.figures import Figure
from campaign.pages.latex_tables import latex_table
from campaign.pages.page import Page
from campaign.pages.print_figure import COLUMN_WIDTHS_MM, print_png, print_svg
from campaign.pages.render import number_on_page, table_files
from campaign.pages.tables import Table, csv_bytes
from campaign.recordings.recording import STRAIN, ReferenceQuantity

Told = Callable[[str, int, int], None]


def publication_files(
    pages: Sequence[Page],
    tables: Sequence[Table] = (),
    reference: ReferenceQuantity = STRAIN,
    progress: Told | None = None,
) -> dict[str, bytes]:
    """Return every file of a publication folder by its address, sorted.

    Parameters
    ----------
    pages
        The pages whose figures and tables are wanted.
    tables
        Further tables of the site that get a CSV file.
    reference
        What signals are calibrated against; names columns of tables.
    progress
        Told of every figure.
    """
    made: dict[str, bytes] = table_files([*tables, *(t for page in pages for t in page.tables)], reference)
    rows: list[Mapping[str, str]] = []
    count = sum(len(page.figures) for page in pages)
    done = 0
    for page in pages:
        for index, figure in enumerate(page.figures, 1):
            files = dict(figure_files(page, figure))
            made |= files
            rows.append(_line(page, "figure", index, figure.name, figure.caption, files))
            done += 1
            if progress is not None:
                progress("figures", done, count)
        for index, table in enumerate(page.tables, 1):
            address = f"tables/{_file_of(page, table)}.tex"
            made[address] = latex_table(table, f"{page.title}: table {number_on_page(page, index)}").encode()
            rows.append(_line(page, "table", index, table.name, table.caption, [address, table.file]))
    made["index.csv"] = csv_bytes(pd.DataFrame(rows, columns=list(_COLUMNS)))
    return dict(sorted(made.items()))


def chosen_pages(pages: Sequence[Page], wanted: Sequence[str]) -> list[Page]:
    """Return the pages that are named (``calibration``, ``sensor-M01-AB``), or all where none is.

    Raises
    ------
    CampaignStops
        Where a name is no page's.
    """
    known = {page.slug for page in pages}
    unknown = [name for name in wanted if name not in known]
    if unknown:
        raise CampaignStops([_no_such_page(name, known) for name in unknown])
    return [page for page in pages if not wanted or page.slug in wanted]


def _no_such_page(name: str, known: set[str]) -> Notice:
    near = difflib.get_close_matches(name, sorted(known), 3)
    return Notice(
        code="page-not-there",
        weight="stops",
        file=None,
        line=None,
        column=None,
        what=f"the report of this campaign has no page {name!r}",
        done="nothing was written",
        remedy=f"name one of its pages: {', '.join(near or sorted(known)[:6])}",
    )


_COLUMNS = ("page", "kind", "number", "name", "caption", "files")


def figure_files(page: Page, figure: Figure) -> Iterator[tuple[str, bytes]]:
    """Yield the files of one figure: vectors and a picture for each width."""
    shown = ready(figure)
    for name, width in COLUMN_WIDTHS_MM.items():
        svg = print_svg(shown, width)
        address = f"figures/{page.slug}_{figure.name}_{name}"
        yield f"{address}.svg", svg.encode("utf-8")
        yield f"{address}.png", print_png(svg)


def _file_of(page: Page, table: Table) -> str:
    return table.name if table.source is None else f"{page.slug}_{table.name}"


def _line(
    page: Page, kind: str, index: int, name: str, caption: str, files: Mapping[str, bytes] | Sequence[str]
) -> dict[str, str]:
    return {
        "page": page.slug,
        "kind": kind,
        "number": number_on_page(page, index),
        "name": name,
        "caption": caption,
        "files": " ".join(files),
    }
