"""Intervals, paired comparisons and verdicts against scipy.stats and hand-worked examples."""

import numpy as np
import pytest
from scipy import stats

from mrics.errors import QualityError
from mrics.quality import (
    compare,
    compare_arms,
    equivalence,
    holm,
    non_inferiority,
    summarise,
    verdict,
)
from mrics.quality.confidence import estimate


def study(scans, draws=5, slices=3, mean=0.9, seed=0):
    """Records of a simulated study: (scan, draw, slice, value)."""
    rng = np.random.default_rng(seed)
    values = mean + 0.02 * rng.standard_normal((scans, 1, 1))
    values = values + 0.01 * rng.standard_normal((scans, draws, 1))
    values = values + 0.01 * rng.standard_normal((scans, draws, slices))
    return values, [(f"s{i}", j, k, values[i, j, k]) for i, j, k in np.ndindex(values.shape)]


def test_interval_is_student_t_on_scan_means():
    values, records = study(5)
    summary = summarise(records, direction="higher")
    means = values.mean(axis=(1, 2))
    wanted = stats.ttest_1samp(means, 0.0).confidence_interval(0.95)
    assert summary.mean == pytest.approx(means.mean())
    assert (summary.interval.low, summary.interval.high) == pytest.approx(tuple(wanted))
    assert summary.interval.method == "Student t"
    assert summary.interval.over == "5 scans"


def test_scans_count_equally_whatever_their_slices():
    records = [("a", 0, k, 1.0) for k in range(10)] + [("b", 0, 0, 0.0), ("c", 0, 0, 0.5)]
    assert summarise(records, direction="higher").mean == pytest.approx(0.5)


def test_range_and_worst_slice():
    _, records = study(3)
    records[17] = ("s1", 0, 9, 0.1)
    summary = summarise(records, direction="higher")
    assert summary.worst == summary.min == 0.1
    assert summary.worst_where == {"scan": "s1", "draw": 0, "slice": 9}
    assert summarise(records, direction="lower").worst == summary.max


def test_slices_without_value_are_skipped_and_counted():
    _, records = study(3)
    gaps = [*records, ("s0", 0, 7, None), ("s1", 2, 8, None)]
    summary = summarise(gaps, direction="higher")
    assert summary.skipped == 2
    assert summary.mean == summarise(records, direction="higher").mean
    assert summarise([("s0", 0, 0, None)], direction="higher") is None


def test_one_scan_has_an_interval_over_draws():
    values, records = study(1)
    summary = summarise(records, direction="higher")
    means = values.mean(axis=2)[0]
    wanted = stats.ttest_1samp(means, 0.0).confidence_interval(0.95)
    assert (summary.interval.low, summary.interval.high) == pytest.approx(tuple(wanted))
    assert summary.interval.over == "this scan, luck of the draw (5 draws)"


def test_two_scans_have_an_interval_over_draws():
    # Same standard error and degrees of freedom as Welch's test of scan 0 against scan 1.
    values, records = study(2)
    summary = summarise(records, direction="higher")
    first, second = values.mean(axis=2)
    wanted = stats.ttest_ind(first, second, equal_var=False).confidence_interval(0.95)
    width = (wanted.high - wanted.low) / 2
    assert summary.interval.high - summary.interval.low == pytest.approx(width)
    assert summary.interval.over.startswith("these 2 scans, luck of the draw")


def test_one_draw_of_one_scan_has_no_interval():
    assert summarise([("a", 0, 0, 0.9), ("a", 0, 1, 0.8)], direction="higher").interval is None


def test_infinite_values_have_no_interval():
    summary = summarise([(s, 0, 0, np.inf) for s in "abc"], direction="higher")
    assert summary.interval is None
    assert summary.mean == np.inf


def plain_bootstrap_t(values, rounds=2000, seed=0):
    """Davison and Hinkley's recipe in plain loops: scans, then draws, then studentise."""
    rng = np.random.default_rng(seed)
    means = values.mean(axis=1)
    errors = []
    for _ in range(rounds):
        scans = rng.choice(values, size=len(values))
        again = np.array([rng.choice(draws, size=draws.size).mean() for draws in scans])
        errors.append((again.mean() - means.mean()) / stats.sem(again))
    low, high = np.quantile(errors, [0.025, 0.975])
    return means.mean() - high * stats.sem(means), means.mean() - low * stats.sem(means)


