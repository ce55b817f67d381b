"""The sections of a protocol file: their keys, types, ranges and defaults.

Every field carries a ``description``; the allowed range is in its constraints, from which error
messages and the template of a new protocol are made.
"""

from __future__ import annotations

import math
from typing import Annotated, Any, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, model_validator

Family = Literal[
    "gradient-echo-2d",
    "gradient-echo-3d",
    "spin-echo-2d",
    "turbo-spin-echo-2d",
    "turbo-spin-echo-3d",
    "inversion-gradient-echo-3d",
    "echo-planar-2d",
]
TRAIN_FAMILIES = (
    "turbo-spin-echo-2d",
    "turbo-spin-echo-3d",
    "inversion-gradient-echo-3d",
    "echo-planar-2d",
)
Letter = Literal["i", "j", "k"]
Steps = Annotated[int, Field(ge=1, le=65536)]
Acceleration = Annotated[float, Field(ge=1, le=1000)]
Milliseconds = Annotated[float, Field(gt=0, le=600000)]


def _as_list(value: Any) -> Any:
    """One value where a list may stand."""
    if value == () or value is None:
        raise ValueError("one value or a list of at least one")
    return value if isinstance(value, tuple) else (value,)


def _asked(value: Any) -> Any:
    """Accelerations as a tuple; empty for "search"."""
    if isinstance(value, tuple) and not value:
        raise ValueError("one value or a list of at least one, or the word search")
    return () if value == "search" else _as_list(value)


def _as_entry(value: Any) -> Any:
    """A bare path where a table of paths may stand."""
    if not isinstance(value, str | dict):
        raise ValueError("a path in quotes, or a table of two files")
    return {"path": value} if isinstance(value, str) else value


def _text_or_table(value: Any) -> Any:
    if not isinstance(value, str | dict) or not value:
        raise ValueError("a name in quotes or a table")
    return value


def _method(value: Any) -> Any:
    value = _text_or_table(value)
    if isinstance(value, dict) and not isinstance(value.get("method"), str):
        raise ValueError('a method in quotes, or a table such as {method = "wavelet"}')
    return value


def _slices(value: Any) -> Any:
    def whole(number: Any, lowest: int) -> bool:
        return isinstance(number, int) and not isinstance(number, bool) and number >= lowest

    if value == "all" or whole(value, 1):
        return value
    listed = isinstance(value, tuple) and value and all(whole(index, 0) for index in value)
    if listed and len(set(value)) == len(value):
        return value
    raise ValueError('"all", a whole number from 1, or a list of different plane indices from 0')


TextOrTable = Annotated[Any, BeforeValidator(_text_or_table)]


