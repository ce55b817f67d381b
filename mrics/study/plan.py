"""What a study will do, known before any image data are touched."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from mrics.errors import MricsError, StudyError
from mrics.protocol import (
    Arm,
    Protocol,
    ScanFiles,
    Timing,
    console_difference,
    decay_finding,
    limit_findings,
    scan_time,
)
from mrics.protocol.arms import slug
from mrics.sampling import Pattern
from mrics.sampling.ordered import Ordered
from mrics.scan import Axes, read_header
from mrics.scan.values import file_hash
from mrics.study.code_version import code_version
from mrics.study.prepare import PlaneChoice, Prepared, prepare
from mrics.study.suitable import check_channels, check_edges, check_suitable
from mrics.study.training import check_dictionaries, dictionary_hash
from mrics.study.units import Noise, Unit, content_key, draw_of, pattern_grid


@dataclass(frozen=True)
class PlanRow:
    """One arm as planned.

    Attributes
    ----------
    arm : Arm
        The arm.
    played : Ordered
        Its first draw on the first scan's grid, in the order the sequence plays it.
    timing : Timing
        Scan time of the arm and of the full scan.
    draws : int
        Draws the study makes of it: one for a regular pattern without added noise, which has no
        luck in it.
    """

    arm: Arm
    played: Ordered
    timing: Timing
    draws: int

    @property
    def pattern(self) -> Pattern:
        """The first draw."""
        return self.played.pattern

    @property
    def random(self) -> bool:
        """True where the pattern is drawn, so that scans and draws have others."""
        return self.pattern.probability is not None

    @property
    def calibration_share(self) -> float:
        """Acquired positions of the calibration region / all acquired positions."""
        return _calibrated(self.pattern) / max(1, self.pattern.acquired)

    def as_dict(self) -> dict[str, Any]:
        """The row as results files hold it."""
        return {
            "id": self.arm.id,
            "label": self.arm.label,
            "today": self.arm.today,
            "full_scan": self.arm.full_scan,
            "sampling": self.arm.sampling_name,
            "sampling_settings": self.arm.sampling,
            "recovery": self.arm.recovery,
            "recovery_name": self.arm.recovery_name,
            "recovery_settings": _named(self.arm.recovery_settings),
            "acceleration_target": self.arm.acceleration,
            "calibration_share": self.calibration_share,
            "relative_snr": self.timing.relative_snr,
            "shots": self.timing.shots,
            "effective_echo_ms": self.played.centre_ms,
            "scan_time_s": self.timing.scan_time_s,
            "full_scan_time_s": self.timing.full_scan_time_s,
        }


@dataclass(frozen=True)
class StudyPlan:
    """Arms x draws x scans of one protocol.

    Attributes
    ----------
    protocol : Protocol
        The protocol.
    axes : Axes
        Which file axes are encoded.
    scans : tuple of ScanFiles
        Files of every scan.
    scan_ids : tuple of str
        Their labels in results and file names, unique.
    rows : tuple of PlanRow
        Every arm.
    choice : PlaneChoice
        Which planes are studied.
    noise : Noise
        Noise added to every arm.
    channel_axis : int or None
        File axis of receive channels.
    training : tuple of ScanFiles
        Scans that weights are trained on.
    """

    protocol: Protocol
    axes: Axes
    scans: tuple[ScanFiles, ...]
    scan_ids: tuple[str, ...]
    rows: tuple[PlanRow, ...]
    choice: PlaneChoice
    noise: Noise
    channel_axis: int | None
    training: tuple[ScanFiles, ...] = ()

    def prepared(self, number: int) -> Prepared:
        """One of the scans, read and made ready."""
        protocol = self.protocol
        return prepare(
            self.scans[number],
            self.axes,
            self.choice,
            self.channel_axis,
            protocol.coils,
            protocol.study.seed,
            protocol.study.virtual_channels,
        )

    @property
    def baseline(self) -> str | None:
        """Id of the arm that margins are taken against; None where there is none."""
        if self.protocol.baseline == "today":
            return next((row.arm.id for row in self.rows if row.arm.today), None)
        return next((row.arm.id for row in self.rows if row.arm.full_scan), None)

    def on_training_scans(self) -> StudyPlan:
        """The same arms on the training scans."""
        ids = _unique_ids(self.training)
        return replace(self, scans=self.training, scan_ids=ids, training=())

    def scan_bytes(self) -> int:
        """Memory one scan takes as complex64 with its channels, the largest of them."""
        channels = self.protocol.coils.number if self.protocol.coils else 1
        return max(8 * channels * math.prod(read_header(s.path).shape) for s in self.scans)

    def families(self) -> dict[str, list[PlanRow]]:
        """Arms that a search chooses from, slowest first, by the search's label."""
        found: dict[str, list[PlanRow]] = {}
        for row in self.rows:
            if row.arm.search:
                found.setdefault(row.arm.search, []).append(row)
        return found

    def units(
        self,
        folder: Path,
        hashes: Sequence[str],
        rows: Sequence[PlanRow],
        draws: int | None = None,
    ) -> list[Unit]:
        """Units of some arms, scan by scan so that each scan is read once.

        Parameters
        ----------
        folder : Path
            Study folder.
        hashes : sequence of str
            SHA-256 of every scan.
        rows : sequence of PlanRow
            The arms.
        draws : int, optional
            Their first draws only.
        """
        study = self.protocol.study
        units = []
        for scan, scan_id, sha256 in zip(self.scans, self.scan_ids, hashes, strict=True):
            for row in rows:
                ratio = self._averages_ratio(row.arm)
                for draw in range(row.draws if draws is None else min(draws, row.draws)):
                    key = content_key(
                        scan=sha256,
                        axes=(self.axes.readout, self.axes.phase, self.axes.partition),
                        planes=self.choice.spec,
                        # Any change in how patterns are drawn, or in files they come from.
                        first_pattern=row.pattern.hash,
                        draws_of=scan_id if row.random else "",
                        channel_axis=self.channel_axis,
                        sampling={k: v for k, v in row.arm.sampling.items() if k != "name"},
                        acceleration=row.arm.acceleration,
                        recovery=row.arm.recovery,
                        settings=_named(row.arm.recovery_settings),
                        dictionary=dictionary_hash(row.arm.recovery_settings),
                        weight_rule=row.arm.weight_rule,
                        noise=(self.noise.sigma, self.noise.snr, self.noise.percent, ratio),
                        draw=draw,
                        seed=study.seed,
                        sequence=self._played_by(),
                        coils=self.protocol.values()["coils"],
                        virtual_channels=study.virtual_channels,
                        quality=self.protocol.values()["quality"],
                        labels=None if scan.labels is None else file_hash(scan.labels),
                        code=code_version(),
                    )
                    units.append(
                        Unit(
                            key=key,
                            scan_id=scan_id,
                            files=scan,
                            axes=self.axes,
                            choice=self.choice,
                            channel_axis=self.channel_axis,
                            protocol=self.protocol,
                            arm=row.arm,
                            draw=draw,
                            noise=self.noise,
                            averages_ratio=ratio,
                            folder=folder,
                            keep_maps=draw == 0,
                            sha256=sha256,
                        )
                    )
        return units

    def findings(self) -> list[str]:
        """What the timing rests on, each said once, and how it compares with the console."""
        said = [text for row in self.rows for text in row.timing.findings]
        for row in self.rows:
            played = (*row.played.findings, *limit_findings(self.protocol.sequence, row.pattern))
            decay = decay_finding(self.protocol.sequence, row.played)
            said += [f"{row.arm.label}: {text}" for text in (*played, *([decay] if decay else []))]
        today = next((row for row in self.rows if row.arm.today), None)
        if today is not None:
            console = console_difference(self.protocol.sequence, today.timing.scan_time_s)
            said += [console] if console else []
        return list(dict.fromkeys(said))

    def _played_by(self) -> dict[str, Any]:
        """The keys of the sequence and the study on which order and decay depend."""
        keys = (
            "family",
            "echo_train_length",
            "echo_spacing_ms",
            "echo_time_ms",
            "inversion_time_ms",
            "order",
            "whole_shots",
        )
        values = {key: getattr(self.protocol.sequence, key) for key in keys}
        if self.protocol.study.echo_train_decay:
            values["tissue_t2_ms"] = self.protocol.sequence.tissue_t2_ms
        return values

    def _averages_ratio(self, arm: Arm) -> float:
        sequence = self.protocol.sequence
        reference = self.protocol.study.reference_averages or sequence.averages
        return reference / (arm.averages or sequence.averages)