def test_bootstrap_from_twenty_scans_on():
    values, records = study(20)
    summary = summarise(records, direction="higher")
    assert summary.interval.method == "hierarchical bootstrap-t"
    # The tail quantiles of 2,000 resamples wander by about 0.07 standard errors.
    low, high = plain_bootstrap_t(values.mean(axis=2))
    assert summary.interval.low == pytest.approx(low, abs=0.2 * summary.estimate.error)
    assert summary.interval.high == pytest.approx(high, abs=0.2 * summary.estimate.error)
    assert summary.as_dict() == summarise(records, direction="higher").as_dict()


def test_bootstrap_agrees_with_scipy_where_both_apply():
    # scipy.stats.bootstrap of scan means without spread of draws: its standard error is ours up to
    # sqrt((n - 1) / n), its bias-corrected interval lies inside the studentised one, which knows
    # of the error's own uncertainty.
    means = np.random.default_rng(3).normal(0.9, 0.02, 30)
    best = estimate({i: dict.fromkeys(range(5), m) for i, m in enumerate(means)})
    theirs = stats.bootstrap((means,), np.mean, rng=np.random.default_rng(0))
    assert best.error * np.sqrt(29 / 30) == pytest.approx(theirs.standard_error, rel=0.03)
    low, high = theirs.confidence_interval
    mine = best.interval()
    assert mine.low == pytest.approx(low, abs=0.25 * best.error)
    assert mine.high == pytest.approx(high, abs=0.25 * best.error)
    assert mine.high - mine.low > high - low


def test_bootstrap_p_values_match_its_intervals():
    _, records = study(20)
    best = summarise(records, direction="higher").estimate
    interval = best.interval(0.9)
    assert best.p_above(interval.low) == pytest.approx(0.05, abs=0.002)
    assert best.p_below(interval.high) == pytest.approx(0.05, abs=0.002)
    assert best.p_differs(interval.high) == pytest.approx(0.1, abs=0.004)


def test_bootstrap_takes_scans_with_different_numbers_of_draws():
    rng = np.random.default_rng(2)
    table = {i: {j: 5.0 + rng.standard_normal() for j in range(1 + i % 4)} for i in range(24)}
    best = estimate(table)
    assert best.method == "hierarchical bootstrap-t"
    interval = best.interval()
    assert interval.low < 5.0 < interval.high


def test_equal_values_give_an_interval_of_no_width():
    best = estimate({i: {0: 2.0, 1: 2.0} for i in range(25)})
    assert (best.interval().low, best.interval().high) == (2.0, 2.0)
    assert best.p_above(1.0) == 0.0
    assert best.p_above(2.0) == 1.0


@pytest.mark.parametrize("scans", [3, 5, 10, 20])
def test_nominal_intervals_cover_the_truth(scans):
    # 200 simulated studies (a tenth of tests/campaigns/test_coverage.py): 95 % +- 2.6 standard
    # errors of a binomial count, 4.0 points.
    hits = 0
    for seed in range(200):
        values, _ = study(scans, draws=5, slices=1, mean=0.0, seed=1000 * scans + seed)
        table = {i: dict(enumerate(row)) for i, row in enumerate(values[:, :, 0])}
        interval = estimate(table, seed=seed).interval()
        hits += interval.low <= 0.0 <= interval.high
    assert 182 <= hits <= 198


@pytest.mark.parametrize("scans", [3, 5, 10, 20])
def test_intervals_of_paired_differences_cover_the_truth(scans):
    # As above, with what arms share (three times as large, skewed) cancelling in the difference.
    hits = 0
    for seed in range(200):
        rng = np.random.default_rng([8, scans, seed])
        common = 3.0 * rng.exponential(size=(scans, 1)) + rng.standard_normal((scans, 5))
        effect = 0.4 + rng.standard_normal((scans, 1)) + 0.5 * rng.standard_normal((scans, 5))
        arm, baseline = (
            [(i, j, 0, float(v)) for (i, j), v in np.ndenumerate(values)]
            for values in (common + effect, common)
        )
        interval = compare(arm, baseline, seed=seed).interval
        hits += interval.low <= 0.4 <= interval.high
    assert 182 <= hits <= 198


def test_paired_difference_is_the_paired_t_test():
    one, ours = study(6, seed=1)
    two, theirs = study(6, seed=2)
    comparison = compare(ours, theirs)
    wanted = stats.ttest_rel(one.mean(axis=(1, 2)), two.mean(axis=(1, 2)))
    assert comparison.p == pytest.approx(wanted.pvalue)
    low, high = wanted.confidence_interval(0.95)
    assert (comparison.interval.low, comparison.interval.high) == pytest.approx((low, high))


