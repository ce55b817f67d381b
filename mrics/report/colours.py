"""Colours of figures and of the page's image windows.

Images are grey; spreads use cividis, measures beside images viridis, which passes through no grey
that could be read as a gap; signed errors use a map built here:
two hues that every common form of colour vision tells apart (blue, orange), lightness falling
linearly and equally from white at zero to both ends in the OKLab space (B. Ottosson, 2020), so that
equal steps of error look equal and +e looks as strong as -e.
"""

from __future__ import annotations

from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

INK = "#1c2024"
MUTED = "#5b646d"
GRID = "#d5dadf"
FAIL = "#b3261e"

SERIES = ("#0072b2", "#d55e00", "#009e73", "#cc79a7", "#7a5c00", "#56b4e9", "#000000", "#e69f00")
"""Hues of Okabe & Ito (2008), the yellow darkened so that it can be read on white."""

MARKERS = ("o", "s", "^", "D", "v", "P", "X", "<")

_LIGHTEST, _DARKEST, _CHROMA = 0.97, 0.45, 0.135
_HUE_LOW, _HUE_HIGH = 255.0, 55.0


@lru_cache(maxsize=1)
def signed_table() -> NDArray[np.uint8]:
    """Colours of a signed value from -1 to 1 in 255 equal steps.

    Returns
    -------
    ndarray of shape (255, 3), uint8
        sRGB; the middle row (127) is the colour of zero.
    """
    value = np.linspace(-1.0, 1.0, 255)
    size = np.abs(value)
    lightness = _LIGHTEST + (_DARKEST - _LIGHTEST) * size
    hue = np.deg2rad(np.where(value < 0, _HUE_LOW, _HUE_HIGH))
    chroma = _CHROMA * size
    return _srgb8(lightness, chroma * np.cos(hue), chroma * np.sin(hue))


def signed_map() -> Any:
    """:func:`signed_table` as a matplotlib colour map."""
    from matplotlib.colors import ListedColormap

    return ListedColormap((signed_table() / 255.0).tolist(), name="signed-error")


@lru_cache(maxsize=1)
def one_signed_table() -> NDArray[np.uint8]:
    """Viridis (van der Walt and Smith 2015) in 256 steps, shape (256, 3), uint8."""
    from matplotlib import colormaps

    return (colormaps["viridis"](np.arange(256))[:, :3] * 255 + 0.5).astype(np.uint8)


def one_signed_map() -> Any:
    """:func:`one_signed_table` as a matplotlib colour map."""
    from matplotlib.colors import ListedColormap

    return ListedColormap((one_signed_table() / 255.0).tolist(), name="one-signed")


def cyclic_map() -> Any:
    """Phase: blue and orange half turns, light at 0 and dark at half a turn, equal at both ends."""
    from matplotlib.colors import ListedColormap

    turn = np.linspace(-1.0, 1.0, 255)
    size = np.abs(turn)
    lightness = _LIGHTEST + (0.25 - _LIGHTEST) * size
    chroma = _CHROMA * np.sin(np.pi * size)
    hue = np.deg2rad(np.where(turn < 0, _HUE_LOW, _HUE_HIGH))
    table = _srgb8(lightness, chroma * np.cos(hue), chroma * np.sin(hue))
    return ListedColormap((table / 255.0).tolist(), name="phase")


def _srgb8(lightness: NDArray[Any], a: NDArray[Any], b: NDArray[Any]) -> NDArray[np.uint8]:
    """OKLab to sRGB bytes (matrices of the published definition)."""
    cube = (
        np.stack(
            [
                lightness + 0.3963377774 * a + 0.2158037573 * b,
                lightness - 0.1055613458 * a - 0.0638541728 * b,
                lightness - 0.0894841775 * a - 1.2914855480 * b,
            ]
        )
        ** 3
    )
    matrix = np.array(
        [
            [4.0767416621, -3.3077115913, 0.2309699292],
            [-1.2684380046, 2.6097574011, -0.3413193965],
            [-0.0041960863, -0.7034186147, 1.7076147010],
        ]
    )
    linear = np.clip(matrix @ cube, 0.0, 1.0)
    coded = np.where(linear <= 0.0031308, 12.92 * linear, 1.055 * linear ** (1 / 2.4) - 0.055)
    return np.round(coded.T * 255).astype(np.uint8)
