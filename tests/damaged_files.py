"""Strategies for the files people hand in: valid ones, and the same with damage.

Bytes are made from the offsets of ``nifti1.h`` and ``nifti2.h`` (scans), by our own writers
(tables, dictionaries, ledgers) or as text (protocols).
"""

from __future__ import annotations

import functools
import gzip
import io
import json
import sqlite3
import struct
import tempfile
import zipfile
from pathlib import Path
from typing import Any

import numpy as np
from hypothesis import strategies as st

from mrics.recovery.dictionary.store import Dictionary, save_dictionary
from mrics.sampling import draw_pattern, write_table
from mrics.study.ledger import LEDGER, Ledger

# datatype codes of nifti1.h with a numpy type; 128 and 2304 are colours, 1 is bits
TYPES = {
    2: "u1", 4: "i2", 8: "i4", 16: "f4", 32: "c8", 64: "f8", 256: "i1", 512: "u2", 768: "u4",
    1024: "i8", 1280: "u8", 1792: "c16",
}  # fmt: skip
ODD_CODES = (0, 1, 128, 255, 1536, 2048, 2304, 77, -4)
EXTREME = (0.0, -0.0, 1e-45, 1e-38, 1e38, -1e38, float("nan"), float("inf"), 1.0, -1.0, 1e15)
ZEROS = gzip.compress(bytes(32 * 2**20))

seeds = st.integers(0, 2**32 - 1)


@st.composite
def nifti_files(draw: st.DrawFn) -> bytes:
    """A valid single-file NIfTI-1 or -2, plain, of random shape, type, scaling and orientation."""
    second = draw(st.booleans())
    order = draw(st.sampled_from("<>"))
    axes = draw(st.sampled_from((3, 3, 3, 4)))
    shape = tuple(draw(st.integers(1, 12)) for _ in range(axes))
    code = draw(st.sampled_from(sorted(TYPES)))
    rng = np.random.default_rng(draw(seeds))
    kind = np.dtype(TYPES[code]).newbyteorder(order)
    values = rng.uniform(0, 100, shape)
    data = (values * np.exp(1j * values) if kind.kind == "c" else values).astype(kind)
    size = 544 if second else 352
    head = bytearray(size)
    # NIfTI-2 has the same fields, wider and elsewhere: (format, offset) in each version
    put = lambda v1, v2, *x: struct.pack_into(order + (v2 if second else v1)[0], head,  # noqa: E731
                                             (v2 if second else v1)[1], *x)  # fmt: skip
    put(("i", 0), ("i", 0), size - 4)
    head[(4 if second else 344) : (8 if second else 348)] = b"n+2\0" if second else b"n+1\0"
    put(("8h", 40), ("8q", 16), axes, *shape, *([1] * (7 - axes)))
    put(("2h", 70), ("2h", 12), code, kind.itemsize * 8)
    voxel = [draw(st.floats(0.1, 8.0)) for _ in range(3)]
    put(("8f", 76), ("8d", 104), draw(st.sampled_from((1.0, -1.0))), *voxel, *[1.0] * 4)
    put(("f", 108), ("q", 168), size)
    put(("2f", 112), ("2d", 176), draw(st.sampled_from((0.0, 1.0, 0.37, -2.0))), 0.5)
    put(("B", 123), ("i", 500), draw(st.sampled_from((0, 1, 2, 3, 10))))
    form = draw(st.integers(0, 3))
    put(("2h", 252), ("2i", 344), form & 1, form >> 1)
    put(("3f", 256), ("3d", 352), 0.1, 0.2, 0.3)
    place = ("12f", 280), ("12d", 400)
    put(*place, voxel[0], 0, 0, 5, 0, voxel[1], 0, -7, 0, 0, voxel[2], 9)
    return bytes(head) + data.tobytes(order="F")


