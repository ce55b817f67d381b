"""A protocol's [quality] table: measures beside the scores, in results, verdict and maps."""

from pathlib import Path

import pytest
from small_study import PROTOCOL, write_small_study

from mrics.errors import ProtocolError
from mrics.protocol import from_text
from mrics.study import run_study

QUALITY = """
[quality]
planes = 1
noise_replicas = 4
features = [{ size_mm = [6.0, 10.0], contrast = 30.0 }]
feature_sites = 3
"""


def test_measures_reach_units_arms_and_maps(tmp_path: Path) -> None:
    text = PROTOCOL.replace("nrmse_max = 0.5", "nrmse_max = 0.5\nfeature_retention_min = 0.1")
    protocol = write_small_study(tmp_path, scans=1, protocol=text + QUALITY)
    results = run_study(protocol, tmp_path / "out")
    arm = next(a for a in results["arms"] if not a["today"])
    for metric in ("ms_ssim", "error_invented", "noise_ratio", "feature_retention"):
        assert arm["metrics"][metric]["mean"] is not None
    assert {row["key"] for row in arm["verdict"]["limits"]} == {
        "nrmse_max",
        "feature_retention_min",
    }
    first, second = (u for u in results["units"] if u["arm"] == arm["id"])
    assert first["measures"]["features"]
    # Measures that recover again are taken on the first draw alone.
    assert "features" not in second["measures"]
    kinds = {m["kind"] for m in results["maps"] if m["arm"] == arm["id"]}
    assert {"missing", "invented", "noise_ratio"} <= kinds


def test_bad_quality_keys_are_refused_with_their_place() -> None:
    with pytest.raises(ProtocolError, match="noise_replicas"):
        from_text(PROTOCOL + "\n[quality]\nnoise_replica = 4\n")
    with pytest.raises(ProtocolError, match="a whole number of at least 1") as caught:
        from_text(PROTOCOL + "\n[quality]\nplanes = 0\n", "p.toml")
    assert "p.toml" in caught.value.where
