"""Where patches lie in a stack, cutting them out, choosing them, and averaging coded ones."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import RecoveryError
from mrics.numerics import map_blocks, stream, stream_blocks
from mrics.recovery.dictionary import strips
from mrics.recovery.dictionary.coding import Prepared

Array = NDArray[Any]
#: rows of patch positions a thread takes at a time
_ROWS = 16
#: share of the largest patch energy a chosen patch has at least
ENERGY_SHARE = 1e-3


@dataclass(frozen=True)
class Layout:
    """How patches lie in a stack of planes.

    Attributes
    ----------
    groups : tuple of tuple of int
        For every group the planes stacked in its patches: one for 2-D patches, neighbours for
        3-D patches, all frames of a place for joint frames.
    size : tuple of int
        Patch size along u and v.
    stride : int
        Step between patches.
    border : str
        "wrap" or "reflect".
    """

    groups: tuple[tuple[int, ...], ...]
    size: tuple[int, int]
    stride: int = 1
    border: str = "wrap"

    @property
    def layers(self) -> int:
        """Planes in one patch."""
        return len(self.groups[0])

    @property
    def length(self) -> int:
        """Samples in one patch."""
        return self.layers * self.size[0] * self.size[1]


def lay_out(
    shape: tuple[int, int, int],
    size: Sequence[int],
    *,
    frames: int = 1,
    joint: bool = False,
    stride: int = 1,
    border: str = "wrap",
) -> Layout:
    """Patches of a stack (plane, u, v) whose frame f of place p is plane ``f * places + p``.

    Parameters
    ----------
    shape : tuple of int
        Stack shape.
    size : sequence of 2 or 3 int
        (u, v) or (plane, u, v).
    frames : int
        Frames folded into planes.
    joint : bool
        Stack all frames of a place in one patch.
    stride, border
        See :class:`Layout`.

    Raises
    ------
    RecoveryError
        Where the patch is larger than the stack, or frames do not divide the planes.
    """
    depth, pu, pv = (1, *size) if len(size) == 2 else tuple(size)
    planes, u, v = shape
    if frames < 1 or planes % frames:
        raise RecoveryError(
            f"{planes} planes are not a whole number of {frames} frames.",
            "frames",
            "Give the number of frames folded into the planes.",
        )
    places = planes // frames
    for axis, wanted, there in (("plane", depth, places), ("u", pu, u), ("v", pv, v)):
        if wanted > there:
            raise RecoveryError(
                f"A patch of {wanted} samples is larger than the stack of {there} along {axis}.",
                f"patch, axis {axis}",
                "Choose a smaller patch.",
            )
    if not 1 <= stride <= min(pu, pv):
        raise RecoveryError(
            f"A stride of {stride} leaves samples between patches of {pu} x {pv} uncovered.",
            "stride",
            f"Give 1 to {min(pu, pv)}.",
        )

    def near(place: int) -> int:
        if border == "wrap":
            return place % places
        return place if place < places else 2 * places - 1 - place

    groups = []
    for frame in range(1 if joint else frames):
        for place in range(places):
            deep = [near(place + d) for d in range(depth)]
            chosen = range(frames) if joint else (frame,)
            groups.append(tuple(f * places + p for f in chosen for p in deep))
    return Layout(tuple(groups), (pu, pv), stride, border)


def order_of(length: int, size: int, border: str) -> NDArray[np.intp]:
    """Samples of an axis in an order, longer than it, that puts every patch position inside."""
    before = size - 1 if border == "reflect" else 0
    mode: Any = "wrap" if border == "wrap" else "symmetric"
    order: NDArray[np.intp] = np.pad(np.arange(length), (before, size - 1), mode=mode)
    return order


def _starts(total: int, size: int, stride: int) -> NDArray[np.intp]:
    starts = np.arange(0, total - size + 1, stride)
    return starts if starts[-1] == total - size else np.append(starts, total - size)


def cut(stack: Array, layout: Layout, places: NDArray[np.intp]) -> Array:
    """Patches (patch, n) at ``places`` (patch, 3) of (group, u, v), border by wrapping."""
    _, u, v = stack.shape
    rows = (places[:, 1, None] + np.arange(layout.size[0])) % u
    cols = (places[:, 2, None] + np.arange(layout.size[1])) % v
    groups = np.array(layout.groups)[places[:, 0]]
    taken = stack[groups[:, :, None, None], rows[:, None, :, None], cols[:, None, None, :]]
    return np.ascontiguousarray(taken.reshape(len(places), -1))


def without_mean(patches: Array, layers: int) -> Array:
    """Patches with each layer's mean taken away."""
    split = patches.reshape(len(patches), layers, -1)
    return (split - split.mean(axis=2, keepdims=True)).reshape(patches.shape)