@st.composite
def damaged_bytes(draw: st.DrawFn, whole: bytes, hot: int = 0) -> bytes:
    """``whole`` with bytes changed (mostly among the first ``hot``), cut, doubled or lengthened."""
    content = bytearray(whole)
    for _ in range(draw(st.integers(1, 4))):
        if not content:
            break
        reach = hot if hot and draw(st.integers(0, 3)) else len(content)
        at = draw(st.integers(0, min(reach, len(content)) - 1))
        how = draw(st.integers(0, 5))
        if how <= 1:
            content[at] = draw(st.integers(0, 255))
        elif how == 2:
            content[at] ^= 1 << draw(st.integers(0, 7))
        elif how == 3:
            del content[at : at + draw(st.sampled_from((1, 2, 64, 2**20)))]
        elif how == 4:
            content[at:at] = content[at : at + draw(st.sampled_from((1, 16, 512)))]
        else:
            content += bytes(draw(st.sampled_from((1, 300, 70_000))))
    return bytes(content)


@st.composite
def damaged_niftis(draw: st.DrawFn) -> bytes:
    """A NIfTI file with odd header fields, damaged bytes, broken compression, or a bomb."""
    whole = draw(nifti_files())
    second = whole[4:7] == b"n+2"
    order = "<" if whole[0] in (92, 28) else ">"
    for _ in range(draw(st.integers(0, 2))):
        whole = _odd_field(draw, bytearray(whole), second, order)
    how = draw(st.integers(0, 5))
    if how == 0:
        return draw(damaged_bytes(whole, hot=544))
    if how == 1:
        return gzip.compress(draw(damaged_bytes(whole, hot=544)), 1)
    if how == 2:
        return draw(damaged_bytes(gzip.compress(whole, 1), hot=18))
    if how == 3:
        return gzip.compress(whole, 1) + ZEROS * draw(st.sampled_from((1, 40)))
    if how == 4:
        head = 544 if second else 352
        return gzip.compress(whole[:head], 1) + ZEROS * draw(st.sampled_from((1, 3)))
    return whole


def _odd_field(draw: st.DrawFn, content: bytearray, second: bool, order: str) -> bytes:
    def put(kind: str, at: int, value: Any) -> None:
        struct.pack_into(order + kind, content, at, value)

    extreme = st.sampled_from(EXTREME)
    match draw(st.integers(0, 6)):
        case 0:
            axis = draw(st.integers(0, 7))
            length = draw(st.sampled_from((-1, 0, 1, 2, 7, 8, 32000, 32767)))
            put("q" if second else "h", 16 + 8 * axis if second else 40 + 2 * axis, length)
        case 1:
            for axis in (1, 2, 3):
                put("q" if second else "h", 16 + 8 * axis if second else 40 + 2 * axis, 32000)
        case 2:
            put("h", 12 if second else 70, draw(st.sampled_from((*TYPES, *ODD_CODES))))
        case 3:
            axis = draw(st.integers(0, 7))
            put("d" if second else "f", 104 + 8 * axis if second else 76 + 4 * axis, draw(extreme))
        case 4:
            number = draw(st.integers(0, 1))
            at = 176 + 8 * number if second else 112 + 4 * number
            put("d" if second else "f", at, draw(extreme))
        case 5:
            number = draw(st.integers(0, 17))
            at = 352 + 8 * number if second else 256 + 4 * number
            put("d" if second else "f", at, draw(extreme))
        case 6 if second:
            put("q", 168, draw(st.sampled_from((0, 1, 545, 2**40, -1, 2**62))))
        case 6:
            put("f", 108, draw(extreme))
    return bytes(content)


FAMILIES = (
    "gradient-echo-3d", "spin-echo-2d", "gradient-echo-2d", "turbo-spin-echo-2d",
    "turbo-spin-echo-3d", "inversion-gradient-echo-3d", "echo-planar-2d",
)  # fmt: skip
METHODS = ("zero-filled", "least-squares", "wavelet", "variation", "dictionary", "kernel", "pocs")


