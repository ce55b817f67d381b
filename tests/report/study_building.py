"""Builds study folders of any size, by the project's own parts, without the cost of a study.

Scans are textured ellipsoids; arms recover them zero-filled or zero-filled and smoothed by a
window, so that a folder of 3 scans x 6 arms x 24 slices takes seconds. Scores, verdicts and
patterns come from the rooms that a study takes them from; the layout is that of results.json.
"""

from __future__ import annotations

import json
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import nibabel
import numpy as np
from numpy.typing import NDArray

from mrics import __version__
from mrics.caution import RESEARCH_ONLY
from mrics.numerics import centred_fft, centred_ifft, stream
from mrics.protocol import Limit
from mrics.quality import score_planes
from mrics.sampling import draw_pattern
from mrics.scan import Axes
from mrics.study.aggregate import arm_numbers
from mrics.study.answer import overall_verdict
from mrics.study.files import write_json

LIMITS = (
    Limit("ssim_min", "ssim", "min", "mean", 0.93),
    Limit("nrmse_max", "nrmse", "max", "mean", 0.12),
    Limit("nrmse_worst", "nrmse", "max", "worst", 0.16),
)


@dataclass(frozen=True)
class StudyPlan:
    """What to build.

    Attributes
    ----------
    shape : tuple of int
        Shape of every scan in file axes.
    axes : Axes
        Encoded axes; a partition axis makes it 3-D.
    scans, draws : int
        How many.
    arms : tuple of (acceleration, recovery)
        The first is today's.
    planes : tuple of int or None
        Studied planes, None for all.
    scale : float
        Multiplies all image values.
    title, question : str
        Of the protocol.
    """

    shape: tuple[int, int, int] = (5, 64, 48)
    axes: Axes = field(default_factory=lambda: Axes("i", "j", "k"))
    scans: int = 2
    draws: int = 2
    arms: tuple[tuple[float, str], ...] = (
        (2.0, "zero-filled"),
        (2.0, "windowed"),
        (3.0, "windowed"),
        (5.0, "windowed"),
    )
    planes: tuple[int, ...] | None = None
    scale: float = 1000.0
    title: str = "Knee, 3-D proton density, faster"
    question: str = "Can 6:30 become 3:00 and keep 1 mm cartilage defects?"


def invented_volume(shape: tuple[int, int, int], seed: int) -> NDArray[np.complex64]:
    """Textured ellipsoids in noise, largest magnitude about 1."""
    generator = stream(seed, "report-volume")
    grid = np.meshgrid(
        *[np.linspace(-1, 1, n) if n > 1 else np.zeros(1) for n in shape], indexing="ij"
    )
    volume = np.zeros(shape)
    for size, level in ((0.85, 0.5), (0.6, 0.35), (0.3, -0.3), (0.15, 0.4)):
        shift = generator.uniform(-0.15, 0.15, 3) * (1 - size)
        radius = sum(((g - s) / size) ** 2 for g, s in zip(grid, shift, strict=True))
        volume[radius < 1] += level * (1 + 0.1 * generator.uniform(-1, 1))
    for _ in range(24):
        centre, size = generator.uniform(-0.5, 0.5, 3), generator.uniform(0.03, 0.09)
        radius = sum(((g - c) / size) ** 2 for g, c in zip(grid, centre, strict=True))
        volume[(radius < 1) & (volume > 0)] *= generator.uniform(0.6, 1.2)
    noise = generator.normal(0, 0.01, (2, *shape))
    return ((volume + noise[0] + 1j * noise[1]) * np.exp(0.6j * grid[1])).astype(np.complex64)


