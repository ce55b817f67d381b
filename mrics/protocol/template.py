"""A commented protocol, ready to run, from what the scans' headers say."""

from __future__ import annotations

import json
import os
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path

from mrics.errors import ProtocolError
from mrics.scan import Axes, Header, read_header

# Ends of file names that say which part of a complex pair a file is (part-... is BIDS).
_PARTS = {
    "magnitude": r"part-mag|mag|magnitude",
    "phase": r"part-phase|ph|phase",
    "real": r"part-real|real|re",
    "imaginary": r"part-imag|imag|imaginary|im",
}
_PAIRS = (("magnitude", "phase"), ("real", "imaginary"))


@dataclass(frozen=True)
class _Guess:
    """What the first scan's header suggests."""

    axes: Axes
    three_d: bool
    steps: tuple[int, int]
    slices: int
    basis: str


def new_protocol(scans: Iterable[str | Path], *, out: str | Path | None = None) -> str:
    """Text of a protocol for some scans: axes and matrix from their headers, the rest to be set.

    Parameters
    ----------
    scans : iterable of str or Path
        NIfTI files; magnitude and phase (or real and imaginary) files that differ only in the end
        of their names are taken as pairs.
    out : str or Path, optional
        Where the protocol will be written: scan paths are then relative to its folder.

    Returns
    -------
    str
        TOML with a comment on every key.

    Raises
    ------
    ProtocolError
        For no scans.
    ScanError
        Where a header cannot be read.
    """
    paths = [Path(scan) for scan in scans]
    if not paths:
        raise ProtocolError("No scans are given.", "mrics new", "Name at least one NIfTI file.")
    headers = [read_header(path) for path in paths]
    guess = _guess(headers[0])
    folder = (Path(out).parent if out is not None else Path()).resolve()
    return "\n".join(
        [
            *_about(headers, paths),
            *_sequence(guess, headers[0]),
            *_grid(guess, headers),
            *_candidates(guess),
            *_study(_entries(paths, folder)),
        ]
    )


def _guess(header: Header) -> _Guess:
    """Readout, phase and partition or slice axis: the header's own words, else voxels and FOV."""
    readout, phase, _ = header.dim_info
    through = header.through_plane
    inside = [c for c in "ijk" if c != through]
    basis = "the header names the axes"
    if readout not in inside or phase not in inside or readout == phase:
        # Common practice, no source: phase encoding along the shorter side of the field of view.
        extent = {c: header.shape[a] * header.voxel_mm[a] for a, c in enumerate("ijk")}
        readout = max(inside, key=lambda c: round(extent[c], 3))
        phase = next(c for c in inside if c != readout)
        basis = "guess: phase encoding along the shorter side of the field of view"
    lengths = dict(zip("ijk", header.shape, strict=False))
    axes = Axes(readout, phase, through if header.looks_3d else None)
    return _Guess(
        axes, header.looks_3d, (lengths[phase], lengths[through]), lengths[through], basis
    )


def _about(headers: Sequence[Header], paths: Sequence[Path]) -> list[str]:
    lines = [
        "# A protocol for mrics. Research only; not for diagnosis.",
        "# Lines that say CHANGE hold a guess the scan cannot confirm.",
        "#",
    ]
    for header, path in zip(headers, paths, strict=True):
        size = " x ".join(f"{n}" for n in header.shape)
        voxel = " x ".join(f"{v:.4g}" for v in header.voxel_mm)
        name = re.sub(r"[^\x20-\x7e\xa0-\uffff]", "?", path.name)
        lines.append(f"# {name}: {size}, voxel {voxel} mm")
    if len({header.shape[:3] for header in headers}) > 1:
        lines.append("# The scans differ in size: patterns are drawn for each grid.")
    return [
        *lines,
        "",
        "[protocol]",
        'title = "Untitled protocol"       # CHANGE: heads the report',
        'question = "How much faster may this protocol run?"   # CHANGE',
        "",
    ]


def _sequence(guess: _Guess, header: Header) -> list[str]:
    lines = ["[sequence]                         # from the console"]
    if guess.three_d:
        lines += [
            'family = "gradient-echo-3d"        # CHANGE: or turbo-spin-echo-3d,',
            "                                   # inversion-gradient-echo-3d",
            "repetition_time_ms = 12.0          # CHANGE",
            "echo_time_ms = 5.0                 # CHANGE",
        ]
    else:
        lines += [
            'family = "turbo-spin-echo-2d"      # CHANGE: or gradient-echo-2d, spin-echo-2d,',
            "                                   # echo-planar-2d",
            "repetition_time_ms = 3000.0        # CHANGE",
            "echo_train_length = 8              # CHANGE: echoes after one excitation",
            "echo_spacing_ms = 10.0             # CHANGE: between two echoes",
            "echo_time_ms = 30.0                # CHANGE: effective echo time",
        ]
    lines.append("averages = 1                       # CHANGE")
    if header.frames > 1:
        lines.append(f"frames = {header.frames:<26}# fourth axis of the scan")
    return [
        *lines,
        "# console_scan_time_s = 390         # what the console shows; compared with the result",
        "",
    ]