@st.composite
def protocols(draw: st.DrawFn) -> str:
    """The text of a valid protocol for scans called ``object_*.nii.gz``."""
    family = draw(st.sampled_from(FAMILIES))
    title = json.dumps(draw(st.text('Aé "#x', max_size=20)))
    lines = ["[protocol]", f"title = {title}"]
    lines += ["[sequence]", f'family = "{family}"']
    lines += [f"repetition_time_ms = {draw(st.integers(1000, 9000))}", "echo_time_ms = 5.5"]
    if family.startswith(("turbo", "inversion", "echo-planar")):
        lines += [f"echo_train_length = {draw(st.integers(2, 16))}", "echo_spacing_ms = 5.5"]
    if family.startswith("inversion"):
        lines.append("inversion_time_ms = 400")
    lines += ["[grid]", 'readout_axis = "i"', 'phase_axis = "j"']
    lines += ['partition_axis = "k"'] if family.endswith("3d") else []
    for number in range(draw(st.integers(1, 3))):
        law = draw(st.sampled_from(("uniform", "gaussian", "power", "inverse-square")))
        form = draw(st.sampled_from((f'law = "{law}"', 'pattern = "equispaced"')))
        lines += ["[[sampling]]", f'name = "s{number}"', form]
        lines += [f"acceleration = {draw(st.sampled_from(('2', '[2, 4]', '3.0')))}"]
        lines += [f"calibration = {draw(st.integers(0, 4))}"]
    methods = draw(st.lists(st.sampled_from(METHODS), min_size=1, max_size=3, unique=True))
    for method in methods:
        lines += ["[[recovery]]", f'method = "{method}"']
    limit = draw(st.sampled_from(("ssim_min", "nrmse_max", "psnr_worst")))
    lines += ["[acceptance]", f"{limit} = {draw(st.floats(0.01, 0.99))!r}"]
    lines += ["[study]", 'scans = ["object_*.nii.gz"]', f"draws = {draw(st.integers(1, 9))}"]
    lines += [f"seed = {draw(seeds)}"]
    return "\n".join(lines) + "\n"


VALUES = (
    "0", "-1", "1e308", "inf", "nan", "true", "''", "'a'", "[]", "[1]", "{}", "{a=1}", "2", "0.5",
    "1979-05-27", "07:32:00", "9999999999999999999999", "[[1]]", "[{}]", "'i'", "'power'",
    "[1.5,'x']", "{pattern='full'}", "{method=3}", "{law='table'}", "65536", "100000", "1000000000",
    "'object_0.nii.gz'", "'/dev/zero'", "'..'", "'search'", "[" * 3000, "1e-320", "1000", "[2, 2]",
    "'~nobody-here/x'",
)  # fmt: skip
LINES = (
    "pattern = 'full'", "pattern = 'spokes'", "steps = [2, 2]", "law = 'energy'", "frames = 3",
    "averages = 2", "order = 'linear'", "name = 'x'", "table = 'x'", "training = []", "[coils]",
    "number = 3", "[[sampling]]", "[[recovery]]", "weight = 'auto'", "calibration = [3, 4]",
    "draw = 'poisson-disc'", "draw = 'low-discrepancy'", "best_of = 20", "pattern = 'spiral'",
    "pattern = 'shifted lattice'", "shift = 1", "partial_fourier = 0.75", "elliptical = true",
    "per_axis = true", "acceleration = 'search'", "search_steps = 64", "law = 'table'", "[quality]",
    "pattern = 'file'", "file = 'object_0.nii.gz'", "table = 'object_0.nii.gz'", "channel_axis = 3",
    "training = ['object_0.nii.gz']", "draw = 'bernoulli'", "draw = 'jittered'", "turns = 1000",
)  # fmt: skip
ODD = "\0\t\"#'.=[]{}\x7fé€\U0001f600"


