"""Cost of receive channels: recoveries against their FFTs, estimation, memory.

Run with ``pytest tests/benchmarks/test_encoding_speed.py``; prints figures, asserts none.
"""

import resource
import subprocess
import sys
import threading
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import scipy.fft
from timing import fastest

from mrics.encoding import estimate_sensitivities, undersample
from mrics.encoding.coils import simulate_coils
from mrics.recovery import METHODS, recover
from mrics.sampling import draw_pattern

PLANES, SIDE, CHANNELS, ITERATIONS = 16, 256, 8, 20


def objects(planes=PLANES):
    rng = np.random.default_rng(0)
    y, x = np.mgrid[-1 : 1 : SIDE * 1j, -1 : 1 : SIDE * 1j]
    image = np.zeros((planes, SIDE, SIDE), np.complex64)
    for plane in range(planes):
        for _ in range(20):
            cy, cx = rng.uniform(-0.6, 0.6, 2)
            image[plane] += rng.uniform(0.1, 0.5) * (
                (x - cx) ** 2 + (y - cy) ** 2 < rng.uniform(0.03, 0.3) ** 2
            )
    return image * np.exp(1j * (x + y * y)).astype(np.complex64)


def acquired(pattern, planes=PLANES, known=True):
    maps = simulate_coils((planes, SIDE, SIDE), (2.0, 1.0, 1.0), number=CHANNELS).sensitivities[:]
    made = undersample(objects(planes), pattern, 0.01, 1, sensitivities=maps)
    if not known:
        object.__setattr__(made, "sensitivities", None)
    return made


@pytest.mark.parametrize("axes", [1, 2])
def test_least_squares_against_its_ffts(axes, figure):
    """Bar: at most 1.7. A pattern along u alone needs transforms along u alone."""
    pattern = draw_pattern((SIDE,) * axes, acceleration=4, calibration=24, seed=1)
    data = acquired(pattern)
    stack = np.ones((PLANES * CHANNELS, SIDE, SIDE), np.complex64)

    def pair(which):
        middle = scipy.fft.fftn(stack, axes=which, norm="ortho", workers=2)
        scipy.fft.ifftn(middle, axes=which, norm="ortho", workers=2)

    def run():
        recover(data, "least-squares", iterations=ITERATIONS, tolerance=1e-30, damping=0.0)

    run()
    wall, needed = np.inf, {}
    for _ in range(5):  # interleaved, so that both see the same load
        wall = min(wall, fastest(run, 1))
        for which in ((-2, -1), (-2,)):
            once = fastest(lambda w=which: pair(w), 3)
            needed[which] = min(needed.get(which, np.inf), once)
    for which, one in needed.items():
        if axes == 2 and which == (-2,):
            continue
        along = "u" if len(which) == 1 else "u and v"
        name = f"least-squares, 8 channels, {axes}-D pattern / its FFT pairs along {along}"
        figure(name, f"{wall / (ITERATIONS * one):.2f} x ({wall:.2f} s)", "1.7 x")


def test_sensitivities_by_plane(figure):
    """Bar: 1.5 s for one plane, and batches in proportion."""
    data = acquired(draw_pattern((SIDE,) * 2, acceleration=4, calibration=24, seed=1), known=False)
    estimate_sensitivities(data, slice(0, 1))
    for planes in (1, 2, 4, 8, 16):
        part = slice(0, planes)
        begun = time.process_time()
        wall = fastest(lambda part=part: estimate_sensitivities(data, part), 3)
        busy = (time.process_time() - begun) / (3 * planes)
        figure(
            f"maps of {planes} plane(s) of 256 x 256, 8 channels, a plane",
            f"{wall / planes:.2f} s ({busy:.2f} s of processor)",
            "1.5 s for one",
        )


@pytest.mark.parametrize("known", [True, False])
def test_kernel_by_plane(known, figure):
    """Bar: 0.5 s a plane (R = 3)."""
    pattern = draw_pattern((SIDE,), pattern="equispaced", acceleration=3, calibration=24)
    data = acquired(pattern, known=known)
    for combine in ("sensitivities", "root-sum-of-squares"):
        recover(data, "kernel", combine=combine)
        wall = fastest(lambda combine=combine: recover(data, "kernel", combine=combine), 3)
        maps = "maps given" if known else "maps estimated"
        figure(f"kernel, R = 3, {combine}, {maps}, a plane", f"{wall / PLANES:.2f} s", "0.5 s")


