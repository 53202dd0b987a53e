"""Pages of modules and sensors: rendered by any process, and made from the rows of their module alone."""

from __future__ import annotations

import pickle
from dataclasses import replace
from operator import attrgetter
from pathlib import Path

import pandas as pd
import pytest

from campaign.analyses.results import CampaignResults
from campaign.keeping.store import open_store
from campaign.pages import own_pages, site
from campaign.pages.campaign_map import campaign_map
from campaign.pages.kept_pages import PageFiles
from campaign.pages.module_share import all_modules, module_shares, results_of_module
from campaign.pages.own_pages import MakingTask, files_of_modules, make_and_render, pages_of_module
from campaign.pages.page import Page, SiteFrame
from campaign.pages.render import PAGES_A_TASK, RenderingTask, render_pages, render_site
from campaign.pages.site import build_site, site_frame
from campaign.workers.crew import Crew, LocalProcesses
from campaign.workers.sharing import Work
from campaign.workers.workshop import Workshop
from tests.pages.toy import TEMPLATES, toy_page

FRAME = SiteFrame("t", (), version="0")


def own_page(name: str) -> Page:
    page = toy_page(name, slug=name, number=None)
    return replace(page, tables=tuple(replace(table, source="toy_lines") for table in page.tables))


def site_with(own: list[Page], crew: Crew | None = None, *, rehearsal: bool = False) -> dict[str, bytes]:
    frame = replace(FRAME, rehearsal=rehearsal)
    return render_site(frame, (toy_page(),), further_templates=[TEMPLATES], own_pages=own, crew=crew)


@pytest.mark.parametrize("rehearsal", [False, True])
def test_other_processes_render_the_same_files(rehearsal: bool) -> None:
    own = [own_page(f"sensor-{i}") for i in range(PAGES_A_TASK + 3)]
    alone = site_with(own, rehearsal=rehearsal)
    assert {f"sensor-{i}.html" for i in range(PAGES_A_TASK + 3)} <= set(alone)
    with LocalProcesses(2) as crew:
        assert site_with(own, crew, rehearsal=rehearsal) == alone


def test_a_page_that_cannot_be_rendered_is_an_error_whoever_renders_it() -> None:
    from jinja2 import UndefinedError

    broken = replace(own_page("sensor-1"), context={})
    with pytest.raises(UndefinedError):
        site_with([broken])
    with LocalProcesses(2) as crew, pytest.raises(UndefinedError):
        site_with([broken], crew)


def test_own_pages_of_one_name_or_with_a_file_of_their_own_are_refused() -> None:
    with pytest.raises(ValueError, match="two pages are named Sensor-1"):
        site_with([own_page("sensor-1"), own_page("Sensor-1")])
    with pytest.raises(ValueError, match="parts of the site's tables only"):
        site_with([toy_page("sensor-1", slug="sensor-1", number=None)])


def test_shares_of_modules_hold_every_row_once_and_in_order(
    small_campaign_pages: tuple[CampaignResults, list[Page]],
) -> None:
    results, _ = small_campaign_pages
    shares = list(module_shares(results))
    modules = sorted(set(results.intake.trials["module"]))
    assert [share.module for share in shares] == modules
    assert len(modules) > 1
    for tables_of in (
        attrgetter("intake.trials"),
        attrgetter("calibration.run_lines"),
        attrgetter("limits.table"),
        attrgetter("variance.effects"),
    ):
        whole = tables_of(results)
        for share in shares:
            expected = whole[whole["module"].astype(str) == share.module]
            pd.testing.assert_frame_equal(tables_of(share.results), expected)
    assert results_of_module(results, "nobody").intake.trials.empty


def test_a_share_alone_is_enough_and_says_nothing_of_other_modules(
    small_campaign_pages: tuple[CampaignResults, list[Page]],
) -> None:
    results, pages = small_campaign_pages
    common = all_modules(results, campaign_map(results))
    rendering = RenderingTask((), site_frame(results), (), (), results.readings.reference)
    made: list[PageFiles] = []
    for share in module_shares(results):
        handed_over = pickle.loads(pickle.dumps(share))
        found = make_and_render(MakingTask(handed_over, common, rendering))
        assert [page.slug for page in found] == [page.slug for page in pages_of_module(share, common)]
        others = {other.module for other in module_shares(results)} - {share.module}
        assert not any(f"trials/{other}".encode() in pickle.dumps(share) for other in others)
        made += found
    own = [page for page in pages if page.slug.startswith(("module-", "sensor-"))]
    assert {page.slug for page in made} == {page.slug for page in own}
    expected = render_pages(replace(rendering, pages=tuple(own)))
    assert sorted(made, key=attrgetter("slug")) == sorted(expected, key=attrgetter("slug"))


def test_other_processes_make_the_same_site(
    small_campaign_pages: tuple[CampaignResults, list[Page]], monkeypatch: pytest.MonkeyPatch
) -> None:
    results, _ = small_campaign_pages
    alone = build_site(results)
    monkeypatch.setattr(site, "PAGES_WORTH_SHARING", 1)
    with LocalProcesses(2) as crew:
        assert build_site(results, workshop=Workshop(crew)) == alone


def test_modules_of_an_earlier_run_are_found_and_a_changed_one_is_made_anew(
    small_campaign_pages: tuple[CampaignResults, list[Page]],
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    results, _ = small_campaign_pages
    done: list[str] = []

    def counted(task: MakingTask) -> tuple[PageFiles, ...]:
        done.append(task.share.module)
        return make_and_render(task)

    work = Work(counted, lambda task: [task], counted)
    monkeypatch.setattr(own_pages, "MAKING", work)
    rendering = RenderingTask((), site_frame(results), (), (), results.readings.reference)
    mapped = campaign_map(results)
    meanwhile: list[str] = []

    def pages_with(of: CampaignResults) -> list[PageFiles]:
        with open_store(tmp_path / "kept") as store:
            made = files_of_modules(
                of, mapped, Workshop(store=store), rendering, lambda: meanwhile.append("done")
            )
            return sorted((page for some in made for page in some), key=attrgetter("slug"))

    first = pages_with(results)
    modules = sorted(set(results.intake.trials["module"]))
    assert done == modules
    assert pages_with(results) == first
    assert done == modules
    trials = results.intake.trials
    later = trials["started"].where(trials["module"] != modules[0], "2031-01-01T00:00:00")
    changed = replace(results, intake=replace(results.intake, trials=trials.assign(started=later)))
    assert pages_with(changed) != first
    assert done == [*modules, modules[0]]
    assert meanwhile == ["done"] * 3
