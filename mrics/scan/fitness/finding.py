"""What a check found in a scan, and what its checks share."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Finding:
    """One thing that was done to a scan, or that it cannot tell.

    Attributes
    ----------
    code : str
        Name of the finding, for example "zero-filled".
    what : str
        One sentence: what was found.
    where : str
        Axis, region or frame.
    statistic, threshold : float
        The test statistic and the value it had to exceed (or fall below, as ``what`` says).
    bias : str
        Which way it moves the conclusions of a retrospective study.
    advice : str
        What to do about it.
    remedy : str
        Name of a function in :mod:`mrics.scan.remedies` that helps; empty where there is none.
    settings : tuple of (str, object)
        Arguments the remedy takes, for example the true matrix.
    """

    code: str
    what: str
    where: str
    statistic: float
    threshold: float
    bias: str
    advice: str
    remedy: str = ""
    settings: tuple[tuple[str, object], ...] = ()
