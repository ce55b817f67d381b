"""Arrays from .npy files that anyone may have written."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray


def open_array(path: str | Path) -> NDArray[Any]:
    """A .npy file, memory-mapped for reading; a header that claims more than the file is refused.

    Raises
    ------
    OSError
        Where the file is missing or cannot be opened.
    ValueError
        Where it is damaged, holds objects, or is no .npy file.
    """
    try:
        array = np.load(path, mmap_mode="r", allow_pickle=False)
    except (OSError, ValueError):
        raise
    except Exception as problem:  # numpy parses the header as Python and passes on what that raises
        raise ValueError("its header is damaged") from problem
    if not isinstance(array, np.ndarray):
        array.close()
        raise ValueError("it is an archive, not one array")
    return array
