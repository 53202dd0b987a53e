"""Pages to the files of a site: one jinja2 environment, every value escaped, an undefined name an error.

:func:`render_site` is pure: pages and tables in, the bytes of every file out. Writing them is
:func:`campaign.pages.output.write_folder`.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache, partial
from itertools import islice
from pathlib import Path
from typing import Any

import pandas as pd
from jinja2 import Environment, FileSystemLoader, StrictUndefined
from markupsafe import Markup

from campaign.keeping.store import Store
from campaign.pages import numbers, slugs
from campaign.pages.assets import asset_files
from campaign.pages.definitions import defined_in, definitions_of
from campaign.pages.drawing import marked, ready
from campaign.pages.figures import Figure
from campaign.pages.kept_pages import KeptPages, PageFiles
from campaign.pages.legible import legible_value
from campaign.pages.page import REHEARSED, Page, SiteFrame
from campaign.pages.page_data import data_script, folded_row
from campaign.pages.static_figure import static_svg
from campaign.pages.tables import (
    Cell,
    Table,
    csv_bytes,
    drawn_csv_bytes,
    in_reference,
    schema_bytes,
    shown_cells,
    shown_marks,
)
from campaign.pages.templates import templates_folder
from campaign.recordings.recording import STRAIN, ReferenceQuantity
from campaign.workers.crew import Crew, ThisProcess
from campaign.workers.sharing import Work, share_out

PAGES_A_TASK = 8
"""Pages of modules and sensors that are rendered together."""

ROWS_NOT_WORTH_A_BUTTON = 2
"""So many rows more than a table has in its page stand there as well, rather than in the page's script."""


@dataclass(frozen=True)
class PlacedFigure:
    """A figure with its number on its page, its static picture and the address of its data."""

    figure: Figure
    number: str
    anchor: str
    svg: Markup
    csv: str


@dataclass(frozen=True)
class PlacedTable:
    """A table with its number on its page, the rows that stand in it, and those that its script adds."""

    table: Table
    number: str
    anchor: str
    rows: list[tuple[tuple[str, str], list[Cell]]]
    further: list[tuple[tuple[str, str], list[Cell]]]
    csv: str


def environment(further: Sequence[Path] = ()) -> Environment:
    """Return the one environment of the site, with the functions of ``numbers`` by their names.

    *further* folders are looked in for templates that the site's own folder does not have.
    """
    made = Environment(
        loader=FileSystemLoader([templates_folder(), *further]),
        autoescape=True,
        finalize=legible_value,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
        auto_reload=False,
    )
    made.globals.update({name: getattr(numbers, name) for name in _NUMBER_FUNCTIONS})
    made.globals.update({name: getattr(slugs, name) for name in _LINK_FUNCTIONS})
    made.globals["definitions_of"] = definitions_of
    made.filters["defined"] = defined_in
    return made


_NUMBER_FUNCTIONS = (
    "measured",
    "interval",
    "limits",
    "span",
    "covered",
    "significant",
    "fixed",
    "whole",
    "count",
    "probability",
    "percent",
    "NOT_IDENTIFIABLE",
)
_LINK_FUNCTIONS = ("module_href", "sensor_href", "trial_href", "trial_anchor")


def render_site(
    frame: SiteFrame,
    pages: Sequence[Page],
    tables: Sequence[Table] = (),
    files: Mapping[str, bytes] | Callable[[], Mapping[str, bytes]] | None = None,
    plot_library: Path | None = None,
    further_templates: Sequence[Path] = (),
    reference: ReferenceQuantity = STRAIN,
    own_pages: Iterable[Page] = (),
    crew: Crew | None = None,
    store: Store | None = None,
    own_making: OwnMaking | None = None,
) -> dict[str, bytes]:
    """Return every file of the site by its address, sorted.

    Parameters
    ----------
    frame
        What every page shares.
    pages
        Every page; their slugs must differ, also where case is ignored.
    tables
        Tables that are files of the site beside those that pages show.
    files
        Further files by address (calibration records, pictures of notes), or what makes them.
    plot_library
        A build of the plot library to use instead of the one that plotly carries.
    further_templates
        Folders with templates of pages that are not the site's own.
    reference
        What signals are calibrated against: where it is a length, ``strain…`` columns of files are renamed.
    own_pages
        Pages of modules and sensors, which have no number and no table that is a file; taken a few at a time.
    crew
        Who renders *own_pages*; this process where ``None``. The files are the same.
    store
        Where those that an earlier run rendered are found, and others kept; ``None`` goes without.
    own_making
        Makes and renders the pages of modules and sensors instead, while this process renders the others.

    Raises
    ------
    ValueError
        Where two pages or two different tables would be one file.
    """
    _check_slugs(page.slug for page in pages)
    written: dict[str, bytes] = {}
    pages = pages_as_marked(frame, pages)
    whole = RenderingTask(tuple(pages), frame, _strip(pages), tuple(further_templates), reference)
    made: list[PageFiles] = []

    def others() -> None:
        shown = (table for page in pages for table in page.tables)
        written.update(files() if callable(files) else files or {})
        written.update(table_files([*tables, *shown], reference, frame.origin))
        made.extend(render_pages(whole))

    if own_making is not None:
        for some in own_making(replace(whole, pages=()), others):
            made += some
    else:
        others()
        made += _own_page_files(whole, own_pages, crew or ThisProcess(), store)
    _check_slugs(page.slug for page in made)
    for page in made:
        written |= page.further
    html = with_places_of_anchors({page.file: page.html for page in made}, pages)
    written |= {name: text.encode("utf-8") for name, text in html.items()}
    written |= asset_files(templates_folder(), plot_library)
    return dict(sorted(written.items()))


