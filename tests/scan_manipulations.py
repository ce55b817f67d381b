"""Scans of known history: the invented knee as it is, and after each kind of manipulation.

Used by the tests of the fitness checks and by their statistical campaign.
"""

from __future__ import annotations

import io
from collections.abc import Callable
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import numpy as np
from PIL import Image

from mrics.numerics import centred_fft, centred_ifft, stream
from mrics.scan import Axes, Scan, body_mask, read_scan

SAMPLES = Path(__file__).parents[1] / "sample_data"
Array = np.ndarray


def as_scan(data: Array) -> Scan:
    whole = np.iscomplexobj(data)
    return Scan(
        data=data.astype(np.complex64 if whole else np.float32),
        affine=np.eye(4),
        voxel_mm=(1.0, 1.0, 1.0),
        complex_source="complex" if whole else "magnitude",
    )


def axes_of(name: str) -> Axes:
    """The sample sequences: gre3d has partitions along k, tse2d has slices there."""
    return Axes("i", "j", "k" if "gre3d" in name else None)


@cache
def sample(name: str, planes: int = 28) -> Array:
    """The middle planes of a shipped sample scan, mean magnitude in the body 100."""
    stem = SAMPLES / name
    real, imaginary = (
        stem.with_name(f"{stem.name}_part-{part}_PDw.nii.gz") for part in ("real", "imag")
    )
    data = read_scan(real, imaginary=imaginary).data
    start = max(0, (data.shape[2] - planes) // 2)
    data = np.ascontiguousarray(data[:, :, start : start + planes])
    return data * np.float32(100 / np.abs(data)[body_mask(data)].mean())


def noisy(clean: Array, sigma: float, seed: int) -> Array:
    parts = stream(seed, "fitness").standard_normal((2, *clean.shape), np.float32)
    return clean + np.float32(sigma) * (parts[0] + 1j * parts[1])


def zero_fill(x: Array, factor: float, axes: tuple[int, ...]) -> Array:
    for axis in axes:
        old = x.shape[axis]
        new = round(old * factor)
        shape = list(x.shape)
        shape[axis] = new
        kspace = np.zeros(shape, np.complex64)
        index = [slice(None)] * 3
        index[axis] = slice(new // 2 - old // 2, new // 2 - old // 2 + old)
        kspace[tuple(index)] = centred_fft(x, (axis,))
        x = centred_ifft(kspace, (axis,)) * np.float32(np.sqrt(new / old))
    return x


def window(x: Array, shape: Callable[[Array], Array], axes: tuple[int, ...]) -> Array:
    for axis in axes:
        length = x.shape[axis]
        radius = np.abs(np.arange(length) - length // 2) / (length / 2)
        line = [1, 1, 1]
        line[axis] = length
        x = centred_ifft(centred_fft(x, (axis,)) * shape(radius).reshape(line), (axis,))
    return x


def hamming(r: Array) -> Array:
    return 0.54 + 0.46 * np.cos(np.pi * r)


def fermi(edge: float, width: float = 0.05) -> Callable[[Array], Array]:
    return lambda r: 1 / (1 + np.exp((r - edge) / width))


def tukey(share: float) -> Callable[[Array], Array]:
    def shape(r: Array) -> Array:
        fall = 0.5 * (1 + np.cos(np.pi * (r - (1 - share)) / share))
        return np.where(r > 1 - share, fall, 1.0)

    return shape


def partial_fourier(x: Array, share: float, axis: int) -> Array:
    length = x.shape[axis]
    kspace = centred_fft(x, (axis,))
    index = [slice(None)] * 3
    index[axis] = slice(0, length - round(share * length))
    kspace[tuple(index)] = 0
    return centred_ifft(kspace, (axis,))


def linear_shift(x: Array, distance: float, axes: tuple[int, ...]) -> Array:
    for axis in axes:
        x = (1 - distance) * x + distance * np.roll(x, 1, axis)
    return x


def _levels(part: Array) -> tuple[Array, float, int]:
    signed = bool(part.min() < 0)
    step = float(np.abs(part).max()) / (127 if signed else 255)
    base = 128 if signed else 0
    return np.clip(np.rint(part / step) + base, 0, 255).astype(np.uint8), step, base


def _by_part(x: Array, change: Callable[[Array], Array]) -> Array:
    return change(x.real) + 1j * change(x.imag) if np.iscomplexobj(x) else change(x)


def eight_bit(x: Array) -> Array:
    def change(part: Array) -> Array:
        counts, step, base = _levels(part)
        return (counts.astype(np.float32) - base) * step

    return _by_part(x, change)


def jpeg(x: Array, quality: int) -> Array:
    """Every slice through the baseline JPEG codec of Pillow (libjpeg), parts alone."""

    def change(part: Array) -> Array:
        counts, step, base = _levels(part)
        out = np.empty(part.shape, np.float32)
        for k in range(part.shape[2]):
            stream_ = io.BytesIO()
            Image.fromarray(counts[:, :, k]).save(stream_, "JPEG", quality=quality)
            out[:, :, k] = np.asarray(Image.open(stream_))
        return (out - base) * step

    return _by_part(x, change)


def masked(x: Array) -> Array:
    return x * body_mask(x)


@dataclass(frozen=True)
class Case:
    """A manipulation, the code that must be found, and whether it acts on the magnitude."""

    name: str
    change: Callable[[Array], Array]
    codes: tuple[str, ...]
    after_magnitude: bool = False
    complex_only: bool = False
    true_share: float = 0.0


def _zero_filled(factor: float) -> Case:
    return Case(
        f"zero-filled x{factor:g}",
        lambda x: zero_fill(x, factor, (0, 1)),
        ("zero-filled",),
        complex_only=factor < 1.25,
        true_share=1 / factor,
    )


SMOOTH = ("filtered", "resampled")
CASES = (
    *(_zero_filled(factor) for factor in (1.2, 1.25, 1.5, 2.0)),
    Case("Hamming", lambda x: window(x, hamming, (0, 1)), ("filtered",)),
    Case("Fermi 0.85", lambda x: window(x, fermi(0.85), (0, 1)), SMOOTH),
    Case("Fermi 0.95", lambda x: window(x, fermi(0.95), (0, 1)), SMOOTH),
    Case("Tukey 0.3", lambda x: window(x, tukey(0.3), (0, 1)), SMOOTH),
    Case("Tukey 0.5", lambda x: window(x, tukey(0.5), (1,)), SMOOTH),
    *(
        Case(f"trilinear {d:g}", lambda x, d=d: linear_shift(x, d, (0, 1, 2)), ("resampled",))
        for d in (0.2, 0.35, 0.5)
    ),
    *(
        Case(
            f"partial Fourier {n}/8",
            lambda x, n=n: partial_fourier(x, n / 8, 1),
            ("partial-fourier",),
        )
        for n in (5, 6, 7)
    ),
    *(
        Case(f"JPEG {q}", lambda x, q=q: jpeg(x, q), ("block-compression",), after_magnitude=True)
        for q in (70, 85, 95)
    ),
    Case("8 bit", eight_bit, ("coarse-levels",), after_magnitude=True),
    Case("mask", masked, ("exact-zero-background",)),
)


def manipulated(case: Case, x: Array, magnitude: bool) -> Array:
    if not magnitude:
        return case.change(x)
    return case.change(np.abs(x)) if case.after_magnitude else np.abs(case.change(x))
