"""Studies of several receive channels: simulated around one image, and the scan's own."""

from pathlib import Path

import nibabel
import numpy as np
from small_study import AFFINE, PROTOCOL, small_object, write_small_study

from mrics.encoding.coils import simulate_coils
from mrics.scan import Axes
from mrics.study import run_study

SHAPE = (48, 96, 3)
CANDIDATE = PROTOCOL.replace(
    "acceleration = [2, 3]\ncalibration = 8", "acceleration = 2\ncalibration = 24"
)
UNFOLDED = CANDIDATE.replace(
    'calibration = 8\nrecovery = "zero-filled"', 'calibration = 24\nrecovery = "unfold"'
)


def test_a_simulated_array_serves_todays_unfolding(tmp_path: Path) -> None:
    text = UNFOLDED + "\n[coils]\nnumber = 6\nphase = 0.8\n"
    protocol = write_small_study(tmp_path, 1, text, SHAPE)
    magnitude = np.abs(small_object(0, SHAPE))
    nibabel.save(nibabel.Nifti1Image(magnitude, AFFINE), tmp_path / "object_0.nii.gz")
    results = run_study(protocol, tmp_path / "out")
    today = next(a for a in results["arms"] if a["today"])
    assert today["recovery"] == "unfold"
    assert today["metrics"]["nrmse"]["mean"] < 0.1
    assert "nrmse_complex" not in today["metrics"], "the phase of estimated maps is free"
    kinds = {m["kind"] for m in results["maps"] if m["arm"] == today["id"]}
    assert "noise_gain" in kinds
    notes = " ".join(results["notes"])
    assert "6 circular loops" in notes
    assert "phase of 0.8 rad" in notes


def test_channels_of_the_scan_are_used_as_they_are(tmp_path: Path) -> None:
    text = UNFOLDED.replace('phase_axis = "j"', 'phase_axis = "j"\nchannel_axis = 3')
    protocol = write_small_study(tmp_path, 0, text, SHAPE)
    image = small_object(0, SHAPE)
    axes = Axes("i", "j")
    planes = axes.to_planes(image)
    maps = simulate_coils(planes.shape, (3.0, 1.2, 1.0), number=6).sensitivities[:]
    channels = np.stack(
        [axes.from_planes(maps[:, c] * planes, SHAPE) for c in range(6)], axis=-1
    ).astype(np.complex64)
    nibabel.save(nibabel.Nifti1Image(channels, AFFINE), tmp_path / "object_0.nii.gz")
    results = run_study(protocol, tmp_path / "out")
    assert results["scans"][0]["channels"] == 6
    reference = nibabel.load(tmp_path / "out" / "reference" / "object-0_reference.nii.gz")
    body = nibabel.load(tmp_path / "out" / "reference" / "object-0_body.nii.gz").get_fdata() > 0
    gap = (reference.get_fdata() - np.abs(image))[body]
    assert np.linalg.norm(gap) < 0.05 * np.linalg.norm(image[body])
    today = next(a for a in results["arms"] if a["today"])
    assert today["metrics"]["nrmse"]["mean"] < 0.1
