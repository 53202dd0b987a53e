"""Page 4: every way of leaving out that the design allows is shown, not only the one that is compared."""

from __future__ import annotations

import numpy as np
import pytest

from campaign.pages.calibration_effort import calibration_effort_page
from tests.pages.small_campaign import Sketch, small_results


@pytest.fixture(scope="module")
def page(tmp_path_factory: pytest.TempPathFactory):
    return calibration_effort_page(small_results(tmp_path_factory.mktemp("effort"), Sketch(limits="")))


def test_mountings_and_runs_are_both_left_out_of_a_sensors_own_line(page) -> None:
    frame = next(table for table in page.tables if table.name == "calibration_effort_left_out").frame
    own = frame[frame["effort"] == "sensor"]
    assert set(own["_by"]) == {"mountings", "runs"}
    assert np.allclose(own["ratio"], own["strain_sd_left_out"] / own["strain_sd_predicted"])


def test_the_way_that_table_4_1_shows_is_marked_and_has_its_value(page) -> None:
    chosen, every = page.tables
    shown = every.frame[every.frame["_chosen"] == "yes"]
    both = shown.merge(chosen.frame, on=["generation", "effort", "left_out_by"], suffixes=("", "_chosen"))
    assert len(both) == len(shown) > 0
    assert np.allclose(both["strain_sd_left_out"], both["strain_sd_left_out_chosen"])
