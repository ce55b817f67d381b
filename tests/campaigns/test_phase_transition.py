"""Where L1 recovery stops, in full; the default suite runs a tenth of the trials."""

import sys
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).parents[1] / "recovery"))
from test_sparse import crossing


@pytest.mark.slow
def test_half_of_the_problems_are_solved_where_theory_says() -> None:
    # Donoho & Tanner 2005-09, weak threshold for real vectors at delta = 0.5: 0.38569.
    found = crossing(trials=40)
    print(f"crossing at rho = {found:.4f}")
    assert found == pytest.approx(0.38569, abs=0.04)
