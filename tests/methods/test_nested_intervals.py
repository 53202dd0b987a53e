"""Profile intervals against lme4's, against a plain search, and where an estimate is zero."""

import numpy as np
import pytest
from scipy import optimize, stats

from campaign.methods.nested_model import (
    fit_nested_model,
    profile_interval,
    profile_intervals,
    profile_ratio,
    profile_share,
    profile_total,
)

CUTOFF = stats.chi2.ppf(0.95, 1)


def limits(interval):
    return [interval.low, interval.high]


def test_dyestuff_has_lme4_s_limits(nested):
    fit = fit_nested_model(nested.published("dyestuff"), restricted=False)
    found = profile_intervals(fit, [("Batch", [1.0]), ("residual", [1.0])])
    # expected.json, nested_r.dyestuff_profile_ci: lme4, which profiles ML and interpolates
    assert limits(found[0]) == pytest.approx([12.1985352148769, 84.0630467094225], rel=3e-4)
    assert limits(found[1]) == pytest.approx([38.2299848825959, 67.6576962447717], rel=1e-4)


def test_pastes_has_lme4_s_limits_and_an_exact_zero(nested):
    fit = fit_nested_model(nested.published("pastes"), restricted=False)
    found = profile_intervals(fit, [("sample", [1.0]), ("batch", [1.0]), ("residual", [1.0])])
    # expected.json, nested_r.pastes_profile_ci
    assert limits(found[0]) == pytest.approx([2.15793373834036, 4.05358879917626], rel=1e-4)
    assert found[1].low == 0.0
    assert found[1].high == pytest.approx(2.94659126254802, rel=1e-4)
    assert limits(found[2]) == pytest.approx([0.652023356319614, 1.08544808967703], rel=1e-4)


def plain_profile(model, dense, length, direction, start):
    """Least criterion of one correlated effect with that SD along `direction`, by a plain search."""
    oracle = dense(model)
    name = model.terms[0].name
    turn = np.linalg.inv(np.array([direction, [-direction[1], direction[0]]]))

    def criterion(free):
        factor = turn @ np.array([[length, 0.0], [free[0], free[1]]])
        return oracle.criterion({name: factor @ factor.T}, np.exp(free[2]))

    scale = np.array([10.0, 10.0, 0.1])
    found = optimize.minimize(lambda free: criterion(free * scale), start / scale, options={"gtol": 1e-3})
    return found.fun


@pytest.mark.parametrize("days", [0.0, 5.0])
def test_limits_of_an_sd_at_a_place_are_where_a_plain_search_has_the_cutoff(nested, dense, days):
    table = nested.table("sleepstudy").query("Subject < 333")
    x = table["Days"] / 10
    model = nested.model(
        table, "Reaction", {"mean": 1.0, "x": x}, ["Subject"], [("Subject", "Subject", [1.0, x])]
    )
    fit = fit_nested_model(model)
    at = np.array([1.0, days / 10])
    found = profile_interval(fit, "Subject", at)
    assert found.estimate == pytest.approx(np.sqrt(at @ fit.covariances["Subject"] @ at), rel=1e-9)
    for limit in limits(found):
        start = np.array([0.0, 20.0, np.log(fit.residual_variance)])
        rise = plain_profile(model, dense, limit, at, start) - fit.criterion
        assert rise == pytest.approx(CUTOFF, abs=2e-3)


def test_an_estimate_of_zero_has_an_upper_limit(nested, dense):
    model = nested.published("dyestuff2")
    fit = fit_nested_model(model)
    found = profile_interval(fit, "Batch")
    assert found.estimate == found.low == 0.0
    rise = optimize.minimize_scalar(
        lambda log: dense(model).criterion({"Batch": np.array([[found.high**2]])}, np.exp(log)), (1.0, 3.0)
    )
    assert rise.fun - fit.criterion == pytest.approx(CUTOFF, abs=1e-4)
    ratio = profile_ratio(fit, "Batch", [1.0], {"residual": [1.0]})
    assert ratio.low == 0.0
    assert 0.0 < ratio.high < 2.0


