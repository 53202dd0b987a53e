"""Page 2: which tables stand there, and what each says only where the campaign supports it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from campaign.analyses.run_settling import Settling
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


def table_named(results, name):
    return next(table for table in variance_page(results).tables if table.name == name)


def test_what_to_expect_of_a_new_sensor_stands_with_its_degrees_of_freedom(results) -> None:
    table = table_named(results, "new_sensor")
    assert set(table.frame["what"]) == {"new sensor", "new module"}
    assert {"strain_sd", "expanded", "df"} <= {column.key for column in table.columns}
    reach = table.frame["expanded"] / table.frame["strain_sd"]
    assert np.allclose(reach, stats.t.ppf(0.975, table.frame["df"]))
    assert ("new sensors", "method.html#new-sensor") in definitions_of(table)


def test_one_spreads_more_only_where_the_interval_of_the_ratio_excludes_1(results) -> None:
    frame = table_named(results, "component_ratios").frame
    assert (frame["differs"] == (frame["low"] > 1)).all()
    assert set(frame["_first"]) <= set(table_named(results, "components_in_strain").frame["words"])


def test_the_signal_over_its_zero_stands_beside_the_signal_with_limits_and_without_shares(results) -> None:
    table = table_named(results, "ratio_components")
    assert not [column.key for column in table.columns if "share" in column.key]
    runs = table.frame[table.frame["level"] == "repetition"].iloc[0]
    wanted = (100 * runs[key] for key in ("strain_sd", "low", "high"))
    assert runs["_sd"] == numbers.interval(*wanted)
    noise = variance_page(results).context["zero_noise"]
    assert [row["generation"] for row in noise] == ["g"]
    assert noise[0]["strain_sd"] > 0


def test_the_ratio_is_left_out_where_no_mounting_has_a_zero_signal(results) -> None:
    frame = results.variance.ratio_variance_in_strain
    without = replace(results, variance=replace(results.variance, ratio_variance_in_strain=frame.iloc[:0]))
    assert "ratio_components" not in {table.name for table in variance_page(without).tables}


def test_the_test_of_the_run_number_is_shown_where_mountings_have_enough_runs(results) -> None:
    tested = {"g": Settling("g", 2, 9.5, 0.001)}
    page = replace(results, variance=replace(results.variance, settling=tested))
    assert table_named(page, "run_numbers").frame.iloc[0].tolist() == ["g", 9.5, 0.001, 2]
    untested = {"g": Settling("g", 1, np.nan, np.nan)}
    page = replace(results, variance=replace(results.variance, settling=untested))
    assert "run_numbers" not in {table.name for table in variance_page(page).tables}