def test_pairing_takes_out_what_scans_share():
    _, records = study(5)
    better = [(scan, draw, where, value + 0.001) for scan, draw, where, value in records]
    comparison = compare(better, records)
    assert comparison.estimate.mean == pytest.approx(0.001)
    assert comparison.estimate.error < 1e-12


def test_an_arm_with_one_draw_is_held_against_every_draw():
    values, ours = study(1)
    regular = [("s0", 0, k, 0.5) for k in range(3)]
    comparison = compare(ours, regular)
    assert comparison.estimate.draws == 5
    assert comparison.estimate.mean == pytest.approx(values.mean() - 0.5)
    assert compare(regular, ours).estimate.mean == pytest.approx(0.5 - values.mean())


def test_slices_named_by_dicts_are_paired():
    ours = [("a", d, {"index": k, "frame": 0}, 1.0 + d + k) for d in range(2) for k in range(2)]
    theirs = [("a", d, {"frame": 0, "index": k}, float(d + k)) for d in range(2) for k in range(2)]
    assert compare(ours, theirs).estimate.mean == 1.0


def test_holm_worked_by_hand():
    # .005 x 4 = .02; .01 x 3 = .03; .03 x 2 = .06; .04 x 1 = .04, raised to .06 (Holm 1979).
    assert holm([0.01, 0.04, 0.03, 0.005]) == pytest.approx([0.03, 0.06, 0.06, 0.02])
    assert holm([0.5, 0.9]) == [1.0, 1.0]
    with_gap = holm([0.02, float("nan")])
    assert with_gap[0] == 0.02
    assert np.isnan(with_gap[1])


def test_arms_are_corrected_together():
    _, base = study(6)
    arms = {str(seed): study(6, mean=0.9 + 0.01 * seed, seed=seed)[1] for seed in (1, 2, 3)}
    compared = compare_arms(arms, base)
    assert [c.p_holm for c in compared.values()] == holm([c.p for c in compared.values()])
    for name, comparison in compared.items():
        wanted = compare(arms[name], base, level=1 - 0.05 / 3).interval
        assert comparison.simultaneous == wanted
        assert comparison.arms == 3


def test_non_inferiority_is_the_one_sided_bound():
    one, ours = study(8, seed=3)
    two, theirs = study(8, mean=0.91, seed=4)
    comparison = compare(ours, theirs)
    difference = one.mean(axis=(1, 2)) - two.mean(axis=(1, 2))
    wanted = stats.ttest_1samp(difference, -0.05, alternative="greater")
    claim = non_inferiority(comparison, 0.05, "higher")
    assert claim.p == pytest.approx(wanted.pvalue)
    assert claim.bound == pytest.approx(wanted.confidence_interval(0.975).low)
    assert (claim.status == "pass") == (claim.p <= 0.025)
    flipped = non_inferiority(compare(theirs, ours), 0.05, "lower")
    assert flipped.bound == pytest.approx(-claim.bound)
    assert flipped.status == claim.status


def test_equivalence_is_two_one_sided_tests():
    # Schuirmann 1987: both one-sided 5 % tests, here scipy's.
    _, ours = study(8, seed=3)
    _, theirs = study(8, seed=4)
    comparison = compare(ours, theirs)
    difference = [study(8, seed=3)[0].mean(axis=(1, 2)) - study(8, seed=4)[0].mean(axis=(1, 2))][0]
    for margin in (0.005, 0.02, 0.05):
        claim = equivalence(comparison, margin)
        p_low = stats.ttest_1samp(difference, -margin, alternative="greater").pvalue
        p_high = stats.ttest_1samp(difference, margin, alternative="less").pvalue
        assert claim.p == pytest.approx(max(p_low, p_high))
        assert (claim.status == "pass") == (claim.p < 0.05)


def test_equivalence_fails_where_the_interval_is_wholly_outside():
    _, ours = study(8, mean=0.5)
    _, theirs = study(8, seed=1)
    assert equivalence(compare(ours, theirs), 0.01).status == "fail"


def test_verdict_passes_fails_and_stays_undecided():
    values, records = study(5)
    summaries = {"ssim": summarise(records, direction="higher")}
    interval = summaries["ssim"].interval
    assert verdict(summaries, {"ssim_min": interval.low}).status == "pass"
    assert verdict(summaries, {"ssim_min": interval.high + 1e-9}).status == "fail"
    assert verdict(summaries, {"ssim_min": summaries["ssim"].mean}).status == "undecided"
    both = verdict(summaries, {"ssim_min": interval.low, "ssim_worst": 0.95})
    assert both.status == "fail"
    assert [limit.status for limit in both.limits] == ["pass", "fail"]
    assert both.limits[1].value == values.min()
    assert both.limits[1].margin == pytest.approx(values.min() - 0.95)
    assert "5 scans (Student t)" in both.confidence


