"""Patterns ranked before any recovery is chosen."""

import numpy as np
import pytest
from chains import body, full, phantom

from mrics.errors import QualityError
from mrics.quality import rank_patterns
from mrics.sampling import Pattern


def block(width):
    mask = np.zeros((64, 48), bool)
    mask[32 - width : 32 + width, 24 - 12 : 24 + 12] = True
    return Pattern(mask)


def test_rows_hold_both_tasks_side_by_side():
    image = phantom((4, 64, 48))
    rng = np.random.default_rng(0)
    image = image + 0.1 * (rng.standard_normal(image.shape) + 1j * rng.standard_normal(image.shape))
    patterns = {"full": full((64, 48)), "wide": block(16), "narrow": block(6)}
    rows = rank_patterns(
        patterns, image, (1.0, 1.0), 0.05, sizes_mm=(2.0, 4.0), mask=body((4, 64, 48))
    )
    assert len(rows) == 3 * 2 * 2
    for task in ("detection", "two-against-one"):
        for size in (2.0, 4.0):
            ranks = {
                r["pattern"]: r["rank"] for r in rows if (r["task"], r["size_mm"]) == (task, size)
            }
            # Nested patterns: more samples never hold less.
            assert ranks == {"full": 1, "wide": 2, "narrow": 3}
    assert all(0 < r["d_prime"] <= r["noise_only"] for r in rows)
    assert rows[0]["acceleration"] == 1.0


def test_nothing_to_rank():
    with pytest.raises(QualityError, match="0 patterns and 3 sizes"):
        rank_patterns({}, phantom(), (1.0, 1.0), 0.05)
