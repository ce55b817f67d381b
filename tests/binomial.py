"""Exact binomial test, shared by the default suite and the campaign."""

import numpy as np
from scipy.stats import binom


def smallest_p_value(hits, p, trials):
    """Smallest two-sided exact p-value: outcomes no likelier than the one seen (Fisher)."""
    smallest = 1.0
    outcomes = np.arange(trials + 1)
    for probability in np.unique(p):
        mass = binom.pmf(outcomes, trials, probability)
        order = np.argsort(mass)
        total = np.cumsum(mass[order])
        for seen in np.unique(hits[p == probability]):
            tie = mass[order] <= mass[seen] * (1 + 1e-9)
            smallest = min(smallest, float(total[np.flatnonzero(tie)[-1]]))
    return smallest
