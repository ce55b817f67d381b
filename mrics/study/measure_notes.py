"""What a reader must know of measures that run the recovery again: leakage and locality."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

_AGAIN = frozenset({"noise_ratio", "resolution_u_mm", "feature_retention", "observer_auc"})


def measure_notes(results: Sequence[dict[str, Any]], labels: dict[str, str]) -> list[str]:
    """Notes on the measures that units carry.

    Parameters
    ----------
    results : sequence of unit results
    labels : dict of arm id to str
        Names of the arms.
    """
    tables = [(unit["arm"], unit["measures"]) for unit in results if unit.get("measures")]
    notes = []
    again = [
        sum(not _AGAIN.isdisjoint(part) for part in unit["slices"])
        for unit in results
        if unit.get("measures") and any(not _AGAIN.isdisjoint(p) for p in unit["slices"])
    ]
    if again:
        notes.append(
            "Noise gain, local resolution, inserted features and observer were measured on the "
            f"first draw alone, on {max(again)} slice(s) of each scan."
        )
    resolved = [t["resolution"] for _, t in tables if t.get("resolution")]
    leaks = [one["lattice_leakage"] for one in resolved if one["lattice_leakage"] is not None]
    if resolved:
        sigmas = ", ".join(sorted({f"{one['amplitude_sigma']:g}" for one in resolved}))
        most = f"{100 * max(leaks):.2g} %" if leaks else "an unknown share"
        notes.append(
            f"Local resolution was measured with points of {sigmas} sigma, many at once: a site's "
            f"window holds energy of the other sites' responses up to {most} of its own."
        )
    local = {
        arm for arm, t in tables for kind in ("noise", "resolution") if t.get(kind, {}).get("note")
    }
    if local:
        names = "; ".join(label for arm, label in labels.items() if arm in local)
        notes.append(
            "Noise gain and local resolution hold for these images at this noise only, since the "
            f"recovery is not linear: {names}."
        )
    return notes