def test_lower_is_better_turns_the_limit():
    _, records = study(5, mean=0.1)
    summaries = {"nrmse": summarise(records, direction="lower")}
    interval = summaries["nrmse"].interval
    assert verdict(summaries, {"nrmse_max": interval.high}).status == "pass"
    assert verdict(summaries, {"nrmse_max": interval.low - 1e-9}).status == "fail"


@pytest.mark.parametrize("scans", [1, 2])
def test_few_scans_pass_on_this_scan_at_most(scans):
    _, records = study(scans)
    summaries = {"ssim": summarise(records, direction="higher")}
    result = verdict(summaries, {"ssim_min": 0.5, "ssim_worst": 0.5})
    assert result.status == "pass on this scan"
    assert "no claim beyond" in result.confidence


def test_one_draw_of_one_scan_passes_on_this_scan():
    summaries = {"ssim": summarise([("a", 0, 0, 0.9)], direction="higher")}
    result = verdict(summaries, {"ssim_min": 0.5})
    assert result.status == "pass on this scan"
    assert result.confidence.startswith("One draw of this scan")


def test_confidence_speaks_of_the_measures_with_most_draws():
    _, records = study(1, draws=4)
    summaries = {
        "ssim": summarise(records, direction="higher"),
        "noise_ratio": summarise([r for r in records if r[1] == 0], direction="lower"),
    }
    told = verdict(summaries, {}).confidence
    assert "luck of the draw (4 draws)" in told
    assert told.endswith("Measures of one draw have no interval.")


def test_margins_compare_with_the_baseline():
    _, ours = study(8, seed=3)
    _, theirs = study(8, seed=4)
    summaries = {"ssim": summarise(ours, direction="higher")}
    comparisons = {"ssim": compare(ours, theirs)}
    wide = verdict(summaries, {"ssim_margin": 0.2, "ssim_equivalence": 0.2}, comparisons)
    assert wide.status == "pass"
    assert wide.limits[0].margin == pytest.approx(0.2 + comparisons["ssim"].estimate.mean)
    assert verdict(summaries, {"ssim_margin": 1e-6}, comparisons).status != "pass"


def test_a_measure_without_any_value_is_undecided():
    _, records = study(3)
    summaries = {
        "ssim": summarise(records, direction="higher"),
        "edge_blur": summarise([("s0", 0, 0, None)], direction="lower"),
    }
    result = verdict(summaries, {"ssim_min": 0.0, "edge_blur_max": 1.2})
    assert [one.status for one in result.limits] == ["pass", "undecided"]
    assert np.isnan(result.limits[1].value)
    assert result.status == "undecided"


def test_no_limits_give_no_decision():
    _, records = study(3)
    result = verdict({"ssim": summarise(records, direction="higher")}, {})
    assert result.status == "undecided"
    assert result.confidence.startswith("No acceptance limits")


def test_bad_input_is_refused():
    _, records = study(3)
    summaries = {"ssim": summarise(records, direction="higher")}
    with pytest.raises(QualityError, match="'ssim_maxx' is not known"):
        verdict(summaries, {"ssim_maxx": 1.0})
    with pytest.raises(QualityError, match=r"NRMSE has a limit but was not measured"):
        verdict(summaries, {"nrmse_max": 1.0})
    with pytest.raises(QualityError, match="ssim_margin compares with a baseline"):
        verdict(summaries, {"ssim_margin": 0.1})
    with pytest.raises(QualityError, match="margin is None"):
        non_inferiority(compare(records, records), None, "higher")
    with pytest.raises(QualityError, match=r"margin is -1.0"):
        equivalence(compare(records, records), -1.0)
    with pytest.raises(QualityError, match="no slice of a scan in common"):
        compare(records, [("other", 0, 0, 1.0)])
    with pytest.raises(QualityError, match="different draws of one scan"):
        compare(records, [("s0", j, 0, 1.0) for j in (7, 8)])
    with pytest.raises(QualityError, match=r"not a number(.|\n)*scan s0, draw 1, slice 2"):
        summarise([("s0", 1, 2, float("nan"))], direction="lower")
    with pytest.raises(QualityError, match="Direction 'up'"):
        summarise(records, direction="up")
