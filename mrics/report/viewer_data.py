"""What the page's viewer reads: one JSON block and the image blocks it names."""

from __future__ import annotations

import base64
from collections.abc import Callable
from typing import Any

import numpy as np

from mrics.report.blocks import DIGITS, Block, ScanBlocks, pack, pack_change, pack_map
from mrics.report.colours import one_signed_table, signed_table
from mrics.report.folder import StudyFolder
from mrics.report.image_figures import Window
from mrics.report.inserted import recovered_change, reference_change
from mrics.report.pictures import FurtherMap, ScanPictures, load_further
from mrics.report.summary import first_metric, metrics_of
from mrics.report.words import map_words

_LEAST_CHARACTERS = 0.25
_FEATURE_CHARACTERS = 0.05


def viewer_values(
    study: StudyFolder, pictures: list[ScanPictures], windows: dict[str, Window], text_limit: int
) -> dict[str, Any] | None:
    """Data and blocks of the viewer, None where no image is stored.

    Parameters
    ----------
    study : StudyFolder
    pictures : list of ScanPictures
    windows : dict of scan id to Window
    text_limit : int
        Characters that the blocks may take.

    Returns
    -------
    dict
        "data" for the JSON block, "blocks" as name to text, "left_out" as sentences on
        slices that the page does not hold.
    """
    packed = [one for one in pack(pictures, text_limit - _kept_free(pictures)) if one.recovered]
    if not packed:
        return None
    blocks: dict[str, str] = {}

    def put(block: Block) -> dict[str, Any]:
        name = f"block-{len(blocks)}"
        blocks[name] = block.text
        return {"block": name, "size": block.size, "bits": block.bits, "offset": block.offset}

    scans = []
    for one in packed:
        scans.append(_scan(study, one, windows[one.pictures.entry["id"]]) | {"images": []})
        scans[-1]["reference"] = put(one.reference)
        scans[-1]["maps"] = []
        for stack, block in zip(one.pictures.recovered, one.recovered, strict=True):
            facts = put(block) | {"arm": stack.arm, "draw": stack.draw}
            scans[-1]["images"].append(facts)
        scans[-1]["features"] = _features(study, one, put)
    room = text_limit - sum(len(text) for text in blocks.values())
    maps, too_large = _further_maps(study, packed, room)
    for number, facts, block in maps:
        scans[number]["maps"].append(facts | put(block))
    data = {
        "scans": scans,
        "arms": [
            {"id": a["id"], "label": a["label"], "today": bool(a.get("today"))} for a in study.arms
        ],
        "metrics": [
            {"key": m.key, "label": m.label, "unit": m.unit, "better": m.better}
            for m in metrics_of(study)
        ],
        "metric": first_metric(study),
        "chosen": (study.results.get("verdict") or {}).get("arm"),
        "factor": next(iter(windows.values())).factor,
        "digits": DIGITS,
        "colours": base64.b64encode(signed_table().tobytes()).decode("ascii"),
        "ramp": base64.b64encode(one_signed_table().tobytes()).decode("ascii"),
    }
    return {"data": data, "blocks": blocks, "left_out": [*_left_out(packed), *too_large]}


def _kept_free(pictures: list[ScanPictures]) -> int:
    """Characters that changes by inserted features may take; most of their voxels are zero."""
    voxels = sum(
        len(one.places) * scan.reference[0].size for scan in pictures for one in scan.features
    )
    return int(2 * _FEATURE_CHARACTERS * voxels)


def _features(
    study: StudyFolder, packed: ScanBlocks, put: Callable[[Block], dict[str, Any]]
) -> list[dict[str, Any]]:
    """Inserted features: their sites, and what they change in reference and recovered image."""
    held = [packed.pictures.places[p] for p in packed.positions]
    references: dict[tuple[Any, ...], dict[str, Any]] = {}
    out = []
    for one in packed.pictures.features:
        places = [place for place in one.places if place in held]
        sites = [site for site in one.sites if site.place in places]
        if not sites:
            continue
        # Arms share sites as a rule: the reference with a feature in it is then packed once.
        key = (one.number, one.sites[0].place, one.heights, tuple(places))
        if key not in references:
            references[key] = put(pack_change(reference_change(study, one, places), packed.step))
        change = pack_change(recovered_change(study, one, places), packed.step)
        out.append(
            {
                "number": one.number,
                "arm": one.arm,
                "draw": one.draw,
                "label": one.label,
                "mm": max(one.feature.extent_mm),
                "kept": float(np.mean([site.kept for site in one.sites])),
                "positions": [held.index(place) for place in places],
                "sites": [
                    {"slice": held.index(s.place), "row": s.row, "column": s.column, "kept": s.kept}
                    for s in sites
                ],
                "reference": references[key],
                "change": put(change),
            }
        )
    return out


