"""What every recovery takes and gives."""

from __future__ import annotations

from dataclasses import asdict, dataclass, field
from typing import Any

from numpy.typing import NDArray


@dataclass(frozen=True)
class Certificate:
    """How far a recovery came and by what choices.

    Attributes
    ----------
    method : str
        Registry name of the method.
    iterations : int
        Iterations run (largest over planes), 0 for direct methods.
    final_change : float
        Relative change of the image in the last iteration (largest over planes).
    objective : float or None
        Objective at the end, summed over planes; None where there is none.
    optimality : float or None
        The measure the method stops on (duality gap relative to the objective, or relative
        fixed-point residual), largest over planes; None for direct methods.
    tolerance : float or None
        What ``optimality`` had to fall below.
    reached : bool
        True when it did, and for direct methods.
    certified : bool
        False for variants without a fixed objective; ``note`` then says why.
    weight : float or None
        Weight of the penalty.
    weight_unit : str
        What it is counted in: "sigma" is the total noise level.
    weight_rule : str
        How it was chosen: "given", "none", or the word of the settings, the rule it stands for
        and what it cost ("auto: held-out samples and misfit, 6 trials on 4 of 91 planes").
    sigma : float
        Noise level the weight refers to; the floor where the data's own is 0 (``note`` says so).
    note : str
        One line for the report.
    wall_s : float
        Seconds taken; outside anything compared.
    """

    method: str
    iterations: int = 0
    final_change: float = 0.0
    objective: float | None = None
    optimality: float | None = None
    tolerance: float | None = None
    reached: bool = True
    certified: bool = True
    weight: float | None = None
    weight_unit: str = "sigma"
    weight_rule: str = "none"
    sigma: float = 0.0
    note: str = ""
    wall_s: float = 0.0

    def as_dict(self) -> dict[str, Any]:
        """The certificate as plain values for results files."""
        return asdict(self)


@dataclass(frozen=True)
class Recovered:
    """A recovered image with its certificate.

    Attributes
    ----------
    image : ndarray of shape (plane, u, v), complex
        Natural order, the acquisition's dtype.
    certificate : Certificate
        See there.
    history : dict of str to list of float
        Per iteration: objective, change, optimality, where the method keeps them.
    extras : dict
        Method-specific arrays for pictures (noise-gain map, dictionary, coding residual).
    """

    image: NDArray[Any]
    certificate: Certificate
    history: dict[str, list[float]] = field(default_factory=dict)
    extras: dict[str, Any] = field(default_factory=dict)
