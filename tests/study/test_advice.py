"""What would decide an undecided limit, against scipy's t quantiles."""

import numpy as np
import pytest
from scipy.stats import t

from mrics.study.advice import what_would_decide


def half_width(variance: float, scans: int) -> float:
    return float(t.ppf(0.975, scans - 1)) * (variance / scans) ** 0.5


def table(scan_spread: float, draw_spread: float, draws: int = 4) -> dict[str, dict[int, float]]:
    rng = np.random.default_rng(5)
    scans = 0.9 + scan_spread * np.array([-1.0, 0.2, 0.8])
    noise = rng.standard_normal((3, draws))
    noise -= noise.mean(axis=1, keepdims=True)
    return {
        f"s{n}": {d: float(scans[n] + draw_spread * noise[n, d]) for d in range(draws)}
        for n in range(3)
    }


def test_scans_that_differ_ask_for_more_scans() -> None:
    values = table(0.03, 0.0001)
    means = [np.mean(list(v.values())) for v in values.values()]
    gap = 0.01
    advice = what_would_decide(values, float(np.mean(means)) - gap)
    variance = float(np.var(means, ddof=1))
    needed = next(n for n in range(4, 1000) if half_width(variance, n) < gap)
    assert advice.startswith(f"About {needed} scans")
    assert "more draws would not" in advice


def test_draws_that_differ_ask_for_more_draws() -> None:
    rng = np.random.default_rng(1)
    values = {f"s{n}": dict(enumerate(0.9 + 0.02 * rng.standard_normal(3))) for n in range(3)}
    means = [np.mean(list(v.values())) for v in values.values()]
    advice = what_would_decide(values, float(np.mean(means)) + 0.004)
    assert "draws would decide it; scans differ little" in advice


def test_one_scan_claims_nothing_beyond_it() -> None:
    values = {"only": dict(enumerate([0.90, 0.92, 0.94]))}
    advice = what_would_decide(values, 0.91)
    needed = next(n for n in range(2, 1000) if half_width(0.0004, n) < 0.01)
    assert advice.startswith(f"About {needed} draws")
    assert "3 scans or more" in advice


def test_one_draw_of_one_scan_tells_no_spread() -> None:
    advice = what_would_decide({"only": {0: 0.9}}, 0.95)
    assert advice.startswith("One draw tells no spread")


def test_a_mean_on_the_limit_cannot_be_decided() -> None:
    assert "no number" in what_would_decide({"s": {0: 1.0, 1: 1.0}}, 1.0)


def test_too_close_a_limit_is_said() -> None:
    values = table(0.03, 0.0001)
    mean = float(np.mean([np.mean(list(v.values())) for v in values.values()]))
    assert "too close" in what_would_decide(values, mean + 1e-6)


@pytest.mark.parametrize("scans", [3, 5])
def test_equal_draws_need_no_draws_at_all(scans: int) -> None:
    values = {f"s{n}": {0: 0.9 + 0.01 * n} for n in range(scans)}
    assert "scans" in what_would_decide(values, 0.9 + 0.005 * (scans - 1) + 0.004)