def _further_maps(
    study: StudyFolder, packed: list[ScanBlocks], room: int
) -> tuple[list[tuple[int, dict[str, Any], Block]], list[str]]:
    """Maps of quality measures, kind by kind as long as they fit.

    Returns
    -------
    tuple
        (number of the scan, facts, block) of every map taken, and sentences on kinds left out.
    """
    taken: list[tuple[int, dict[str, Any], Block]] = []
    left_out = []
    for kind in dict.fromkeys(f.kind for one in packed for f in one.pictures.further):
        found = [
            (number, one, f)
            for number, one in enumerate(packed)
            for f in one.pictures.further
            if f.kind == kind
        ]
        voxels = sum(one.pictures.reference[0].size * len(one.positions) for _, one, _ in found)
        made = _one_kind(study, found) if _LEAST_CHARACTERS * voxels <= room else []
        size = sum(len(block.text) for _, _, block in made)
        if not made or size > room:
            left_out.append(
                f"Left out for want of room: {map_words(kind)}; it is in the study's stored maps."
            )
            continue
        room -= size
        taken += made
    return taken, left_out


def _one_kind(
    study: StudyFolder, found: list[tuple[int, ScanBlocks, FurtherMap]]
) -> list[tuple[int, dict[str, Any], Block]]:
    """Blocks of one kind of map, on one scale for all arms of a scan.

    The scale starts at 0 unless that would leave its lowest third empty; it ends at the 99.9th
    percentile.
    """
    loaded: list[tuple[int, FurtherMap, Any]] = []
    ends: dict[int, list[tuple[float, float]]] = {}
    for number, one, further in found:
        places = [one.pictures.places[p] for p in one.positions]
        values = load_further(study, further, places)
        finite = values[np.isfinite(values)]
        if finite.size:
            low, top = np.percentile(finite, (0.1, 99.9))
            ends.setdefault(number, []).append((float(low), float(top)))
        loaded.append((number, further, values))
    out = []
    for number, further, values in loaded:
        low = min((end[0] for end in ends.get(number, [])), default=0.0)
        top = max((end[1] for end in ends.get(number, [])), default=0.0)
        low = low if low > top / 3 else 0.0
        top = top if top > low else low + 1.0
        facts = {"kind": further.kind, "label": map_words(further.kind), "low": low, "top": top}
        facts |= {"arm": further.arm, "draw": further.draw}
        out.append((number, facts, pack_map(values, low, top)))
    return out


def _scan(study: StudyFolder, packed: ScanBlocks, window: Window) -> dict[str, Any]:
    pictures = packed.pictures
    entry, view = pictures.entry, pictures.view
    places = [pictures.places[p] for p in packed.positions]
    return {
        "id": entry["id"],
        "name": str(entry.get("name") or entry["id"]),
        "rows": view.rows,
        "columns": view.columns,
        "rowMm": view.row_mm,
        "columnMm": view.column_mm,
        "ends": view.ends,
        "letters": view.letters,
        "flips": [view.flip_rows, view.flip_columns],
        "mm": view.millimetres().ravel().tolist(),
        "frames": int(entry.get("frames") or 1),
        "slices": [{"frame": frame, "plane": plane} for frame, plane in places],
        "available": pictures.available,
        "step": packed.step,
        "window": [window.low, window.high],
        "largest": float(entry.get("data_range") or window.high),
        "scores": _scores(study, entry["id"], pictures, places),
    }


def _scores(
    study: StudyFolder, scan: str, pictures: ScanPictures, places: list[tuple[int, int]]
) -> dict[str, dict[str, list[float | None]]]:
    """Metrics of every stored recovery at the slices held: "arm draw" to metric to values."""
    keys = [m.key for m in metrics_of(study)]
    out: dict[str, dict[str, list[float | None]]] = {}
    for stack in pictures.recovered:
        units = [u for u in study.units(stack.arm, scan) if u["draw"] == stack.draw]
        rows = {(int(r.get("frame") or 0), int(r["index"])): r for u in units for r in u["slices"]}
        out[f"{stack.arm} {stack.draw}"] = {
            key: [rows.get(place, {}).get(key) for place in places] for key in keys
        }
    return out


def _left_out(packed: list[ScanBlocks]) -> list[str]:
    return [
        f"{one.pictures.entry.get('name') or one.pictures.entry['id']}: {len(one.positions)} of "
        f"{one.pictures.available} slices are in this page (worst and median slices of every arm "
        "and those with inserted features first, others spread evenly); all are in the study's "
        "stored maps."
        for one in packed
        if len(one.positions) < one.pictures.available
    ]
