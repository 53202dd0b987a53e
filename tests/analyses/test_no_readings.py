"""A campaign without a single usable reading: empty results that say so, no traceback."""

from __future__ import annotations

import pandas as pd
import pytest

from campaign.analyses.calibration import analyse_calibration
from campaign.analyses.sensor_lines import SENSOR_LINE_COLUMNS
from campaign.analyses.variance import analyse_variance
from campaign.recordings.description import Description
from campaign.recordings.recording import STRAIN
from campaign.trials.readings import READING_COLUMNS, Readings, collect_readings

DESCRIPTION = Description("empty")
REGISTER = pd.DataFrame(columns=["module", "sensor"])


@pytest.fixture(params=["no trial at all", "no reading used"])
def readings(request, simulated) -> Readings:
    if request.param == "no trial at all":
        return collect_readings([])
    return Readings(simulated.readings(simulated.small_plan).assign(used=False), STRAIN)


def test_nothing_is_calibrated_without_readings(readings) -> None:
    calibration = analyse_calibration(readings, DESCRIPTION, REGISTER, {})
    tables = ("sensor_lines", "run_lines", "level_hysteresis", "repeatability", "ordinary_lines")
    assert all(getattr(calibration, name).empty for name in tables)
    assert calibration.records == ()
    assert set(SENSOR_LINE_COLUMNS) <= set(calibration.sensor_lines.columns)
    assert set(READING_COLUMNS) <= set(calibration.readings.columns)
    assert calibration.readings["residual"].isna().all()


def test_no_spread_is_stated_without_readings(readings) -> None:
    variance = analyse_variance(analyse_calibration(readings, DESCRIPTION, REGISTER, {}), DESCRIPTION)
    assert variance.variance_in_strain.empty
    assert [notice.code for notice in variance.notices] == ["no-readings"]
