"""Commands that judge scans and studies, as a person runs them."""

import json
import re
import time
from pathlib import Path

import nibabel
import numpy as np
from command_line import mrics, refused
from scan_manipulations import sample, zero_fill
from small_study import AFFINE, PROTOCOL, write_small_study

from mrics.scan import read_scan


def words(text: str) -> str:
    return re.sub(r"\s+", " ", text)


def interpolated(path: Path) -> None:
    data = np.abs(zero_fill(sample("sub-a_acq-tse2d", 8), 1.5, (1,)))
    nibabel.save(nibabel.Nifti1Image(data.astype(np.float32), AFFINE), path)


def test_inspect_says_what_was_found_and_remedies_on_request(tmp_path: Path) -> None:
    path = tmp_path / "knee.nii.gz"
    interpolated(path)
    before = path.read_bytes()
    done = mrics("inspect", path)
    assert done.returncode == 0, done.stderr
    said = words(done.stdout)
    for part in ("zero-filled (axis j)", "statistic", "threshold", "what to do: Crop k-space"):
        assert part in said
    assert "magnitude-only" in said
    assert "cannot be told" in said
    assert "remedies: --remedied FILE writes the scan with k-space cropped" in said
    better = tmp_path / "better.nii.gz"
    done = mrics("inspect", path, "--remedied", better)
    assert done.returncode == 0, done.stderr
    assert "k-space cropped along j" in words(done.stdout)
    original = sample("sub-a_acq-tse2d", 8).shape
    assert abs(read_scan(better).shape[1] - original[1]) <= 0.05 * original[1]
    assert path.read_bytes() == before


def test_require_pass_exits_3_with_the_study_written(tmp_path: Path) -> None:
    text = PROTOCOL.replace("nrmse_max = 0.5", "nrmse_max = 0.0001")
    protocol = write_small_study(tmp_path, scans=1, protocol=text)
    done = mrics("run", protocol, "--out", tmp_path / "out", "--workers", 1, "--require-pass")
    assert done.returncode == 3, done.stderr
    results = json.loads((tmp_path / "out" / "results.json").read_text())
    assert results["verdict"]["arm"] is None
    # The same units under a limit that they keep.
    protocol.write_text(PROTOCOL)
    done = mrics("run", protocol, "--out", tmp_path / "out", "--force", "--require-pass")
    assert done.returncode == 0, done.stderr


def test_compare_and_optimism_print_their_tables(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=0)
    for number in range(3):
        interpolated(tmp_path / f"object_{number}.nii.gz")
    done = mrics("optimism", protocol, "--out", tmp_path / "both", "--quick", "--workers", 1)
    assert done.returncode == 0, done.stderr
    lines = [x for x in done.stdout.splitlines() if x.startswith("power-law-r3-zero-filled, nrmse")]
    assert re.search(r"[+-][\d.e-]+ \[.*, .*\], (not flattered|flattered|no clear diff)", lines[0])
    folders = (tmp_path / "both" / "as-is", tmp_path / "both" / "remedied")
    done = mrics("compare", *folders)
    assert done.returncode == 0, done.stderr
    assert "means that moved:" in done.stdout
    assert "power-law-r3-zero-filled, nrmse:" in done.stdout


def test_a_cluster_that_does_not_answer_is_refused_and_nothing_is_written(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=1)
    arguments = ("run", protocol, "--out", tmp_path / "out", "--cluster", "tcp://127.0.0.1:9")
    started = time.monotonic()
    refused(*arguments, says="does not answer")
    print(f"refused after {time.monotonic() - started:.1f} s")
    assert not (tmp_path / "out").exists()
