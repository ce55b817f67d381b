"""Studies of several receive channels: simulated around one image, and the scan's own."""

from pathlib import Path

import nibabel
import numpy as np
import pytest
from small_study import AFFINE, PROTOCOL, small_object, write_small_study

from mrics.encoding.coils import simulate_coils
from mrics.errors import MricsError, MricsWarning
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
    assert "sensitivities simulated: 6 loops" in notes
    assert "Phase simulated: a smooth random phase of 0.8 rad" in notes


def write_channels(folder: Path, text: str, silent: int | None = None) -> Path:
    """A scan of six channels with noise of its own in each, and its protocol."""
    protocol = write_small_study(folder, 0, text, SHAPE)
    axes = Axes("i", "j")
    planes = axes.to_planes(small_object(0, SHAPE))
    maps = simulate_coils(planes.shape, (3.0, 1.2, 1.0), number=6).sensitivities[:]
    noise = np.random.default_rng(5).standard_normal((*maps.shape, 2)) @ [3.0, 3.0j]
    images = maps * planes[:, None] + noise
    if silent is not None:
        images[:, silent] = 0
    channels = np.stack([axes.from_planes(images[:, c], SHAPE) for c in range(6)], axis=-1)
    image = nibabel.Nifti1Image(channels.astype(np.complex64), AFFINE)
    nibabel.save(image, folder / "object_0.nii.gz")
    return protocol


OWN = UNFOLDED.replace('phase_axis = "j"', 'phase_axis = "j"\nchannel_axis = 3')


def test_channels_of_the_scan_are_used_as_they_are(tmp_path: Path) -> None:
    results = run_study(write_channels(tmp_path, OWN), tmp_path / "out")
    scan = results["scans"][0]
    assert scan["channels"] == 6
    receive = scan["receive"]
    assert receive["source"] == "scan"
    assert receive["noise"] == "noise covariance from the border of the image along the readout"
    assert len(receive["singular_values"]) == 6
    assert receive["noise"] in " ".join(results["notes"])
    # SD 3 as written above, and the object's own of 1 shared by six channels.
    assert scan["sigma"] == pytest.approx(np.sqrt(9 + 1 / 6), rel=0.03)
    image = small_object(0, SHAPE)
    reference = nibabel.load(tmp_path / "out" / "reference" / "object-0_reference.nii.gz")
    body = nibabel.load(tmp_path / "out" / "reference" / "object-0_body.nii.gz").get_fdata() > 0
    gap = (reference.get_fdata() - np.abs(image))[body]
    assert np.linalg.norm(gap) < 0.1 * np.linalg.norm(image[body])
    today = next(a for a in results["arms"] if a["today"])
    assert today["metrics"]["nrmse"]["mean"] < 0.1
    assert "own calibration region" in today["certificates"]["note"]
    maps = nibabel.load(tmp_path / "out" / "reference" / "object-0_sensitivities.nii.gz")
    assert maps.shape == (48, 96, 1, 6)
    assert np.iscomplexobj(np.asanyarray(maps.dataobj))


def test_a_silent_channel_is_named_and_left_out(tmp_path: Path) -> None:
    protocol = write_channels(tmp_path, OWN, silent=0)
    with pytest.warns(MricsWarning, match=r"object_0: channels without signal left out: 0 "):
        results = run_study(protocol, tmp_path / "out")
    assert results["scans"][0]["receive"]["channels"] == 5
    assert "channels without signal left out: 0" in " ".join(results["notes"])
    today = next(a for a in results["arms"] if a["today"])
    assert today["metrics"]["nrmse"]["mean"] < 0.1


def test_virtual_channels_serve_every_arm(tmp_path: Path) -> None:
    protocol = write_channels(tmp_path, OWN.replace("seed = 7", "seed = 7\nvirtual_channels = 4"))
    results = run_study(protocol, tmp_path / "out")
    today = next(a for a in results["arms"] if a["today"])
    assert "6 channels compressed to 4" in today["certificates"]["note"]
    assert today["metrics"]["nrmse"]["mean"] < 0.15
    assert results["scans"][0]["receive"]["virtual"] == 4
    few = UNFOLDED.replace("calibration = 24", "calibration = 8") + "\n[coils]\nnumber = 6\n"
    protocol = write_small_study(
        tmp_path / "few", 1, few.replace("seed = 7", "seed = 7\nvirtual_channels = 4"), SHAPE
    )
    results = run_study(protocol, tmp_path / "few" / "out")
    today = next(a for a in results["arms"] if a["today"])
    assert "sensitivities of the full scan" in today["certificates"]["note"]
    assert today["metrics"]["nrmse"]["mean"] < 0.15


@pytest.mark.parametrize("own", [False, True])
def test_a_3d_scan_is_compressed_for_every_readout_position(tmp_path: Path, own: bool) -> None:
    shape = (12, 40, 36)
    text = (
        UNFOLDED.replace("gradient-echo-2d", "gradient-echo-3d")
        .replace('phase_axis = "j"', 'phase_axis = "j"\npartition_axis = "k"')
        .replace('sampling = "equispaced"', 'sampling = { pattern = "equispaced", steps = [2, 1] }')
        .replace("seed = 7", "seed = 7\nvirtual_channels = 4")
    )
    if own:
        protocol = write_small_study(
            tmp_path, 0, text.replace('"k"', '"k"\nchannel_axis = 3'), shape
        )
        planes = Axes("i", "j", "k").to_planes(small_object(0, shape))
        maps = simulate_coils(planes.shape, (1.0, 1.2, 3.0), number=6, bore=2).sensitivities[:]
        noise = np.random.default_rng(5).standard_normal((*maps.shape, 2)) @ [1.0, 1.0j]
        channels = (maps * planes[:, None] + noise).transpose(0, 2, 3, 1).astype(np.complex64)
        nibabel.save(nibabel.Nifti1Image(channels, AFFINE), tmp_path / "object_0.nii.gz")
    else:
        protocol = write_small_study(tmp_path, 1, text + "\n[coils]\nnumber = 6\n", shape)
    results = run_study(protocol, tmp_path / "out")
    today = next(a for a in results["arms"] if a["today"])
    assert "6 channels compressed to 4" in today["certificates"]["note"]
    [unit] = [u for u in results["units"] if u["arm"] == today["id"]]
    # The outermost readout positions hold noise alone, and no sensitivities.
    inner = [one["nrmse"] for one in unit["slices"] if 2 <= one["index"] <= 9]
    assert max(inner) < 0.1


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ("[coils]\nnumber = 6", r"\[coils\] simulates an array, but channel_axis = 3 names"),
        ("virtual_channels = 7", r"7 virtual channels cannot be made of 6"),
    ],
)
def test_channel_settings_that_contradict_are_refused(
    tmp_path: Path, change: str, says: str
) -> None:
    protocol = write_channels(tmp_path, OWN + change + "\n")
    with pytest.raises(MricsError, match=says):
        run_study(protocol, tmp_path / "out")
    assert not (tmp_path / "out").exists()


def test_virtual_channels_of_one_image_are_refused(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, 1, UNFOLDED + "virtual_channels = 2\n", SHAPE)
    with pytest.raises(MricsError, match=r"cannot be made of 1.*\n.*\n.*\[coils\]"):
        run_study(protocol, tmp_path / "out")
