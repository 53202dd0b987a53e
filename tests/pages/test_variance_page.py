"""Table 2.1: limits by modified large sample stand there where the campaign is balanced, and only there."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from campaign.pages import numbers
from campaign.pages.definitions import definitions_of
from campaign.pages.variance import variance_page
from tests.pages.small_campaign import Sketch, small_results

KEY = "modified_large_sample"


@pytest.fixture(scope="module")
def results(tmp_path_factory: pytest.TempPathFactory):
    sketch = Sketch(generations=("g",), sessions=1, both_branches=False, limits="")
    return small_results(tmp_path_factory.mktemp("balanced"), sketch)


def first_table(results):
    return next(table for table in variance_page(results).tables if table.name == "components_in_strain")


def test_a_balanced_campaign_shows_both_limits_and_explains_them(results) -> None:
    table = first_table(results)
    assert KEY in [column.key for column in table.columns]
    frame = results.variance.variance_in_strain
    row = frame[(frame["level"] == "sensor") & (frame["place"] == "mid")].iloc[0]
    shown = table.frame.loc[table.frame["words"] == "sensors of a module", KEY].iloc[0]
    wanted = numbers.limits(*(float(row[f"{end}_{KEY}"]) * 100 for end in ("low", "high")))
    assert shown.replace("\u00a0", " ").replace("\u2011", "-") == wanted
    assert ("limits by modified large sample", "method.html#modified-large-sample") in definitions_of(table)


def test_without_balance_the_column_is_not_there(results) -> None:
    frame = results.variance.variance_in_strain
    without = frame.assign(**{f"{end}_{KEY}": np.nan for end in ("low", "high")})
    table = first_table(replace(results, variance=replace(results.variance, variance_in_strain=without)))
    assert KEY not in [column.key for column in table.columns]


def test_a_generation_that_is_not_balanced_says_so(results) -> None:
    frame = results.variance.variance_in_strain
    lost = frame.assign(generation="h", low_modified_large_sample=np.nan, high_modified_large_sample=np.nan)
    both = replace(results.variance, variance_in_strain=pd.concat([frame, lost], ignore_index=True))
    table = first_table(replace(results, variance=both)).frame
    stated = table[(table["generation"] == "h") & (table["words"] == "all together")]
    assert stated[KEY].tolist() == ["not\u00a0balanced"]
