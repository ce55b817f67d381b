"""Images as compact blocks of whole numbers inside the page.

Of every scan, reference and recovered images are rounded to one lattice of ``step``; a block holds
the reference's lattice numbers, the others hold the recovered image's numbers less the reference's.
So image values read from the page are within step/2 of the stored maps, errors within one step.
Numbers are 8-bit, or 16-bit as all low bytes followed by all high bytes, compressed by zlib and
written in base 85 (four bytes as five digits, most significant first), whose digits need no
escaping in a page. Values beyond ``step * 32767`` (at least eight times the reference's largest)
are cut there.
"""

from __future__ import annotations

import zlib
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mrics.numerics import map_blocks
from mrics.report.pictures import ScanPictures

DIGITS = "".join(chr(c) for c in range(33, 127) if chr(c) not in "\"&'<>\\`{}")
"""The 85 digits: printable characters without those that mean something in markup or scripts."""

_LEVELS = (4096, 2048, 1024, 512, 256)
_LARGEST = 32767


@dataclass(frozen=True)
class Block:
    """Whole numbers of one stack of slices; a value is ``step * (offset + number)``.

    Attributes
    ----------
    text : str
        Base-85 text of the compressed numbers.
    size : int
        Compressed bytes, without the padding of the text.
    bits : int
        8 or 16.
    offset : int
        Added to every number.
    """

    text: str
    size: int
    bits: int
    offset: int


@dataclass(frozen=True)
class ScanBlocks:
    """Blocks of one scan.

    Attributes
    ----------
    pictures : ScanPictures
        What they were made of.
    positions : list of int
        Which of its slices they hold.
    step : float
        Lattice constant.
    reference : Block
    recovered : list of Block
        In the order of ``pictures.recovered``.
    """

    pictures: ScanPictures
    positions: list[int]
    step: float
    reference: Block
    recovered: list[Block]


def pack(scans: list[ScanPictures], text_limit: int) -> list[ScanBlocks]:
    """Blocks of all scans on the finest lattice that fits, with fewer slices if none does.

    Parameters
    ----------
    scans : list of ScanPictures
    text_limit : int
        Characters that all blocks may take together.
    """
    if not scans:
        return []
    levels = next((n for n in _LEVELS if _estimate(scans, n) <= 0.95 * text_limit), _LEVELS[-1])
    share = 1.0
    while True:
        packed = [_pack_scan(scan, levels, share) for scan in scans]
        size = sum(_size(one) for one in packed)
        least = all(len(one.positions) <= 2 for one in packed)
        if size <= text_limit or least:
            return packed
        finer = _LEVELS.index(levels)
        if finer + 1 < len(_LEVELS):
            levels = _LEVELS[finer + 1]
        else:
            share *= 0.95 * text_limit / size


def pack_map(values: NDArray[np.float32], low: float, top: float) -> Block:
    """A map of a measure in 8 bits: 1 to 255 for ``low`` to ``top``, 0 where there is no value."""
    with np.errstate(invalid="ignore"):
        share = (values.astype(np.float64) - low) / (top - low)
        numbers = 1 + np.rint(254 * np.clip(share, 0.0, 1.0))
    return _encode(np.where(np.isfinite(values), numbers, 0).astype(np.int32))


def pack_change(values: NDArray[np.float32], step: float) -> Block:
    """Signed changes of image values as lattice numbers."""
    return _encode(
        np.clip(np.rint(values.astype(np.float64) / step), -_LARGEST, _LARGEST).astype(np.int32)
    )


def _size(packed: ScanBlocks) -> int:
    return len(packed.reference.text) + sum(len(b.text) for b in packed.recovered)


def _estimate(scans: list[ScanPictures], levels: int) -> float:
    """Characters that all slices would take, judged by one slice in twelve of every stack."""
    total = 0.0
    for scan in scans:
        count = len(scan.places)
        some = list(range(count // 24, count, 12)) or [0]
        step = _step(scan, levels)
        truth = _lattice(scan.reference[some], step)
        sizes = [len(_encode(truth).text)]
        sizes += [len(_encode(_lattice(r.image[some], step) - truth).text) for r in scan.recovered]
        total += sum(sizes) * count / len(some)
    return total


def _pack_scan(scan: ScanPictures, levels: int, share: float) -> ScanBlocks:
    positions = _thinned(scan, share)
    step = _step(scan, levels)
    truth = _lattice(scan.reference[positions], step)

    def change(image: NDArray[np.float32]) -> Block:
        return _encode(_lattice(image[positions], step) - truth)

    blocks = map_blocks(change, [one.image for one in scan.recovered])
    return ScanBlocks(scan, positions, step, _encode(truth), blocks)


def _thinned(scan: ScanPictures, share: float) -> list[int]:
    """The important slices and others spread evenly over those held."""
    count = len(scan.places)
    keep = max(min(2, count), int(share * count))
    if keep >= count:
        return list(range(count))
    spread = [int((k + 0.5) * count / keep) for k in range(keep)]
    wanted = list(dict.fromkeys([*scan.important, *spread]))
    return sorted(wanted[:keep])


def _step(scan: ScanPictures, levels: int) -> float:
    largest = float(scan.reference.max(initial=0.0))
    return (largest if largest > 0 else 1.0) / levels


def _lattice(image: NDArray[np.float32], step: float) -> NDArray[np.int32]:
    numbers = np.rint(image / np.float32(step))
    return np.minimum(numbers, _LARGEST).astype(np.int32)


def _encode(numbers: NDArray[np.int32]) -> Block:
    low, high = int(numbers.min(initial=0)), int(numbers.max(initial=0))
    shifted = numbers - low
    bits = 8 if high - low < 256 else 16
    raw = (shifted & 255).astype(np.uint8).tobytes()
    if bits == 16:
        raw += (shifted >> 8).astype(np.uint8).tobytes()
    compressed = zlib.compress(raw, 6)
    return Block(text_of(compressed), len(compressed), bits, low)


def text_of(data: bytes) -> str:
    """Bytes in base 85, padded with zero bytes to a multiple of four."""
    words = np.frombuffer(data + bytes(-len(data) % 4), dtype=">u4").astype(np.uint32)
    digits = np.empty((len(words), 5), dtype=np.uint8)
    for place in range(4, -1, -1):
        words, digits[:, place] = words // 85, words % 85
    return np.frombuffer(DIGITS.encode(), dtype=np.uint8)[digits].tobytes().decode("ascii")
