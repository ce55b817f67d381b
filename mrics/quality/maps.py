"""Error maps of a recovered image."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from mrics.quality._inputs import as_stack


class ErrorMaps(NamedTuple):
    """Two error maps, in the unit and the precision of the images.

    Attributes
    ----------
    magnitude : ndarray, real
        |image| - |reference|: positive where the recovered image is too bright.
    complex : ndarray, real
        |image - reference|: errors of phase count too. For real images, the size of the error.
    """

    magnitude: NDArray[Any]
    complex: NDArray[Any]


def error_maps(image: NDArray[Any], reference: NDArray[Any]) -> ErrorMaps:
    """Signed magnitude error and size of the complex error at every voxel.

    Parameters
    ----------
    image, reference : ndarray of shape (u, v) or (planes, u, v), real or complex

    Raises
    ------
    QualityError
        For shapes that differ and values that are not finite.
    """
    as_stack(image, reference, None)
    return ErrorMaps(np.abs(image) - np.abs(reference), np.abs(image - reference))
