"""What would decide an undecided limit: more draws, or more scans, and how many."""

from __future__ import annotations

import math
from collections.abc import Hashable, Mapping

_MOST = 1000


def what_would_decide(
    table: Mapping[Hashable, Mapping[Hashable, float]], limit: float, level: float = 0.95
) -> str:
    """Advice on a limit that lies inside the interval of a scan mean.

    The variance of the mean over S scans of D draws is (b + w / D) / S, with b between scans and w
    between the draws of one scan. More draws are advised only where b alone leaves an interval that
    excludes the limit; the numbers assume that mean and variances stay as they are.

    Parameters
    ----------
    table : mapping of scan to mapping of draw to float
        Mean of the metric for every scan and draw.
    limit : float
        The limit.
    level : float
        Two-sided level of the interval.

    Returns
    -------
    str
        One sentence.
    """
    scans = [list(draws.values()) for draws in table.values()]
    count = len(scans)
    draws = min(len(values) for values in scans)
    means = [sum(values) / len(values) for values in scans]
    mean = sum(means) / count
    gap = abs(mean - limit)
    within = _within(scans)
    if gap == 0:
        return "The mean lies on the limit: no number of scans or draws decides it."
    if count < 3 and draws == 1:
        return (
            "One draw tells no spread: several draws of a random pattern, or 3 scans or more, "
            "would."
        )
    if count < 3:
        needed = _enough(within, gap, level, 2)
        more = f"About {needed} draws" if needed else "More draws than is practical"
        return f"{more} would decide it for this scan; 3 scans or more allow a claim beyond it."
    spread = sum((m - mean) ** 2 for m in means) / (count - 1)
    between = max(0.0, spread - within / draws)
    if draws > 1 or within > 0:
        for number in range(draws + 1, _MOST):
            if _half_width(between + within / number, count, level) < gap:
                return f"About {number} draws would decide it; scans differ little."
    needed = _enough(spread, gap, level, count + 1)
    if not needed:
        return f"More than {_MOST} scans would be needed: the mean is too close to the limit."
    return f"About {needed} scans would decide it; more draws would not."


def _within(scans: list[list[float]]) -> float:
    """Pooled variance of the draws of one scan."""
    squares, freedom = 0.0, 0
    for values in scans:
        mean = sum(values) / len(values)
        squares += sum((v - mean) ** 2 for v in values)
        freedom += len(values) - 1
    return squares / freedom if freedom else 0.0


def _half_width(variance: float, count: int, level: float) -> float:
    from scipy.stats import t

    return float(t.ppf(0.5 + level / 2, count - 1)) * math.sqrt(variance / count)


def _enough(variance: float, gap: float, level: float, least: int) -> int:
    for number in range(least, _MOST):
        if _half_width(variance, number, level) < gap:
            return number
    return 0
