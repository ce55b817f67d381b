"""The table of measures and the acceptance keys made from it."""

import numpy as np
import pytest

from mrics import quality
from mrics.errors import QualityError
from mrics.quality import METRICS, acceptance_key, acceptance_keys, score


def test_every_score_has_an_entry():
    image = np.ones((1, 8, 8), complex)
    assert set(score(image, image)) <= set(METRICS)


def test_entries_are_complete():
    for name, metric in METRICS.items():
        assert metric.direction in ("lower", "higher"), name
        assert metric.definition, name
        assert metric.unit, name
        assert metric.plain.endswith("."), name


def test_acceptance_keys_follow_the_direction():
    keys = acceptance_keys()
    assert (keys["ssim_min"].metric, keys["ssim_min"].side) == ("ssim", "min")
    assert keys["nrmse_max"].side == "max"
    assert keys["ssim_worst"].kind == "worst"
    assert keys["ssim_margin"].kind == "margin"
    assert keys["ssim_worst"].side == "min"
    assert "ssim_max" not in keys


def test_unknown_acceptance_key_names_the_nearest():
    with pytest.raises(QualityError, match=r"'ssim_mim' is not known(.|\n)*'ssim_min'"):
        acceptance_key("ssim_mim")


def test_public_names():
    for name in quality.__all__:
        assert getattr(quality, name) is not None
    with pytest.raises(AttributeError, match="no attribute 'mean'"):
        _ = quality.mean
