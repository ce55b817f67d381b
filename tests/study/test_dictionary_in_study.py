"""From training on the command line to an arm that uses the dictionary and says where it holds."""

import io
import json
import shutil
import sys
from contextlib import redirect_stderr, redirect_stdout
from pathlib import Path

import nibabel
import numpy as np
import pytest

import mrics
from mrics.caution import RESEARCH_ONLY
from mrics.cli import main
from mrics.protocol import load_protocol
from mrics.recovery.dictionary import load_dictionary
from mrics.study import plan_study

SAMPLE = Path(mrics.__file__).parents[1] / "sample_data"
PROTOCOL = """\
[sequence]
family = "gradient-echo-2d"
repetition_time_ms = 500.0
echo_time_ms = 5.0
[grid]
readout_axis = "i"
phase_axis = "j"
[[sampling]]
name = "power law"
law = "power"
draw = "exact-count"
acceleration = 3
calibration = 16
[[recovery]]
method = "dictionary"
dictionary = "knee.npz"
iterations = 2
[study]
scans = [{real = "a_real.nii.gz", imaginary = "a_imag.nii.gz"}]
draws = 1
slices = 1
"""


def command(*arguments: object) -> str:
    """What a command that succeeds prints."""
    out = io.StringIO()
    with pytest.MonkeyPatch.context() as patch, redirect_stdout(out):
        patch.setattr(sys, "argv", ["mrics", *map(str, arguments)])
        with redirect_stderr(io.StringIO()), pytest.raises(SystemExit) as stop:
            main()
    assert not stop.value.code
    return out.getvalue()


def refused(*arguments: object) -> str:
    """The complaint of a command that is refused with status 2."""
    complaint = io.StringIO()
    with pytest.MonkeyPatch.context() as patch, redirect_stderr(complaint):
        patch.setattr(sys, "argv", ["mrics", *map(str, arguments)])
        with pytest.raises(SystemExit) as stop:
            main()
    assert stop.value.code == 2
    return " ".join(complaint.getvalue().split())


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A protocol with a sample scan, and a dictionary trained on it by the command."""
    where = tmp_path_factory.mktemp("trained")
    for part in ("real", "imag"):
        name = f"sub-a_acq-tse2d_part-{part}_PDw.nii.gz"
        shutil.copy(SAMPLE / name, where / f"a_{part}.nii.gz")
    (where / "knee.toml").write_text(PROTOCOL)
    # The recovery's file does not exist before training: its protocol is not asked for it then.
    printed = command("train", where / "knee.toml", "--out", where / "knee.npz", "--patch", 6)
    assert RESEARCH_ONLY in printed
    assert "256 real" in printed
    return where


def test_the_file_says_what_it_was_trained_on(folder: Path) -> None:
    held = load_dictionary(folder / "knee.npz")
    made = held.provenance
    assert held.atoms.shape == (256, 36)
    assert held.atoms.dtype == np.float32
    assert [scan["name"] for scan in made["scans"]] == ["a_real.nii.gz"]
    assert len(held.scans[0]) == 64
    assert made["mrics"] == mrics.__version__
    assert made["settings"]["patch"] == 6
    assert str(folder) not in json.dumps(made), "names, never paths"
    assert held.residuals.size > 1000
    assert (np.diff(held.residuals) >= 0).all()
    assert 0 <= held.residuals[0] <= held.residuals[-1] <= 1


def test_an_arm_says_its_domain_and_that_it_is_optimistic(folder: Path) -> None:
    command("run", folder / "knee.toml", "--out", folder / "study")
    results = json.loads((folder / "study" / "results.json").read_text())
    arm = results["arms"][0]
    assert "inside the dictionary's domain on all planes" in arm["certificates"]["note"]
    assert any("optimistic: the dictionary was trained on 1" in note for note in results["notes"])
    assert arm["recovery_settings"]["dictionary"] == "knee.npz"
    assert str(folder) not in json.dumps(results["arms"]), "names, never paths"
    kinds = {entry["kind"]: entry["file"] for entry in results["maps"]}
    sheet = np.asanyarray(nibabel.load(folder / "study" / kinds["atoms"]).dataobj)
    assert sheet.shape[:2] == (6, 6)
    assert sheet.size == 36 * 256
    use = np.asanyarray(nibabel.load(folder / "study" / kinds["atom_use"]).dataobj).ravel()
    assert (np.diff(use) <= 0).all()
    page = (folder / "study" / "report.html").read_text()
    assert "optimistic: the dictionary was trained on 1 of the test scans" in page
    assert "most used first" in page


def test_another_dictionary_under_the_same_name_is_not_taken_for_the_old_one(folder: Path) -> None:
    plan = plan_study(load_protocol(folder / "knee.toml"))
    before = [unit.key for unit in plan.units(folder / "other", ["x"], plan.rows)]
    shutil.copy(folder / "knee.npz", folder / "kept.npz")
    command("train", folder / "knee.toml", "--out", folder / "knee.npz", "--seed", 1, "--force")
    after = [unit.key for unit in plan.units(folder / "other", ["x"], plan.rows)]
    shutil.move(folder / "kept.npz", folder / "knee.npz")
    assert before != after
    assert before == [unit.key for unit in plan.units(folder / "other", ["x"], plan.rows)]


def test_training_twice_gives_the_same_bits(folder: Path) -> None:
    command("train", folder / "knee.toml", "--out", folder / "again.npz", "--patch", 6)
    assert (folder / "again.npz").read_bytes() == (folder / "knee.npz").read_bytes()


def test_bad_training_is_refused_and_nothing_is_written(folder: Path, tmp_path: Path) -> None:
    source, out = folder / "knee.toml", tmp_path / "d.npz"
    assert "exists" in refused("train", source, "--out", folder / "knee.npz")
    text = refused("train", source, "--out", out, "--patch", 400)
    assert "A patch of 400 samples is larger than the stack of" in text
    assert "a_real.nii.gz: patch, axis u" in text
    assert "kind must be one of real, complex, got 'imaginary'" in refused(
        "train", source, "--out", out, "--kind", "imaginary"
    )
    constant = tmp_path / "constant.nii.gz"
    nibabel.save(nibabel.Nifti1Image(np.ones((32, 32, 3), np.float32), np.eye(4)), constant)
    assert "holds anything but a constant" in refused("train", constant, "--out", out)
    rng = np.random.default_rng(0)
    small = tmp_path / "small.nii.gz"
    values = rng.uniform(0.5, 1, (12, 12, 1)).astype(np.float32)
    nibabel.save(nibabel.Nifti1Image(values, np.eye(4)), small)
    assert "144 patches cannot teach 256 atoms" in refused("train", small, "--out", out)
    assert "which has magnitudes only" in refused("train", small, "--out", out, "--kind", "complex")
    assert not out.exists()


def test_a_plan_refuses_a_dictionary_it_cannot_use(folder: Path) -> None:
    text = (folder / "knee.toml").read_text()
    (folder / "wrong.toml").write_text(text.replace("knee.npz", "none.npz"))
    complaint = refused("plan", folder / "wrong.toml")
    assert "no such dictionary" in complaint
    assert "arm power law" in complaint
    (folder / "wrong.toml").write_text(text.replace("iterations = 2", 'kind = "complex"'))
    assert "real atoms (float32), the recovery asks complex" in refused(
        "plan", folder / "wrong.toml"
    )