def test_limits_follow_a_change_of_place_and_unit(nested):
    table = nested.invented(seed=11, missing=0.1)
    here = profile_intervals(
        fit_nested_model(nested.lines(table)), [("module", [1.0, 0.5]), ("run", [0.0, 1.0])]
    )
    moved = fit_nested_model(nested.lines(table.assign(x=60.0 + 40.0 * table["x"], y=10.0 * table["y"])))
    there = profile_intervals(moved, [("module", [1.0, 80.0]), ("run", [0.0, 1.0])])
    assert limits(there[0]) == pytest.approx([10 * v for v in limits(here[0])], rel=1e-4)
    assert limits(there[1]) == pytest.approx([0.25 * v for v in limits(here[1])], rel=1e-4)


def test_a_total_of_one_part_is_that_part_and_lies_above_its_parts(nested):
    fit = fit_nested_model(nested.lines(nested.invented(seed=12)))
    at = [1.0, 0.5]
    single = profile_interval(fit, "sensor", at)
    assert limits(profile_total(fit, {"sensor": at})) == pytest.approx(limits(single), rel=1e-6)
    everything = profile_total(fit, {"module": at, "sensor": at, "run": at, "residual": [1.0]})
    parts = [fit.covariances[name] for name in ("module", "sensor", "run")]
    square = sum(np.array(at) @ c @ np.array(at) for c in parts) + fit.residual_variance
    assert everything.estimate == pytest.approx(np.sqrt(square), rel=1e-9)
    assert single.low < everything.low < everything.estimate < everything.high


def test_ratio_and_share_are_the_same_statement(nested):
    fit = fit_nested_model(nested.lines(nested.invented(seed=13)))
    at = [1.0, 0.5]
    others = {"sensor": at, "run": at, "residual": [1.0]}
    ratio = profile_ratio(fit, "module", at, others)
    share = profile_share(fit, "module", at, others)
    assert limits(share) == pytest.approx([r**2 / (1 + r**2) for r in limits(ratio)])
    inverse = profile_ratio(fit, "sensor", at, {"run": at})
    direct = profile_ratio(fit, "run", at, {"sensor": at})
    assert limits(inverse) == pytest.approx([1 / direct.high, 1 / direct.low], rel=1e-4)


def test_ratio_over_zero_has_a_lower_limit_only(nested):
    fit = fit_nested_model(nested.published("pastes"))
    # the batches may have no variance: the ratio to them has no upper limit
    direct = profile_ratio(fit, "batch", [1.0], {"sample": [1.0]})
    inverse = profile_ratio(fit, "sample", [1.0], {"batch": [1.0]})
    assert direct.low == 0.0
    assert limits(inverse) == pytest.approx([1 / direct.high, np.inf], rel=1e-4)
    # an estimate of zero below the line: the limits of the inverse ratio, turned round
    none = {"module": (0.0, 0.0), "sensor": (0.2, 0.3), "run": (0.1, 0.2)}
    nothing = fit_nested_model(nested.means(nested.invented(seed=2, modules=4, sds=none)))
    assert not nothing.covariances["module"].any()
    infinite = profile_ratio(nothing, "sensor", [1.0], {"module": [1.0]})
    assert infinite.estimate == infinite.high == np.inf
    assert 0.0 < infinite.low < np.inf


def test_residual_sd_without_random_effects(nested):
    table = nested.invented(seed=14)
    model = nested.model(table, "y", {"mean": 1.0, "x": table["x"]}, ["run"], [])
    fit = fit_nested_model(model)
    found = profile_interval(fit, "residual")
    degrees = len(table) - 2
    for limit in limits(found):
        square = limit**2 / fit.residual_variance
        assert degrees * (np.log(square) + 1 / square - 1) == pytest.approx(CUTOFF, rel=1e-6)


def test_a_direction_that_does_not_fit_is_refused(nested):
    fit = fit_nested_model(nested.published("dyestuff"))
    with pytest.raises(ValueError, match="must be 1 numbers"):
        profile_interval(fit, "Batch", [1.0, 0.5])
    with pytest.raises(KeyError, match="no random effect 'stand'"):
        profile_interval(fit, "stand")


def test_limits_cover_the_truth(nested):
    covered, trials = 0, 30
    for seed in range(trials):
        fit = fit_nested_model(nested.lines(nested.invented(seed=1000 + seed, modules=6, sensors=3, runs=2)))
        interval = profile_interval(fit, "sensor", [1.0, 0.5])
        truth = np.hypot(0.2, 0.3 * 0.5)
        covered += interval.low <= truth <= interval.high
    # 95 % nominal; 24 or fewer of 30 has probability 0.003
    assert covered > 24
