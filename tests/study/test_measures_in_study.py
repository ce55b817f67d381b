"""A protocol's [quality] table: measures beside the scores, in results, verdict and maps."""

import csv
from pathlib import Path

import nibabel
import numpy as np
import pytest
from small_study import AFFINE, PROTOCOL, small_object, write_small_study

from mrics.errors import ProtocolError, QualityError, ScanError, StudyError
from mrics.protocol import from_text
from mrics.study import run_study

QUALITY = """
[quality]
planes = 1
noise_replicas = 4
resolution_runs = 1
features = [{ size_mm = [6.0, 10.0], contrast = 30.0 }]
feature_sites = 3
"""


def test_measures_reach_units_arms_and_maps(tmp_path: Path) -> None:
    text = PROTOCOL.replace("nrmse_max = 0.5", "nrmse_max = 0.5\nfeature_retention_min = 0.1")
    protocol = write_small_study(tmp_path, scans=1, protocol=text + QUALITY)
    results = run_study(protocol, tmp_path / "out")
    arm = next(a for a in results["arms"] if not a["today"])
    for metric in ("ms_ssim", "error_invented", "noise_ratio", "feature_retention"):
        assert arm["metrics"][metric]["mean"] is not None
    assert {row["key"] for row in arm["verdict"]["limits"]} == {
        "nrmse_max",
        "feature_retention_min",
    }
    first, second = (u for u in results["units"] if u["arm"] == arm["id"])
    assert first["measures"]["features"]
    resolution = first["measures"]["resolution"]
    [told] = [note for note in results["notes"] if note.startswith("Local resolution")]
    assert "points of 5 sigma" in told
    leaks = [
        u["measures"]["resolution"]["lattice_leakage"]
        for u in results["units"]
        if "resolution" in u["measures"]
    ]
    assert resolution["lattice_leakage"] in leaks
    assert f"up to {100 * max(leaks):.2g} %" in told
    with (tmp_path / "out" / "measures.csv").open(newline="") as stream:
        lines = list(csv.DictReader(stream))
    kept = [
        float(line["value"])
        for line in lines
        if (line["arm"], line["measure"]) == (arm["id"], "features.1.retained")
    ]
    assert kept == [pytest.approx(first["measures"]["features"][1]["retained"], rel=1e-6)]
    spectral = [
        line
        for line in lines
        if (line["arm"], line["draw"]) == (arm["id"], "1")
        and line["measure"].startswith("spectral.relative.")
    ]
    assert len(spectral) == len(second["measures"]["spectral"]["relative"])
    # Measures that recover again are taken on the first draw alone.
    assert "features" not in second["measures"]
    kinds = {m["kind"] for m in results["maps"] if m["arm"] == arm["id"]}
    assert {"measured", "missing", "invented", "noise_ratio", "resolution_u_mm"} <= kinds


def labelled(folder: Path, shape: tuple[int, ...] = (44, 40, 5), name: str = "regions") -> None:
    labels = np.zeros(shape, np.uint8)
    labels[10:34, 8:18, 1:4] = 1
    labels[10:34, 20:32, 1:4] = 2
    nibabel.save(nibabel.Nifti1Image(labels, AFFINE), folder / f"{name}.nii.gz")


REGIONS = """
[quality]
error_split = false
labels = "regions.nii.gz"
background_label = 2
edges = [{ i = 5, j = 20, k = 2, angle_deg = 90.0 }, { i = 22, j = 6, k = 2, angle_deg = 0.0 }]
features = [{ size_mm = [2.4], contrast = 30.0 }]
feature_sites = 3
planes = 1
"""


def test_label_maps_and_given_edges(tmp_path: Path) -> None:
    text = PROTOCOL.replace("nrmse_max = 0.5", "nrmse_max = 0.5\nregion_bias_max = 0.5")
    protocol = write_small_study(tmp_path, protocol=text + REGIONS)
    labelled(tmp_path)
    results = run_study(protocol, tmp_path / "out", quick=True)
    assert [scan["planes"] for scan in results["scans"]] == [[1, 2, 3]] * 2
    arm = results["arms"][1]
    assert {"region_bias", "region_cnr", "edge_blur", "error_fine"} <= set(arm["metrics"])
    assert [one["shape"] for one in arm["smallest_kept"]] == ["disc"]
    unit = next(u for u in results["units"] if u["arm"] == arm["id"])
    assert [region["label"] for region in unit["measures"]["regions"]] == [1, 2]
    assert [(e["u"], e["v"]) for e in unit["measures"]["edges"]] == [(20.0, 5.0), (6.0, 22.0)]
    # Another label map makes other units; worker processes see it too.
    labelled(tmp_path, name="other")
    protocol.write_text(protocol.read_text().replace("regions.nii", "other.nii"))
    again = run_study(protocol, tmp_path / "pool", quick=True, workers=2)
    assert [u["slices"] for u in again["units"]] == [u["slices"] for u in results["units"]]


