"""The same seed gives the same pattern on any machine: first digits of hashes made here, kept.

No outside source can know these; they only guard against a change of the draws.
"""

import pytest

from mrics.sampling import DRAWS, draw_entry

LAWS = {
    "uniform": {},
    "gaussian": {"width": 0.35},
    "power": {"exponent": 2.5},
    "inverse-square": {},
}
PLANE, LINES = (96, 80), (129,)
OTHERS = {
    "best of 5": {"law": "power", "calibration": 8, "best_of": 5},
    "wavelet scales": {"calibration": 8, "best_of": 3, "best_by": "wavelet-scales"},
    "per axis": {"law": "gaussian", "per_axis": True, "partial_fourier": [0.75, 0.8]},
    "spokes": {"pattern": "spokes", "calibration": 8},
    "spiral": {"pattern": "spiral", "turns": 3},
    "shifted lattice": {"pattern": "shifted lattice", "steps": [2, 3], "shift": 1},
}
HASHES = """
bernoulli frames 2d11f6be216ba4b5
best of 5 c3eee54b67483023
exact-count frames 3c7f874057d395d4
gaussian bernoulli lines d8f5cf746756c0fa
gaussian bernoulli plane 7bc4fa0df4351924
gaussian exact-count lines 6a89c12db152224d
gaussian exact-count plane 8343dcd855fb4ecd
gaussian jittered lines 4dd1edc18dd607e4
gaussian jittered plane de267a9b79d74b19
gaussian low-discrepancy lines e08c368bc44c31a2
gaussian low-discrepancy plane 84374a269abb1ceb
gaussian poisson-disc plane b094eac0b0ea770e
inverse-square bernoulli lines c7960aa9dc8f93e0
inverse-square bernoulli plane 2619b4394f945009
inverse-square exact-count lines 05ab91598a73eccb
inverse-square exact-count plane d1da36f554c70ca7
inverse-square jittered lines 75cffaee292dbce6
inverse-square jittered plane 738b05af114a4ef9
inverse-square low-discrepancy lines 4c583edb5b5aa27d
inverse-square low-discrepancy plane dae16fdabcc307b1
inverse-square poisson-disc plane 7d1aafc2e176c18c
jittered frames befae8f7c4554ea1
low-discrepancy frames 879457b995329cbb
per axis e163e9240bd27b8f
poisson-disc frames 9a6ed1ead19b85d6
power bernoulli lines fb0ca2e354334501
power bernoulli plane a54e20b6b7c43cea
power exact-count lines 4106dbf3890dc0bb
power exact-count plane e61b997557f27d7b
power jittered lines 18472ac1193ff45a
power jittered plane 0018838b88afd45f
power low-discrepancy lines 8f9636968c44fdc0
power low-discrepancy plane e74290fcf7a52b8e
power poisson-disc plane d002f9877903798d
shifted lattice 5488a639bb859246
spiral 1c8b856b385fa756
spokes 9e4688df4760f035
uniform bernoulli lines 43b28a0ce663843d
uniform bernoulli plane 0c46f89128a102e9
uniform exact-count lines ac20c50f189ea8b4
uniform exact-count plane 7e082dc56e54906f
uniform jittered lines 4b9308916d58f679
uniform jittered plane b3544c994806aa09
uniform low-discrepancy lines 33ef7cdd8c752b85
uniform low-discrepancy plane 283c08bb6c8630a4
uniform poisson-disc plane 200b92a5998085d9
wavelet scales f409e50cefce9321
"""


def cases():
    """Name -> (entry, grid, acceleration, frames)."""
    found = {}
    for law, settings in LAWS.items():
        for draw in DRAWS:
            entry = {"law": law, "draw": draw, "calibration": 12, **settings}
            if draw != "poisson-disc":
                found[f"{law} {draw} lines"] = (entry, LINES, 3.5, 0)
            found[f"{law} {draw} plane"] = ({**entry, "elliptical": True}, PLANE, 5, 0)
    for draw in DRAWS:
        found[f"{draw} frames"] = ({"draw": draw, "calibration": 8}, PLANE, 6, 3)
    return found | {name: (entry, PLANE, 6, 0) for name, entry in OTHERS.items()}


KEPT = dict(line.rsplit(" ", 1) for line in HASHES.split("\n") if line)


def test_every_case_has_a_kept_hash():
    assert sorted(KEPT) == sorted(cases())


@pytest.mark.parametrize("case", sorted(KEPT))
def test_golden_hash(case):
    entry, shape, acceleration, frames = cases()[case]
    pattern = draw_entry(entry, shape, acceleration, 20261201, frames=frames, identity=("draw", 2))
    assert pattern.hash[:16] == KEPT[case]
