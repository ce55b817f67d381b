"""The operator contract: adjointness, Parseval, types, shapes, in-place use."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from mrics.encoding import Encoding
from mrics.errors import AcquisitionError
from mrics.numerics import fft_planes

TOLERANCE = {np.complex64: 1e-5, np.complex128: 1e-12}


def noise(generator, shape, dtype):
    return (generator.standard_normal(shape) + 1j * generator.standard_normal(shape)).astype(dtype)


def operator(generator, planes, channels, u, v, dtype, full_readout, shared_maps, shared_mask):
    mask = generator.random((1 if shared_mask else planes, 1, u, 1 if full_readout else v)) < 0.5
    mask[:, :, 0] = True
    maps = None
    if channels > 1:
        maps = noise(generator, (1 if shared_maps else planes, channels, u, v), dtype)
    return Encoding(mask, (planes, u, v), dtype, maps)


@settings(max_examples=40, deadline=None)
@given(
    seed=st.integers(0, 2**16),
    planes=st.integers(1, 3),
    channels=st.integers(1, 3),
    u=st.integers(1, 13),
    v=st.integers(1, 12),
    dtype=st.sampled_from([np.complex64, np.complex128]),
    flags=st.tuples(st.booleans(), st.booleans(), st.booleans()),
)
def test_adjoint_and_normal(seed, planes, channels, u, v, dtype, flags):
    # Source: definition of the adjoint, <A x, y> = <x, A^H y>.
    generator = np.random.default_rng(seed)
    one = operator(generator, planes, channels, u, v, dtype, *flags)
    x = noise(generator, one.in_shape, dtype)
    y = noise(generator, one.out_shape, dtype)
    ax, ahy = one.forward(x), one.adjoint(y)
    scale = np.linalg.norm(ax) * np.linalg.norm(y) + np.linalg.norm(x) * np.linalg.norm(ahy)
    assert abs(np.vdot(y, ax) - np.vdot(ahy, x)) <= TOLERANCE[dtype] * scale
    normal = one.normal(x)
    assert normal.dtype == ax.dtype == ahy.dtype == np.dtype(dtype)
    gap = np.linalg.norm(normal - one.adjoint(ax))
    assert gap <= 10 * TOLERANCE[dtype] * max(1.0, one.bound) * np.linalg.norm(x)


@pytest.mark.parametrize(("u", "v"), [(8, 10), (9, 7), (8, 7), (1, 6)])
@pytest.mark.parametrize("dtype", [np.complex64, np.complex128])
def test_full_pattern_keeps_energy(u, v, dtype):
    # Source: Parseval; the orthonormal transform is unitary.
    generator = np.random.default_rng(3)
    one = Encoding(np.ones((1, 1, u, 1), bool), (2, u, v), dtype)
    x = noise(generator, one.in_shape, dtype)
    y = one.forward(x)
    assert np.linalg.norm(y) == pytest.approx(np.linalg.norm(x), rel=TOLERANCE[dtype])
    np.testing.assert_allclose(one.adjoint(y), x, atol=TOLERANCE[dtype] * 4)


def test_forward_is_the_written_sum():
    # Source: the formula in mrics.numerics.fourier, as a direct sum over pixels.
    generator = np.random.default_rng(5)
    u, v = 5, 6
    mask = generator.random((1, 1, u, v)) < 0.6
    maps = noise(generator, (1, 2, u, v), np.complex128)
    one = Encoding(mask, (1, u, v), np.complex128, maps)
    x = noise(generator, (1, u, v), np.complex128)
    n, m = np.arange(u), np.arange(v)
    expected = np.zeros((2, u, v), complex)
    for c in range(2):
        for k in range(u):
            for q in range(v):
                wave = np.exp(-2j * np.pi * (k * n[:, None] / u + q * m[None] / v))
                expected[c, k, q] = mask[0, 0, k, q] * (wave * maps[0, c] * x[0]).sum()
    expected /= np.sqrt(u * v)
    np.testing.assert_allclose(one.forward(x)[0], expected, atol=1e-12)


@pytest.mark.parametrize("channels", [1, 3])
def test_buffers_are_filled_in_place(channels):
    generator = np.random.default_rng(7)
    one = operator(generator, 2, channels, 8, 9, np.complex64, False, False, True)
    x = noise(generator, one.in_shape, np.complex64)
    y = noise(generator, one.out_shape, np.complex64)
    x_kept, y_kept = x.copy(), y.copy()
    k, image, gram = (np.empty(s, np.complex64) for s in (one.out_shape, *[one.in_shape] * 2))
    assert np.shares_memory(one.forward(x, k), k)
    assert one.adjoint(y, image) is image
    assert one.normal(x, gram) is gram
    np.testing.assert_array_equal(x, x_kept)
    np.testing.assert_array_equal(y, y_kept)
    np.testing.assert_array_equal(k, one.forward(x))
    np.testing.assert_array_equal(image, one.adjoint(y))
    np.testing.assert_array_equal(gram, one.normal(x))
    np.testing.assert_array_equal(image, one.adjoint(y.copy(), overwrite=True))


def test_the_transform_overwrites_in_place():
    work = np.ones((2, 3, 8, 9), np.complex64)
    assert np.shares_memory(fft_planes(work, overwrite=True), work)
    assert np.shares_memory(fft_planes(work[1, 0], overwrite=True, axes=(-2,)), work)


@pytest.mark.parametrize("shared", [True, False])
def test_part_is_the_same_operator(shared):
    generator = np.random.default_rng(11)
    one = operator(generator, 4, 2, 6, 5, np.complex128, False, shared, shared)
    x = noise(generator, one.in_shape, np.complex128)
    part = one.part(slice(1, 3))
    np.testing.assert_allclose(part.forward(x[1:3]), one.forward(x)[1:3], atol=1e-14)
    np.testing.assert_allclose(part.normal(x[1:3]), one.normal(x)[1:3], atol=1e-14)


def test_bound_holds_and_is_reached_by_a_full_pattern():
    # Source: with every sample acquired A^H A is multiplication by sum |S|^2.
    generator = np.random.default_rng(13)
    maps = noise(generator, (1, 3, 6, 6), np.complex128)
    one = Encoding(np.ones((1, 1, 6, 1), bool), (1, 6, 6), np.complex128, maps)
    peak = np.zeros((1, 6, 6), complex)
    peak[(0, *np.unravel_index(np.argmax(one.energy[0]), (6, 6)))] = 1
    assert np.abs(one.normal(peak)).max() == pytest.approx(one.bound)


def test_wrong_shapes_and_types_are_refused():
    one = Encoding(np.ones((1, 1, 6, 1), bool), (2, 6, 5))
    with pytest.raises(AcquisitionError, match=r"image has shape \(2, 5, 6\)"):
        one.forward(np.zeros((2, 5, 6), np.complex64))
    with pytest.raises(AcquisitionError, match="complex128; the operator needs"):
        one.normal(np.zeros((2, 6, 5), np.complex128))
    with pytest.raises(AcquisitionError, match="kspace has shape"):
        one.adjoint(np.zeros((2, 6, 5), np.complex64))
    with pytest.raises(AcquisitionError, match="Mask of shape"):
        Encoding(np.ones((1, 1, 5, 1), bool), (2, 6, 5))
    with pytest.raises(AcquisitionError, match="another grid"):
        Encoding(np.ones((1, 1, 6, 1), bool), (2, 6, 5), sensitivities=np.ones((2, 3, 6, 6)))
    with pytest.raises(AcquisitionError, match="complex64 or complex128, got float32"):
        Encoding(np.ones((1, 1, 6, 1), bool), (2, 6, 5), np.float32)