def choose(
    stack: Array,
    layout: Layout,
    count: int,
    seed: int,
    identity: tuple[object, ...] = (),
    body: NDArray[np.bool_] | None = None,
) -> Array:
    """Mean-free patches for learning, drawn from those with energy inside the body.

    Parameters
    ----------
    stack : ndarray of shape (plane, u, v)
        Source.
    layout : Layout
        Where patches may lie.
    count : int
        Most patches.
    seed, identity
        Stream of the draw.
    body : ndarray of bool, shape (plane, u, v), optional
        A patch's middle has to lie in it.

    Returns
    -------
    ndarray of shape (patch, n)
        At most ``count`` patches; those within 0.1 % of the largest energy or less are left out.
    """
    _, u, v = stack.shape
    total = len(layout.groups) * u * v
    generator = stream(seed, "patches", *identity)
    most = min(4 * count, total)
    flat = generator.choice(total, most, replace=False) if total > count else np.arange(total)
    places = np.stack(np.unravel_index(flat, (len(layout.groups), u, v)), axis=1)
    if body is not None:
        middle = np.array([group[len(group) // 2] for group in layout.groups])
        rows = (places[:, 1] + layout.size[0] // 2) % u
        cols = (places[:, 2] + layout.size[1] // 2) % v
        places = places[body[middle[places[:, 0]], rows, cols]]

    def one(start: int) -> tuple[Array, Array]:
        block = without_mean(cut(stack, layout, places[start : start + 4096]), layout.layers)
        return block, np.sum(np.abs(block) ** 2, axis=1)

    kept = map_blocks(one, range(0, len(places), 4096))
    if not kept:
        return np.empty((0, layout.length), stack.dtype)
    patches, energy = (np.concatenate(parts) for parts in zip(*kept, strict=True))
    good = energy > ENERGY_SHARE * energy.max(initial=0)
    return patches[good][:count]


@dataclass(frozen=True)
class Averaged:
    """What coding all patches of a stack gives.

    Attributes
    ----------
    image : ndarray of shape (plane, u, v)
        Average of the coded patches over every sample.
    residual : ndarray of float32, shape (group, u, v)
        Squared residual of the patch at each position, 0 between strides.
    atoms_used : ndarray of float32, shape (group, u, v)
        Atoms per patch, 0 between strides.
    use : ndarray of int64, shape (atom,)
        How often every atom was used.
    patches : int
        Patches coded.
    """

    image: Array
    residual: NDArray[np.float32]
    atoms_used: NDArray[np.float32]
    use: NDArray[np.int64]
    patches: int

    @property
    def mean_atoms(self) -> float:
        """Atoms per patch, over all patches."""
        return float(self.use.sum() / max(1, self.patches))


def code_and_average(
    stack: Array, prepared: Prepared, layout: Layout, limit: int, target: float
) -> Averaged:
    """Code every patch of a complex stack to an error or count, and average them.

    ``target`` is the squared residual of a patch: of its real and its imaginary part each where
    the atoms are real, of both together where they are complex. Strips of rows are spread over the
    threads and added in one order; a strip's codes are gone when it is done.
    """
    planes, u, v = stack.shape
    pu, pv = layout.size
    atoms = prepared.atoms
    pair = np.ascontiguousarray(np.stack([atoms.real, atoms.imag]))
    before = pu - 1 if layout.border == "reflect" else 0
    left = pv - 1 if layout.border == "reflect" else 0
    real = np.dtype(stack.dtype.type(0).real.dtype)
    down, across = order_of(u, pu, layout.border), order_of(v, pv, layout.border)
    total = np.zeros((planes, len(down), len(across)), stack.dtype)
    weight = np.zeros(total.shape, stack.dtype)
    layers = np.array(layout.groups)
    rows = _starts(total.shape[1], pu, layout.stride)
    cols = _starts(total.shape[2], pv, layout.stride)
    use = np.zeros(len(atoms), np.int64)
    shape = (len(layout.groups), u, v)
    patches = len(layout.groups) * len(rows) * len(cols)
    residual, used = np.zeros(shape, np.float32), np.zeros(shape, np.float32)

    def one(task: tuple[int, int]) -> tuple[Any, ...]:
        group, first = task
        some = rows[first : first + _ROWS]
        low, high = int(some[0]), int(some[-1]) + pu
        image = stack[np.ix_(layers[group], down[low:high], across)].view(real)
        out, share = np.zeros_like(image), np.zeros(image.shape[1:], real)
        counts = np.zeros(len(atoms), np.int64)
        parts = np.empty((2, len(some), len(cols)), np.float32)
        strips.denoise_strip(
            image, some - low, cols, layout.size, prepared.columns, pair, prepared.gram, limit,
            target, out, share, counts, parts[0], parts[1],
        )  # fmt: skip
        return group, some, out.view(stack.dtype), share.view(stack.dtype), counts, parts

    tasks = [(g, f) for g in range(len(layout.groups)) for f in range(0, len(rows), _ROWS)]
    for group, some, out, share, counts, parts in stream_blocks(one, tasks):
        low, high = int(some[0]), int(some[-1]) + pu
        for layer, plane in enumerate(layout.groups[group]):
            total[plane, low:high] += out[layer]
            weight[plane, low:high] += share
        use += counts
        at = np.ix_((some - before) % u, (cols - left) % v)
        residual[group][at], used[group][at] = parts
    if layout.border == "reflect":
        inside = (slice(None), slice(before, before + u), slice(left, left + v))
        return Averaged(_divided(total[inside], weight[inside]), residual, used, use, patches)
    for array in (total, weight):
        array[:, : pu - 1] += array[:, u:]
        array[:, :, : pv - 1] += array[:, :, v:]
    return Averaged(_divided(total[:, :u, :v], weight[:, :u, :v]), residual, used, use, patches)


def _divided(total: Array, weight: Array) -> Array:
    """``total`` with real and imaginary part each divided by its own weight, in place."""

    def one(plane: int) -> None:
        total[plane].real /= weight[plane].real
        total[plane].imag /= weight[plane].imag

    map_blocks(one, range(len(total)))
    return total
