"""Exporting a draw and recovering what was then measured with it."""

import json
from pathlib import Path

import nibabel
import numpy as np
import pytest
from small_study import AFFINE, PROTOCOL, small_object, write_small_study

from mrics.encoding.coils import simulate_coils
from mrics.errors import MricsError
from mrics.numerics import centred_fft
from mrics.protocol import load_protocol
from mrics.report import export_table, run_study
from mrics.sampling import read_pattern
from mrics.scan import Axes
from mrics.study import export_draw, recover_measured

ARM = "power-law-r3-zero-filled"


def test_the_exported_table_is_the_studys_draw_and_has_a_row(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path)
    results = run_study(protocol, tmp_path / "study")
    exported, sheet = export_table(
        load_protocol(protocol), ARM, 1, tmp_path / "table", tmp_path / "study"
    )
    drawn = {u["scan"]: u for u in results["units"] if (u["arm"], u["draw"]) == (ARM, 1)}
    used = drawn["object-0"]["pattern_hash"]
    assert drawn["object-1"]["pattern_hash"] != used
    assert exported.played.pattern.hash == used
    assert sheet.read_bytes().startswith(b"\x89PNG")
    for path in exported.files:
        again = read_pattern(path)
        np.testing.assert_array_equal(again.mask, exported.played.pattern.mask)
    assert read_pattern(exported.files[0]).hash == used
    after = json.loads((tmp_path / "study" / "results.json").read_text())
    row = after["arms"][-1]
    assert row["exported"] == {"arm": ARM, "draw": 1, "hash": used}
    # The table was run on the second scan too, where the study had drawn another.
    units = [u for u in after["units"] if u["arm"] == f"{ARM}-draw1"]
    assert {u["scan"]: u["pattern_hash"] for u in units} == dict.fromkeys(drawn, used)
    assert units[0]["slices"] == drawn["object-0"]["slices"]
    assert units[1]["slices"] != drawn["object-1"]["slices"]
    mean = np.mean([np.mean([s["nrmse"] for s in u["slices"]]) for u in units])
    assert row["metrics"]["nrmse"]["mean"] == pytest.approx(mean, rel=1e-6)
    assert used[:12] in (tmp_path / "study" / "report.html").read_text()
    assert used in exported.files[0].read_text()


def test_an_exported_draw_is_measured_in_full(tmp_path: Path) -> None:
    text = PROTOCOL.replace("nrmse_max = 0.5", "nrmse_max = 0.5\nnoise_ratio_max = 2.0")
    text += "[quality]\nmore_scores = false\nnoise_replicas = 4\n"
    protocol = write_small_study(tmp_path, protocol=text)
    run_study(protocol, tmp_path / "study")
    export_table(load_protocol(protocol), ARM, 1, tmp_path / "table", tmp_path / "study")
    row = json.loads((tmp_path / "study" / "results.json").read_text())["arms"][-1]
    [limit] = [one for one in row["verdict"]["limits"] if one["key"] == "noise_ratio_max"]
    # Zero-filled: the root of the sampled share, 13 of 40 lines.
    assert limit["value"] == pytest.approx((13 / 40) ** 0.5, rel=0.1)


def test_an_unknown_arm_or_draw_is_refused(tmp_path: Path) -> None:
    protocol = load_protocol(write_small_study(tmp_path, scans=1))
    with pytest.raises(MricsError, match="no arm 'wavelets'"):
        export_draw(protocol, "wavelets", 0, tmp_path / "t")
    with pytest.raises(MricsError, match="Draw 2 does not exist"):
        export_draw(protocol, ARM, 2, tmp_path / "t")
    assert not (tmp_path / "t").exists()


def test_a_study_of_other_patterns_gets_no_row(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path)
    run_study(protocol, tmp_path / "study")
    other = tmp_path / "other.toml"
    other.write_text(PROTOCOL.replace("seed = 7", "seed = 8"))
    with pytest.raises(MricsError, match="did not run this draw"):
        export_table(load_protocol(other), ARM, 1, tmp_path / "table", tmp_path / "study")


def test_a_measured_scan_is_recovered_with_the_exported_table(tmp_path: Path) -> None:
    shape = (48, 96, 3)
    text = PROTOCOL.replace(
        "acceleration = [2, 3]\ncalibration = 8", "acceleration = 2\ncalibration = 24"
    )
    protocol = load_protocol(write_small_study(tmp_path, 1, text, shape))
    exported = export_draw(protocol, "power-law-r2-zero-filled", 0, tmp_path)
    mask = exported.played.pattern.mask
    truth = small_object(0, shape)
    planes = Axes("i", "j").to_planes(truth)
    maps = simulate_coils(planes.shape, (3.0, 1.2, 1.0), number=8).sensitivities[:]
    np.save(tmp_path / "k.npy", (centred_fft(maps * planes[:, None]) * mask[:, None]))
    content = recover_measured(
        tmp_path / "k.npy",
        exported.files[0],
        tmp_path / "image.nii.gz",
        method="wavelet",
        channel_axis=1,
        axes=Axes("i", "j"),
        like=tmp_path / "object_0.nii.gz",
    )
    image = nibabel.load(tmp_path / "image.nii.gz")
    np.testing.assert_allclose(image.affine, AFFINE, atol=1e-6)
    recovered = np.abs(np.asanyarray(image.dataobj))
    assert recovered.shape == shape
    inside = np.abs(truth) > 30
    gap = (recovered - np.abs(truth))[inside]
    assert np.linalg.norm(gap) < 0.1 * np.linalg.norm(truth[inside])
    assert content["channels"] == 8
    assert content["pattern_hash"] == exported.played.pattern.hash
    stored = json.loads((tmp_path / "image.json").read_text())
    assert stored["certificate"]["method"] == "wavelet"


def test_a_wrong_table_writes_nothing(tmp_path: Path) -> None:
    protocol = load_protocol(write_small_study(tmp_path, scans=1))
    one = export_draw(protocol, ARM, 0, tmp_path).files[0]
    two = export_draw(protocol, ARM, 1, tmp_path).played.pattern.mask
    planes = Axes("i", "j").to_planes(small_object(0))
    np.save(tmp_path / "k.npy", (centred_fft(planes) * two[:, None]).astype(np.complex64))
    with pytest.raises(MricsError, match="the pattern leaves out"):
        recover_measured(tmp_path / "k.npy", one, tmp_path / "image.nii.gz")
    with pytest.raises(MricsError, match="another ending"):
        recover_measured(tmp_path / "k.npy", one, tmp_path / "image.png")
    assert not list(tmp_path.glob("image*"))
