"""Receive channels that cannot be used, at the command line: status 2 and what is wrong."""

from pathlib import Path

import nibabel
import numpy as np
import pytest
from command_line import mrics, refused
from receive import regular, scene
from small_study import AFFINE, PROTOCOL, small_object, write_small_study

from mrics.encoding import undersample
from mrics.sampling import write_table

ONE = PROTOCOL.replace("acceleration = [2, 3]", "acceleration = 2")
NAMED = ONE.replace('phase_axis = "j"', 'phase_axis = "j"\nchannel_axis = 3')


def measured(folder: Path, calibration: int = 16, channels: int = 4, silent: int | None = None):
    """K-space (plane, channel, u, v), its table and noise samples as files."""
    maps, _, images = scene(48, 64, channels, planes=2)
    pattern = regular((48,), (2,), calibration)
    data = undersample(images, pattern, 0.02, 1, sensitivities=maps[None]).kspace.copy()
    if silent is not None:
        data[:, silent] = 0
    np.save(folder / "k.npy", data.astype(np.complex64))
    noise = np.random.default_rng(2).standard_normal((channels, 4000, 2)) @ [0.02, 0.02j]
    np.save(folder / "noise.npy", noise)
    table = write_table(pattern, folder / "table.csv")
    return ["recover", folder / "k.npy", "--pattern", table, "--out", folder / "image.nii.gz"]


def test_a_study_names_a_channel_axis_that_is_not_there(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, 1, NAMED)
    refused("run", protocol, "--out", tmp_path / "out", says="Channel axis 3 has length 1")
    single = nibabel.Nifti1Image(small_object(0)[..., None], AFFINE)
    nibabel.save(single, tmp_path / "object_0.nii.gz")
    refused("run", protocol, "--out", tmp_path / "out", says="Channel axis 3 has length 1")
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize(
    ("recovery", "says"),
    [
        ("unfold", r"2 voxels inside the object fold together, more than the 1 channel"),
        ("kernel", r"The smallest region for this kernel is \d+ lines"),
    ],
)
def test_todays_arm_that_cannot_work_is_refused(tmp_path: Path, recovery: str, says: str) -> None:
    text = ONE.replace(
        'calibration = 8\nrecovery = "zero-filled"', f'calibration = 4\nrecovery = "{recovery}"'
    )
    if recovery == "kernel":
        text += "\n[coils]\nnumber = 8\n"
    protocol = write_small_study(tmp_path, 1, text)
    refused("run", protocol, "--out", tmp_path / "out", says=says)
    assert not (tmp_path / "out" / "report.html").exists()


@pytest.mark.parametrize("method", ["unfold", "kernel"])
def test_a_pattern_that_is_not_regular_is_refused_before_anything_is_computed(
    tmp_path: Path, method: str
) -> None:
    text = ONE.replace('[[recovery]]\nmethod = "zero-filled"', f'[[recovery]]\nmethod = "{method}"')
    protocol = write_small_study(tmp_path, 1, text)
    refused(
        "run", protocol, "--out", tmp_path / "out", says=f"{method}: The pattern is not regular"
    )
    refused("plan", protocol, says=r"arm power law, R = 2")
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ([], r"got 4 axes"),
        (["--channel-axis", 7], r"no channel axis 7"),
        (["--channel-axis", 1, "--noise", "twins.npy"], r"not positive definite"),
        (
            ["--channel-axis", 1, "--noise", "few.npy"],
            r"3 noise samples are too few for 4",
        ),
        (["--channel-axis", 1, "--noise", "three.npy"], r"shape \(3, 4000\) do not fit 4 channels"),
    ],
)
def test_measured_channels_and_noise_must_fit(tmp_path: Path, change: list, says: str) -> None:
    command = measured(tmp_path)
    noise = np.load(tmp_path / "noise.npy")
    np.save(tmp_path / "twins.npy", noise[[0, 1, 2, 2]])
    np.save(tmp_path / "few.npy", noise[:, :3])
    np.save(tmp_path / "three.npy", noise[:3])
    options = [tmp_path / c if str(c).endswith(".npy") else c for c in change]
    refused(*command, *options, says=says)
    assert not list(tmp_path.glob("image*"))


def test_a_channel_axis_of_length_one(tmp_path: Path) -> None:
    command = measured(tmp_path)
    np.save(tmp_path / "k.npy", np.load(tmp_path / "k.npy")[:, :1])
    refused(*command, "--channel-axis", 1, says=r"Channel axis 1 has length 1")


@pytest.mark.parametrize(
    ("method", "says"),
    [
        ("kernel", r"calibration.*smallest region for this kernel is \d+ lines"),
        ("unfold", r"calibration region of 2 x 16 samples is too small for a 6 x 6 kernel"),
        ("wavelet", r"Acquire at least \d+ x \d+ samples"),
    ],
)
def test_too_few_calibration_lines(tmp_path: Path, method: str, says: str) -> None:
    command = measured(tmp_path, calibration=2)
    refused(*command, "--channel-axis", 1, "--method", method, says=says)
    assert not list(tmp_path.glob("image*"))


def test_a_silent_channel_is_named_and_the_scan_recovered(tmp_path: Path) -> None:
    command = measured(tmp_path, silent=2)
    done = mrics(*command, "--channel-axis", 1, "--method", "unfold", "--noise", "noise.npy",
                 cwd=tmp_path)  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert "channels without signal left out: 2" in done.stderr + done.stdout
    assert "3 channel(s)" in done.stdout
    assert "noise covariance from noise samples" in done.stdout
