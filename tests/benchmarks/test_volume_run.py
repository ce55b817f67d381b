"""A whole volume: 256 x 256 x 160, 8 channels, 3-D pattern R = 6, wavelet to its tolerance.

The data (671 MB, memory-mapped) are made in a temporary folder; a process of its own recovers them
and reports wall time, processor time and the largest anonymous memory, which is all that is not the
mapped data (interpreter, libraries, workspace and the 84 MB image included).
Bars: under 4 minutes on 2 cores, under 1 GiB.
Run: ``pytest -n 0 -s tests/benchmarks/test_volume_run.py``.
"""

import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np

from mrics.numerics import centred_fft, stream
from mrics.sampling import draw_pattern

READOUT, PHASE, PARTITION, CHANNELS, SIGMA = 256, 256, 160, 8, 0.02

CHILD = """
import json, sys, threading, time
from dataclasses import replace
import numpy as np
from mrics.encoding import acquisition_from_kspace
from mrics.recovery import recover
from mrics.sampling import draw_pattern

folder, sigma = sys.argv[1], float(sys.argv[2])
peak, over = [0], threading.Event()

def watch():
    while not over.wait(0.05):
        with open("/proc/self/status") as status:
            line = next(one for one in status if one.startswith("RssAnon"))
        peak[0] = max(peak[0], int(line.split()[1]) * 1024)

threading.Thread(target=watch, daemon=True).start()
maps = np.load(folder + "/maps.npy")
pattern = draw_pattern(maps.shape[2:], acceleration=6, calibration=24, seed=1)
acquisition = acquisition_from_kspace(
    folder + "/kspace.npy", pattern, channel_axis=1, readout_transformed=True
)
acquisition = replace(acquisition, sensitivities=maps, sigma_scan=sigma, covariance=None)
started, cpu = time.perf_counter(), time.process_time()
result = recover(acquisition, "wavelet", shift="none", weight=0.5)
found = {
    "wall_s": time.perf_counter() - started, "cpu_s": time.process_time() - cpu,
    "peak_bytes": peak[0], "iterations": result.certificate.iterations,
    "gap": result.certificate.optimality, "reached": result.certificate.reached,
}
over.set()
truth = np.load(folder + "/truth.npy")
found["error"] = float(
    np.linalg.norm(result.image[::16] - truth[::16]) / np.linalg.norm(truth[::16])
)
print(json.dumps(found))
"""


def write_data(folder: Path, planes: int) -> None:
    """Discs of each plane seen by 8 smooth channels, undersampled, with noise; plane by plane."""
    y, x = np.mgrid[-1 : 1 : PHASE * 1j, -1 : 1 : PARTITION * 1j].astype(np.float32)
    angles = 2 * np.pi * np.arange(CHANNELS) / CHANNELS
    maps = np.array(
        [np.exp(-((x - np.cos(a)) ** 2) - (y - np.sin(a)) ** 2 + 1j * a) for a in angles]
    )
    maps = (maps / np.sqrt((np.abs(maps) ** 2).sum(0))).astype(np.complex64)
    np.save(folder / "maps.npy", maps[None])
    mask = draw_pattern((PHASE, PARTITION), acceleration=6, calibration=24, seed=1).mask
    shape = (planes, CHANNELS, PHASE, PARTITION)
    new = np.lib.format.open_memmap
    kspace = new(folder / "kspace.npy", mode="w+", dtype=np.complex64, shape=shape)
    truth = new(folder / "truth.npy", mode="w+", dtype=np.complex64, shape=(planes, *shape[2:]))
    discs = stream(0, "discs").uniform(size=(20, 5))
    for plane in range(planes):
        z = 2 * plane / planes - 1
        image = np.zeros((PHASE, PARTITION), np.float32)
        for cy, cx, cz, r, a in discs:
            square = (0.1 + 0.3 * r) ** 2 - (z - (2 * cz - 1)) ** 2
            inside = (x - 1.4 * cx + 0.7) ** 2 + (y - 1.4 * cy + 0.7) ** 2 < square
            image += np.float32(0.1 + a) * inside
        truth[plane] = image * np.exp(1j * (x + y * y))
        noise = stream(0, "noise", plane).standard_normal((*shape[1:], 2), np.float32)
        samples = centred_fft(truth[plane] * maps) + SIGMA * noise.view(np.complex64)[..., 0]
        kspace[plane] = samples * mask


def run(folder: Path, planes: int) -> dict[str, float]:
    """Write the data, recover them in a process of its own, hand back what it measured."""
    write_data(folder, planes)
    done = subprocess.run(
        [sys.executable, "-c", CHILD, str(folder), str(SIGMA)],
        capture_output=True, text=True, check=True,
    )  # fmt: skip
    found: dict[str, float] = json.loads(done.stdout)
    return found


def test_whole_volume(tmp_path: Path, figure: Any) -> None:
    found = run(tmp_path, READOUT)
    name = f"wavelet, {READOUT} x {PHASE} x {PARTITION}, {CHANNELS} channels, R = 6, to tolerance"
    figure(
        name,
        f"{found['wall_s']:.0f} s ({found['cpu_s']:.0f} s CPU, {found['iterations']} iterations)",
        "240 s",
    )
    figure(f"{name}: memory", f"{found['peak_bytes'] / 2**20:.0f} MiB", "1024 MiB")
    assert found["reached"]
    assert found["error"] < 0.3
