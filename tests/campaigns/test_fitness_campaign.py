"""False findings and detection rates of the fitness checks on invented knees, in full.

Run: ``pytest tests/campaigns/test_fitness_campaign.py -s``; prints the tables behind the bars and
the detection curves. ``tests/scan/test_fitness_rates.py`` is its tenth in the default suite.

Bars: on 200 clean scans of SNR 10 to 100 each check finds something in less than 2 %; of
manipulated complex scans at least 95 % are found and the measured matrix is right to 2 %; of
magnitude scans at least 90 %, to 5 %.
"""

from __future__ import annotations

from collections import Counter
from concurrent.futures import ThreadPoolExecutor
from functools import cache, partial

import numpy as np
import pytest
from scan_manipulations import (
    CASES,
    Case,
    as_scan,
    axes_of,
    fermi,
    jpeg,
    linear_shift,
    manipulated,
    noisy,
    partial_fourier,
    tukey,
    window,
    zero_fill,
)

from mrics.numerics import stream
from mrics.phantom.record import Geometry, echo_train_slices, gradient_echo_volume
from mrics.phantom.sample import GRE, TSE, subjects
from mrics.scan import body_mask, inspect_scan

pytestmark = pytest.mark.slow
CLEAN_SEEDS = 200
CASE_SEEDS = 20
CURVE_SEEDS = 6


@cache
def objects() -> tuple[tuple[str, np.ndarray], ...]:
    """Noise-free scans of two subjects by both sequences, mean magnitude in the body 100."""
    made = []
    for subject in subjects()[:2]:
        dx, dy, dz = subject.shift_mm
        grid = Geometry((112, 128, 30), (1.05, 1.05, 3.6), "zyx", (4.0 + dz, -1.5 + dy, dx))
        made.append(("gre3d", gradient_echo_volume(subject.knee, grid, GRE, factor=(2, 2, 2))))
        grid = Geometry((160, 144, 12), (0.77, 0.77, 5.0), "zxy", (2.0 + dz, dx, dy))
        made.append(("tse2d", echo_train_slices(subject.knee, grid, TSE)))
    return tuple((name, x * np.float32(100 / np.abs(x)[body_mask(x)].mean())) for name, x in made)


def draw(seed: int) -> tuple[str, np.ndarray, float]:
    """One clean scan: object by turns, SNR log-uniform in 10 ... 100."""
    name, clean = objects()[seed % len(objects())]
    snr = float(10 ** stream(seed, "snr").uniform(1.0, 2.0))
    return name, noisy(clean, 100 / snr, seed), snr


def codes(x: np.ndarray, name: str) -> list[tuple[str, float]]:
    """Findings, with the measured share of the axis for zero-filling."""
    told = []
    for f in inspect_scan(as_scan(x), axes_of(name)):
        share = 0.0
        if f.code == "zero-filled":
            ((letter, count),) = f.settings
            share = int(str(count)) / x.shape["ijk".index(str(letter))]
        told.append((f.code, share))
    return told


def over(seeds: range, work: object) -> list:
    with ThreadPoolExecutor(2) as pool:
        return list(pool.map(work, seeds))  # type: ignore[arg-type]


@pytest.mark.parametrize("magnitude", [False, True], ids=["complex", "magnitude"])
def test_false_findings_on_clean_scans(magnitude: bool) -> None:
    def one(seed: int) -> set[str]:
        name, x, _ = draw(seed)
        return {code for code, _ in codes(np.abs(x) if magnitude else x, name)}

    counts = Counter(code for found in over(range(CLEAN_SEEDS), one) for code in found)
    expected = counts.pop("magnitude-only", 0)
    assert expected == (CLEAN_SEEDS if magnitude else 0)
    print(f"\nclean {'magnitude' if magnitude else 'complex'}: {dict(counts)} of {CLEAN_SEEDS}")
    assert all(count < 0.02 * CLEAN_SEEDS for count in counts.values()), counts


@pytest.mark.parametrize("magnitude", [False, True], ids=["complex", "magnitude"])
@pytest.mark.parametrize("case", CASES, ids=[case.name for case in CASES])
def test_detection(case: Case, magnitude: bool) -> None:
    def one(seed: int) -> tuple[bool, list[float]]:
        name, x, _ = draw(1000 + seed)
        found = codes(manipulated(case, x, magnitude), name)
        hit = any(code in case.codes for code, _ in found)
        return hit, [share / case.true_share for code, share in found if case.true_share and share]

    results = over(range(CASE_SEEDS), one)
    rate = np.mean([hit for hit, _ in results])
    ratios = [r for _, found in results for r in found]
    span = f", matrix {min(ratios):.3f} to {max(ratios):.3f} of the true one" if ratios else ""
    print(f"\n{case.name}, {'magnitude' if magnitude else 'complex'}: {rate:.0%}{span}")
    if magnitude and case.complex_only:
        return
    assert rate >= (0.90 if magnitude else 0.95)
    tolerance = 0.05 if magnitude else 0.02
    if ratios:
        assert np.mean(np.abs(np.array(ratios) - 1) <= tolerance) >= (0.90 if magnitude else 0.95)


CURVES = {
    "zero-filled": (lambda s: partial(zero_fill, factor=s, axes=(0, 1)), (1.03, 1.06, 1.1, 1.15)),
    "trilinear": (lambda s: partial(linear_shift, distance=s, axes=(0, 1, 2)), (0.03, 0.06, 0.1)),
    "Tukey": (lambda s: partial(window, shape=tukey(s), axes=(0, 1)), (0.03, 0.06, 0.1, 0.2)),
    "Fermi": (lambda s: partial(window, shape=fermi(s), axes=(0, 1)), (0.98, 1.02, 1.06)),
    "partial Fourier": (lambda s: partial(partial_fourier, share=s, axis=1), (0.9, 0.95, 0.98)),
    "JPEG": (lambda s: partial(jpeg, quality=s), (97, 98, 99, 100)),
}
CODES = {
    "zero-filled": ("zero-filled",),
    "trilinear": ("resampled", "filtered"),
    "Tukey": ("resampled", "filtered"),
    "Fermi": ("resampled", "filtered"),
    "partial Fourier": ("partial-fourier",),
    "JPEG": ("block-compression",),
}


@pytest.mark.parametrize("kind", sorted(CURVES))
def test_detection_curve(kind: str) -> None:
    """Prints the rate against strength below the bars; nothing is detected at strength nil."""
    make, strengths = CURVES[kind]
    for magnitude in (False, True):
        rates = []
        for strength in strengths:
            case = Case(kind, make(strength), CODES[kind], after_magnitude=kind == "JPEG")

            def one(seed: int, case: Case = case, magnitude: bool = magnitude) -> bool:
                name, x, _ = draw(2000 + seed)
                found = codes(manipulated(case, x, magnitude), name)
                return any(code in case.codes for code, _ in found)

            rates.append(f"{strength:g}: {np.mean(over(range(CURVE_SEEDS), one)):.0%}")
        print(f"\n{kind}, {'magnitude' if magnitude else 'complex'}: {', '.join(rates)}")
