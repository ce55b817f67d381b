"""The same study on scans as they are and on scans remedied."""

import json
from pathlib import Path

import nibabel
import numpy as np
import pytest
from small_study import AFFINE, PROTOCOL, small_object, write_small_study

from mrics.errors import StudyError
from mrics.protocol import load_protocol
from mrics.study import optimism


def test_interpolated_scans_flatter(tmp_path: Path) -> None:
    # Zero-filled by 2: most of the outer k-space holds nothing, so leaving it out costs nothing.
    protocol = write_small_study(tmp_path, scans=0, protocol=PROTOCOL)
    for number in range(3):
        small = small_object(number, (44, 40, 5))
        wide = np.zeros((88, 80, 5), complex)
        centred = np.fft.fftshift(np.fft.fft2(small, axes=(0, 1)), axes=(0, 1))
        wide[22:66, 20:60] = centred
        image = np.fft.ifft2(np.fft.ifftshift(wide, axes=(0, 1)), axes=(0, 1)) * 4
        path = tmp_path / f"object_{number}.nii.gz"
        nibabel.save(nibabel.Nifti1Image(image.astype(np.complex64), AFFINE), path)
    rows = optimism(load_protocol(protocol), tmp_path / "out", quick=True)
    stored = json.loads((tmp_path / "out" / "optimism.json").read_text())
    assert all("cropped" in text for texts in stored["remedies"].values() for text in texts)
    cropped = nibabel.load(tmp_path / "out" / "scans" / "object_0.nii.gz")
    assert abs(cropped.shape[0] - 44) <= 1
    assert abs(cropped.shape[1] - 40) <= 1
    [row] = [r for r in rows if r.metric == "nrmse" and r.arm.startswith("power-law-r3")]
    assert row.flatters
    assert row.high is not None
    assert row.high < 0, "the interval of the difference leaves no doubt"
    assert row.difference == pytest.approx(row.as_is - row.remedied, rel=1e-6)
    for path in (tmp_path / "out").rglob("*.json"):
        assert str(tmp_path) not in path.read_text(), path.name


def test_clean_scans_have_nothing_to_compare(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=1)
    with pytest.raises(StudyError, match="nothing to compare"):
        optimism(load_protocol(protocol), tmp_path / "out")
    assert not (tmp_path / "out").exists()
