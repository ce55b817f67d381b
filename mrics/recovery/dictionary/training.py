"""A dictionary from fully sampled scans, with where it came from and how well it codes them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

import mrics
from mrics.errors import RecoveryError
from mrics.recovery.dictionary.coding import Prepared
from mrics.recovery.dictionary.domain import relative_residuals, worth_judging
from mrics.recovery.dictionary.learning import learn_ksvd, learn_online
from mrics.recovery.dictionary.patches import Layout, choose, lay_out
from mrics.recovery.dictionary.phase import smooth_phase
from mrics.recovery.dictionary.store import CHECK_SPARSITY, Dictionary

Array = NDArray[Any]
METHODS = ("online", "k-svd")
#: patches kept out of learning, on which the residual distribution is taken
_JUDGED = 4000
_ROUNDS = 10


@dataclass(frozen=True)
class TrainingScan:
    """A fully sampled scan as training takes it.

    Attributes
    ----------
    stack : ndarray of shape (frame * plane, u, v)
        Images, frame by frame.
    body : ndarray of bool, same shape
        Where patches may have their middle.
    name, sha256 : str
        File name without folders, and hash of the file.
    frames : int
        Frames folded into planes.
    largest : float
        Largest magnitude; patches are divided by it, so that scans count alike.
    sigma : float
        Standard deviation of the real part of the noise.
    magnitude_only : bool
        The phase is unknown.
    """

    stack: Array
    body: NDArray[np.bool_]
    name: str = ""
    sha256: str = ""
    frames: int = 1
    largest: float = 1.0
    sigma: float = 0.0
    magnitude_only: bool = False


@dataclass(frozen=True)
class Training:
    """Settings of a training.

    Attributes
    ----------
    method : str
        "online" or "k-svd".
    patch, depth : int
        Samples along u and v, and planes in a 3-D patch.
    joint : bool
        Stack all frames (or contrasts) of a place in one patch.
    kind : str
        "real": atoms of the real part, smooth phase taken out; "complex".
    atoms : int
        Atoms learned.
    sparsity : int
        Atoms of a patch while learning.
    patches : int
        Patches of all scans together.
    passes : int
        Times every patch is seen; K-SVD makes 10 rounds.
    seed : int
        Same seed, same bits.
    """

    method: str = "online"
    patch: int = 5
    depth: int = 1
    joint: bool = False
    kind: str = "real"
    atoms: int = 256
    sparsity: int = 5
    patches: int = 20_000
    passes: int = 3
    seed: int = 0

    def __post_init__(self) -> None:
        for key, words in (("method", METHODS), ("kind", ("real", "complex"))):
            if getattr(self, key) not in words:
                raise RecoveryError(
                    f"{key} must be one of {', '.join(words)}, got {getattr(self, key)!r}.",
                    key,
                    "Choose one of them.",
                )
        for key, low in (("patch", 2), ("depth", 1), ("atoms", 2), ("sparsity", 1), ("patches", 2)):
            if getattr(self, key) < low:
                raise RecoveryError(
                    f"{key} must be at least {low}, got {getattr(self, key)}.", key, "Raise it."
                )


def train_dictionary(scans: Sequence[TrainingScan], settings: Training) -> Dictionary:
    """Learn a dictionary.

    Parameters
    ----------
    scans : sequence of TrainingScan
        Scans of one kind.
    settings : Training
        How.

    Returns
    -------
    Dictionary
        Atoms, most used first, with provenance and the sorted relative squared residuals of
        patches that learning did not see (where there are enough), at 6 atoms.

    Raises
    ------
    RecoveryError
        Where there are fewer patches than atoms, nothing but constants, a patch larger than a
        scan, frames that differ between joint scans, or complex atoms asked of magnitudes.
    """
    learned: list[Array] = []
    judged: list[tuple[Array, float]] = []
    layers: dict[int, str] = {}
    count = -(-settings.patches // len(scans))
    extra = -(-_JUDGED // len(scans))
    for number, scan in enumerate(scans):
        patches, layout = _patches(scan, settings, count + extra, number)
        layers.setdefault(layout.layers, scan.name)
        # Too few to spare any: all of them teach, and all are judged.
        spare = extra if len(patches) >= count // 2 + extra else 0
        learned.append(patches[spare:][:count])
        some, noise = patches[: spare or None], scan.sigma / (scan.largest or 1.0)
        energy = np.sum(np.abs(some) ** 2, axis=1)
        parts = 2 if np.iscomplexobj(some) else 1
        judged.append((some[worth_judging(energy, layout.length, parts, noise)], noise))
    if len(layers) > 1:
        raise RecoveryError(
            f"Scans stack {' and '.join(map(str, layers))} planes in a patch.",
            ", ".join(layers.values()),
            "Train jointly on scans of the same number of frames.",
        )
    patches = np.concatenate(learned)
    options: dict[str, Any] = {"sparsity": settings.sparsity, "seed": settings.seed}
    if settings.method == "online":
        atoms = learn_online(patches, settings.atoms, passes=settings.passes, **options)
    else:
        atoms, _ = learn_ksvd(patches, settings.atoms, rounds=_ROUNDS, **options)
    prepared = Prepared(atoms)
    residuals = np.concatenate([relative_residuals(p, prepared, s) for p, s in judged])
    size = (settings.patch, settings.patch)
    return Dictionary(
        atoms,
        size if settings.depth == 1 else (settings.depth, *size),
        next(iter(layers)),
        np.sort(residuals).astype(np.float32),
        {
            "mrics": mrics.__version__,
            "settings": asdict(settings),
            "scans": [{"name": scan.name, "sha256": scan.sha256} for scan in scans],
            "patches": len(patches),
            "residual_sparsity": CHECK_SPARSITY,
            "residual_of_unseen_patches": all(len(p) <= extra for p, _ in judged),
        },
    )


def _patches(
    scan: TrainingScan, settings: Training, count: int, number: int
) -> tuple[Array, Layout]:
    """Mean-free patches of one scan in units of its largest magnitude."""
    whole = settings.kind == "complex"
    if whole and scan.magnitude_only:
        raise RecoveryError(
            f"Complex atoms are asked of {scan.name}, which has magnitudes only.",
            "kind",
            "Use kind real, or give scans with their phase.",
        )
    size = (settings.patch, settings.patch)
    try:
        layout = lay_out(
            scan.stack.shape, size if settings.depth == 1 else (settings.depth, *size),
            frames=scan.frames, joint=settings.joint,
        )  # fmt: skip
    except RecoveryError as error:
        raise RecoveryError(error.what, f"{scan.name}: {error.where}", error.fix) from error
    stack = scan.stack
    if np.iscomplexobj(stack):
        stack = stack * np.conj(smooth_phase(stack))
        stack = stack if whole else np.ascontiguousarray(stack.real)
    stack = (stack / (scan.largest or 1.0)).astype(np.complex64 if whole else np.float32)
    return choose(stack, layout, count, settings.seed, ("training", number), scan.body), layout