@dataclass(frozen=True)
class RenderingTask:
    """Some pages to be rendered, with what they share: it may be handed to another process."""

    pages: tuple[Page, ...]
    frame: SiteFrame
    strip: tuple[Page, ...]
    further_templates: tuple[Path, ...]
    reference: ReferenceQuantity


OwnMaking = Callable[[RenderingTask, Callable[[], None]], Iterable[tuple[PageFiles, ...]]]
"""Given what all pages share, and what this process is to do meanwhile, once: the files of own pages."""


def render_pages(task: RenderingTask) -> tuple[PageFiles, ...]:
    """Return the files of some pages, in order."""
    jinja = _kept_environment(task.further_templates)
    return tuple(_page_files(jinja, task, page) for page in task.pages)


_kept_environment = lru_cache(maxsize=1)(environment)
"""Templates are compiled once a process."""

RENDERING = Work(
    render_pages, lambda task: [replace(task, pages=(page,)) for page in task.pages], render_pages
)
"""How pages are shared out; those that kill a worker are rendered by this process after all."""


def _own_page_files(
    whole: RenderingTask, pages: Iterable[Page], crew: Crew, store: Store | None
) -> list[PageFiles]:
    """Return the files of pages of modules and sensors: those of an earlier run, and those that are made."""
    shared = whole.frame, whole.strip, whole.reference
    kept = KeptPages(store or Store(None), (templates_folder(), *whole.further_templates), shared)
    made: list[PageFiles] = []
    marked = (as_marked(whole.frame, page) for page in pages)
    wanted = _not_yet_rendered(marked, kept, made)
    for some in share_out(RENDERING, (replace(whole, pages=few) for few in _few_at_a_time(wanted)), crew):
        for page in some:
            kept.keep([page])
        made += some
    return made


def _few_at_a_time(pages: Iterable[Page]) -> Iterator[tuple[Page, ...]]:
    """Put pages together as they are made: others render while this process makes the next."""
    waiting = iter(pages)
    while some := tuple(islice(waiting, PAGES_A_TASK)):
        yield some


def _not_yet_rendered(pages: Iterable[Page], kept: KeptPages, made: list[PageFiles]) -> Iterator[Page]:
    """Yield the pages that no earlier run rendered; the files of the others are added to *made*."""
    for page in pages:
        if any(table.source is None for table in page.tables):
            raise ValueError("pages of modules and sensors show parts of the site's tables only")
        found = kept.find(page.slug, page)
        if found is None:
            yield page
        else:
            made.extend(found)


def _strip(pages: Iterable[Page]) -> tuple[Page, ...]:
    """Return the pages of the strip in order, without what they hold."""
    numbered = sorted((p for p in pages if p.number is not None), key=lambda p: (p.number or 0, p.slug))
    return tuple(replace(page, context={}, figures=(), tables=(), data={}) for page in numbered)


def _page_files(jinja: Environment, task: RenderingTask, page: Page) -> PageFiles:
    figures = {f.name: ready(f) for f in page.figures}
    tables = {t.name: placed_table(page, i, t) for i, t in enumerate(page.tables, 1)}
    rows = {name: [folded_row(*row) for row in own.further] for name, own in tables.items() if own.further}
    further = {f"data/{page.slug}.js": data_script(page, figures, rows)}
    for figure in page.figures:
        if figure.data is not None:
            further[_figure_csv(page, figure)] = drawn_csv_bytes(in_reference(figure.data, task.reference))
    return PageFiles(page.slug, page.file, _page_html(jinja, task, page, figures, tables), further)


def pages_as_marked(frame: SiteFrame, pages: Sequence[Page]) -> Sequence[Page]:
    """Return *pages*; those of a rehearsal say in every figure and caption that nothing was measured."""
    return [as_marked(frame, page) for page in pages]


def as_marked(frame: SiteFrame, page: Page) -> Page:
    """Return *page*; one of a rehearsal says in every figure and caption that nothing was measured."""
    return _as_rehearsal(page) if frame.rehearsal else page


