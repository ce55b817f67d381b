"""Acquisitions of small invented planes, for recovery tests."""

import numpy as np
import pytest
from invented_planes import blobs

from mrics.encoding import undersample
from mrics.sampling import draw_pattern


@pytest.fixture
def planes():
    return blobs()


@pytest.fixture
def lines():
    """A 1-D acquisition of complex128 planes, R = 2.5, 40 = 5 x 8 lines, noise 0.02."""
    pattern = draw_pattern((40,), acceleration=2.5, calibration=8, seed=3)
    return undersample(blobs(), pattern, sigma=0.02, seed=1)


@pytest.fixture
def points():
    """A 2-D acquisition of complex64 planes, R = 3, noise 0.02."""
    pattern = draw_pattern((40, 48), acceleration=3, calibration=10, seed=4)
    return undersample(blobs().astype(np.complex64), pattern, sigma=0.02, seed=1)
