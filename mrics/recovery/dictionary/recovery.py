"""Recovery with a patch dictionary, learned from the data as it goes or trained before.

The smooth phase of the warm start (its low frequencies, over the size of the calibration region) is
taken out. Outer iteration t has an effective noise s_t that falls geometrically from
``START_FACTOR`` times the noise of the data to the noise itself (aliasing that the start left
counts as noise):

1. every patch, its mean apart, is coded by matching pursuit until its squared residual is below
   n (gain s_t)^2, n its samples: real and imaginary part each on its own over real atoms (an
   imaginary part that holds only noise is flattened, which makes the phase a prior), both together
   with 2 n over complex ones; the image d is the average of the coded patches, those of few
   atoms weighted higher;
2. x minimises ||A x - y||^2 + (coupling sigma / s_t)^2 ||x - d||^2: by a division in k-space on one
   channel, by conjugate gradients from d on several.

``source = "adaptive"`` learns the atoms online from patches of the current image (Ravishankar &
Bresler 2011, doi:10.1109/TMI.2010.2090538, with other learning, phase and noise schedule). There is
no fixed objective, so the result is not certified.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import blocks
from mrics.encoding.acquisition import Acquisition
from mrics.encoding.operator import Encoding
from mrics.numerics import fft_planes, ifft_planes, map_blocks
from mrics.recovery.contract import Certificate, Recovered
from mrics.recovery.dictionary.coding import Prepared
from mrics.recovery.dictionary.domain import check_domain
from mrics.recovery.dictionary.fixed import fixed_atoms
from mrics.recovery.dictionary.learning import learn_online
from mrics.recovery.dictionary.patches import Averaged, Layout, choose, code_and_average, lay_out
from mrics.recovery.dictionary.phase import smooth_phase
from mrics.recovery.dictionary.store import Dictionary, load_dictionary
from mrics.recovery.plane import scale_unit
from mrics.recovery.settings import PatchDictionary, Variation, ZeroFilled

Array = NDArray[Any]
#: chosen on brain volumes A, B and C of the tests' list, noise 1 % and 3 % of the maximum
GAIN, START_FACTOR, COUPLING = 0.8, 1.5, 0.25
_CG_STEPS = 6
_LEARN_PATCHES, _LEARN_ATOMS = 10_000, 8


def solve(acquisition: Acquisition, settings: PatchDictionary, sigma: float) -> Recovered:
    """Recover every plane; see the module for the method."""
    if acquisition.channels > 1 and acquisition.sensitivities is None:
        from mrics.encoding import with_sensitivities

        acquisition = with_sensitivities(acquisition)
    unit = scale_unit(acquisition)
    image = _start(acquisition, settings, sigma)
    if not image.any():
        return Recovered(image, Certificate("dictionary", certified=False, note="all data are 0"))
    turn = smooth_phase(image, acquisition.calibration)
    image /= image.dtype.type(unit)
    noise = sigma / unit
    layout, atoms, known = _first_atoms(acquisition, settings)
    limit = settings.most_atoms or layout.length // 2
    gain = GAIN if isinstance(settings.gain, str) else settings.gain
    history: dict[str, list[float]] = {"change": [], "atoms_per_patch": [], "noise": []}
    number = settings.iterations
    averaged: Averaged | None = None
    prepared = None if atoms is None else Prepared(atoms)
    for step in range(number):
        level = noise * START_FACTOR ** (1 - step / max(1, number - 1))
        turned = _turned(image, turn, back=True)
        if settings.source == "adaptive":
            atoms = _learned(turned, layout, settings, atoms, gain * level, step)
            prepared = Prepared(atoms)
        assert prepared is not None
        target = (2 if prepared.complex else 1) * layout.length * (gain * level) ** 2
        averaged = code_and_average(turned, prepared, layout, limit, target)
        coupling = (COUPLING * noise / level) ** 2
        fresh = data_step(acquisition, _turned(averaged.image, turn), coupling, unit)
        change = float(np.linalg.norm(fresh - image)) / max(float(np.linalg.norm(fresh)), 1e-30)
        image = fresh
        history["change"].append(change)
        history["atoms_per_patch"].append(averaged.mean_atoms)
        history["noise"].append(level * unit)
    assert averaged is not None
    assert prepared is not None
    copies = acquisition.shape[0] // len(layout.groups)
    extras: dict[str, Any] = {
        "residual": np.tile(
            np.sqrt(averaged.residual / (2 * layout.length)) * unit, (copies, 1, 1)
        ),
        "atoms_per_patch": np.tile(np.maximum(averaged.atoms_used, 0), (copies, 1, 1)),
        "sheets": _sheets(prepared.atoms, averaged.use, layout),
    }
    note = (
        "not certified: no fixed objective; "
        f"{averaged.mean_atoms:.1f} atoms per patch at the last error target"
    )
    if known is not None and known.residuals.size:
        verdict = check_domain(known, image * np.conj(turn), layout, noise)
        extras["domain"] = verdict.planes
        extras["domain_map"] = _in_place(verdict.map, layout, acquisition.shape[0])
        note += f"; {verdict.sentence}"
    certificate = Certificate(
        "dictionary",
        iterations=number,
        final_change=history["change"][-1],
        certified=False,
        weight=gain,
        weight_rule=f"auto: error target of {GAIN:g} x the noise"
        if settings.gain == "auto"
        else "given",
        note=note,
    )
    image *= image.dtype.type(unit)
    return Recovered(image, certificate, history, extras)


def _turned(stack: Array, turn: Array, back: bool = False) -> Array:
    """The stack times the phase factors, or their conjugates."""
    out = np.empty(stack.shape, stack.dtype)

    def one(plane: int) -> None:
        factors = np.conj(turn[plane]) if back else turn[plane]
        np.multiply(stack[plane], factors, out=out[plane])

    map_blocks(one, range(len(stack)))
    return out


def _in_place(by_start: Array, layout: Layout, planes: int) -> Array:
    """Values by group and start of a patch, at the patch's middle and on every frame."""
    middle = np.roll(by_start, (layout.size[0] // 2, layout.size[1] // 2), (1, 2))
    return np.tile(middle, (planes // len(layout.groups), 1, 1))


def _sheets(atoms: Array, use: NDArray[np.int64], layout: Layout) -> dict[str, Array]:
    """Atoms (u, v, layer, atom), most used first, and how often each was used (atom, 1, 1)."""
    order = np.argsort(-use, kind="stable")
    shaped = atoms[order].reshape(len(atoms), layout.layers, *layout.size)
    return {"atoms": shaped.transpose(2, 3, 1, 0), "atom_use": use[order].reshape(-1, 1, 1)}


def _start(acquisition: Acquisition, settings: PatchDictionary, sigma: float) -> Array:
    """Warm start in the unit of the data."""
    if settings.start == "zero-filled":
        from mrics.recovery import zero_filled

        return zero_filled.solve(acquisition, ZeroFilled(), sigma).image
    from mrics.recovery import variation

    # A start need not be exact: a tighter gap changed no score by more than 0.04 dB.
    return variation.solve(acquisition, Variation(weight=0.5, tolerance=1e-2), sigma).image


def _first_atoms(
    acquisition: Acquisition, settings: PatchDictionary
) -> tuple[Layout, Array | None, Dictionary | None]:
    """Layout of the patches, fixed or trained atoms, and the trained dictionary."""
    real = np.dtype(acquisition.kspace.dtype.type(0).real.dtype)
    known = None if settings.dictionary is None else load_dictionary(settings.dictionary)
    size: tuple[int, ...] = (settings.patch, settings.patch)
    if settings.depth > 1:
        size = (settings.depth, *size)
    layout = lay_out(
        acquisition.shape, known.patch if known else size, frames=_frames(acquisition),
        joint=settings.joint, stride=settings.stride, border=settings.border,
    )  # fmt: skip
    if settings.source == "adaptive":
        return layout, None, None
    if settings.source == "trained":
        assert known is not None
        assert settings.dictionary is not None
        known = load_dictionary(settings.dictionary, layers=layout.layers)
        kind = acquisition.kspace.dtype if np.iscomplexobj(known.atoms) else real
        return layout, known.atoms.astype(kind), known
    atoms = fixed_atoms(settings.source, layout.size, settings.atoms)
    if layout.layers > 1:
        atoms = np.kron(np.eye(layout.layers), atoms)
    return layout, atoms.astype(real), None


def _frames(acquisition: Acquisition) -> int:
    shape = acquisition.volume_shape
    return int(shape[3]) if len(shape) > 3 else max(1, acquisition.pattern.frames)


def _learned(
    turned: Array, layout: Layout, settings: PatchDictionary, atoms: Array | None,
    level: float, step: int,
) -> Array:  # fmt: skip
    """Atoms taught by patches of the current image, from the last ones on."""
    whole = settings.kind == "complex"
    source = turned if whole else np.ascontiguousarray(turned.real)
    patches = choose(source, layout, _LEARN_PATCHES, settings.seed, ("recovery", step))
    return learn_online(
        patches, settings.atoms, sparsity=_LEARN_ATOMS,
        error=(2 if whole else 1) * layout.length * level**2, passes=3 if atoms is None else 1,
        seed=settings.seed, start=atoms,
    )  # fmt: skip


def data_step(acquisition: Acquisition, denoised: Array, coupling: float, unit: float) -> Array:
    """Images that minimise ||A x - y / unit||^2 + coupling ||x - denoised||^2, block by block."""
    out = np.empty_like(denoised)
    real = denoised.real.dtype.type
    for planes, encoding, data in blocks(acquisition):
        first = planes.start

        def one(
            i: int, encoding: Encoding = encoding, data: Array = data, first: int = first
        ) -> None:
            part = encoding.part(slice(i, i + 1))
            start = denoised[first + i][None]
            if part.sensitivities is None:
                spectrum = fft_planes(start)
                wanted = data[i] / denoised.dtype.type(unit)
                share = part.mask[0, 0] / real(1 + coupling)
                spectrum += share * (wanted - spectrum)
                out[first + i] = ifft_planes(spectrum, overwrite=True)[0]
            else:
                right = part.adjoint(data[i : i + 1]) / denoised.dtype.type(unit)
                out[first + i] = _gradients(part, right, start, real(coupling))[0]

        map_blocks(one, range(data.shape[0]))
    return out


def _gradients(encoding: Encoding, right: Array, start: Array, coupling: Any) -> Array:
    """(A^H A + coupling) x = right + coupling start, from ``start``."""
    x = start.copy()
    residual = right - encoding.normal(x)
    direction = residual.copy()
    square = float(np.vdot(residual, residual).real)
    begin = square
    for _ in range(_CG_STEPS):
        if square <= 1e-10 * begin or square == 0:
            break
        mapped = encoding.normal(direction) + coupling * direction
        step = x.real.dtype.type(square / float(np.vdot(direction, mapped).real))
        x += step * direction
        residual -= step * mapped
        following = float(np.vdot(residual, residual).real)
        direction = residual + x.real.dtype.type(following / square) * direction
        square = following
    return x
