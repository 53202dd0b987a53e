"""Pages of modules and sensors: made and rendered module by module, by any process."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

from campaign.analyses.results import CampaignResults
from campaign.pages.kept_pages import KeptPages, PageFiles
from campaign.pages.module import module_page
from campaign.pages.module_share import AllModules, ModuleShare, all_modules, module_shares
from campaign.pages.page import Page
from campaign.pages.render import RenderingTask, pages_as_marked, render_pages
from campaign.pages.sensor import sensor_pages
from campaign.pages.skin_map import SkinMap
from campaign.pages.templates import templates_folder
from campaign.workers.sharing import Work, share_out
from campaign.workers.workshop import Workshop


@dataclass(frozen=True)
class MakingTask:
    """One module whose pages, and those of its sensors, are to be made and rendered by any process."""

    share: ModuleShare
    common: AllModules
    rendering: RenderingTask


def pages_of_module(share: ModuleShare, common: AllModules) -> tuple[Page, ...]:
    """Return the page of a module and those of its sensors."""
    return module_page(share, common), *sensor_pages(share, common)


def make_and_render(task: MakingTask) -> tuple[PageFiles, ...]:
    """Return the files of the pages of one module and its sensors."""
    pages = pages_as_marked(task.rendering.frame, pages_of_module(task.share, task.common))
    return render_pages(replace(task.rendering, pages=tuple(pages)))


MAKING = Work(make_and_render, lambda task: [task], make_and_render)
"""How modules are shared out; one that kills a worker is done by this process after all."""


def files_of_modules(
    results: CampaignResults,
    mapped: SkinMap,
    workshop: Workshop,
    rendering: RenderingTask,
    meanwhile: Callable[[], None],
) -> Iterator[tuple[PageFiles, ...]]:
    """Yield the files of the pages of every module and its sensors.

    Parameters
    ----------
    results
        What one run of the report found out.
    mapped
        The skin map.
    workshop
        Who makes and renders them, and where those of an earlier run are found.
    rendering
        What all pages share, without pages.
    meanwhile
        What this process does, once, while others work.
    """
    common = all_modules(results, mapped)
    templates = (templates_folder(), *rendering.further_templates)
    kept = KeptPages(workshop.store, templates, (common, rendering))
    found: list[tuple[PageFiles, ...]] = []

    def tasks() -> Iterator[MakingTask]:
        for share in module_shares(results):
            known = kept.find(share.page_slug, share)
            if known is None:
                yield MakingTask(share, common, rendering)
            else:
                found.append(known)

    for made in share_out(MAKING, tasks(), workshop.crew, meanwhile):
        kept.keep(made)
        yield made
    yield from found
