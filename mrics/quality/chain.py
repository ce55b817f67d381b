"""One acquisition through one recovery, run again and again with everything but the data frozen.

Noise replicas, point perturbations and inserted features all ask the same question: how does the
recovered image change when the data change? The first recovery chooses its weight; that weight and
the noise level are kept for all later ones, and random shifts restart from the same seed, so that
a difference of two images is due to the data alone.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from dataclasses import fields, replace
from itertools import islice
from time import perf_counter
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import Acquisition
from mrics.encoding.sensitivities import with_sensitivities
from mrics.numerics import centred_fft, centred_ifft, map_blocks
from mrics.recovery import check_settings, frozen, recover

Array = NDArray[Any]
Progress = Callable[[int, int], None]

#: recoveries whose image is a linear function of the data, so that no result depends on them
LINEAR = frozenset({"zero-filled", "least-squares", "unfold"})
_BATCH_BYTES = 96 * 2**20


class Chain:
    """A recovery with its settings frozen, and the encoding that changes of an image go through.

    Parameters
    ----------
    acquisition : Acquisition
        The data; choose few planes (``some_planes``) where many runs are asked for.
    method : str
        Name of a recovery.
    settings : dict
        Its settings; a weight of "auto" is chosen once, on ``acquisition``.

    Attributes
    ----------
    base : ndarray of shape (plane, u, v), complex
        The recovered image.
    sigma : float
        Noise level the recovery works with: the data's own, or the floor where that is 0.
    settings : dict
        With the weight that was chosen.
    phase_free : bool
        Whether the sensitivities were estimated here, which leaves the phase of images to them.
    runs : int
        Recoveries of the whole stack done so far, the first included.
    seconds : float
        Wall time spent in recoveries so far.
    """

    def __init__(self, acquisition: Acquisition, method: str, **settings: Any) -> None:
        started = perf_counter()
        self.phase_free = acquisition.channels > 1 and acquisition.sensitivities is None
        if self.phase_free:
            # Estimated once and kept: a change of the object reaches every channel through them.
            acquisition = with_sensitivities(acquisition)
        first = recover(acquisition, method, **settings)
        self.seconds = perf_counter() - started
        checked = check_settings(method, settings)
        names = {entry.name for entry in fields(checked)}
        self.method = method
        self.settings = frozen(method, settings, first.certificate)
        self.base = first.image
        self.sigma = float(first.certificate.sigma)
        self.acquisition = replace(acquisition, sigma_scan=self.sigma, sigma_added=0.0)
        self.runs = 1
        # A method with random parts draws them by plane number, so planes must keep theirs.
        self._batched = "seed" not in names or getattr(checked, "shift", "random") != "random"
        self._root = _noise_root(acquisition)
        held = self.acquisition
        shape = self.base.shape
        self._acquired = np.broadcast_to(held.mask[held.pattern_index], shape) != 0

    @property
    def linear(self) -> bool:
        """True where the image is a linear function of the data."""
        return self.method in LINEAR

    def encode(self, change: Array) -> Array:
        """K-space change of an image change of shape (plane, u, v), at the acquired samples."""
        held = self.acquisition
        images = change[:, None]
        if held.sensitivities is not None:
            images = images * held.sensitivities
        kspace = centred_fft(np.ascontiguousarray(images, dtype=held.kspace.dtype))
        kspace *= held.mask[held.pattern_index][:, None]
        return kspace

    def random(
        self, generator: np.random.Generator, power: Array, signal: Array | float = 0.0
    ) -> Array:
        """Data of a random field and a signal, with the acquisition's noise.

        Parameters
        ----------
        generator : numpy Generator
        power : ndarray of shape (u, v)
            Power of one k-space sample of the field, per real part, centred.
        signal : ndarray of shape (plane, u, v), or 0
            Its centred k-space.
        """
        held = self.acquisition
        if held.sensitivities is None:
            # Field and noise of one channel are one Gaussian variable at each sample.
            data = self._samples(generator, np.sqrt(power + self.sigma**2))
            if np.ndim(signal):
                data += np.where(self._acquired, signal, 0)[:, None]
            return data
        shape = (*self.base.shape, 2)
        parts = generator.standard_normal(shape, dtype=self.base.real.dtype.type)
        field = parts.view(self.base.dtype)[..., 0] * np.sqrt(power) + signal
        return self.encode(centred_ifft(field)) + self.noise(generator)

    def noise(self, generator: np.random.Generator) -> Array:
        """One realisation of the acquisition's noise at the acquired samples."""
        noise = self._samples(generator, np.broadcast_to(self.sigma, self.base.shape[1:]))
        if self._root is not None:
            planes, channels, u, v = noise.shape
            noise = np.matmul(self._root.astype(noise.dtype), noise.reshape(planes, channels, -1))
            noise = noise.reshape(planes, channels, u, v)
        return noise

    def _samples(self, generator: np.random.Generator, scale: Array) -> Array:
        """Independent circular values of that standard deviation per part where acquired, else 0.

        Only what is acquired is drawn: it is the costly part of a replica.
        """
        held = self.acquisition
        kspace = np.zeros(held.kspace.shape, dtype=held.kspace.dtype)
        real = held.kspace.real.dtype.type
        for plane, inside in zip(kspace, self._acquired, strict=True):
            size = scale[inside].astype(real)
            parts = generator.standard_normal((len(plane), size.size, 2), dtype=real)
            plane[:, inside] = parts.view(kspace.dtype)[..., 0] * size
        return kspace

    def images(
        self, changes: Iterable[Array], *, total: int = 0, progress: Progress | None = None
    ) -> Iterator[Array]:
        """Recovered images of the data with each of the k-space changes added.

        Parameters
        ----------
        changes : iterable of ndarray of shape (plane, channel, u, v)
        total : int
            How many there are, for ``progress``.
        progress : callable of (done, total), optional

        Yields
        ------
        ndarray of shape (plane, u, v)
        """
        pending, done = iter(changes), 0
        size = self._batch_size()
        while batch := list(islice(pending, size)):
            for image in self._run(batch):
                done += 1
                if progress is not None:
                    progress(done, total)
                yield image

    def _batch_size(self) -> int:
        held = self.acquisition
        one = held.kspace.nbytes
        if held.sensitivities is not None and held.sensitivities.shape[0] > 1:
            one += held.sensitivities.nbytes
        return max(1, min(32, _BATCH_BYTES // max(1, one)))

    def _run(self, batch: list[Array]) -> list[Array]:
        held = self.acquisition
        self.runs += len(batch)
        started = perf_counter()
        if not self._batched:
            separate = map_blocks(
                lambda change: self._recover(replace(held, kspace=held.kspace + change)), batch
            )
            self.seconds += perf_counter() - started
            return separate
        maps = held.sensitivities
        if maps is not None and maps.shape[0] > 1:
            maps = np.concatenate([maps] * len(batch))
        joined = replace(
            held,
            kspace=np.concatenate([held.kspace + change for change in batch]),
            pattern_index=np.tile(held.pattern_index, len(batch)),
            sensitivities=maps,
            axes=None,
            volume_shape=(),
        )
        images = self._recover(joined)
        self.seconds += perf_counter() - started
        return list(images.reshape(len(batch), *self.base.shape))

    def _recover(self, acquisition: Acquisition) -> Array:
        return recover(acquisition, self.method, **self.settings).image


def _noise_root(acquisition: Acquisition) -> Array | None:
    if acquisition.covariance is None or acquisition.channels == 1:
        return None
    from mrics.encoding.noise import relative_covariance

    return np.linalg.cholesky(relative_covariance(acquisition.covariance, acquisition.channels))
