"""The scan files a protocol names: patterns expanded, pairs matched, order stable."""

from __future__ import annotations

import glob
import re
from dataclasses import dataclass, replace
from pathlib import Path

from mrics.errors import ProtocolError
from mrics.protocol.sections import ScanEntry


@dataclass(frozen=True)
class ScanFiles:
    """The file or the two files of one scan, ready for ``read_scan``.

    Attributes
    ----------
    path : Path
        Magnitude, complex or real-part file.
    phase, imaginary : Path or None
        The second file of a pair.
    labels : Path or None
        Label map drawn on it.
    """

    path: Path
    phase: Path | None = None
    imaginary: Path | None = None
    labels: Path | None = None

    @property
    def name(self) -> str:
        """File name without ending and without the part of a pair it holds: the scan's label."""
        plain = re.sub(r"\.nii(\.gz)?$", "", self.path.name)
        return re.sub(r"_part-(mag|phase|real|imag)(?=_|$)", "", plain)


def expand(entries: tuple[ScanEntry, ...], folder: Path, where: str) -> tuple[ScanFiles, ...]:
    """Files of every entry, in the order of the entries and by name inside a pattern.

    Raises
    ------
    ProtocolError
        Where a file is missing, a pattern matches nothing, a partner is missing, or a scan is
        listed twice (it would count twice in every interval).
    """
    found: list[ScanFiles] = []
    for number, entry in enumerate(entries, start=1):
        key = f"{where}[{number}]"
        given = {name: value for name, value in entry if value is not None}
        for scan in _scans(given, folder, key):
            if any(scan.path.resolve() == other.path.resolve() for other in found):
                raise ProtocolError(
                    f"Scan {scan.path} is listed twice.",
                    key,
                    "List every scan once: a repeated scan would count twice.",
                )
            found.append(scan)
    return tuple(found)


def with_labels(
    scans: tuple[ScanFiles, ...], labels: tuple[str, ...], folder: Path, where: str
) -> tuple[ScanFiles, ...]:
    """Scans with their label maps: one for all, or one for each in the order of the scans.

    Raises
    ------
    ProtocolError
        Where a file is missing, or there are as many as fit neither.
    """
    found = [path for name in labels for path in _matches(name, folder, where).values()]
    if len(found) == 1:
        found *= len(scans)
    if len(found) != len(scans):
        raise ProtocolError(
            f"There are {len(found)} label maps for {len(scans)} scans.",
            where,
            "Give one that fits every scan, or one for each in the order of the scans.",
        )
    return tuple(replace(scan, labels=path) for scan, path in zip(scans, found, strict=True))


def _scans(given: dict[str, str], folder: Path, where: str) -> list[ScanFiles]:
    (first_key, first), *rest = given.items()
    first_where = where if first_key == "path" else f"{where}.{first_key}"
    matches = _matches(first, folder, first_where)
    if not rest:
        return [ScanFiles(path) for path in matches.values()]
    second_key, second = rest[0]
    second_where = f"{where}.{second_key}"
    partners = _matches(second, folder, second_where)
    for mine, theirs, key in (
        (matches, partners, second_where),
        (partners, matches, first_where),
    ):
        lonely = next((name for name in mine if name not in theirs), None)
        if lonely is not None:
            raise ProtocolError(
                f"{mine[lonely].name} has no partner.",
                key,
                "Let both patterns match the same scans: what * stands for pairs the files.",
            )
    return [ScanFiles(matches[k], **{second_key: partners[k]}) for k in matches]


def _matches(pattern: str, folder: Path, where: str) -> dict[tuple[str, ...], Path]:
    """Files a pattern matches, by what its wild cards stand for, in natural order of names."""
    try:
        full = str(folder / Path(pattern).expanduser())
    except RuntimeError as error:
        raise ProtocolError(
            f"{pattern!r} cannot be read: {error}", where, "Write the path in full."
        ) from error
    if "\0" in full:
        raise ProtocolError(f"{pattern!r} is not a path.", where, "Remove the zero character.")
    if not glob.has_magic(pattern) or Path(full).exists():
        if not Path(full).is_file():
            kind = "is a folder" if Path(full).is_dir() else "does not exist"
            raise ProtocolError(
                f"Scan file {pattern!r} {kind} (looked for {full}).",
                where,
                "Correct the path; it is relative to the protocol file.",
            )
        return {(): Path(full)}
    names = sorted(
        (name for name in glob.glob(full, recursive=True) if Path(name).is_file()), key=_natural
    )
    if not names:
        raise ProtocolError(
            f"Pattern {pattern!r} matches no file (looked for {full}).",
            where,
            "Correct the pattern; it is relative to the protocol file.",
        )
    return {_wild(full, name): Path(name) for name in names}


def _natural(name: str) -> list[tuple[int, int | str]]:
    """Sort key in which scan_2 stands before scan_10."""
    parts = re.split(r"(\d+)", name)
    return [(0, int(p)) if p.isdigit() else (1, p) for p in parts]


def _wild(pattern: str, name: str) -> tuple[str, ...]:
    """What the wild cards of ``pattern`` stand for in ``name``."""
    expression = ""
    for piece in re.split(r"(\*\*/?|\*|\?|\[[^\]]*\])", pattern):
        if piece.startswith("**"):
            expression += "(.*)"
        elif piece == "*":
            expression += "([^/]*)"
        elif piece == "?":
            expression += "([^/])"
        elif piece.startswith("[") and piece.endswith("]"):
            expression += "(" + ("[^" + piece[2:] if piece[1] == "!" else piece) + ")"
        else:
            expression += re.escape(piece)
    match = re.fullmatch(expression, name, flags=re.DOTALL)
    return match.groups() if match else (name,)
