"""The split of an error into measured, missing and invented parts."""

import numpy as np
import pytest
from chains import acquire, body, coils, phantom

from mrics.errors import QualityError
from mrics.numerics import centred_fft
from mrics.quality.error_split import PARTS, _by_window, error_split
from mrics.recovery import recover


def added_up(split):
    return split.measured + split.invented - split.missing


@pytest.mark.parametrize("channels", [0, 4])
@pytest.mark.parametrize("shape", [(2, 64, 48), (1, 45, 51)])
def test_parts_add_up_to_the_error(channels, shape):
    image = phantom(shape)
    maps = coils(*shape[1:], channels) if channels else None
    held = acquire(image, sensitivities=maps)
    found = recover(held, "least-squares").image
    split = error_split(found, image, held, mask=body(shape))
    error = found - image
    np.testing.assert_allclose(added_up(split), error, atol=1e-6 * np.linalg.norm(error))
    assert split.orthogonal == (channels == 0)
    if channels:
        rms = np.sqrt(np.mean(np.abs(image[body(shape)]) ** 2))
        assert split.damping == pytest.approx((held.sigma / rms) ** 2)


def test_parts_are_orthogonal_for_one_channel():
    image = phantom()
    held = acquire(image)
    found = recover(held, "wavelet", iterations=30).image
    split = error_split(found, image, held)
    squares = [np.linalg.norm(getattr(split, name)) ** 2 for name in PARTS]
    assert sum(squares) == pytest.approx(np.linalg.norm(found - image) ** 2, rel=1e-6)
    for name, square in zip(PARTS, squares, strict=True):
        assert split.totals[name] == pytest.approx(np.sqrt(square) / np.linalg.norm(image))


def test_measured_part_lies_on_the_measured_samples():
    image = phantom()
    held = acquire(image, sigma=0.1)
    split = error_split(recover(held, "zero-filled").image, image, held)
    acquired = np.broadcast_to(held.mask[0], (64, 48))
    spectrum = centred_fft(split.measured)
    assert np.abs(spectrum[:, ~acquired]).max() < 1e-12
    # Zero-filled: the measured error is the noise of those samples alone.
    noise = np.abs(spectrum[:, acquired]) ** 2
    assert noise.mean() == pytest.approx(2 * 0.1**2, rel=0.05)


def test_zero_filling_leaves_out_and_invents_nothing():
    image = phantom()
    held = acquire(image, sigma=0.0)
    split = error_split(recover(held, "zero-filled").image, image, held)
    assert split.totals["invented"] < 1e-9
    assert split.totals["measured"] < 1e-9
    lost = np.linalg.norm(image - recover(held, "zero-filled").image) / np.linalg.norm(image)
    assert split.totals["missing"] == pytest.approx(lost)


def test_detail_of_another_object_is_invented():
    image = phantom()
    other = np.roll(image[:, :, ::-1], 5, axis=1) * np.random.default_rng(0).choice([1, -1], 48)
    held = acquire(image, sigma=0.0)
    acquired = held.mask[held.pattern_index]
    from mrics.numerics import centred_ifft

    foreign = centred_ifft(centred_fft(other) * ~acquired)
    split = error_split(recover(held, "zero-filled").image + foreign, image, held)
    share = np.linalg.norm(foreign) / np.linalg.norm(image)
    assert 0.7 * share < split.totals["invented"] <= share * (1 + 1e-9)
    # A recovery that shows the reference's own detail at half height invents nothing.
    half = recover(held, "zero-filled").image + 0.5 * centred_ifft(centred_fft(image) * ~acquired)
    halved = error_split(half, image, held)
    assert halved.totals["invented"] < 1e-9
    np.testing.assert_allclose(halved.missing, 0.5 * (image - recover(held, "zero-filled").image))


def test_windows_split_by_projection():
    rng = np.random.default_rng(1)
    a, b = rng.standard_normal((2, 40, 33)) + 1j * rng.standard_normal((2, 40, 33))
    missing, invented = _by_window(a, b)
    np.testing.assert_allclose(invented - missing, a - b, atol=1e-12)
    again = _by_window(2.0 * b, b)
    np.testing.assert_allclose(again[0], -b, atol=1e-12)
    np.testing.assert_allclose(again[1], 0.0, atol=1e-12)


def test_empty_planes_and_bad_shapes():
    image = phantom()
    image[1] = 0.0
    held = acquire(image, sigma=0.0)
    split = error_split(recover(held, "zero-filled").image, image, held)
    assert np.isnan(split.shares["missing"][1])
    with pytest.raises(QualityError, match="differ in shape"):
        error_split(image[:1], image, held)
