"""Rebuilt shapes on the pages of modules and sensors."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from campaign.analyses.layout_results import GENERATION_LINE, OWN_LINE
from campaign.analyses.layout_tables import length_table
from campaign.analyses.results import CampaignResults
from campaign.pages import numbers
from campaign.pages.figures import Figure
from campaign.pages.layout_shapes import small_shapes

LINE_SAID: Mapping[str, str] = {OWN_LINE: "by its own line", GENERATION_LINE: "by the generation’s line"}


def module_shapes(
    results: CampaignResults, module: str, trial: str, name: str, generations: Sequence[str]
) -> Figure | None:
    """Return the placements of one layout trial of a module, ``None`` where none could be read.

    *generations* are those with rebuilt shapes, in the order of their colours.
    """
    if results.layout is None:
        return None
    own = [p for p in results.layout.of_line(OWN_LINE) if (p.module, p.trial) == (module, trial)]
    return small_shapes(own, generations, name)


def lengths_said(results: CampaignResults) -> dict[tuple[str, str, str], str]:
    """(Module, sensor, trial) → how far its lengths were off the known ones in a layout trial."""
    if results.layout is None:
        return {}
    table = length_table(results.layout.edges)
    parts: dict[tuple[str, str, str], list[str]] = {}
    for line, words in LINE_SAID.items():
        for row in table[table["read_by"] == line].to_dict("records"):
            observed, predicted = (
                numbers.significant(float(row[name]), 2, "mm") for name in ("observed_mm", "predicted_mm")
            )
            placements = numbers.count(int(row["placements"]), "placement")
            key = str(row["module"]), str(row["sensor"]), str(row["trial"])
            said = parts.setdefault(key, [f"Read less known length, root mean square over {placements}"])
            said.append(f"{words} {observed} (predicted {predicted})")
    return {key: f"{said[0]}: {'; '.join(said[1:])}." for key, said in parts.items()}
