"""Settings of every recovery: frozen, checked when made, cheap to import.

Weights are in units of the total noise sigma, or a word that says how to choose them:
"auto" (from the data, the rule that measured best), "best" (against the reference, with the answer
in hand), "trained" (on a study's training scans), or a single rule: "held-out", "sure",
"discrepancy". ``check_settings`` is what a protocol uses to judge a
``[[recovery]]`` entry before any data is read.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, fields
from importlib import import_module
from typing import Any

from mrics.errors import RecoveryError
from mrics.recovery.fields import Settings, choice, nearest, number, phase_field, weight_field
from mrics.recovery.registry import METHODS

WAVELETS = (
    "haar",
    *(f"db{n}" for n in range(2, 11)),
    *(f"sym{n}" for n in range(2, 11)),
)


@dataclass(frozen=True)
class ZeroFilled(Settings):
    """Zero-filled image: the adjoint, missing samples zero; nothing to set."""


@dataclass(frozen=True)
class LeastSquares(Settings):
    """Least squares by conjugate gradients.

    Attributes
    ----------
    damping : float or "auto"
        Tikhonov term, relative to the largest eigenvalue of A^H A; 0 gives the solution of
        minimum norm. "auto": by noise and signal energy where there are several channels.
    iterations : int
        Most iterations.
    tolerance : float
        Relative residual of the normal equations to stop at.
    """

    damping: float | str = number("auto", 0.0, words=("auto",))
    iterations: int = number(100, 1, 100_000, whole=True)
    tolerance: float = number(1e-5, 0.0, 1.0, above=True)


@dataclass(frozen=True)
class Convex(Settings):
    """What every recovery by one convex objective takes.

    Attributes
    ----------
    weight : float or str
        Weight of the penalty in units of sigma, or one of ``WEIGHT_WORDS``.
    iterations : int or None
        Most iterations; None for 500, and for 60 where shifts are random.
    tolerance : float
        Duality gap, relative to the objective, to stop at.
    """

    weight: float | str = weight_field()
    iterations: int | None = number(None, 1, 100_000, whole=True, optional=True)
    tolerance: float = number(1e-3, 0.0, 1.0, above=True)


@dataclass(frozen=True)
class Wavelet(Convex):
    """L1 of orthonormal wavelet coefficients.

    Attributes
    ----------
    wavelet : str
        Orthogonal wavelet.
    levels : int or None
        Levels; None for as many as leave at least 5 samples, at most 4.
    scales : sequence of float or None
        Factors of the weight for every level, finest first; None for ones.
    joint : bool
        Shrink the coefficients of all frames at a place together.
    shift : str
        "none": one fixed transform, certified. "full": the mean over all shifts,
        translation-invariant, certified. "random": a random shift in every iteration, nearly
        translation-invariant and fast, without a fixed objective.
    phase : str
        "free", or "smooth": the image is real, of either sign, times the phase of the calibration
        region.
    seed : int
        Seed of the random shifts.
    """

    wavelet: str = choice("sym4", WAVELETS)
    levels: int | None = number(None, 1, 12, whole=True, optional=True)
    scales: tuple[float, ...] | None = field(
        default=None, metadata={"kind": "numbers", "optional": True}
    )
    joint: bool = field(default=False, metadata={"kind": "flag"})
    shift: str = choice("random", ("none", "random", "full"))
    phase: str = phase_field()
    seed: int = number(0, 0, whole=True)

    def __post_init__(self) -> None:
        super().__post_init__()
        if self.scales is None:
            return
        object.__setattr__(self, "scales", tuple(float(factor) for factor in self.scales))
        if self.levels is None:
            object.__setattr__(self, "levels", len(self.scales))
        if self.levels != len(self.scales):
            raise RecoveryError(
                f"{len(self.scales)} factors were given for {self.levels} levels.",
                "scales, levels",
                "Give one factor for each level, finest first, or leave levels out.",
            )


@dataclass(frozen=True)
class Variation(Convex):
    """Total variation.

    Attributes
    ----------
    order : int
        1: total variation, which makes shading into steps. 2: second-order total generalised
        variation, which keeps slopes.
    phase : str
        "free", or "smooth": the image is real, of either sign, times the phase of the calibration
        region.
    """

    order: int = number(1, 1, 2, whole=True)
    phase: str = phase_field()


@dataclass(frozen=True)
class WaveletVariation(Convex):
    """L1 of wavelet coefficients over all shifts, and total variation.

    Attributes
    ----------
    variation : float
        Weight of the total variation relative to ``weight``.
    wavelet : str
        Orthogonal wavelet.
    levels : int or None
        Levels; None for as many as leave at least 5 samples, at most 4.
    phase : str
        "free", or "smooth": the image is real, of either sign, times the phase of the calibration
        region.
    """

    variation: float = number(1.0, 0.0, above=True)
    wavelet: str = choice("sym4", WAVELETS)
    levels: int | None = number(None, 1, 12, whole=True, optional=True)
    phase: str = phase_field()


@dataclass(frozen=True)
class LowRank(Convex):
    """Low rank over frames; noise alone is removed at a weight of 1.5.

    Attributes
    ----------
    model : str
        "local": blocks of low rank. "low-rank+sparse": the plane as a part of low rank and a part
        of few temporal frequencies.
    block : int
        Side of a block in pixels, for "local".
    sparse : float
        Weight of the temporal frequencies relative to ``weight``, for "low-rank+sparse".
    """

    model: str = choice("local", ("local", "low-rank+sparse"))
    block: int = number(8, 2, 512, whole=True)
    sparse: float = number(2.0, 0.0, above=True)


@dataclass(frozen=True)
class Unfold(Settings):
    """Unfolding of regular patterns by sensitivities; nothing to set."""


@dataclass(frozen=True)
class Kernel(Settings):
    """Missing samples of regular patterns from calibrated neighbours.

    Attributes
    ----------
    lines : int
        Nearest lattice lines a missing sample is made of.
    samples : int
        Nearest lattice samples on each of them.
    damping : float
        Tikhonov term of the calibration, relative to its largest eigenvalue.
    combine : str
        "sensitivities" (highest SNR) or "root-sum-of-squares".
    """

    lines: int = number(4, 1, 16, whole=True)
    samples: int = number(5, 1, 31, whole=True)
    damping: float = number(1e-5, 0.0, 1.0)
    combine: str = choice("sensitivities", ("sensitivities", "root-sum-of-squares"))


@dataclass(frozen=True)
class Homodyne(Settings):
    """Partial Fourier in one step; nothing to set."""


@dataclass(frozen=True)
class Pocs(Settings):
    """Partial Fourier by projections in turn.

    Attributes
    ----------
    iterations : int
        Most iterations.
    tolerance : float
        Relative change of the image to stop at.
    """

    iterations: int = number(50, 1, 10_000, whole=True)
    tolerance: float = number(1e-4, 0.0, 1.0, above=True)


@dataclass(frozen=True)
class PatchDictionary(Settings):
    """Sparse patches over a dictionary.

    Attributes
    ----------
    source : str
        "adaptive": learned from the data as it goes; "trained": the file ``dictionary``;
        "dct", "wavelets", "union": fixed.
    dictionary : str or None
        Path of a trained dictionary; gives the patch size too.
    patch, depth : int
        Samples of a patch along u and v, and planes in a 3-D patch.
    atoms : int
        Atoms learned.
    kind : str
        "real": atoms that code real and imaginary part each on its own, the smooth phase taken
        out; "complex".
    joint : bool
        Stack all frames of a place in one patch.
    gain : float or "auto"
        Error target of a patch, as a root mean square in units of the effective noise.
    most_atoms : int or None
        Most atoms of a patch; None for half its samples, so that the error target rules.
    iterations : int
        Outer iterations.
    stride, border
        Step between patches; "wrap" or "reflect".
    start : str
        "variation" or "zero-filled".
    seed : int
        Seed of the choice of patches.
    """

    source: str = choice("adaptive", ("adaptive", "trained", "dct", "wavelets", "union"))
    dictionary: str | None = field(default=None, metadata={"kind": "text", "optional": True})
    patch: int = number(5, 2, 32, whole=True)
    depth: int = number(1, 1, 16, whole=True)
    atoms: int = number(256, 2, 4096, whole=True)
    kind: str = choice("real", ("real", "complex"))
    joint: bool = field(default=False, metadata={"kind": "flag"})
    gain: float | str = number("auto", 0.0, above=True, words=("auto",))
    most_atoms: int | None = number(None, 1, 4096, whole=True, optional=True)
    iterations: int = number(10, 1, 1000, whole=True)
    stride: int = number(1, 1, 32, whole=True)
    border: str = choice("wrap", ("wrap", "reflect"))
    start: str = choice("variation", ("variation", "zero-filled"))
    seed: int = number(0, 0, whole=True)

    def __post_init__(self) -> None:
        if self.dictionary is not None and self.source == "adaptive":
            object.__setattr__(self, "source", "trained")
        super().__post_init__()
        if (self.source == "trained") != (self.dictionary is not None):
            raise RecoveryError(
                f"Source {self.source!r} and dictionary {self.dictionary!r} do not go together.",
                "source, dictionary",
                "Give dictionary = the path of a trained file, or another source without one.",
            )


SETTINGS: dict[str, type[Settings]] = {
    "dictionary": PatchDictionary,
    "homodyne": Homodyne,
    "pocs": Pocs,
    "kernel": Kernel,
    "unfold": Unfold,
    "zero-filled": ZeroFilled,
    "least-squares": LeastSquares,
    "low-rank": LowRank,
    "variation": Variation,
    "wavelet": Wavelet,
    "wavelet+variation": WaveletVariation,
}


def settings_in_module(method: str) -> type[Settings]:
    """The ``SETTINGS`` of a method's own module; :class:`Settings`, which has none, without them.

    Settings listed above are known without loading the module, which keeps plans fast.
    """
    module = import_module(f"mrics.recovery.{METHODS[method]}")
    kind: type[Settings] = getattr(module, "SETTINGS", Settings)
    return kind


def check_settings(method: str, settings: Mapping[str, Any]) -> Settings:
    """The settings of a method as its dataclass.

    Parameters
    ----------
    method : str
        Registry name.
    settings : mapping
        Keys and values as a protocol or a caller gives them, without ``method``.

    Raises
    ------
    RecoveryError
        For an unknown method or key (the nearest one is named) or a value out of range.
    """
    if method not in METHODS:
        raise RecoveryError(
            f"There is no recovery called {method!r}{nearest(method, METHODS)}.",
            "method",
            f"Choose one of: {', '.join(sorted(METHODS))}.",
        )
    kind = SETTINGS.get(method) or settings_in_module(method)
    known = [entry.name for entry in fields(kind)]
    for key in settings:
        if key not in known:
            raise RecoveryError(
                f"Recovery {method!r} has no setting {key!r}{nearest(key, known)}.",
                key,
                f"Its settings are: {', '.join(known) or 'none'}.",
            )
    return kind(**settings)
