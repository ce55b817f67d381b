"""Which measures a study takes, as a protocol's ``[quality]`` table asks for them."""

from __future__ import annotations

import difflib
from collections.abc import Mapping
from dataclasses import dataclass, fields
from typing import Any

from mrics.errors import QualityError
from mrics.quality.edges import Edge
from mrics.quality.features import Feature


@dataclass(frozen=True)
class Measures:
    """Measures beside the plain scores; those that need further recoveries are off by default.

    Attributes
    ----------
    more_scores : bool
        MS-SSIM, gradient deviation, worst patches and the spectral error, of every plane.
    error_split : bool
        Measured, missing and invented parts of the error, of every plane.
    edges : bool or tuple of Edge
        Edge blur, of every plane studied: at edges that are found, or at these.
    labels : tuple of str
        Label maps (NIfTI): one for every scan, or one for each. Regions are measured in them, and
        features are inserted inside them.
    background_label : int or None
        Label that contrast and CNR of the others are taken against.
    planes : int
        Planes that measures with further recoveries use, spread over the body.
    noise_replicas : int
        Replicas of the noise gain; 0 for none.
    resolution_runs : int
        Recoveries of the local resolution; 0 for none.
    perturbation_sigma : float
        Size of its perturbations, in units of the noise level.
    features : tuple of Feature
        Features to insert; none by default. The limit ``feature_retention_min`` is held against the
        one that is kept least, so list those that have to survive.
    feature_sites : int
        Sites of each feature.
    observer_images : int
        Recovered images of the observer, at least 80; 0 for none.
    observer_size_mm, observer_contrast : float
        Disc it looks for: diameter, and contrast in per cent of the local signal.
    """

    more_scores: bool = True
    error_split: bool = True
    edges: bool | tuple[Edge, ...] = False
    labels: tuple[str, ...] = ()
    background_label: int | None = None
    planes: int = 2
    noise_replicas: int = 0
    resolution_runs: int = 0
    perturbation_sigma: float = 5.0
    features: tuple[Feature, ...] = ()
    feature_sites: int = 12
    observer_images: int = 0
    observer_size_mm: float = 3.0
    observer_contrast: float = 20.0

    def __post_init__(self) -> None:
        least = {"planes": 1, "noise_replicas": 0, "resolution_runs": 0, "feature_sites": 1}
        for name, low in {**least, "observer_images": 0}.items():
            value = getattr(self, name)
            if not isinstance(value, int) or isinstance(value, bool) or value < low:
                raise _bad(name, value, f"a whole number of at least {low}")
        if self.noise_replicas == 1:
            raise _bad("noise_replicas", 1, "0 for none, or at least 2")
        for name in ("perturbation_sigma", "observer_size_mm", "observer_contrast"):
            value = getattr(self, name)
            if isinstance(value, bool) or not isinstance(value, int | float) or not value > 0:
                raise _bad(name, value, "a positive number")
        for name in ("more_scores", "error_split"):
            if not isinstance(getattr(self, name), bool):
                raise _bad(name, getattr(self, name), "true or false")
        if self.background_label is not None:
            label = self.background_label
            if isinstance(label, bool) or not isinstance(label, int) or label < 1:
                raise _bad("background_label", label, "a whole number of at least 1")
            if not self.labels:
                raise _bad("background_label", label, "given together with labels")

    @property
    def metrics(self) -> frozenset[str]:
        """Metrics that these measures give, beside the scores."""
        by_measure = {
            "more_scores": ("ms_ssim", "gmsd", "nrmse_patch", "ssim_patch", "error_fine"),
            "error_split": ("error_measured", "error_missing", "error_invented"),
            "edges": ("edge_blur",),
            "noise_replicas": ("noise_ratio", "noise_gain"),
            "resolution_runs": ("resolution_u_mm", "resolution_v_mm"),
            "features": ("feature_retention", "feature_shift_mm"),
            "labels": ("region_bias",),
            "background_label": ("region_cnr",),
            "observer_images": ("observer_auc", "observer_efficiency"),
        }
        return frozenset(
            name for key, names in by_measure.items() if getattr(self, key) for name in names
        )

    @property
    def recoveries(self) -> int:
        """Recoveries of the chosen planes these measures need, the first included."""
        extra = self.noise_replicas + self.resolution_runs + len(self.features)
        extra += -(-self.observer_images // self.planes)
        return 1 + extra if extra else 0


def measures_from(table: Mapping[str, Any]) -> Measures:
    """Read a ``[quality]`` table.

    Its keys are the fields of :class:`Measures`. ``features`` is a list of tables with the keys of
    :class:`mrics.quality.features.Feature`; ``size_mm`` and ``contrast`` may be lists, and every
    combination is inserted. ``edges`` is true, false, or a list of tables with the keys of
    :class:`mrics.quality.edges.Edge`; ``labels`` one path or a list of them.

    Raises
    ------
    QualityError
        For unknown keys (the nearest is named) and values out of range.
    """
    known = [entry.name for entry in fields(Measures)]
    for key in table:
        _known(key, known, f"[quality] {key}")
    values = dict(table)
    if "features" in values:
        values["features"] = tuple(
            feature for entry in values["features"] for feature in _features(entry)
        )
    if "edges" in values:
        values["edges"] = _edges(values["edges"])
    if "labels" in values:
        given = values["labels"]
        listed = tuple(given) if isinstance(given, list | tuple) else (given,)
        if not listed or not all(isinstance(path, str) and path for path in listed):
            raise _bad("labels", given, "one path in quotes, or a list of them")
        values["labels"] = listed
    return Measures(**values)


def _edges(given: Any) -> bool | tuple[Edge, ...]:
    if isinstance(given, bool):
        return given
    if not isinstance(given, list | tuple) or not given:
        raise _bad("edges", given, "true, false or a list of tables")
    known = [one.name for one in fields(Edge)]
    found = []
    for entry in given:
        if not isinstance(entry, Mapping):
            raise _bad("edges", entry, "a table with i, j, k and angle_deg")
        for key in entry:
            _known(key, known, f"[quality] edges.{key}")
        for name in ("i", "j", "k", "angle_deg"):
            value = entry.get(name)
            if isinstance(value, bool) or not isinstance(value, int | float):
                raise _bad(f"edges.{name}", value, "a number")
        found.append(Edge(**entry))
    return tuple(found)


def _features(entry: Any) -> list[Feature]:
    if not isinstance(entry, Mapping):
        raise _bad("features", entry, "a list of tables")
    known = [one.name for one in fields(Feature)]
    for key in entry:
        _known(key, known, f"[quality] features.{key}")
    rest = {key: value for key, value in entry.items() if key not in ("size_mm", "contrast")}
    sizes, contrasts = (
        list(value) if isinstance(value, list | tuple) else [value]
        for value in (
            entry.get("size_mm", Feature.size_mm),
            entry.get("contrast", Feature.contrast),
        )
    )
    for name, value in [("size_mm", s) for s in sizes] + [("contrast", c) for c in contrasts]:
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise _bad(f"features.{name}", value, "a number or a list of numbers")
    return [
        Feature(**{**rest, "size_mm": float(size), "contrast": float(contrast)})
        for size in sizes
        for contrast in contrasts
    ]


def _known(key: str, known: list[str], where: str) -> None:
    if key not in known:
        near = difflib.get_close_matches(str(key), known, n=1, cutoff=0.0)
        raise QualityError(
            f"Unknown key {key!r}.", where, f"Did you mean {near[0]!r}? Known: {', '.join(known)}."
        )


def _bad(name: str, value: object, wanted: str) -> QualityError:
    return QualityError(
        f"{name} = {value!r} is not allowed.", f"[quality] {name}", f"It must be {wanted}."
    )
