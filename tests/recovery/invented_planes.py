"""Small invented planes for recovery tests."""

import numpy as np


def blobs(shape=(4, 40, 48), seed=0):
    """Piecewise smooth complex planes: discs on a ramp, times a smooth phase."""
    rng = np.random.default_rng(seed)
    y, x = np.mgrid[-1 : 1 : shape[1] * 1j, -1 : 1 : shape[2] * 1j]
    planes = []
    for _ in range(shape[0]):
        image = (x**2 + y**2 < 0.8) * (0.5 + 0.1 * x)
        for _ in range(6):
            cy, cx = rng.uniform(-0.6, 0.6, 2)
            r, a = rng.uniform(0.05, 0.3), rng.uniform(-0.3, 0.5)
            image = image + a * ((x - cx) ** 2 + (y - cy) ** 2 < r**2)
        planes.append(image * np.exp(1j * (0.5 * x + 0.8 * y * x)))
    return np.array(planes)


def written_out(images, maps, mask):
    """The encoding as a matrix, with numpy's FFT: a column of acquired samples for every image.

    ``images`` (n, u, v), ``maps`` (channel, u, v), ``mask`` (u, v).
    """
    seen = np.fft.ifftshift(images[:, None] * maps, axes=(2, 3))
    kspace = np.fft.fftshift(np.fft.fft2(seen, norm="ortho"), axes=(2, 3))
    return kspace[:, :, mask].reshape(len(images), -1).T
