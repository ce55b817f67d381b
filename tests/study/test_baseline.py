"""Margins against today's arm and against the full scan."""

from pathlib import Path

import numpy as np
import pytest
from scipy import stats
from small_study import PROTOCOL, write_small_study

from mrics.errors import ProtocolError
from mrics.protocol import from_text, load_protocol
from mrics.study import plan_study, run_study

LIMITS = "nrmse_max = 0.5\nssim_margin = 0.2\nnrmse_equivalence = 0.3"
MARGINS = PROTOCOL.replace("nrmse_max = 0.5", LIMITS)
TODAY = MARGINS[MARGINS.index("[today]") : MARGINS.index("[[sampling]]")]
NOISY = "snr = 20.0\n"


def test_margins_refer_to_the_full_scan_where_asked(tmp_path: Path) -> None:
    text = MARGINS.replace("ssim_margin", 'baseline = "full"\nssim_margin') + NOISY
    protocol = write_small_study(tmp_path, scans=3, protocol=text)
    results = run_study(protocol, tmp_path / "out")
    full = results["arms"][-1]
    assert full["label"] == "full scan"
    assert results["baseline"] == full["id"]
    assert full["acceleration"] == 1.0
    arm = results["arms"][1]
    # Noise was added: the full scan is off by it, and the difference is what undersampling did.
    assert full["metrics"]["nrmse"]["mean"] > 0.01
    by_scan = {
        identity: [
            np.mean(
                [
                    np.mean([s["ssim"] for s in u["slices"]])
                    for u in results["units"]
                    if u["arm"] == identity and u["scan"] == scan["id"]
                ]
            )
            for scan in results["scans"]
        ]
        for identity in (arm["id"], full["id"])
    }
    difference = np.subtract(by_scan[arm["id"]], by_scan[full["id"]])
    limit = next(x for x in arm["verdict"]["limits"] if x["key"] == "ssim_margin")
    # One-sided 97.5 % bound of the paired t test (scipy).
    bound = stats.ttest_1samp(difference, 0.0).confidence_interval(0.95).low
    assert limit["value"] == pytest.approx(difference.mean(), rel=1e-5)
    assert limit["bound"] == pytest.approx(bound, rel=1e-4)
    assert arm["against_baseline"]["ssim"]["arms"] == 3
    today = arm["against_today"]["ssim"]["difference"]
    assert today != pytest.approx(limit["value"], rel=1e-3)
    # The baseline itself has no margin to hold, and is no candidate.
    assert [x["key"] for x in full["verdict"]["limits"]] == ["nrmse_max"]
    assert "full scan," not in results["verdict"]["sentence"]
    assert results["verdict"]["arm"] != full["id"]


def test_a_protocol_without_today_compares_with_the_full_scan(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=1, protocol=MARGINS.replace(TODAY, ""))
    plan = plan_study(load_protocol(protocol))
    assert [row.arm.id for row in plan.rows if row.arm.full_scan] == [plan.baseline]
    assert plan.rows[-1].draws == 1
    # An arm that acquires everything serves as it is.
    own = MARGINS.replace(TODAY, '[[sampling]]\npattern = "full"\nacceleration = 1\n')
    arms = from_text(own, protocol).arms()
    assert [arm.id for arm in arms if arm.full_scan] == ["full-r1-zero-filled"]
    assert len(arms) == 3


def test_without_margins_no_arm_is_added(tmp_path: Path) -> None:
    text = MARGINS.replace(TODAY, "").replace(LIMITS, "nrmse_max = 0.5")
    assert not any(arm.full_scan for arm in from_text(text).arms())


@pytest.mark.parametrize(
    ("before", "after", "message"),
    [
        ("ssim_margin = 0.2", "ssim_margin = 0", "ssim_margin = 0 is no margin"),
        ("nrmse_equivalence = 0.3", "nrmse_equivalence = -1.0", "-1.0 is no margin"),
        ("ssim_margin", 'baseline = "best"\nssim_margin', 'Give "today", or "full"'),
        (TODAY, "", "the protocol has no .today."),
        ("ssim_margin", "edge_blur_margin", "edge_blur_margin limits a measure that is not taken"),
        ("ssim_margin", "ssim_marginn", "Unknown acceptance limit 'ssim_marginn'"),
    ],
)
def test_bad_margins_stop_before_a_study(before: str, after: str, message: str) -> None:
    text = MARGINS if before != TODAY else MARGINS.replace("ssim_m", 'baseline = "today"\nssim_m')
    with pytest.raises(ProtocolError, match=message) as caught:
        from_text(text.replace(before, after), "p.toml")
    assert "p.toml" in caught.value.where


def test_a_limit_needs_its_measure_and_parts_of_the_error_one_channel() -> None:
    text = MARGINS.replace("ssim_margin = 0.2", "error_invented_max = 0.2")
    with pytest.raises(ProtocolError, match="error_invented_max limits a measure that is not"):
        from_text(text)
    from_text(text + "[quality]\n")
    with pytest.raises(ProtocolError, match="not taken with receive channels"):
        from_text(text + "[quality]\n[coils]\nnumber = 4\n")