def _as_rehearsal(page: Page) -> Page:
    """Return *page* with a mark in every figure, and words in every caption, that nothing was measured."""
    words = f"{REHEARSED[0].upper()}{REHEARSED[1:]}."
    return replace(
        page,
        figures=tuple(replace(marked(f, REHEARSED), caption=f"{f.caption} {words}") for f in page.figures),
        tables=tuple(replace(table, caption=f"{table.caption} {words}") for table in page.tables),
    )


def with_places_of_anchors(html: Mapping[str, str], pages: Sequence[Page]) -> dict[str, str]:
    """Return the pages with links to anchors of a page that is told in parts leading to the right part.

    A page that holds a part of another (:attr:`campaign.pages.page.Page.part_of`) holds that part's anchors:
    ``method.html#line`` becomes ``method-lines.html#line``.
    """
    parts = {page.file: page.part_of for page in pages if page.part_of}
    own = {file: set(re.findall(r'\sid="([^"]+)"', html[file])) for file in parts}
    places = {f"{parts[file]}#{anchor}": f"{file}#{anchor}" for file in parts for anchor in own[file]}
    if not places:
        return dict(html)
    link = re.compile(r'(?<= href=")([\w.-]*)#([^"]+)(?=")')

    def led(name: str, found: re.Match[str]) -> str:
        if not found[1] and found[2] in own.get(name, found[2]):
            return found[0]
        return places.get(f"{found[1] or parts.get(name, name)}#{found[2]}", found[0])

    return {name: link.sub(partial(led, name), text) for name, text in html.items()}


def table_files(
    tables: Iterable[Table], reference: ReferenceQuantity = STRAIN, origin: str = ""
) -> dict[str, bytes]:
    """Return ``tables/NAME.csv`` of every table that is a file, and ``tables/schema.json``.

    *origin* says in the schema what the data are where nothing was measured.
    """
    frames: dict[str, pd.DataFrame] = {}
    for table in tables:
        if table.source is not None:
            continue
        if table.name in frames and not frames[table.name].equals(table.frame):
            raise ValueError(f"two different tables are named {table.name}")
        frames[table.name] = table.frame
    frames = {name: in_reference(frame, reference) for name, frame in frames.items()}
    made = {f"tables/{name}.csv": csv_bytes(frame, name) for name, frame in frames.items()}
    return made | {"tables/schema.json": schema_bytes(frames, origin)}


def _page_html(
    jinja: Environment,
    task: RenderingTask,
    page: Page,
    figures: Mapping[str, Figure],
    tables: Mapping[str, PlacedTable],
) -> str:
    context: dict[str, Any] = dict(page.context)
    context |= {
        "page": page,
        "site": task.frame,
        "strip": task.strip,
        "figures": {f.name: _placed_figure(page, i, figures[f.name]) for i, f in enumerate(page.figures, 1)},
        "tables": tables,
    }
    return without_indents(jinja.get_template(page.template).render(context))


def without_indents(page: str) -> str:
    """Return a page without indents and empty lines, but for what is set as it stands (``pre``)."""
    parts = re.split(r"(<pre\b.*?</pre>)", page, flags=re.DOTALL)
    return "".join(part if part.startswith("<pre") else _without_indents(part) for part in parts)


def _without_indents(text: str) -> str:
    first, *others = text.split("\n")
    if not others:
        return text
    lines = [line for line in map(str.strip, others[:-1]) if line]
    return "\n".join([first.rstrip(), *lines, others[-1].lstrip()])


def _placed_figure(page: Page, index: int, figure: Figure) -> PlacedFigure:
    csv = f"tables/{figure.table}.csv" if figure.data is None and figure.table else _figure_csv(page, figure)
    return PlacedFigure(
        figure,
        number_on_page(page, index),
        f"figure-{figure.name}",
        Markup(static_svg(figure)),
        csv,
    )


def placed_table(page: Page, index: int, table: Table) -> PlacedTable:
    """Return a table with its number and the cells that its page shows."""
    rows = list(zip(shown_marks(table), shown_cells(table), strict=True))
    first = len(rows) if len(rows) <= table.rows_in_page + ROWS_NOT_WORTH_A_BUTTON else table.rows_in_page
    anchor = f"table-{table.name}"
    return PlacedTable(table, number_on_page(page, index), anchor, rows[:first], rows[first:], table.file)


def number_on_page(page: Page, index: int) -> str:
    """Return the number that a figure or table carries: ``"2.1"``, or ``"1"`` on pages without a number."""
    return str(index) if page.number is None else f"{page.number}.{index}"


def _figure_csv(page: Page, figure: Figure) -> str:
    return f"figures/{page.slug}_{figure.name}.csv"


def _check_slugs(slugs: Iterable[str]) -> None:
    seen: set[str] = set()
    for slug in slugs:
        if slug.casefold() in seen:
            raise ValueError(f"two pages are named {slug}")
        seen.add(slug.casefold())
