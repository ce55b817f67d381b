"""The answer's sentences: the fastest passing arm, its times, features kept, arms left open."""

from typing import Any

import pytest

from mrics.study.answer import overall_verdict, smallest_kept


def arm(name: str, seconds: float, status: str, **more: Any) -> dict[str, Any]:
    return {
        "id": name,
        "label": f"{name}, wavelet",
        "today": False,
        "scan_time_s": seconds,
        "full_scan_time_s": 390.0,
        "metrics": {},
        "verdict": {"status": status, "limits": [{"key": "ssim_min"}]},
    } | more


def unit(*rows: tuple[str, float, float, float]) -> dict[str, Any]:
    names = ("shape", "nominal_mm", "contrast", "retained")
    return {"measures": {"features": [dict(zip(names, row, strict=True)) for row in rows]}}


def test_smallest_kept_is_the_mean_over_units_by_shape_and_contrast() -> None:
    units = [
        unit(
            ("disc", 1, 20, 0.7), ("disc", 2, 20, 0.9), ("disc", 4, 20, 1.0), ("line", 1, 20, 0.3)
        ),
        unit(("disc", 1, 20, 0.9), ("disc", 2, 20, 0.6), ("disc", 4, 20, 0.9)),
        {"measures": None},
    ]
    discs, lines = smallest_kept(units, 0.8)
    # 1 mm keeps 0.80 on average, but 2 mm does not (0.75): nothing below 4 mm counts.
    assert (discs["shape"], discs["size_mm"], discs["largest_mm"]) == ("disc", 4, 4)
    assert (lines["shape"], lines["size_mm"]) == ("line", None)
    assert smallest_kept(units, 0.75)[0]["size_mm"] == 1
    assert smallest_kept([{"measures": None}], 0.8) == []


def test_sentence_tells_times_features_and_what_is_open() -> None:
    kept = [
        {"shape": "disc", "contrast": 20.0, "level": 0.8, "size_mm": 1.5, "largest_mm": 4.0},
        {"shape": "disc", "contrast": -10.0, "level": 0.8, "size_mm": None, "largest_mm": 4.0},
    ]
    answer = overall_verdict(
        [
            arm("now", 195.0, "pass", today=True),
            arm("R = 4", 102.0, "pass", smallest_kept=kept),
            arm("R = 3", 130.0, "pass"),
            arm("R = 5", 80.0, "undecided"),
            arm("R = 6", 70.0, "undecided"),
            arm("R = 2", 180.0, "undecided"),
        ],
        3,
    )
    assert answer["arm"] == "R = 4"
    assert answer["sentence"] == (
        "R = 4, wavelet passes every limit on 3 scans: 6:30 fully sampled becomes 1:42, 4:48 "
        "saved; against today's 3:15, 1:33 saved. Smallest feature kept to 80 %: disc of 1.5 mm at "
        "20 % contrast. Not kept, though the largest tried: disc of 4 mm at −10 % contrast. Faster "
        "but undecided: R = 5, wavelet; R = 6, wavelet."
    )


@pytest.mark.parametrize(
    ("statuses", "status", "text"),
    [
        (("fail", "undecided"), "undecided", "holds the limit: b, wavelet."),
        (("fail", "fail"), "fail", "No candidate passes every limit."),
        (("pass on this scan", "fail"), "pass on this scan", "every limit on the scan studied"),
    ],
)
def test_other_answers(statuses: tuple[str, str], status: str, text: str) -> None:
    arms = [arm(n, 100.0, s) for n, s in zip("ab", statuses, strict=True)]
    answer = overall_verdict(arms, 1)
    assert answer["status"] == status
    assert text in answer["sentence"]