class Section(BaseModel):
    """A table of the file: frozen, no unknown keys, no conversion between types."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=False)


class OpenSection(BaseModel):
    """A table whose further keys belong to the law, the recovery or the measure it names."""

    model_config = ConfigDict(frozen=True, extra="allow", strict=True, allow_inf_nan=False)

    @property
    def extra(self) -> dict[str, Any]:
        """The further keys, as the file has them."""
        return dict(self.model_extra or {})


class About(Section):
    """``[protocol]``: what is asked."""

    title: str = Field("", max_length=300, description="one line that heads the report")
    question: str = Field("", max_length=3000, description="what the study is to answer")


class Sequence(Section):
    """``[sequence]``: how the scanner plays the pattern; times as on the console."""

    family: Family = Field(description="sequence family")
    repetition_time_ms: Milliseconds = Field(
        description="time between excitations of one slice; between inversions where prepared"
    )
    echo_time_ms: Milliseconds | None = Field(None, description="(effective) echo time")
    averages: Annotated[int, Field(ge=1, le=256)] = Field(1, description="signal averages")
    frames: Annotated[int, Field(ge=1, le=100000)] = Field(
        1, description="repeats of the whole acquisition (time points, contrasts)"
    )
    echo_train_length: Annotated[int, Field(ge=1, le=4096)] | None = Field(
        None, description="positions acquired in one shot"
    )
    echo_spacing_ms: Milliseconds | None = Field(
        None, description="time between successive echoes of a shot"
    )
    inversion_time_ms: Milliseconds | None = Field(
        None, description="inversion to the echo that holds the centre of k-space"
    )
    order: Literal["linear", "centre-out", "radial-sector"] | None = Field(
        None, description="how positions are dealt to the echoes of a shot"
    )
    whole_shots: Literal["add", "drop", "idle"] | None = Field(
        None,
        description="how the count is made whole shots: add the next most probable positions, "
        "drop the least probable, or leave echoes idle (default: add; drop for poisson-disc; idle "
        "for regular patterns)",
    )
    dummy_shots: Annotated[int, Field(ge=0, le=10000)] = Field(
        0, description="shots played before data are kept"
    )
    slice_time_ms: Milliseconds | None = Field(
        None, description="time one slice takes within a repetition, spoilers included"
    )
    bandwidth_hz_per_pixel: Annotated[float, Field(gt=0, le=1e7)] | None = Field(
        None, description="receiver bandwidth per pixel; one readout lasts its inverse"
    )
    calibration_scan: Literal["inside", "separate"] = Field(
        "inside", description="calibration lines acquired inside the scan or as a scan of their own"
    )
    calibration_scan_time_s: Annotated[float, Field(ge=0, le=86400)] | None = Field(
        None, description="length of the separate calibration scan"
    )
    tissue_t2_ms: Milliseconds | None = Field(
        None, description="T2 (T2* for echo-planar) for which echo-train decay is shown"
    )
    console_scan_time_s: Annotated[float, Field(gt=0, le=86400)] | None = Field(
        None, description="what the console shows for the protocol now in use"
    )
    max_table_positions: Annotated[int, Field(ge=1)] | None = Field(
        None, description="longest sampling table the sequence reads"
    )
    max_line_gap: Annotated[int, Field(ge=1)] | None = Field(
        None, description="widest allowed step between neighbouring acquired lines"
    )
    min_echo_train_length: Annotated[int, Field(ge=1)] | None = Field(
        None, description="shortest echo train the sequence plays"
    )

    @property
    def three_d(self) -> bool:
        """True for families with a partition axis."""
        return self.family.endswith("-3d")


class Grid(Section):
    """``[grid]``: which file axes are encoded, and with how many acquired steps."""

    readout_axis: Letter = Field("i", description="file axis of the readout")
    phase_axis: Letter = Field("j", description="file axis of the phase encoding")
    partition_axis: Letter | None = Field(None, description="file axis of the partitions (3-D)")
    phase_steps: Steps | None = Field(
        None, description="phase steps acquired, oversampling in, interpolation out"
    )
    partition_steps: Steps | None = Field(None, description="partition steps acquired (3-D)")
    slices: Steps | None = Field(None, description="slices acquired (2-D)")
    channel_axis: Annotated[int, Field(ge=3, le=4)] | None = Field(
        None, description="file axis (counted from 0) that numbers receive channels"
    )


class Today(OpenSection):
    """``[today]``: the protocol now in use, run as an arm; further keys go to its sampling."""

    sampling: TextOrTable = Field(
        description="name of a [[sampling]] table, a law or family, or a table of its own"
    )
    acceleration: Acceleration | None = Field(
        None, description="acceleration in use today; 1 or the product of its steps where left out"
    )
    recovery: Annotated[Any, BeforeValidator(_method)] = Field(
        "zero-filled", description="method, or a table with method and settings"
    )
    averages: Annotated[int, Field(ge=1, le=256)] | None = Field(
        None, description="signal averages of today's scan"
    )


class Sampling(OpenSection):
    """One ``[[sampling]]`` table; keys of its law, draw or pattern are checked by sampling."""

    name: str | None = Field(None, min_length=1, max_length=80, description="label of this entry")
    acceleration: Annotated[tuple[Acceleration, ...], BeforeValidator(_asked)] | None = Field(
        None,
        description='one acceleration, a list, or "search" for the fastest that passes; a lattice '
        "with steps needs none",
    )
    search_from: Acceleration = Field(1.5, description="slowest acceleration a search looks at")
    search_to: Acceleration = Field(9.0, description="fastest acceleration a search looks at")
    search_steps: Annotated[int, Field(ge=2, le=64)] = Field(
        16, description="accelerations a search chooses from, ends included"
    )
    averages: Annotated[int, Field(ge=1, le=256)] | None = Field(
        None, description="signal averages of these arms (default: those of [sequence])"
    )

    @property
    def searched(self) -> bool:
        """True where the fastest acceleration that passes is to be found."""
        return self.acceleration == ()

    @property
    def accelerations(self) -> tuple[float, ...]:
        """What ``acceleration`` says, else what a regular pattern's own keys say, else empty."""
        if self.searched:
            step = (self.search_to - self.search_from) / (self.search_steps - 1)
            return tuple(round(self.search_from + n * step, 4) for n in range(self.search_steps))
        if self.acceleration:
            return self.acceleration
        if self.extra.get("pattern") == "full":
            return (1.0,)
        steps = self.extra.get("steps", ())
        return (float(math.prod(_as_list(steps))),) if steps else ()