@st.composite
def damaged_protocols(draw: st.DrawFn) -> bytes:
    """A protocol with lines, values, characters or bytes that do not belong there."""
    lines = draw(protocols()).split("\n")
    for _ in range(draw(st.sampled_from((1, 1, 2, 4)))):
        at = draw(st.integers(0, len(lines) - 1))
        line = lines[at]
        match draw(st.integers(0, 5)):
            case 0 if len(lines) > 1:
                lines.pop(at)
            case 1:
                lines.insert(draw(st.integers(0, len(lines))), line)
            case 2:
                lines[at] = f"{line.split('=')[0]}= {draw(st.sampled_from(VALUES))}"
            case 3:
                cut = draw(st.integers(0, len(line)))
                lines[at] = line[:cut] + draw(st.sampled_from(ODD)) + line[cut + 1 :]
            case 4:
                lines.insert(at, draw(st.sampled_from(LINES)))
            case 5:
                lines[at] = line[: draw(st.integers(0, len(line)))]
    content = "\n".join(lines).encode()
    return draw(damaged_bytes(content)) if draw(st.integers(0, 4)) == 0 else content


@functools.cache
def tables() -> tuple[tuple[str, bytes], ...]:
    """Valid pattern files of every form: (ending, content)."""
    made = []
    with tempfile.TemporaryDirectory() as name:
        for number, pattern in enumerate(
            (
                draw_pattern((24,), acceleration=2, calibration=4),
                draw_pattern((12, 10), acceleration=2, calibration=4, draw="bernoulli"),
                draw_pattern((16,), acceleration=2, calibration=4, frames=3),
                draw_pattern((10, 12), pattern="equispaced", acceleration=2, calibration=0),
            )
        ):
            for ending in (".csv", ".json", ".nii", ".nii.gz"):
                path = Path(name) / f"{number}{ending}"
                made.append((ending, write_table(pattern, path).read_bytes()))
    return tuple(made)


CELLS = (
    "-1", "0", "1e3", "nan", "", "null", "x", "9" * 5000, "99999999999", "true", "[]", "{}",
    '"a"', "[[]]", '{"rows": 3}', "[1, 2]", "[100000, 100000]", "1.5", "24 24 24", "65536 65536",
)  # fmt: skip


@st.composite
def damaged_tables(draw: st.DrawFn) -> tuple[str, bytes]:
    """A pattern file with cells or bytes that do not belong there: (ending, content)."""
    ending, content = draw(st.sampled_from(tables()))
    how = draw(st.integers(0, 3))
    if ending == ".nii.gz" and how:
        unpacked = draw(damaged_bytes(gzip.decompress(content), hot=352))
        return ending, gzip.compress(unpacked, 1) + (ZEROS * 3 if how == 1 else b"")
    if ending in (".csv", ".json") and how:
        lines = content.decode().split("\n")
        for _ in range(draw(st.integers(1, 3))):
            at = draw(st.integers(0, min(len(lines), draw(st.sampled_from((12, 400)))) - 1))
            start, mark, end = lines[at].rpartition(draw(st.sampled_from((":", ","))))
            cell = draw(st.sampled_from(CELLS))
            if draw(st.booleans()):
                lines[at] = start + mark + cell + ("," if end.endswith(",") or not end else "")
            elif len(lines) > 1:
                lines.pop(at)
        return ending, "\n".join(lines).encode()
    return ending, draw(damaged_bytes(content, hot=400))


@functools.cache
def dictionary() -> bytes:
    """A small valid dictionary file."""
    atoms = np.random.default_rng(0).standard_normal((24, 16))
    atoms /= np.linalg.norm(atoms, axis=1, keepdims=True)
    with tempfile.TemporaryDirectory() as name:
        made = Dictionary(atoms, (4, 4), 1, np.ones(3, np.float32), {"scans": [{"sha256": "a"}]})
        return save_dictionary(made, Path(name) / "d.npz").read_bytes()


@functools.cache
def entries() -> dict[str, bytes]:
    """Contents of the valid dictionary's entries."""
    with zipfile.ZipFile(io.BytesIO(dictionary())) as held:
        return {name: held.read(name) for name in held.namelist()}


