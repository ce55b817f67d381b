"""A study of the same scan in other units gives the same scores."""

from pathlib import Path

import nibabel
import numpy as np
import pytest
from small_study import AFFINE, PROTOCOL, small_object, write_small_study

from mrics.errors import PatternError, ScanError
from mrics.sampling import draw_pattern, laws
from mrics.study import run_study

QUALITY = """
[quality]
edges = true
more_scores = false
planes = 1
noise_replicas = 2
features = [{ size_mm = [6.0], contrast = 30.0 }]
feature_sites = 3
"""
# These measure noise that is rounding alone, or what a replica happens to hold.
ROUNDING = ("error_measured", "error_invented", "feature_shift_mm")


def means(folder: Path, image: np.ndarray) -> dict[str, dict[str, float]]:
    text = PROTOCOL.replace("draws = 2", "draws = 1").replace("[2, 3]", "3")
    protocol = write_small_study(folder, scans=0, protocol=text + QUALITY)
    nibabel.save(nibabel.Nifti1Image(image, AFFINE), folder / "object_0.nii.gz")
    results = run_study(protocol, folder / "out")
    return {arm["id"]: {k: v["mean"] for k, v in arm["metrics"].items()} for arm in results["arms"]}


def test_a_study_does_not_depend_on_the_unit_of_the_scan(tmp_path: Path) -> None:
    image = small_object(0)
    usual = means(tmp_path / "usual", image)
    for exponent in (-110, 90):
        scaled = np.ldexp(image.view(np.float32), exponent).view(np.complex64)
        other = means(tmp_path / str(exponent), scaled)
        for arm, values in usual.items():
            for name, value in values.items():
                if name not in ROUNDING:
                    assert other[arm][name] == pytest.approx(value, rel=1e-4), name


def test_a_scan_beyond_single_precision_is_refused(tmp_path: Path) -> None:
    with pytest.raises(ScanError, match="beyond single precision"):
        means(tmp_path, small_object(0) * np.float32(1e34))


@pytest.mark.parametrize("value", [np.nan, np.inf, -1.0])
def test_a_law_of_ones_own_that_fails_is_refused(
    value: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    def density(t: np.ndarray, _step: float) -> np.ndarray:
        return np.where(t > 0.9, value, 1.0)

    monkeypatch.setitem(laws.LAWS, "own", laws.Law(density))
    with pytest.raises(PatternError, match="law 'own' gives 3 densities that are negative or not"):
        draw_pattern((40,), law="own", acceleration=2, calibration=4)
