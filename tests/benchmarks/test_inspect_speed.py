"""Time of a full inspection of a 256 x 256 x 160 scan: ``pytest -s`` this file. Bar: 10 s."""

from __future__ import annotations

import time

import numpy as np
from scan_manipulations import as_scan, sample
from scipy import ndimage

from mrics.numerics import stream
from mrics.scan import Axes, inspect_fully


def test_inspection_of_a_large_scan() -> None:
    small = sample("sub-a_acq-gre3d", 56)
    factors = [n / m for n, m in zip((256, 256, 160), small.shape, strict=True)]
    parts = stream(0, "large").standard_normal((2, 256, 256, 160), np.float32) * 3
    data = parts[0] + 1j * parts[1]
    data.real += ndimage.zoom(small.real, factors, order=1)
    data.imag += ndimage.zoom(small.imag, factors, order=1)
    print()
    for name, volume in (("magnitude", np.abs(data)), ("complex", data)):
        scan = as_scan(volume)
        start = time.perf_counter()
        inspect_fully(scan, Axes("i", "j", "k"))
        print(f"{name}: {time.perf_counter() - start:.1f} s")
