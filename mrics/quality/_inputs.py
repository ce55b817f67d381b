"""Checks that image, reference and mask can be compared."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import QualityError


def as_stack(
    image: NDArray[Any], reference: NDArray[Any], mask: NDArray[Any] | None
) -> tuple[NDArray[Any], NDArray[Any], NDArray[np.bool_] | None]:
    """Image, reference and mask as stacks (planes, u, v), a single plane being one of length 1.

    Raises
    ------
    QualityError
        For shapes that differ or have not two or three axes, values that are not finite, and a
        mask without voxels.
    """
    image, reference = np.asarray(image), np.asarray(reference)
    if image.shape != reference.shape:
        raise QualityError(
            f"Image and reference differ in shape: {image.shape} and {reference.shape}.",
            "image, reference",
            "Compare images of the same grid.",
        )
    if image.ndim not in (2, 3) or image.size == 0:
        raise QualityError(
            f"Images of shape {image.shape} are neither a plane nor a stack of planes.",
            "image, reference",
            "Give (u, v), or (planes, u, v); fold frames into planes.",
        )
    for name, array in (("image", image), ("reference", reference)):
        finite = np.isfinite(array)
        if not finite.all():
            first = tuple(int(i) for i in np.argwhere(~finite)[0])
            raise QualityError(
                f"{name.capitalize()} holds {int((~finite).sum())} values that are not finite.",
                f"{name}, first at index {first}",
                "Replace them or leave the scan out.",
            )
    if mask is not None:
        mask = np.asarray(mask)
        if mask.shape != image.shape:
            raise QualityError(
                f"Mask and image differ in shape: {mask.shape} and {image.shape}.",
                "mask",
                "Give a mask on the image's grid.",
            )
        mask = mask.astype(bool, copy=False)
        if not mask.any():
            raise QualityError(
                "The mask holds no voxel.", "mask", "Give a mask that holds the body, or None."
            )
        mask = mask if mask.ndim == 3 else mask[None]
    if image.ndim == 2:
        image, reference = image[None], reference[None]
    return image, reference, mask


def magnitude(plane: NDArray[Any]) -> NDArray[np.float64]:
    """Magnitude in double precision (of negative real values too)."""
    return np.abs(plane).astype(np.float64, copy=False)


def largest(reference: NDArray[Any], mask: NDArray[np.bool_] | None) -> float:
    """Largest magnitude in the mask over the whole stack."""
    if mask is None:
        return max(float(np.abs(plane).max()) for plane in reference)
    return max(
        float(np.abs(plane).max(where=inside, initial=0.0))
        for plane, inside in zip(reference, mask, strict=True)
    )
