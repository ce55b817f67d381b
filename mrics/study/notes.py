"""What a reader must know before the numbers of a study: simulation, noise, planes."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from mrics.scan.remedies import INVENTED
from mrics.study.training import dictionary_notes
from mrics.study.units import LEAST_LINES

if TYPE_CHECKING:
    from mrics.study.plan import StudyPlan


def study_notes(plan: StudyPlan, records: Sequence[dict[str, Any]]) -> list[str]:
    """The notes of a study, from its plan and the records of its scans."""
    notes = [
        "Lines were left out after the scan: measured samples share the reference's noise, "
        "which is optimistic."
    ]
    magnitude = [r["id"] for r in records if r["complex_source"] == "magnitude"]
    if magnitude:
        notes.append(
            f"Magnitude only ({', '.join(magnitude)}): the phase is unknown, k-space is "
            "Hermitian, and recovery is easier than on a complex scan."
        )
    added = [r for r in records if r["sigma_added"] > 0]
    if added:
        notes.append(
            "Noise was added: "
            + ", ".join(f"{r['id']} sigma {r['sigma_added']:.4g}" for r in added)
            + "."
        )
    few = [r for r in records if len(r["planes"]) < r["shape"]["ijk".index(r["plane_axis"])]]
    if few and plan.choice.spec != "all":
        notes.append(
            "Only part of the slices was studied: "
            + ", ".join(f"{r['id']} {len(r['planes'])}" for r in few)
            + "."
        )
    elif few:
        skipped = [
            f"{r['id']} {r['shape']['ijk'.index(r['plane_axis'])] - len(r['planes'])}" for r in few
        ]
        notes.append(f"Slices without body were skipped: {', '.join(skipped)}.")
    used = ((row.arm.label, row.arm.recovery_settings) for row in plan.rows)
    notes += dictionary_notes(used, records)
    notes.append(_channel_note(plan, records))
    best = [r.arm.label for r in plan.rows if r.arm.recovery_settings.get("weight") == "best"]
    if best:
        notes.append(
            "Weights chosen with the answer in hand, so that these arms are optimistic: "
            f"{'; '.join(best)}."
        )
    return notes


def _channel_note(plan: StudyPlan, records: Sequence[dict[str, Any]]) -> str:
    received = [(r["id"], r["receive"]) for r in records if r["receive"]]
    if not received:
        return (
            "One receive channel: the image is taken as the combined image of the array, so "
            "parallel imaging has nothing to work with."
        )
    told: dict[str, list[str]] = {}
    for scan, one in received:
        told.setdefault(f"{one['note']}; {one['noise']}", []).append(scan)
    note = " ".join(f"Receive channels of {', '.join(ids)}: {t}." for t, ids in told.items())
    given = "the true ones" if plan.protocol.coils else "those of the full scan"
    note += (
        " Every arm estimates sensitivities from its own calibration region; an arm with fewer "
        f"than {LEAST_LINES} lines of it is given {given}. Scores compare magnitudes."
    )
    coils = plan.protocol.coils
    if coils is not None:
        note += (
            " The noise of the scan itself reaches all loops alike, so noise gain shows only "
            "in noise that is added."
        )
        if coils.phase > 0 and any(r["complex_source"] == INVENTED for r in records):
            note += (
                f" Phase simulated: a smooth random phase of {coils.phase:g} rad was put on "
                "magnitude scans."
            )
    return note