def packed(contents: dict[str, bytes], how: int) -> bytes:
    """Contents as a zip file."""
    out = io.BytesIO()
    with zipfile.ZipFile(out, "w", how, compresslevel=1) as made:
        for name, content in contents.items():
            made.writestr(name, content)
    return out.getvalue()


@functools.cache
def bomb(victim: str) -> bytes:
    """A dictionary of some hundred kB, one entry of which unpacks to 128 MB."""
    head = _npy("<f8", "(16777216,)")[:-24]
    return packed({**entries(), victim: head + bytes(2**27)}, zipfile.ZIP_DEFLATED)


@st.composite
def damaged_dictionaries(draw: st.DrawFn) -> bytes:
    """A dictionary file with damaged bytes, entries that lie, or entries that unpack to much."""
    how = draw(st.integers(0, 3))
    contents = dict(entries())
    victim = draw(st.sampled_from(sorted(contents)))
    if how == 0:
        return draw(damaged_bytes(dictionary()))
    if how == 1:
        large = bomb(draw(st.sampled_from(("atoms.npy", "provenance.npy"))))
        return large if draw(st.booleans()) else draw(damaged_bytes(large))
    if how == 2:
        contents[victim] = draw(damaged_bytes(contents[victim], hot=128))
    elif draw(st.booleans()):
        kind = draw(st.sampled_from(("<f8", "<i8", "|O", "<U9", "<c16", "|b1")))
        shapes = ("()", "(3,)", "(40000, 40000, 9)", "(0,)", "(-1,)", "(1e3,)", "[3]")
        contents[victim] = _npy(kind, draw(st.sampled_from(shapes)))
    else:
        del contents[victim]
    content = packed(contents, draw(st.sampled_from((zipfile.ZIP_STORED, zipfile.ZIP_DEFLATED))))
    return draw(damaged_bytes(content)) if draw(st.integers(0, 4)) == 0 else content


def _npy(kind: str, shape: str) -> bytes:
    head = f"{{'descr': '{kind}', 'fortran_order': False, 'shape': {shape}, }}".encode()
    head += b" " * (118 - len(head)) + b"\n"
    return b"\x93NUMPY\x01\x00" + struct.pack("<H", len(head)) + head + bytes(24)


LEDGER_KEYS = tuple(f"unit-{n}" for n in range(40))


@functools.cache
def ledger() -> bytes:
    """A ledger of 40 small units."""
    with tempfile.TemporaryDirectory() as name:
        with Ledger(Path(name)) as kept:
            for key in LEDGER_KEYS:
                kept.commit(key, {"key": key, "maps": [], "slices": [{"nrmse": 0.1}] * 5})
        return (Path(name) / LEDGER).read_bytes()


@st.composite
def damaged_ledgers(draw: st.DrawFn) -> bytes:
    """A ledger with damaged bytes, or sound SQLite with units that are none."""
    if draw(st.integers(0, 2)):
        return draw(damaged_bytes(ledger(), hot=draw(st.sampled_from((100, 0)))))
    texts = ("[]", "null", "{", "{}", "3", "[" * 9000, '{"maps": 3}', "NaN", "9" * 6000)
    value = draw(st.sampled_from((None, 3, 1.5, b"\xff\xfe", *texts)))
    with sqlite3.connect(":memory:") as base:
        base.deserialize(ledger())
        key = draw(st.sampled_from(LEDGER_KEYS))
        if draw(st.booleans()):
            base.execute("DROP TABLE units")
            columns = draw(
                st.sampled_from(("key, finished, result", "key", "key, result, b, c, d"))
            )
            base.execute(f"CREATE TABLE units ({columns})")
        else:
            base.execute("UPDATE OR IGNORE units SET result = ? WHERE key = ?", (value, key))
        base.commit()
        content = base.serialize()
    base.close()
    return content