SHAPE = (256, CHANNELS, 256, 160)
#: few iterations: memory does not grow with their number
FEW = {
    "least-squares": {"iterations": 2},
    "pocs": {"iterations": 2},
    "wavelet": {"iterations": 2, "weight": 1.0},
    "variation": {"iterations": 2, "weight": 1.0},
    "wavelet+variation": {"iterations": 2, "weight": 1.0},
    "low-rank": {"iterations": 2, "weight": 1.0},
    "dictionary": {"iterations": 1, "source": "dct", "start": "zero-filled", "most_atoms": 1},
}


def _pattern(method):
    if method in ("homodyne", "pocs"):
        return draw_pattern(SHAPE[2:], pattern="full", acceleration=1, partial_fourier=[0.75, 1.0])
    made = draw_pattern(
        SHAPE[2:], pattern="equispaced", steps=[2, 1], acceleration=2, calibration=24
    )
    if method == "low-rank":  # two frames of 128 planes, alike
        return replace(made, mask=np.stack([made.mask, made.mask]), frames=2, order=None)
    return made


def _write(path, method):
    """A 256 x 256 x 160 object of 8 channels under the pattern, 671 MB, readout by readout."""
    pattern = _pattern(method if method in ("homodyne", "pocs") else "")
    coils = simulate_coils((SHAPE[0], *SHAPE[2:]), (1.0, 1.0, 1.0), number=CHANNELS).sensitivities
    whole = np.lib.format.open_memmap(path, mode="w+", dtype=np.complex64, shape=SHAPE)
    y, x = np.mgrid[-1:1:256j, -1:1:160j]
    for first in range(0, SHAPE[0], 16):
        z = (np.arange(first, first + 16)[:, None, None] - 128) / 128
        inside = (x**2 + y**2 < 0.7 - 0.5 * z**2) * (1 + 0.3 * np.sin(12 * x) * np.cos(9 * y))
        part = undersample(
            inside.astype(np.complex64), pattern, 0.01, first,
            sensitivities=coils[first : first + 16],
        )  # fmt: skip
        whole[first : first + 16] = part.kspace
    whole.flush()


def _peak_of(path, method):
    """Recover in this process and print its largest anonymous and its largest total memory."""
    from mrics.encoding import acquisition_from_kspace

    peak, done = [0], threading.Event()

    def watch():
        while not done.wait(0.005):
            text = Path("/proc/self/status").read_text()
            line = next(row for row in text.splitlines() if row.startswith("RssAnon"))
            peak[0] = max(peak[0], int(line.split()[1]))

    threading.Thread(target=watch, daemon=True).start()
    started = time.perf_counter()
    acquisition = acquisition_from_kspace(
        path, _pattern(method), channel_axis=1, readout_transformed=True
    )
    recover(acquisition, method, **FEW.get(method, {}))
    done.set()
    whole = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    print(
        f"{method}: {peak[0] / 2**20:.2f} GiB (resident with the file's pages "
        f"{whole / 2**20:.2f} GiB; {time.perf_counter() - started:.0f} s)"
    )


@pytest.mark.parametrize("method", sorted(METHODS))
def test_memory_beside_a_mapped_file(method, tmp_path, figure):
    """Bar: 1 GiB beside the 671 MB of the file; anonymous memory leaves the file's pages out."""
    path = tmp_path / "kspace.npy"
    for task in ("write", "recover"):
        done = subprocess.run(
            [sys.executable, __file__, task, str(path), method], text=True, capture_output=True
        )
        assert done.returncode == 0, done.stderr[-2000:]
    path.unlink()
    _, _, said = done.stdout.strip().partition(": ")
    figure(f"{method}, memory beside a mapped file of 0.62 GiB", said, "1 GiB")


if __name__ == "__main__":
    {"write": _write, "recover": _peak_of}[sys.argv[1]](*sys.argv[2:])