def plan_study(protocol: Protocol, *, quick: bool = False) -> StudyPlan:
    """Plan a study from the protocol and the scans' headers.

    Parameters
    ----------
    protocol : Protocol
        The protocol.
    quick : bool
        Study ``quick_slices`` slices only.

    Raises
    ------
    MricsError
        Where a scan's header cannot be read, a grid does not fit, or a pattern or timing is
        impossible.
    """
    study = protocol.study
    check_channels(protocol)
    axes = protocol.axes()
    scans = protocol.scan_files()
    choice = PlaneChoice(study.slices)
    if quick:
        given = study.slices
        few = study.quick_slices
        if isinstance(given, tuple):
            choice = PlaneChoice(given[:few])
        else:
            choice = PlaneChoice(few if given == "all" else min(few, int(given)))
    scan_ids = _unique_ids(scans)
    check_dictionaries(protocol.arms())
    grids: dict[tuple[int, ...], tuple[str, str]] = {}
    shapes = [read_header(scan.path).shape for scan in scans]
    for scan, scan_id, shape in zip(scans, scan_ids, shapes, strict=True):
        grids.setdefault(pattern_grid(axes, shape), (scan.path.name, scan_id))
    check_edges(protocol, scan_ids, shapes)
    slices = None if axes.partition else shapes[0][axes.order[0]]
    noise = Noise(study.sigma_added, study.snr, study.noise_percent)
    rows: list[PlanRow] = []
    left_out: list[str] = []
    for number, (grid, (name, scan_id)) in enumerate(grids.items()):
        for arm in protocol.arms():
            if arm.id in left_out:
                continue
            try:
                played = draw_of(protocol, arm, scan_id, grid, 0)
                check_suitable(arm.recovery, played.pattern)
            except MricsError as error:
                if arm.search:
                    # A search chooses among what the grid can hold.
                    left_out.append(arm.id)
                    continue
                where = f"{protocol.path}: arm {arm.label}, grid of {name}"
                raise type(error)(error.what, f"{where}; {error.where}", error.fix) from error
            if number == 0:
                timing = scan_time(protocol, played.pattern, arm=arm, slices=slices)
                row = PlanRow(arm, played, timing, 1)
                lucky = row.random or noise != Noise()
                rows.append(replace(row, draws=study.draws) if lucky else row)
    return StudyPlan(
        protocol=protocol,
        axes=axes,
        scans=scans,
        scan_ids=scan_ids,
        rows=tuple(row for row in rows if row.arm.id not in left_out),
        choice=choice,
        noise=noise,
        channel_axis=protocol.grid.channel_axis,
        training=protocol.training_files(),
    )


def _calibrated(pattern: Pattern) -> int:
    """Positions of the calibration region."""
    if len(pattern.calibration) != len(pattern.grid):
        return 0
    return math.prod(
        min(lines, size) for lines, size in zip(pattern.calibration, pattern.grid, strict=True)
    )


def _named(settings: Mapping[str, Any]) -> dict[str, Any]:
    """Settings with a file's name in place of its path."""
    return {k: Path(v).name if k == "dictionary" and v else v for k, v in settings.items()}


def _unique_ids(scans: Sequence[ScanFiles]) -> tuple[str, ...]:
    ids: list[str] = []
    for scan in scans:
        plain = slug(scan.name)
        again = 2
        label = plain
        while label in ids:
            label, again = f"{plain}-{again}", again + 1
        ids.append(label)
    if not ids:
        raise StudyError("The protocol names no scans.", "study.scans", "Name at least one scan.")
    return tuple(ids)
