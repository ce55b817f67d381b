"""All measures of one recovered scan: per-plane values, tables for a report, maps."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import asdict, dataclass
from time import perf_counter
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import Acquisition, some_planes
from mrics.errors import QualityError
from mrics.numerics import map_blocks
from mrics.numerics.scaling import exponent_for, largest_part, times_power_of_two
from mrics.quality.chain import Chain
from mrics.quality.measures import Measures
from mrics.quality.planes import choose_planes

Array = NDArray[Any]
Note = Callable[[str, int, int], None]


@dataclass(frozen=True)
class Measured:
    """What was measured of one unit of a study.

    Attributes
    ----------
    by_plane : list of dict
        One dict per plane of the stack, metric name to value; a metric is absent where it was not
        taken of that plane, None where it has no value.
    tables : dict
        Plain values for results files: ``spectral``, ``error_split``, ``edges``, ``noise``,
        ``resolution``, ``features``, ``observer``, ``regions``, as far as they were asked for. The
        observer's spectrum is that of values brought to a usual size by a power of 2.
    maps : dict of str to ndarray of shape (plane, u, v), float32
        ``measured``, ``missing``, ``invented`` (magnitudes of the parts of the error),
        ``noise_ratio``, ``resolution_u_mm``, ``resolution_v_mm``, and ``feature_1``,
        ``feature_2``, ... in the order of the table: what inserted features change in the recovered
        magnitude; NaN in planes that were not measured.
    planes : tuple of int
        Planes that further recoveries were made of.
    seconds, recovery_seconds : float
        Wall time of everything, and of the recoveries in it.
    """

    by_plane: list[dict[str, float | None]]
    tables: dict[str, Any]
    maps: dict[str, Array]
    planes: tuple[int, ...]
    seconds: float
    recovery_seconds: float


def measure(
    acquisition: Acquisition,
    image: Array,
    reference: Array,
    voxel_mm: tuple[float, float, float],
    *,
    method: str,
    settings: dict[str, Any] | None = None,
    measures: Measures | None = None,
    mask: NDArray[np.bool_] | None = None,
    data_range: float | None = None,
    labels: Array | None = None,
    edges: Array | None = None,
    seed: int = 0,
    progress: Note | None = None,
) -> Measured:
    """Take the measures of one recovered stack.

    Parameters
    ----------
    acquisition : Acquisition
        What the image was recovered from.
    image, reference : ndarray of shape (plane, u, v)
        Recovered and fully sampled.
    voxel_mm : tuple of float
        Voxel size along (plane, u, v).
    method : str
        Recovery the image was made with.
    settings : dict, optional
        Its settings.
    measures : Measures, optional
        Which to take.
    mask : ndarray of bool, shape (plane, u, v), optional
        Body mask.
    data_range : float, optional
        L of the scores; the reference's largest magnitude in the mask if left out.
    labels : ndarray of integer, shape (plane, u, v), optional
        Regions for statistics; features are drawn in them too where they are given.
    edges : ndarray of shape (n, 4), optional
        Edges (plane, u, v, angle) to measure; found in every plane if left out.
    seed : int
        Of noise, sites and signs.
    progress : callable of (measure, done, total), optional
        Called during those that run recoveries.

    Raises
    ------
    QualityError
        Where a measure cannot be taken; see the single measures.
    """
    wanted = measures or Measures()
    started = perf_counter()
    # Measures square values in single precision; regions alone are told in the scan's unit.
    exponent = exponent_for(largest_part(reference))
    acquisition = acquisition.at_scale(exponent)
    image, reference = (times_power_of_two(one, exponent) for one in (image, reference))
    if data_range is not None:
        data_range = math.ldexp(data_range, exponent)
    result = _Results(image, reference, voxel_mm, mask, data_range, exponent)
    result.whole_stack(acquisition, wanted, labels, edges)
    planes: tuple[int, ...] = ()
    recovery_s = 0.0
    if wanted.recoveries:
        where = mask if labels is None else labels > 0
        planes = choose_planes(reference, where, wanted, voxel_mm)
        chain = Chain(some_planes(acquisition, planes), method, **(settings or {}))
        result.with_recoveries(chain, planes, wanted, labels, seed, progress)
        recovery_s = chain.seconds
    return Measured(
        by_plane=result.by_plane,
        tables=result.tables,
        maps=result.maps,
        planes=planes,
        seconds=perf_counter() - started,
        recovery_seconds=recovery_s,
    )


class _Results:
    """Collects values, tables and maps."""

    def __init__(
        self,
        image: Array,
        reference: Array,
        voxel_mm: tuple[float, float, float],
        mask: NDArray[np.bool_] | None,
        data_range: float | None,
        exponent: int,
    ) -> None:
        self.image, self.reference, self.voxel_mm = image, reference, voxel_mm
        self.exponent = exponent
        self.mask, self.data_range = mask, data_range
        self.by_plane: list[dict[str, float | None]] = [{} for _ in range(len(reference))]
        self.tables: dict[str, Any] = {}
        self.maps: dict[str, Array] = {}

    def whole_stack(
        self,
        acquisition: Acquisition,
        wanted: Measures,
        labels: Array | None,
        edges: Array | None,
    ) -> None:
        """Measures that need no further recovery."""
        in_plane = self.voxel_mm[1:]
        if wanted.more_scores:
            from mrics.quality.more_scores import more_scores_planes
            from mrics.quality.spectral import spectral_error

            scores = more_scores_planes(self.image, self.reference, self.mask, self.data_range)
            for mine, more in zip(self.by_plane, scores, strict=True):
                mine.update(more)
            spectral = spectral_error(self.image, self.reference, in_plane)
            self.tables["spectral"] = {
                name: _plain(getattr(spectral, name)) for name in ("frequency", "relative", "share")
            }
            for mine, fine in zip(self.by_plane, _plain(spectral.fine), strict=True):
                mine["error_fine"] = fine
        if wanted.error_split:
            from mrics.quality.error_split import PARTS, error_split

            split = error_split(self.image, self.reference, acquisition, mask=self.mask)
            for name in PARTS:
                for mine, share in zip(self.by_plane, split.shares[name], strict=True):
                    mine[f"error_{name}"] = float(share) if np.isfinite(share) else None
            self.tables["error_split"] = {
                "totals": split.totals,
                "damping": split.damping,
                "orthogonal": split.orthogonal,
            }
            for name in PARTS:
                part = np.abs(getattr(split, name)).astype(np.float32)
                self.maps[name] = times_power_of_two(part, -self.exponent)
        if wanted.edges:
            self._edges(in_plane, edges)
        if labels is not None:
            from mrics.quality.regions import region_planes, region_statistics

            against = wanted.background_label
            ours = times_power_of_two(self.image, -self.exponent)
            theirs = times_power_of_two(self.reference, -self.exponent)
            regions = region_statistics(ours, theirs, labels, background=against)
            self.tables["regions"] = [_plain(asdict(region)) for region in regions]
            by_plane = region_planes(ours, theirs, labels, background=against)
            for mine, values in zip(self.by_plane, by_plane, strict=True):
                mine.update(values)

    def with_recoveries(
        self,
        chain: Chain,
        planes: tuple[int, ...],
        wanted: Measures,
        labels: Array | None,
        seed: int,
        progress: Note | None,
    ) -> None:
        """Measures that run the recovery again, on the chosen planes."""

        def note(name: str) -> Callable[[int, int], None] | None:
            return None if progress is None else lambda done, total: progress(name, done, total)

        chosen = list(planes)
        mask = None if self.mask is None else self.mask[chosen]
        if wanted.noise_replicas:
            self._noise(chain, chosen, mask, wanted, seed, note("noise gain"))
        if wanted.resolution_runs:
            self._resolution(chain, chosen, mask, wanted, seed, note("resolution"))
        if wanted.features:
            region = labels[chosen] if labels is not None else mask
            self._features(chain, chosen, region, wanted, seed, note("features"))
        if wanted.observer_images:
            self._observer(chain, chosen, mask, wanted, seed, note("observer"))

    def _edges(self, in_plane: tuple[float, ...], given: Array | None) -> None:
        from mrics.quality.edges import EdgeBlur, edge_blur

        def one(plane: int) -> EdgeBlur | None:
            mine = None
            if given is not None:
                mine = given[given[:, 0] == plane]
                if not len(mine):
                    return None
                mine = mine - np.array([plane, 0, 0, 0])
            box = slice(plane, plane + 1)
            inside = None if self.mask is None else self.mask[box]
            if inside is not None and not inside.any():
                return None
            voxel = (in_plane[0], in_plane[1])
            try:
                return edge_blur(
                    self.image[box], self.reference[box], voxel, mask=inside, edges=mine
                )
            except QualityError:
                # A plane without a clean edge has no value; given edges were checked before.
                return None

        rows = []
        for plane, found in enumerate(map_blocks(one, range(len(self.by_plane)))):
            ratio = found.ratio if found is not None and np.isfinite(found.ratio) else None
            self.by_plane[plane]["edge_blur"] = ratio
            if found is not None and given is not None:
                for edge, width, before in zip(
                    found.edges, found.width_mm, found.reference_mm, strict=True
                ):
                    place = {"plane": plane, "u": edge[1], "v": edge[2], "angle_deg": edge[3]}
                    rows.append({**place, "width_mm": width, "reference_mm": before})
        if rows:
            self.tables["edges"] = _plain(rows)

    def _noise(self, chain: Chain, chosen: list[int], mask: Any, wanted: Measures, seed: int,
               note: Any) -> None:  # fmt: skip
        from mrics.quality.noise_gain import noise_gain

        found = noise_gain(chain, wanted.noise_replicas, mask=mask, seed=seed, progress=note)
        for row, plane in enumerate(chosen):
            inside = np.isfinite(found.ratio[row]) & (mask[row] if mask is not None else True)
            if inside.any():
                self.by_plane[plane]["noise_ratio"] = float(np.median(found.ratio[row][inside]))
                self.by_plane[plane]["noise_gain"] = float(np.median(found.gain[row][inside]))
        self._map("noise_ratio", chosen, found.ratio)
        self.tables["noise"] = {
            "ratio_percentiles": {str(p): v for p, v in found.ratio_percentiles.items()},
            "gain_percentiles": {str(p): v for p, v in found.gain_percentiles.items()},
            "acceleration": found.acceleration,
            "replicas": found.replicas,
            "sigma": math.ldexp(found.sigma, -self.exponent),
            "note": found.note,
        }

    def _resolution(self, chain: Chain, chosen: list[int], mask: Any, wanted: Measures, seed: int,
                    note: Any) -> None:  # fmt: skip
        from mrics.quality.resolution import local_resolution

        found = local_resolution(
            chain,
            (self.voxel_mm[1], self.voxel_mm[2]),
            mask=mask,
            interleaves=wanted.resolution_runs,
            amplitude_sigma=wanted.perturbation_sigma,
            seed=seed,
            progress=note,
        )
        maps = found.as_maps(chain.base.shape)
        for axis, name in enumerate(("resolution_u_mm", "resolution_v_mm")):
            for row, plane in enumerate(chosen):
                mine = found.width_mm[found.sites[:, 0] == row, axis]
                mine = mine[~np.isnan(mine)]
                if mine.size and np.isfinite(np.median(mine)):
                    self.by_plane[plane][name] = float(np.median(mine))
            self._map(name, chosen, maps[axis])
        self.tables["resolution"] = _plain(
            {
                "median_mm": found.median_mm,
                "mean_height": float(found.height.mean()),
                "elsewhere": found.elsewhere,
                "lattice_leakage": found.lattice_leakage,
                "amplitude_sigma": found.amplitude_sigma,
                "sites": len(found.sites),
                "note": found.note,
            }
        )

    def _features(self, chain: Chain, chosen: list[int], region: Any, wanted: Measures, seed: int,
                  note: Any) -> None:  # fmt: skip
        from mrics.quality.retention import feature_retention

        found = feature_retention(
            chain,
            self.reference[chosen],
            wanted.features,
            self.voxel_mm,
            region=region,
            count=wanted.feature_sites,
            seed=seed,
            progress=note,
        )
        least = min(found, key=lambda one: one.mean)
        for row, plane in enumerate(chosen):
            mine = least.retained[least.sites[:, 0] == row]
            if mine.size:
                self.by_plane[plane]["feature_retention"] = float(mine.mean())
            shifts = [one.displacement_mm[one.sites[:, 0] == row] for one in found]
            shift = _median(np.concatenate(shifts))
            self.by_plane[plane]["feature_shift_mm"] = shift if np.isfinite(shift) else None
        self.tables["features"] = [_plain(_feature_row(one, chosen)) for one in found]
        for number, one in enumerate(found, start=1):
            change = times_power_of_two(one.change, -self.exponent)
            self._map(f"feature_{number}", chosen, change)

    def _observer(self, chain: Chain, chosen: list[int], mask: Any, wanted: Measures, seed: int,
                  note: Any) -> None:  # fmt: skip
        from mrics.quality.observers.background import fit_spectrum
        from mrics.quality.observers.hotelling import hotelling_observer
        from mrics.quality.observers.tasks import Task
        from mrics.quality.sites import choose_sites, smoothed, tissue

        in_plane = (self.voxel_mm[1], self.voxel_mm[2])
        spectrum = fit_spectrum(self.reference, in_plane, mask=self.mask, sigma=chain.sigma)
        reference = self.reference[chosen]
        # One place for all planes, where each has tissue around it.
        common = np.asarray(tissue(reference, mask).all(axis=0))[None]
        _, u, v = choose_sites(common, (0, 2, 2), 1, seed=seed)[0]
        level = float(smoothed(np.abs(reference).astype(np.float64), 2.0)[:, u, v].mean())
        amplitude = level * wanted.observer_contrast / 100.0
        found = hotelling_observer(
            chain,
            Task("detection", wanted.observer_size_mm, amplitude),
            spectrum,
            in_plane,
            (int(u), int(v)),
            images=wanted.observer_images,
            seed=seed,
            progress=note,
        )
        self.by_plane[chosen[0]]["observer_auc"] = found.image.auc
        self.by_plane[chosen[0]]["observer_efficiency"] = found.efficiency
        self.tables["observer"] = _plain(
            {**asdict(found), "spectrum": asdict(spectrum), "planes": chosen}
        )

    def _map(self, name: str, chosen: list[int], values: Array) -> None:
        whole = np.full(self.reference.shape, np.nan, dtype=np.float32)
        whole[chosen] = values
        self.maps[name] = whole


def _feature_row(one: Any, chosen: list[int]) -> dict[str, Any]:
    """A feature as it was asked for, what was kept of it, and where on the stack it was put."""
    intervals = {
        name: None if interval is None else interval.as_dict()
        for name, interval in (
            ("interval", one.interval),
            ("size_interval", one.size_interval),
            ("displacement_interval", one.displacement_interval),
        )
    }
    return {
        **asdict(one.feature),
        "nominal_mm": one.feature.size_mm,
        "sites": len(one.sites),
        "placed": [
            {"plane": chosen[plane], "u": u, "v": v, "height": height, "retained": kept}
            for (plane, u, v), height, kept in zip(
                one.sites, one.heights, one.retained, strict=True
            )
        ],
        "retained": one.mean,
        "size_mm": _median(one.size_mm),
        "inserted_mm": _median(one.inserted_mm),
        "displacement_mm": _median(one.displacement_mm),
        **intervals,
    }


def _median(values: Array) -> float:
    seen = values[np.isfinite(values)]
    return float(np.median(seen)) if seen.size else float("nan")


def _plain(value: Any) -> Any:
    """Arrays, tuples and numpy numbers as JSON takes them; NaN and infinity as None."""
    if isinstance(value, dict):
        return {key: _plain(one) for key, one in value.items()}
    if isinstance(value, list | tuple | np.ndarray):
        return [_plain(one) for one in value]
    if isinstance(value, np.integer):
        return int(value)
    if isinstance(value, float | np.floating):
        return float(value) if np.isfinite(value) else None
    return value