def _grid(guess: _Guess, headers: Sequence[Header]) -> list[str]:
    axes = guess.axes
    shape = "3-D" if guess.three_d else "2-D multi-slice"
    lines = [
        f"[grid]                             # file axes i, j, k; {shape} (voxel sizes)",
        f"# {guess.basis}",
        f'readout_axis = "{axes.readout}"',
        f'phase_axis = "{axes.phase}"',
    ]
    if guess.three_d:
        lines.append(f'partition_axis = "{axes.partition}"')
    lines += [
        f"phase_steps = {guess.steps[0]:<21}# CHANGE: acquired steps, oversampling included,",
        "                                   # interpolation excluded; this is the image matrix",
    ]
    if guess.three_d:
        lines.append(f"partition_steps = {guess.steps[1]:<17}# CHANGE: likewise")
    else:
        lines.append(f"slices = {guess.slices}")
    if any(len(header.shape) > 4 for header in headers):
        lines.append("channel_axis = 4                   # file axis of receive channels, from 0")
    return [*lines, ""]


def _candidates(guess: _Guess) -> list[str]:
    accelerations = [2, 4, 6] if guess.three_d else [2, 3, 4]
    calibration = _calibration(guess, max(accelerations))
    lines = [
        "# [today]                          # the protocol now in use, run as an arm of its own",
        '# sampling = "equispaced"',
        "# acceleration = 2",
        '# recovery = "least-squares"',
        "",
        "[[sampling]]                       # repeat for further candidates",
        'name = "power law"',
        'law = "power"                      # density falls as (1 - radius)^exponent',
        "exponent = 3.0",
        'draw = "exact-count"',
        f"acceleration = {accelerations}           # all positions / acquired positions",
        f"calibration = {calibration:<21}# fully sampled centre, per axis",
    ]
    if guess.three_d:
        lines.append("elliptical = true                  # leave out the corners of k-space")
    return [
        *lines,
        "",
        "[[recovery]]",
        'method = "wavelet"                 # chooses its own weight',
        "",
        "[[recovery]]",
        'method = "zero-filled"             # the baseline without any model',
        "",
        "[acceptance]                       # CHANGE: agree on limits before looking at results",
        "ssim_min = 0.90                    # mean over slices, draws and scans",
        "ssim_worst = 0.80                  # worst single slice",
        "# ssim_margin = 0.02               # largest loss: no worse than the baseline by more",
        '# baseline = "full"                # the full scan; "today" where [today] is given',
        "",
        *_QUALITY,
        "",
    ]


_QUALITY = (
    "# [quality]                        # further measures; take the # away to have them",
    "# noise_replicas = 40              # noise gain: recoveries with noise added again",
    "# resolution_runs = 4              # local resolution: recoveries with small points added",
    "# features = [{ size_mm = [2, 3, 4], contrast = [10, 20] }]   # discs inserted, % of signal",
    "# observer_images = 200            # Hotelling observer: recovered images, at least 80",
    "# planes = 2                       # slices these are taken on, first draw of each scan",
    "# edges = true                     # edge blur; or [{ i = 40, j = 52, k = 9, angle_deg = 0 }]",
    '# labels = "labels.nii.gz"         # regions on the grid of the scan, or one file for each',
    "# background_label = 1             # what contrast and CNR of the others refer to",
)


def _calibration(guess: _Guess, acceleration: int) -> int:
    """24 (common practice), or what leaves at least half of the smallest budget free."""
    positions = guess.steps[0] * (guess.steps[1] if guess.three_d else 1)
    room = positions / (2 * acceleration)
    most = int(room**0.5 if guess.three_d else room)
    most = min(24, most, *(n // 2 for n in guess.steps[: 1 + guess.three_d]))
    return max(0, most - most % 2)


def _study(entries: Sequence[str]) -> list[str]:
    return [
        "[study]",
        "scans = [                          # relative to this file; patterns with * are allowed",
        *(f"  {entry}," for entry in entries),
        "]",
        "draws = 3                          # random draws of each pattern",
        "seed = 1                           # the same seed gives the same patterns anywhere",
        'slices = "all"                     # or how many, spread evenly, or a list of indices',
        "",
    ]


def _entries(paths: Sequence[Path], folder: Path) -> list[str]:
    """One line of ``scans`` per scan; files of one pair on one line."""
    parts = [_part(path.name) for path in paths]
    lines, used = [], set()
    for at, path in enumerate(paths):
        if at in used:
            continue
        kind, stem = parts[at]
        second = next(
            (
                (other, pair)
                for pair in _PAIRS
                if kind in pair
                for other, (other_kind, other_stem) in enumerate(parts)
                if other_kind in pair
                and other_kind != kind
                and other_stem == stem
                and paths[other].parent == path.parent
            ),
            None,
        )
        if second is None:
            lines.append(_toml(_relative(path, folder)))
            continue
        other, pair = second
        used.add(other)
        files = {kind: path, parts[other][0]: paths[other]}
        keys = ", ".join(f"{key} = {_toml(_relative(files[key], folder))}" for key in pair)
        lines.append(f"{{ {keys} }}")
    return lines


def _part(name: str) -> tuple[str, str]:
    """Which part of a pair a file name says it is, and the name without that word."""
    for part, words in _PARTS.items():
        match = re.search(rf"(?:^|[_.\-])({words})(?=[_.\-])", name, flags=re.IGNORECASE)
        if match:
            return part, name[: match.start(1)] + name[match.end(1) :]
    return "", name


def _relative(path: Path, folder: Path) -> str:
    try:
        return Path(os.path.relpath(path.resolve(), folder)).as_posix()
    except ValueError:
        return path.resolve().as_posix()


def _toml(text: str) -> str:
    """A TOML basic string; JSON's escapes are TOML's, except for the delete character."""
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007F")