class Recovery(OpenSection):
    """One ``[[recovery]]`` table; the method's settings are kept and checked there."""

    method: str = Field(description="recovery method")
    name: str | None = Field(None, min_length=1, max_length=80, description="label of this entry")


class Coils(Section):
    """``[coils]``: receive array simulated for scans that hold one image."""

    form: Literal["cylinder", "dome"] = Field(
        "cylinder", description="loops around the field of view, or closed over one end of it"
    )
    number: Annotated[int, Field(ge=1, le=256)] = Field(8, description="loops in the array")
    rows: Annotated[int, Field(ge=1, le=64)] = Field(1, description="rows along the bore")
    radius_mm: Annotated[float, Field(gt=0, le=1000)] | None = Field(
        None, description="radius of one loop (default: neighbours overlap slightly)"
    )
    standoff_mm: Annotated[float, Field(ge=0, le=1000)] = Field(
        30.0, description="distance of the loops from the field of view"
    )
    correlation: Annotated[float, Field(ge=0, lt=1)] = Field(
        0.0, description="noise correlation of neighbouring loops"
    )
    phase: Annotated[float, Field(ge=0, le=20)] = Field(
        0.0, description="strength in radians of a smooth random phase put on magnitude scans"
    )


class ScanEntry(Section):
    """A scan of ``scans``: one path or pattern, or a table that names the two files of a pair."""

    path: str | None = Field(None, min_length=1, description="file or pattern")
    magnitude: str | None = Field(None, min_length=1, description="magnitude file or pattern")
    phase: str | None = Field(None, min_length=1, description="phase file or pattern")
    real: str | None = Field(None, min_length=1, description="real-part file or pattern")
    imaginary: str | None = Field(None, min_length=1, description="imaginary-part file or pattern")

    @model_validator(mode="after")
    def _pair(self) -> ScanEntry:
        given = {key for key, value in self if value is not None}
        if given not in ({"path"}, {"magnitude"}, {"magnitude", "phase"}, {"real", "imaginary"}):
            raise ValueError(
                "a path, or a table with magnitude and phase, or with real and imaginary"
            )
        return self


class Study(Section):
    """``[study]``: which scans, how many draws, which slices, how much added noise."""

    scans: Annotated[
        tuple[Annotated[ScanEntry, BeforeValidator(_as_entry)], ...], BeforeValidator(_as_list)
    ] = Field(description="scan files, patterns or pairs, relative to the protocol file")
    training_scans: Annotated[
        tuple[Annotated[ScanEntry, BeforeValidator(_as_entry)], ...], BeforeValidator(_as_list)
    ] = Field((), description='scans that weight = "trained" is chosen on; none of them is studied')
    draws: Annotated[int, Field(ge=1, le=10000)] = Field(1, description="draws of each pattern")
    seed: Annotated[int, Field(ge=0, le=2**63 - 1)] = Field(0, description="seed of the study")
    slices: Annotated[Any, BeforeValidator(_slices)] = Field(
        "all", description='slices studied: "all", how many (spread evenly) or a list of indices'
    )
    quick_slices: Steps = Field(4, description="slices studied with --quick")
    sigma_added: Annotated[float, Field(ge=0)] | None = Field(
        None, description="noise added: standard deviation of the real part of a k-space sample"
    )
    snr: Annotated[float, Field(gt=0)] | None = Field(
        None, description="noise added so that mean magnitude in the body / sigma is this"
    )
    noise_percent: Annotated[float, Field(ge=0, le=100)] | None = Field(
        None, description="noise added, in percent of the largest magnitude"
    )
    reference_averages: Annotated[int, Field(ge=1, le=256)] | None = Field(
        None, description="averages the reference scans were made with"
    )
    virtual_channels: Annotated[int, Field(ge=1, le=256)] | None = Field(
        None, description="receive channels are compressed to so many before recovery"
    )
    echo_train_decay: bool = Field(
        False, description="weight k-space by the decay along the echo train (needs tissue_t2_ms)"
    )
