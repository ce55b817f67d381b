"""The compiled wavelet transform against PyWavelets."""

import os
import subprocess
import sys
import warnings

import numpy as np
import pytest
import pywt

from mrics.numerics.wavelets import PlaneWavelet


def noise(shape, dtype, seed=0):
    rng = np.random.default_rng(seed)
    return (rng.standard_normal(shape) + 1j * rng.standard_normal(shape)).astype(dtype)


def real(array):
    return array.view(array.real.dtype)


@pytest.mark.parametrize(
    ("dtype", "wavelet", "shape", "levels", "tolerance"),
    [
        (np.complex64, "sym4", (64, 96), 4, 3e-6),
        (np.complex64, "sym4", (8, 160), 3, 3e-6),
        (np.complex128, "haar", (32, 16), 3, 1e-12),
        (np.complex128, "db4", (48, 64), 4, 1e-12),
        (np.complex128, "db4", (6, 10), 1, 1e-12),
    ],
)
def test_coefficients_equal_pywavelets(dtype, wavelet, shape, levels, tolerance):
    """PyWavelets wavedec2, mode periodization, is the reference."""
    image = noise(shape, dtype)
    transform = PlaneWavelet(shape, wavelet, levels, dtype)
    coefficients, back = np.empty_like(image), np.empty_like(image)
    transform.analyse(real(image), real(coefficients))
    transform.synthesise(real(coefficients), real(back))
    with warnings.catch_warnings():  # it warns where the coarsest band is shorter than the filter
        warnings.simplefilter("ignore", UserWarning)
        reference = pywt.wavedec2(
            image.astype(np.complex128), wavelet, mode="periodization", level=levels
        )
    np.testing.assert_allclose(
        coefficients, pywt.coeffs_to_array(reference)[0], rtol=0, atol=tolerance * 3
    )
    np.testing.assert_allclose(back, image, rtol=0, atol=tolerance * 3)


def test_synthesis_is_the_adjoint_of_analysis():
    """<W x, c> = <x, W^H c>, by definition; orthonormal: Parseval."""
    shape = (32, 48)
    x, c = noise(shape, np.complex128, 1), noise(shape, np.complex128, 2)
    transform = PlaneWavelet(shape, "db3", 3, np.complex128)
    wx, back = np.empty_like(x), np.empty_like(x)
    transform.analyse(real(x), real(wx))
    transform.synthesise(real(c), real(back))
    assert np.vdot(wx, c) == pytest.approx(np.vdot(x, back), rel=1e-12)
    assert np.vdot(wx, wx) == pytest.approx(np.vdot(x, x), rel=1e-12)


def test_a_first_run_is_told_from_a_later_one(tmp_path):
    code = (
        "import numpy as np; from mrics.numerics.wavelets import PlaneWavelet, kernels_kept;"
        "print(kernels_kept()); x = np.zeros((8, 16), np.float32);"
        "PlaneWavelet((8, 8), 'haar', 1, np.complex64).analyse(x, x.copy()); print(kernels_kept())"
    )
    done = subprocess.run(
        [sys.executable, "-c", code],
        env={**os.environ, "NUMBA_CACHE_DIR": str(tmp_path)},
        capture_output=True,
        text=True,
        check=True,
    )
    assert done.stdout.split() == ["False", "True"]