def build_study(folder: Path, plan: StudyPlan) -> Path:
    """Write results.json and its maps; return the folder."""
    axes = plan.axes
    order = axes.order
    grid = tuple(plan.shape[a] for a in order[1:])
    pattern_shape = grid if axes.partition else grid[:1]
    chosen = list(range(plan.shape[order[0]]) if plan.planes is None else plan.planes)
    (folder / "maps").mkdir(parents=True, exist_ok=True)
    maps: list[dict[str, Any]] = []
    units: list[dict[str, Any]] = []
    scans: list[dict[str, Any]] = []
    affine = np.array([[-0.6, 0, 0, 20], [0, -0.7, 0, 30], [0, 0, 0.8, -10], [0, 0, 0, 1.0]])

    def keep(kind: str, data: NDArray[Any], **where: Any) -> None:
        name = "maps/" + "-".join([kind, *(str(v) for v in where.values())]) + ".nii"
        nibabel.save(nibabel.Nifti1Image(data, affine), folder / name)
        entry = {"kind": kind, "scan": None, "arm": None, "draw": None, "file": name}
        maps.append(entry | where)

    def volume_of(stack: NDArray[Any]) -> NDArray[Any]:
        whole = np.zeros((plan.shape[order[0]], *grid), dtype=stack.dtype)
        whole[chosen] = stack
        return axes.from_planes(whole, plan.shape)

    arms = [_arm(number, *arm) for number, arm in enumerate(plan.arms)]
    for number in range(plan.scans):
        scan_id = f"scan-{number + 1}"
        volume = invented_volume(plan.shape, number) * plan.scale
        stack = np.ascontiguousarray(axes.to_planes(volume)[chosen])
        body = np.abs(stack) > 0.1 * plan.scale
        data_range = float(np.abs(stack[body]).max()) if body.any() else 1.0
        scans.append(
            {
                "id": scan_id,
                "name": f"knee_{'abcdefgh'[number]}",
                "sha256": f"{number:064x}",
                "shape": list(plan.shape),
                "voxel_mm": [0.6, 0.7, 0.8],
                "complex_source": "complex",
                "plane_axis": axes.plane,
                "planes": chosen,
                "frames": 1,
                "sigma": 0.01 * plan.scale,
                "snr": 51.0,
                "data_range": data_range,
                "nrmse_floor": 0.0139,
                "findings": [] if number else [_FINDING],
            }
        )
        keep("reference", volume_of(stack), scan=scan_id)
        keep("body", volume_of(body.astype(np.uint8)), scan=scan_id)
        for arm in arms:
            for draw in range(plan.draws):
                pattern = draw_pattern(
                    pattern_shape,
                    acceleration=arm["acceleration_target"],
                    calibration=tuple(min(8, n) for n in pattern_shape),
                    seed=draw,
                )
                image = recover_simply(stack, pattern.mask, arm["recovery"])
                rows = score_planes(image, stack, body, data_range)
                units.append(_unit(arm, scan_id, draw, pattern, chosen, rows))
                arm["acceleration"] = pattern.acceleration
                arm["acquired"] = pattern.acquired
                if draw == 0:
                    error = (np.abs(image) - np.abs(stack)).astype(np.float32)
                    keep("recovered", volume_of(image), scan=scan_id, arm=arm["id"], draw=0)
                    keep("error", volume_of(error), scan=scan_id, arm=arm["id"], draw=0)
                    if number == 0:
                        mask = pattern.mask.astype(np.uint8)
                        mask = mask.reshape(*mask.shape, *[1] * (3 - mask.ndim))
                        keep("pattern", mask, scan=scan_id, arm=arm["id"], draw=0)
    by_arm = {arm["id"]: [u for u in units if u["arm"] == arm["id"]] for arm in arms}
    numbers = arm_numbers(by_arm, LIMITS, arms[0]["id"], 1)
    for arm in arms:
        arm["metrics"] = numbers[arm["id"]].metrics
        arm["against_today"] = numbers[arm["id"]].comparisons
        arm["verdict"] = numbers[arm["id"]].verdict
        arm["scan_time_s"] = 390.0 / arm["acceleration"]
        arm["full_scan_time_s"] = 390.0
        arm["acceleration_in_shutter"] = arm["acceleration"]
        arm["calibration_share"] = 0.12
        of = sum(u["arm"] == arm["id"] for u in units)
        arm["certificates"] = {"reached": of, "of": of, "note": ""}
    write_json(
        folder / "results.json",
        {
            "mrics": __version__,
            "schema": 1,
            "caution": RESEARCH_ONLY,
            "protocol": {
                "title": plan.title,
                "question": plan.question,
                "text": f'[protocol]\ntitle = "{plan.title}"\n',
                "values": {
                    "study": {"draws": plan.draws, "seed": 20261201},
                    "grid": {
                        "readout_axis": axes.readout,
                        "phase_axis": axes.phase,
                        "partition_axis": axes.partition,
                    },
                },
            },
            "scans": scans,
            "units": units,
            "arms": arms,
            "verdict": overall_verdict(arms, plan.scans),
            "maps": maps,
            "notes": ["Images are invented; noise of 1 % was added to them."],
            "provenance": {"seed": 20261201, "python": "3.12", "packages": {"numpy": "2.4"}},
            "timing": {"wall_s": 12.0},
        },
    )
    return folder


def recover_simply(
    stack: NDArray[Any], mask: NDArray[np.bool_], recovery: str
) -> NDArray[np.complex64]:
    """Zero-filled image, or the same after a cosine window on k-space."""
    kspace = centred_fft(stack) * (mask if mask.ndim == 2 else mask[:, None])
    if recovery == "windowed":
        for axis, length in ((-2, stack.shape[-2]), (-1, stack.shape[-1])):
            window = np.cos(np.linspace(-1.2, 1.2, length))
            kspace = kspace * (window[:, None] if axis == -2 else window)
    return centred_ifft(kspace).astype(np.complex64)


def read_results(folder: Path) -> dict[str, Any]:
    """results.json of a folder."""
    return json.loads((folder / "results.json").read_text())


_FINDING = {
    "code": "zero-filled",
    "what": "outer k-space along k is empty",
    "where": "k, beyond 42 of 48",
    "bias": "flatters every arm: the scan holds less detail than its matrix says",
    "advice": "crop k-space to the acquired matrix before the study",
}


def _arm(number: int, acceleration: float, recovery: str) -> dict[str, Any]:
    return {
        "id": f"power-r{acceleration:g}-{recovery}",
        "label": f"power law, R = {acceleration:g}, {recovery}",
        "today": number == 0,
        "sampling": "power law",
        "sampling_settings": {"law": "power", "draw": "exact-count", "calibration": 8},
        "recovery": recovery,
        "recovery_settings": {},
        "acceleration_target": acceleration,
    }


def _unit(
    arm: dict[str, Any],
    scan: str,
    draw: int,
    pattern: Any,
    planes: list[int],
    rows: list[dict[str, float]],
) -> dict[str, Any]:
    return {
        "arm": arm["id"],
        "scan": scan,
        "draw": draw,
        "seed": draw,
        "sigma": 0.01,
        "weight": None,
        "acceleration": pattern.acceleration,
        "pattern_hash": pattern.hash,
        "certificate": {"method": arm["recovery"], "reached": True, "certified": True},
        "slices": [{"index": p, "frame": 0} | r for p, r in zip(planes, rows, strict=True)],
    }
