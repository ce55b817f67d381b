"""How numbers and names are written on the page, in figures and in documents."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True)
class MetricWords:
    """What a reader must know of one metric.

    Attributes
    ----------
    key : str
        Name in results.json.
    label, unit : str
        Written name and unit ("" for a plain number).
    better : str
        "low" or "high".
    plain : str
        One sentence for a reader who does not know it.
    definition : str
        Its definition.
    """

    key: str
    label: str
    unit: str = ""
    better: str = "low"
    plain: str = ""
    definition: str = ""

    @property
    def axis(self) -> str:
        """Label of a chart axis."""
        return f"{self.label} ({self.unit})" if self.unit else self.label


def metric_words(key: str) -> MetricWords:
    """Words of a metric, from the registry of the quality room where it is listed there."""
    from mrics.quality import METRICS

    known = METRICS.get(key)
    if known is None:
        return MetricWords(key, key.replace("_", " "))
    unit = "" if known.unit == "1" else known.unit
    better = "high" if known.direction == "higher" else "low"
    return MetricWords(key, known.label, unit, better, known.plain, known.definition)


_MAPS = {
    "error_complex": "size of the complex error",
    "measured": "error in what was measured",
    "missing": "missing detail",
    "invented": "invented detail",
    "noise_ratio": "noise against the full scan",
    "noise_gain": "noise gain",
    "resolution_u_mm": "resolution along phase (mm)",
    "resolution_v_mm": "resolution along the other axis (mm)",
    "coding_residual": "coding residual",
    "residual": "residual of coded patches",
    "atoms_per_patch": "atoms per patch",
    "domain_map": "residual against the training's 95 % point",
}


def map_words(kind: str) -> str:
    """Written name of a stored map."""
    return _MAPS.get(kind, kind.replace("_", " "))


def number(value: Any, digits: int = 3) -> str:
    """A number with ``digits`` significant digits, "-" for none, without exponent where it fits."""
    if value is None or (isinstance(value, float) and math.isnan(value)):
        return "–"
    value = float(value)
    if math.isinf(value):
        return "∞" if value > 0 else "−∞"
    if value == 0:
        return "0"
    # The power of ten after rounding: 0.9996 is 1.00 with three digits.
    power = int(f"{value:.{digits - 1}e}".partition("e")[2])
    if power < -4 or power > 6:
        return f"{value:.{digits - 1}e}".replace("-", "−")
    text = f"{value:.{max(0, digits - 1 - power)}f}"
    if value == round(value) and abs(value) >= 1000:
        text = f"{value:.0f}"
    return text.replace("-", "−")


def metric_value(key: str, value: Any, digits: int = 3) -> str:
    """A metric's value: similarities to 3 places, others to 3 digits, rounding errors as such."""
    if value is None:
        return "–"
    if key == "psnr" and float(value) > 100:
        return ">100"
    if metric_words(key).better == "low" and 0 < abs(float(value)) < 1e-4:
        return "<0.0001"
    if key.endswith("ssim") and abs(float(value)) <= 1:
        return f"{float(value):.3f}".replace("-", "−")
    return number(value, digits)


def clock(seconds: Any) -> str:
    """Seconds as min:s, hours as h:min:s, with a true minus sign."""
    if seconds is None:
        return "–"
    sign = "−" if seconds < 0 else ""
    whole = round(abs(float(seconds)))
    hours, rest = divmod(whole, 3600)
    minutes, left = divmod(rest, 60)
    if hours:
        return f"{sign}{hours}:{minutes:02d}:{left:02d}"
    return f"{sign}{minutes}:{left:02d}"


def percent(share: Any, digits: int = 0) -> str:
    """A share as a percentage."""
    return "–" if share is None else f"{100 * float(share):.{digits}f} %".replace("-", "−")


def settings_text(settings: Any) -> str:
    """Settings of an arm as "key value, key value", without those its row shows anyway."""
    if not isinstance(settings, dict):
        return ""
    parts = []
    for key, value in settings.items():
        if key in ("name", "acceleration") or value is None or value in ({}, []):
            continue
        shown = f"{value:g}" if isinstance(value, float) else value
        if isinstance(value, bool):
            shown = "yes" if value else "no"
        if isinstance(value, (list, tuple)):
            shown = " × ".join(str(v) for v in value)
        parts.append(f"{key.replace('_', ' ')} {shown}")
    return ", ".join(parts)


def numbered(count: int, one: str, many: str = "") -> str:
    """A count with its noun: 1 scan, 3 scans."""
    return f"{count} {one if count == 1 else many or one + 's'}"
