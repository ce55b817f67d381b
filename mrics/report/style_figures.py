"""The look of every matplotlib figure, and how figures become files or data URIs."""

from __future__ import annotations

import base64
import io
import re
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any
from urllib.parse import quote

import numpy as np

from mrics.report.colours import GRID, INK, MUTED

_STYLE: Any = {
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans"],
    "font.size": 9.0,
    "axes.edgecolor": MUTED,
    "axes.labelcolor": INK,
    "axes.titlesize": 9.0,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "axes.linewidth": 0.8,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.grid": False,
    "axes.formatter.use_mathtext": False,
    "text.parse_math": False,
    "hatch.linewidth": 0.6,
    "grid.color": GRID,
    "grid.linewidth": 0.7,
    "text.color": INK,
    "xtick.color": MUTED,
    "ytick.color": MUTED,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "legend.frameon": False,
    "legend.fontsize": 8.0,
    "figure.facecolor": "white",
    "savefig.facecolor": "white",
    "image.interpolation": "none",
    "svg.fonttype": "path",
    "svg.hashsalt": "mrics",
    "pdf.fonttype": 42,
}


@contextmanager
def figure_style() -> Iterator[None]:
    """Draw with the house style, whatever the reader's own matplotlib settings are."""
    from matplotlib import rc_context, rcdefaults

    with rc_context():
        rcdefaults()
        with rc_context(_STYLE):
            yield


def new_figure(width_in: float, height_in: float) -> Any:
    """An empty figure (inches) that lays itself out; no global state."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width_in, height_in), layout="constrained")
    FigureCanvasAgg(figure)
    return figure


def svg_uri(figure: Any) -> str:
    """The figure as an SVG data URI; the same figure gives the same bytes."""
    stream = io.BytesIO()
    with figure_style():
        figure.savefig(stream, format="svg", metadata={"Date": None, "Creator": "mrics"})
    text = _PNG.sub(_with_palette, stream.getvalue().decode("utf-8"))
    return "data:image/svg+xml," + quote(text, safe=" /:;=,+()-.")


_PNG = re.compile(r"(?<=data:image/png;base64,)[A-Za-z0-9+/=\s]+")


def _with_palette(found: re.Match[str]) -> str:
    """A PNG of at most 256 colours as a palette PNG, pixel for pixel, a third of the size."""
    from PIL import Image

    pixels = np.asarray(Image.open(io.BytesIO(base64.b64decode(found[0]))).convert("RGBA"))
    words = np.ascontiguousarray(pixels).view("<u4")[..., 0]
    colours, numbers = np.unique(words, return_inverse=True)
    table = colours.view(np.uint8).reshape(-1, 4)
    if len(table) > 256 or (table[:, 3] < 255).any():
        return found[0]
    image = Image.fromarray(numbers.reshape(words.shape).astype(np.uint8), mode="P")
    image.putpalette(table[:, :3].tobytes())
    stream = io.BytesIO()
    image.save(stream, format="PNG", optimize=True)
    return base64.b64encode(stream.getvalue()).decode("ascii")
