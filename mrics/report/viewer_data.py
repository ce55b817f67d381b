"""What the page's viewer reads: one JSON block and the image blocks it names."""

from __future__ import annotations

import base64
from typing import Any

from mrics.report.blocks import DIGITS, Block, ScanBlocks, pack
from mrics.report.colours import signed_table
from mrics.report.folder import StudyFolder
from mrics.report.image_figures import Window
from mrics.report.pictures import ScanPictures
from mrics.report.summary import first_metric, metrics_of


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
    packed = [one for one in pack(pictures, text_limit) if one.recovered]
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
        for stack, block in zip(one.pictures.recovered, one.recovered, strict=True):
            facts = put(block) | {"arm": stack.arm, "draw": stack.draw}
            scans[-1]["images"].append(facts)
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
    }
    return {"data": data, "blocks": blocks, "left_out": _left_out(packed)}


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
        "first, others spread evenly); all are in the study's stored maps."
        for one in packed
        if len(one.positions) < one.pictures.available
    ]
