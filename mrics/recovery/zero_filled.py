"""Zero-filled image: the adjoint of the encoding applied to the data."""

from __future__ import annotations

import numpy as np

from mrics.encoding import Encoding
from mrics.encoding.acquisition import Acquisition
from mrics.recovery.contract import Certificate, Recovered
from mrics.recovery.fields import Settings
from mrics.recovery.plane import Array, each_plane


def solve(acquisition: Acquisition, settings: Settings, sigma: float) -> Recovered:
    """Inverse transform with missing samples zero, channels combined by their sensitivities.

    With sensitivities the adjoint is divided by sum |S|^2, so that full sampling gives the image;
    pixels that no channel sees are 0.
    """
    image = np.zeros(acquisition.shape, acquisition.kspace.dtype)

    def one(_worker: None, encoding: Encoding, data: Array, i: int, plane: int) -> None:
        part = encoding.part(slice(i, i + 1))
        out = image[plane : plane + 1]
        part.adjoint(data[i : i + 1], out=out, overwrite=True)
        if part.sensitivities is not None:
            energy = part.energy
            np.divide(out, energy, out=out, where=energy > 0)

    each_plane(acquisition, lambda: None, one)
    return Recovered(image, Certificate("zero-filled"))
