"""The open volumes are what their table says."""

from __future__ import annotations

import nibabel as nib
import pytest
from open_volumes import VOLUMES, open_volume


@pytest.mark.parametrize("identity", sorted(VOLUMES))
def test_open_volume_has_the_stated_shape(identity: str) -> None:
    image = nib.load(open_volume(identity))
    stated = VOLUMES[identity].what.split()
    assert "x".join(str(n) for n in image.shape) == stated[0]
    assert str(image.get_data_dtype().newbyteorder("=")) == stated[1].rstrip(",")
