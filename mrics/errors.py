"""Errors a user can act on: what is wrong, where, and the way out.

Every error that bad input can cause is a subclass of :class:`MricsError`. The command line prints
its three sentences and exits with status 2; anything else is a defect of mrics.
"""

from __future__ import annotations


class MricsError(Exception):
    """Something the user gave cannot be used.

    Parameters
    ----------
    what : str
        One sentence: what is wrong, with the value that was got.
    where : str
        File, key, axis or index that holds it.
    fix : str
        One sentence: the way out.
    """

    def __init__(self, what: str, where: str = "", fix: str = "") -> None:
        super().__init__(what, where, fix)
        self.what = what
        self.where = where
        self.fix = fix

    def __str__(self) -> str:
        text = self.what
        if self.where:
            text += f"\n  where: {self.where}"
        if self.fix:
            text += f"\n  way out: {self.fix}"
        return text


class ScanError(MricsError):
    """A scan file cannot be read or used."""


class ProtocolError(MricsError):
    """A protocol file is not valid."""


class PatternError(MricsError):
    """A sampling pattern cannot be drawn, ordered or read."""


class AcquisitionError(MricsError):
    """Data, sensitivities or noise do not fit together."""


class RecoveryError(MricsError):
    """A recovery got settings or data it cannot use."""


class QualityError(MricsError):
    """A measure cannot be taken of these images."""


class StudyError(MricsError):
    """A study folder or run cannot go on."""


class ReportError(MricsError):
    """A report cannot be drawn."""


class MricsWarning(UserWarning):
    """Input that can be used, but not without saying so."""
