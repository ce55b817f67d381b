"""What can be done about a finding: each remedy makes a new scan and says so in it."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import ScanError
from mrics.numerics import centred_fft, centred_ifft, stream
from mrics.scan.fitness.finding import Finding
from mrics.scan.volume import LETTERS, Axes, Scan

INVENTED = "invented phase"


def crop_kspace(scan: Scan, **samples: int) -> Scan:
    """Keep the central samples of k-space along some axes: undo zero-filled interpolation.

    Parameters
    ----------
    scan : Scan
        Any scan; of a real one the result is real again.
    **samples : int
        Samples to keep by axis letter, for example ``i=192``.

    Returns
    -------
    Scan
        On the coarser grid, same field of view and image intensity; the position of index N//2
        stays, as it does in the centred transform.

    Raises
    ------
    ScanError
        Unknown axis letter, or more samples than there are or fewer than 2.
    """
    data, affine, voxel = scan.data, scan.affine.copy(), list(scan.voxel_mm)
    for letter, count in samples.items():
        if letter not in LETTERS or not 2 <= count <= scan.shape[LETTERS.index(letter)]:
            raise ScanError(
                f"{letter} = {count} cannot be kept of a scan of shape {scan.shape}.",
                "crop_kspace",
                "Name axes i, j, k and keep between 2 samples and as many as the axis has.",
            )
        axis = LETTERS.index(letter)
        length = data.shape[axis]
        data = _cropped(data, axis, count)
        centre = affine[:3, 3] + affine[:3, axis] * (length // 2)
        affine[:3, axis] *= length / count
        affine[:3, 3] = centre - affine[:3, axis] * (count // 2)
        voxel[axis] *= length / count
    told = ", ".join(f"{letter} to {count}" for letter, count in samples.items())
    return _changed(
        scan,
        f"k-space cropped along {told}",
        data=data,
        affine=affine,
        voxel_mm=(voxel[0], voxel[1], voxel[2]),
    )


def _cropped(data: NDArray[Any], axis: int, count: int) -> NDArray[Any]:
    length = data.shape[axis]
    kspace = centred_fft(data, (axis,))
    start = length // 2 - count // 2
    index: list[Any] = [slice(None)] * data.ndim
    index[axis] = slice(start, start + count)
    image = centred_ifft(kspace[tuple(index)], (axis,)) * np.float32(np.sqrt(count / length))
    return image.astype(data.dtype) if np.iscomplexobj(data) else image.real.astype(data.dtype)


def acquired_region(scan: Scan, axes: Axes | None = None) -> dict[str, NDArray[np.bool_]]:
    """Which k-space positions along each encoded axis hold data.

    Returns
    -------
    dict of str to ndarray of bool
        By axis letter, centred (zero frequency at N//2); True where k-space is not empty. The key
        ``partial_fourier`` of a sampling table keeps patterns to it where the low side is empty.
        A scan without phase cannot tell one-sided emptiness.
    """
    # The checks' view needs scipy.ndimage, which a plan should not wait for.
    from mrics.scan.fitness.view import PROFILE_DB, ScanView

    view = ScanView(scan, axes if axes is not None else Axes())
    region = {}
    for axis in view.encoded:
        length = view.volume.shape[axis]
        held = np.ones(length, dtype=bool)
        up, down = view.profile_edges(axis)
        if up.fall_db >= PROFILE_DB:
            held[length // 2 + int(up.place) + 1 :] = False
        if down.fall_db >= PROFILE_DB:
            held[: length // 2 - int(down.place)] = False
        region[LETTERS[axis]] = held
    return region


def conjugate(scan: Scan) -> Scan:
    """Mirror k-space (the image's complex conjugate): an empty high side becomes the low side.

    Patterns with ``partial_fourier`` leave out the low side.
    """
    told = "conjugated, so that the empty side of k-space is the lower one"
    return _changed(scan, told, data=np.conj(scan.data))


def add_phase(scan: Scan, *, strength_rad: float = 2.0, seed: int = 0) -> Scan:
    """Multiply a smooth invented phase into a scan that has none.

    The phase is a sum of the cosines of order 0 to 3 along each axis with random weights, scaled
    to a standard deviation of ``strength_rad``; its k-space is no longer Hermitian.

    Raises
    ------
    ScanError
        The scan has phase already.
    """
    if scan.complex_source != "magnitude":
        raise ScanError(
            f"The scan has phase already ({scan.complex_source}).",
            scan.name,
            "Add phase to magnitude-only scans.",
        )
    weights = stream(seed, "invented phase", scan.sha256).standard_normal((4, 4, 4))
    order = np.add.outer(np.add.outer(np.arange(4), np.arange(4)), np.arange(4))
    weights = np.where(order <= 3, weights / (1.0 + order), 0.0)
    waves = [np.cos(np.pi * np.outer(np.arange(4), np.linspace(0, 1, n))) for n in scan.shape[:3]]
    phase = np.einsum("abc,ai,bj,ck->ijk", weights, *waves, optimize=True)
    phase *= strength_rad / max(float(phase.std()), 1e-12)
    turn = np.exp(1j * phase).astype(np.complex64)
    turn = turn.reshape(*turn.shape, *[1] * (scan.data.ndim - 3))
    told = f"smooth phase of {strength_rad:g} rad invented (seed {seed})"
    return _changed(scan, told, data=scan.data * turn, complex_source=INVENTED)


def add_noise(scan: Scan, sigma: float, *, seed: int = 0) -> Scan:
    """Add white complex noise, ``sigma`` in each of its two parts.

    Of a magnitude-only scan the magnitude is taken again, so its noise is Rician.

    Raises
    ------
    ScanError
        Sigma is not a positive number.
    """
    if not (np.isfinite(sigma) and sigma > 0):
        raise ScanError(
            f"Noise of sigma {sigma} cannot be added.", scan.name, "Give a positive sigma."
        )
    parts = stream(seed, "added noise", scan.sha256).standard_normal((2, *scan.shape), np.float32)
    parts *= np.float32(sigma)
    data = scan.data + (parts[0] + 1j * parts[1])
    if scan.complex_source == "magnitude":
        data = np.abs(data)
    return _changed(
        scan,
        f"white noise of sigma {sigma:.4g} added (seed {seed})",
        data=data.astype(scan.data.dtype),
    )


def remedied(scan: Scan, findings: Iterable[Finding], *, sigma: float = 0.0, seed: int = 0) -> Scan:
    """The scan with every remedy that its findings name and that needs no other data.

    K-space is cropped to the measured matrix where it was zero-filled, a smooth phase is invented
    where there is none, noise is added where ``sigma`` is given and a finding asks for it, and
    k-space is mirrored where it is empty on the side that patterns cannot leave out.
    """
    found = list(findings)
    sides = {dict(f.settings).get("empty") for f in found if f.remedy == "acquired_region"}
    crop = {}
    for finding in found:
        if finding.remedy == "crop_kspace":
            crop.update({str(letter): int(str(count)) for letter, count in finding.settings})
    asked = {finding.remedy for finding in found}
    if crop:
        scan = crop_kspace(scan, **crop)
    if sides == {"high"}:
        scan = conjugate(scan)
    if "add_phase" in asked and scan.complex_source == "magnitude":
        scan = add_phase(scan, seed=seed)
    if "add_noise" in asked and sigma > 0:
        scan = add_noise(scan, sigma, seed=seed)
    return scan


def _changed(scan: Scan, told: str, **fields: Any) -> Scan:
    """A new scan whose hash and list of remedies say what was done."""
    mixed = hashlib.sha256(f"{scan.sha256}\n{told}".encode()).hexdigest()
    return replace(scan, sha256=mixed, remedies=(*scan.remedies, told), **fields)