@pytest.mark.parametrize(
    ("shape", "affine", "message"),
    [
        ((44, 40, 4), AFFINE, r"on another grid: its shape is \(44, 40, 4\)"),
        ((44, 40, 5), np.diag([1.0, 1.2, 3.0, 1.0]), "on another grid: its affine puts voxels up"),
    ],
)
def test_a_label_map_on_another_grid_stops_before_anything_is_written(
    shape: tuple[int, ...], affine: np.ndarray, message: str, tmp_path: Path
) -> None:
    protocol = write_small_study(tmp_path, scans=1, protocol=PROTOCOL + REGIONS)
    nibabel.save(nibabel.Nifti1Image(np.ones(shape, np.uint8), affine), tmp_path / "regions.nii.gz")
    with pytest.raises(ScanError, match=message) as caught:
        run_study(protocol, tmp_path / "out")
    assert "regions.nii.gz" in caught.value.where
    assert not (tmp_path / "out").exists()


def test_bad_label_values_and_edges_are_told(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, protocol=PROTOCOL + REGIONS)
    values = np.full((44, 40, 5), 0.5, np.float32)
    nibabel.save(nibabel.Nifti1Image(values, AFFINE), tmp_path / "regions.nii.gz")
    with pytest.raises(ScanError, match=r"8800 values that are not whole numbers from 0"):
        run_study(protocol, tmp_path / "out")
    protocol.write_text((PROTOCOL + REGIONS).replace('"regions.nii.gz"', '["a.nii", "b.nii"]'))
    with pytest.raises(ProtocolError, match=r"'a\.nii' does not exist"):
        run_study(protocol, tmp_path / "out")
    for name in "abc":
        labelled(tmp_path, name=name)
    three = '["a.nii.gz", "b.nii.gz", "c.nii.gz"]'
    protocol.write_text((PROTOCOL + REGIONS).replace('"regions.nii.gz"', three))
    with pytest.raises(ProtocolError, match="3 label maps for 2 scans"):
        run_study(protocol, tmp_path / "out")
    labelled(tmp_path)
    protocol.write_text((PROTOCOL + REGIONS).replace("i = 5", "i = 50"))
    with pytest.raises(StudyError, match=r"edge at voxel \(50, 20, 2\) lies outside"):
        run_study(protocol, tmp_path / "out")
    named = (PROTOCOL + REGIONS).replace("angle_deg = 90.0", 'angle_deg = 90.0, scan = "knee"')
    protocol.write_text(named)
    with pytest.raises(StudyError, match="There is no scan 'knee'"):
        run_study(protocol, tmp_path / "out")
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize(
    ("before", "after", "message"),
    [
        ("background_label = 2", "background_label = 7", r"background_label = 7 is not in the"),
        ("size_mm = [2.4]", "size_mm = [30.0]", "larger than the region"),
        ("size_mm = [2.4]", 'shape = "sphere", size_mm = [9.0]', "sphere reaches over"),
    ],
)
def test_measures_that_do_not_fit_a_scan_stop_before_the_study(
    before: str, after: str, message: str, tmp_path: Path
) -> None:
    text = (PROTOCOL + REGIONS).replace(before, after)
    protocol = write_small_study(tmp_path, scans=1, protocol=text)
    labelled(tmp_path)
    with pytest.raises(QualityError, match=message) as caught:
        run_study(protocol, tmp_path / "out")
    assert "scan object-0" in caught.value.where
    assert not (tmp_path / "out").exists()


def test_slices_without_body_are_skipped_and_counted(tmp_path: Path) -> None:
    shape = (44, 40, 9)
    protocol = write_small_study(tmp_path, scans=1, shape=shape)
    image = small_object(0, shape)
    image[:, :, 5:] = 1e-3 * np.random.default_rng(0).standard_normal((44, 40, 4))
    nibabel.save(nibabel.Nifti1Image(image, AFFINE), tmp_path / "object_0.nii.gz")
    results = run_study(protocol, tmp_path / "out")
    planes = results["scans"][0]["planes"]
    assert set(range(5)) <= set(planes) < set(range(9))
    assert all(len(unit["slices"]) == len(planes) for unit in results["units"])
    assert f"Slices without body were skipped: object-0 {9 - len(planes)}." in results["notes"]


def test_bad_quality_keys_are_refused_with_their_place() -> None:
    with pytest.raises(ProtocolError, match="noise_replicas"):
        from_text(PROTOCOL + "\n[quality]\nnoise_replica = 4\n")
    with pytest.raises(ProtocolError, match="a whole number of at least 1") as caught:
        from_text(PROTOCOL + "\n[quality]\nplanes = 0\n", "p.toml")
    assert "p.toml" in caught.value.where
